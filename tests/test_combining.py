"""Averaging shots and combining channels."""

from __future__ import annotations

import math

import numpy as np
import pytest
import xarray as xr
from hypothesis import given, settings
from hypothesis import strategies as st

import fidkit as fk
from fidkit.params import STEPS, FidkitError, ParameterError, Step
from fidkit.steps import combining

DWELL = 1e-4  # s
ROUNDING = 1e-12  # relative: double precision through some ten operations
SINGLE = 1e-5  # relative: single precision, through sums of a few terms

HERE = [spec for spec in STEPS.values() if spec.room == combining.__name__]
TIME = np.arange(1024) * DWELL


def make(values: np.ndarray, *dims: str, **facts: object) -> xr.DataArray:
    return fk.from_array(
        values, dwell_time=DWELL, carrier_frequency=60e6, dims=dims, coil="array", **facts
    )


def decay(frequency: float = 500.0, t2_star: float = 0.02, phase: float = 0.7) -> np.ndarray:
    """exp(i phase) exp(2 pi i f t - t / T2*), t in s; down to 0.6 % at the end."""
    return np.exp(1j * phase + (2j * np.pi * frequency - 1 / t2_star) * TIME)


def noise(rng: np.random.Generator, shape: tuple[int, ...], sigma: float) -> np.ndarray:
    return sigma * (rng.standard_normal(shape) + 1j * rng.standard_normal(shape))


def largest(difference: object) -> float:
    return float(np.abs(np.asarray(difference)).max())


def array_record(
    pattern: np.ndarray, covariance: np.ndarray, seed: int
) -> tuple[np.ndarray, np.ndarray]:
    """Signal and noise of an array, (channel, time) each; covariance of complex noise E[n n^H]."""
    rng = np.random.default_rng(seed)
    white = noise(rng, (len(pattern), TIME.size), math.sqrt(0.5))
    return np.outer(pattern, decay()), np.linalg.cholesky(covariance) @ white


# ---------------------------------------------------------------------------- both alike


def record(spec: Step, single: bool = False) -> xr.DataArray:
    first = "channel" if spec.name == "combine_channels" else "shot"
    rng = np.random.default_rng(5)
    gains = np.array([1, 0.5j, -0.3 + 0.2j])[:, None, None]
    values = gains * decay() + noise(rng, (3, 2, TIME.size), 0.01)
    if single:
        values = values.astype(np.complex64)
    fid = make(values, first, "pulse_width")
    return fid.assign_coords(pulse_width=[10.0, 20.0], mark=(first, [1, 2, 3]))


@pytest.mark.parametrize("spec", HERE, ids=lambda spec: spec.name)
def test_values_just_outside_are_refused(spec: Step) -> None:
    """Every step against its own constraints."""
    for parameter in spec.parameters.values():
        outside: list[object] = [math.nan, math.inf, "x", None, (0.0, 1.0), 0, 2]
        if parameter.kind == "number":
            outside += [math.nextafter(parameter.range.high, math.inf), True]
        for value in outside:
            with pytest.raises(ParameterError, match=f"{spec.name}: {parameter.name} must be"):
                spec.function(record(spec), **{parameter.name: value})


@pytest.mark.parametrize("spec", HERE, ids=lambda spec: spec.name)
def test_coordinates_along_the_dimension_go(spec: Step) -> None:
    fid = record(spec)
    gone = fid.dims[0]
    both = ((gone, "pulse_width"), np.arange(6.0).reshape(3, 2))
    fid = fid.assign_coords(both=both, kept=("pulse_width", [1, 2]), room=21.0)
    assert set(spec.function(fid).coords) == {"time", "pulse_width", "kept", "room"}


@pytest.mark.parametrize("spec", HERE, ids=lambda spec: spec.name)
def test_records_that_dask_holds_come_out_the_same(spec: Step) -> None:
    fid = record(spec)
    chunked = spec.function(fid.chunk({fid.dims[0]: 1, "time": 100}))
    assert np.array_equal(chunked.values, spec.function(fid).values)


@pytest.mark.parametrize("spec", HERE, ids=lambda spec: spec.name)
def test_facts_precision_and_input_are_kept(spec: Step) -> None:
    fid = record(spec, single=True)
    before = fid.copy(deep=True)
    single, double = spec.function(fid), spec.function(record(spec))
    assert fid.identical(before)
    assert single.dtype == np.complex64
    assert double.dtype == np.complex128
    assert largest(single.values - double.values) <= SINGLE * largest(double.values)
    assert single.dims == ("pulse_width", "time")
    assert set(single.coords) == {"pulse_width", "time"}
    assert single.attrs == {**fid.attrs, "history": single.attrs["history"]}
    assert single.attrs["history"] == f"{spec.name}()"
    again = fk.Chain.from_source(fk.chain_of(double).source)(record(spec))
    assert np.array_equal(again.values, double.values)


@pytest.mark.parametrize("spec", HERE, ids=lambda spec: spec.name)
def test_place_of_the_dimension_does_not_matter(spec: Step) -> None:
    fid = record(spec)
    turned = fid.transpose("pulse_width", ..., "time")
    difference = largest(spec.function(turned).values - spec.function(fid).values)
    assert difference <= ROUNDING * largest(spec.function(fid).values)


PLAIN = make(decay())
SHOTS = make(np.stack([decay()] * 3), "shot")
CHANNELS = make(np.stack([decay()] * 3), "channel")
WRONG_USE = [
    ("average_shots", PLAIN, {}, "must have a dimension shot; got time"),
    ("average_shots", CHANNELS, {}, "must have a dimension shot; got channel, time"),
    ("average_shots", SHOTS.real, {"align_phase": True}, "needs a complex.*make_analytic"),
    ("average_shots", SHOTS.real, {"align_frequency": True}, "needs a complex.*make_analytic"),
    (
        "average_shots",
        fk.fourier_transform(SHOTS),
        {"align_frequency": True},
        "align_frequency must be False for spectra; got True; average the FIDs",
    ),
    ("combine_channels", SHOTS, {}, "must have a dimension channel; got shot, time"),
    ("combine_channels", fk.fourier_transform(CHANNELS), {}, "the last dimension must be time"),
    ("combine_channels", CHANNELS, {"tail": 0.004}, "at least two points a channel.*4 points"),
    ("combine_channels", CHANNELS, {"tail": 1.0}, "leave some of the 1024 measured points"),
    ("combine_channels", CHANNELS, {}, "independent of the others.*sum of squares"),
    ("combine_channels", CHANNELS * 0, {}, "without noise.*sum of squares"),
]


@pytest.mark.parametrize(("name", "signal", "arguments", "message"), WRONG_USE)
def test_wrong_use_says_what_and_how_to_mend_it(
    name: str, signal: xr.DataArray, arguments: dict[str, object], message: str
) -> None:
    with pytest.raises(FidkitError, match=message) as caught:
        STEPS[name].function(signal, **arguments)
    assert "\n" not in str(caught.value)


# ---------------------------------------------------------------------------- shots


@settings(max_examples=25, deadline=None)
@given(seed=st.integers(0, 2**32 - 1), factor=st.complex_numbers(max_magnitude=1e3))
def test_average_is_the_mean_and_linear(seed: int, factor: complex) -> None:
    rng = np.random.default_rng(seed)
    one, two = noise(rng, (5, 64), 1.0), noise(rng, (5, 64), 1.0)
    mean = fk.average_shots(make(one + factor * two, "shot")).values
    assert largest(mean - (one.mean(0) + factor * two.mean(0))) <= ROUNDING * (1 + abs(factor))


def test_average_acts_on_spectra_and_real_records() -> None:
    """The mean of transforms is the transform of the mean."""
    fid = make(noise(np.random.default_rng(0), (4, 256), 1.0), "shot")
    after = fk.average_shots(fk.fourier_transform(fid)).values
    before = fk.fourier_transform(fk.average_shots(fid)).values
    assert largest(after - before) <= ROUNDING * largest(before)
    assert fk.average_shots(fid.real).dtype == np.float64


def test_many_single_precision_shots_are_summed_in_double() -> None:
    """100,000 equal shots of 0.1: a running sum in single precision is off by 1e-3."""
    values = np.full((100_000, 2), 0.1 + 0.1j, np.complex64)
    mean = fk.average_shots(make(values, "shot")).values
    assert largest(mean - values[0]) <= 2 * np.finfo(np.float32).eps * 0.1


@pytest.mark.parametrize("align", [False, True])
def test_noise_falls_by_the_square_root(align: bool) -> None:
    """Signal to noise grows with the square root of the number of shots."""
    rng = np.random.default_rng(1)
    sigma, shots = 0.05, 64
    values = decay() + noise(rng, (shots, TIME.size), sigma)
    mean = fk.average_shots(make(values, "shot"), align_frequency=align, align_phase=align)
    # the common frequency and phase are those of the first shot: taken out before noise is read
    turn = np.vdot(decay(), mean.values)
    left = mean.values[512:] * np.exp(-1j * np.angle(turn)) - decay()[512:]
    assert np.sqrt(np.mean(np.abs(left) ** 2) / 2) == pytest.approx(sigma / 8, rel=0.1)


def test_alignment_without_noise_gives_the_first_shot() -> None:
    """Closed form: shots that differ by known frequencies and phases all become the first."""
    offsets = np.array([0.0, 3.3, -7.9, 41.0])
    phases = np.array([0.7, -2.0, 3.0, 0.1])
    values = np.stack([decay(500 + f, phase=p) for f, p in zip(offsets, phases, strict=True)])
    mean = fk.average_shots(make(values, "shot"), align_frequency=True, align_phase=True).values
    # Newton ends within rounding of the maximum of a flat top: square root of 1e-16
    assert largest(mean - values[0]) < 1e-6
    only_phase = np.stack([decay(phase=p) for p in phases])
    mean = fk.average_shots(make(only_phase, "shot"), align_phase=True).values
    assert largest(mean - only_phase[0]) < ROUNDING * 10
    spectra = fk.fourier_transform(make(only_phase, "shot"))
    mean = fk.average_shots(spectra, align_phase=True).values
    assert largest(mean - spectra.values[0]) < ROUNDING * largest(spectra.values)


def test_frequency_alone_keeps_each_phase_at_time_zero() -> None:
    values = np.stack([decay(500.0, phase=0.0), decay(510.0, phase=np.pi / 2)])
    fid = make(values, "shot")
    mean = fk.average_shots(fid, align_frequency=True).values
    assert largest(mean - decay(500.0, phase=np.pi / 4) * math.sqrt(0.5)) < 1e-6


def test_drift_that_smears_the_line_is_taken_out() -> None:
    """Aligned, 40 drifting noisy shots keep the height that unaligned ones lose."""
    rng = np.random.default_rng(3)
    drift = np.linspace(0, 60, 40)
    values = np.stack([decay(500 + f, phase=f / 10) for f in drift])
    fid = make(values + noise(rng, values.shape, 0.05), "shot")
    aligned = fk.average_shots(fid, align_frequency=True, align_phase=True)
    kept = abs(np.vdot(decay(phase=0.0), aligned.values)) / np.vdot(decay(), decay()).real
    plain = abs(np.vdot(decay(), fk.average_shots(fid).values)) / np.vdot(decay(), decay()).real
    assert kept == pytest.approx(1.0, abs=0.01)
    assert plain < 0.5


def test_second_round_takes_back_what_a_noisy_first_shot_costs() -> None:
    """Aligned to one noisy shot the mean loses some 2 % of its height, aligned to the mean 1 %.

    Both means hold nearly the same noise, so that their heights can be compared closely.
    """
    rng = np.random.default_rng(3)
    drift = rng.uniform(-30, 30, 48)
    values = np.stack([decay(500 + f, phase=f / 10) for f in drift - drift[0]])
    values = values + noise(rng, values.shape, 0.3)
    once = combining._aligned(values, values[0], TIME, True, True).mean(axis=0)
    both = fk.average_shots(make(values, "shot"), align_frequency=True, align_phase=True).values
    height = []
    for mean in (once, both):
        offset = combining._difference((mean * decay().conj())[None], TIME)[0]
        overlap = np.vdot(decay(), mean * np.exp(-2j * np.pi * offset * TIME))
        height.append(abs(overlap) / np.vdot(decay(), decay()).real)
    assert height[1] > height[0] + 0.005


def test_leading_dimensions_are_aligned_one_by_one() -> None:
    rng = np.random.default_rng(8)
    drift = rng.uniform(-20, 20, (3, 4))
    values = np.stack([[decay(500 + f, phase=f) for f in row] for row in drift])
    fid = make(values + noise(rng, values.shape, 0.02), "pulse_width", "shot")
    arguments = {"align_frequency": True, "align_phase": True}
    together = fk.average_shots(fid, **arguments).values
    for width in range(3):
        alone = fk.average_shots(fid[width], **arguments).values
        assert largest(together[width] - alone) < 1e-9  # of a first point of 1


# ---------------------------------------------------------------------------- channels


def signal_to_noise(pattern: np.ndarray, covariance: np.ndarray, seed: int = 0) -> float:
    """Signal to noise after the step, applied to signal and noise apart.

    The step is linear once its weights are found; they are found on a record of strong signal
    whose noise has exactly the wanted covariance.
    """
    rng = np.random.default_rng(seed)
    channels, count = len(pattern), 512
    white = noise(rng, (channels, count), 1.0)
    white -= white.mean(axis=1, keepdims=True)
    sample = white @ white.conj().T / count
    tail = np.linalg.cholesky(covariance) @ np.linalg.solve(np.linalg.cholesky(sample), white)
    clean = np.outer(pattern, 1e6 * np.exp(2j * np.pi * 0.05 * np.arange(512)))
    values = np.concatenate([clean, tail], axis=1)
    combined = fk.combine_channels(make(values, "channel"), tail=0.5).values
    signal = abs(combined[0]) / 1e6
    return signal / math.sqrt(np.mean(np.abs(combined[512:]) ** 2))


def random_covariance(seed: int, channels: int) -> np.ndarray:
    factor = noise(np.random.default_rng(seed), (channels, channels + 2), 1.0)
    return factor @ factor.conj().T


@pytest.mark.parametrize("channels", [2, 3, 8])
def test_combination_is_the_optimum(channels: int) -> None:
    """sqrt(b^H inverse(P) b); no other weights exceed it.

    Source: Roemer et al., Magn. Reson. Med. 16, 192 (1990); Cauchy and Schwarz.
    """
    rng = np.random.default_rng(channels)
    pattern, covariance = noise(rng, (channels,), 1.0), random_covariance(channels, channels)
    best = math.sqrt(np.vdot(pattern, np.linalg.solve(covariance, pattern)).real)
    ours = signal_to_noise(pattern, covariance)
    assert ours == pytest.approx(best, rel=1e-9)
    for _ in range(500):
        other = noise(rng, (channels,), 1.0)
        reached = abs(np.vdot(other, pattern)) / math.sqrt(np.vdot(other, covariance @ other).real)
        assert reached <= ours * (1 + 1e-9)


@pytest.mark.parametrize("channels", [4, 8, 32])
def test_equal_channels_gain_the_square_root(channels: int) -> None:
    """Closed form of the optimum for uncorrelated noise: 4 -> 2, 8 -> 2.8284, 32 -> 5.6569."""
    reached = signal_to_noise(np.ones(channels), np.eye(channels))
    assert reached == pytest.approx(math.sqrt(channels), rel=1e-9)


@pytest.mark.parametrize(
    ("correlation", "gain"),
    [(0.0, 1.41421), (0.3, 1.24035), (0.5, 1.15470), (0.9, 1.02598), (-0.5, 2.0)],
)
def test_two_equal_coils_with_correlated_noise(correlation: float, gain: float) -> None:
    """sqrt(2 / (1 + rho)): closed form of the optimum of Roemer et al. 1990."""
    covariance = np.array([[1, correlation], [correlation, 1]])
    assert signal_to_noise(np.ones(2), covariance) == pytest.approx(gain, abs=1e-5)


def test_a_weak_coil_with_correlated_noise_helps() -> None:
    """b = (1, 0.2), rho = 0.5: optimum 1.058301, closed form of Roemer et al. 1990."""
    covariance = np.array([[1, 0.5], [0.5, 1]])
    reached = signal_to_noise(np.array([1, 0.2]), covariance)
    assert reached == pytest.approx(1.058301, abs=1e-6)


def test_result_is_in_units_and_phase_of_the_strongest_channel() -> None:
    pattern = np.array([0.3, 2.0 * np.exp(0.4j), -1.0j])
    signal, disturbance = array_record(pattern, 1e-8 * np.eye(3), 1)
    combined = fk.combine_channels(make(signal + disturbance, "channel")).values
    # six sigma of the noise per point, 1e-4 root mean square
    assert largest(combined - signal[1]) < 6e-4


def test_signal_left_in_the_tail_does_not_change_the_weights() -> None:
    """A tone as strong at the end as at the start: weights as from the true covariance."""
    pattern, covariance = np.array([1.0, 0.5j, -0.7]), random_covariance(4, 3) / 50
    _, disturbance = array_record(pattern, covariance, 2)
    late = np.outer(pattern, 30 * np.exp(2j * np.pi * 0.1 * np.arange(TIME.size)))
    fid = make(late + disturbance, "channel")
    combined = fk.combine_channels(fid, tail=0.5).values
    weights = np.linalg.solve(covariance, pattern).conj()
    weights = weights / (weights @ pattern)
    difference = combined - weights @ (late + disturbance)
    # some 250 independent points know the covariance to 6 %; three times that
    assert np.std(difference) < 0.18 * np.std(weights @ disturbance)


def test_shots_share_one_set_of_weights() -> None:
    """Coils are the same in every shot: the phase between shots is left as it is."""
    rng = np.random.default_rng(6)
    pattern, turns = np.array([1, 0.8j, -0.5]), np.exp(1j * np.array([0.0, 1.0, 2.0, -2.5]))
    values = pattern[:, None, None] * turns[None, :, None] * decay()
    fid = make(values + noise(rng, values.shape, 0.02), "channel", "shot")
    combined = fk.combine_channels(fid).values
    found = np.angle(combined @ decay().conj())
    assert largest(np.exp(1j * (found - found[0])) - turns / turns[0]) < 0.01  # radian
    assert found[0] == pytest.approx(0.0, abs=0.01)


def test_filled_zeros_are_no_noise() -> None:
    rng = np.random.default_rng(6)
    values = np.outer([1, 0.5], decay()) + noise(rng, (2, TIME.size), 0.02)
    fid = make(values, "channel")
    filled = fk.combine_channels(fk.zero_fill(fid, factor=2))
    assert filled.attrs["acquired_points"] == TIME.size
    difference = filled.values[: TIME.size] - fk.combine_channels(fid).values
    assert largest(difference) < ROUNDING
    assert not filled.values[TIME.size :].any()


def test_real_channels_combine_to_a_real_record() -> None:
    rng = np.random.default_rng(6)
    values = np.outer([1, 0.5, -0.2], decay().real) + 0.01 * rng.standard_normal((3, TIME.size))
    combined = fk.combine_channels(make(values, "channel"))
    assert combined.dtype == np.float64
    assert largest(combined.values - decay().real) < 0.06  # six sigma


@pytest.mark.parametrize("dtype", [np.complex64, np.complex128])
def test_sum_of_squares_is_a_magnitude(dtype: type) -> None:
    """Closed form; and Rayleigh's laws for noise alone, chi with 2 N degrees of freedom.

    Mean and spread over sigma for 4 channels: 2.74162 and 0.69534.
    """
    rng = np.random.default_rng(12)
    values = noise(rng, (4, 50_000), 1.0).astype(dtype)
    combined = fk.combine_channels(make(values, "channel"), method="sum of squares")
    assert combined.dtype == np.zeros(1, dtype).real.dtype
    limit = SINGLE if dtype is np.complex64 else ROUNDING
    assert largest(combined.values - np.linalg.norm(values, axis=0)) < limit * 8
    # 50,000 points: the mean is known to 0.1 %, the spread to 0.3 %; three of each
    assert combined.values.mean() == pytest.approx(2.74162, rel=0.003)
    assert combined.values.std() == pytest.approx(0.69534, rel=0.01)
