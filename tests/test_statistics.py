"""Truth in numbers: errors against the Cramer-Rao bound, and coverage of the stated uncertainties.

Two thousand simulated records at each signal to noise; the bound is `fidkit.numerics.bounds`,
which tests/test_bounds.py holds against published and independent numbers.
"""

import functools

import numpy as np
import pytest

import fidkit as fk
from fidkit.numerics.bounds import line_bounds

RECORDS = 2000
POINTS, DWELL = 8192, 1e-4
SIGNAL_TO_NOISE = (3, 10, 30, 100, 1000)
#: One ratio goes to one worker as a whole: the records of a ratio are made and measured once.
EACH = pytest.mark.parametrize(
    "first_point_snr",
    [
        pytest.param(ratio, marks=pytest.mark.xdist_group(f"ratio {ratio}"))
        for ratio in SIGNAL_TO_NOISE
    ],
)
#: Root mean square error over the bound; its own counting error is 1 / sqrt(2 * 2000) = 1.6 %.
NEAR_BOUND = 0.05
#: Of a normal distribution, one in 5e8 lies further out.
OUTLIER = 6.0
#: Coverage may miss by three of its binomial standard deviations.
COUNTING = 3.0
#: Bias of the natural width, in its standard uncertainty; counting error 0.022.
BIAS = 0.1


@functools.cache
def truth(first_point_snr):
    rng = np.random.default_rng(20_000 + first_point_snr)
    return {
        "t2_star": rng.uniform(0.02, 0.2, RECORDS),
        "frequency": rng.uniform(-0.5, 0.5, RECORDS) / DWELL,
        "phase": rng.uniform(-np.pi, np.pi, RECORDS),
    }


@functools.cache
def measured(first_point_snr, windowed):
    """Values and standard uncertainties, each with shape (records,), and the texts."""
    true = truth(first_point_snr)
    rng = np.random.default_rng(30_000 + first_point_snr)
    chain = fk.Chain(
        [
            fk.Call("apodize_exponential", broadening=4.0),
            fk.Call("zero_fill", factor=4),
            fk.Call("fourier_transform"),
            fk.Call("correct_phase", zero_order=35.0),
        ]
    )
    parts = []
    index = np.arange(POINTS)
    for first in range(0, RECORDS, 250):
        rows = slice(first, first + 250)
        exponent = (2j * np.pi * true["frequency"][rows] - 1 / true["t2_star"][rows]) * DWELL
        values = np.exp(1j * true["phase"][rows, None] + exponent[:, None] * index)
        noise = rng.standard_normal((2, *values.shape)) / first_point_snr
        fid = fk.from_array(
            values + noise[0] + 1j * noise[1], dwell_time=DWELL, carrier_frequency=63.87e6
        )
        parts.append(fk.measure(chain(fid) if windowed else fid))
    names = list(parts[0].data_vars)
    return {name: np.concatenate([part[name].values for part in parts]) for name in names}


def errors(first_point_snr, windowed):
    """Error of each quantity, its bound where there is one, and its stated uncertainty."""
    true, found = truth(first_point_snr), measured(first_point_snr, windowed)
    rate = 1 / true["t2_star"]
    bounds = [line_bounds(1.0, one, 1 / first_point_snr, POINTS, DWELL) for one in rate]
    frequency = found["frequency_offset"] - true["frequency"]
    frequency -= np.rint(frequency * DWELL) / DWELL
    phase = np.angle(np.exp(1j * (np.deg2rad(found["phase"]) - true["phase"])))
    return {
        "frequency_offset": (frequency, np.array([bound.frequency for bound in bounds])),
        "linewidth": (found["linewidth"] - rate / np.pi, np.array([b.linewidth for b in bounds])),
        "amplitude": (found["amplitude"] - 1, np.array([bound.amplitude for bound in bounds])),
        "phase": (np.rad2deg(phase), np.rad2deg([bound.phase for bound in bounds])),
        "t2_star": (found["t2_star"] - true["t2_star"], None),
        "t2_star_decay": (found["t2_star_decay"] - true["t2_star"], None),
    }


@pytest.mark.parametrize("windowed", [False, True], ids=["raw", "apodized"])
@EACH
def test_errors_meet_the_bound(first_point_snr, windowed):
    """Source: Cramer-Rao bound of a damped line."""
    for name, (error, bound) in errors(first_point_snr, windowed).items():
        if bound is None:
            continue
        ratio = np.sqrt(np.mean((error / bound) ** 2))
        worst = np.abs(error / bound).max()
        print(f"SNR {first_point_snr:5d} {name:17s} rmse/bound {ratio:.3f} worst {worst:.2f}")
        assert abs(ratio - 1) < NEAR_BOUND, name
        assert worst < OUTLIER, name


@pytest.mark.parametrize("windowed", [False, True], ids=["raw", "apodized"])
@EACH
def test_uncertainties_cover(first_point_snr, windowed):
    """Source: definition of a standard uncertainty (normal distribution)."""
    found = measured(first_point_snr, windowed)
    for name, (error, _) in errors(first_point_snr, windowed).items():
        for level, reach in ((0.682689, 1.0), (0.954500, 2.0), (0.95, 1.959964)):
            share = np.mean(np.abs(error) < reach * found[f"{name}_std"])
            counting = np.sqrt(level * (1 - level) / RECORDS)
            print(f"SNR {first_point_snr:5d} {name:17s} {100 * level:.1f} %: {100 * share:.1f} %")
            assert abs(share - level) < COUNTING * counting, (name, level, share)


@EACH
def test_natural_width_is_unbiased_behind_windows(first_point_snr):
    """Source: an unbiased estimate has mean error 0."""
    found = measured(first_point_snr, True)
    error, _ = errors(first_point_snr, True)["linewidth"]
    bias = np.mean(error / found["linewidth_std"])
    print(f"SNR {first_point_snr:5d} bias {bias:+.3f} of the standard uncertainty")
    assert abs(bias) < BIAS


@EACH
def test_plain_lines_are_called_plain(first_point_snr):
    """A criterion difference of 10 is passed by chance about once in ten thousand."""
    found = measured(first_point_snr, False)
    odd = np.flatnonzero(found["lineshape"] != "Lorentzian")
    assert odd.size <= 2
    doubtful = [text for text in found["status"] if text != "ok"]
    # a decay beyond three standard uncertainties of its T2* is rare, as both see the same noise
    assert len(doubtful) <= 10, doubtful


@EACH
def test_signal_to_noise_covers(first_point_snr):
    """Source: height of the line in the plain transform over the noise of its real part, as given.

    The sum of the decay over the square root of the number of points (Parseval).
    """
    found, true = measured(first_point_snr, False), truth(first_point_snr)
    decay = np.exp(-DWELL / true["t2_star"])
    height = (1 - decay**POINTS) / (1 - decay)
    expected = height * first_point_snr / np.sqrt(POINTS)
    share = np.mean(np.abs(found["snr"] - expected) < found["snr_std"])
    assert abs(share - 0.682689) < COUNTING * np.sqrt(0.68 * 0.32 / RECORDS)
