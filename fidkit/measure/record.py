"""What was measured, seen back through the steps that made a signal.

A line's natural width stands in the raw record. Windows multiply that record by known weights,
zero filling appends nothing, a transform and a phase can be undone: so the record, with white
noise, is recovered from a finished spectrum, and apodization and truncation need no correction.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from typing import Any

import numpy as np
import numpy.typing as npt
import xarray as xr

from fidkit import signals
from fidkit.chain import Call, chain_of
from fidkit.params import FidkitError
from fidkit.steps.transform import inverse_transform

__all__ = [
    "NEUTRAL",
    "Record",
    "Unseen",
    "one_channel",
    "record_as_it_stands",
    "record_of",
    "total_shift",
]

#: Smallest weight that is divided out again, of the largest, by the precision of the values:
#: rounding errors, of 1e-16 and 1e-7, grow by its inverse and must stay far below any noise.
SMALLEST_WEIGHT = {8: 1e-3, 16: 1e-8}

WINDOWS = "fidkit.steps.apodization"
#: Steps that leave the natural width of a line alone. What is not named here, and is no window, may
#: do anything to it, and the result says so.
NEUTRAL = {
    *("average_shots", "combine_channels", "correct_quadrature", "make_analytic", "rebuild_start"),
    *("remove_end", "remove_filter_delay", "remove_offset", "remove_start", "reverse_frequency"),
    *("shift_frequency", "zero_fill", "fourier_transform", "inverse_transform"),
    *("auto_phase", "correct_baseline", "correct_phase"),
}
COMBINING = {"average_shots", "combine_channels"}
#: Steps between transform and measurement that leave the way back open.
UNDONE = ("correct_phase", "auto_phase", "correct_baseline")


class Unseen(Exception):
    """The way back to the record is closed; the text says why."""


@dataclass(frozen=True)
class Record:
    """Records behind a signal, of shape (records, points), and how the signal weights them.

    `weight` has the shape (points,) where it is the same for all, else (records, points); it
    belongs to the signal as it stands. `blocks` gives the records free of it.
    """

    values: npt.NDArray[Any]
    weight: npt.NDArray[Any]
    start: float
    dwell: float

    def blocks(self, most: int) -> Iterator[Record]:
        """Pieces of at most so many points (but one record), in double precision, weights divided out.

        Records with weights of their own come one by one: each has its own noise.
        """
        records, points = self.values.shape
        size = 1 if self.weight.ndim == 2 else max(1, most // points)
        for first in range(0, records, size):
            weight = self.weight if self.weight.ndim == 1 else self.weight[first]
            values = self.values[first : first + size].astype(np.complex128) / weight
            yield Record(values, weight, self.start, self.dwell)


def record_as_it_stands(fid: xr.DataArray) -> Record:
    """The points of an FID whose history does not lead back: nothing is divided out."""
    values = fid.values.reshape(-1, fid.shape[-1])
    return Record(values, np.ones(fid.shape[-1]), signals.time_start(fid), signals.dwell_time(fid))


def record_of(signal: xr.DataArray) -> Record:
    """Return what was measured, in time, with white noise.

    Parameters
    ----------
    signal : xarray.DataArray
        FID or spectrum; leading dimensions are flattened.

    Returns
    -------
    Record
        The record with every window divided out.

    Raises
    ------
    Unseen
        If the signal's history does not lead back to a record.
    FidkitError
        If a real-valued record is not analytic yet.
    """
    try:
        calls = chain_of(signal).calls
    except FidkitError as error:
        raise Unseen(f"its history cannot be read ({error})") from None
    for call in calls:
        if call.spec.room != WINDOWS and call.step not in NEUTRAL:
            raise Unseen(f"what the step {call.step} does to a width is not known")
    half = False
    fid = signal
    if not signals.is_fid(signal):
        fid, half = _back(signal, calls)
    else:
        signals.require_complex(signal, "measure")
        if any(call.step == "correct_baseline" for call in calls):
            raise Unseen("a baseline was taken away while it was a spectrum")
    measured = signals.acquired_points(fid)
    values = fid.values[..., :measured].reshape(-1, measured)
    # zeros that were appended by hand are no measurement either; a transform leaves rounding there
    rounding = 100 * np.finfo(values.dtype).eps if signal is not fid else 0.0
    silent = int((np.abs(values) > rounding * np.abs(values).max()).any(axis=0)[::-1].argmax())
    if silent > 0.05 * measured:
        measured -= silent
        values = values[:, :measured]
    start, dwell = signals.time_start(fid), signals.dwell_time(fid)
    weight = _weight(signal, calls, measured, start, dwell)
    if half:
        weight[..., 0] *= 0.5
        values = values.copy()
        values[..., 0] *= 0.5
    predicted = signals.points_before(fid, float(signal.attrs.get("measured_from", -np.inf)))
    weight[..., :predicted] = 0.0
    strength = np.abs(weight).reshape(-1, measured)
    enough = strength >= SMALLEST_WEIGHT[values.real.dtype.itemsize * 2] * strength.max(
        -1, keepdims=True
    )
    kept = enough.all(axis=0)
    if not kept.any():
        raise Unseen("its windows leave nothing of the record")
    first = int(kept.argmax())
    length = int((~kept[first:]).argmax()) or measured - first
    part = slice(first, first + length)
    return Record(
        values=values[:, part],
        weight=weight[..., part],
        start=start + first * dwell,
        dwell=dwell,
    )


def one_channel(signal: xr.DataArray) -> bool:
    """Whether a signal comes from a real-valued record, which does not know the sign of an offset."""
    return "make_analytic(" in str(signal.attrs.get("history", ""))


def total_shift(signal: xr.DataArray) -> float:
    """By how much the steps in a signal's history moved its lines, Hz."""
    try:
        calls = chain_of(signal).calls
    except FidkitError:
        return 0.0
    moved = [
        call.arguments.get("frequency", 0.0) for call in calls if call.step == "shift_frequency"
    ]
    return sum(float(shift) for shift in moved if isinstance(shift, float))


def _back(spectrum: xr.DataArray, calls: tuple[Call, ...]) -> tuple[xr.DataArray, bool]:
    """The FID behind a spectrum, and whether its first point counts half."""
    if not np.iscomplexobj(spectrum.data):
        raise Unseen("its imaginary part was not kept")
    names = [call.step for call in calls]
    if "fourier_transform" not in names:
        raise Unseen("how it was made is not recorded")
    last = len(names) - 1 - names[::-1].index("fourier_transform")
    for name in names[last + 1 :]:
        if name not in UNDONE:
            raise Unseen(f"the step {name} after the transform cannot be undone")
    frequency = spectrum["frequency"].values
    points = frequency.size
    width = signals.spectral_width(spectrum)
    whole = float(spectrum.attrs.get("spectral_width", 0.0))
    # both ends where the transform put them, to a hundredth of a point
    tolerance = 0.01 * width / points
    if (
        abs(whole - width) > tolerance
        or abs(frequency[0] + points // 2 * width / points) > tolerance
    ):
        raise Unseen("it is only a part of the spectrum that was made")
    if "correct_baseline" in names[last + 1 :]:
        if "baseline" not in spectrum.coords:
            raise Unseen("what correct_baseline took away is no longer kept with it")
        spectrum = spectrum.copy(data=spectrum.values + spectrum["baseline"].values)
    if "applied_phase" in spectrum.coords:
        turn = spectrum["applied_phase"] + spectrum["applied_delay"] * spectrum["frequency"]
        phasor = np.exp(-1j * np.deg2rad(_aligned(turn, spectrum)))
        spectrum = spectrum.copy(data=spectrum.values * phasor.astype(spectrum.dtype))
    return inverse_transform(spectrum), spectrum.attrs.get("first_point") == "half"


def _weight(
    signal: xr.DataArray, calls: tuple[Call, ...], points: int, start: float, dwell: float
) -> npt.NDArray[Any]:
    """The product of all windows, by applying them to a record of ones."""

    leading = signal.isel({signal.dims[-1]: 0}, drop=True)
    if all(call.step != "apodize_matched" for call in calls):
        # one window for all: no need of a row for each record
        leading = leading.isel(dict.fromkeys(leading.dims, 0), drop=True)

    def ones(skip: int = 0) -> xr.DataArray:
        return signals.fid_array(
            np.ones((*leading.shape, points - 2 * skip)),
            dwell=dwell,
            start=start + skip * dwell,
            dims=leading.dims,  # type: ignore[arg-type]
            coords=leading.coords,  # type: ignore[arg-type]
            attributes={**signal.attrs, "history": "", "acquired_points": points - 2 * skip},
        )

    probe = ones()
    for place, call in enumerate(calls):
        if call.spec.room != WINDOWS:
            continue
        before = probe
        later = {c.step for c in calls[place + 1 :]}
        if call.step == "apodize_matched" and (
            "matched_broadening" not in signal.coords or later & COMBINING
        ):
            raise Unseen(f"records were combined after {call.step}, each with a window of its own")
        probe = _window(signal, call, probe)
        if later & {"remove_start", "remove_end", "remove_filter_delay", "rebuild_start"}:
            # a window that depends on the extent of the record was another one then
            shorter = _window(signal, call, ones(1)).values
            same = np.abs((probe / before).values[..., 1:-1] - shorter) < 1e-9
            if not same.all() or "remove_filter_delay" in later:
                raise Unseen(f"the record was shortened after {call.step}; put that step last")
    weight: npt.NDArray[Any] = probe.values.reshape(-1, points).real.copy()
    return weight[0] if (weight == weight[0]).all() else weight


def _window(signal: xr.DataArray, call: Call, probe: xr.DataArray) -> xr.DataArray:
    if call.step == "apodize_matched":
        # found from the data then, kept with the result
        decay = signal["matched_broadening"] * probe["time"]
        return probe.copy(data=probe.values * np.exp(-np.pi * _aligned(decay, probe)))
    result: xr.DataArray = call.spec.function(probe, **call.arguments)
    return result


def _aligned(values: xr.DataArray, like: xr.DataArray) -> npt.NDArray[Any]:
    """The values of one array, spread over the dimensions of another."""
    return np.asarray(values.broadcast_like(like).transpose(*like.dims).values)
