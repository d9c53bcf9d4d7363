"""Cramer-Rao bounds against closed forms, numbers worked out elsewhere, and a numeric Fisher matrix."""

import numpy as np
import pytest

from fidkit.numerics.bounds import line_bounds

#: Closed forms of the same sums: only rounding separates them.
ROUNDING = 1e-9
#: Worked numbers are given to nine digits.
DIGITS = 1e-8


def test_undamped_line_of_rife_and_boorstyn():
    """Source: Rife and Boorstyn, IEEE Trans. Inf. Theory 20, 591 (1974) (formula from memory)."""
    for points, dwell, noise in ((64, 1e-3, 0.1), (1024, 1e-3, 0.1)):
        bounds = line_bounds(1.0, 0.0, noise, points, dwell)
        # rate and frequency are independent, so knowing the rate is 0 changes nothing for f
        expected = 12 * noise**2 / ((2 * np.pi) ** 2 * dwell**2 * points * (points**2 - 1))
        assert bounds.frequency == pytest.approx(np.sqrt(expected), rel=ROUNDING)
    assert line_bounds(1, 0, 0.1, 64, 1e-3).frequency == pytest.approx(0.107694572, rel=1e-8)
    assert line_bounds(1, 0, 0.1, 1024, 1e-3).frequency == pytest.approx(0.0016825231, rel=1e-7)
    phase = line_bounds(1, 0, 0.1, 64, 1e-3).phase
    assert phase**2 == pytest.approx(2 * 0.01 * 127 / (64 * 65), rel=ROUNDING)


@pytest.mark.parametrize(
    ("rate", "points", "dwell", "noise", "frequency", "digits"),
    [
        (20, 1024, 1e-3, 0.05, 0.06303483, 1e-6),
        (5, 2048, 5e-4, 0.02, 0.002252244, 1e-6),
        (50, 256, 1e-3, 0.05, 0.245586328, DIGITS),
    ],
)
def test_worked_cases(rate, points, dwell, noise, frequency, digits):
    """Source: damped bound worked out numerically from the Fisher matrix (12 digits)."""
    assert line_bounds(1, rate, noise, points, dwell).frequency == pytest.approx(
        frequency, rel=digits
    )


def test_worked_case_in_full():
    """Source: the same, A = 1, R = 20 /s, N = 1024, dwell 1 ms, sigma = 0.05."""
    bounds = line_bounds(1, 20, 0.05, 1024, 1e-3)
    assert bounds.amplitude == pytest.approx(0.01386395, rel=1e-6)
    assert bounds.phase == pytest.approx(0.01386395, rel=1e-6)
    assert bounds.rate == pytest.approx(0.39605954, rel=1e-6)
    assert bounds.linewidth == pytest.approx(0.12606967, rel=1e-6)
    assert bounds.rate / 20**2 == pytest.approx(0.99015e-3, rel=1e-4)


def test_closed_sums():
    """Source: geometric sums of n^k z^n in closed form, z = exp(-2 R dt)."""
    rate, points, dwell = 13.0, 500, 2e-3
    z = np.exp(-2 * rate * dwell)
    last = z**points
    sum0 = (1 - last) / (1 - z)
    sum1 = z * (1 - points * z ** (points - 1) + (points - 1) * last) / (1 - z) ** 2
    sum2 = (
        z
        * (
            1
            + z
            - points**2 * z ** (points - 1)
            + (2 * points**2 - 2 * points - 1) * last
            - (points - 1) ** 2 * z ** (points + 1)
        )
        / (1 - z) ** 3
    )
    determinant = sum0 * sum2 - sum1**2
    bounds = line_bounds(2.0, rate, 0.1, points, dwell)
    assert bounds.frequency == pytest.approx(
        0.1 / (2 * np.pi * 2 * dwell) * np.sqrt(sum0 / determinant), rel=ROUNDING
    )
    assert bounds.amplitude == pytest.approx(0.1 * np.sqrt(sum2 / determinant), rel=ROUNDING)


def test_numeric_fisher_matrix():
    """Source: inverse of the Fisher matrix, built from central differences of the model."""
    amplitude, phase, frequency, rate, noise = 1.3, 0.4, 31.0, 17.0, 0.07
    points, dwell = 300, 1e-3
    time = dwell * np.arange(points)

    def model(values):
        a, p, f, r = values
        return a * np.exp(1j * p + (2j * np.pi * f - r) * time)

    centre = np.array([amplitude, phase, frequency, rate])
    columns = []
    for place in range(4):
        change = np.zeros(4)
        change[place] = 1e-5 * max(abs(centre[place]), 1)
        difference = (model(centre + change) - model(centre - change)) / (2 * change[place])
        columns.append(np.concatenate([difference.real, difference.imag]))
    jacobian = np.array(columns).T
    deviation = np.sqrt(np.diag(np.linalg.inv(jacobian.T @ jacobian))) * noise
    bounds = line_bounds(amplitude, rate, noise, points, dwell)
    difference_error = 1e-6  # of the central differences
    assert [bounds.amplitude, bounds.phase, bounds.frequency, bounds.rate] == pytest.approx(
        list(deviation), rel=difference_error
    )


def test_limits():
    """Source: limits of the same formulas for a long record and for a fine dwell time."""
    rate, dwell, noise = 20.0, 1e-3, 0.05
    z = np.exp(-2 * rate * dwell)
    long = line_bounds(1, rate, noise, 20_000, dwell).frequency
    assert long == pytest.approx(
        noise / (2 * np.pi * dwell) * np.sqrt((1 - z) ** 3 / z), rel=ROUNDING
    )
    one_percent = 0.01
    assert long == pytest.approx(
        noise / (2 * np.pi) * np.sqrt(8 * rate**3 * dwell), rel=one_percent
    )


def test_rule_of_thumb():
    """Source: continuous limit: sd f = FWHM / SNR of the matched spectrum, sd FWHM twice that."""
    rate, dwell, noise = 15.0, 5e-4, 0.02
    bounds = line_bounds(1, rate, noise, 20_000, dwell)
    matched = 1 / (noise * np.sqrt(2 * rate * dwell))
    two_percent = 0.02  # R dt is 0.0075
    assert bounds.frequency == pytest.approx(rate / np.pi / matched, rel=two_percent)
    assert bounds.linewidth == pytest.approx(2 * rate / np.pi / matched, rel=two_percent)
