"""Lines in a spectrum of which nothing more is known."""

from __future__ import annotations

from typing import Any

import numpy as np
import numpy.typing as npt

from fidkit.measure.found import Line, Wanted, nothing
from fidkit.numerics import lines as numerics
from fidkit.numerics.lines import Crowd
from fidkit.params import FidkitError

__all__ = ["measure_standing"]


def measure_standing(
    values: npt.NDArray[Any], frequency: npt.NDArray[Any], wanted: Wanted
) -> list[Line]:
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
    quiet, quiet_share = _quiet_noise(values, frequency, wanted.noise)
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
        found.append(_standing_line(fit, place, values, frequency, quiet, quiet_share))
    found.sort(key=lambda line: line.frequency)
    return found + [nothing() for _ in range(wanted.lines - len(found))]


def _standing_line(
    fit: Crowd,
    place: int,
    values: npt.NDArray[Any],
    frequency: npt.NDArray[Any],
    quiet: float,
    quiet_share: float,
) -> Line:
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
    line = Line(
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
        line.snr = float(top.max() / quiet)
        line.snr_std = float(np.hypot(1.0, line.snr * quiet_share))
    as_it_stands = "doubtful: as the spectrum stands, with any apodization"
    line.status = dict.fromkeys(("linewidth", "linewidth_ppm", "t2_star"), as_it_stands)
    line.status["t2_star_decay"] = "missing: there is no decay behind this spectrum"
    line.notes.append("measured as the spectrum stands")
    return line


def _quiet_noise(
    values: npt.NDArray[Any], frequency: npt.NDArray[Any], region: tuple[float, float] | None
) -> tuple[float, float]:
    """Standard deviation of the real part where there is no line, and its relative uncertainty."""
    real = values.real
    if region is not None:
        inside = (frequency >= region[0]) & (frequency <= region[1])
        if inside.sum() < 8:
            raise FidkitError(
                f"measure: noise must hold at least 8 points of the spectrum; got {region} Hz "
                f"with {int(inside.sum())}; widen it"
            )
        return float(real[inside].std()), float(1 / np.sqrt(2 * inside.sum()))
    # the median absolute deviation stands against lines in less than half of the points; 1.4826
    # turns it into a standard deviation, at 37 % of its efficiency
    noise = 1.482602 * np.median(np.abs(real - np.median(real)))
    return float(noise), float(1 / np.sqrt(2 * 0.37 * real.size))


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
