"""What a reader hands over, before the caller's arguments and `fidkit.signals` make it a signal."""

from __future__ import annotations

import contextlib
import os
import shutil
import tempfile
from collections.abc import Iterator
from dataclasses import dataclass, field
from decimal import Decimal, InvalidOperation
from pathlib import Path
from typing import Any

import numpy as np
import numpy.typing as npt

from fidkit.params import FidkitError

__all__ = ["Record", "exact_spacing", "printed_unit", "real_number", "replacing", "text_of"]


@dataclass
class Record:
    """Values and facts as a file states them; None where it is silent."""

    values: npt.NDArray[Any]
    frequency: npt.NDArray[np.float64] | None = None
    """Axis in Hz where the record is a spectrum."""
    frequency_in_ppm: bool = False
    """That axis is in ppm of the carrier instead."""
    dwell_time: float | None = None
    time_start: float | None = None
    carrier_frequency: float | None = None
    nucleus: str | None = None
    units: str | None = None
    sample: str | None = None
    coil: str | None = None
    dims: tuple[str, ...] | None = None
    coords: dict[str, Any] = field(default_factory=dict)
    more: dict[str, Any] = field(default_factory=dict)
    notes: list[str] = field(default_factory=list)


def printed_unit(text: str, *, trimmed: bool = False) -> float:
    """One unit in the last printed place of a number: ``1.25`` gives 0.01.

    With `trimmed`, zeros at the end of the fraction do not count: ``-422.0000`` gives 1.
    """
    if not trimmed and "e" not in text and "E" not in text:
        return 10.0 ** -len(text.strip().partition(".")[2])
    try:
        number = Decimal(text.strip())
    except InvalidOperation:
        return float("nan")
    exponent: int | str = number.as_tuple().exponent
    if not isinstance(exponent, int):
        return float("nan")
    if trimmed and exponent < 0:
        normal = number.normalize().as_tuple().exponent
        exponent = min(normal, 0) if isinstance(normal, int) else exponent
    return 10.0**exponent if abs(exponent) < 300 else float("nan")


def real_number(text: str, what: str) -> float:
    """A finite number from text, or `FidkitError`."""
    try:
        value = float(text.strip().replace("_", "?"))  # Python's 1_000 is no number in a file
    except ValueError:
        hint = "; write a decimal point, not a comma" if "," in text else ""
        raise FidkitError(f"{what} must be a number; got {text.strip()[:40]!r}{hint}") from None
    if not np.isfinite(value):
        raise FidkitError(f"{what} must be a finite number; got {text.strip()[:40]!r}")
    return value


def exact_spacing(axis: npt.NDArray[np.float64]) -> float:
    """The spacing with which ``axis[0] + spacing * arange`` gives back the axis, to the last bit
    where there is such a number near at hand."""
    mean = float((axis[-1] - axis[0]) / (axis.size - 1))
    index = np.arange(axis.size)
    near = [
        mean,
        float(axis[1] - axis[0]),
        *(float(f"{mean:.{digits}g}") for digits in range(3, 17)),
    ]
    near += [float(np.nextafter(mean, side)) for side in (-np.inf, np.inf)]
    return next((step for step in near if np.array_equal(axis[0] + step * index, axis)), mean)


def text_of(raw: bytes) -> str:
    """Text from UTF-8, or else from Latin-1."""
    try:
        return raw.decode("utf-8-sig")
    except UnicodeDecodeError:
        return raw.decode("latin-1")


@contextlib.contextmanager
def replacing(path: Path) -> Iterator[Path]:
    """A place beside `path` to write a file or folder in, put in its stead when all went well."""
    folder = Path(tempfile.mkdtemp(prefix=f".{path.name}.", dir=path.parent))
    try:
        yield folder / path.name
        if path.is_dir():  # a folder cannot be replaced while it holds something
            os.replace(path, folder / "before")
            try:
                os.replace(folder / path.name, path)
            except BaseException:
                os.replace(folder / "before", path)
                raise
        else:
            os.replace(folder / path.name, path)
    finally:
        shutil.rmtree(folder, ignore_errors=True)
