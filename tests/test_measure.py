"""`fidkit.measure`: values against closed forms, other libraries and published records."""

import numpy as np
import pytest
import xarray as xr

import fidkit as fk
from fidkit.measure import QUANTITIES
from fidkit.numerics.lines import decay_time, voigt_width
from tests.published import published_file

POINTS, DWELL, CARRIER = 8192, 1e-4, 63.87e6
TIME = DWELL * np.arange(POINTS)
#: Noise-free records: what is left is rounding, amplified by the fit.
EXACT = 1e-8
#: An estimate may miss by four of its standard uncertainties: once in 16,000.
SURE = 4.0


def line(frequency, width, amplitude=1.0, phase=0.0, time=TIME):
    """A Lorentzian line: its FID (Fourier pair)."""
    return amplitude * np.exp(1j * phase + (2j * np.pi * frequency - np.pi * width) * time)


def gaussian(width, time=TIME):
    """The decay that gives a Gaussian line of this full width (Fourier pair)."""
    return np.exp(-((np.pi * width * time) ** 2) / (4 * np.log(2)))


def noise(level, seed, shape=(POINTS,)):
    rng = np.random.default_rng(seed)
    return level * (rng.standard_normal(shape) + 1j * rng.standard_normal(shape))


def record(values, **more):
    return fk.from_array(values, **{"dwell_time": DWELL, "carrier_frequency": CARRIER, **more})


def near(found, name, expected, sure=SURE):
    """Assert that a quantity agrees with its true value within its uncertainty."""
    value, std = float(found[name]), float(found[f"{name}_std"])
    assert abs(value - expected) < sure * std, f"{name}: {value} +- {std}, expected {expected}"


def test_a_plain_line_in_full():
    """Source: Fourier pair, T2* = 1 / (pi FWHM); field by CODATA 2022's shielded proton."""
    found = fk.measure(record(line(100.0, 5.0, 2.0, 0.5)))
    expected = {
        "frequency_offset": 100.0,
        "frequency_offset_ppm": 100 / 63.87,
        "linewidth": 5.0,
        "linewidth_ppm": 5 / 63.87,
        "t2_star": 1 / (5 * np.pi),
        "t2_star_decay": 1 / (5 * np.pi),
        "field": (CARRIER + 100) / 42.57638543e6,
        "amplitude": 2.0,
        "phase": np.rad2deg(0.5),
    }
    for name, value in expected.items():
        assert float(found[name]) == pytest.approx(value, rel=EXACT), name
        assert str(found[f"{name}_status"].values) == "ok"
    assert str(found.lineshape.values) == "Lorentzian"
    assert str(found.status.values) == "ok"


def test_the_dataset_is_complete():
    found = fk.measure(
        record(line(100.0, 5.0) + noise(0.01, 1), units="V", coil="loop", sample="w")
    )
    for name, (unit, _) in QUANTITIES.items():
        assert found[name].attrs["units"] == (unit or "V")
        assert found[f"{name}_std"].attrs["units"] == (unit or "V")
        assert found[name].attrs["ancillary_variables"] == f"{name}_std {name}_status"
        assert float(found[f"{name}_std"]) > 0
    assert found.attrs["coil"] == "loop"
    assert found.attrs["sample"] == "w"


def test_the_table():
    one = fk.measure(record(line(100.0, 5.0) + noise(0.01, 1), source="one.csv"))
    both = record(np.stack([line(50, 3), line(60, 4)]) + noise(0.01, 2, (2, POINTS)))
    many = fk.measure(both, lines=2)
    frame = fk.table(one, many)
    assert list(frame["source"]) == ["one.csv", "", "", "", ""]
    assert frame["linewidth_hz"].iloc[0] == float(one.linewidth)
    assert frame["frequency_offset_std_ppm"].iloc[0] == float(one.frequency_offset_ppm_std)
    assert frame["field_tesla"].iloc[0] == float(one.field)
    assert list(frame["shot"].iloc[1:]) == [0, 0, 1, 1]
    assert frame["snr"].iloc[1] == float(many.snr[0, 0])
    assert set(frame["amplitude_unit"]) == {"1"}
    assert {f"{name}_status" for name in QUANTITIES} <= set(frame)
    assert len(frame.columns) == len(set(frame.columns))
    with pytest.raises(fk.FidkitError, match="at least one result"):
        fk.table()


def test_leading_dimensions_change_nothing():
    values = np.stack(
        [line(f, w) + noise(0.02, k) for k, (f, w) in enumerate([(50, 3), (-900, 8), (4999, 5)])]
    )
    values[1] *= gaussian(6.0)  # one of them goes the careful way
    together = fk.measure(record(values, dims=("channel",), coords={"channel": [4, 5, 7]}))
    assert together.frequency_offset.dims == ("channel",)
    assert list(together.channel.values) == [4, 5, 7]
    for row, one in enumerate(values):
        alone = fk.measure(record(one))
        for name in alone.data_vars:
            a, b = together[name].values[row], alone[name].values
            if a.dtype.kind == "U":
                assert a == b
            else:
                assert a == pytest.approx(b, rel=EXACT), name
    cube = fk.measure(record(values.reshape(3, 1, POINTS), dims=("channel", "shot")))
    assert cube.linewidth.shape == (3, 1)


def spectra(fid):
    """The same record through chains that change the spectrum, not the line."""
    phased = fk.Call("correct_phase", zero_order=-40.0, first_order=90.0, pivot=20.0)
    for calls in (
        ["fourier_transform"],
        [fk.Call("fourier_transform", first_point="half")],
        [fk.Call("apodize_exponential", broadening=8.0), "fourier_transform", phased],
        [
            fk.Call("apodize_gaussian", broadening=4.0),
            fk.Call("zero_fill", factor=4),
            "fourier_transform",
            phased,
        ],
        ["apodize_cosine", fk.Call("zero_fill", points=10_000), "fourier_transform"],
        ["apodize_matched", "fourier_transform", "auto_phase"],
        [fk.Call("apodize_trapezoid", fall=0.5), "fourier_transform"],
        ["apodize_exponential", "fourier_transform", "inverse_transform"],
        [fk.Call("remove_start", points=3), "apodize_exponential", "fourier_transform"],
        [
            fk.Call("apodize_exponential", broadening=2.0),
            fk.Call("remove_start", points=3),
            "fourier_transform",
        ],
    ):
        chain = fk.Chain(calls)
        yield chain, chain(fid)


def test_processing_changes_nothing_but_the_view():
    """Source: the record is one and the same, so its line is: exact where nothing was cut away."""
    raw = np.stack([line(100.0, 5.0, phase=0.7), line(-300.0, 11.0)]) + noise(0.02, 5, (2, POINTS))
    fid = record(raw, dims=("channel",), time_start=2e-4)
    plain = fk.measure(fid)
    for chain, spectrum in spectra(fid):
        found = fk.measure(spectrum)
        # windows that reach zero and cut points take a little information away
        for name in ("frequency_offset", "linewidth", "t2_star", "amplitude", "phase"):
            apart = np.abs(found[name] - plain[name]) / plain[f"{name}_std"]
            assert float(apart.max()) < 0.7, f"{chain}: {name} {apart.values}"
            ratio = found[f"{name}_std"] / plain[f"{name}_std"]
            assert float(ratio.min()) > 0.9, f"{chain}: {name}"
            assert float(ratio.max()) < 1.1, f"{chain}: {name}"
        assert found.attrs["method"] == plain.attrs["method"], chain


def test_the_width_as_it_stands_where_the_way_back_is_closed():
    """Source: an exponential window adds its broadening to a Lorentzian width (Fourier pair)."""
    fid = record(line(100.0, 5.0))
    spectrum = fk.fourier_transform(
        fk.zero_fill(fk.apodize_exponential(fid, broadening=3.0), factor=4)
    )
    spectrum.attrs["history"] = ""
    found = fk.measure(spectrum)
    one_percent = 0.01  # the first point lifts the baseline, the grid is finite
    assert float(found.linewidth) == pytest.approx(8.0, rel=one_percent)
    assert "as it stands" in found.attrs["notes"]
    assert str(found.linewidth_status.values).startswith("doubtful")
    assert np.isnan(float(found.t2_star_decay))
    assert str(found.t2_star_decay_status.values).startswith("missing")
    real = fk.measure(spectrum.real)
    assert float(real.linewidth) == pytest.approx(8.0, rel=one_percent)
    assert float(real.frequency_offset) == pytest.approx(100.0, abs=0.05)
    piece = fk.measure(spectrum.sel(frequency=slice(0, 200)))
    assert float(piece.linewidth) == pytest.approx(8.0, rel=one_percent)


@pytest.mark.parametrize(
    ("lorentzian", "gauss", "expected"),
    [
        (1.0, 1.0, 1.6375954),
        (2.0, 1.0, 2.4357307),
        (1.0, 2.0, 2.5875520),
        (2.0, 3.0, 4.2097820),
        (3.0, 0.0, 3.0),
    ],
)
def test_voigt_width(lorentzian, gauss, expected):
    """Source: exact widths; Olivero and Longbothum, JQSRT 17, 233 (1977), within 0.024 %."""
    part = (np.pi * gauss) ** 2 / (4 * np.log(2))
    width, by_rate, by_part = voigt_width(np.pi * lorentzian, part)
    assert width == pytest.approx(expected, rel=1e-7)
    published = 0.5346 * lorentzian + np.sqrt(0.2166 * lorentzian**2 + gauss**2)
    assert width == pytest.approx(published, rel=2.5e-4)
    step = 1e-5
    ahead = voigt_width(np.pi * lorentzian * (1 + step), part)[0]
    difference = 1e-4  # of the forward difference
    assert (ahead - width) / (np.pi * lorentzian * step) == pytest.approx(by_rate, rel=difference)
    if part:
        ahead = voigt_width(np.pi * lorentzian, part * (1 + step))[0]
        assert (ahead - width) / (part * step) == pytest.approx(by_part, rel=difference)


def test_gaussian_and_voigt_lines_are_told_apart():
    """Source: widths of the Fourier pairs; Voigt (2, 3) Hz has 4.2097820 Hz."""
    for values, shape, width in (
        (line(100, 0) * gaussian(8.0), "Gaussian", 8.0),
        (line(100, 2) * gaussian(3.0), "Voigt", 4.2097820),
        (line(100, 4), "Lorentzian", 4.0),
    ):
        found = fk.measure(record(values + noise(0.01, 7)))
        assert str(found.lineshape.values) == shape
        near(found, "linewidth", width)
        near(found, "amplitude", 1.0)
        near(found, "frequency_offset", 100.0)
        doubtful = str(found.t2_star_status.values).startswith("doubtful")
        assert doubtful == (shape != "Lorentzian")
        disagree = "differs" in str(found.t2_star_decay_status.values)
        assert disagree == (shape != "Lorentzian")


def test_dead_time_is_carried_back_to_the_pulse():
    time = TIME + 7e-4
    found = fk.measure(record(line(-250, 6, 3.0, 0.3, time) + noise(0.01, 8), time_start=7e-4))
    near(found, "phase", np.rad2deg(0.3))
    near(found, "amplitude", 3.0)
    two = line(100, 6, 3.0, 0.3, time) + line(130, 4, 1.0, -0.4, time)
    found = fk.measure(record(two + noise(0.01, 9), time_start=7e-4), lines=2)
    for place, phase, amplitude in ((0, 0.3, 3.0), (1, -0.4, 1.0)):
        near(found.isel(line=place), "phase", np.rad2deg(phase))
        near(found.isel(line=place), "amplitude", amplitude)


def test_offset_and_mains_do_not_pull_the_line():
    mains = 0.05 * (np.exp(100j * np.pi * TIME) + 0.6 * np.exp(-100j * np.pi * TIME))
    for frequency in (0.2, 47.0, 100.0):
        found = fk.measure(record(line(frequency, 5.0) + mains + (0.05 + 0.02j) + noise(0.01, 10)))
        near(found, "frequency_offset", frequency)
        near(found, "linewidth", 5.0)
        near(found, "amplitude", 1.0)


def test_steady_tones_stronger_than_the_line_are_set_aside():
    tones = np.exp(100j * np.pi * TIME) + 0.7 * np.exp(-300j * np.pi * TIME)
    found = fk.measure(record(line(100.0, 5.0) + tones + noise(0.01, 11)))
    near(found, "frequency_offset", 100.0)
    near(found, "linewidth", 5.0)
    assert "steady tones at 50.0, -150.0 Hz" in str(found.status.values)
    alone = fk.measure(record(tones + noise(0.01, 12)))
    assert float(alone.frequency_offset) == pytest.approx(50.0, abs=1e-3)
    assert str(alone.t2_star_status.values).startswith("doubtful")


def test_choosing_a_line():
    fid = record(line(100, 5) + line(-1300, 3, 0.5) + line(-1340, 4, 0.2) + noise(0.01, 13))
    near(fk.measure(fid), "frequency_offset", 100.0)
    near(fk.measure(fid, near=-1250.0), "frequency_offset", -1300.0)
    near(fk.measure(fid, near=-1350.0), "frequency_offset", -1340.0)
    near(fk.measure(fid, region=(-2000.0, 0.0)), "frequency_offset", -1300.0)
    three = fk.measure(fid, lines=3)
    for place, (frequency, width) in enumerate(((-1340, 4), (-1300, 3), (100, 5))):
        near(three.isel(line=place), "frequency_offset", frequency)
        near(three.isel(line=place), "linewidth", width)
    four = fk.measure(fid, lines=4)
    assert int(np.isnan(four.frequency_offset).sum()) == 1
    assert "no line above the noise" in str(four.status.values[-1])


def test_overlapping_lines_cover_their_truth():
    """Source: definition of a standard uncertainty; 60 records, binomial counting error 6 %."""
    rng = np.random.default_rng(14)
    inside, total = 0, 0
    for _ in range(60):
        values = line(100, 5) + line(104, 3, 0.5) + noise(0.02, rng)
        found = fk.measure(record(values), lines=2)
        for place, (frequency, width, amplitude) in enumerate(((100, 5, 1), (104, 3, 0.5))):
            one = found.isel(line=place)
            for name, true in (
                ("frequency_offset", frequency),
                ("linewidth", width),
                ("amplitude", amplitude),
            ):
                total += 1
                inside += abs(float(one[name]) - true) < float(one[f"{name}_std"])
    # six correlated numbers a record: as if there were only one
    assert abs(inside / total - 0.683) < 3 * np.sqrt(0.683 * 0.317 / 60)


def test_an_uneven_field_is_measured_as_one_shape():
    """Source: half-height width of the noise-free absorption spectrum on a 0.076 Hz grid."""
    place = np.linspace(-1, 1, 801)
    spread = np.exp(2j * np.pi * TIME[:, None] * (100 + 8 * place**3 + 6 * place**2)).mean(axis=1)
    values = spread * np.exp(-np.pi * 1.5 * TIME)
    long = np.zeros(16 * POINTS, complex)
    long[:POINTS] = values
    long[0] *= 0.5
    height = np.fft.fftshift(np.fft.fft(long).real)
    frequency = np.fft.fftshift(np.fft.fftfreq(long.size, DWELL))
    top = height.argmax()
    left = top - (height[top::-1] < height[top] / 2).argmax()
    right = top + (height[top:] < height[top] / 2).argmax()
    width = frequency[right] - frequency[left]
    found = fk.measure(record(values + noise(0.01, 15)))
    few_percent = 0.06  # how well a few lines stand for a continuous shape
    assert float(found.linewidth) == pytest.approx(width, rel=few_percent)
    assert float(found.frequency_offset) == pytest.approx(frequency[top], abs=0.1)
    assert str(found.lineshape.values).startswith("composite")
    assert str(found.linewidth_status.values).startswith("doubtful")
    assert str(found.t2_star_status.values).startswith("doubtful")


def test_what_cannot_be_known_is_said():
    nothing = fk.measure(record(noise(1.0, 16)))
    assert np.isnan(float(nothing.frequency_offset))
    assert np.isnan(float(nothing.frequency_offset_std))
    assert "no line above the noise" in str(nothing.status.values)
    silent = fk.measure(record(np.zeros(POINTS, complex)))
    assert np.isnan(float(silent.linewidth))
    endless = fk.measure(record(line(100, 0) + noise(0.1, 17)))
    near(endless, "linewidth", 0.0)
    assert "not measurable" in str(endless.linewidth_status.values)
    short = fk.measure(record((line(100, 5) + noise(0.01, 18))[:256]))
    near(short, "linewidth", 5.0)
    assert "too short" in str(short.linewidth_status.values)
    faint = fk.measure(record(line(100, 5, 0.37) + noise(1.0, 22)))
    assert "weak" in str(faint.status.values)
    # every missing number says why, and has no uncertainty
    for found in (nothing, silent, endless):
        for name in QUANTITIES:
            if np.isnan(float(found[name])):
                assert str(found[f"{name}_status"].values).startswith("missing")
                assert np.isnan(float(found[f"{name}_std"]))


@pytest.mark.parametrize(
    ("change", "message"),
    [
        ({"near": 6000.0}, "near must be a number in [-5000, 5000] Hz"),
        ({"near": "100"}, "near must be a number"),
        ({"near": np.nan}, "near must be a number"),
        ({"near": 1j}, "near must be a number"),
        ({"near": [3.0]}, "near must be a number"),
        ({"region": (5.0, 1.0)}, "region must be a pair (low, high)"),
        ({"region": 7}, "region must be a pair"),
        ({"region": (1.0, 1.2)}, "region (1.0, 1.2) Hz holds no point"),
        ({"noise": (0.0, 1.0)}, "noise must hold at least 8 points"),
        ({"lines": 0}, "lines must be in [1, 50]"),
        ({"lines": 1.5}, "lines must be a whole number"),
        ({"lines": True}, "lines must be a whole number"),
    ],
)
def test_wrong_wishes(change, message):
    with pytest.raises(fk.FidkitError) as error:
        fk.measure(record(line(100, 5) + noise(0.01, 19)), **change)
    assert message in str(error.value)


def test_wrong_signals():
    good = record(line(100, 5))
    with pytest.raises(fk.FidkitError, match="make_analytic"):
        fk.measure(good.real)
    with pytest.raises(fk.FidkitError, match="at least 16 measured points; got 12"):
        fk.measure(record(line(100, 5)[:12]))
    with pytest.raises(fk.FidkitError, match="carrier_frequency"):
        fk.measure(xr.DataArray(good.values, dims="time", coords={"time": good.time}))
    with pytest.raises(fk.FidkitError, match="must be finite"):
        fk.measure(good.where(good.time < 0.5))
    with pytest.raises(fk.FidkitError, match="a signal is a DataArray"):
        fk.measure(np.ones(100))


def test_single_precision():
    values = line(100, 5) + noise(0.01, 20)
    double = fk.measure(record(values))
    single = fk.measure(
        fk.fourier_transform(fk.apodize_exponential(record(values.astype(np.complex64))))
    )
    hundredth = 0.01  # of the uncertainty
    for name in ("frequency_offset", "linewidth", "amplitude"):
        apart = abs(float(single[name]) - float(double[name])) / float(double[f"{name}_std"])
        assert apart < hundredth, name


def test_real_record_made_analytic():
    """Source: a cosine of amplitude A is half of exp(+i) and half of exp(-i) of amplitude A."""
    rng = np.random.default_rng(21)
    values = line(1234.0, 6.0).real + 0.01 * rng.standard_normal(POINTS)
    found = fk.measure(fk.make_analytic(record(values)))
    near(found, "frequency_offset", 1234.0)
    near(found, "linewidth", 6.0)
    assert float(found.amplitude) == pytest.approx(1.0, rel=0.01)


def test_against_lmfit():
    """Source: lmfit's least squares of the same model on the same record, value and error."""
    import lmfit

    for seed, level in ((30, 0.02), (31, 0.3)):
        values = line(75.0, 6.0, 1.5, 0.6) + noise(level, seed)
        found = fk.measure(record(values))

        def residual(parameters):
            model = line(
                parameters["f"].value,
                parameters["w"].value,
                parameters["a"].value,
                parameters["p"].value,
            )
            difference = values - model  # noqa: B023
            return np.concatenate([difference.real, difference.imag])

        start = lmfit.Parameters()
        start.add_many(("f", 75.3), ("w", 5.0), ("a", 1.2), ("p", 0.5))
        other = lmfit.minimize(residual, start)
        names = {"f": "frequency_offset", "w": "linewidth", "a": "amplitude", "p": "phase"}
        # fidkit uses a band of +-25 widths: it loses 0.6 % in the error, and its own noise
        # estimate; two estimates of nearly the same data differ by a fraction of their error
        for short, name in names.items():
            factor = 180 / np.pi if short == "p" else 1.0
            value, error = factor * other.params[short].value, factor * other.params[short].stderr
            assert abs(float(found[name]) - value) < 0.35 * error, name
            assert float(found[f"{name}_std"]) == pytest.approx(error, rel=0.15), name


def test_decay_time_against_scipy():
    """Source: scipy.optimize.curve_fit of an exponential to the same block sums."""
    from scipy.optimize import curve_fit

    values = line(0.0, 5.0) + noise(0.05, 40)
    rate = np.array([5 * np.pi])
    found, std = decay_time(
        values[None], 0.0, DWELL, np.zeros(1), np.zeros(1), rate, np.array([0.05])
    )
    length = 3 / (rate[0] * DWELL)
    edges = np.rint(np.linspace(0, 1, 33) * length).astype(int)
    sums = np.add.reduceat(values.real[: edges[-1]], edges[:-1])

    def model(_, amplitude, constant):
        return amplitude * np.add.reduceat(np.exp(-TIME / constant)[: edges[-1]], edges[:-1])

    best, covariance = curve_fit(
        model,
        edges[:-1],
        sums,
        [1, 0.05],
        sigma=0.05 * np.sqrt(np.diff(edges)),
        absolute_sigma=True,
    )
    assert found[0] == pytest.approx(best[1], rel=1e-6)
    assert std[0] == pytest.approx(np.sqrt(covariance[1, 1]), rel=1e-3)


def test_signal_to_noise_of_a_published_spectrum():
    """Source: o06.jdx (R. J. Lancashire): points 3686 to 5324 have rms 21.6917, top 40556.99."""
    spectrum = fk.read(published_file("RJL/o06.jdx"))
    real = spectrum.real
    quiet = real[::-1][3686:5325]
    per_mille = 1e-3
    assert float(quiet.std()) == pytest.approx(21.6917, rel=per_mille)
    ends = (float(quiet.frequency.min()), float(quiet.frequency.max()))
    top = float(real.frequency[int(real.values.argmax())])
    found = fk.measure(real, near=top, noise=ends)
    assert float(found.snr) == pytest.approx(1869.7, rel=per_mille)


def test_a_line_outside_the_region_is_not_taken():
    """A strong line's foot is no line of the region."""
    alone = fk.measure(record(line(-2000, 30) + noise(1e-3, 50)), region=(100.0, 300.0))
    assert np.isnan(float(alone.frequency_offset))
    assert str(alone.frequency_offset_status.values).startswith("missing")
    weak = record(line(-2000, 30) + line(150, 4, 0.01) + noise(1e-3, 51))
    found = fk.measure(weak, region=(100.0, 300.0))
    near(found, "frequency_offset", 150.0)
    near(found, "linewidth", 4.0)


def test_the_line_nearest_to_where_there_is_none():
    for seed in range(60, 66):
        found = fk.measure(record(line(-2000, 6) + noise(0.03, seed)), near=140.0)
        near(found, "frequency_offset", -2000.0)


def test_several_lines_near_a_frequency():
    values = line(100, 5) + line(130, 4) + line(900, 3, 0.3) + line(930, 5, 0.4) + noise(0.01, 52)
    found = fk.measure(record(values), near=915.0, lines=2)
    for place, (frequency, width) in enumerate(((900, 3), (930, 5))):
        near(found.isel(line=place), "frequency_offset", frequency)
        near(found.isel(line=place), "linewidth", width)


def test_noise_alone_is_rarely_a_line():
    """Source: the stated rate, one record in a thousand; 1,200 records, so at most six."""
    values = noise(1.0, 53, (1200, 1024))
    found = fk.measure(record(values))
    assert int(np.isfinite(found.frequency_offset).sum()) <= 6


def test_a_slow_line_near_the_carrier_is_no_offset():
    time = DWELL * np.arange(1024)
    for seed, frequency in ((54, -24.9), (55, 3.0), (56, 11.0), (57, -7.7)):
        values = line(frequency, 0.07, phase=1.965, time=time) + noise(0.01, seed, (1024,))
        found = fk.measure(record(values))
        near(found, "frequency_offset", frequency)
        near(found, "amplitude", 1.0)
        assert "set aside" not in str(found.status.values)


def test_a_history_that_does_not_lead_back():
    fid = record(line(100, 5) + noise(0.01, 58))
    for spoiled in (
        fid.assign_attrs(history="Tue Dec 1 12:00:00 2026: copied by hand"),
        fk.remove_end(fk.apodize_cosine(fid), keep_points=4000),
    ):
        found = fk.measure(spoiled)
        assert abs(float(found.frequency_offset) - 100) < 0.1
        assert "as it stands" in found.attrs["notes"]
        for name in QUANTITIES:
            assert str(found[f"{name}_status"].values).startswith("doubtful"), name


def test_windows_of_their_own_then_combined():
    """Each record had its own window: what was combined cannot be seen through."""
    values = np.stack([line(100, width) for width in (4, 5, 6)]) + noise(0.01, 59, (3, POINTS))
    shots = record(values, dims=("shot",))
    found = fk.measure(fk.average_shots(fk.apodize_matched(shots)))
    assert "as it stands" in str(found.status.values)
    lost = fk.apodize_matched(shots).drop_vars("matched_broadening")
    assert "as it stands" in str(fk.measure(lost).status.values[0])


def test_a_shift_by_hand_leaves_the_field():
    """Source: the field is where it was; the axis moves."""
    fid = record(line(100, 5) + noise(0.01, 60))
    moved = fk.measure(fk.shift_frequency(fid, frequency=1000.0))
    near(moved, "frequency_offset", 1100.0)
    near(moved, "field", float(fk.measure(fid).field))


def test_signal_to_noise_of_one_shape_out_of_two_lines():
    """Source: highest point of the noise-free transform over the noise, by brute force."""
    for apart in (4.0, 7.0):
        clean = line(100, 5) + line(100 + apart, 5)
        found = fk.measure(record(clean + noise(0.01, 61)))
        assert str(found.lineshape.values) == "composite of 2"
        fine = np.fft.fft(np.concatenate([clean, np.zeros(15 * POINTS)])).real.max()
        near(found, "snr", fine / (0.01 * np.sqrt(POINTS)))


def test_a_small_region_for_the_noise_is_less_sure():
    """Source: definition of a standard uncertainty; binomial counting error of 200 records."""
    clean = line(100, 5)
    values = clean + noise(0.02, 62, (200, POINTS))
    expected = abs(np.sum(clean * np.exp(-2j * np.pi * 100 * TIME))) / (0.02 * np.sqrt(POINTS))
    for region in ((-4500.0, -4420.0), (-4500.0, -3000.0)):
        found = fk.measure(record(values), noise=region)
        share = float((abs(found.snr - expected) < found.snr_std).mean())
        assert abs(share - 0.683) < 3 * np.sqrt(0.683 * 0.317 / 200), region


def test_zeros_appended_by_hand_are_no_measurement():
    values = line(100, 5) + noise(0.02, 63)
    plain = fk.measure(record(values))
    padded = fk.measure(record(np.concatenate([values, np.zeros(3 * POINTS)])))
    hundredth = 0.01
    ratio = float(padded.frequency_offset_std / plain.frequency_offset_std)
    assert ratio == pytest.approx(1, abs=hundredth)


def test_the_decay_is_blind_to_what_lies_far_off():
    for other in (line(-3000, 5, 10.0), np.full(POINTS, 30.0 + 0j), line(2900, 8, 1.0)):
        region = (50.0, 150.0)
        found = fk.measure(record(line(100, 6) + other + noise(0.01, 64)), region=region)
        near(found, "t2_star_decay", 1 / (6 * np.pi))


def test_names_that_results_need():
    fid = record(np.stack([line(100, 5)] * 2), dims=("field",), coords={"field": [1.5, 1.6]})
    with pytest.raises(fk.FidkitError, match="field is the name of a result"):
        fk.measure(fid)
    lines = record(np.stack([line(100, 5)] * 2), dims=("line",))
    assert fk.measure(lines).linewidth.dims == ("line",)
    with pytest.raises(fk.FidkitError, match="line is the name of a result"):
        fk.measure(lines, lines=2)


def test_a_baseline_that_was_taken_away_is_put_back():
    """Source: the record is the same, so every number is; only rounding is between them."""
    values = np.stack([line(100, 5, phase=0.4), line(-300, 8)]) + noise(1e-3, 70, (2, POINTS))
    fid = record(values, dims=("channel",))
    plain = fk.measure(fid)
    for window in ("apodize_exponential", "apodize_trapezoid"):
        chain = fk.Chain(
            [
                window,
                fk.Call("zero_fill", factor=2),
                "fourier_transform",
                "auto_phase",
                fk.Call("correct_baseline", order=3),
                fk.Call("correct_phase", zero_order=7.0),
                fk.Call("correct_baseline", order=1),
            ]
        )
        found = fk.measure(chain(fid))
        for name in ("frequency_offset", "linewidth", "amplitude", "phase"):
            apart = np.abs(found[name] - plain[name]) / plain[f"{name}_std"]
            assert float(apart.max()) < 0.5, name
            ratio = found[f"{name}_std"] / plain[f"{name}_std"]
            assert float(abs(ratio - 1).max()) < 0.1, name
        back = fk.inverse_transform(chain(fid))
        assert "as it stands" in str(fk.measure(back).status.values[0])
        assert "as it stands" in str(fk.measure(chain(fid).drop_vars("baseline")).status.values[0])


def test_predicted_points_are_no_measurement():
    """Source: definition of a standard uncertainty; binomial counting error of 150 records."""
    time = TIME[:2048] + 2e-3
    values = line(100, 6, time=time) + noise(0.05, 71, (150, 2048))
    fid = record(values, time_start=2e-3)
    plain, rebuilt = fk.measure(fid), fk.measure(fk.rebuild_start(fid))
    for name in ("frequency_offset", "linewidth", "amplitude"):
        ratio = rebuilt[f"{name}_std"] / plain[f"{name}_std"]
        assert float(abs(ratio - 1).max()) < 1e-6, name
        assert float(abs(rebuilt[name] - plain[name]).max()) < 1e-6, name
    spectrum = fk.fourier_transform(fk.apodize_exponential(fk.rebuild_start(fid)))
    found = fk.measure(spectrum)
    assert float(abs(found.linewidth / plain.linewidth - 1).max()) < 1e-6


def test_the_middle_of_a_spectrum_is_not_the_whole():
    """A piece that lies symmetric about the carrier is a piece."""
    fid = record(line(100, 5) + noise(0.01, 72))
    spectrum = fk.fourier_transform(fk.zero_fill(fid, factor=4))
    found = fk.measure(spectrum.sel(frequency=slice(-1250, 1249.9)))
    assert "as it stands" in str(found.status.values)


def test_an_offset_is_no_line_where_several_are_asked_for():
    for seed in range(80, 86):
        values = line(-412.3, 4) + line(330, 6, 0.5) + 0.025 + noise(0.01, seed)
        found = fk.measure(record(values), lines=2)
        near(found.isel(line=0), "frequency_offset", -412.3)
        near(found.isel(line=1), "frequency_offset", 330.0)


def test_one_channel_does_not_know_the_sign():
    found = fk.measure(fk.make_analytic(record(line(-412.3, 6).real)))
    assert "cannot tell the sign" in str(found.frequency_offset_status.values)
    assert "cannot tell the sign" in str(found.field_status.values)


def test_a_step_that_is_not_known_is_not_trusted(monkeypatch):
    """A step outside the windows that weights the record would falsify the width in silence."""
    from fidkit.params import STEPS, step

    before = dict(STEPS)
    try:

        @step
        def fade(fid: xr.DataArray) -> xr.DataArray:
            """Fade the record out."""
            return fid.copy(data=fid.values * np.exp(-15 * fid["time"].values))

        found = fk.measure(fade(record(line(100, 5) + noise(0.01, 90))))
    finally:
        STEPS.clear()
        STEPS.update(before)
    assert str(found.linewidth_status.values).startswith("doubtful")
    assert "what the step fade does" in found.attrs["notes"]


def test_every_step_is_a_window_or_known_to_leave_widths_alone():
    from fidkit.measure.record import NEUTRAL, WINDOWS

    windows = {name for name, spec in fk.STEPS.items() if spec.room == WINDOWS}
    assert windows | NEUTRAL == set(fk.STEPS)


def test_a_tone_beside_the_line_is_not_taken_for_it():
    time = DWELL * np.arange(2048)
    for seed, strength in ((91, 1.0), (92, 5.0)):
        values = line(123.4, 6, time=time) + strength * np.exp(100j * np.pi * time)
        found = fk.measure(record(values + noise(0.03, seed, (2048,))))
        near(found, "frequency_offset", 123.4)
        near(found, "linewidth", 6.0)
        assert "steady tone at 50.0 Hz" in str(found.status.values)


def test_lines_outside_the_region_do_not_fill_up():
    values = line(-2000, 10) + line(200, 6) + noise(0.01, 93)
    found = fk.measure(record(values), region=(100.0, 300.0), lines=2)
    near(found.isel(line=0), "frequency_offset", 200.0)
    assert np.isnan(float(found.frequency_offset[1]))


def test_a_small_offset_under_a_line_near_the_carrier():
    """Source: definition of a standard uncertainty: the mean error stays well within one."""
    for level, snr, frequency in ((0.1, 3, 0.0), (0.01, 30, 0.0), (0.01, 30, 2.0)):
        values = line(frequency, 6.4) + level + noise(1 / snr, 94, (100, POINTS))
        found = fk.measure(record(values))
        for name, true in (("linewidth", 6.4), ("frequency_offset", frequency)):
            apart = (found[name] - true) / found[f"{name}_std"]
            assert abs(float(apart.mean())) < 0.8, (level, snr, name)


def test_an_offset_alone_is_said_to_be_one():
    found = fk.measure(record(0.3 + noise(1.0, 95, (20, 2048))))
    for status in found.frequency_offset_status.values:
        assert status != "ok"


def test_odd_records_raise_nothing():
    """Noise-free, far too short a decay, empty tails: numbers or reasons, no warning."""
    for values in (line(100, 160), line(100, 4000)):
        found = fk.measure(record(values))
        assert np.isfinite(float(found.frequency_offset)) or str(found.status.values) != "ok"
    for name in ("time_start", "spectral_width", "measured_from"):
        spoiled = fk.fourier_transform(record(line(100, 5))).assign_attrs({name: "soon"})
        with pytest.raises(fk.FidkitError, match=name):
            fk.measure(spoiled)
