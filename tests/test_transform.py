"""Fourier pairs, widths, zero filling, the first point, and the way back."""

import math

import nmrglue as ng
import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.interpolate import CubicSpline

import fidkit as fk
from fidkit import signals
from fidkit.params import ParameterError

#: Rounding of double precision through a transform of some thousand points, relative to the top.
DOUBLE = 1e-12
#: The same in single precision.
SINGLE = 2e-6


def record(*lines: tuple[float, float, complex], points: int = 16384, dwell: float = 2e-4, **more):
    """An FID of damped lines (frequency Hz, rate 1/s, amplitude)."""
    time = more.get("time_start", 0.0) + dwell * np.arange(points)
    data = sum(a * np.exp(2j * np.pi * f * time - r * time) for f, r, a in lines)
    return fk.from_array(data, dwell_time=dwell, carrier_frequency=1e8, **more)


def full_width(values, frequency, level=0.5):
    """Full width of the tallest feature at a fraction of its height, by cubic splines."""
    top = int(np.argmax(values))
    low = np.flatnonzero(values < 0.7 * level * values[top])
    near = slice(max(low[low < top].max() - 4, 0), low[low > top].min() + 5)
    frequency, values = frequency[near], values[near]
    peaks = CubicSpline(frequency, values).derivative().roots(extrapolate=False)
    height = CubicSpline(frequency, values)(peaks).max()
    crossings = CubicSpline(frequency, values - level * height).roots(extrapolate=False)
    assert crossings.size == 2
    return np.ptp(crossings)


def spectrum_of(fid, factor=8, first_point="half"):
    return fk.fourier_transform(fk.zero_fill(fid, factor=factor), first_point=first_point)


# Source of the next five: closed forms of the Fourier pair exp(-R t) <-> Lorentzian.


@pytest.mark.parametrize(("t2_star", "width"), [(0.01, 31.8310), (0.1, 3.18310), (1.0, 0.318310)])
def test_width_of_a_decay(t2_star, width):
    points, dwell = 16384, t2_star / 1000  # 16 decay times, a thousand points each
    fid = record((0.0, 1 / t2_star, 1.0), points=points, dwell=dwell)
    spectrum = spectrum_of(fid)
    found = full_width(spectrum.values.real, spectrum.frequency.values)
    printed = 2e-6  # of six digits
    assert found == pytest.approx(width, rel=printed + 2e-6)
    assert spectrum.values.real.max() == pytest.approx(t2_star, rel=1e-6)  # A(0) = 1/R


def test_dispersion_has_its_extrema_at_half_the_width():
    spectrum = spectrum_of(record((0.0, 20.0, 1.0), dwell=1e-4))
    frequency, values = spectrum.frequency.values, spectrum.values
    near = np.abs(frequency) < 10
    extrema = CubicSpline(frequency[near], values.imag[near]).derivative().roots(extrapolate=False)
    assert extrema.size == 2
    assert np.ptp(extrema) == pytest.approx(20 / np.pi, rel=1e-4)
    assert np.abs(values.imag).max() == pytest.approx(values.real.max() / 2, rel=1e-4)


def test_magnitude_is_wider_by_the_root_of_three_and_power_is_as_wide_as_absorption():
    spectrum = spectrum_of(record((0.0, 20.0, 1.0), dwell=1e-4))
    frequency, magnitude = spectrum.frequency.values, np.abs(spectrum.values)
    width = 20 / np.pi
    assert full_width(magnitude, frequency) == pytest.approx(math.sqrt(3) * width, rel=1e-4)
    assert full_width(magnitude**2, frequency) == pytest.approx(width, rel=1e-4)


@pytest.mark.parametrize(
    ("level", "widths"), [(0.1, 3.0), (0.01, 9.9499), (0.0055, 13.4469), (0.0011, 30.1345)]
)
def test_feet_of_a_lorentzian(level, widths):
    spectrum = spectrum_of(record((0.0, 10.0, 1.0), points=32768, dwell=1e-4))
    found = full_width(spectrum.values.real, spectrum.frequency.values, level)
    assert found == pytest.approx(widths * 10 / np.pi, rel=1e-3)


def test_width_of_a_gaussian_decay():
    # closed form: FWHM = sqrt(2 ln 2) / (pi s) = 0.3747813 / s
    deviation, dwell = 0.05, 2e-4
    time = dwell * np.arange(4096)
    fid = fk.from_array(
        np.exp(-(time**2) / (2 * deviation**2)) + 0j, dwell_time=dwell, carrier_frequency=1e8
    )
    spectrum = spectrum_of(fid)
    found = full_width(spectrum.values.real, spectrum.frequency.values)
    assert found == pytest.approx(0.3747813 / deviation, rel=1e-5)


@pytest.mark.parametrize(("first_point", "counted"), [("full", 1.0), ("half", 0.5)])
def test_first_point(first_point, counted):
    # Source: Otting, Widmer, Wagner and Wuthrich, J. Magn. Reson. 66, 187 (1986), from memory;
    # values are closed forms of the discrete transform, R dt = 0.02
    dwell = 1e-3
    spectrum = fk.fourier_transform(
        record((0.0, 20.0, 1.0), points=4096, dwell=dwell), first_point=first_point
    )
    scaled = spectrum.values / dwell
    assert scaled.mean() == pytest.approx(counted, rel=DOUBLE)  # of s[0] = 1
    half = 0.5 - counted
    assert scaled[0].real == pytest.approx(0.5 * math.tanh(0.01) - half, rel=1e-9)  # Nyquist
    assert scaled.real.max() == pytest.approx(0.5 / math.tanh(0.01) - half, rel=1e-9)
    assert 0.5 / math.tanh(0.01) == pytest.approx(50.00167, rel=1e-7)


@settings(max_examples=30, deadline=None)
@given(
    points=st.integers(2, 200),
    start=st.floats(-0.01, 0.5),
    dwell=st.floats(1e-9, 1e-2),
    first_point=st.sampled_from(["full", "half"]),
    seed=st.integers(0, 2**32 - 1),
)
def test_transform_is_the_sum_it_is_said_to_be_and_comes_back(
    points, start, dwell, first_point, seed
):
    """Source: the defining sum with the true times; Parseval's theorem."""
    random = np.random.default_rng(seed)
    data = random.normal(size=(2, points)) + 1j * random.normal(size=(2, points))
    start *= dwell * 100
    fid = fk.from_array(data, dwell_time=dwell, carrier_frequency=1e8, time_start=start)
    spectrum = fk.fourier_transform(fid, first_point=first_point)
    counted = data.copy()
    counted[:, 0] *= {"full": 1, "half": 0.5}[first_point]
    # the axis: its lowest value and spacing are -1/(2 dt) (even lengths) and 1/(N dt)
    frequency = (np.arange(points) - points // 2) / (points * dwell)
    largest = DOUBLE * np.abs(data).sum() * dwell
    np.testing.assert_allclose(spectrum.frequency, frequency, rtol=1e-9, atol=1e-9 / dwell)
    kernel = np.exp(-2j * np.pi * np.outer(fid.time.values, spectrum.frequency.values))
    np.testing.assert_allclose(
        spectrum.values, dwell * counted @ kernel, rtol=0, atol=largest * 100
    )
    energy = (np.abs(counted) ** 2).sum() * dwell
    assert (np.abs(spectrum.values) ** 2).sum() / (points * dwell) == pytest.approx(
        energy, rel=DOUBLE
    )
    back = fk.inverse_transform(spectrum)
    np.testing.assert_allclose(back.values, data, rtol=0, atol=DOUBLE * 100 * np.abs(data).max())
    np.testing.assert_allclose(back.time, fid.time, rtol=1e-9, atol=1e-9 * dwell)
    assert back.attrs["units"] == fid.attrs["units"]


def test_parseval_with_zeros():
    # Source: Parseval's theorem, the sum over the zero-filled length
    fid = record((55.0, 30.0, 1 + 1j), (-200.0, 5.0, 0.5), points=1000)
    for factor in (1, 1.5, 3):
        spectrum = fk.fourier_transform(fk.zero_fill(fid, factor=factor))
        spacing = signals.spectral_width(spectrum) / spectrum.size
        energy = (np.abs(spectrum.values) ** 2).sum() * spacing
        assert energy == pytest.approx((np.abs(fid.values) ** 2).sum() * 2e-4, rel=DOUBLE)


def test_zero_filling_keeps_the_points_it_had():
    # Source: the discrete transform, fft(s, 2N)[::2] = fft(s)
    fid = record((55.0, 30.0, 1.0), (-200.0, 5.0, 0.5), points=1024)
    once = fk.fourier_transform(fid)
    twice = fk.fourier_transform(fk.zero_fill(fid, factor=2))
    np.testing.assert_allclose(
        twice.values[::2], once.values, rtol=0, atol=DOUBLE * np.abs(once.values).max()
    )
    np.testing.assert_allclose(twice.frequency[::2], once.frequency, rtol=DOUBLE)


def test_zero_filling_once_makes_the_real_part_enough():
    # Source: Bartholdi and Ernst, J. Magn. Reson. 11, 9 (1973), from memory; causality
    random = np.random.default_rng(5)
    data = random.normal(size=256) + 1j * random.normal(size=256)
    fid = fk.from_array(data, dwell_time=1e-3, carrier_frequency=1e8)

    def from_real_part(factor):
        spectrum = fk.fourier_transform(fk.zero_fill(fid, factor=factor))
        return fk.inverse_transform(spectrum.copy(data=spectrum.values.real + 0j)).values

    again = from_real_part(2)
    np.testing.assert_allclose(2 * again[1:256], data[1:], rtol=0, atol=1e-12)
    assert again[0].real == pytest.approx(data[0].real, rel=DOUBLE)
    assert abs(again[0].imag) < 1e-12
    assert np.abs(2 * from_real_part(1)[1:] - data[1:]).max() > 1


@pytest.mark.parametrize(
    ("given", "length"),
    [
        ({"factor": 1.1}, 1100),
        ({"factor": 1}, 1000),
        ({"points": 1001}, 1001),
        ({}, 1000),
    ],
)
def test_zero_fill_lengths(given, length):
    filled = fk.zero_fill(record((1.0, 1.0, 1.0), points=1000), **given)
    assert filled.sizes["time"] == length
    assert filled.attrs["acquired_points"] == 1000
    assert fk.zero_fill(filled, factor=2).attrs["acquired_points"] == 1000
    assert not filled.values[1000:].any()


def test_zero_fill_refuses_to_guess():
    fid = record((1.0, 1.0, 1.0), points=100)
    with pytest.raises(fk.FidkitError, match="factor or points, not both"):
        fk.zero_fill(fid, factor=2, points=200)
    with pytest.raises(fk.FidkitError, match=r"at least the 100 .* got 50"):
        fk.zero_fill(fid, points=50)


# Source of the next: the half-height point of sin(x)/x, x = 1.89549, and its first minimum.


def test_a_record_cut_short():
    points, dwell = 4096, 1e-3
    length = points * dwell
    spectrum = spectrum_of(record((0.0, 0.0, 1.0), points=points, dwell=dwell), factor=16)
    frequency, values = spectrum.frequency.values, spectrum.values
    magnitude = full_width(np.abs(values), frequency) * length
    absorption = full_width(values.real, frequency) * length
    edge = 2 / points  # the last point counts in full, that is half a point too much
    assert magnitude == pytest.approx(1.206709, rel=edge)
    assert absorption == pytest.approx(0.603354, rel=edge)
    near = np.abs(frequency) < 1 / length
    lobe = CubicSpline(frequency[near], values.real[near])
    lowest = lobe(lobe.derivative().roots(extrapolate=False)).min()
    assert lowest / values.real.max() == pytest.approx(-0.217234, rel=2 * edge)


@pytest.mark.parametrize(
    ("decays", "product"), [(1, 0.70646), (2, 0.42489), (3, 0.34770), (5, 0.31780)]
)
def test_width_of_a_decay_cut_short(decays, product):
    # Source: half-height point of the closed form of the truncated absorption line
    points, dwell, t2_star = 16384, 1e-4, 16384e-4 / decays
    spectrum = spectrum_of(record((0.0, 1 / t2_star, 1.0), points=points, dwell=dwell))
    found = full_width(spectrum.values.real, spectrum.frequency.values) * t2_star
    assert found == pytest.approx(product, rel=2e-4)


@pytest.mark.parametrize(("factor", "height"), [(1, 0.63662), (2, 0.90032), (4, 0.97450)])
def test_height_between_two_points(factor, height):
    # Source: Harris, Proc. IEEE 66, 51 (1978), Table I, from memory; recomputed, sinc(1/(2 factor))
    points, dwell = 4096, 1e-3
    off = 0.5 / (factor * points * dwell)
    spectrum = spectrum_of(
        record((off, 0.0, 1.0), points=points, dwell=dwell), factor=factor, first_point="full"
    )
    assert np.abs(spectrum.values).max() / (points * dwell) == pytest.approx(height, rel=1e-5)


@pytest.mark.parametrize(
    ("decays", "factor", "height"),
    [(3, 1, 0.5269), (3, 2, 0.8475), (5, 1, 0.7267), (5, 2, 0.9183)],
)
def test_height_of_a_damped_line_between_two_points(decays, factor, height):
    # Source: closed form of the truncated absorption line half a bin off its top
    points, dwell = 8192, 1e-3
    rate = decays / (points * dwell)

    def top(off):
        fid = record((off, rate, 1.0), points=points, dwell=dwell)
        return spectrum_of(fid, factor=factor).values.real.max()

    assert top(0.5 / (factor * points * dwell)) / top(0.0) == pytest.approx(height, rel=2e-4)


def test_noise_through_window_and_transform():
    # Source: Parseval; std of the real part = dwell * sigma * sqrt(sum w^2)
    random = np.random.default_rng(11)
    records, points, dwell, sigma = 200, 2048, 1e-3, 0.7
    noise = random.normal(size=(records, points)) + 1j * random.normal(size=(records, points))
    fid = fk.from_array(sigma * noise, dwell_time=dwell, carrier_frequency=1e8)
    weight = np.exp(-np.pi * 2.0 * dwell * np.arange(points))
    counting = 1e-2  # four standard errors of the std over the independent points
    plain = fk.fourier_transform(fid).values.real.std()
    assert plain == pytest.approx(dwell * sigma * points**0.5, rel=counting)
    weighted = fk.fourier_transform(fk.apodize_exponential(fid, broadening=2.0)).values.real.std()
    assert weighted == pytest.approx(dwell * sigma * np.sum(weight**2) ** 0.5, rel=counting)


def test_phase_of_the_sum_of_all_points_is_that_of_the_first():
    # Source: the discrete transform
    fid = record((33.0, 8.0, np.exp(0.4j)), (120.0, 20.0, 0.5), points=1024)
    spectrum = fk.fourier_transform(fid)
    assert np.angle(spectrum.values.sum()) == pytest.approx(np.angle(fid.values[0]), abs=1e-12)


def test_dead_time_enters_the_phase():
    # Source: delay theorem, phase slope 2 pi f tau. What is lost is a decay's own height.
    full = record((100.0, 10.0, 1.0), points=16384, dwell=1e-4)
    late = record((100.0, 10.0, 1.0), points=16384, dwell=1e-4, time_start=2.5e-4)
    here = {"frequency": 100.0, "method": "nearest"}
    whole, cut = (fk.fourier_transform(fid).sel(**here).item() for fid in (full, late))
    lost = 10.0 * 2.5e-4  # radian: the dispersive share of what is missing
    assert np.angle(cut) == pytest.approx(np.angle(whole), abs=lost)
    moved = late.assign_coords(time=full.time)  # the same points, called early
    turned = np.angle(fk.fourier_transform(moved).sel(**here).item() / cut)
    frequency = float(fk.fourier_transform(full).frequency.sel(**here))
    assert turned == pytest.approx(2 * np.pi * frequency * 2.5e-4, rel=1e-9)


@pytest.mark.parametrize("points", [64, 65])
def test_spectrum_from_elsewhere_comes_back_at_its_frequencies(points):
    # Source: closed form. The axis lies half a point beside the transform's own grid.
    width = 1000.0
    frequency = (np.arange(points) - 10.5) * width / points
    line = points // 3
    spectrum = fk.spectrum_from_array(
        np.eye(points)[line] + 0j, frequency=frequency, carrier_frequency=1e8, units="V"
    )
    fid = fk.inverse_transform(spectrum)
    wanted = np.exp(2j * np.pi * frequency[line] * np.arange(points) / width) * width / points
    np.testing.assert_allclose(fid.values, wanted, rtol=0, atol=DOUBLE * 100 * width / points)
    assert fid.attrs["units"] == "V s-1"


@pytest.mark.parametrize(("units", "after"), [("V", "V s"), ("1", "s"), ("V s-1", "V")])
def test_units(units, after):
    fid = record((1.0, 1.0, 1.0), points=16, units=units)
    spectrum = fk.fourier_transform(fid)
    assert spectrum.attrs["units"] == after
    assert fk.inverse_transform(spectrum).attrs["units"] == units


def test_agrees_with_nmrglue():
    # Source: nmrglue 0.12, proc_base.zf_pad and fft (no dwell time in it)
    data = record((55.0, 30.0, 1.0), (-200.0, 5.0, 0.5), points=1000).values
    ours = fk.fourier_transform(
        fk.zero_fill(fk.from_array(data, dwell_time=1.0, carrier_frequency=1e8), points=1536)
    )
    theirs = ng.proc_base.fft(ng.proc_base.zf_pad(data, 536))
    np.testing.assert_allclose(ours.values, theirs, rtol=0, atol=DOUBLE * np.abs(theirs).max())


def test_real_values_are_refused_with_the_remedy():
    fid = fk.from_array(np.ones(8), dwell_time=1e-3, carrier_frequency=1e8)
    with pytest.raises(fk.FidkitError, match="make_analytic"):
        fk.fourier_transform(fid)
    spectrum = fk.fourier_transform(record((0.0, 1.0, 1.0), points=8))
    with pytest.raises(fk.FidkitError, match="start from the FID"):
        fk.inverse_transform(spectrum.real)


# -- what holds for every step of windows, transforms, phases and baselines ---------------------

ROOMS = ("apodization", "transform", "phase", "baseline")
STEPS = [item for item in fk.STEPS.values() if item.room.rpartition(".")[2] in ROOMS]
LINEAR = [s for s in STEPS if s.name not in ("apodize_matched", "auto_phase", "correct_baseline")]
ARGUMENTS = {
    "apodize_lorentz_to_gauss": {"narrowing": 1.0, "broadening": 4.0},
    "correct_phase": {"zero_order": 33.0, "first_order": -70.0, "pivot": 12.0},
    "zero_fill": {"factor": 1.5},
    "correct_baseline": {"order": 2},
}


def signal_for(item, data):
    fid = fk.from_array(
        data, dwell_time=1e-3, carrier_frequency=1e8, time_start=2e-4, dims=("shot",)
    )
    return fk.fourier_transform(fid) if item.takes == "spectrum" else fid


def some_records(kind=np.complex128, seed=3):
    random = np.random.default_rng(seed)
    time = 2e-4 + 1e-3 * np.arange(512)
    lines = np.exp(2j * np.pi * np.array([[60.0], [-110.0], [7.0]]) * time - 25 * time)
    noise = random.normal(size=lines.shape) + 1j * random.normal(size=lines.shape)
    return (lines * np.exp(1j * np.array([[0.3], [2.0], [-1.0]])) + 0.01 * noise).astype(kind)


def test_every_step_is_looked_at():
    assert {item.room.rpartition(".")[2] for item in STEPS} == set(ROOMS)
    assert {"apodize_matched", "zero_fill", "auto_phase"} <= {item.name for item in STEPS}


@pytest.mark.parametrize("item", STEPS, ids=lambda item: item.name)
def test_values_just_outside_are_refused(item):
    signal = signal_for(item, some_records())
    for name, parameter in item.parameters.items():
        outside = ["text", float("nan"), float("inf")]
        reach = parameter.range
        if math.isfinite(reach.low):
            below = math.nextafter(reach.low, -math.inf)
            outside += [reach.low] if reach.above else []
            outside += [int(reach.low) - 1 if parameter.kind == "whole number" else below]
        if math.isfinite(reach.high):
            above = math.nextafter(reach.high, math.inf)
            outside += [int(reach.high) + 1 if parameter.kind == "whole number" else above]
        if parameter.along:
            axis = signal[parameter.along].values
            ends = float(axis[0]) - 1.0, float(axis[-1]) + 1.0
            outside += [(ends[0], 0.0), (0.0, ends[1])] if parameter.kind == "pair" else ends
        if not parameter.optional:
            outside += [None]
        for value in outside:
            with pytest.raises(ParameterError, match=f"{item.name}: {name} must"):
                getattr(fk, item.name)(signal, **{name: value})
    with pytest.raises(ParameterError, match="no parameter 'nothing_such'"):
        getattr(fk, item.name)(signal, nothing_such=1.0)


@pytest.mark.parametrize("kind", [np.complex64, np.complex128])
@pytest.mark.parametrize("item", STEPS, ids=lambda item: item.name)
def test_records_stay_apart_precision_stays_and_input_stays(item, kind):
    step, given = getattr(fk, item.name), ARGUMENTS.get(item.name, {})
    signal = signal_for(item, some_records(kind))
    before = signal.copy(deep=True)
    together = step(signal, **given)
    assert together.dtype == kind
    assert together.dims[:-1] == signal.dims[:-1]
    assert signal.identical(before)
    rounding = SINGLE if kind is np.complex64 else DOUBLE
    largest = np.abs(together.values).max()
    for number in range(signal.sizes["shot"]):
        alone = step(signal.isel(shot=number), **given)
        np.testing.assert_allclose(
            alone.values, together.values[number], rtol=0, atol=rounding * 10 * largest
        )
        assert set(alone.coords) == set(together.coords) - {"shot"}
        for name in set(alone.coords) - {"time", "frequency", "shift"}:
            each = together[name] if together[name].ndim == 0 else together[name][number]
            top = float(abs(each).max())
            np.testing.assert_allclose(alone[name].values, each.values, rtol=0, atol=1e-6 * top)
            assert alone[name].attrs["units"]
    doubled = step(signal.expand_dims(channel=2), **given)
    np.testing.assert_allclose(
        doubled.values[1], together.values, rtol=0, atol=rounding * 10 * largest
    )


@pytest.mark.parametrize("item", LINEAR, ids=lambda item: item.name)
@settings(max_examples=15, deadline=None)
@given(seed=st.integers(0, 2**32 - 1), factor=st.complex_numbers(max_magnitude=1e3))
def test_steps_are_linear(item, seed, factor):
    step, given = getattr(fk, item.name), ARGUMENTS.get(item.name, {})
    one, other = some_records(seed=seed), some_records(seed=seed + 1)
    mixed = step(signal_for(item, one + factor * other), **given).values
    apart = [step(signal_for(item, part), **given).values for part in (one, other)]
    largest = DOUBLE * (1 + abs(factor)) * max(np.abs(part).max() for part in apart)
    np.testing.assert_allclose(mixed, apart[0] + factor * apart[1], rtol=0, atol=largest)


def test_best_length_without_a_window():
    # Source: closed form, the maximum of (1 - e^-a) / sqrt(a) is the root of 1 + 2 a = e^a; there
    # the height over the noise is 0.9025 of that behind a matched window
    dwell, t2_star = 1e-6, 0.01
    shares = np.linspace(1.2, 1.3, 41)

    def height_over_noise(fid, window):
        height = fk.fourier_transform(fid, first_point="half").values.real.max()
        return height / (dwell * np.sqrt(np.sum(window**2)))

    found = []
    for share in shares:
        points = round(share * t2_star / dwell)
        fid = record((0.0, 1 / t2_star, 1), points=points, dwell=dwell)
        found.append(height_over_noise(fid, np.ones(points)))
    bend, slope, _ = np.polyfit(shares, found, 2)
    grid = 1e-3  # a parabola through a tenth of the range
    assert -slope / (2 * bend) == pytest.approx(1.25643, rel=grid)
    fid = record((0.0, 1 / t2_star, 1), points=200_000, dwell=dwell)
    window = np.exp(-fid.time.values / t2_star)
    best = height_over_noise(fk.apodize_exponential(fid, broadening=1 / (np.pi * t2_star)), window)
    assert max(found) / best == pytest.approx(0.9025, abs=1e-4)


def test_more_points_than_any_memory_holds():
    # 2**31 points of 16 bytes, 4096 times: 2**47 bytes, all that a process can address
    fid = fk.from_array(np.zeros((4096, 2), complex), dwell_time=1e-6, carrier_frequency=1e8)
    with pytest.raises(fk.FidkitError, match=r"2147483648 points a record take 140,737.5 GB"):
        fk.zero_fill(fid, points=2**31)


def test_transform_says_that_the_filter_delay_is_still_there():
    fid = record((100.0, 20.0, 1.0), points=256)
    late = fk.fourier_transform(fid.assign_attrs(filter_delay=61.25))
    assert "delay of 61.25 points that a digital filter" in late.attrs["notes"]
    for plain in (fid, fid.assign_attrs(filter_delay=0.0)):
        assert "notes" not in fk.fourier_transform(plain).attrs


def test_way_back_says_that_the_start_is_not_known():
    spectrum = fk.fourier_transform(record((100.0, 20.0, 1.0), points=256, time_start=2e-3))
    assert "notes" not in fk.inverse_transform(spectrum).attrs
    del spectrum.attrs["time_start"]
    back = fk.inverse_transform(spectrum)
    assert "time of the first point is not known" in back.attrs["notes"]
    assert back["time"].values[0] == 0


def test_records_that_dask_holds_come_out_the_same():
    fid = record((100.0, 20.0, 1.0), points=256).expand_dims(shot=2)
    chunked, plain = fid.chunk({"shot": 1, "time": 100}), fid
    for name in ("zero_fill", "fourier_transform", "auto_phase", "correct_phase"):
        chunked, plain = getattr(fk, name)(chunked), getattr(fk, name)(plain)
        np.testing.assert_array_equal(chunked.values, plain.values)
        if name != "zero_fill":
            chunked = chunked.chunk({"shot": 1, "frequency": 100})
    again = fk.inverse_transform(chunked)
    np.testing.assert_array_equal(again.values, fk.inverse_transform(plain).values)
