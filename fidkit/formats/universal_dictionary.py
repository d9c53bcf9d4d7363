"""nmrglue's universal dictionary with its array: whatever nmrglue reads can be handed in."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

import numpy as np

from fidkit.formats.record import Record
from fidkit.nuclei import find_nucleus
from fidkit.params import FidkitError

__all__ = ["read"]

#: What nmrglue puts where it knows nothing.
PLACEHOLDER = 999.99
#: A record that lasts longer than this, s, is worth a second look.
LONGEST = 100.0


def read(universal: Mapping[Any, Any], data: Any) -> Record:
    """Take the facts of the last dimension from the dictionary.

    Parameters
    ----------
    universal : mapping
        ``ndim`` and one mapping a dimension with ``sw`` (Hz), ``obs`` (MHz), ``size``, ``time``,
        ``freq``, ``complex``, ``label``.
    data : array_like, shape (..., points)
        The array, or a list of a real and an imaginary one.

    Returns
    -------
    Record
        Values and facts; placeholders of the dictionary count as missing.

    Raises
    ------
    FidkitError
        If the dictionary does not fit the array.

    Notes
    -----
    A frequency axis is laid as nmrglue's unit conversion lays it: descending, the carrier at point
    size / 2.
    """
    if not isinstance(universal, Mapping) or "ndim" not in universal:
        raise FidkitError(
            f"must be a mapping with ndim and one mapping a dimension; got {type(universal).__name__}"
        )
    try:
        values = np.asarray(data)
    except ValueError as error:
        raise FidkitError(f"the parts of the array must be of one length; {error}") from None
    if values.dtype.kind in "iufc" and isinstance(data, list | tuple) and values.shape[:-1] == (2,):
        values = values[0] + 1j * values[1]
    if values.dtype.kind not in "iufc":
        raise FidkitError(f"the array must hold numbers; got {values.dtype}")
    if universal["ndim"] != values.ndim or values.ndim == 0:
        raise FidkitError(
            f"ndim must be the number of dimensions of the array, {values.ndim}; got {universal['ndim']!r}"
        )
    direct = universal.get(values.ndim - 1)
    if not isinstance(direct, Mapping):
        raise FidkitError(f"must hold a mapping for dimension {values.ndim - 1}; got {direct!r}")
    size = direct.get("size")
    if size != values.shape[-1]:
        raise FidkitError(
            f"size of dimension {values.ndim - 1} must be that of the array, {values.shape[-1]}; "
            f"got {size!r}"
        )
    record = Record(values)

    def number(key: str) -> float | None:
        value = direct.get(key)
        if isinstance(value, bool) or not isinstance(value, int | float | np.number):
            return None
        value = float(value)
        return value if np.isfinite(value) and value > 0 and value != PLACEHOLDER else None

    observe, width = number("obs"), number("sw")
    if observe is not None:
        record.carrier_frequency = float(f"{observe * 1e6:.15g}")
    if width is not None:
        record.dwell_time = 1 / width
        if values.shape[-1] / width > LONGEST and direct.get("time"):
            record.notes.append(
                f"a width of {width:g} Hz makes the record last {values.shape[-1] / width:.4g} s; for "
                "some formats nmrglue puts the duration there: then pass dwell_time"
            )
    try:
        record.nucleus = find_nucleus(str(direct.get("label", ""))).name
    except FidkitError:
        record.nucleus = None
    if direct.get("freq") and not direct.get("time"):
        if width is None:
            raise FidkitError("sw, the width of the frequency axis in Hz, is not set; set it")
        points = values.shape[-1]
        record.frequency = width / 2 - width / points * np.arange(points)
        record.dwell_time = None
        record.notes.append("the frequency axis is laid with the carrier in its middle, descending")
    else:
        record.notes.append(
            "the sense of rotation is taken as it stands; reverse_frequency turns it round"
        )
    if direct.get("complex") and not np.iscomplexobj(values):
        record.notes.append("the dictionary calls the record complex, but the array is real")
    return record
