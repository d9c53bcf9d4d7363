"""The least uncertainty that any unbiased estimate can have (Cramer-Rao), in closed form.

For planning a measurement, and for holding the estimates of this package to it.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

__all__ = ["LineBounds", "line_bounds"]


@dataclass(frozen=True)
class LineBounds:
    """Standard deviations no unbiased estimate can beat: Hz, 1/s, amplitude's unit, rad."""

    frequency: float
    rate: float
    amplitude: float
    phase: float

    @property
    def linewidth(self) -> float:
        """Of the full width at half maximum ``rate / pi``, Hz."""
        return float(self.rate / np.pi)


def line_bounds(
    amplitude: float, rate: float, noise: float, points: int, dwell_time: float
) -> LineBounds:
    """Bounds for one damped line with unknown frequency, rate, amplitude and phase.

    Parameters
    ----------
    amplitude : float
        Amplitude ``A`` at the first point.
    rate : float
        Decay rate ``R``, 1/s; 0 for an undamped line.
    noise : float
        Standard deviation of the noise in each of the real and imaginary parts.
    points : int
        Complex points ``N``.
    dwell_time : float
        Time between them, s.

    Returns
    -------
    LineBounds
        Amplitude and phase are those at the first point.

    Notes
    -----
    With ``z = exp(-2 R dt)`` and ``S_k = sum_n n^k z^n``:
    ``sd f = sigma / (2 pi A dt) sqrt(S0 / (S0 S2 - S1^2))``, ``sd R = 2 pi sd f``,
    ``sd A = sigma sqrt(S2 / (S0 S2 - S1^2))``, ``sd phase = sd A / A``. For ``R = 0`` this is the
    bound of Rife and Boorstyn, IEEE Trans. Inf. Theory 20, 591 (1974).
    """
    # summed, not taken from the closed sums: those cancel where R dt is small
    index = np.arange(points, dtype=float)
    weight = np.exp(-2 * rate * dwell_time * index)
    sum0, sum1, sum2 = weight.sum(), (index * weight).sum(), (index**2 * weight).sum()
    spread = (((index - sum1 / sum0) ** 2) * weight).sum()  # (S0 S2 - S1^2) / S0
    frequency = noise / (2 * np.pi * amplitude * dwell_time * np.sqrt(spread))
    of_amplitude = noise * np.sqrt(sum2 / (sum0 * spread))
    return LineBounds(
        float(frequency),
        float(2 * np.pi * frequency),
        float(of_amplitude),
        float(of_amplitude / amplitude),
    )
