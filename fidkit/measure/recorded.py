"""Lines in records: many at once where one plain line will do, else one by one with care."""

from __future__ import annotations

from typing import Any

import numpy as np
import numpy.typing as npt
import scipy.fft

from fidkit.measure.careful import allowed_points, constant_offset, noise_threshold, with_care
from fidkit.measure.found import Line, Wanted, line_of, nothing
from fidkit.measure.record import Record
from fidkit.numerics import lines as numerics
from fidkit.numerics.lines import ADDITION_COST
from fidkit.params import FidkitError

__all__ = ["measure_block"]


def measure_block(record: Record, wanted: Wanted) -> list[list[Line]]:
    """All records of a block: one plain line each where that will do, else with care."""
    values, dwell = record.values, record.dwell
    records, points = values.shape
    spectrum = scipy.fft.fft(values, axis=-1)
    # a constant offset is no line; where it stands out it is kept out of the search
    level = constant_offset(values)
    clean = values - level[:, None]
    allowed = allowed_points(points, dwell, wanted.region)
    found = numerics.search(clean, dwell, allowed=allowed)
    if wanted.near is not None:
        found = _nearest(clean, dwell, wanted.near, allowed, found)
    noise = None if wanted.noise is None else _noise_in(record, wanted.noise)
    results: list[list[Line]] = [[] for _ in range(records)]
    rest = values.copy()

    seen = found.energy >= noise_threshold(points)
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
            results[row] = [nothing() for _ in range(wanted.lines)]
        elif not results[row]:
            results[row], others = with_care(
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


def _nearest(
    values: npt.NDArray[Any],
    dwell: float,
    near: float,
    allowed: npt.NDArray[np.bool_] | None,
    strongest: numerics.Found,
) -> numerics.Found:
    """Start values of the line nearest to a frequency, record by record."""
    from scipy.signal import find_peaks, peak_widths

    points = values.shape[1]
    axis = scipy.fft.fftshift(scipy.fft.fftfreq(points, dwell))
    frequency, rate, energy = (
        np.array(part) for part in (strongest.frequency, strongest.rate, strongest.energy)
    )
    for row, one in enumerate(values):
        widened = max(strongest.rate[row], 1 / (points * dwell))
        window = np.exp(-widened * dwell * np.arange(points))
        height = np.abs(scipy.fft.fftshift(scipy.fft.fft(one * window)))
        noise = np.median(np.abs(np.diff(height))) / 0.67
        peaks, _ = find_peaks(height, prominence=8 * noise)
        if allowed is not None:
            peaks = peaks[scipy.fft.fftshift(allowed)[peaks]]
        if not peaks.size:
            energy[row] = 0.0
            continue
        place = peaks[np.argmin(np.abs(axis[peaks] - near))]
        # the magnitude of a line is sqrt(3) wider than its absorption; the window widens it too
        width = peak_widths(height, [place])[0][0] / (points * dwell) / np.sqrt(3)
        frequency[row] = axis[place]
        rate[row] = max(np.pi * width - widened, 1 / (points * dwell))
        around = scipy.fft.ifftshift(np.arange(points) == place)
        energy[row] = numerics.search(one[None], dwell, allowed=around).energy[0]
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


def _from_single(
    fit: numerics.SingleFit, place: int, record: Record, count: int, noise: float | None
) -> Line:
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
    return line_of(
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


def _second_opinion(record: Record, rest: npt.NDArray[Any], lines: list[Line]) -> None:
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
