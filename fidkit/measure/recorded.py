"""Lines in records: many at once where one plain line will do, else one by one with care."""

from __future__ import annotations

from typing import Any

import numpy as np
import numpy.typing as npt
import scipy.fft

from fidkit.measure.careful import allowed_points, constant_offset, noise_threshold, with_care
from fidkit.measure.found import WEAK_ENERGY, Line, Wanted, line_of, nothing
from fidkit.measure.record import Record
from fidkit.numerics import lines as numerics
from fidkit.numerics.lines import ADDITION_COST
from fidkit.params import FidkitError

__all__ = ["measure_block"]

Starts = list[tuple[float, float]]
"""Frequency (Hz) and rate (1/s) of lines."""

#: A constant offset is taken into the fit where it would otherwise pull a line near the carrier:
#: twice the log-likelihood that chance gives in one of twenty records.
OFFSET_EVIDENCE = 6.0

#: Lines taken off a record at most, to find the one that is asked for.
MOST_STRIPPED = 16


def measure_block(record: Record, wanted: Wanted) -> list[list[Line]]:
    """All records of a block: one plain line each where that will do, else with care."""
    values, dwell = record.values, record.dwell
    records, points = values.shape
    # a constant offset is no line; where it stands out it is kept out of the search
    level = constant_offset(values)
    clean = values - level[:, None]
    spectrum = scipy.fft.fft(clean, axis=-1)
    noise = None if wanted.noise is None else _noise_in(record, wanted.noise)
    results: list[list[Line]] = [[] for _ in range(records)]
    rest = clean.copy()

    more: list[Starts] = [[] for _ in range(records)]
    neighbours: list[Starts] = [[] for _ in range(records)]
    if wanted.chosen:
        found, more, neighbours = _chosen(clean, dwell, wanted)
    else:
        found = numerics.search(clean, dwell)
    seen = found.energy >= noise_threshold(points)
    offset = np.zeros(records, bool)
    half = numerics.half_band(found.rate, points, dwell)
    # an offset sits in a single point of the transform, at the carrier: no harm elsewhere
    at_carrier = np.abs(found.frequency) < 5 * (found.rate + 1 / (points * dwell))
    plain = seen & (wanted.lines == 1) & ~((level != 0) & at_carrier)
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
        resolution = 1 / (points * dwell)
        moved = np.abs(fit.kappa.imag / (2 * np.pi) - found.frequency[rows])
        enough = (
            fit.converged
            & (fit.gaussian < limit)
            & (fit.background < limit + np.log(2 * count))
            & (fit.other < 2 * np.log(count) + 20)
            & (-fit.kappa.real > resolution)
            & (moved < found.rate[rows] + 2 * resolution)
            & (fit.offset < OFFSET_EVIDENCE)
        )
        offset[rows] = fit.offset >= OFFSET_EVIDENCE
        for place in np.flatnonzero(enough):
            row = rows[place]
            results[row] = [_from_single(fit, int(place), record, count, _noise_of(noise, row))]
    for row in range(records):
        if not seen[row]:
            results[row] = [nothing() for _ in range(wanted.lines)]
        elif not results[row]:
            starts = [(float(found.frequency[row]), float(found.rate[row]))]
            if level[row] and not wanted.chosen:
                # what was taken for an offset may be a slow line near the carrier
                raw = numerics.search(values[row : row + 1], dwell)
                starts.append((float(raw.frequency[0]), float(raw.rate[0])))
            results[row], rest[row] = with_care(
                record,
                values[row],
                wanted,
                starts,
                more[row],
                neighbours[row],
                bool(level[row]) or bool(offset[row]),
                _noise_of(noise, row),
            )
    for line in (line for lines in results for line in lines):
        if wanted.near is not None and abs(line.frequency - wanted.near) > 0.05 / dwell:
            line.notes.append("the nearest line is far from the frequency asked for")
    if wanted.lines == 1:
        _second_opinion(record, rest, [result[0] for result in results])
    return results


def _noise_of(noise: tuple[npt.NDArray[Any], int] | None, row: int) -> tuple[float, int] | None:
    return None if noise is None else (float(noise[0][row]), noise[1])


def _chosen(
    values: npt.NDArray[Any], dwell: float, wanted: Wanted
) -> tuple[numerics.Found, list[Starts], list[Starts]]:
    """Start values of the line asked for, of further ones, and of those not asked for, by record.

    A strong line's foot would be taken for the line asked for, so lines are taken off first.
    """
    allowed = allowed_points(values.shape[1], dwell, wanted.region)
    result = np.zeros((3, values.shape[0]))
    more: list[Starts] = []
    neighbours: list[Starts] = []
    least = noise_threshold(values.shape[1])
    for row, one in enumerate(values):
        lines, rest = numerics.strip(one, dwell, least, MOST_STRIPPED)
        lines = _without_remains(lines)
        within = np.ones(lines.frequency.size, bool)
        if wanted.region is not None:
            within = (lines.frequency >= wanted.region[0]) & (lines.frequency <= wanted.region[1])
        order = np.flatnonzero(within)
        if wanted.near is not None:
            order = order[np.argsort(np.abs(lines.frequency[order] - wanted.near))]
        table = np.array([lines.frequency, lines.rate, lines.energy])
        if order.size:
            result[:, row] = table[:, order[0]]
        elif wanted.region is not None:
            left = numerics.search(rest[None], dwell, allowed=allowed)
            result[:, row] = left.frequency[0], left.rate[0], left.energy[0]
        more.append([(float(f), float(r)) for f, r in table[:2, order[1:]].T])
        neighbours.append([(float(f), float(r)) for f, r in table[:2, ~within].T])
    return numerics.Found(*result), more, neighbours


def _without_remains(lines: numerics.Found) -> numerics.Found:
    """Only lines, not what the first rough fits left of stronger ones."""
    kept: list[int] = []
    for place in range(lines.frequency.size):
        apart = np.abs(lines.frequency[kept] - lines.frequency[place])
        width = 3 * (lines.rate[kept] + lines.rate[place]) / np.pi
        if not ((apart < width) & (lines.energy[place] < 0.01 * lines.energy[kept])).any():
            kept.append(place)
    return numerics.Found(lines.frequency[kept], lines.rate[kept], lines.energy[kept])


def _noise_in(record: Record, region: tuple[float, float]) -> tuple[npt.NDArray[Any], int]:
    """Noise of each part of a raw point, from a region of the weighted transform, and its points."""
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
    # a window makes neighbours alike: as if there were fewer points
    alike = (record.weight**2).sum() ** 2 / (record.weight**4).sum() / points
    count = max(int(inside.sum() * alike), 2)
    return np.asarray(spread / np.sqrt((record.weight**2).sum())), count


def _from_single(
    fit: numerics.SingleFit,
    place: int,
    record: Record,
    count: int,
    noise: tuple[float, int] | None,
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

    frequency, phase, width = column("frequency"), column("phase"), column("width")
    noise = column("noise")
    value, std = numerics.decay_time(
        _quiet_outside(record, rest[rows], frequency, width, noise),
        record.start,
        record.dwell,
        frequency,
        phase,
        np.pi * width,
        noise,
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


def _quiet_outside(
    record: Record,
    rest: npt.NDArray[Any],
    frequency: npt.NDArray[Any],
    width: npt.NDArray[Any],
    noise: npt.NDArray[Any],
) -> npt.NDArray[Any]:
    """The records without the lines that stand out far from the one measured: they would beat."""
    points, dwell = rest.shape[1], record.dwell
    height = np.abs(scipy.fft.fft(rest, axis=-1))
    apart = np.abs(scipy.fft.fftfreq(points, dwell) - frequency[:, None])
    apart = np.minimum(apart, 1 / dwell - apart)
    half = numerics.half_band(np.pi * width, points, dwell) / (points * dwell)
    outside = apart > half[:, None]
    # neither the foot of the line itself nor noise gets higher than this out there
    top = np.abs(rest[:, : max(4, points // 256)]).max(axis=-1)
    highest = top / (np.pi * half * dwell) + np.sqrt(2 * (np.log(points) + 10) * points) * noise
    loud = (outside & (height > highest[:, None])).any(axis=-1)
    if loud.any():
        rest = rest.copy()
    time = dwell * np.arange(points)
    for row in np.flatnonzero(loud):
        # without the line itself, whose foot would be fitted
        turn = np.exp((2j * np.pi * frequency[row] - np.pi * width[row]) * time)
        own = turn * (np.vdot(turn, rest[row]) / np.vdot(turn, turn))
        _, left = numerics.strip(
            rest[row] - own, dwell, 10 * WEAK_ENERGY, MOST_STRIPPED, allowed=outside[row]
        )
        rest[row] = left + own
    return rest
