"""Windows: their closed forms, nmrglue, and the matched one against the theory of the filter."""

import math

import nmrglue as ng
import numpy as np
import pytest
from scipy.interpolate import CubicSpline

import fidkit as fk
from fidkit.steps.apodization import _own_broadening

DWELL = 2e-4
POINTS = 16384
#: Rounding of double precision in a product of a few exponentials.
DOUBLE = 1e-12


def fid_of(data, **more):
    return fk.from_array(data, dwell_time=DWELL, carrier_frequency=1e8, **more)


def ones(points=POINTS, **more):
    return fid_of(np.ones(points, complex), **more)


def decay(rate, points=POINTS):
    return fid_of(np.exp(-rate * DWELL * np.arange(points)) + 0j)


def width_of(fid):
    """Absorption width at half height of the line at the carrier, Hz."""
    spectrum = fk.fourier_transform(fk.zero_fill(fid, factor=8), first_point="half")
    height = spectrum.values.real.max()
    near = np.flatnonzero(spectrum.values.real > 0.2 * height)
    values, frequency = spectrum.values.real[near], spectrum.frequency.values[near]
    return np.ptp(CubicSpline(frequency, values - height / 2).roots(extrapolate=False))


# Source: Fourier pairs. The tolerance is that of the sampled line: (pi width dwell)^2 / 12, and
# the digits of the expected value.
SAMPLED = 1e-5


def test_exponential_adds_its_broadening():
    found = width_of(fk.apodize_exponential(decay(20.0), broadening=3.0))
    assert found == pytest.approx(20 / np.pi + 3, rel=SAMPLED)


def test_gaussian_alone_gives_its_broadening_and_adds_in_quadrature():
    three = fk.apodize_gaussian(ones(), broadening=3.0)
    assert width_of(three) == pytest.approx(3.0, rel=SAMPLED)
    both = fk.apodize_gaussian(three, broadening=4.0)
    assert width_of(both) == pytest.approx(5.0, rel=SAMPLED)


@pytest.mark.parametrize(
    ("lorentzian", "gaussian", "width"),
    [(1, 1, 1.6375954), (2, 1, 2.4357307), (1, 2, 2.5875520), (2, 3, 4.2097820)],
)
def test_exponential_and_gaussian_make_a_voigt(lorentzian, gaussian, width):
    # Source: exact widths; Olivero and Longbothum, JQSRT 17, 233 (1977) give the approximation
    fid = fk.apodize_exponential(ones(), broadening=lorentzian)
    found = width_of(fk.apodize_gaussian(fid, broadening=gaussian))
    assert found == pytest.approx(width, rel=SAMPLED)
    approximate = 0.5346 * lorentzian + math.sqrt(0.2166 * lorentzian**2 + gaussian**2)
    assert found == pytest.approx(approximate, rel=2.5e-4)  # the stated error of the formula


def test_lorentz_to_gauss_turns_the_line_into_a_gaussian():
    line = decay(20.0, points=4096)
    turned = fk.apodize_lorentz_to_gauss(line, narrowing=20 / np.pi, broadening=4.0)
    assert width_of(turned) == pytest.approx(4.0, rel=SAMPLED)
    undone = fk.apodize_exponential(
        fk.apodize_lorentz_to_gauss(line, narrowing=7.0, broadening=0.0), broadening=7.0
    )
    np.testing.assert_allclose(undone.values, line.values, rtol=DOUBLE)


def test_lorentz_to_gauss_says_when_it_would_overflow():
    single = fid_of(np.ones(2048, np.complex64))
    with pytest.raises(fk.FidkitError, match="narrow or broaden less, shorten the record"):
        fk.apodize_lorentz_to_gauss(single, narrowing=100.0, broadening=1.0)
    double = fk.apodize_lorentz_to_gauss(ones(2048), narrowing=100.0, broadening=1.0)
    assert np.isfinite(double.values).all()


@pytest.mark.parametrize(
    ("name", "widths", "start"),
    [
        ("apodize_exponential", {"broadening": 1e5}, -0.05),
        ("apodize_exponential", {"broadening": 1e308}, 0.0),
        ("apodize_gaussian", {"broadening": 1e308}, 0.0),
        ("apodize_lorentz_to_gauss", {"narrowing": 1e308, "broadening": 1e308}, 0.1),
    ],
)
def test_windows_say_when_a_weight_is_no_number(name, widths, start):
    with pytest.raises(fk.FidkitError, match=f"{name}: every weight must be at most exp"):
        getattr(fk, name)(ones(2048, time_start=start), **widths)


@pytest.mark.parametrize(
    "name", [name for name, spec in fk.STEPS.items() if spec.room.endswith("apodization")]
)
def test_windows_wait_for_the_filter_delay(name):
    # before it is removed, time zero lies that many points later than the record says
    fid = decay(20.0, points=512).assign_attrs(filter_delay=61.0)
    with pytest.raises(fk.FidkitError, match=f"{name}.*61 points.*remove_filter_delay first"):
        getattr(fk, name)(fid)


@pytest.mark.parametrize(
    "name", [name for name, spec in fk.STEPS.items() if spec.room.endswith("apodization")]
)
def test_records_that_dask_holds_come_out_the_same(name):
    fid = fid_of(np.outer([1, 2j], decay(20.0, points=512).values))
    chunked = getattr(fk, name)(fid.chunk({"shot": 1, "time": 100}))
    np.testing.assert_array_equal(chunked.values, getattr(fk, name)(fid).values)


def test_matched_window_takes_noise_for_a_line_once_in_a_thousand_records():
    # By construction: of 4000 records of noise 4 are let through on average; by Poisson's law none
    # in one such test out of 55, and 12 or more in one out of a thousand
    random = np.random.default_rng(17)
    both = random.normal(size=(2, 4000, 128))
    records = both[0] + 1j * both[1]
    found = sum(not math.isnan(_own_broadening(record, DWELL)) for record in records)
    assert 1 <= found < 12


def test_windows_agree_with_nmrglue():
    # Source: nmrglue 0.12, proc_base.em, gm, sp and tm
    random = np.random.default_rng(2)
    data = random.normal(size=1000) + 1j * random.normal(size=1000)
    fid, base = fid_of(data), ng.proc_base
    # that Gaussian has 0.6 where the exact constant is 1/(2 sqrt(ln 2)) = 0.60056
    exact = 0.5 / math.sqrt(math.log(2)) / 0.6
    pairs = [
        (fk.apodize_exponential(fid, broadening=7.0), base.em(data, lb=7.0 * DWELL)),
        (
            fk.apodize_lorentz_to_gauss(fid, narrowing=3.0, broadening=9.0),
            base.gm(data, g1=3.0 * DWELL, g2=9.0 * DWELL * exact, g3=0.0),
        ),
        (
            fk.apodize_gaussian(fid, broadening=9.0),
            base.gm(data, g1=0.0, g2=9.0 * DWELL * exact, g3=0.0),
        ),
        (fk.apodize_cosine(fid), base.sp(data, off=0.5, end=1.0)),
        (fk.apodize_cosine(fid, power=2), base.sp(data, off=0.5, end=1.0, pow=2)),
        (fk.apodize_cosine(fid, peak=0.5, power=2), base.sp(data, off=0.0, end=1.0, pow=2)),
        (
            fk.apodize_trapezoid(fid, rise=99 / 999, fall=199 / 999),
            base.tm(data, t1=100, t2=200),
        ),
    ]
    for ours, theirs in pairs:
        np.testing.assert_allclose(ours.values, theirs, rtol=0, atol=DOUBLE * np.abs(data).max())


def test_trapezoid_by_hand():
    # Source: closed form on eleven points
    weight = fk.apodize_trapezoid(ones(11), rise=0.2, fall=0.5).values.real
    wanted = [0, 0.5, 1, 1, 1, 1, 0.8, 0.6, 0.4, 0.2, 0]
    np.testing.assert_allclose(weight, wanted, rtol=0, atol=DOUBLE)
    assert (fk.apodize_trapezoid(ones(11), rise=0.0, fall=0.0).values == 1).all()
    with pytest.raises(fk.FidkitError, match="must not overlap"):
        fk.apodize_trapezoid(ones(11), rise=0.6, fall=0.5)


@pytest.mark.parametrize(
    "window",
    [
        lambda fid: fk.apodize_cosine(fid, power=2),
        lambda fid: fk.apodize_cosine(fid, peak=0.3),
        lambda fid: fk.apodize_trapezoid(fid, rise=0.1, fall=0.2),
        lambda fid: fk.apodize_gaussian(fid, broadening=5.0),
        fk.apodize_matched,
    ],
)
def test_zeros_that_were_filled_in_do_not_stretch_a_window(window):
    fid = decay(30.0, points=500)
    before = fk.zero_fill(window(fid), points=1200)
    after = window(fk.zero_fill(fid, points=1200))
    np.testing.assert_allclose(after.values, before.values, rtol=0, atol=DOUBLE)


@pytest.mark.parametrize(
    "window",
    [
        lambda fid: fk.apodize_exponential(fid, broadening=5.0),
        lambda fid: fk.apodize_gaussian(fid, broadening=5.0),
        lambda fid: fk.apodize_lorentz_to_gauss(fid, narrowing=2.0, broadening=5.0),
        lambda fid: fk.apodize_cosine(fid, power=2, peak=0.1),
    ],
)
def test_windows_begin_at_the_middle_of_the_pulse_whatever_the_dead_time(window):
    whole = window(ones(1000)).values
    late = window(ones(960, time_start=40 * DWELL)).values
    np.testing.assert_allclose(late, whole[40:], rtol=0, atol=DOUBLE)


def test_cosine_needs_a_record_after_the_pulse():
    with pytest.raises(fk.FidkitError, match="past the middle of the pulse"):
        fk.apodize_cosine(ones(10, time_start=-1.0))


@pytest.mark.parametrize(
    ("power", "bandwidth", "between"),
    [(1, np.pi**2 / 8, np.pi / 4), (2, 1.5, 8 / (3 * np.pi))],
)
def test_noise_bandwidth_and_height_between_two_points(power, bandwidth, between):
    # Source: closed forms; Harris, Proc. IEEE 66, 51 (1978), Table I, from memory, prints 1.23 and
    # 1.50 bins, and -2.10 and -1.42 dB between two points
    window = fk.apodize_cosine(ones(), power=power, peak=0.5).values.real
    found = window.size * np.sum(window**2) / np.sum(window) ** 2
    cut = 2 / window.size  # the window's last zero counts as a point
    assert found == pytest.approx(bandwidth, rel=cut)
    half_bin = np.exp(1j * np.pi * np.arange(window.size) / window.size)
    assert abs(np.sum(window * half_bin)) / np.sum(window) == pytest.approx(between, rel=cut)


# -- the matched window --------------------------------------------------------------------------


def height_over_noise(fid, weight):
    """Peak of the spectrum over the noise that the window lets through, for unit noise."""
    spectrum = fk.fourier_transform(fk.zero_fill(fid, factor=4), first_point="full")
    return np.abs(spectrum.values).max() / np.sqrt(np.sum(weight**2))


def test_matched_window_against_half_and_double_and_four_times():
    # Source: Ernst and Anderson, Rev. Sci. Instrum. 37, 93 (1966), from memory; closed form
    # SNR(W) = sqrt(2 W) / (R + W): a factor of 2 costs 5.72 %, of 4 costs 20 %
    line = decay(20.0)
    matched = fk.apodize_matched(line)
    broadening = matched.matched_broadening.item()
    # to this the finite search comes, and the record ends after 65 decay times
    assert broadening == pytest.approx(20 / np.pi, rel=1e-4)
    assert matched.matched_broadening.attrs["units"] == "Hz"
    weight = fk.apodize_matched(line).values.real / line.values.real
    np.testing.assert_allclose(
        weight, np.exp(-np.pi * broadening * line.time.values), rtol=1e-9, atol=1e-300
    )
    best = height_over_noise(matched, weight)
    for factor, loss in ((0.5, 0.0572), (2, 0.0572), (0.25, 0.2), (4, 0.2)):
        other = fk.apodize_exponential(line, broadening=factor * 20 / np.pi)
        found = height_over_noise(other, other.values.real / line.values.real)
        # sums for integrals: half a point at the start, R dwell / 2 = 0.2 %
        assert 1 - found / best == pytest.approx(loss, abs=2e-3)


@pytest.mark.parametrize(
    ("decays", "gain"), [(1, 1.0402), (2, 1.1459), (3, 1.2873), (5, 1.5918), (10, 2.2362)]
)
def test_gain_of_the_matched_window(decays, gain):
    # Source: derived, g(a) = sqrt((1 - e^-2a)/2) sqrt(a) / (1 - e^-a), a = T_acq / T2*
    line = decay(decays / (4096 * DWELL), points=4096)
    matched = fk.apodize_matched(line)
    weight = matched.values.real / line.values.real
    found = height_over_noise(matched, weight) / height_over_noise(line, np.ones(4096))
    assert found == pytest.approx(gain, rel=1e-3)


def test_matched_window_in_noise_off_the_carrier_and_after_dead_time():
    # Source: Cramer-Rao bound, sd FWHM = 2 FWHM / SNR_m (continuous limit); a search that is as
    # good as maximum likelihood stays within it
    random = np.random.default_rng(8)
    records, rate, sigma = 60, 40.0, 0.2
    time = 3e-3 + DWELL * np.arange(4096)
    line = np.exp(2j * np.pi * 1234.5 * time - rate * time)
    noise = random.normal(size=(records, 4096)) + 1j * random.normal(size=(records, 4096))
    found = fk.apodize_matched(fid_of(line + sigma * noise, time_start=3e-3))
    assert found.matched_broadening.dims == ("shot",)
    height = math.exp(-rate * 3e-3)
    signal_to_noise = height / (sigma * math.sqrt(2 * rate * DWELL))
    bound = 2 / signal_to_noise  # relative
    relative = found.matched_broadening.values * np.pi / rate - 1
    counting = 4 / math.sqrt(2 * records)  # four standard errors of a std
    assert relative.std() < bound * (1 + counting)
    assert abs(relative.mean()) < 4 * bound / math.sqrt(records)


def test_matched_window_leaves_what_has_no_line_and_says_so():
    random = np.random.default_rng(9)
    noise = random.normal(size=(3, 2048)) + 1j * random.normal(size=(3, 2048))
    with pytest.raises(fk.FidkitError, match="no line stands out"):
        fk.apodize_matched(fid_of(noise))
    noise[1] += 5 * decay(30.0, points=2048).values
    found = fk.apodize_matched(fid_of(noise))
    assert "2 of 3 records show no line and were left as they are: 0, 2" in found.attrs["notes"]
    np.testing.assert_array_equal(found.values[[0, 2]], noise[[0, 2]])
    assert (found.matched_broadening.values[[0, 2]] == 0).all()


def test_matched_window_without_decay_and_twice():
    flat = fid_of(np.exp(2j * np.pi * 50 * DWELL * np.arange(1024)))
    assert fk.apodize_matched(flat).matched_broadening == 0
    with pytest.raises(fk.FidkitError, match="matched to its decay before"):
        fk.apodize_matched(fk.apodize_matched(flat))
