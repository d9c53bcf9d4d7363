"""Windows: every step here multiplies an FID, point by point, by a real weight.

`fidkit.measure` relies on that: it applies the same windows to a record of ones to learn how a
spectrum was weighted. A step that does anything else belongs in another file.

Time zero of every window is the middle of the pulse, whatever the dead time. Where zeros were
filled in, a window that spans the record spans its measured part. Before a filter delay that the
file states is removed, time zero is not where the record says, and every window refuses.
"""

from __future__ import annotations

import math
from typing import Annotated, Any

import numpy as np
import numpy.typing as npt
import scipy.fft
import xarray as xr

from fidkit import signals
from fidkit.params import FidkitError, Range, Slider, Together, Unit, step
from fidkit.steps.common import line_threshold, note_without_line, require_no_filter_delay

Broadening = Annotated[float, Unit("Hz"), Range(0), Slider(0, 50, 0.1)]
Fraction = Annotated[float, Unit("fraction"), Range(0, 1), Slider(0, 1, 0.01)]


@step
def apodize_exponential(fid: xr.DataArray, *, broadening: Broadening = 1.0) -> xr.DataArray:
    """Weight by a decaying exponential, so that every line widens by `broadening`.

    Parameters
    ----------
    broadening : float
        What a Lorentzian line gains in full width at half maximum, Hz.

    Returns
    -------
    xarray.DataArray
        The weighted FID.

    Raises
    ------
    FidkitError
        If a weight would pass the largest number that the record's precision holds, as before
        time zero it can.

    Notes
    -----
    Weight ``exp(-pi * broadening * t)``: the Fourier pair of a Lorentzian of that width.
    """
    return _exponentially(fid, "apodize_exponential", decay=broadening)


@step
def apodize_gaussian(fid: xr.DataArray, *, broadening: Broadening = 1.0) -> xr.DataArray:
    """Weight by a Gaussian that alone gives lines of full width `broadening`.

    Parameters
    ----------
    broadening : float
        Full width at half maximum of the Gaussian that every line is convolved with, Hz.
        Gaussian widths add in quadrature.

    Returns
    -------
    xarray.DataArray
        The weighted FID.

    Raises
    ------
    FidkitError
        If the broadening is too large for a number.

    Notes
    -----
    Weight ``exp(-(pi * broadening * t)**2 / (4 ln 2))``: the Fourier pair of a Gaussian of that
    width.
    """
    return _exponentially(fid, "apodize_gaussian", gaussian=broadening)


@step
def apodize_lorentz_to_gauss(
    fid: xr.DataArray, *, narrowing: Broadening = 0.0, broadening: Broadening = 1.0
) -> xr.DataArray:
    """Take a Lorentzian width away and put a Gaussian one in its place.

    Parameters
    ----------
    narrowing : float
        Lorentzian full width to take away, Hz. A line of just that width becomes a Gaussian.
    broadening : float
        Full width at half maximum of the Gaussian, Hz.

    Returns
    -------
    xarray.DataArray
        The weighted FID.

    Raises
    ------
    FidkitError
        If the weight would pass the largest number that the record's precision holds.

    Notes
    -----
    Weight ``exp(pi * narrowing * t) * exp(-(pi * broadening * t)**2 / (4 ln 2))``: the inverse of
    `apodize_exponential` times `apodize_gaussian`.
    """
    return _exponentially(fid, "apodize_lorentz_to_gauss", decay=-narrowing, gaussian=broadening)


@step
def apodize_cosine(
    fid: xr.DataArray,
    *,
    power: Annotated[int, Range(1, 8), Slider(1, 4, 1)] = 1,
    peak: Annotated[float, Unit("fraction"), Range(0, 0.5), Slider(0, 0.5, 0.01)] = 0.0,
) -> xr.DataArray:
    """Weight by part of a cosine that reaches zero at the last measured point.

    Parameters
    ----------
    power : int
        Power of the cosine; 2 gives the raised cosine.
    peak : float
        Where the weight is 1, as a fraction of the time from the middle of the pulse to the last
        measured point: 0 gives a quarter period that only falls, 0.5 half a sine wave.

    Returns
    -------
    xarray.DataArray
        The weighted FID.

    Raises
    ------
    FidkitError
        If the record ends before the middle of the pulse.

    Notes
    -----
    Weight ``cos(pi/2 * (t/T - peak) / (1 - peak))**power`` with ``T`` the time of the last measured
    point: the powers of a cosine in Harris, Proc. IEEE 66, 51 (1978).
    """
    time = fid["time"].values
    end = float(time[signals.acquired_points(fid) - 1])
    if end <= 0:
        raise FidkitError(
            "apodize_cosine: the record must reach past the middle of the pulse; its last measured "
            f"point is at {end:g} s; give the true time_start"
        )
    angle = (time / end - peak) / (1 - peak)
    return _weighted(fid, np.cos(np.pi / 2 * np.clip(angle, -1, 1)) ** power, "apodize_cosine")


@step
def apodize_trapezoid(
    fid: xr.DataArray, *, rise: Fraction = 0.0, fall: Fraction = 0.1
) -> xr.DataArray:
    """Ramp the ends of the record: up from zero at the start, down to zero at the end.

    Parameters
    ----------
    rise : float
        Fraction of the measured record over which the weight goes from 0 to 1.
    fall : float
        Fraction of the measured record over which it goes from 1 to 0, reached at the last
        measured point.

    Returns
    -------
    xarray.DataArray
        The weighted FID.

    Raises
    ------
    FidkitError
        If the ramps overlap.

    Notes
    -----
    Linear ramps; common practice against the ripple of a record that was cut short.
    """
    if rise + fall > 1:
        raise FidkitError(
            f"apodize_trapezoid: rise and fall must not overlap, so together be at most 1; got "
            f"{rise:g} and {fall:g}"
        )
    last = max(signals.acquired_points(fid) - 1, 1)
    position = np.arange(fid.sizes["time"]) / last
    weight = np.ones(position.size)
    if rise > 0:
        weight = np.minimum(weight, position / rise)
    if fall > 0:
        weight = np.minimum(weight, (1 - position) / fall)
    return _weighted(fid, np.maximum(weight, 0), "apodize_trapezoid")


@step
def apodize_matched(fid: Annotated[xr.DataArray, Together()]) -> xr.DataArray:
    """Weight by the exponential that matches the strongest line's own decay, record by record.

    The height of that line over the noise is then the greatest that any window gives. A constant
    offset counts as a line that does not decay: take it off first.

    Returns
    -------
    xarray.DataArray
        The weighted FID, with the broadening found (Hz, one a record; 0 where no decay shows
        within the record) in the coordinate ``matched_broadening``. Records in which no line
        stands out are left as they are and named in the notes.

    Raises
    ------
    FidkitError
        If no record has a line that stands out, or the record was matched before.

    Notes
    -----
    The matched filter of Ernst and Anderson, Rev. Sci. Instrum. 37, 93 (1966). The broadening is
    the one that maximises ``|sum s w exp(-2 pi i f t)|**2 / sum w**2`` over ``w = exp(-pi
    broadening t)`` and ``f``, which is also the maximum likelihood of one damped line in white
    noise. A line stands out if noise alone reaches its height in about one record in 1,000.
    """
    if "matched_broadening" in fid.coords:
        raise FidkitError(
            "apodize_matched: the record was matched to its decay before; start from the raw record"
        )
    points, dwell = signals.acquired_points(fid), signals.dwell_time(fid)
    records = fid.values[..., :points].reshape(-1, points)
    found = np.array([_own_broadening(record, dwell) for record in records])
    missing = np.isnan(found)
    if missing.all():
        raise FidkitError(
            "apodize_matched: no line stands out of the noise, so there is no decay to match; "
            "average more shots or give the broadening to apodize_exponential"
        )
    broadening = np.where(missing, 0.0, found).reshape(fid.shape[:-1])
    result = _exponentially(fid, "apodize_matched", decay=broadening[..., None])
    result = result.assign_coords(
        matched_broadening=xr.Variable(
            fid.dims[:-1],
            broadening,
            {"units": "Hz", "long_name": "broadening of the matched window"},
        )
    )
    note_without_line(result, missing, "apodize_matched")
    return result


def _own_broadening(record: npt.NDArray[Any], dwell: float) -> float:
    """Width (Hz) of the strongest line of one record; 0 without decay, NaN without a line."""
    from scipy.optimize import minimize  # slow to load, and needed nowhere else

    points = record.size
    index = np.arange(points)
    length = scipy.fft.next_fast_len(2 * points)
    # from no visible decay within the record to nothing left after a few points, by factors of 2
    lowest, highest = 0.05 / (points * dwell), 1 / dwell
    best = (-1.0, lowest, 0.0)
    noise = 0.0
    for width in np.geomspace(lowest, highest, 1 + math.ceil(math.log2(highest / lowest))):
        weight = np.exp(-np.pi * width * dwell * index)
        power = np.abs(scipy.fft.fft(record * weight, length)) ** 2 / np.sum(weight**2)
        top = int(np.argmax(power))
        if width == lowest:
            # half of a noise power's values lie below ln 2 of its mean
            noise = float(np.median(power)) / math.log(2)
        if power[top] > best[0]:
            best = (float(power[top]), float(width), scipy.fft.fftfreq(length, dwell)[top])
    height, width, frequency = best
    # the windows together see some four times as many independent heights as one transform
    if not height > line_threshold(4 * length) * noise:
        return math.nan
    # sums over blocks that are short against decay and band keep what matters of the line
    block = max(1, int(0.02 / (width * dwell)))
    block = min(block, max(1, points // 256))
    kept = points - points % block
    turned = record[:kept] * np.exp(-2j * np.pi * frequency * dwell * index[:kept])
    sums = turned.reshape(-1, block).sum(axis=-1) / math.sqrt(height)
    time = dwell * block * np.arange(sums.size)

    def loss(trial: npt.NDArray[np.float64]) -> float:
        decay = np.exp(trial[0]) * width
        weight = np.exp(-np.pi * decay * time)
        line = np.sum(sums * weight * np.exp(-2j * np.pi * trial[1] * width * time))
        return -float(np.abs(line) ** 2 / np.sum(weight**2))

    found = minimize(
        loss,
        [0.0, 0.0],
        method="Nelder-Mead",
        bounds=[(math.log(lowest / width) - 1, math.log(highest / width) + 1), (None, None)],
        options={
            "initial_simplex": [[-0.3, -0.1], [0.3, -0.1], [0.0, 0.2]],
            "xatol": 1e-5,
            "fatol": 1e-12,
        },
    )
    broadening = float(np.exp(found.x[0]) * width)
    return broadening if broadening > lowest else 0.0


def _exponentially(
    fid: xr.DataArray, where: str, decay: Any = 0.0, gaussian: float = 0.0
) -> xr.DataArray:
    """The FID times decays of these widths (Hz), or `FidkitError` where a weight is no number."""
    time = fid["time"].values
    with np.errstate(over="ignore", invalid="ignore"):
        exponent = -np.pi * decay * time - (np.pi * gaussian * time) ** 2 / (4 * math.log(2))
    # a tenth of the exponent range is left for the values of the record
    limit = 0.9 * math.log(float(np.finfo(fid.dtype).max))
    largest = float(exponent.max())
    if not largest <= limit:
        raise FidkitError(
            f"{where}: every weight must be at most exp({limit:.3g}), which {fid.dtype} holds; got "
            f"exp({largest:.4g}); narrow or broaden less, shorten the record, or give the true "
            "time_start"
        )
    return _weighted(fid, np.exp(exponent), where)


def _weighted(fid: xr.DataArray, weight: npt.NDArray[Any], where: str) -> xr.DataArray:
    """The FID times a weight along time; single precision stays single."""
    require_no_filter_delay(fid, where)
    return fid.copy(data=fid.values * weight.astype(fid.real.dtype))
