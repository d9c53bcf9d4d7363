"""From time to frequency and back, and the zeros in between."""

from __future__ import annotations

import math
from typing import Annotated, Literal

import numpy as np
import scipy.fft
import xarray as xr

from fidkit import signals
from fidkit.params import FidkitError, Gives, Range, Slider, step
from fidkit.steps.common import zeros

#: How far a frequency axis may be off the transform's own grid by rounding, in points.
GRID_ROUNDING = 1e-3


@step
def zero_fill(
    fid: xr.DataArray,
    *,
    factor: Annotated[float | None, Range(1, 1024), Slider(1, 16, 1)] = None,
    points: Annotated[int | None, Range(2, 2**31)] = None,
) -> xr.DataArray:
    """Append zeros, so that the spectrum is drawn on a finer grid; the line itself stays.

    Parameters
    ----------
    factor : float, optional
        Length afterwards over length before, rounded up to a whole point.
    points : int, optional
        Length afterwards. Where neither is given: the next length that transforms fast.

    Returns
    -------
    xarray.DataArray
        The longer FID; its attribute ``acquired_points`` says how many points are measured.

    Raises
    ------
    FidkitError
        If both are given, or the record would get shorter, or too long for the memory.
    """
    length = fid.sizes["time"]
    if factor is not None and points is not None:
        raise FidkitError("zero_fill: give factor or points, not both")
    if factor is not None:
        points = math.ceil(round(length * factor, 6))  # 1000 * 1.1 is 1100, not 1101
    elif points is None:
        points = scipy.fft.next_fast_len(length)
    if points < length:
        raise FidkitError(
            f"zero_fill: points must be at least the {length} the record has; got {points}; "
            "remove_end shortens a record"
        )
    values = zeros((*fid.shape[:-1], points), fid.dtype, "zero_fill")
    values[..., :length] = fid.values
    dwell, start = signals.dwell_time(fid), signals.time_start(fid)
    result = signals.like(fid, values, dwell=dwell, start=start)
    result.attrs["acquired_points"] = signals.acquired_points(fid)
    return result


@step
def fourier_transform(
    fid: xr.DataArray, *, first_point: Literal["full", "half"] = "full"
) -> Annotated[xr.DataArray, Gives("spectrum")]:
    """Transform to the spectrum, scaled by the dwell time; the dead time enters the phase.

    Parameters
    ----------
    first_point : {'full', 'half'}
        How the first point counts. ``full`` is the plain discrete transform, which lifts the
        whole spectrum by half the first point times the dwell time; ``half`` takes that away, for
        a record that starts at time zero.

    Returns
    -------
    xarray.DataArray
        Spectrum in unit of the signal per Hz, frequency ascending. A filter delay that the file
        states and that was not removed first is named in the notes.

    Raises
    ------
    FidkitError
        For a real-valued record (see `make_analytic`).

    Notes
    -----
    ``S(f) = dwell * sum_n w_n s_n exp(-2 pi i f t_n)`` with the true times ``t_n``. On the first
    point: Otting, Widmer, Wagner and Wuthrich, J. Magn. Reson. 66, 187 (1986).
    """
    signals.require_complex(fid, "fourier_transform")
    dwell, start = signals.dwell_time(fid), signals.time_start(fid)
    points = fid.sizes["time"]
    values = fid.values
    if first_point == "half":
        values = values.copy()
        values[..., 0] *= 0.5
    frequency = scipy.fft.fftshift(scipy.fft.fftfreq(points, dwell))
    # in place of a conversion: the scalar factor keeps single precision single
    spectrum = scipy.fft.fftshift(scipy.fft.fft(values, axis=-1), axes=-1)
    factor = dwell * np.exp(-2j * np.pi * frequency * start) if start else np.float64(dwell)
    spectrum *= factor.astype(spectrum.dtype if start else spectrum.real.dtype)
    result = signals.like(fid, spectrum, frequency=frequency)
    result.attrs |= {
        "units": _per(str(fid.attrs.get("units", "1")), "s-1", "s"),
        "time_start": start,
        "first_point": first_point,
        "spectral_width": 1 / dwell,
        "acquired_points": signals.acquired_points(fid),
    }
    if fid.attrs.get("filter_delay", 0) > 0:
        signals.add_note(
            result,
            f"fourier_transform: the delay of {fid.attrs['filter_delay']:g} points that a digital "
            "filter put before the signal is still in the phase, 360 degrees over the spectral width "
            "for each point; apply remove_filter_delay before",
        )
    return result


@step
def inverse_transform(spectrum: xr.DataArray) -> Annotated[xr.DataArray, Gives("fid")]:
    """Transform a spectrum back to the FID that it came from: undoes `fourier_transform`.

    Returns
    -------
    xarray.DataArray
        The FID on its true times; zeros that were filled in are still there. Phase that was applied
        to the spectrum is in its values, and no longer booked. Where the time of the first point
        is not known, as of a spectrum read from a file, it is 0 s and the notes say so.

    Raises
    ------
    FidkitError
        For a real-valued spectrum.
    """
    signals.require_complex(spectrum, "inverse_transform")
    frequency = spectrum["frequency"].values
    width = signals.spectral_width(spectrum)
    start = float(spectrum.attrs.get("time_start", 0.0))
    values = spectrum.values
    if start:
        values = values * np.exp(2j * np.pi * frequency * start).astype(values.dtype)
    # a spectrum from elsewhere may begin at any frequency: whole points are a turn of the array,
    # what is left is a shift of the FID's frequency
    lowest = frequency[0] / width * frequency.size
    turn = round(lowest)
    fid = scipy.fft.ifft(np.roll(values, turn, axis=-1), axis=-1, overwrite_x=True)
    fid *= fid.real.dtype.type(width)
    if abs(lowest - turn) > GRID_ROUNDING:
        index = np.arange(frequency.size)
        left = (lowest - turn) / frequency.size
        fid *= np.exp(2j * np.pi * left * index).astype(fid.dtype)
    if spectrum.attrs.get("first_point") == "half":
        fid[..., 0] *= 2
    # the phase that was applied is in the data now
    kept = spectrum.drop_vars(["applied_phase", "applied_delay"], errors="ignore")
    result = signals.like(kept, fid, dwell=1 / width, start=start)
    result.attrs["units"] = _per(str(spectrum.attrs.get("units", "1")), "s", "s-1")
    if "time_start" not in spectrum.attrs:
        signals.add_note(
            result,
            "inverse_transform: the time of the first point is not known for this spectrum; taken "
            "as 0 s",
        )
    return result


def _per(units: str, undone: str, unit: str) -> str:
    """A CF unit times `unit`, which is the inverse of `undone`."""
    if units == undone:
        return "1"
    if units.endswith(f" {undone}"):
        return units.removesuffix(f" {undone}")
    return unit if units == "1" else f"{units} {unit}"
