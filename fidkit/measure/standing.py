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
    quiet, share = _quiet_noise(values, frequency, wanted.noise)
    fit = _fit(values, frequency, allowed, wanted, quiet)
    turned = False
    if fit is not None and np.iscomplexobj(values):
        # files differ in the sign of the imaginary part; a decay tells which one is right
        other = _fit(values.conj(), frequency, allowed, wanted, quiet)
        if other is not None and other.noise < fit.noise:
            fit, values, turned = other, values.conj(), True
    found = []
    for place in range(0 if fit is None else fit.frequency.size):
        assert fit is not None
        line = _standing_line(fit, place, values, frequency, quiet, share)
        if turned:
            line.notes.append("its imaginary part has the other sign")
        found.append(line)
    found.sort(key=lambda line: line.frequency)
    return found + [nothing() for _ in range(wanted.lines - len(found))]


def _fit(
    values: npt.NDArray[Any],
    frequency: npt.NDArray[Any],
    allowed: npt.NDArray[np.bool_],
    wanted: Wanted,
    quiet: float,
) -> Crowd | None:
    """The lines asked for, fitted together, highest first; None where there is none."""
    spacing = (frequency[-1] - frequency[0]) / (frequency.size - 1)
    shapes = numerics.shapes_of_spectrum
    fit: Crowd | None = None
    places, rates = np.empty(0), np.empty(0)
    rest = values
    for _ in range(wanted.lines):
        height = np.abs(rest)
        peak = _peak(height, frequency, allowed, None if places.size else wanted.near, quiet)
        if peak is None:
            break
        low = np.flatnonzero(height < height[peak] / 2)
        below, above = low[low < peak], low[low > peak]
        left = below[-1] if below.size else 0
        right = above[0] if above.size else frequency.size - 1
        # the magnitude of a line is sqrt(3) wider than its absorption
        width = (right - left) * spacing / (np.sqrt(3) if np.iscomplexobj(rest) else 1)
        places, rates = np.append(places, frequency[peak]), np.append(rates, np.pi * width)
        reach = np.maximum(numerics.BAND_WIDTHS * rates / np.pi, 16 * spacing)
        used = (np.abs(frequency[:, None] - places) <= reach).any(axis=1)
        fit = numerics.fit_crowd(
            values[used],
            shapes(frequency[used]),
            places,
            rates,
            resolution=spacing,
            columns=np.ones((int(used.sum()), 1), complex),
        )
        places, rates = fit.frequency, fit.rate
        model = shapes(frequency)(2j * np.pi * places - rates, 0.0)[0] @ fit.scale
        rest = values - (model if np.iscomplexobj(values) else model.real)
    return fit


def _standing_line(
    fit: Crowd,
    place: int,
    values: npt.NDArray[Any],
    frequency: npt.NDArray[Any],
    quiet: float,
    share: float,
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
    top = np.abs(values[within])
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
        line.snr_std = float(np.hypot(1.0, line.snr * share))
    line.status["t2_star_decay"] = "missing: there is no decay behind this spectrum"
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
    # noise alone gets this high once in a thousand spectra
    return place if height[place] > np.sqrt(2 * np.log(1000 * height.size)) * noise else None
