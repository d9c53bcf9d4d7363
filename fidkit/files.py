"""Files are written whole or not at all."""

from __future__ import annotations

import contextlib
import errno
import os
import shutil
import tempfile
from collections.abc import Iterator
from pathlib import Path

__all__ = ["replacing", "write_whole"]


def write_whole(path: str | os.PathLike[str], content: bytes) -> Path:
    """Write a file through a temporary one beside it, so that no reader ever sees half of it.

    A file that is there keeps its permissions, and a link to it stays a link.

    Raises
    ------
    OSError
        If it cannot be written; then what was there before still is.
    """
    with replacing(Path(path)) as place, place.open("wb") as file:
        file.write(content)
        file.flush()
        os.fsync(file.fileno())
    return Path(path)


@contextlib.contextmanager
def replacing(path: Path, *, folder: bool = False) -> Iterator[Path]:
    """A place beside `path` to write a file in, put in its stead when all went well.

    With `folder` it is a folder, and one that is there already is replaced with all it holds.
    """
    path = Path(os.path.realpath(path))  # what a link points to is replaced, not the link
    if path.is_dir() and not folder:
        raise IsADirectoryError(errno.EISDIR, "it is a folder")
    if path.is_file() and folder:
        raise NotADirectoryError(errno.ENOTDIR, "it is a file, and a folder is to be written")
    if path.exists() and not (path.is_file() or path.is_dir()):
        raise OSError(errno.EINVAL, "it is neither a file nor a folder")
    room = Path(tempfile.mkdtemp(prefix=".fidkit.", dir=path.parent))
    place, before = room / path.name, room / f"{path.name}.before"
    try:
        yield place
        if path.is_file():
            os.chmod(place, path.stat().st_mode & 0o7777)
        if path.is_dir():  # a folder cannot be replaced while it holds something
            os.replace(path, before)
            try:
                os.replace(place, path)
            except BaseException:
                os.replace(before, path)
                raise
        else:
            os.replace(place, path)
    finally:
        shutil.rmtree(room, ignore_errors=True)
