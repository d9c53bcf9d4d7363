"""A record with more in it than one plain line: the model grows, addition by addition."""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import Any

import numpy as np
import numpy.typing as npt
import scipy.fft

from fidkit.measure.found import WEAK_ENERGY, Line, Wanted, line_of, nothing
from fidkit.measure.record import Record
from fidkit.numerics import lines as numerics
from fidkit.numerics.lines import ADDITION_COST, Band, Crowd
from fidkit.params import FidkitError

__all__ = ["allowed_points", "constant_offset", "noise_threshold", "with_care"]

MOST_ADDITIONS = 8
MOST_TONES = 6


def noise_threshold(points: int) -> float:
    """Energy that the largest of all points of noise alone exceeds once in a thousand records."""
    return float(np.log(6 * points) + 7)


def constant_offset(values: npt.NDArray[Any]) -> npt.NDArray[Any]:
    """The constant offset of each record, from its last tenth; 0 where it does not stand out."""
    tail = values[:, -max(values.shape[1] // 10, 4) :]
    mean = tail.mean(axis=-1)
    # differences of neighbours: noise, whatever slow signal is left
    noise = np.abs(np.diff(tail, axis=-1)).std(axis=-1) + np.abs(np.diff(tail, axis=-1)).mean(
        axis=-1
    )
    return np.where(np.abs(mean) > 5 * noise / np.sqrt(tail.shape[1]), mean, 0)


def allowed_points(
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


@dataclass(frozen=True)
class _Model:
    """What a careful fit contains; the first `named` lines are those asked for."""

    frequency: tuple[float, ...]
    rate: tuple[float, ...]
    named: int
    gaussian: float | None = None
    only_gaussian: bool = False
    background: bool = False
    offset: bool = False

    def with_line(self, frequency: float, rate: float, *, named: bool = False) -> _Model:
        return replace(
            self,
            frequency=(*self.frequency, frequency),
            rate=(*self.rate, rate),
            named=self.named + named,
        )


def with_care(
    record: Record,
    values: npt.NDArray[Any],
    wanted: Wanted,
    start: tuple[float, float],
    offset: bool,
    noise: float | None,
) -> tuple[list[Line], npt.NDArray[Any]]:
    """Measure a record with more in it than one plain line.

    Returns the lines, and what of the record is not the line (for the decay's sake).
    """
    original = values
    spectrum = scipy.fft.fft(values)
    points, resolution = values.size, 1 / (values.size * record.dwell)
    allowed = allowed_points(points, record.dwell, wanted.region)

    def look(fit: Crowd, among: npt.NDArray[np.bool_] | None) -> tuple[float, float, float]:
        rest = values - numerics.model_in_time(fit, points, record.dwell, record.start).sum(axis=0)
        found = numerics.search(
            rest[None] - constant_offset(rest[None]), record.dwell, allowed=among
        )
        return float(found.frequency[0]), float(found.rate[0]), float(found.energy[0])

    def grow(frequency: float, rate: float) -> tuple[_Model, Crowd, Band]:
        model = _Model((frequency,), (rate,), named=1, offset=offset)
        if wanted.lines > 1:
            # all peaks at once: one by one, the first would widen until it covers the others
            peaks = _peaks(values, record.dwell, wanted.lines, allowed)
            if len(peaks) > 1:
                rates = (2 * resolution,) * len(peaks)
                model = replace(model, frequency=peaks, rate=rates, named=len(peaks))
        fit, band = _fit(record, spectrum, model)
        while model.named < wanted.lines:
            frequency, rate, energy = look(fit, allowed)
            if energy < WEAK_ENERGY:
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
            if energy > noise_threshold(points):
                trials.append(model.with_line(frequency, rate))
            if not model.background:
                trials.append(replace(model, background=True))
            if not model.offset and inside[0]:
                trials.append(replace(model, offset=True))
            if model.gaussian is None and wanted.lines == 1:
                width = abs(fit.rate[0]) + resolution
                trials.append(replace(model, gaussian=(width / 2) ** 2))
                trials.append(replace(model, gaussian=width**2, only_gaussian=True))
            if not trials:
                break
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
    notes: list[str] = []
    if wanted.lines == 1 and wanted.near is None and not _decays(fit, resolution):
        # what does not decay is pick-up, not an FID: look behind it
        kept, whole = (model, fit, band), values
        tones = []
        for _ in range(MOST_TONES):
            tones.append(f"{fit.frequency[0]:.1f}")
            values = values - numerics.model_in_time(fit, points, record.dwell, record.start)[0]
            spectrum = scipy.fft.fft(values)
            found = numerics.search(
                values[None] - constant_offset(values[None]), record.dwell, allowed=allowed
            )
            if found.energy[0] < WEAK_ENERGY:
                break
            model, fit, band = grow(float(found.frequency[0]), float(found.rate[0]))
            if _decays(fit, resolution):
                plural = "s" if len(tones) > 1 else ""
                notes.append(
                    f"steady tone{plural} at {', '.join(tones)} Hz, stronger than the line, set aside"
                )
                break
        if not notes:
            (model, fit, band), values = kept, whole
    tone = original - values
    lines = [_from_crowd(fit, place, record, band, model, noise) for place in range(model.named)]
    members = [0]
    if wanted.lines == 1:
        members = _overlapping(fit, resolution, 0)
        if len(members) > 1:
            _make_composite(lines[0], fit, members)
    for place in range(model.named if wanted.lines > 1 else 0):
        others = [n for n in _overlapping(fit, resolution, place) if n >= model.named]
        if others:
            where = ", ".join(f"{fit.frequency[n]:.1f}" for n in others)
            text = f"overlaps with a further line at {where} Hz; ask for more lines"
            lines[place].notes.append(text)
            for name in ("frequency_offset", "linewidth", "t2_star", "amplitude", "phase"):
                lines[place].status.setdefault(name, f"doubtful: {text}")
    lines.sort(key=lambda line: line.frequency)
    lines += [nothing() for _ in range(wanted.lines - model.named)]
    for line in lines:
        line.notes = notes + line.notes
    modelled = numerics.model_in_time(fit, points, record.dwell, record.start)
    others = np.delete(modelled, members, axis=0).sum(axis=0)
    if model.offset:
        others = others + fit.linear[-1]
    return lines, others + tone


def _peaks(
    values: npt.NDArray[Any], dwell: float, most: int, allowed: npt.NDArray[np.bool_] | None
) -> tuple[float, ...]:
    """Frequencies of the highest peaks that stand clear of their surroundings."""
    from scipy.signal import find_peaks

    points = values.size
    window = np.exp(-2 / points * np.arange(points))
    height = np.abs(scipy.fft.fftshift(scipy.fft.fft(values * window, 2 * points)))
    # neighbouring points of noise alone differ by 0.67 of its spread half of the time
    noise = np.median(np.abs(height[2:] - height[:-2])) / 0.67
    peaks, _ = find_peaks(height, prominence=8 * noise)
    if allowed is not None:
        peaks = peaks[scipy.fft.fftshift(np.repeat(allowed, 2))[peaks]]
    peaks = peaks[np.argsort(height[peaks])[::-1][:most]]
    return tuple(scipy.fft.fftshift(scipy.fft.fftfreq(2 * points, dwell))[peaks].tolist())


def _overlapping(fit: Crowd, resolution: float, first: int) -> list[int]:
    """A line and all that overlap it, directly or through each other; no steady tones."""
    width = fit.rate / np.pi + 0.53 * np.sqrt(fit.gaussian) * (np.arange(fit.rate.size) == 0)
    decays = np.array([_decays(fit, resolution, place) for place in range(fit.rate.size)])
    members = [first]
    for member in members:
        apart = np.abs(fit.frequency - fit.frequency[member])
        joined = (apart < width + width[member]) & decays
        members += [int(other) for other in np.flatnonzero(joined) if other not in members]
    return sorted(members)


def _make_composite(line: Line, fit: Crowd, members: list[int]) -> None:
    """Take the numbers of a line from the whole shape of which it is a part."""
    values, covariance = numerics.composite(fit, members)
    std = np.sqrt(np.diag(covariance))
    # the top of the whole over that of its strongest part: noise is the same
    line.frequency, line.width, line.amplitude, line.phase = (float(part) for part in values)
    line.frequency_std, line.width_std, line.amplitude_std, line.phase_std = (
        float(part) for part in std
    )
    line.shape = f"composite of {len(members)}"
    line.notes.append(f"not Lorentzian: {len(members)} overlapping lines measured as one shape")
    text = f"doubtful: shape of {len(members)} parts; the uncertainty leaves out their choice"
    for name in ("frequency_offset", "frequency_offset_ppm", "linewidth", "linewidth_ppm"):
        line.status.setdefault(name, text)
    line.status.setdefault(
        "t2_star", "doubtful: the line is no Lorentzian; T2* is that of its width alone"
    )


def _decays(fit: Crowd, resolution: float, place: int = 0) -> bool:
    """Whether a line surely decays: a steady tone does so by no more than its noise."""
    variance = fit.covariance[2 * place + 1, 2 * place + 1]
    surely = fit.rate[place] > max(3 * np.sqrt(variance), 0.05 * resolution)
    return bool(surely or (place == 0 and fit.gaussian > resolution**2))


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
        only_gaussian=model.only_gaussian,
        columns=np.array(columns, dtype=complex).T if columns else None,
    )
    return fit, band


def _from_crowd(
    fit: Crowd, place: int, record: Record, band: Band, model: _Model, noise: float | None
) -> Line:
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
    line = line_of(
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
