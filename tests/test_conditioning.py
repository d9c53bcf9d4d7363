"""The steps that mend a raw record."""

from __future__ import annotations

import math
from collections.abc import Callable

import numpy as np
import pytest
import scipy.signal
import xarray as xr
from hypothesis import given, settings
from hypothesis import strategies as st
from nmrglue.process import proc_base, proc_bl, proc_lp

import fidkit as fk
from fidkit.params import STEPS, FidkitError, ParameterError, Step
from fidkit.steps import conditioning

DWELL = 1e-4  # s
CARRIER = 60e6  # Hz
ROUNDING = 1e-12  # relative: double precision through some ten operations
SINGLE = 2e-6  # relative: the same in single precision

HERE = [spec for spec in STEPS.values() if spec.room == conditioning.__name__]


def make(values: np.ndarray, **facts: object) -> xr.DataArray:
    given = {"dwell_time": DWELL, "carrier_frequency": CARRIER, **facts}
    return fk.from_array(values, **given)


def decay(
    time: np.ndarray, frequency: float = 500.0, t2_star: float = 0.05, phase: float = 0.7
) -> np.ndarray:
    """exp(i phase) exp(2 pi i f t - t / T2*), t in s."""
    return np.exp(1j * phase + (2j * np.pi * frequency - 1 / t2_star) * time)


def noise(rng: np.random.Generator, shape: object, sigma: float) -> np.ndarray:
    return sigma * (rng.standard_normal(shape) + 1j * rng.standard_normal(shape))


def largest(difference: object) -> float:
    return float(np.abs(np.asarray(difference)).max())


def working(name: str) -> dict[str, object]:
    """Arguments with which a step runs on the records used here."""
    return {
        "remove_start": {"points": 3},
        "remove_end": {"keep_points": 200},
        "remove_filter_delay": {"delay": 20.25},
        "rebuild_start": {"points": 2, "coefficients": 8},
        "shift_frequency": {"frequency": 123.0},
    }.get(name, {})


# ---------------------------------------------------------------------------- all steps alike


def record(spec: Step, leading: tuple[int, ...] = (), single: bool = False) -> xr.DataArray:
    rng = np.random.default_rng(5)
    values = decay(np.arange(256) * DWELL, 800.0) + noise(rng, (*leading, 256), 0.01) + 0.05
    if spec.name == "make_analytic":
        values = values.real
    if single:
        values = values.astype(np.complex64 if np.iscomplexobj(values) else np.float32)
    dims = ["shot", "pulse_width"][: len(leading)]
    return make(values, dims=dims, coil="loop", time_start=2e-4)


@pytest.mark.parametrize("spec", HERE, ids=lambda spec: spec.name)
def test_values_just_outside_are_refused(spec: Step) -> None:
    """Every step against its own constraints."""
    for parameter in spec.parameters.values():
        low, high = parameter.range.low, parameter.range.high
        outside: list[object] = [math.nan, math.inf, -math.inf, "x", True, (0.0, 1.0)]
        if math.isfinite(low):
            outside += [low - 1, *([low] if parameter.range.above else [])]
            outside += [math.nextafter(low, -math.inf)] if parameter.kind == "number" else []
        if math.isfinite(high):
            outside += [high + 1]
            outside += [math.nextafter(high, math.inf)] if parameter.kind == "number" else []
        if not parameter.optional:
            outside.append(None)
        for value in outside:
            with pytest.raises(ParameterError, match=f"{spec.name}: {parameter.name} must be"):
                spec.function(record(spec), **{parameter.name: value})
        with pytest.raises(ParameterError, match="there is no parameter"):
            spec.function(record(spec), nonsense=1)


@pytest.mark.parametrize("spec", HERE, ids=lambda spec: spec.name)
def test_leading_dimensions_are_single_records(spec: Step) -> None:
    """One call over (2, 3) records equals six calls, and the input is left alone."""
    fid = record(spec, (2, 3))
    fid = fid.assign_coords(shot=[10, 11], temperature=("shot", [20.0, 21.0]))
    before = fid.copy(deep=True)
    together = spec.function(fid, **working(spec.name))
    assert fid.identical(before)
    assert together.dims == ("shot", "pulse_width", "time")
    assert list(together["temperature"].values) == [20.0, 21.0]
    for shot in range(2):
        for width in range(3):
            alone = spec.function(fid[shot, width], **working(spec.name))
            difference = largest(together[shot, width].values - alone.values)
            assert difference <= ROUNDING * largest(alone.values)
            assert np.array_equal(alone["time"].values, together["time"].values)


@pytest.mark.parametrize("spec", HERE, ids=lambda spec: spec.name)
def test_single_precision_and_facts_are_kept(spec: Step) -> None:
    single = spec.function(record(spec, single=True), **working(spec.name))
    double = spec.function(record(spec), **working(spec.name))
    assert single.dtype == np.complex64
    assert double.dtype == np.complex128
    assert largest(single.values - double.values) <= 20 * SINGLE * largest(double.values)
    assert single.attrs["coil"] == "loop"
    assert single.attrs["carrier_frequency"] == CARRIER
    assert single["time"].attrs["units"] == "s"
    assert single.attrs["history"].startswith(spec.name)


@pytest.mark.parametrize("spec", HERE, ids=lambda spec: spec.name)
def test_step_survives_a_saved_chain(spec: Step) -> None:
    result = spec.function(record(spec), **working(spec.name))
    again = fk.Chain.from_source(fk.chain_of(result).source)(record(spec))
    assert np.array_equal(again.values, result.values)


@pytest.mark.parametrize("spec", HERE, ids=lambda spec: spec.name)
def test_records_that_dask_holds_come_out_the_same(spec: Step) -> None:
    fid = record(spec, (2,))
    if spec.name == "remove_filter_delay":
        fid = fid.copy(data=np.stack([filtered(20.25, (0.1,), 0.004, 256)] * 2))
    chunked = spec.function(fid.chunk({"shot": 1, "time": 100}), **working(spec.name))
    plain = spec.function(fid, **working(spec.name))
    assert np.array_equal(chunked.values, plain.values)
    assert chunked["time"].equals(plain["time"])


NEEDS_COMPLEX = [
    "reverse_frequency",
    "remove_filter_delay",
    "shift_frequency",
    "correct_quadrature",
]


@pytest.mark.parametrize("name", NEEDS_COMPLEX)
def test_real_records_are_refused_with_the_remedy(name: str) -> None:
    real = make(np.cos(np.arange(128.0)))
    with pytest.raises(FidkitError, match=f"{name}: needs a complex signal.*make_analytic"):
        STEPS[name].function(real)


@pytest.mark.parametrize("name", ["remove_offset", "remove_start", "remove_end", "rebuild_start"])
def test_real_records_go_through_real_steps(name: str) -> None:
    """A real step acts on the real part alone."""
    whole = make(decay(np.arange(256) * DWELL), time_start=2e-4)
    arguments = working(name)
    assert STEPS[name].function(whole.real, **arguments).dtype == np.float64
    if name != "rebuild_start":
        real = STEPS[name].function(whole.real, **arguments)
        both = STEPS[name].function(whole, **arguments).values.real
        assert largest(real.values - both) <= ROUNDING


@settings(max_examples=25, deadline=None)
@given(
    seed=st.integers(0, 2**32 - 1),
    factor=st.complex_numbers(min_magnitude=1e-3, max_magnitude=1e3),
    name=st.sampled_from(["remove_offset", "remove_start", "remove_end", "shift_frequency"]),
)
def test_linear_steps_are_linear(seed: int, factor: complex, name: str) -> None:
    rng = np.random.default_rng(seed)
    one, two = make(noise(rng, 220, 1.0)), make(noise(rng, 220, 1.0))

    def run(fid: xr.DataArray) -> np.ndarray:
        return STEPS[name].function(fid, **working(name)).values

    mixed = run(one.copy(data=one.values + factor * two.values))
    parts = run(one) + factor * run(two)
    assert largest(mixed - parts) <= ROUNDING * (1 + abs(factor)) * 10


WRONG_USE = [
    ("remove_offset", {"tail": 1e-4}, "remove_offset: tail must hold at least one of the 64"),
    ("remove_start", {}, "remove_start: give duration or points; got neither"),
    ("remove_start", {"duration": 1e-4, "points": 1}, "give duration or points; got both"),
    ("remove_start", {"points": 63}, "points must be from 0 to 62 points.*got 63 points"),
    ("remove_start", {"duration": 1.0}, "duration must be from 0 to 62 points.*got 1 s"),
    ("remove_end", {}, "remove_end: give keep_duration or keep_points; got neither"),
    ("remove_end", {"keep_points": 1}, "keep_points must be from 2 to 64 points.*got 1 points"),
    ("remove_end", {"keep_duration": 0.0065}, "keep_duration must be from 2 to 64 points"),
    ("remove_filter_delay", {"delay": 63.0}, "delay must leave at least 2 of the 64 measured"),
    ("remove_filter_delay", {}, "no build-up of a digital filter.*give delay"),
    ("rebuild_start", {"points": 2, "coefficients": 40}, "fit_points must be from twice the 40"),
    ("rebuild_start", {"points": 2, "fit_points": 65}, "fit_points must be from twice the 32"),
    ("make_analytic", {}, "make_analytic: needs a real record"),
]


@pytest.mark.parametrize(("name", "arguments", "message"), WRONG_USE)
def test_wrong_use_says_what_and_how_to_mend_it(
    name: str, arguments: dict[str, object], message: str
) -> None:
    fid = make(decay(np.arange(64) * DWELL))
    with pytest.raises(FidkitError, match=message) as caught:
        STEPS[name].function(fid, **arguments)
    assert "\n" not in str(caught.value)


def test_a_spectrum_is_refused() -> None:
    spectrum = fk.fourier_transform(make(decay(np.arange(64) * DWELL)))
    for spec in HERE:
        with pytest.raises(FidkitError, match=r"must be time.*inverse_transform"):
            spec.function(spectrum)


# ---------------------------------------------------------------------------- simple steps


def test_reverse_frequency_mirrors_the_spectrum() -> None:
    """Fourier pair: the transform of conj(s) at f is the conjugate of that of s at -f."""
    fid = make(decay(np.arange(255) * DWELL))
    spectrum = fk.fourier_transform(fid).values
    mirrored = fk.fourier_transform(fk.reverse_frequency(fid)).values
    assert largest(mirrored - np.conj(spectrum[::-1])) <= ROUNDING * largest(spectrum)
    assert fk.reverse_frequency(fk.reverse_frequency(fid)).equals(fid)


def test_remove_offset_takes_the_mean_of_the_tail() -> None:
    """Closed form; and nmrglue's constant correction from an explicit range of points."""
    rng = np.random.default_rng(1)
    values = decay(np.arange(1000) * DWELL, t2_star=0.005) + (3 - 4j) + noise(rng, 1000, 0.1)
    ours = fk.remove_offset(make(values), tail=0.2)
    theirs = proc_bl.cbf_explicit(values.copy(), calc=slice(-200, None))
    assert largest(ours.values - theirs) <= ROUNDING * 5
    assert abs(ours.values[-200:].mean()) <= ROUNDING * 5


def test_remove_offset_leaves_filled_zeros() -> None:
    fid = fk.zero_fill(make(np.full(100, 2.0 + 1j)), points=256)
    result = fk.remove_offset(fid)
    assert not result.values.any()
    assert result.attrs["acquired_points"] == 100


def test_remove_start_and_end_keep_true_times() -> None:
    fid = make(decay(np.arange(100) * DWELL), time_start=1e-3)
    later = fk.remove_start(fid, duration=3 * DWELL)
    assert later.identical(fk.remove_start(fid, points=3).assign_attrs(later.attrs))
    assert np.array_equal(later["time"].values, fid["time"].values[3:])
    assert np.array_equal(later.values, fid.values[3:])
    shorter = fk.remove_end(fid, keep_duration=10 * DWELL)
    assert np.array_equal(shorter.values, fid.values[:10])
    assert np.array_equal(shorter["time"].values, fid["time"].values[:10])
    assert not np.shares_memory(shorter.values, fid.values)
    # between two points: what is earlier than the duration goes
    assert fk.remove_start(fid, duration=2.5 * DWELL).sizes["time"] == 97


def test_cutting_follows_the_measured_points() -> None:
    filled = fk.zero_fill(make(decay(np.arange(100) * DWELL)), points=256)
    assert fk.remove_start(filled, points=10).attrs["acquired_points"] == 90
    assert fk.remove_end(filled, keep_points=150).attrs["acquired_points"] == 100
    assert "acquired_points" not in fk.remove_end(filled, keep_points=80).attrs
    with pytest.raises(ParameterError, match="from 0 to 98 points"):
        fk.remove_start(filled, points=99)


def test_dead_time_does_not_turn_the_line() -> None:
    """Delay theorem: the later start goes into the phase through the time axis."""
    fid = make(decay(np.arange(4096) * DWELL, 625.0, 0.03, 0.5))
    later = fk.zero_fill(fk.remove_start(fid, points=7), points=4096)
    spectra = [fk.fourier_transform(fid), fk.fourier_transform(later)]
    phases = [np.angle(s.sel(frequency=625.0, method="nearest").item()) for s in spectra]
    # 625 Hz is a point of the axis; there only other bins' feet and aliases are left, below
    # dwell / T2* = 0.003 each; untreated, seven points late would turn it by 2.7 radian
    assert abs(phases[0] - phases[1]) < 0.003


def test_shift_frequency_moves_the_line_by_true_time() -> None:
    """Closed form, with a dead time."""
    time = 3e-4 + np.arange(512) * DWELL
    moved = fk.shift_frequency(make(decay(time, 400.0), time_start=3e-4), frequency=-150.0)
    # absolute in units of the signal: 2 pi f t reaches 160 rad, each rounded to 1e-16 of that
    assert largest(moved.values - decay(time, 250.0)) <= 1e-12
    back = fk.shift_frequency(moved, frequency=150.0)
    assert largest(back.values - decay(time, 400.0)) <= 1e-12


# ---------------------------------------------------------------------------- filter delay

OVERSAMPLING = 20


def response(delay: float, band: float = 0.9, window: float = 8.0) -> np.ndarray:
    """Linear-phase filter of scipy.signal.firwin, stop band below -80 dB for long ones."""
    taps = round(2 * delay * OVERSAMPLING) + 1
    return scipy.signal.firwin(taps, band / OVERSAMPLING, window=("kaiser", window))


def filtered(
    delay: float,
    frequencies: tuple[float, ...],
    rate: float,
    points: int = 4096,
    **filter_: float,
) -> np.ndarray:
    """An FID of unit lines through an oversampled linear-phase filter and decimation.

    Frequencies in cycles a point, rate in 1/point. The first sample counts half, so that the FID
    starts at its time and not half a fine sample earlier.
    """
    fine = np.arange(points * OVERSAMPLING) / OVERSAMPLING
    signal = ideal(fine, frequencies, rate)
    signal[0] *= 0.5
    return scipy.signal.oaconvolve(signal, response(delay, **filter_))[: fine.size : OVERSAMPLING]


def ideal(time: np.ndarray, frequencies: tuple[float, ...], rate: float) -> np.ndarray:
    lines = np.exp((2j * np.pi * np.array(frequencies)[:, None] - rate) * time)
    return np.exp(0.7j) * lines.sum(axis=0)


DELAYS = [61.0, 53.25, 70.625, 7.5]
#: What the mirrored build-up leaves, in first-point amplitudes and units of rate * 1 point: the
#: decay over the one or two points that the build-up takes.
MIRROR = 1.0


@pytest.mark.parametrize("delay", DELAYS)
@pytest.mark.parametrize("frequency", [0.0, 0.1, -0.3])
def test_filter_delay_leaves_the_fid_itself(delay: float, frequency: float) -> None:
    """Closed form: the decay sampled at the times that the axis states, from the first point.

    Its height is that of the pass band at the line, summed from the filter itself.
    """
    rate = 0.002
    fid = make(filtered(delay, (frequency,), rate), filter_delay=delay)
    out = fk.remove_filter_delay(fid)
    time = out["time"].values / DWELL
    assert time[0] == pytest.approx(math.ceil(delay) - delay, abs=1e-9)  # points
    taps = response(delay)
    lag = np.arange(taps.size) / OVERSAMPLING - delay
    height = np.sum(taps * np.exp((-2j * np.pi * frequency + rate) * lag))
    left = np.abs(out.values - height * ideal(time, (frequency,), rate))
    assert left.max() < MIRROR * rate
    # alias through the stop band, and rounding
    assert left[150:].max() < 1e-4
    # untreated, the first points are off by some hundredths to a half
    raw = make(filtered(delay, (frequency,), rate)).values[math.ceil(delay) :]
    assert np.abs(raw[:2] - height * ideal(time[:2], (frequency,), rate)).max() > 20 * left.max()
    assert "filter_delay" not in out.attrs


@pytest.mark.parametrize("delay", [61.0, 53.25])
def test_filter_delay_gives_flat_phase_over_the_band(delay: float) -> None:
    """Lines over +-40 % of the band come out in the phase they have: within one degree."""
    rate = 0.004
    for frequency in np.linspace(-0.4, 0.4, 17):
        out = fk.remove_filter_delay(make(filtered(delay, (frequency,), rate)), delay=delay)
        # the transform, by its definition, at the top itself and not at the nearest bin
        turn = np.exp(-2j * np.pi * frequency / DWELL * out["time"].values)
        phase = np.angle(np.sum(out.values * turn) * np.exp(-0.7j))
        assert abs(math.degrees(phase)) < 1.0


@pytest.mark.parametrize("delay", [61.0, 53.25])
def test_filter_delay_is_found_from_the_record(delay: float) -> None:
    """At a signal to noise ratio of 100: within 0.05 point, and as sure as it says.

    Bound for a shift of a band-limited step of height A in noise sigma: sigma / A points
    (Cramer-Rao, with the slope energy of a sinc, 1).
    """
    rng = np.random.default_rng(7)
    sigma, found = 0.01, []
    for _ in range(40):
        fid = make(filtered(delay, (0.12,), 0.004, 1024) + noise(rng, 1024, sigma))
        out = fk.remove_filter_delay(fid)
        found.append(math.ceil(delay) - out["time"].values[0] / DWELL)
        assert "filter delay found from the record" in out.attrs["notes"]
    errors = np.array(found) - delay
    errors -= np.round(errors)
    assert np.abs(errors).max() < 0.05
    # 40 trials: the spread is known to 11 %, the mean to 0.16 spreads; three of each
    assert 0.67 * sigma < errors.std() < 1.5 * sigma
    assert abs(errors.mean()) < 0.5 * sigma


@pytest.mark.parametrize("rate", [0.003, 0.03])
def test_stated_uncertainty_of_the_delay_covers(rate: float) -> None:
    """Errors over stated standard uncertainties have unit spread: 60 trials, known to 9 %.

    At the faster decay a good part of it comes from carrying the lines back.
    """
    rng = np.random.default_rng(11)
    pulls = []
    for _ in range(60):
        sigma = float(rng.uniform(0.005, 0.03))
        values = filtered(61.0, (0.1, -0.17), rate, 1024) + noise(rng, 1024, sigma)
        answer = conditioning._delay_of(values)
        assert answer is not None
        delay, error, shape = answer
        pulls.append((delay - 61.0) / math.hypot(error, shape))
    assert 0.7 < float(np.std(pulls)) < 1.3
    assert abs(float(np.mean(pulls))) < 0.4  # three standard errors of the mean


@pytest.mark.parametrize("level", [0.0, 1e-5, 1e-4, 1e-3, 1e-2])
@pytest.mark.parametrize("filter_", [{"band": 0.9, "window": 8.0}, {"band": 0.75, "window": 4.0}])
@pytest.mark.parametrize("delay", [53.25, 61.0, 67.95, 70.625])
def test_found_delay_is_right_or_refused(
    delay: float, filter_: dict[str, float], level: float
) -> None:
    """Within 0.05 points whatever the noise, and as sure as it says. By construction.

    What is left in the stop band rings on after the edge, and must not be taken for lines.
    """
    rng = np.random.default_rng(13)
    for frequencies in ((0.0,), (0.12,), (0.03, -0.12, 0.2)):
        values = filtered(delay, frequencies, 0.002, 1024, **filter_) + noise(rng, 1024, level)
        found, error = conditioning._find_delay(make(values))
        assert abs(found - delay) < 0.05
        assert abs(found - delay) < 4 * error  # of 120 errors fewer than one in 100 is larger
        assert error < 0.02


def test_delay_of_a_line_at_the_edge_of_the_filter_is_refused() -> None:
    values = filtered(61.0, (-0.37,), 0.002, 1024, band=0.75, window=4.0)
    with pytest.raises(FidkitError, match=r"shows to 0.02 points or better; this record leaves"):
        fk.remove_filter_delay(make(values))


@pytest.mark.parametrize("level", [0.005, 0.02])
def test_lines_that_noise_feigns_are_dropped_round_after_round(level: float) -> None:
    """Noise through the same filter, of which this seed feigns lines that go in two rounds."""
    rng, oversampling, points = np.random.default_rng(0), 16, 4096
    fine = np.arange(points * oversampling) / oversampling
    white = rng.normal(size=fine.size) + 1j * rng.normal(size=fine.size)
    signal = np.exp(0.4j + (0.06j * np.pi - 0.003) * fine)
    signal[0] *= 0.5
    taps = scipy.signal.firwin(
        round(81 * oversampling) + 1, 0.75 / oversampling, window=("kaiser", 4)
    )
    values = scipy.signal.fftconvolve(signal + level * math.sqrt(oversampling) * white, taps)
    record = values[: fine.size : oversampling]
    delay, error, shape = conditioning._delay_of(record)
    assert abs(delay - 40.5) < 4 * math.hypot(error, shape)


@pytest.mark.parametrize(
    "shape",
    [
        lambda t: np.exp((0.2j - 0.01) * t),  # no filter
        lambda t: np.sin(0.02 * t) * np.exp((0.2j - 0.01) * t),  # two lines in opposite phase
        lambda t: np.exp(-(((t - 300) / 80) ** 2) + 0.2j * t),  # echo
        lambda t: np.exp(-np.abs(t - 300) / 80 + 0.2j * t),  # echo
        lambda t: (1 - np.exp(-t / 6)) * np.exp((0.2j - 0.01) * t),  # a receiver slow to open
        lambda t: 0 * t,
    ],
)
def test_no_delay_is_found_where_no_filter_was(shape: Callable[[np.ndarray], np.ndarray]) -> None:
    values = shape(np.arange(2048.0)) + noise(np.random.default_rng(1), 2048, 0.01)
    with pytest.raises(FidkitError, match="no build-up"):
        fk.remove_filter_delay(make(values))


def test_a_burst_long_after_the_signal_is_not_carried_back() -> None:
    """Carried back over 3000 points at 0.4 a point it would overflow."""
    time = np.arange(8192.0)
    slow, short = (
        np.where(time < start, 0, np.exp((0.2j - rate) * np.maximum(time - start, 0)))
        for start, rate in ((3000, 1e-4), (6004, 0.4))
    )
    values = slow + short + noise(np.random.default_rng(1), 8192, 1e-4)
    delay, _ = conditioning._find_delay(make(values))
    assert 2999 <= delay <= 3000  # a step between two points
    with pytest.raises(FidkitError, match="no build-up"):
        fk.remove_filter_delay(make(values).copy(data=np.where(time == 9, np.nan, values)))


def test_start_is_not_changed_before_the_filter_delay() -> None:
    fid = make(filtered(20.25, (0.1,), 0.004, 512), filter_delay=20.25)
    for name in ("remove_start", "rebuild_start"):
        with pytest.raises(FidkitError, match=r"delays by 20.25 points.*remove_filter_delay first"):
            STEPS[name].function(fid, points=2)
    assert fk.remove_start(fk.remove_filter_delay(fid), points=2).sizes["time"] == 489
    with pytest.raises(FidkitError, match="attribute filter_delay must be a number"):
        fk.remove_filter_delay(fid.assign_attrs(filter_delay=-1.0))


def test_one_delay_for_all_records() -> None:
    rng = np.random.default_rng(3)
    clean = filtered(53.25, (0.12,), 0.004, 1024)
    shots = clean * np.array([[1.0], [0.5], [0.02]]) + noise(rng, (3, 1024), 0.01)
    out = fk.remove_filter_delay(make(shots))
    assert out["time"].values[0] / DWELL == pytest.approx(0.75, abs=0.05)  # points


def test_filter_delay_leaves_only_noise_at_the_end() -> None:
    rng = np.random.default_rng(9)
    sigma = 0.01
    values = filtered(61.0, (0.2,), 0.01, 4096) + noise(rng, 4096, sigma)
    for delay in (None, 61.0):
        out = fk.remove_filter_delay(make(values), delay=delay)
        end = out.values[-400:]
        assert np.array_equal(end, values[-400:])
        # per component known to 1 / sqrt(2 * 800)
        assert np.sqrt(np.mean(np.abs(end) ** 2) / 2) == pytest.approx(sigma, rel=0.08)


def test_noise_of_the_build_up_is_not_mirrored() -> None:
    """Where the build-up is below the noise the points stay as measured."""
    rng = np.random.default_rng(9)
    values = filtered(61.0, (0.2,), 0.01, 2048) + noise(rng, 2048, 0.01)
    out = fk.remove_filter_delay(make(values), delay=61.0)
    assert np.array_equal(out.values[40:], values[101:])


def test_filter_delay_keeps_the_dead_time() -> None:
    """The signal starts at the stated delay; that moment is the time the record gave its start."""
    fid = make(filtered(53.25, (0.1,), 0.004), time_start=2e-4)
    out = fk.remove_filter_delay(fid, delay=53.25)
    assert out["time"].values[0] == pytest.approx(2e-4 + 0.75 * DWELL, rel=1e-9)


def test_whole_delay_is_the_first_order_phase() -> None:
    """Delay theorem: 360 degrees over the spectral width for each point."""
    values = filtered(61.0, (0.1,), 0.004)
    out = fk.remove_filter_delay(make(values), delay=61.0)
    spectrum = fk.fourier_transform(fk.zero_fill(out, points=4096))
    whole = fk.fourier_transform(make(values))
    turned = whole.values * np.exp(2j * np.pi * whole["frequency"].values * DWELL * 61.0)
    near = np.abs(whole["frequency"].values - 1000.0) < 100.0
    # they differ by how the first point counts, half of it: small against the line of height 250
    difference = largest((spectrum.values - turned)[near]) / largest(turned)
    assert difference < 0.6 * 0.004


# ---------------------------------------------------------------------------- lost first points


@pytest.mark.parametrize("lost", [1, 4, 16])
def test_rebuilt_points_are_the_decay(lost: int) -> None:
    """Closed form: a sum of three decays without noise follows its prediction exactly."""
    time = np.arange(512) * DWELL
    whole = decay(time, 300.0) + 0.5 * decay(time, -1200.0, 0.02) + 0.2 * decay(time, 80.0, 0.1)
    cut = make(whole[lost:], time_start=lost * DWELL)
    for rebuilt in (
        fk.rebuild_start(cut),
        fk.rebuild_start(cut, points=lost, coefficients=8, fit_points=64),
    ):
        # relative: singular values down to 1e-14 of the largest, amplified by the prediction
        assert largest(rebuilt.values - whole) < 1e-7 * largest(whole)
        assert largest(rebuilt["time"].values - time) < ROUNDING


# the library still uses numpy.matrix
@pytest.mark.filterwarnings("ignore:the matrix subclass:PendingDeprecationWarning")
def test_rebuilt_points_agree_with_an_independent_library() -> None:
    """nmrglue 0.12, backward linear prediction by singular value decomposition."""
    time = np.arange(300) * DWELL
    whole = decay(time, 300.0) + 0.5 * decay(time, -1200.0, 0.02)
    # as many lines as coefficients: nothing to cut off, which the library never does
    values = whole[4:]
    theirs = proc_lp.lp(
        values,
        pred=4,
        slice=slice(0, 64),
        order=2,
        mode="b",
        append="before",
        bad_roots=None,
        method="svd",
    )
    ours = fk.rebuild_start(make(values), points=4, coefficients=2, fit_points=64)
    assert largest(ours.values - theirs) < 1e-9 * largest(whole)


def test_truncation_keeps_noise_out_of_rebuilt_points() -> None:
    """Two lines rebuilt from 256 points by 32 coefficients: below the noise of a measured point.

    Without truncation the root mean square is half a point's noise, with it a third.
    """
    rng = np.random.default_rng(2)
    sigma, time = 0.01, np.arange(300) * DWELL
    whole = decay(time, 300.0) + 0.5 * decay(time, -1200.0, 0.02)
    noisy = whole[10:] + noise(rng, (20, 290), sigma)
    rebuilt = fk.rebuild_start(make(noisy, time_start=10 * DWELL)).values[:, :10]
    spread = np.sqrt(np.mean(np.abs(rebuilt - whole[:10]) ** 2) / 2)
    assert spread < 0.4 * sigma


def test_rebuilding_has_one_limit() -> None:
    fid = make(decay(np.arange(256) * DWELL), time_start=3.0)
    with pytest.raises(FidkitError, match=r"at most 4096 points may be rebuilt.*30000 points"):
        fk.rebuild_start(fid)
    broken = fid.values.copy()
    broken[7] = np.nan
    with pytest.raises(FidkitError, match=r"first 256 points of every record must be finite"):
        fk.rebuild_start(fid.copy(data=broken), points=2)


def test_rebuilding_never_goes_before_the_pulse() -> None:
    fid = make(decay(0.75 * DWELL + np.arange(128) * DWELL), time_start=0.75 * DWELL)
    assert fk.rebuild_start(fid).sizes["time"] == 128
    assert np.array_equal(fk.rebuild_start(fid).values, fid.values)
    filled = fk.zero_fill(fid, points=512)
    longer = fk.rebuild_start(filled, points=2, coefficients=8)
    assert longer.attrs["acquired_points"] == 130


# ---------------------------------------------------------------------------- quadrature


def imbalanced(values: np.ndarray, gain: float, phase: float) -> np.ndarray:
    turned = values * np.exp(1j * math.radians(phase))
    return values.real + 1j * gain * turned.imag


def image(fid: xr.DataArray, frequency: float) -> float:
    """Height of the mirror image over that of the line."""
    spectrum = np.abs(fk.fourier_transform(fk.apodize_exponential(fid, broadening=5.0)))
    line, mirror = (
        spectrum.sel(frequency=place, method="nearest").item() for place in (frequency, -frequency)
    )
    return mirror / line


@pytest.mark.parametrize(
    ("gain", "phase", "law"),
    [
        (1.0, 10.0, math.tan(math.radians(5.0))),
        (1.0, -3.0, math.tan(math.radians(1.5))),
        (1.1, 0.0, 0.1 / 2.1),
    ],
)
def test_image_law_and_its_removal(gain: float, phase: float, law: float) -> None:
    """Image over line tan(phase / 2): delay theorem, as in sequentially sampled quadrature."""
    time = np.arange(4096) * DWELL
    clean = decay(time, 1250.0, 0.05)
    fid = make(imbalanced(clean, gain, phase))
    # the foot of the line itself at its image: width over twice the distance, both in Hz
    foot = (1 / (math.pi * 0.05) + 5.0) / 2 / 2500.0
    assert image(fid, 1250.0) == pytest.approx(law, abs=1.1 * foot)
    given_ = fk.correct_quadrature(fid, gain=gain, phase=phase)
    assert largest(given_.values - clean) < ROUNDING * 10
    found = fk.correct_quadrature(fid)
    assert largest(found.values - clean) < 1e-3  # of the first point: the line's own foot
    assert image(found, 1250.0) < image(make(clean), 1250.0) + 5e-4


def test_quadrature_by_an_independent_library() -> None:
    """nmrglue 0.12 applies imaginary * (1 + a) + f * real."""
    values = imbalanced(decay(np.arange(256) * DWELL), 1.2, 7.0)
    angle = math.radians(7.0)
    theirs = proc_base.qart(values.copy(), 1 / (1.2 * math.cos(angle)) - 1, -math.tan(angle))
    ours = fk.correct_quadrature(make(values), gain=1.2, phase=7.0)
    assert largest(ours.values - theirs) < ROUNDING * 2


def test_quadrature_finds_one_where_the_other_is_given() -> None:
    clean = decay(np.arange(4096) * DWELL, 1250.0)
    fid = make(imbalanced(clean, 1.1, 5.0))
    for known in ({"gain": 1.1}, {"phase": 5.0}):
        assert largest(fk.correct_quadrature(fid, **known).values - clean) < 1e-3


@pytest.mark.parametrize("values", [np.ones(64) * 1j, np.zeros(64) + 0j, np.arange(64) * (1 + 1j)])
def test_quadrature_of_a_dead_channel_is_refused(values: np.ndarray) -> None:
    with pytest.raises(FidkitError, match="the channels must both carry the signal"):
        fk.correct_quadrature(make(values))


# ---------------------------------------------------------------------------- analytic signal


@pytest.mark.parametrize("points", [1000, 1001])
def test_analytic_signal_agrees_with_independent_libraries(points: int) -> None:
    """scipy.signal.hilbert and nmrglue's, both over the same padded length."""
    values = np.random.default_rng(4).standard_normal(points)
    length = scipy.fft.next_fast_len(2 * points)
    ours = fk.make_analytic(make(values)).values
    assert largest(ours - scipy.signal.hilbert(values, length)[:points]) < ROUNDING * 4
    # nmrglue multiplies the imaginary part by the padded length over the length
    theirs = proc_base.ht(values, length).imag * points / length
    assert largest(ours.imag - theirs) < ROUNDING * 4
    assert np.array_equal(ours.real, values)


def test_analytic_signal_of_a_decaying_cosine() -> None:
    """Bedrosian's theorem: the Hilbert transform of a slow decay times cos is the decay times sin."""
    time = np.arange(8192) * DWELL
    clean = decay(time, 2000.0, 0.05)
    out = fk.make_analytic(make(clean.real)).values
    # 5 ms, ten periods, from the start on; the bend there falls as one over the number of periods
    assert largest(out[50:-50] - clean[50:-50]) < 0.02
    assert abs(np.vdot(clean, out) / np.vdot(clean, clean) - 1) < 0.01


def test_analytic_signal_keeps_filled_zeros() -> None:
    filled = fk.zero_fill(make(np.cos(np.arange(100.0))), points=256)
    assert not fk.make_analytic(filled).values[100:].any()
