"""Files are written whole or not at all."""

from __future__ import annotations

import os
import tempfile
from pathlib import Path

__all__ = ["write_whole"]


def write_whole(path: str | os.PathLike[str], content: bytes) -> Path:
    """Write a file through a temporary one beside it, so that no reader ever sees half of it.

    Raises
    ------
    OSError
        If it cannot be written; then what was there before still is.
    """
    target = Path(path)
    handle, name = tempfile.mkstemp(prefix=f".{target.name}.", dir=target.parent)
    try:
        with os.fdopen(handle, "wb") as file:
            file.write(content)
            file.flush()
            os.fsync(file.fileno())
        os.chmod(name, 0o644)
        os.replace(name, target)
    except BaseException:
        Path(name).unlink(missing_ok=True)
        raise
    return target
