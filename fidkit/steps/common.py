"""What several steps share; there is no step in here."""

from __future__ import annotations

import math
from typing import Annotated, Any

import numpy as np
import numpy.typing as npt
import xarray as xr

from fidkit import signals
from fidkit.params import FidkitError, Range, Slider, Unit

Tail = Annotated[float, Unit("fraction"), Range(0, 1, above=True), Slider(0.01, 0.5, 0.01)]

#: A line stands out where noise alone reaches its height in one record out of so many.
RECORDS_PER_FALSE_LINE = 1000


def line_threshold(heights: int) -> float:
    """How many times the mean power of white noise a line must reach, among so many heights.

    One height of noise passes x times the mean power with probability ``exp(-x)``.
    """
    return math.log(RECORDS_PER_FALSE_LINE * heights)


def note_without_line(result: xr.DataArray, missing: npt.NDArray[np.bool_], where: str) -> None:
    """Name the records in which a step found no line in the notes of its result (in place)."""
    if missing.any():
        which = ", ".join(str(index) for index in np.flatnonzero(missing)[:10])
        signals.add_note(
            result,
            f"{where}: {missing.sum()} of {missing.size} records show no line and were left as "
            f"they are: {which}{' ...' if missing.sum() > 10 else ''}",
        )


def require_no_filter_delay(fid: xr.DataArray, where: str) -> None:
    """Raise where a stated delay before the signal makes times from the record's start wrong."""
    if fid.attrs.get("filter_delay", 0) > 0:
        raise FidkitError(
            f"{where}: the record must start with the signal; got one that a digital filter delays "
            f"by {fid.attrs['filter_delay']:g} points (attribute filter_delay); apply "
            "remove_filter_delay first"
        )


def zeros(shape: tuple[int, ...], dtype: Any, where: str) -> npt.NDArray[Any]:
    """An array of zeros, or `FidkitError` that says how much memory it would take."""
    try:
        return np.zeros(shape, dtype)
    except (MemoryError, ValueError):
        size = math.prod(shape) * np.dtype(dtype).itemsize / 1e9
        raise FidkitError(
            f"{where}: the result must fit into memory; {shape[-1]} points a record take {size:,.1f} "
            "GB in all; give fewer points, or process fewer records at once"
        ) from None
