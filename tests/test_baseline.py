"""Baselines that were put there come off again."""

import numpy as np
import pytest

import fidkit as fk

POINTS, DWELL = 8192, 2e-4
PLACE = np.linspace(-1, 1, POINTS)
#: Rounding of double precision through a least-squares fit, relative to the baseline.
DOUBLE = 1e-10


def spectra(signal_to_noise, records=10):
    """Spectra with two lines and white noise, and the standard deviation of either noise part."""
    random = np.random.default_rng(6)
    time = DWELL * np.arange(POINTS)
    data = np.exp(2j * np.pi * 300 * time - 12 * time)
    data = data + 0.3 * np.exp(-2j * np.pi * 700 * time - 20 * time)
    both = random.normal(size=(2, records, POINTS)) / signal_to_noise
    fid = fk.from_array(data + both[0] + 1j * both[1], dwell_time=DWELL, carrier_frequency=1e8)
    spectrum = fk.fourier_transform(fid, first_point="half")
    return spectrum, DWELL * np.sqrt(POINTS) / signal_to_noise


@pytest.mark.parametrize("signal_to_noise", [3, 30])
@pytest.mark.parametrize(
    ("order", "put"),
    [
        (0, np.full(POINTS, 3 + 2j)),
        (1, 3 - 5j + (20 + 5j) * PLACE),
        (1, 100 + 1000 * PLACE + 0j),
        (4, 40 * PLACE**4 - 30j * PLACE**2 + 5 * PLACE),
    ],
)
def test_baseline_is_recovered_within_its_noise(signal_to_noise, order, put):
    # By construction. A fitted polynomial of k coefficients has a mean square error of
    # k sigma^2 / M in each part over M free points; the absorptive feet of the lines are let add
    # as much again. The dispersive feet, up to 3 sigma where the fit begins, stay in the imaginary
    # part: half a sigma in all.
    plain, sigma = spectra(signal_to_noise)
    flat = fk.correct_baseline(plain.copy(data=plain.values + sigma * put), order=order)
    left = (flat.values - plain.values) / sigma
    assert np.mean(left.real**2) < 2 * 2 * (order + 1) / POINTS
    assert np.mean(left.imag**2) < 0.5**2
    # the constant, within five times its own noise
    assert np.abs(left.real.mean(axis=-1)).max() < 5 / np.sqrt(POINTS)
    if order == 0:
        assert np.abs(left.imag.mean(axis=-1)).max() < 5 / np.sqrt(POINTS)


def test_region_given_by_hand():
    # Source: closed form; without noise and with all signal inside the region nothing is left
    frequency = np.linspace(-500, 500, 1001)
    line = np.where(np.abs(frequency - 100) < 20, 50 * np.exp(0.4j), 0)
    put = 2 - 1j + 1e-3 * frequency + 3e-6j * frequency**2
    spectrum = fk.spectrum_from_array(line + put, frequency=frequency, carrier_frequency=1e8)
    flat = fk.correct_baseline(spectrum, order=2, region=(70.0, 130.0))
    np.testing.assert_allclose(flat.values, line, rtol=0, atol=DOUBLE * 3)
    real = fk.correct_baseline(spectrum.real, order=2, region=(70.0, 130.0))
    assert real.dtype == np.float64
    np.testing.assert_allclose(real.values, line.real, rtol=0, atol=DOUBLE * 3)


def test_real_spectrum_with_signal_found():
    # By construction, as above; the real part alone
    plain, sigma = spectra(30)
    put = sigma * (7 - 4 * PLACE)
    flat = fk.correct_baseline(plain.real + put, order=1)
    left = (flat.values - plain.values.real) / sigma
    assert np.mean(left**2) < 2 * 2 * 2 / POINTS


def test_high_order_is_well_conditioned():
    # Source: closed form, a polynomial of the order fitted comes off whole
    put = np.polynomial.chebyshev.chebval(PLACE, [3, -1, 2, 1, -2, 0.5, 1, 1, 2, -1, 4.0]) + 0j
    frequency = 5.0 * np.arange(POINTS)
    spectrum = fk.spectrum_from_array(put, frequency=frequency, carrier_frequency=1e8)
    flat = fk.correct_baseline(spectrum, order=10, region=(100.0, 20000.0))
    assert np.abs(flat.values).max() < DOUBLE * 20


def test_error_names_no_record_that_a_chain_would_count_otherwise():
    # blocks of a chain count their own records, so that a number would be that within a block
    values = np.ones((40, 64)) + 0j
    values[37] = np.where(np.arange(64) % 2, 1.0, 0.0) * (1 + np.arange(64.0)) ** 3
    spectrum = fk.spectrum_from_array(
        values, frequency=np.arange(-32, 32.0), carrier_frequency=1e6, dims=["shot"]
    )
    with pytest.raises(fk.FidkitError, match=r"order 4 in every record; \d+ of 64 are left in one"):
        fk.correct_baseline(spectrum, order=4, threshold=2.0)


def test_records_that_dask_holds_come_out_the_same():
    plain, _ = spectra(30, records=2)
    chunked = fk.correct_baseline(plain.chunk({"shot": 1, "frequency": 1000}))
    np.testing.assert_array_equal(chunked.values, fk.correct_baseline(plain).values)


def test_too_little_without_signal():
    spectrum = fk.fourier_transform(
        fk.from_array(np.exp(-0.5 * np.arange(16)) + 0j, dwell_time=1e-3, carrier_frequency=1e8)
    )
    with pytest.raises(
        fk.FidkitError,
        match=r"12 points without signal are wanted for order 2 in every record; 5 of 16 are left in one",
    ):
        fk.correct_baseline(spectrum, order=2, region=(-300.0, 400.0))
    with pytest.raises(fk.FidkitError, match="at least one point of the frequency axis"):
        fk.correct_baseline(spectrum, region=(1.0, 2.0))
