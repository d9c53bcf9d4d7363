"""The reader and the whole way from FID to spectrum, against published records.

Sources: JCAMP-DX 5.00 test files of P. Lampen and J. Lambert, ISAS Dortmund, 1992 (``OFF/``);
o-dichlorobenzene at 200 MHz, R. J. Lancashire, UWI Mona (``RJL/``). Both as `published` fetches
them. nmrglue is the independent decoder where it reads these files right.
"""

from __future__ import annotations

import nmrglue
import numpy as np
import pytest
from published import published_file

import fidkit as fk

FID_FACTORS = {"R": 0.841812, "I": 0.801094}


def counts(values: np.ndarray, factor: float) -> np.ndarray:
    """The whole numbers of the file, from the values that were scaled by the factor."""
    whole = np.round(values / factor)
    # scaling back and forth leaves rounding errors of a double, 1e-16 of numbers up to 32000
    assert np.abs(values / factor - whole).max() < 1e-10
    return whole.astype(int)


@pytest.fixture
def simultaneous(tmp_path):
    """Reads a published FID with the label that tells of the late imaginary part changed, so that
    both channels come as they stand in the file."""

    def read(name: str):
        path = tmp_path / "as_it_stands.jdx"
        text = published_file(name).read_text()
        assert "SEQUENTIAL" in text
        path.write_text(text.replace("SEQUENTIAL", "SIMULTANEOUS"))
        return fk.read(path)

    return read


@pytest.mark.parametrize("number", [1, 2, 3, 4])
def test_four_encodings_of_one_fid_hold_the_same_numbers(number, simultaneous):
    """AFFN, PAC, SQZ, DIF. Source: RJL/ofid1..4, the sums from two independent decoders."""
    fid = simultaneous(f"RJL/ofid{number}.jdx").values
    real = counts(fid.real, FID_FACTORS["R"])
    imaginary = counts(fid.imag, FID_FACTORS["I"])
    assert real.size == imaginary.size == 8192
    assert (real[0], real[-1], real.min(), real.max()) == (-501, -526, -22791, 32000)
    assert real.sum() == -134508
    assert (imaginary[0], imaginary[-1]) == (14998, 878)
    assert (imaginary.min(), imaginary.max(), imaginary.sum()) == (-25188, 32000, -84011)
    _, (other_real, other_imaginary) = nmrglue.jcampdx.read(str(published_file("RJL/ofid4.jdx")))
    np.testing.assert_array_equal(real, counts(other_real, FID_FACTORS["R"]))
    np.testing.assert_array_equal(imaginary, counts(other_imaginary, FID_FACTORS["I"]))


def test_facts_of_the_fid():
    """Source: header of RJL/ofid4: 200.133 MHz, 1H, 8192 points over 2.9327 s."""
    fid = fk.read(published_file("RJL/ofid4.jdx"))
    assert fid.attrs["carrier_frequency"] == 200.133e6
    assert fid.attrs["nucleus"] == "1H"
    assert fid.attrs["source"] == "ofid4.jdx"
    assert fid.attrs["sample"] == "o-dichlorobenzene"
    assert fid.time.values[0] == 0
    assert fid.time.values[-1] == pytest.approx(2.9327, rel=1e-12)  # rounding of a double
    assert "0.5 of a dwell time" in fid.attrs["notes"]
    assert "reverse_frequency" in fid.attrs["notes"]
    assert fid.attrs["history"] == ""


@pytest.mark.parametrize(("line", "naive"), [(995.04, 0.6264), (469.65, 0.27045)])
def test_late_imaginary_part_is_moved_back(line, naive, simultaneous):
    """Sequential quadrature images a line by tan(pi f dwell / 2): the delay theorem, closed form."""

    def image(fid):
        spectrum = fk.fourier_transform(fk.zero_fill(fid, factor=8))
        height = [
            float(np.abs(spectrum.sel(frequency=slice(sign * line - 3, sign * line + 3))).max())
            for sign in (1, -1)
        ]
        return min(height) / max(height)

    fid = simultaneous("RJL/ofid4.jdx")
    law = np.tan(np.pi * line * float(fid.time[1] - fid.time[0]) / 2)
    assert law == pytest.approx(naive, abs=3e-4)  # the published dwell time has four digits
    assert image(fid) == pytest.approx(law, abs=2e-3)  # noise and neighbours under the image
    assert image(fk.read(published_file("RJL/ofid4.jdx"))) < 0.005


@pytest.mark.parametrize("number", range(1, 11))
def test_ten_encodings_of_one_spectrum_hold_the_same_numbers(number):
    """XYDATA and NTUPLES, five encodings each. Source: RJL/o01..o10; nmrglue decodes o01."""
    spectrum = fk.read(published_file(f"RJL/o{number:02}.jdx"))
    real = counts(spectrum.values.real[::-1], 1.267406)  # the file runs downwards
    assert (real.min(), real.max(), real[0], real[-1]) == (-262, 32000, 37, -1)
    _, other = nmrglue.jcampdx.read(str(published_file("RJL/o01.jdx")))
    np.testing.assert_array_equal(real, counts(np.asarray(other), 1.267406))
    assert np.iscomplexobj(spectrum) == (number > 5)
    if number > 5:
        first = fk.read(published_file("RJL/o06.jdx"))
        np.testing.assert_array_equal(spectrum.values, first.values)
    # NTUPLES headers print four decimals, XYDATA headers six
    decimals = 1e-4 if number > 5 else 1e-6
    assert spectrum.frequency.values[0] == pytest.approx(-402.202637, abs=decimals)
    assert spectrum.frequency.values[-1] == pytest.approx(2391.297363, abs=decimals)
    assert "reference of the file" in spectrum.attrs["notes"]


FID_LINES = [7.5653, 7.5466, 7.5356, 7.5153, 7.4962, 7.3702, 7.3511, 7.3308, 7.3199, 7.3011, 7.2845, 0]  # fmt: skip
SPECTRUM_LINES = [7.5639, 7.5467, 7.5343, 7.5158, 7.4969, 7.3688, 7.3498, 7.3302, 7.3200, 7.3013, 7.2842, 0]  # fmt: skip


def tops(shift: np.ndarray, height: np.ndarray, near: list[float]) -> np.ndarray:
    """Parabolic top of the peak nearest to each place."""
    peaks = np.flatnonzero((height[1:-1] > height[:-2]) & (height[1:-1] >= height[2:])) + 1
    peaks = peaks[height[peaks] > 0.02 * height.max()]
    found = []
    for place in near:
        top = peaks[np.argmin(np.abs(shift[peaks] - place))]
        low, middle, high = height[top - 1 : top + 2]
        between = 0.5 * (low - high) / (low - 2 * middle + high)
        found.append(shift[top] + between * (shift[1] - shift[0]))
    return np.array(found)


def test_lines_of_the_fid_lie_where_the_published_spectrum_has_them():
    """Twelve lines in ppm from TMS. Source: RJL/ofid4 and o06; one point is 0.0017 ppm."""
    published = fk.read(published_file("RJL/o06.jdx"))
    # the header of the FID prints its span with 4 decimals; that of the spectrum is 1.8e-4 wider
    width = fk.signals.spectral_width(published)
    fid = fk.read(published_file("RJL/ofid4.jdx"), dwell_time=1 / width)
    spectrum = fk.fourier_transform(fk.zero_fill(fid, factor=8))
    frequency, height = spectrum.frequency.values, np.abs(spectrum.values)
    reference = tops(frequency, height, [-0.35625 * width])[0]
    from_fid = tops((frequency - reference) / 200.136, height, FID_LINES)
    frequency = published.frequency.values
    reference = tops(frequency, published.values.real, [0])[0]
    from_spectrum = tops((frequency - reference) / 200.136, published.values.real, SPECTRUM_LINES)
    # the tables lay the published 2793.5 Hz over 8192 points, the header over 8191 steps
    header = 8192 / 8191
    np.testing.assert_allclose(from_fid, np.multiply(FID_LINES, header), rtol=0, atol=1e-4)
    np.testing.assert_allclose(
        from_spectrum, np.multiply(SPECTRUM_LINES, header), rtol=0, atol=1e-4
    )
    np.testing.assert_allclose(from_fid, from_spectrum, rtol=0, atol=2e-3)


def test_magnitude_of_the_fid_is_that_of_the_published_spectrum(simultaneous):
    """Source: RJL/ofid4 and o06; 0.992 with the imaginary part moved back, 0.86 without."""
    published = np.abs(fk.read(published_file("RJL/o06.jdx")).values)

    def correlation(fid):
        # the published axis runs downwards from the highest frequency: one point is turned over
        magnitude = np.roll(np.abs(fk.fourier_transform(fid).values), -1)
        return np.corrcoef(magnitude, published)[0, 1]

    assert correlation(fk.read(published_file("RJL/ofid4.jdx"))) > 0.98
    assert correlation(simultaneous("RJL/ofid4.jdx")) < 0.88


def test_noise_and_height_of_the_published_spectrum():
    """Points 3686 to 5324 hold no signal. Source: RJL/o06; rms 21.6917, height 40556.99."""
    spectrum = fk.read(published_file("RJL/o06.jdx"))
    region = spectrum.values.real[::-1][3686:5324]
    frequency = spectrum.frequency.values[::-1]
    assert frequency[3686] == pytest.approx(1134.2, abs=0.06)  # printed with one decimal
    assert frequency[5324] == pytest.approx(575.6, abs=0.06)
    assert region.std() == pytest.approx(21.6917, rel=1e-5)  # six digits
    assert spectrum.values.real.max() / region.std() == pytest.approx(1869.7, rel=1e-4)


def read_counts(name: str) -> np.ndarray:
    return fk.read(published_file(name)).values[::-1]


def test_one_32_bit_spectrum_in_five_encodings():
    """Source: ISAS 1992, OFF/: AFFN, PAC, SQZ as TEST32; DIF and NTUPLES as TESTSPEC."""
    wide = read_counts("OFF/TEST32.DX")
    for encoding in ("AFFN", "PAC", "SQZ"):
        np.testing.assert_array_equal(read_counts(f"OFF/*{encoding}.DX"), wide)
    narrow = read_counts("OFF/TESTSPEC.DX")
    assert np.abs(narrow / 29670.15003 - wide / 29670.15003).max() < 0.5
    for encoding in ("KDIF", "KNTUP"):
        rounded = read_counts(f"OFF/*{encoding}.DX").real
        assert np.abs(rounded - narrow).max() <= 1  # one count, by rounding or cutting off


def test_repeat_mark_after_an_ordinate_repeats_the_ordinate():
    """Point 14616 on of the imaginary page. Source: OFF/TESTNTUP, arbiters: its LAST, -347 counts,
    the sibling file and the next line's Y check; nmrglue 0.12 is off by 72 counts here."""
    imaginary = counts(read_counts("OFF/TESTNTUP.DX").imag, 21046.17328)
    assert imaginary[14615:14618].tolist() == [-85, -85, -299]
    assert imaginary[-1] == -347
    sibling = read_counts("OFF/*KNTUP.DX").imag / 21046.17328
    assert np.abs(sibling - imaginary).max() < 5e-5  # the sibling is rounded to 1 in 21046


@pytest.fixture(scope="module")
def published_and_ours(tmp_path_factory):
    """The published FID through a saved and reloaded chain, on the published scale.

    The recipe is not stated in the files; it was found by division in the time domain:
    broadening 1.470 Hz (stated as RESOLUTION), a ramp over the last tenth, the first point in
    full, times 8, -38.27 degrees and a delay of -0.578 us against the first point.
    """
    fid = fk.read(published_file("OFF/TESTFID.DX"))
    dwell, start = 4.159993e-5, 22.5e-6
    assert fk.signals.dwell_time(fid) == pytest.approx(dwell, rel=2e-7)  # seven digits printed
    assert fk.signals.time_start(fid) == pytest.approx(start, rel=1e-12)  # rounding of a double
    path = tmp_path_factory.mktemp("chain") / "published.py"
    fk.Chain(
        [
            # the published axis is minus ours, so the phases change sign as well
            "reverse_frequency",
            fk.Call("apodize_exponential", broadening=1.470),
            fk.Call("apodize_trapezoid", fall=0.1),
            "fourier_transform",
            fk.Call(
                "correct_phase", zero_order=38.27, first_order=360 * (start - 0.578e-6) / dwell
            ),
        ]
    ).save(path)
    spectrum = fk.Chain.load(path)(fid)
    # our weight starts at the pulse, the recipe's at the first point
    scale = 8 / dwell * np.exp(np.pi * 1.470 * start)
    # the point at half the sampling rate stands at the other end of the published axis
    ours = spectrum.values[1:] * scale
    return fid, ours


def test_published_fid_becomes_the_published_spectrum(published_and_ours):
    """Source: OFF/TESTFID to TESTNTUP (16 bit) and TEST32 (32 bit), ISAS 1992."""
    _, ours = published_and_ours
    wide = fk.read(published_file("OFF/TEST32.DX")).values[:-1]
    off = ours.real - wide
    assert np.sqrt(np.mean(off**2)) < 3e-4 * np.sqrt(np.mean(wide**2))
    assert np.abs(off).max() < 3e-4 * np.abs(wide).max()
    narrow = fk.read(published_file("OFF/TESTNTUP.DX")).values[:-1]
    # conjugate: with the axis turned over, dispersion changes sign
    for part, other, count in (
        (ours.real, narrow.real, 29670.15003),
        (-ours.imag, narrow.imag, 21046.17328),
    ):
        off = (part - other) / count
        # rounding alone leaves 1 / sqrt(12) = 0.289 of a count
        assert 0.27 < np.sqrt(np.mean(off**2)) < 0.31
        assert np.abs(off * count).max() < 3e-4 * np.abs(other).max()


def test_the_phases_of_the_published_spectrum_are_recovered(published_and_ours):
    """-38.27 degree and -0.578 us, by least squares against the published complex spectrum.
    Source: OFF/TESTFID to TESTNTUP, recovered to 0.1 degree and 0.1 us by an independent script."""
    from scipy.optimize import least_squares

    fid, ours = published_and_ours
    frequency = fk.fourier_transform(fk.reverse_frequency(fid)).frequency.values[1:]
    published = np.conj(fk.read(published_file("OFF/TESTNTUP.DX")).values[:-1])
    known = np.exp(1j * np.deg2rad(38.27) - 2j * np.pi * frequency * 0.578e-6)
    unphased = ours / known

    def miss(values):
        phase, delay = values
        turn = np.exp(1j * np.deg2rad(phase) + 2j * np.pi * frequency * delay * 1e-6)
        difference = (unphased * turn - published) / np.abs(published).max()
        return np.concatenate([difference.real, difference.imag])

    phase, delay = least_squares(miss, [0.0, 0.0]).x
    assert phase == pytest.approx(38.27, abs=0.1)  # degree; our axis is minus the published
    assert delay == pytest.approx(-0.578, abs=0.1)  # us


def test_the_published_spectrum_counts_the_first_point_in_full(published_and_ours):
    """Half of the first point lifts the whole real part: source OFF/TESTFID, -24 706 counts of
    TEST32 against +3."""
    fid, ours = published_and_ours
    wide = fk.read(published_file("OFF/TEST32.DX")).values[:-1]
    first = complex(np.conj(fid.values[0]))
    half = ours.real - (8 * first / 2 * np.exp(1j * np.deg2rad(38.27))).real
    assert abs(np.mean(ours.real - wide)) < 100
    assert abs(np.mean(half - wide)) > 20_000


def test_axis_direction_of_the_published_spectrum():
    """Published offset = minus the frequency of the FID as it stands. Source: OFF/TESTFID,
    TESTNTUP: magnitude correlation 0.9587 this way, far less the other."""
    fid = fk.read(published_file("OFF/TESTFID.DX"))
    published = np.abs(fk.read(published_file("OFF/TESTNTUP.DX")).values)

    def correlation(record):
        ours, theirs = np.abs(fk.fourier_transform(record).values)[1:], published[:-1]
        return ours @ theirs / np.sqrt((ours @ ours) * (theirs @ theirs))

    assert correlation(fk.reverse_frequency(fid)) == pytest.approx(0.9587, abs=1e-4)
    assert correlation(fid) < 0.7


PEAKS = [15417.98, 13817.11, 13771.57, 13543.21, 8692.25, 8660.28, 8628.53, 3822.42, 2488.94]
HEIGHTS = [0.2165, 1, 0.9669, 0.5579, 0.3843, 0.3605, 0.3431, 0.5115, 0.4757]


def test_line_list_of_the_published_spectrum():
    """Hz from the low end, parabolic top; heights of the highest points. Source: OFF/TEST32, ethylbenzene in CDCl3."""
    spectrum = fk.read(published_file("OFF/TEST32.DX"))
    frequency, height = spectrum.frequency.values, spectrum.values
    found = tops(frequency, np.where(height > 0.1 * height.max(), height, 0), PEAKS)
    np.testing.assert_allclose(found, PEAKS, rtol=0, atol=0.15)  # Hz, a tenth of a point
    peaks = []
    for place in PEAKS:
        near = np.flatnonzero(np.abs(frequency - place) < 3)
        top = int(near[np.argmax(height[near])])
        peaks.append(height[top])
    digits = 3e-4  # four are given
    np.testing.assert_allclose(np.array(peaks) / max(peaks), HEIGHTS, rtol=digits)
