"""Where is the line, how wide is it, how strong, and how sure is that."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass, field, replace
from typing import Any

import numpy as np
import numpy.typing as npt
import scipy.fft
import xarray as xr

from fidkit import signals
from fidkit.measure.record import Record, Unseen, record_of
from fidkit.nuclei import find_nucleus
from fidkit.numerics import lines as numerics
from fidkit.numerics.lines import ADDITION_COST, Band, Crowd
from fidkit.params import FidkitError, ParameterError

__all__ = ["QUANTITIES", "measure"]

#: Every quantity with its unit (None: the signal's own) and what it is.
QUANTITIES: dict[str, tuple[str | None, str]] = {
    "frequency_offset": ("Hz", "offset of the line from the carrier"),
    "frequency_offset_ppm": ("ppm", "offset of the line from the carrier, of the carrier"),
    "linewidth": ("Hz", "natural full width at half maximum"),
    "linewidth_ppm": ("ppm", "natural full width at half maximum, of the carrier"),
    "t2_star": ("s", "T2* from the linewidth, 1 / (pi linewidth)"),
    "t2_star_decay": ("s", "T2* from the decay itself"),
    "field": ("T", "field in which the line has its frequency"),
    "amplitude": (None, "amplitude at time zero"),
    "phase": ("degree", "phase at time zero"),
    "snr": ("1", "peak height over rms noise of the real part"),
}

METHOD = (
    "least-squares fit of damped lines to the discrete transform of the record within 25 widths of "
    "the line; windows divided out, truncation in the model; a background, a further line or a "
    "Gaussian part is kept where it lowers the Bayesian information criterion by more than "
    f"{ADDITION_COST:g}; t2_star_decay by an exponential laid through the decay in its first three "
    "time constants"
)
METHOD_STANDING = (
    "least-squares fit of Lorentzian lines and a constant to the spectrum as it stands, within 25 "
    "widths of the line"
)
SNR_DEFINITION = (
    "height of the line over the rms noise of the real part, in the spectrum as it stands; for an "
    "FID, in its plain transform"
)
FIELD_ASSUMPTION = (
    "field: shielded nucleus of the reference compound (for 1H water, sphere, 25 C); "
    "the sample's own shift is not known"
)

#: Energy (sum |s|^2 / (2 sigma^2)) under which a start value may be grossly wrong.
WEAK_ENERGY = 25.0
FEWEST_POINTS = 16
MOST_LINES = 50
MOST_ADDITIONS = 8
#: Records handled at once: a few megabytes of scratch.
BLOCK_POINTS = 2**20


def measure(
    signal: xr.DataArray,
    *,
    near: float | None = None,
    region: tuple[float, float] | None = None,
    lines: int = 1,
    noise: tuple[float, float] | None = None,
) -> xr.Dataset:
    """Measure the strongest line, or chosen ones, with uncertainties.

    Parameters
    ----------
    signal : xarray.DataArray, dims (..., time) or (..., frequency)
        A complex FID, or a spectrum. Of a spectrum made by fidkit steps the record behind it is
        measured, so that apodization, zero filling and phase change nothing but the noise.
    near : float, optional
        Hz: the line nearest to this frequency instead of the strongest.
    region : (float, float), optional
        Hz: look only between these frequencies.
    lines : int
        How many lines to fit together; they then run along the dimension ``line``, by frequency.
    noise : (float, float), optional
        Hz: a region without any line, to take the noise of ``snr`` from.

    Returns
    -------
    xarray.Dataset
        For each quantity ``q`` of `QUANTITIES`: ``q``, ``q_std`` (one standard uncertainty, same
        unit) and ``q_status`` (``ok``, or what is doubtful or missing; then the value or its
        uncertainty may be NaN), along the leading dimensions of the signal. ``lineshape`` says
        which shape was chosen, ``status`` sums up.

    Raises
    ------
    FidkitError
        If the record is too short or real-valued, or a parameter is not allowed.

    Notes
    -----
    Linewidth and T2*: ``T2* = 1 / (pi FWHM)``, Fourier pair of the exponential decay. Signal to
    noise: height over rms noise. Uncertainties are from the covariance of the fit with the noise
    found in its residual. A decay that differs from the linewidth's T2* by more than three of its
    standard uncertainties is said in ``t2_star_decay_status``.
    """
    wanted = _checked(signal, near, region, lines, noise)
    results: list[list[_Line]] = []
    notes = [line for line in str(signal.attrs.get("notes", "")).splitlines() if line]
    try:
        record = record_of(signal)
        method = METHOD
        if record.values.shape[1] < FEWEST_POINTS:
            raise FidkitError(
                f"measure: needs at least {FEWEST_POINTS} measured points; "
                f"got {record.values.shape[1]}; record for longer"
            )
        for block in _blocks(record):
            results += _measure_block(block, wanted)
    except Unseen as reason:
        method = METHOD_STANDING
        notes.append(
            f"measured as it stands, since {reason}: the linewidth holds any apodization, and the "
            "uncertainties take neighbouring points as independent"
        )
        frequency = signal["frequency"].values
        if signal.shape[-1] < FEWEST_POINTS:
            raise FidkitError(
                f"measure: needs at least {FEWEST_POINTS} points; got {signal.shape[-1]}"
            ) from None
        for values in signal.values.reshape(-1, signal.shape[-1]):
            results.append(_measure_standing(values, frequency, wanted))
    return _dataset(signal, results, lines, method, notes)


@dataclass(frozen=True)
class _Wanted:
    """Which lines are asked for."""

    near: float | None
    region: tuple[float, float] | None
    lines: int
    noise: tuple[float, float] | None


@dataclass
class _Line:
    """What was found of one line; NaN where nothing was."""

    frequency: float = np.nan
    frequency_std: float = np.nan
    width: float = np.nan
    width_std: float = np.nan
    decay: float = np.nan
    decay_std: float = np.nan
    amplitude: float = np.nan
    amplitude_std: float = np.nan
    phase: float = np.nan
    phase_std: float = np.nan
    snr: float = np.nan
    snr_std: float = np.nan
    noise: float = np.nan
    shape: str = ""
    notes: list[str] = field(default_factory=list)
    status: dict[str, str] = field(default_factory=dict)


def _checked(
    signal: xr.DataArray,
    near: float | None,
    region: tuple[float, float] | None,
    lines: int,
    noise: tuple[float, float] | None,
) -> _Wanted:
    in_time = signals.is_fid(signal)
    if signal.size == 0:
        raise FidkitError(f"measure: the signal holds no record; got shape {signal.shape}")
    if not np.isfinite(signal.values).all():
        raise FidkitError("measure: the signal must be finite; cut out or repair its NaN values")
    if "carrier_frequency" not in signal.attrs or "nucleus" not in signal.attrs:
        raise FidkitError(
            "measure: the attributes carrier_frequency [Hz] and nucleus are missing; "
            "arithmetic may have dropped them; set them, or start from fidkit.from_array"
        )
    if in_time:
        half = 0.5 / signals.dwell_time(signal)
        low, high = -half, half
    else:
        axis = signal["frequency"].values
        low, high = float(axis[0]), float(axis[-1])
    limits = f"[{low:g}, {high:g}] Hz"

    def pair(value: Any, name: str) -> tuple[float, float] | None:
        if value is None:
            return None
        try:
            first, second = (float(part) for part in value)
        except (TypeError, ValueError):
            first, second = np.nan, np.nan
        if not (low <= first < second <= high):
            raise ParameterError(
                f"measure: {name} must be a pair (low, high) of numbers within {limits}, "
                f"or None; got {value!r}"
            )
        return first, second

    if near is not None and (isinstance(near, str | bool) or not low <= near <= high):
        raise ParameterError(f"measure: near must be a number in {limits}, or None; got {near!r}")
    if isinstance(lines, bool) or not isinstance(lines, int | np.integer):
        raise ParameterError(f"measure: lines must be a whole number; got {lines!r}")
    if not 1 <= lines <= MOST_LINES:
        raise ParameterError(f"measure: lines must be in [1, {MOST_LINES}]; got {lines!r}")
    return _Wanted(
        None if near is None else float(near),
        pair(region, "region"),
        int(lines),
        pair(noise, "noise"),
    )


def _blocks(record: Record) -> Iterator[Record]:
    records, points = record.values.shape
    # records with windows of their own are handled one by one: each has its own noise
    size = 1 if record.weight.ndim == 2 else max(1, BLOCK_POINTS // points)
    for first in range(0, records, size):
        rows = slice(first, first + size)
        yield Record(
            record.values[rows],
            record.weight if record.weight.ndim == 1 else record.weight[first],
            record.start,
            record.dwell,
        )


# --- measuring the record behind a signal --------------------------------------------------------


def _measure_block(record: Record, wanted: _Wanted) -> list[list[_Line]]:
    """All records of a block: one plain line each where that will do, else with care."""
    values, dwell = record.values, record.dwell
    records, points = values.shape
    spectrum = scipy.fft.fft(values, axis=-1)
    # a constant offset is no line; where it stands out it is kept out of the search
    level = _offset(values)
    clean = values - level[:, None]
    allowed = _allowed(points, dwell, wanted.region)
    found = numerics.search(clean, dwell, allowed=allowed)
    if wanted.near is not None:
        found = _nearest(clean, dwell, wanted.near, allowed, found)
    noise = None if wanted.noise is None else _noise_in(record, wanted.noise)
    results: list[list[_Line]] = [[] for _ in range(records)]
    rest = values.copy()

    seen = found.energy >= _threshold(points)
    half = numerics.half_band(found.rate, points, dwell)
    plain = seen & (wanted.lines == 1)
    for width in np.unique(half[plain]):
        rows = np.flatnonzero(plain & (half == width))
        band = numerics.band_around(found.frequency[rows], int(width), points, dwell)
        count = band.index.shape[1]
        fit = numerics.fit_single(
            np.take_along_axis(spectrum[rows], band.index, axis=-1),
            band,
            2j * np.pi * found.frequency[rows] - found.rate[rows],
        )
        limit = ADDITION_COST + np.log(2 * count)
        enough = (
            fit.converged
            & (fit.gaussian < limit)
            & (fit.background < limit + np.log(2 * count))
            & (fit.other < 2 * np.log(count) + 20)
            & (-fit.kappa.real * points * dwell > 1)
        )
        for place in np.flatnonzero(enough):
            row = rows[place]
            results[row] = [_from_single(fit, int(place), record, count, _at(noise, row))]
    for row in range(records):
        if not seen[row]:
            results[row] = [_nothing() for _ in range(wanted.lines)]
        elif not results[row]:
            results[row], others = _with_care(
                record,
                values[row],
                wanted,
                (float(found.frequency[row]), float(found.rate[row])),
                bool(level[row]),
                _at(noise, row),
            )
            rest[row] -= others
    if wanted.lines == 1:
        _second_opinion(record, rest, [result[0] for result in results])
    return results


def _at(values: npt.NDArray[Any] | None, row: int) -> float | None:
    return None if values is None else float(values[row])


def _threshold(points: int) -> float:
    """Energy that the largest of all points of noise alone exceeds once in a thousand records."""
    return float(np.log(6 * points) + 7)


def _offset(values: npt.NDArray[Any]) -> npt.NDArray[Any]:
    """The constant offset of each record, from its last tenth; 0 where it does not stand out."""
    tail = values[:, -max(values.shape[1] // 10, 4) :]
    mean = tail.mean(axis=-1)
    # differences of neighbours: noise, whatever slow signal is left
    noise = np.abs(np.diff(tail, axis=-1)).std(axis=-1) + np.abs(np.diff(tail, axis=-1)).mean(
        axis=-1
    )
    return np.where(np.abs(mean) > 5 * noise / np.sqrt(tail.shape[1]), mean, 0)


def _allowed(
    points: int, dwell: float, region: tuple[float, float] | None
) -> npt.NDArray[np.bool_] | None:
    if region is None:
        return None
    axis = scipy.fft.fftfreq(points, dwell)
    allowed: npt.NDArray[np.bool_] = (axis >= region[0]) & (axis <= region[1])
    if not allowed.any():
        raise FidkitError(
            f"measure: region {region} Hz holds no point of the transform, whose points are "
            f"{1 / (points * dwell):.3g} Hz apart; widen it"
        )
    return allowed


def _nearest(
    values: npt.NDArray[Any],
    dwell: float,
    near: float,
    allowed: npt.NDArray[np.bool_] | None,
    strongest: numerics.Found,
) -> numerics.Found:
    """Start values of the line nearest to a frequency, record by record."""
    from scipy.signal import find_peaks

    points = values.shape[1]
    axis = scipy.fft.fftshift(scipy.fft.fftfreq(points, dwell))
    frequency, rate, energy = (
        np.array(part) for part in (strongest.frequency, strongest.rate, strongest.energy)
    )
    for row, one in enumerate(values):
        window = np.exp(-max(strongest.rate[row], 1 / (points * dwell)) * dwell * np.arange(points))
        height = np.abs(scipy.fft.fftshift(scipy.fft.fft(one * window)))
        noise = np.median(np.abs(np.diff(height))) / 0.67
        peaks, _ = find_peaks(height, prominence=8 * noise)
        if allowed is not None:
            peaks = peaks[scipy.fft.fftshift(allowed)[peaks]]
        if not peaks.size:
            energy[row] = 0.0
            continue
        place = peaks[np.argmin(np.abs(axis[peaks] - near))]
        around = np.abs(np.arange(points) - place) <= 2
        one_found = numerics.search(one[None], dwell, allowed=scipy.fft.ifftshift(around))
        frequency[row], rate[row] = one_found.frequency[0], one_found.rate[0]
        energy[row] = one_found.energy[0]
    return numerics.Found(frequency, rate, energy)


def _noise_in(record: Record, region: tuple[float, float]) -> npt.NDArray[Any]:
    """Noise of each part of a raw point, from a region of the weighted transform."""
    points = record.values.shape[1]
    axis = scipy.fft.fftfreq(points, record.dwell)
    inside = (axis >= region[0]) & (axis <= region[1])
    if inside.sum() < 8:
        raise FidkitError(
            f"measure: noise must hold at least 8 points of the transform; got {region} Hz with "
            f"{int(inside.sum())}; widen it"
        )
    piece = scipy.fft.fft(record.values * record.weight, axis=-1)[:, inside]
    spread = np.sqrt((piece.real.var(axis=-1) + piece.imag.var(axis=-1)) / 2)
    return np.asarray(spread / np.sqrt((record.weight**2).sum()))


def _nothing() -> _Line:
    line = _Line()
    line.notes.append("no line above the noise")
    line.status = dict.fromkeys(QUANTITIES, "missing: no line above the noise")
    return line


def _from_single(
    fit: numerics.SingleFit, place: int, record: Record, count: int, noise: float | None
) -> _Line:
    """A line from a plain fit; amplitude and phase are carried from the first point to time zero."""
    kappa = complex(fit.kappa[place])
    start = record.start
    variance = fit.variance[place]
    log_scale = np.log(complex(fit.scale[place])) - kappa * start
    log_variance = (
        fit.variance_log[place] + start**2 * variance - 2 * start * fit.covariance[place].real
    )
    # of (ln amplitude, rate): the rate is the negative real part of kappa
    covariance = -(fit.covariance[place].real - start * variance)
    scale = fit.noise[place] ** 2
    return _line(
        record,
        frequency=kappa.imag / (2 * np.pi),
        rate=-kappa.real,
        gaussian=0.0,
        amplitude=float(np.exp(log_scale.real)),
        phase=log_scale.imag,
        covariance=np.array(
            [
                [variance / (2 * np.pi) ** 2, 0, 0, 0, 0],
                [0, variance, 0, covariance, 0],
                [0, 0, 0, 0, 0],
                [0, covariance, 0, log_variance, 0],
                [0, 0, 0, 0, log_variance],
            ]
        )
        * scale,
        noise=float(fit.noise[place] / np.sqrt(record.values.shape[1])),
        count=count,
        noise_given=noise,
    )


def _line(
    record: Record,
    *,
    frequency: float,
    rate: float,
    gaussian: float,
    amplitude: float,
    phase: float,
    covariance: npt.NDArray[Any],
    noise: float,
    count: int,
    noise_given: float | None,
) -> _Line:
    """All numbers of one line; `covariance` is of (frequency, rate, G, ln amplitude, phase).

    `noise` is that of each part of a raw point; `count` the complex points it was found from.
    """
    points = record.values.shape[1]
    length = points * record.dwell
    width, by_rate, by_gaussian = numerics.voigt_width(rate, gaussian)
    slope = np.array([0, by_rate, by_gaussian, 0, 0])
    line = _Line(
        frequency=frequency - np.rint(frequency * record.dwell) / record.dwell,
        frequency_std=float(np.sqrt(covariance[0, 0])),
        width=width,
        width_std=float(np.sqrt(slope @ covariance @ slope)),
        amplitude=amplitude,
        amplitude_std=amplitude * float(np.sqrt(covariance[3, 3])),
        phase=phase,
        phase_std=float(np.sqrt(covariance[4, 4])),
        noise=noise,
        shape="Lorentzian" if not gaussian else "Voigt" if rate > 0 else "Gaussian",
    )
    time = record.start + record.dwell * np.arange(points)
    envelope = record.weight * np.exp(-rate * time - gaussian * time**2)
    total = envelope.sum()
    height = amplitude * abs(total)
    tilt = np.array(
        [0, -(time * envelope).sum() / total, -(time**2 * envelope).sum() / total, 1, 0]
    )
    seen_noise = noise if noise_given is None else noise_given
    if seen_noise > 0:
        line.snr = float(height / (seen_noise * np.sqrt((record.weight**2).sum())))
        line.snr_std = line.snr * float(np.sqrt(tilt @ covariance @ tilt + 1 / (4 * count)))
    strength = amplitude * np.exp(-rate * time - gaussian * time**2)
    energy = float((strength**2).sum() / (2 * noise**2)) if noise > 0 else np.inf
    if energy < WEAK_ENERGY:
        text = f"doubtful: weak signal (energy {energy:.0f} of the noise, {WEAK_ENERGY:.0f} wanted)"
        line.status = dict.fromkeys(QUANTITIES, text)
        line.notes.append("weak signal")
    if width < 2 * line.width_std or width * length < 1 / np.pi:
        bound = max(width, 0.0) + 2 * line.width_std
        text = f"doubtful: the record of {length:.3g} s is too short for this width"
        if width < 2 * line.width_std:
            text = f"doubtful: not told from no width at all; below {bound:.2g} Hz"
        for name in ("linewidth", "linewidth_ppm", "t2_star"):
            line.status[name] = text
        line.notes.append("decays too little within the record")
    return line


@dataclass(frozen=True)
class _Model:
    """What a careful fit contains; the first `named` lines are those asked for."""

    frequency: tuple[float, ...]
    rate: tuple[float, ...]
    named: int
    gaussian: float | None = None
    background: bool = False
    offset: bool = False

    def with_line(self, frequency: float, rate: float, *, named: bool = False) -> _Model:
        return replace(
            self,
            frequency=(*self.frequency, frequency),
            rate=(*self.rate, rate),
            named=self.named + named,
        )


def _with_care(
    record: Record,
    values: npt.NDArray[Any],
    wanted: _Wanted,
    start: tuple[float, float],
    offset: bool,
    noise: float | None,
) -> tuple[list[_Line], npt.NDArray[Any]]:
    """Measure a record with more in it than one plain line.

    Returns the lines, and what of the record is not the line (for the decay's sake).
    """
    spectrum = scipy.fft.fft(values)
    points, resolution = values.size, 1 / (values.size * record.dwell)
    allowed = _allowed(points, record.dwell, wanted.region)

    def look(fit: Crowd, among: npt.NDArray[np.bool_] | None) -> tuple[float, float, float]:
        rest = values - numerics.model_in_time(fit, points, record.dwell, record.start).sum(axis=0)
        found = numerics.search(rest[None] - _offset(rest[None]), record.dwell, allowed=among)
        return float(found.frequency[0]), float(found.rate[0]), float(found.energy[0])

    def grow(frequency: float, rate: float) -> tuple[_Model, Crowd, Band]:
        model = _Model((frequency,), (rate,), named=1, offset=offset)
        fit, band = _fit(record, spectrum, model)
        while model.named < wanted.lines:
            frequency, rate, energy = look(fit, allowed)
            if energy < _threshold(points):
                break
            model = model.with_line(frequency, rate, named=True)
            fit, band = _fit(record, spectrum, model)
            model = replace(model, frequency=tuple(fit.frequency), rate=tuple(fit.rate))
        for _ in range(MOST_ADDITIONS):
            near_line = np.abs(scipy.fft.fftfreq(points, record.dwell)[:, None] - fit.frequency)
            clear = np.maximum(2 * np.abs(fit.rate) / np.pi, 2 * resolution)
            inside = np.zeros(points, bool)
            inside[band.index] = True
            frequency, rate, energy = look(fit, inside & (near_line > clear).all(axis=-1))
            trials = []
            if energy > _threshold(points):
                trials.append(model.with_line(frequency, rate))
            if not model.background:
                trials.append(replace(model, background=True))
            if not model.offset and inside[0]:
                trials.append(replace(model, offset=True))
            if model.gaussian is None and wanted.lines == 1:
                width = abs(fit.rate[0]) + resolution
                trials.append(replace(model, gaussian=(width / 2) ** 2))
            fits = [(_fit(record, spectrum, trial, band), trial) for trial in trials]
            (best, _), trial = min(fits, key=lambda item: item[0][0].criterion)
            if best.criterion > fit.criterion - ADDITION_COST:
                break
            fit = best
            model = replace(
                trial,
                frequency=tuple(fit.frequency),
                rate=tuple(fit.rate),
                gaussian=trial.gaussian and fit.gaussian,
            )
        return model, fit, band

    model, fit, band = grow(*start)
    notes = []
    if wanted.lines == 1 and wanted.near is None and not _decays(fit, resolution):
        # what does not decay is pick-up, not an FID: look behind it
        frequency, rate, energy = look(fit, allowed)
        if energy > WEAK_ENERGY:
            other = grow(frequency, rate)
            if _decays(other[1], resolution):
                notes.append(
                    f"a steady tone at {fit.frequency[0]:.1f} Hz, stronger than the line, "
                    "is set aside"
                )
                model, fit, band = other
    found = [_from_crowd(fit, place, record, band, model, noise) for place in range(model.named)]
    found.sort(key=lambda line: line.frequency)
    found += [_nothing() for _ in range(wanted.lines - model.named)]
    for line in found:
        line.notes = notes + line.notes
    others = numerics.model_in_time(fit, points, record.dwell, record.start)[1:].sum(axis=0)
    if model.offset:
        others = others + fit.linear[-1]
    return found, others


def _decays(fit: Crowd, resolution: float) -> bool:
    """Whether the first line falls to 1/e within the record."""
    return bool(fit.rate[0] > resolution or fit.gaussian > resolution**2)


def _fit(
    record: Record, spectrum: npt.NDArray[Any], model: _Model, band: Band | None = None
) -> tuple[Crowd, Band]:
    """Fit a model on its band, or on a given one (to compare models on the same points)."""
    points, dwell = spectrum.size, record.dwell
    if band is None:
        rates, places = np.array(model.rate[: model.named]), np.array(model.frequency)
        pieces = [
            numerics.band_around(places[n : n + 1], int(half), points, dwell).index[0]
            for n, half in enumerate(numerics.half_band(rates, points, dwell))
        ]
        band = Band(np.unique(np.concatenate(pieces))[None], points, dwell)
    index = band.index[0]
    columns = []
    if model.background:
        middle = round(model.frequency[0] * points * dwell)
        away = (index - middle + points // 2) % points - points // 2
        columns += [np.ones(index.size), away / (np.abs(away).max() or 1)]
    if model.offset:
        columns.append(points * (index == 0))
    fit = numerics.fit_crowd(
        spectrum[index],
        numerics.shapes_of_record(band, record.start, gaussian=model.gaussian is not None),
        np.array(model.frequency),
        np.array(model.rate),
        resolution=1 / (points * dwell),
        gaussian=model.gaussian,
        columns=np.array(columns, dtype=complex).T if columns else None,
    )
    return fit, band


def _from_crowd(
    fit: Crowd, place: int, record: Record, band: Band, model: _Model, noise: float | None
) -> _Line:
    scale = complex(fit.scale[place])
    amplitude, phase = abs(scale), float(np.angle(scale))
    shape_parameters = 2 * fit.frequency.size + (model.gaussian is not None)
    rows = np.zeros((5, fit.covariance.shape[0]))
    rows[0, 2 * place] = rows[1, 2 * place + 1] = 1
    gaussian = fit.gaussian if place == 0 else 0.0
    if model.gaussian is not None and place == 0:
        rows[2, shape_parameters - 1] = 1
    linear = shape_parameters + 2 * place
    rows[3, linear : linear + 2] = np.cos(phase) / amplitude, np.sin(phase) / amplitude
    rows[4, linear : linear + 2] = -np.sin(phase) / amplitude, np.cos(phase) / amplitude
    points = record.values.shape[1]
    line = _line(
        record,
        frequency=float(fit.frequency[place]),
        rate=float(fit.rate[place]),
        gaussian=gaussian,
        amplitude=amplitude,
        phase=phase,
        covariance=rows @ fit.covariance @ rows.T,
        noise=fit.noise / np.sqrt(points),
        count=band.index.size,
        noise_given=noise,
    )
    if line.shape != "Lorentzian":
        line.notes.append(f"not Lorentzian: {line.shape} chosen")
        line.status.setdefault(
            "t2_star", f"doubtful: the line is {line.shape}; T2* is that of its width alone"
        )
    # what no shape explains: residual near the line, far above that of the rest of the band
    offset = (band.index[0] / (points * record.dwell) - line.frequency + 0.5 / record.dwell) % (
        1 / record.dwell
    ) - 0.5 / record.dwell
    near = np.abs(offset) < max(line.width, 2 / (points * record.dwell))
    power = np.abs(fit.residual) ** 2
    plain = np.median(power) / np.log(2)
    excess = float(power[near].mean() / plain - 1) if plain > 0 and near.any() else 0.0
    height = (
        float(
            np.abs(fit.residual[near]).max()
            / np.abs(
                numerics.shapes_of_record(band, record.start)(
                    np.array([2j * np.pi * line.frequency - np.pi * line.width]), 0.0
                )[0]
            ).max()
            / amplitude
        )
        if near.any()
        else 0.0
    )
    if excess > 5 / np.sqrt(max(near.sum(), 1)) + 1 and height > 0.01:
        text = f"doubtful: no shape tried fits; {100 * height:.0f} % of the height is left over"
        for name in ("linewidth", "linewidth_ppm", "t2_star", "amplitude", "snr"):
            line.status.setdefault(name, text)
        line.notes.append(f"line shape unknown, {100 * height:.0f} % left over")
    return line


def _second_opinion(record: Record, rest: npt.NDArray[Any], lines: list[_Line]) -> None:
    """Fill in T2* from the decay itself, and say where it contradicts the width."""
    rows = np.array([row for row, line in enumerate(lines) if np.isfinite(line.width)], dtype=int)
    if not rows.size:
        return

    def column(name: str) -> npt.NDArray[Any]:
        return np.array([getattr(lines[row], name) for row in rows])

    value, std = numerics.decay_time(
        rest[rows],
        record.start,
        record.dwell,
        column("frequency"),
        column("phase"),
        np.pi * column("width"),
        column("noise"),
    )
    for place, row in enumerate(rows):
        line = lines[row]
        line.decay, line.decay_std = float(value[place]), float(std[place])
        if not np.isfinite(line.decay):
            line.decay_std = np.nan
            line.status["t2_star_decay"] = "missing: no decay within the record"
        elif line.width > 0 and abs(line.decay - 1 / (np.pi * line.width)) > 3 * line.decay_std:
            line.status.setdefault("t2_star_decay", "doubtful: differs from that of the linewidth")
            line.notes.append("decay and linewidth disagree on T2*")


# --- a spectrum of which nothing more is known ---------------------------------------------------


def _measure_standing(
    values: npt.NDArray[Any], frequency: npt.NDArray[Any], wanted: _Wanted
) -> list[_Line]:
    """Lorentzian lines in a spectrum as it stands."""
    spacing = (frequency[-1] - frequency[0]) / (frequency.size - 1)
    allowed = np.ones(frequency.size, bool)
    if wanted.region is not None:
        allowed = (frequency >= wanted.region[0]) & (frequency <= wanted.region[1])
    if not allowed.any():
        raise FidkitError(
            f"measure: region {wanted.region} Hz holds no point of the spectrum, whose points are "
            f"{spacing:.3g} Hz apart; widen it"
        )
    quiet = _quiet_noise(values, frequency, wanted.noise)
    places: list[float] = []
    rates: list[float] = []
    rest = values
    fit: Crowd | None = None
    used = allowed
    for _ in range(wanted.lines):
        height = np.abs(rest) if np.iscomplexobj(rest) else rest
        peak = _peak(height, frequency, allowed, wanted.near if not places else None, quiet)
        if peak is None:
            break
        half = np.flatnonzero(height < height[peak] / 2)
        below, above = half[half < peak], half[half > peak]
        left = below[-1] if below.size else 0
        right = above[0] if above.size else frequency.size - 1
        # a magnitude line is sqrt(3) wider than an absorption line
        width = (right - left) * spacing / (np.sqrt(3) if np.iscomplexobj(rest) else 1)
        places.append(float(frequency[peak]))
        rates.append(float(np.pi * width))
        used = np.zeros(frequency.size, bool)
        for place, rate in zip(places, rates, strict=True):
            reach = max(numerics.BAND_WIDTHS * rate / np.pi, 16 * spacing)
            used |= np.abs(frequency - place) <= reach
        fit = numerics.fit_crowd(
            values[used],
            numerics.shapes_of_spectrum(frequency[used]),
            np.array(places),
            np.array(rates),
            resolution=spacing,
            columns=np.ones((int(used.sum()), 1), complex),
        )
        places, rates = list(fit.frequency), list(fit.rate)
        plain = numerics.shapes_of_spectrum(frequency)(2j * np.pi * fit.frequency - fit.rate, 0.0)[
            0
        ]
        model = plain @ fit.scale
        rest = values - (model if np.iscomplexobj(values) else model.real)
    found = []
    for place in range(len(places)):
        assert fit is not None
        found.append(_standing_line(fit, place, values, frequency, quiet))
    found.sort(key=lambda line: line.frequency)
    return found + [_nothing() for _ in range(wanted.lines - len(found))]


def _standing_line(
    fit: Crowd,
    place: int,
    values: npt.NDArray[Any],
    frequency: npt.NDArray[Any],
    quiet: float,
) -> _Line:
    scale = complex(fit.scale[place])
    amplitude, phase = abs(scale), float(np.angle(scale))
    covariance = fit.covariance
    linear = 2 * fit.frequency.size + 2 * place
    block = covariance[linear : linear + 2, linear : linear + 2]
    along = np.array([np.cos(phase), np.sin(phase)])
    across = np.array([-np.sin(phase), np.cos(phase)])
    width = float(fit.rate[place] / np.pi)
    within = np.abs(frequency - fit.frequency[place]) <= max(
        abs(width), frequency[1] - frequency[0]
    )
    top = np.abs(values[within]) if np.iscomplexobj(values) else values[within]
    line = _Line(
        frequency=float(fit.frequency[place]),
        frequency_std=float(np.sqrt(covariance[2 * place, 2 * place])),
        width=width,
        width_std=float(np.sqrt(covariance[2 * place + 1, 2 * place + 1]) / np.pi),
        amplitude=amplitude,
        amplitude_std=float(np.sqrt(along @ block @ along)),
        phase=phase,
        phase_std=float(np.sqrt(across @ block @ across) / amplitude),
        shape="Lorentzian",
    )
    if top.size and quiet > 0:
        line.snr, line.snr_std = float(top.max() / quiet), 1.0
    as_it_stands = "doubtful: as the spectrum stands, with any apodization"
    line.status = dict.fromkeys(("linewidth", "linewidth_ppm", "t2_star"), as_it_stands)
    line.status["t2_star_decay"] = "missing: there is no decay behind this spectrum"
    line.notes.append("measured as the spectrum stands")
    return line


def _quiet_noise(
    values: npt.NDArray[Any], frequency: npt.NDArray[Any], region: tuple[float, float] | None
) -> float:
    """Standard deviation of the real part where there is no line."""
    real = values.real
    if region is not None:
        inside = (frequency >= region[0]) & (frequency <= region[1])
        if inside.sum() < 8:
            raise FidkitError(
                f"measure: noise must hold at least 8 points of the spectrum; got {region} Hz "
                f"with {int(inside.sum())}; widen it"
            )
        return float(real[inside].std())
    # the quietest of 32 pieces, less the bias of choosing it, would be a guess: the median of all
    # absolute deviations stands against any few lines; 1.4826 turns it into a standard deviation
    return float(1.482602 * np.median(np.abs(real - np.median(real))))


def _peak(
    height: npt.NDArray[Any],
    frequency: npt.NDArray[Any],
    allowed: npt.NDArray[np.bool_],
    near: float | None,
    noise: float,
) -> int | None:
    """The highest allowed point, or the top of the line nearest to `near`; None in noise."""
    if near is not None:
        from scipy.signal import find_peaks

        peaks, _ = find_peaks(height, prominence=8 * noise)
        peaks = peaks[allowed[peaks]]
        if not peaks.size:
            return None
        return int(peaks[np.argmin(np.abs(frequency[peaks] - near))])
    place = int(np.argmax(np.where(allowed, height, -np.inf)))
    return place if height[place] > 5 * noise else None


# --- the result ----------------------------------------------------------------------------------


def _dataset(
    signal: xr.DataArray,
    results: list[list[_Line]],
    lines: int,
    method: str,
    notes: list[str],
) -> xr.Dataset:
    leading = signal.dims[:-1]
    dims = (*leading, "line") if lines > 1 else leading
    shape = (*signal.shape[:-1], lines) if lines > 1 else signal.shape[:-1]
    flat = [line for found in results for line in found]
    carrier = float(signal.attrs["carrier_frequency"])
    nucleus = find_nucleus(str(signal.attrs["nucleus"]))
    units = str(signal.attrs.get("units", "1"))
    if not signals.is_fid(signal):
        units = "1" if units == "s" else units.removesuffix(" s")

    def column(name: str, factor: float = 1.0) -> npt.NDArray[Any]:
        return factor * np.array([getattr(line, name) for line in flat], dtype=float)

    frequency, frequency_std = column("frequency"), column("frequency_std")
    width, width_std = column("width"), column("width_std")
    with np.errstate(divide="ignore", invalid="ignore"):
        t2_star = np.where(width > 0, 1 / (np.pi * width), np.nan)
        t2_star_std = t2_star * width_std / width
    tesla = (carrier + frequency) / nucleus.hertz_per_tesla()
    tesla_std = tesla * np.hypot(
        frequency_std / (carrier + frequency), nucleus.relative_uncertainty
    )
    numbers = {
        "frequency_offset": (frequency, frequency_std),
        "frequency_offset_ppm": (frequency / carrier * 1e6, frequency_std / carrier * 1e6),
        "linewidth": (width, width_std),
        "linewidth_ppm": (width / carrier * 1e6, width_std / carrier * 1e6),
        "t2_star": (t2_star, t2_star_std),
        "t2_star_decay": (column("decay"), column("decay_std")),
        "field": (tesla, tesla_std),
        "amplitude": (column("amplitude"), column("amplitude_std")),
        "phase": (
            np.rad2deg(np.angle(np.exp(1j * column("phase")))),
            np.rad2deg(column("phase_std")),
        ),
        "snr": (column("snr"), column("snr_std")),
    }
    variables: dict[str, Any] = {}
    for name, (unit, long_name) in QUANTITIES.items():
        value, std = numbers[name]
        unit = units if unit is None else unit
        status = [_status(line, name, lines) for line in flat]
        for place, text in enumerate(status):
            if not np.isfinite(value[place]):
                std[place] = np.nan
                if text == "ok":
                    status[place] = "missing: not to be had from this record"
            elif not np.isfinite(std[place]) and text == "ok":
                status[place] = "doubtful: uncertainty not known"
        variables[name] = (
            dims,
            value.reshape(shape),
            {
                "units": unit,
                "long_name": long_name,
                "ancillary_variables": f"{name}_std {name}_status",
            },
        )
        variables[f"{name}_std"] = (
            dims,
            std.reshape(shape),
            {"units": unit, "long_name": f"standard uncertainty: {long_name}"},
        )
        variables[f"{name}_status"] = (
            dims,
            np.array(status, dtype=str).reshape(shape),
            {"long_name": f"status: {long_name}"},
        )
    texts = {
        "lineshape": [line.shape for line in flat],
        "status": ["; ".join(dict.fromkeys(line.notes)) or "ok" for line in flat],
    }
    for name, entries in texts.items():
        variables[name] = (dims, np.array(entries, dtype=str).reshape(shape), {"long_name": name})
    variables["snr"][2]["definition"] = SNR_DEFINITION
    variables["field"][2]["assumption"] = FIELD_ASSUMPTION
    coords = {
        name: coordinate
        for name, coordinate in signal.coords.items()
        if signal.dims[-1] not in coordinate.dims
    }
    kept = ("carrier_frequency", "nucleus", "sample", "coil", "source", "history")
    return xr.Dataset(
        variables,
        coords=coords,
        attrs={
            **{name: signal.attrs[name] for name in kept if name in signal.attrs},
            "method": method,
            "notes": "\n".join(notes),
        },
    )


def _status(line: _Line, name: str, lines: int) -> str:
    if name == "t2_star_decay" and lines > 1:
        return line.status.get(name, "missing: the decay is shared by several lines")
    return line.status.get(name, "ok")
