"""A record with more in it than one plain line: the model grows, addition by addition."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, replace
from typing import Any

import numpy as np
import numpy.typing as npt
import scipy.fft

from fidkit.measure.found import WEAK_ENERGY, Line, Wanted, line_of, nothing
from fidkit.measure.record import Record
from fidkit.numerics import lines as numerics
from fidkit.numerics.lines import ADDITION_COST, GAUSSIAN_WIDTH, Band, Crowd
from fidkit.params import FidkitError

__all__ = ["allowed_points", "constant_offset", "noise_threshold", "with_care"]

#: How far a model grows: more than this is no line with something beside it any more.
MOST_ADDITIONS = 8
#: Harmonics of the mains that may be stronger than the line.
MOST_TONES = 6
#: A line this much weaker than a steady tone is no reason to call the tone pick-up.
LEAST_BESIDE_TONES = 0.1


def noise_threshold(points: int) -> float:
    """Energy that the largest of all points of noise alone exceeds once in a thousand records."""
    return float(np.log(6 * points) + 7)


def constant_offset(values: npt.NDArray[Any]) -> npt.NDArray[Any]:
    """The constant offset of each record, from its last tenth; 0 where it does not stand out."""
    tail = values[:, -max(values.shape[1] // 10, 4) :]
    mean = tail.mean(axis=-1)
    # differences of neighbours show the noise even where a slow signal is left
    steps = np.abs(np.diff(tail, axis=-1))
    noise = steps.std(axis=-1) + steps.mean(axis=-1)
    return np.where(np.abs(mean) > 5 * noise / np.sqrt(tail.shape[1]), mean, 0)


def allowed_points(
    points: int, dwell: float, region: tuple[float, float] | None
) -> npt.NDArray[np.bool_] | None:
    """Which transform points lie in a region (Hz), in the order of `scipy.fft.fft`; None for all."""
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
    starts: list[tuple[float, float]],
    more: list[tuple[float, float]],
    neighbours: list[tuple[float, float]],
    offset: bool,
    noise: tuple[float, int] | None,
) -> tuple[list[Line], npt.NDArray[Any]]:
    """Measure one record with more in it than one plain line.

    Parameters
    ----------
    record : Record
        Where it comes from.
    values : complex array, shape (points,)
        The record itself.
    wanted : Wanted
        Which lines are asked for.
    starts : list of (float, float)
        Frequency (Hz) and rate (1/s) of the line to start from; of several the better one is kept.
    more : list of (float, float)
        The same of further lines that may be asked for, the most wanted first.
    neighbours : list of (float, float)
        The same of lines that are known and not asked for.
    offset : bool
        Whether a constant offset stands out.
    noise : (float, int), optional
        Noise from a region that the user named.

    Returns
    -------
    lines : list of Line
        As many as are asked for.
    rest : complex array, shape (points,)
        The record less everything that is not the line.
    """
    points, dwell, start = values.size, record.dwell, record.start
    resolution = 1 / (points * dwell)

    def modelled(fit: Crowd) -> npt.NDArray[Any]:
        return numerics.model_in_time(fit, points, dwell, start)

    def look(
        values: npt.NDArray[Any], fit: Crowd, among: npt.NDArray[np.bool_] | None
    ) -> tuple[float, float, float]:
        rest = (values - modelled(fit).sum(axis=0))[None]
        found = numerics.search(rest - constant_offset(rest), dwell, allowed=among)
        return float(found.frequency[0]), float(found.rate[0]), float(found.energy[0])

    def grow(values: npt.NDArray[Any], first: tuple[float, float]) -> tuple[_Model, Crowd, Band]:
        spectrum = scipy.fft.fft(values)
        named = [first]
        if wanted.lines > 1 and wanted.chosen:
            named += more[: wanted.lines - 1]
        elif wanted.lines > 1:
            # all peaks at once: one by one, the first would widen until it covers the others
            peaks = _peaks(values - constant_offset(values[None]), dwell, wanted.lines)
            named = [(peak, 2 * resolution) for peak in peaks] if len(peaks) > 1 else named
        frequency, rate = zip(*named, strict=True)
        model = _Model(frequency, rate, named=len(named), offset=offset)
        band = _band(model, points, dwell)
        inside = np.zeros(points, bool)
        inside[band.index] = True
        for line in more[len(named) - 1 :] + neighbours:
            if inside[round(line[0] * points * dwell) % points]:
                model = model.with_line(*line)
        fit = _fit(record, spectrum, model, band)
        for _ in range(3):
            # a start that is far off is caught at the bound of its reach
            reach = numerics.reach_of(model.rate[0], resolution)
            if wanted.chosen or abs(fit.frequency[0] - model.frequency[0]) < 0.99 * reach:
                break
            model = replace(model, frequency=tuple(fit.frequency), rate=tuple(fit.rate))
            band = _band(model, points, dwell)
            fit = _fit(record, spectrum, model, band)
        while model.named < wanted.lines and not wanted.chosen:
            one, decay, energy = look(values, fit, None)
            if energy < WEAK_ENERGY:
                break
            model = replace(model, frequency=tuple(fit.frequency), rate=tuple(fit.rate))
            model = model.with_line(one, decay, named=True)
            band = _band(model, points, dwell)
            fit = _fit(record, spectrum, model, band)
        inside = np.zeros(points, bool)
        inside[band.index] = True
        for _ in range(MOST_ADDITIONS):
            model = replace(model, frequency=tuple(fit.frequency), rate=tuple(fit.rate))
            if model.gaussian is not None:
                model = replace(model, gaussian=fit.gaussian)
            near_line = np.abs(scipy.fft.fftfreq(points, dwell)[:, None] - fit.frequency)
            clear = np.maximum(2 * np.abs(fit.rate) / np.pi, 2 * resolution)
            one, decay, energy = look(values, fit, inside & (near_line > clear).all(axis=-1))
            trials = []
            if energy > noise_threshold(points):
                trials.append(model.with_line(one, decay))
            if not model.background:
                trials.append(replace(model, background=True))
            if not model.offset and inside[0]:
                trials.append(replace(model, offset=True))
            if model.gaussian is None and wanted.lines == 1:
                width = abs(fit.rate[0]) + resolution
                trials.append(replace(model, gaussian=(width / 2) ** 2))
                trials.append(replace(model, gaussian=width**2, only_gaussian=True))
            fits = [(_fit(record, spectrum, trial, band), trial) for trial in trials]
            best, trial = min(fits, key=lambda item: item[0].criterion, default=(fit, model))
            if best.criterion > fit.criterion - ADDITION_COST:
                break
            fit, model = best, trial
        return model, fit, band

    def left_over(grown: tuple[_Model, Crowd, Band]) -> float:
        rest = values - modelled(grown[1]).sum(axis=0)
        return float(np.linalg.norm(rest - rest.mean()))

    model, fit, band = min((grow(values, first) for first in starts), key=left_over)
    notes: list[str] = []
    tones = np.zeros_like(values)
    if wanted.lines == 1 and not wanted.chosen and not _decays(fit, resolution):
        found = _behind_tones(values, fit, dwell, grow, modelled)
        if found is not None:
            (model, fit, band), tones, note = found
            notes.append(note)
    lines = [_from_crowd(fit, place, record, band, model, noise) for place in range(model.named)]
    members = [0]
    if wanted.lines == 1:
        members = _overlapping(fit, resolution, 0)
        if len(members) > 1 and lines[0].shape:
            _make_composite(lines[0], fit, members, record)
    for place in range(model.named if wanted.lines > 1 else 0):
        unnamed = [n for n in _overlapping(fit, resolution, place) if n >= model.named]
        if unnamed:
            where = ", ".join(f"{fit.frequency[n]:.1f}" for n in unnamed)
            text = f"overlaps with a further line at {where} Hz; ask for more lines"
            lines[place].notes.append(text)
            for name in ("frequency_offset", "linewidth", "t2_star", "amplitude", "phase"):
                lines[place].status.setdefault(name, f"doubtful: {text}")
    lines.sort(key=lambda line: (np.isnan(line.frequency), line.frequency))
    lines += [nothing() for _ in range(wanted.lines - model.named)]
    for line in lines:
        line.notes = notes + line.notes
    rest = values - tones - np.delete(modelled(fit), members, axis=0).sum(axis=0)
    if model.offset:
        rest = rest - fit.linear[-1]
    return lines, rest


def _behind_tones(
    values: npt.NDArray[Any],
    fit: Crowd,
    dwell: float,
    grow: Callable[..., tuple[_Model, Crowd, Band]],
    modelled: Callable[[Crowd], npt.NDArray[Any]],
) -> tuple[tuple[_Model, Crowd, Band], npt.NDArray[Any], str] | None:
    """Look for an FID behind what does not decay: that is pick-up, if there is a line besides."""
    resolution = 1 / (values.size * dwell)
    tones: list[float] = []
    rest = values
    strongest = abs(fit.scale[0])
    for _ in range(MOST_TONES):
        if any(abs(fit.frequency[0] - tone) < resolution for tone in tones):
            return None  # what was taken off comes back: no tone then
        tones.append(float(fit.frequency[0]))
        # only the tone goes: what else was fitted beside it may be the line
        rest = rest - modelled(fit)[0]
        found = numerics.search((rest - constant_offset(rest[None]))[None], dwell)
        if found.energy[0] < WEAK_ENERGY:
            return None
        grown = grow(rest, (float(found.frequency[0]), float(found.rate[0])))
        fit = grown[1]
        if _decays(fit, resolution):
            if abs(fit.scale[0]) < LEAST_BESIDE_TONES * strongest:
                return None
            plural = "s" if len(tones) > 1 else ""
            where = ", ".join(f"{tone:.1f}" for tone in tones)
            note = f"steady tone{plural} at {where} Hz, stronger than the line, set aside"
            return grown, values - rest, note
    return None


def _peaks(values: npt.NDArray[Any], dwell: float, most: int) -> tuple[float, ...]:
    """Frequencies of the highest peaks that stand clear of their surroundings."""
    from scipy.signal import find_peaks

    points = values.size
    window = np.exp(-2 / points * np.arange(points))
    height = np.abs(scipy.fft.fftshift(scipy.fft.fft(values * window, 2 * points)))
    # neighbouring points of noise alone differ by 0.67 of its spread half of the time
    noise = np.median(np.abs(height[2:] - height[:-2])) / 0.67
    peaks, _ = find_peaks(height, prominence=8 * noise)
    peaks = peaks[np.argsort(height[peaks])[::-1][:most]]
    return tuple(scipy.fft.fftshift(scipy.fft.fftfreq(2 * points, dwell))[peaks].tolist())


def _overlapping(fit: Crowd, resolution: float, first: int) -> list[int]:
    """A line and all that overlap it, directly or through each other; no steady tones."""
    width = fit.rate / np.pi + GAUSSIAN_WIDTH * np.sqrt(fit.gaussian) * (
        np.arange(fit.rate.size) == 0
    )
    decays = np.array([_decays(fit, resolution, place) for place in range(fit.rate.size)])
    members = [first]
    for member in members:
        apart = np.abs(fit.frequency - fit.frequency[member])
        joined = (apart < width + width[member]) & decays
        members += [int(other) for other in np.flatnonzero(joined) if other not in members]
    return sorted(members)


def _make_composite(line: Line, fit: Crowd, members: list[int], record: Record) -> None:
    """Take the numbers of a line from the whole shape of which it is a part."""
    values, covariance = numerics.composite(fit, members)
    std = np.sqrt(np.diag(covariance))
    time = record.start + record.dwell * np.arange(record.values.shape[1])
    parts = numerics.model_in_time(fit, time.size, record.dwell, record.start)
    turn = record.weight * np.exp(-2j * np.pi * values[0] * time - 1j * values[3])
    alone = record.weight * np.exp(-2j * np.pi * line.frequency * time - 1j * line.phase)
    # height of the whole over that of its first part; the noise is the same
    higher = float(abs((parts[members] @ turn).sum()) / abs(parts[0] @ alone))
    line.snr, line.snr_std = higher * line.snr, higher * line.snr_std
    line.frequency, line.width, line.amplitude, line.phase = (float(part) for part in values)
    line.frequency_std, line.width_std, line.amplitude_std, line.phase_std = (
        float(part) for part in std
    )
    line.shape = f"composite of {len(members)}"
    line.notes.append(f"not Lorentzian: {len(members)} overlapping lines measured as one shape")
    text = f"doubtful: shape of {len(members)} parts; the uncertainty leaves out their choice"
    names = ("frequency_offset", "frequency_offset_ppm", "linewidth", "linewidth_ppm")
    for name in (*names, "amplitude", "phase", "snr"):
        line.status.setdefault(name, text)
    line.status.setdefault(
        "t2_star", "doubtful: the line is no Lorentzian; T2* is that of its width alone"
    )


def _decays(fit: Crowd, resolution: float, place: int = 0) -> bool:
    """Whether a line surely decays: a steady tone does so by no more than its noise."""
    variance = fit.covariance[2 * place + 1, 2 * place + 1]
    surely = fit.rate[place] > max(3 * np.sqrt(variance), 0.05 * resolution)
    return bool(surely or (place == 0 and fit.gaussian > resolution**2))


def _band(model: _Model, points: int, dwell: float) -> Band:
    """The transform points around all lines that are asked for."""
    rates = np.array(model.rate[: model.named])
    pieces = [
        numerics.band_around(np.array([place]), int(half), points, dwell).index[0]
        for place, half in zip(
            model.frequency[: model.named],
            numerics.half_band(rates, points, dwell),
            strict=True,
        )
    ]
    return Band(np.unique(np.concatenate(pieces))[None], points, dwell)


def _fit(record: Record, spectrum: npt.NDArray[Any], model: _Model, band: Band) -> Crowd:
    """Fit a model on a band; models are compared on the same one."""
    points, dwell = spectrum.size, record.dwell
    index = band.index[0]
    columns = []
    if model.background:
        middle = round(model.frequency[0] * points * dwell)
        away = (index - middle + points // 2) % points - points // 2
        columns += [np.ones(index.size), away / (np.abs(away).max() or 1)]
    if model.offset:
        columns.append(points * (index == 0))
    return numerics.fit_crowd(
        spectrum[index],
        numerics.shapes_of_record(band, record.start, gaussian=model.gaussian is not None),
        np.array(model.frequency),
        np.array(model.rate),
        resolution=1 / (points * dwell),
        gaussian=model.gaussian,
        only_gaussian=model.only_gaussian,
        columns=np.array(columns, dtype=complex).T if columns else None,
    )


def _from_crowd(
    fit: Crowd,
    place: int,
    record: Record,
    band: Band,
    model: _Model,
    noise: tuple[float, int] | None,
) -> Line:
    """The numbers of one line of a joint fit, and what speaks against them."""
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
    if not line.shape:
        return line
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
