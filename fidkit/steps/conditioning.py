"""What is mended in a raw record before it is weighted and transformed."""

from __future__ import annotations

import math
from typing import Annotated, Any

import numpy as np
import numpy.typing as npt
import scipy.fft
import xarray as xr

from fidkit import signals
from fidkit.params import FidkitError, ParameterError, Range, Slider, Together, Unit, step
from fidkit.steps.common import Tail, require_no_filter_delay

Duration = Annotated[float | None, Unit("s"), Range(0), Slider(0, 0.01, 0.00001)]
Points = Annotated[int | None, Range(0, 2**31), Slider(0, 256, 1)]

#: Half the number of points of the windowed sinc that reads a record between its points.
REACH = 32
#: How far, in points, the first kept point may lie before time zero: it is then taken for time
#: zero itself, so that a delay found as 61.003 does not cost a point.
AT_ZERO = 0.05
#: What the unknown shape of the filter does to a delay found from a record, as a fraction of how
#: far the edge is from the model's (in points): seen with pass bands of 75 to 100 % of the spectrum.
FILTER_SHAPE = 0.04
#: Least noise that a record is taken to have, as a fraction of its height: what is smaller may be
#: the filter's stop band.
LEAST_NOISE = 1e-3
#: Noise, as a fraction of the height, that hides the ringing of the filter after the edge.
HIDES_RINGING = 5e-3
#: Half of the longest filter, in points, that is waited for: decays are carried back that far.
LONGEST_FILTER = 256
#: A delay known no better than this, in points, is not given.
LARGEST_ERROR = 0.02
#: How many points may be rebuilt: each leans on the ones after it.
MOST_REBUILT = 4096
#: Records from which one common filter delay is found: the strongest.
DELAY_RECORDS = 16


@step
def reverse_frequency(fid: xr.DataArray) -> xr.DataArray:
    """Turn the sense of rotation round, for a record in which faster lines come out as slower.

    Returns
    -------
    xarray.DataArray
        The complex conjugate: a line at +f is at -f afterwards, and phases change sign.

    Raises
    ------
    FidkitError
        For a real-valued record, which has no sense of rotation.
    """
    signals.require_complex(fid, "reverse_frequency")
    return fid.copy(data=np.conj(fid.values))


@step
def remove_offset(fid: xr.DataArray, *, tail: Tail = 0.1) -> xr.DataArray:
    """Subtract the mean of the end of the record, where the signal has died away.

    Parameters
    ----------
    tail : float
        Fraction of the measured points, counted from the last one, that the mean is taken over.

    Returns
    -------
    xarray.DataArray
        The FID without its constant part; zeros that were filled in stay zeros. Real or complex.

    Raises
    ------
    ParameterError
        If `tail` holds no point.
    """
    measured = signals.acquired_points(fid)
    values = fid.values.copy()
    end = values[..., measured - _tail_points(tail, measured, "remove_offset") : measured]
    offset = end.mean(axis=-1, keepdims=True)
    values[..., :measured] -= offset
    return fid.copy(data=values)


@step
def remove_start(
    fid: xr.DataArray, *, duration: Duration = None, points: Points = None
) -> xr.DataArray:
    """Cut off the start of the record: dead time, ring-down, a switching spike.

    Parameters
    ----------
    duration : float, optional
        Points earlier than this after the first point go, s.
    points : int, optional
        How many points go. One of the two must be given.

    Returns
    -------
    xarray.DataArray
        The shorter FID, real or complex. The points that are left keep their true times.

    Raises
    ------
    ParameterError
        If both or neither are given, or fewer than 2 points would be left.
    FidkitError
        If a filter delay that the file states was not removed first.
    """
    require_no_filter_delay(fid, "remove_start")
    return _cut(fid, _count(fid, duration, points, "remove_start", "duration", "points"), None)


@step
def remove_end(
    fid: xr.DataArray, *, keep_duration: Duration = None, keep_points: Points = None
) -> xr.DataArray:
    """Cut off the end of the record, where there is only noise or where zeros were filled in.

    Parameters
    ----------
    keep_duration : float, optional
        Points earlier than this after the first point stay, s.
    keep_points : int, optional
        How many points stay. One of the two must be given.

    Returns
    -------
    xarray.DataArray
        The shorter FID, real or complex.

    Raises
    ------
    ParameterError
        If both or neither are given, fewer than 2 points would be left, or the record is shorter.
    """
    kept = _count(fid, keep_duration, keep_points, "remove_end", "keep_duration", "keep_points")
    return _cut(fid, 0, kept)


@step
def remove_filter_delay(
    fid: Annotated[xr.DataArray, Together()],
    *,
    delay: Annotated[float | None, Unit("points"), Range(0, 1e6), Slider(0, 128, 0.01)] = None,
) -> xr.DataArray:
    """Take away the delay and the build-up that a linear-phase digital filter put before the FID.

    Parameters
    ----------
    delay : float, optional
        Points from the start of the record to the start of the signal; the fraction counts. Where
        none is given: what the file stated (attribute ``filter_delay``), else found from the
        strongest records, one delay for all; what was found is added to the notes.

    Returns
    -------
    xarray.DataArray
        The FID from the start of the signal on. No point is moved: the time axis starts at the
        true, in general fractional, time of the first kept point.

    Raises
    ------
    FidkitError
        For a real-valued record, a delay longer than the record, or where no delay was given and
        the record shows no build-up, or shows its delay to no better than 0.02 points.

    Notes
    -----
    A filter with even impulse response h turns ``s(t) = exp(i phase) exp((i w - r) t), t >= 0``
    into ``x(t) = s(t) * integral of h(v) exp(-(i w - r) v) from -inf to t``. As h is even,
    ``x(t) + exp(2 i phase) conj(x(-t)) = s(t)`` for lines of one common phase, up to terms of the
    order of decay rate times dwell time. So the build-up before the pulse is mirrored onto the
    first points, which undoes both it and the overshoot after the pulse; nothing of it gets to
    the end of the record, and the first point counts like that of any FID. Build-up below three
    times the noise is dropped. The phase is that of the sum of ``abs(S)**2 * S`` over the
    spectrum. Where lines differ in phase the mirrored part is right for the strongest ones.

    The delay is found as the shift of a band-limited step times the sum of decays that the later
    part of the record shows (matrix pencil: Hua and Sarkar, IEEE Trans. Acoust. Speech Signal
    Process. 38, 814 (1990), from memory). Its uncertainty is that of a shift in white noise and of
    the decays carried back, with a share of the misfit of the edge for the unknown shape of the
    filter. Signal up to 1/1,000 of the highest point is taken for noise, as a stop band may ring so
    far. That a delay is a first-order phase, 360 degrees a dwell time over the spectral width, is
    the delay theorem.
    """
    where = "remove_filter_delay"
    signals.require_complex(fid, where)
    found = ""
    if delay is None:
        delay = fid.attrs.get("filter_delay")
        if delay is not None and not 0 <= delay < math.inf:
            raise FidkitError(
                f"{where}: the attribute filter_delay must be a number in [0, inf) points; got "
                f"{delay!r}; give delay in points"
            )
    if delay is None:
        delay, error = _find_delay(fid)
        found = f"filter delay found from the record: {delay:.3f} points, standard uncertainty {error:.3f}"
    first = max(0, math.ceil(delay - AT_ZERO))
    if first > signals.acquired_points(fid) - 2:
        raise ParameterError(
            f"{where}: delay must leave at least 2 of the {signals.acquired_points(fid)} measured "
            f"points; got {delay:g} points"
        )
    dwell = signals.dwell_time(fid)
    result = _cut(fid, first, None)
    if first:
        build_up = _mirrored(fid.values[..., : signals.acquired_points(fid)], delay, first)
        values = result.values.copy()  # of a record that dask holds: computed here
        values[..., : build_up.shape[-1]] += build_up.astype(fid.dtype)
        result = result.copy(data=values)
    start = float(fid["time"].values[first]) - delay * dwell
    result = result.assign_coords(time=signals.time_coordinate(result.sizes["time"], dwell, start))
    result.attrs.pop("filter_delay", None)
    if found:
        signals.add_note(result, found)
    return result


@step
def rebuild_start(
    fid: xr.DataArray,
    *,
    points: Annotated[int | None, Range(1, MOST_REBUILT), Slider(1, 64, 1)] = None,
    coefficients: Annotated[int, Range(1, 1024), Slider(1, 128, 1)] = 32,
    fit_points: Annotated[int | None, Range(2, 65536), Slider(16, 2048, 1)] = None,
) -> xr.DataArray:
    """Rebuild points lost before the start of the record, by backward linear prediction.

    Parameters
    ----------
    points : int, optional
        How many points to put before the first one. Where none is given: as many as fit between
        time zero and the first point; that may be none.
    coefficients : int
        Length of the prediction: at least the number of lines, better several times that.
    fit_points : int, optional
        Over how many points from the start the prediction is fitted; where none is given eight
        times `coefficients`, or the whole record if it is shorter.

    Returns
    -------
    xarray.DataArray
        The longer FID, real or complex, starting so much earlier on the time axis.

    Raises
    ------
    ParameterError
        If the fit has fewer than two points a coefficient, or more points than were measured.
    FidkitError
        If a filter delay that the file states was not removed first, the record starts more than
        4096 points after time zero and `points` is not given, or a point of the fit is not finite.

    Notes
    -----
    ``s[n] = sum_k a[k] s[n + k]``, ``k = 1 ... coefficients``, by least squares with a truncated
    singular value decomposition (Kumaresan and Tufts, IEEE Trans. Acoust. Speech Signal Process.
    30, 833 (1982)); singular values below the hard threshold of Gavish and Donoho, IEEE Trans.
    Inf. Theory 60, 5040 (2014), are left out, the noise taken from the fitted points themselves.
    Both from memory. Each rebuilt point leans on the ones after it, so errors grow with their
    number.
    """
    where = "rebuild_start"
    require_no_filter_delay(fid, where)
    dwell, start = signals.dwell_time(fid), signals.time_start(fid)
    measured = signals.acquired_points(fid)
    if points is None:
        points = max(0, math.floor(start / dwell + AT_ZERO))
        if points > MOST_REBUILT:
            raise FidkitError(
                f"{where}: at most {MOST_REBUILT} points may be rebuilt; the record starts {start:g} "
                f"s after the pulse, {points} points; give points, or mend the time axis"
            )
    if not points:
        return fid.copy()
    if fit_points is None:
        fit_points = min(measured, 8 * coefficients)
    if not 2 * coefficients <= fit_points <= measured:
        raise ParameterError(
            f"{where}: fit_points must be from twice the {coefficients} coefficients to the "
            f"{measured} measured points; got {fit_points}; give fewer coefficients or other fit_points"
        )
    wide = np.complex128 if np.iscomplexobj(fid.values) else np.float64
    values = np.empty((*fid.shape[:-1], points + fid.shape[-1]), dtype=fid.dtype)
    values[..., points:] = fid.values
    for row in np.ndindex(fid.shape[:-1]):
        known = fid.values[row][:fit_points].astype(wide)
        if not np.isfinite(known).all():
            raise FidkitError(
                f"{where}: the first {fit_points} points of every record must be finite; got some "
                "that are not; cut them out or leave that record out"
            )
        prediction = _backward_prediction(known, coefficients)
        work = np.concatenate([np.zeros(points, wide), known[:coefficients]])
        for place in range(points - 1, -1, -1):
            work[place] = prediction @ work[place + 1 : place + 1 + coefficients]
        values[row][:points] = work[:points]
    result = signals.like(fid, values, dwell=dwell, start=start - points * dwell)
    if "acquired_points" in fid.attrs:
        result.attrs["acquired_points"] = measured + points
    # what is predicted brings no knowledge: measuring begins where the record did
    result.attrs.setdefault("measured_from", start)
    return result


@step
def shift_frequency(
    fid: xr.DataArray, *, frequency: Annotated[float, Unit("Hz"), Slider(-1000, 1000, 0.1)] = 0.0
) -> xr.DataArray:
    """Move every line by the same frequency; the phase at time zero stays.

    Parameters
    ----------
    frequency : float
        What is added to the offset of every line, Hz. Lines pushed over one edge of the spectrum
        come in again at the other.

    Returns
    -------
    xarray.DataArray
        The FID times ``exp(2 pi i frequency t)``, t the true time.

    Raises
    ------
    FidkitError
        For a real-valued record.
    """
    signals.require_complex(fid, "shift_frequency")
    turn = np.exp(2j * np.pi * frequency * fid["time"].values)
    return fid.copy(data=fid.values * turn.astype(fid.dtype))


@step
def correct_quadrature(
    fid: xr.DataArray,
    *,
    gain: Annotated[float | None, Range(0.1, 10), Slider(0.8, 1.25, 0.001)] = None,
    phase: Annotated[float | None, Unit("degree"), Range(-60, 60), Slider(-20, 20, 0.1)] = None,
) -> xr.DataArray:
    """Undo unequal gain and a wrong angle between the two receiver channels: the mirror image goes.

    Parameters
    ----------
    gain : float, optional
        Gain of the imaginary channel over that of the real one; found from each record where none
        is given.
    phase : float, optional
        By how much the angle between the channels exceeds 90 degrees; found likewise.

    Returns
    -------
    xarray.DataArray
        The FID with a mended imaginary channel; the real channel is the reference.

    Raises
    ------
    FidkitError
        For a real-valued record, or one in which the two channels show no signal or the same.

    Notes
    -----
    The channels are taken as ``I = Re s`` and ``Q = gain * Im(s exp(i phase))``. Left alone, a
    phase error gives an image of ``tan(phase / 2)`` and a gain error one of
    ``(gain - 1) / (gain + 1)`` of the line. Where not given they follow from the second moments,
    ``gain**2 = <Q Q> / <I I>`` and ``sin(phase) = <I Q> / sqrt(<I I> <Q Q>)`` (Churchill, Ogar and
    Thompson, IEEE Trans. Aerosp. Electron. Syst. 17, 131 (1981), from memory), weighted by a
    raised cosine over the points that hold 99 % of the energy so that the ends do not count.

    This holds where the square of the signal averages out: not for a line within a few widths of
    the carrier, nor for lines mirrored about the carrier, nor with a constant offset (apply
    `remove_offset` first). Noise that is equal in both channels pulls `gain` towards one. In those
    cases measure both on a strong line far from the carrier and give them.
    """
    where = "correct_quadrature"
    signals.require_complex(fid, where)
    values = fid.values
    gains: Any = gain
    sines: Any = None if phase is None else math.sin(math.radians(phase))
    if gain is None or phase is None:
        found_gain, found_sine = _moments(values[..., : signals.acquired_points(fid)], where)
        gains = found_gain if gain is None else gain
        sines = found_sine if phase is None else sines
    mended = values.copy()
    real = values.real.astype(np.float64)
    mended.imag = (values.imag / gains - real * sines) / np.sqrt(1 - sines**2)
    return fid.copy(data=mended)


@step
def make_analytic(fid: xr.DataArray) -> xr.DataArray:
    """Make a complex record of a real, single-channel one.

    Returns
    -------
    xarray.DataArray
        Complex FID: the measured values as real part, their discrete Hilbert transform as
        imaginary part. ``A cos(w t)`` becomes ``A exp(i w t)``.

    Raises
    ------
    FidkitError
        If the record is complex already.

    Notes
    -----
    Negative frequencies are dropped and positive ones doubled (Gabor 1946, from memory), over
    twice the length so that the start does not act on the end. One channel cannot tell a line
    from its mirror image: all lines come out above the carrier. The start and a cut end bend the
    imaginary part over a few periods of the line. The noise of the two parts is no longer
    independent.
    """
    if np.iscomplexobj(fid.values):
        raise FidkitError(
            "make_analytic: needs a real record; got a complex one; leave the step out"
        )
    measured = signals.acquired_points(fid)
    length = scipy.fft.next_fast_len(2 * measured)
    precise = np.complex64 if fid.dtype == np.float32 else np.complex128
    weight = np.zeros(length, fid.dtype)
    weight[0] = 1
    weight[1 : (length + 1) // 2] = 2
    if length % 2 == 0:
        weight[length // 2] = 1
    half = scipy.fft.fft(fid.values[..., :measured], length, axis=-1) * weight
    values = np.zeros(fid.shape, precise)
    values[..., :measured] = scipy.fft.ifft(half, axis=-1)[..., :measured]
    values.real = fid.values
    return fid.copy(data=values)


def _tail_points(tail: float, measured: int, where: str) -> int:
    count = round(tail * measured)
    if count < 1:
        raise ParameterError(
            f"{where}: tail must hold at least one of the {measured} measured points; got "
            f"{tail:g} fraction; give at least {1 / measured:.2g}"
        )
    return count


def _count(
    fid: xr.DataArray,
    duration: float | None,
    points: int | None,
    where: str,
    duration_name: str,
    points_name: str,
) -> int:
    """How many points from the start are meant, at least leaving what the caller asks."""
    if (duration is None) == (points is None):
        got = "both" if points is not None else "neither"
        raise ParameterError(f"{where}: give {duration_name} or {points_name}; got {got}")
    dwell, measured = signals.dwell_time(fid), signals.acquired_points(fid)
    # a duration of three dwell times is three points whatever the last digit says
    count = points if points is not None else math.ceil(round((duration or 0) / dwell, 6))
    # of zeros that were filled in any number may go, of measured points two must stay
    low, high = (0, measured - 2) if where == "remove_start" else (2, fid.sizes["time"])
    if not low <= count <= high:
        name = duration_name if points is None else points_name
        got = f"{duration:g} s" if points is None else f"{points} points"
        raise ParameterError(
            f"{where}: {name} must be from {low} to {high} points ({low * dwell:g} to "
            f"{high * dwell:g} s) of this record; got {got}"
        )
    return count


def _cut(fid: xr.DataArray, first: int, stop: int | None) -> xr.DataArray:
    """Points `first` to `stop`, as a new array on its true times."""
    measured = signals.acquired_points(fid)
    result = fid.isel(time=slice(first, stop)).copy()
    left = min(max(measured - first, 0), result.sizes["time"])
    if left < result.sizes["time"]:
        result.attrs["acquired_points"] = left
    else:
        result.attrs.pop("acquired_points", None)
    return result


def _mirrored(values: npt.NDArray[Any], delay: float, first: int) -> npt.NDArray[Any]:
    """What is to be added to the points from `first` on: the build-up mirrored at the pulse."""
    points = values.shape[-1]
    count = min(first, points - first)
    place = 2 * delay - first - np.arange(count)
    before = _between(values, place[place >= 0])
    # build-up that is not above the noise at the very start would only bring noise
    quiet = values[..., : first // 4]
    if quiet.shape[-1]:
        floor = 3 * np.sqrt(np.mean(np.abs(quiet) ** 2, axis=-1, keepdims=True, dtype=np.float64))
        loud = np.abs(before) > floor
        before *= np.flip(np.logical_or.accumulate(np.flip(loud, -1), axis=-1), -1)
    spectrum = scipy.fft.fft(values, scipy.fft.next_fast_len(2 * points), axis=-1)
    cycles = scipy.fft.fftfreq(spectrum.shape[-1])
    spectrum *= np.exp(2j * np.pi * cycles * delay)
    scale = np.abs(spectrum).max(axis=-1, keepdims=True)
    spectrum /= np.where(scale > 0, scale, 1)
    total = np.sum(np.abs(spectrum) ** 2 * spectrum, axis=-1, keepdims=True)
    turn = np.exp(2j * np.angle(total))
    mirrored: npt.NDArray[Any] = turn * np.conj(before)
    return mirrored


def _between(values: npt.NDArray[Any], place: npt.NDArray[np.float64]) -> npt.NDArray[Any]:
    """Values between the points, by a sinc under a Kaiser window."""
    centre = np.round(place).astype(int)
    taps = centre[:, None] + np.arange(-REACH, REACH + 1)
    distance = place[:, None] - taps
    weight = (
        np.sinc(distance)
        * np.i0(8 * np.sqrt(np.clip(1 - (distance / (REACH + 1)) ** 2, 0, None)))
        / np.i0(8)
    )
    inside = (taps >= 0) & (taps < values.shape[-1])
    near = values[..., np.clip(taps, 0, values.shape[-1] - 1)]
    read: npt.NDArray[Any] = np.einsum("...pk,pk->...p", near, weight * inside)
    return read


def _find_delay(fid: xr.DataArray) -> tuple[float, float]:
    """The filter delay in points and its standard uncertainty, from the strongest records."""
    values = fid.values[..., : signals.acquired_points(fid)].reshape(
        -1, signals.acquired_points(fid)
    )
    energy: npt.NDArray[np.float64] = np.sum(np.abs(values) ** 2, axis=-1, dtype=np.float64)
    chosen = np.argsort(-energy, kind="stable")[:DELAY_RECORDS]
    chosen = chosen[np.isfinite(energy[chosen])]
    answers = [_delay_of(values[row].astype(np.complex128)) for row in chosen]
    found = [answer for answer in answers if answer is not None]
    if not found:
        raise FidkitError(
            "remove_filter_delay: no build-up of a digital filter stands out at the start of the "
            "record; give delay in points, or leave the step out if there was no such filter"
        )
    delays, errors, shapes = np.array(found).T
    weight = errors**-2.0 / np.sum(errors**-2.0)
    error = math.hypot(float(np.linalg.norm(weight * errors)), float(weight @ shapes))
    if error > LARGEST_ERROR:
        raise FidkitError(
            f"remove_filter_delay: a delay is found where it shows to {LARGEST_ERROR:g} points or "
            f"better; this record leaves {error:.2g} points; average more shots, or give delay in "
            "points"
        )
    return float(weight @ delays), error


def _delay_of(record: npt.NDArray[np.complex128]) -> tuple[float, float, float] | None:
    """Delay, its standard uncertainty from noise and that from the shape of the filter (points).

    None where the record shows no build-up.
    """
    size = np.abs(record)
    rough = int(np.argmax(size > 0.5 * size.max()))
    reach = min(rough, REACH)
    # the filter is twice as long as its delay: what follows is decays and noise alone. Only where
    # noise hides its ringing may they be looked for right behind the edge, where they are larger
    for first in (rough + min(rough, LONGEST_FILTER) + 4, rough + reach):
        settled = record[first : first + 512]
        if rough < 2 or settled.size < 64:
            return None
        rates, amplitudes, sigma = _decays(settled, LEAST_NOISE * float(size.max()))
        if sigma < HIDES_RINGING * size.max():
            break
    if not rates.size:
        return None
    # counted from where the record has settled, the build-up is at negative times
    index = np.arange(rough - reach, rough + reach + 1) - first
    edge = record[rough - reach : rough + reach + 1]
    fine = np.arange(-reach - 2, reach + 2, 1 / 64)
    kernel = np.sinc(fine) * np.i0(4 * np.sqrt(np.clip(1 - (fine / (reach + 2)) ** 2, 0, None)))
    kernel /= kernel.sum()
    # one band-limited step for each line: the integral of the kernel times exp(-rate * v)
    weighted = kernel * np.exp(-np.outer(rates, fine))
    rise = np.cumsum(weighted, axis=1) - weighted / 2
    lines = np.exp(np.outer(rates, index))
    delay = float(rough - first)
    for _ in range(20):
        steps = lines * [
            np.interp(index - delay, fine, part.real)
            + 1j * np.interp(index - delay, fine, part.imag)
            for part in rise
        ]
        height = np.sum(amplitudes * np.exp(rates * delay))
        slope = -height * np.interp(index - delay, fine, kernel * 64)
        energy = float(np.sum(np.abs(slope) ** 2))
        misfit = edge - amplitudes @ steps
        change = float(np.real(np.vdot(slope, misfit))) / energy
        delay += min(max(change, -0.5), 0.5)
        if abs(change) < 1e-5:
            break
    else:
        return None
    if abs(first + delay - rough) > 3:
        return None
    # noise at the edge, and the uncertainty of the lines that are carried back to it
    later = np.arange(settled.size)
    basis = np.exp(np.outer(rates, later))
    jacobian = np.concatenate([basis, amplitudes[:, None] * basis * later])
    carried = np.concatenate([steps, amplitudes[:, None] * steps * index]) @ slope.conj() / energy
    _, triangle = np.linalg.qr(jacobian.T)
    lent = np.linalg.lstsq(triangle.T, carried, rcond=None)[0]
    error = sigma * math.sqrt(1 / energy + float(np.sum(np.abs(lent) ** 2)))
    return first + delay, error, FILTER_SHAPE * float(np.linalg.norm(misfit)) / math.sqrt(energy)


def _decays(
    record: npt.NDArray[np.complex128], floor: float
) -> tuple[npt.NDArray[Any], npt.NDArray[Any], float]:
    """Rates a point and amplitudes of the damped lines in a record, by matrix pencil; the noise."""
    width = min(record.size // 3, 100)
    hankel = np.lib.stride_tricks.sliding_window_view(record, width + 1)
    _, singular, right = np.linalg.svd(hankel, full_matrices=False)
    sigma = max(_noise_level(singular, hankel.shape), floor)
    kept = right[: _above_noise(singular, hankel.shape, sigma)].T
    poles = np.linalg.eigvals(np.linalg.pinv(kept[:-1]) @ kept[1:])
    rates = np.log(poles[(np.abs(poles) < 1.0005) & (np.abs(poles) > 0.5)])
    while True:
        basis = np.exp(np.outer(np.arange(record.size), rates))
        amplitudes = np.linalg.lstsq(basis, record, rcond=None)[0]
        left = math.sqrt(float(np.mean(np.abs(record - basis @ amplitudes) ** 2)) / 2)
        # a line that noise feigns would grow without bound when it is carried back
        strong = np.linalg.norm(basis, axis=0) * np.abs(amplitudes) > 5 * max(left, floor)
        if strong.all():
            return rates, amplitudes, max(left, floor)
        rates = rates[strong]


def _backward_prediction(known: npt.NDArray[Any], coefficients: int) -> npt.NDArray[Any]:
    # the noise from a matrix wide enough that most of its singular values are noise
    wide = np.lib.stride_tricks.sliding_window_view(known, max(2, min(known.size // 3, 100)))
    sigma = _noise_level(np.linalg.svd(wide, compute_uv=False), wide.shape)
    after = np.lib.stride_tricks.sliding_window_view(known[1:], coefficients)
    left, singular, right = np.linalg.svd(after, full_matrices=False)
    kept = _above_noise(singular, after.shape, sigma)
    scaled = (left[:, :kept].conj().T @ known[: after.shape[0]]) / singular[:kept]
    prediction: npt.NDArray[Any] = right[:kept].conj().T @ scaled
    return prediction


def _above_noise(singular: npt.NDArray[np.float64], shape: tuple[int, ...], sigma: float) -> int:
    """How many singular values are signal: hard threshold of Gavish and Donoho."""
    # a record without noise leaves rounding, which is smaller than this
    floor = singular[0] * max(shape) * np.finfo(np.float64).eps
    return int(np.sum(singular > max(_threshold(shape) * sigma, floor)))


def _threshold(shape: tuple[int, ...]) -> float:
    """Threshold for noise of unit standard deviation: Gavish and Donoho."""
    ratio = min(shape) / max(shape)
    square = 2 * (ratio + 1) + 8 * ratio / (ratio + 1 + math.sqrt(ratio**2 + 14 * ratio + 1))
    return math.sqrt(square * max(shape))


def _noise_level(singular: npt.NDArray[np.float64], shape: tuple[int, ...]) -> float:
    """Standard deviation of the noise in a matrix whose singular values are mostly noise."""
    ratio = min(shape) / max(shape)
    factor = 0.56 * ratio**3 - 0.95 * ratio**2 + 1.82 * ratio + 1.43
    return factor * float(np.median(singular)) / _threshold(shape)


def _moments(values: npt.NDArray[Any], where: str) -> tuple[npt.NDArray[Any], npt.NDArray[Any]]:
    """Gain and sine of the phase error of each record, shape (..., 1)."""
    real, imaginary = values.real.astype(np.float64), values.imag.astype(np.float64)
    energy = np.cumsum(real**2 + imaginary**2, axis=-1)
    last = 1 + np.argmax(energy >= 0.99 * energy[..., -1:], axis=-1)[..., None]
    place = (np.arange(values.shape[-1]) + 0.5) / last
    weight = np.where(place < 1, np.sin(np.pi * place) ** 2, 0)
    real_power = np.sum(weight * real**2, axis=-1, keepdims=True)
    imaginary_power = np.sum(weight * imaginary**2, axis=-1, keepdims=True)
    both = np.sqrt(real_power * imaginary_power)
    sine = np.sum(weight * real * imaginary, axis=-1, keepdims=True) / np.where(both > 0, both, 1)
    if not np.all(both > 0) or np.any(np.abs(sine) > math.sin(math.radians(60))):
        raise FidkitError(
            f"{where}: the channels must both carry the signal, at an angle of 30 to 150 degrees; "
            "one is empty or nearly a copy of the other; check the receiver, or give gain and phase"
        )
    return np.sqrt(imaginary_power / real_power), sine
