"""What is found of a line, and how the numbers of a fit become it."""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import Any

import numpy as np
import numpy.typing as npt

from fidkit.measure.record import Record
from fidkit.numerics import lines as numerics

__all__ = ["QUANTITIES", "WEAK_ENERGY", "Line", "Wanted", "column_name", "line_of", "nothing"]

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

UNIT_IN_NAME = {"Hz": "_hz", "ppm": "_ppm", "s": "_s", "T": "_tesla", "degree": "_degree", "1": ""}


def column_name(quantity: str, unit: str, end: str = "") -> str:
    """The name of a column with its unit, such as ``linewidth_std_hz``; `end` is ``_std`` or none.

    The unit of an amplitude is that of its record, so no name of a column can hold it.
    """
    if quantity == "amplitude":
        return f"{quantity}{end}"
    return f"{quantity.removesuffix('_ppm')}{end}{UNIT_IN_NAME.get(unit, f'_{unit}')}"


#: Energy (sum |s|^2 / (2 sigma^2)) under which a start value may be grossly wrong.
WEAK_ENERGY = 25.0


@dataclass(frozen=True)
class Wanted:
    """Which lines are asked for."""

    near: float | None
    region: tuple[float, float] | None
    lines: int
    noise: tuple[float, float] | None

    @property
    def chosen(self) -> bool:
        """Whether it is not simply the strongest."""
        return self.near is not None or self.region is not None


@dataclass
class Line:
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


def nothing(why: str = "no line above the noise") -> Line:
    """A line that is not there, with the reason."""
    return Line(notes=[why], status=dict.fromkeys(QUANTITIES, f"missing: {why}"))


def line_of(
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
    noise_given: tuple[float, int] | None,
) -> Line:
    """All numbers of one line; `covariance` is of (frequency, rate, G, ln amplitude, phase).

    `noise` is that of each part of a raw point; `count` the complex points it was found from.
    `noise_given` is the same from a region that the user named, for the signal to noise ratio.
    """
    if not np.isfinite(covariance).all() or covariance[0, 0] > (0.5 / record.dwell) ** 2:
        return nothing("nothing that could be told from noise as a line")
    points = record.values.shape[1]
    length = points * record.dwell
    width, by_rate, by_gaussian = numerics.voigt_width(rate, gaussian)
    slope = np.array([0, by_rate, by_gaussian, 0, 0])
    line = Line(
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
    seen_noise, seen_count = (noise, count) if noise_given is None else noise_given
    if seen_noise > 0:
        line.snr = float(height / (seen_noise * np.sqrt((record.weight**2).sum())))
        line.snr_std = line.snr * float(np.sqrt(tilt @ covariance @ tilt + 1 / (4 * seen_count)))
    strength = amplitude * np.exp(-rate * time - gaussian * time**2)
    energy = float((strength**2).sum() / (2 * noise**2)) if noise > 0 else np.inf
    if energy < WEAK_ENERGY:
        line.status = dict.fromkeys(QUANTITIES, "doubtful: signal too weak to trust")
        line.notes.append("weak signal")
    elif width * length < 1 / np.pi and abs(line.frequency) * length < 1:
        text = "doubtful: a constant offset of the receiver looks the same"
        line.status = dict.fromkeys(QUANTITIES, text)
        line.notes.append("may be a constant offset and no line")
    elif line.amplitude_std > 0.3 * amplitude:
        line.status["amplitude"] = "doubtful: hardly told from zero; its errors are not symmetric"
    if width < 2 * line.width_std or width * length < 1 / np.pi:
        bound = max(width, 0.0) + 2 * line.width_std
        text = f"doubtful: the record of {length:.3g} s is too short for this width"
        if width < 2 * line.width_std:
            text = f"doubtful: width not measurable in this record; less than {bound:.2g} Hz"
        for name in ("linewidth", "linewidth_ppm", "t2_star"):
            line.status[name] = text
        line.notes.append("decays too little within the record")
    return line
