"""JCAMP-DX: the encodings against the standard's own examples, and every check it offers."""

from __future__ import annotations

import re

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from published import published_file

import fidkit as fk
from fidkit.formats import asdf
from fidkit.params import FidkitError

# The same ten ordinates in every form. Source: McDonald and Wilks, Appl. Spectrosc. 42, 151
# (1988), JCAMP-DX 4.24 table VIIb; read in public copies.
FORMS = {
    "fixed": "1 2 3 3 2 1 0 -1 -2 -3",
    "packed": "1+2+3+3+2+1+0-1-2-3",
    "squeezed": "1BCCBA@abc",
    "difference": "1JJ%jjjjjj",
    "difference and repeat": "1JT%jX",
}


def decode(*lines: str, expected: int | None = None) -> list[float]:
    return asdf.decode(enumerate(lines, 1), expected).ordinates.tolist()


@pytest.mark.parametrize("form", FORMS)
def test_every_form_of_the_same_ordinates(form):
    """Source: JCAMP-DX 4.24 table VIIb (see above); an X is put before each."""
    first = "0 " if FORMS[form][0].isdigit() else "0"
    assert decode(first + FORMS[form], expected=10) == [1, 2, 3, 3, 2, 1, 0, -1, -2, -3]


def test_long_example_of_the_standard():
    """53 ordinates. Source: JCAMP-DX 4.24 table VI, as in TEST/difdup_example and
    noencoding_example of the published files."""
    wanted = [0, 0, 0, 0, 2, 4, 4, 4, 7, 5, 4, 4, 5, 5, 7, 10, 11, 11, 6, 5, 7, 6, 9, 9, 7, 10, 10, 9, 10, 11, 12, 15, 16, 16, 14, 17, 38, 38, 35, 38, 42, 47, 54, 59, 66, 75, 78, 88, 96, 104, 110, 121, 128]  # fmt: skip
    compressed = "4@VKT%TLkj%J%KLJ%njKjL%kL%jJULJ%kLK1%lLMNPNPRLJ0QTOJ1P"
    assert decode(compressed, "56A28", expected=53) == wanted
    for name in ("TEST/difdup_example.jdx", "TEST/noencoding_example.jdx"):
        record = fk.read(published_file(name), carrier_frequency=1e6)
        # the header's factor is 0.1; a rounding of a double
        np.testing.assert_allclose(record.values, np.multiply(wanted, 0.1), rtol=1e-15)


def test_pseudo_digits():
    """Source: JCAMP-DX 4.24, table of pseudo-digits."""
    assert decode("0@ABCDEFGHI") == list(range(10))
    assert decode("0abcdefghi") == [-n for n in range(1, 10)]
    assert np.diff(decode("0@%JKLMNOPQR")).tolist() == list(range(10))
    assert np.diff(decode("0@jklmnopqr")).tolist() == [-n for n in range(1, 10)]
    for count, mark in enumerate("STUVWXYZs", 1):  # the count includes the first one
        assert decode(f"0A7{mark}") == [17] * count
    assert decode("0A7T3") == [17] * 23


def test_repeat_after_an_ordinate_at_the_start_of_a_line_repeats_it():
    """The check value is dropped, the repeat kept. Source: OFF/TESTNTUP line 1768h5Tk14."""
    assert decode("0h0n", "1h5Tk14") == [-80, -85, -85, -299]


def test_whole_numbers_with_exponents_and_points():
    assert decode("1.5 2.5E-02 -3e2 1E+01 .5") == [0.025, -300, 10, 0.5]
    assert decode("-1.5E+00A2b3") == [12, -23]
    assert decode("0.0-501-9843 8262") == [-501, -9843, 8262]


@pytest.mark.parametrize(
    ("lines", "says"),
    [
        (["0A0J", "1A2J"], "line 2: the Y check fails"),
        (["0A0J", "1J"], "line 2: begins with a difference"),
        (["0S5"], "line 1: begins with a repeat"),
        (["A0J"], "line 1: must begin with an X value"),
        (["0"], "line 1: holds an X value but no ordinate"),
        (["0A0?J"], "no number"),
        (["0A2.5J"], "no number"),
        (["0 1 2 ?"], "no number"),
        (["0 1 2 nan"], "no number"),
        (["0A" + "9" * 60], "no number is that long"),
        (["0A0S99999999999"], "more than"),
        (["0 1e300 1e999"], "too large"),
    ],
)
def test_a_damaged_table_names_its_line(lines, says):
    with pytest.raises(FidkitError, match=re.escape(says)):
        decode(*lines)


@settings(max_examples=200, deadline=None)
@given(
    st.lists(st.integers(-(2**31) + 1, 2**31 - 1) | st.integers(-2, 2), min_size=2, max_size=200)
)
def test_what_is_encoded_decodes_to_the_same(values):
    """Round trip, exact."""
    lines = asdf.encode(np.array(values, dtype=np.int64))
    assert decode(*lines, expected=len(values)) == values
    assert max(map(len, lines)) <= 100


def fid_text(**changes: str) -> str:
    """A small FID: 2 x 8 points."""
    labels = {
        "TITLE": "water",
        "JCAMP-DX": "5.01",
        "DATA TYPE": "NMR FID",
        "DATA CLASS": "NTUPLES",
        "ORIGIN": "bench",
        "OWNER": "public domain",
        ".OBSERVE FREQUENCY": "63.87",
        ".OBSERVE NUCLEUS": "^1H",
        ".ACQUISITION MODE": "SIMULTANEOUS",
        ".DELAY": "(20, 20)",
        "NTUPLES": "NMR FID",
        "VAR_NAME": "TIME, FID/REAL, FID/IMAG, PAGE NUMBER",
        "SYMBOL": "X, R, I, N",
        "VAR_TYPE": "INDEPENDENT, DEPENDENT, DEPENDENT, PAGE",
        "VAR_FORM": "AFFN, ASDF, ASDF, AFFN",
        "VAR_DIM": "8, 8, 8, 2",
        "UNITS": "SECONDS, ARBITRARY UNITS, ARBITRARY UNITS,",
        "FIRST": "0, 20, 1, 1",
        "LAST": "0.007, 2.6, -1, 2",
        "MIN": "0, 2.6, -3, 1",
        "MAX": "0.007, 20, 4, 2",
        "FACTOR": "0.001, 0.2, 1, 1",
    }
    labels |= {key: value for key, value in changes.items() if key in labels or "PAGE" not in key}
    head = "".join(f"##{key}= {value}\n" for key, value in labels.items() if value != "-")
    real = changes.get("PAGE_R", "0A00j0k0l0\n3D0j0k0%\n6A0L\n7A3\n")
    imaginary = changes.get("PAGE_I", "0 1 2 4 3\n4 0 -3 -2 -1\n")
    return (
        head
        + f"##PAGE= N=1\n##DATA TABLE= (X++(R..R)), XYDATA\n{real}"
        + f"##PAGE= N=2\n##DATA TABLE= (X++(I..I)), XYDATA\n{imaginary}"
        + "##END NTUPLES= NMR FID\n##END=\n"
    )


REAL = np.array([100, 90, 70, 40, 30, 10, 10, 13]) * 0.2
IMAGINARY = np.array([1, 2, 4, 3, 0, -3, -2, -1])


@pytest.fixture
def read(tmp_path):
    def read(text, **arguments):
        path = tmp_path / "bench.dx"
        path.write_bytes(text if isinstance(text, bytes) else text.encode())
        return fk.read(path, **arguments)

    return read


def small(**changes: str) -> str:
    """The small FID, whose last real value is 13 counts, 2.6."""
    changes = {"MIN": "0, 2, -3, 1"} | changes
    return fid_text(**changes)


def test_a_small_fid(read):
    fid = read(small())
    np.testing.assert_array_equal(fid.values, REAL + 1j * IMAGINARY)
    assert fid.attrs["carrier_frequency"] == 63.87e6
    # .DELAY is in microseconds
    np.testing.assert_allclose(fid.time.values, 20e-6 + 1e-3 * np.arange(8), rtol=1e-14)
    assert fid.attrs["title"] == "water"
    assert "filter_delay" not in fid.attrs


@pytest.mark.parametrize(
    "change",
    [
        lambda text: text.replace("\n", "\r\n"),
        lambda text: text.replace("##", " ##"),
        lambda text: text.replace("##DATA TYPE", "##Data-Type").replace("VAR_DIM", "var dim"),
        lambda text: text.replace("NMR FID", "nmr fid").replace("SECONDS", "seconds"),
        lambda text: text.replace("##TITLE= water", "$$ made at the bench\n##TITLE= water $$ pure"),
        lambda text: text.replace("##FIRST", "##$PRIVATE= a\nb=c\n##FIRST"),
        lambda text: "\ufeff" + text,
        lambda text: text.replace("water", "W\xe4sser").encode("latin-1"),
        lambda text: text.replace("JCAMP-DX", "JCAMPDX").replace("5.01", "6.0"),
        lambda text: text.replace("\n7A3\n", "\n7A3 $$ checkpoint\n"),
    ],
)
def test_spelling_that_the_standard_allows(read, change):
    """Labels compare ignoring case, blanks, - / and _. Source: JCAMP-DX 4.24 and the published
    files, which use all of these; the rule itself from memory."""
    np.testing.assert_array_equal(read(change(small())).values, REAL + 1j * IMAGINARY)


@pytest.mark.parametrize(
    ("text", "says"),
    [
        (small(VAR_DIM="9, 9, 9, 2"), "line 28: the table ends after 8 points where the header promises 9"),
        (small(VAR_DIM="7, 7, 7, 2"), "line 27: the table holds more than 7 points"),
        (small(VAR_DIM="1e99, 8, 8, 2"), "number of points must be a whole number"),
        (small(VAR_DIM="4000000000, 4000000000, 4000000000, 2"), "number of points must be"),
        (small(VAR_DIM="8, 8, 5, 2"), "more than 5 points"),
        (small(VAR_DIM="-"), "number of points (VAR_DIM or NPOINTS) is not stated"),
        (small(FIRST="0, 21, 1, 1"), "line 18: the first value of R is stated as 21"),
        (small(LAST="0.007, 2.6, -2, 2"), "line 19: the last value of I is stated as -2"),
        (small(MIN="0, 1.5, -3, 1"), "the smallest value of R"),
        (small(MAX="0.007, 20, 5, 2"), "the largest value of I"),
        (small(LAST="0, 2.6, -1, 2"), "FIRST and LAST must differ"),
        (small(FACTOR="0.001, 0, 1, 1"), "FACTOR must not be 0"),
        (small(FACTOR="0.001, x, 1, 1"), "factor must be a number"),
        (small(PAGE_I="0 1 2 4 3\n0 0 -3 -2 -1\n"), "line 32: the X check fails"),
        (small(PAGE_R="0A00j0k0l0\n3D1j0k0%\n6A0L\n7A3\n"), "line 26: the Y check fails"),
        (small(PAGE_R="0A00j0k0l0\n3D0j1k0%\n6A0L\n7A3\n"), "the Y check fails"),
        (small(SYMBOL="X, R, Z, N"), "I" ),
        (small(UNITS="HZ, A, A,"), "DATA TYPE is NMR FID, but X is in HZ"),
        (small(UNITS="PARSEC, A, A,"), "the unit of X must be SECONDS"),
        (small().replace("NMR FID", "INFRARED SPECTRUM"), "holds no magnetic resonance data"),
        (small().replace("= NMR FID", "= 2D NMR FID"), "one-dimensional"),
        (small().replace("##END=\n", ""), "ends without ##END="),
        (small().replace("##FIRST=", "##FIRST"), "a label must end with ="),
        (small().replace("##TITLE= water\n", ""), "begins with ##TITLE="),
        (small().replace("(X++(R..R))", "(XR..XR)"), "tables of the form (X++(R..R))"),
        (small().replace("(X++(I..I))", "(X++(R..R))"), "a second page of R"),
        (small(**{".OBSERVE FREQUENCY": "-"}), "carrier_frequency is not in the file; give carrier_frequency in Hz"),
        (small(**{".OBSERVE FREQUENCY": "fast"}), "line 7: .OBSERVE FREQUENCY must be a number"),
        (small(**{".OBSERVE NUCLEUS": "^5Q"}), "nucleus must be one of"),
        (small(**{".DELAY": "(20, 20000)"}), ".DELAY: the two channels may differ"),
    ],
)  # fmt: skip
def test_a_damaged_file_is_refused_and_says_where(read, text, says):
    with pytest.raises(FidkitError) as caught:
        read(text)
    message = str(caught.value)
    assert message.startswith("bench.dx: ")
    assert says in message
    assert "\n" not in message


def test_every_truncation_is_refused(read):
    """Wherever the file is cut, it is refused, down to the last label."""
    text = small().rstrip("\n")
    for end in range(len(text) - 1):
        with pytest.raises(FidkitError, match=r"^bench\.dx: "):
            read(text[:end])


def test_a_flipped_digit_in_a_difference_is_refused():
    """Any other digit in any difference of a published file fails the next Y check."""
    path = published_file("RJL/ofid4.jdx")
    lines = path.read_text().splitlines()
    row = lines[200]
    for place in [m.start() for m in re.finditer(r"(?<=[j-rJ-R])\d", row)][:12]:
        changed = row[:place] + str((int(row[place]) + 1) % 10) + row[place + 1 :]
        pages = [line for line in [*lines[24:200], changed, *lines[201:527]] if line]
        with pytest.raises(FidkitError, match=r"line \d+: the Y check fails"):
            asdf.decode(enumerate(pages, 25), 8192)


@settings(max_examples=400, deadline=None)
@given(
    st.lists(
        st.tuples(
            st.integers(0, 5000), st.sampled_from(["set", "drop", "add"]), st.integers(0, 255)
        ),
        min_size=1,
        max_size=6,
    )
)
def test_random_damage_raises_nothing_but_our_own_error(tmp_path_factory, edits):
    raw = bytearray(small().encode())
    for place, what, value in edits:
        place %= len(raw)
        if what == "set":
            raw[place] = value
        elif what == "drop":
            del raw[place]
        else:
            raw.insert(place, value)
    path = tmp_path_factory.getbasetemp() / "damaged.dx"
    path.write_bytes(raw)
    try:
        fid = fk.read(path)
    except FidkitError as error:
        message = str(error)
    else:
        assert np.isfinite(fid.values).all()
        return
    assert message.startswith("damaged.dx: ")


def test_digital_filter_delay_is_kept_and_said(read):
    fid = read(small(**{"$GROUP DELAY": "67.9872"}))
    assert fid.attrs["filter_delay"] == 67.9872
    assert "remove_filter_delay" in fid.attrs["notes"]
    assert "filter_delay" not in read(small(**{"$GROUP DELAY": "-1"})).attrs


def test_later_imaginary_part_of_a_line_is_moved_back(read):
    """A pure line, real and imaginary part half a dwell time apart: closed form.

    The line has a whole number of periods in the record, so nothing is lost at the ends; FACTOR
    rounds to 1e-9 of full scale.
    """
    points, dwell = 64, 1e-3
    time = dwell * np.arange(points)
    frequency = 11 / (points * dwell)
    for label, late in (("SEQUENTIAL", 0.5), ("SIMULTANEOUS", 0.0)):
        exact = fk.from_array(
            np.cos(2 * np.pi * frequency * time)
            + 1j * np.sin(2 * np.pi * frequency * (time + late * dwell)),
            dwell_time=dwell,
            carrier_frequency=63.87e6,
        )
        import tempfile
        from pathlib import Path

        with tempfile.TemporaryDirectory() as folder:
            text = fk.write(exact, Path(folder) / "line.dx").read_text()
        fid = read(text.replace("SIMULTANEOUS", label))
        wanted = np.exp(2j * np.pi * frequency * time)
        np.testing.assert_allclose(fid.values, wanted, rtol=0, atol=2e-9)
    # the same when the two delays say it
    text = text.replace("(0.0, 0.0)", "(0, 500)")
    assert "0.5 of a dwell time" in read(text).attrs["notes"]


def test_the_axis_comes_from_the_number_printed_most_exactly(read):
    """Either the span or FACTOR may carry more digits; line X may be rounded to nothing."""
    fid = read(small(LAST="0.00701, 2.6, -1, 2", FACTOR="0.00100123456, 0.2, 1, 1"))
    assert fk.signals.dwell_time(fid) == pytest.approx(0.00100123456, rel=1e-12)
    fid = read(small(LAST="0.00700864192, 2.6, -1, 2"))
    assert fk.signals.dwell_time(fid) == pytest.approx(0.00700864192 / 7, rel=1e-12)
    fid = read(small(LAST="0.007, 2.6, -1, 2", FACTOR="1.0, 0.2, 1, 1"))
    assert "only, from the digits of the header" in fid.attrs["notes"]
    fid = read(small(PAGE_I="0.0 1 2 4 3\n0.0 0 -3 -2 -1\n"))
    np.testing.assert_array_equal(fid.values.imag, IMAGINARY)


def spectrum_text(x: str = "HZ", first: str = "40", last: str = "-30") -> str:
    return (
        "##TITLE= water\n##JCAMP-DX= 5.01\n##DATA TYPE= NMR SPECTRUM\n##DATA CLASS= XYDATA\n"
        "##.OBSERVE FREQUENCY= 100\n##.OBSERVE NUCLEUS= ^1H\n"
        f"##XUNITS= {x}\n##YUNITS= VOLTS\n##XFACTOR= 1\n##YFACTOR= 0.5\n"
        f"##FIRSTX= {first}\n##LASTX= {last}\n##NPOINTS= 8\n##FIRSTY= 0.5\n##MAXY= 4\n##MINY= .5\n"
        "##XYDATA= (X++(Y..Y))\n40+1+2+3+4\n0+5+6+7+8\n##END=\n"
    )


def test_a_spectrum_is_turned_to_ascend(read):
    spectrum = read(spectrum_text())
    assert spectrum.frequency.values.tolist() == list(range(-30, 50, 10))
    assert spectrum.values.tolist() == [4, 3.5, 3, 2.5, 2, 1.5, 1, 0.5]
    assert spectrum.attrs["units"] == "V"
    assert not np.iscomplexobj(spectrum)


def test_a_spectrum_in_ppm_is_laid_in_hertz(read):
    """1 ppm of 100 MHz is 100 Hz; with another carrier given, of that."""
    text = spectrum_text("PPM")
    assert read(text).frequency.values[0] == pytest.approx(-3000, rel=1e-14)
    other = read(text, carrier_frequency=50e6)
    assert other.frequency.values[0] == pytest.approx(-1500, rel=1e-14)
    assert "the file says 100000000" in other.attrs["notes"]


def test_one_block_of_several(read):
    link = (
        "##TITLE= both\n##JCAMP-DX= 5.01\n##DATA TYPE= LINK\n##BLOCKS= 3\n"
        "##TITLE= peaks\n##DATA TYPE= NMR PEAK TABLE\n##PEAK TABLE= (XY..XY)\n1, 2\n##END=\n"
        + small()
        + spectrum_text()
        + "##END=\n"
    )
    first = read(link)
    assert first.dims == ("time",)
    assert "block=" in first.attrs["notes"]
    assert read(link, block=2).dims == ("frequency",)
    with pytest.raises(FidkitError, match=r"bench\.dx: block must be from 1 to 2"):
        read(link, block=3)


def test_real_fid_alone(read):
    text = small(SYMBOL="X, R, N, N", UNITS="SECONDS, V, ,")
    text = re.sub(r"##PAGE= N=2\n.*?##END N", "##END N", text, flags=re.DOTALL)
    fid = read(text)
    np.testing.assert_array_equal(fid.values, REAL)
    assert fid.attrs["units"] == "V"


def test_what_is_written_reads_back_to_half_a_count(tmp_path):
    rng = np.random.default_rng(5)
    values = rng.normal(size=300) * 1e-6 + 1j * rng.normal(size=300)
    fid = fk.from_array(
        values,
        dwell_time=1e-4 / 3,
        time_start=2e-5,
        carrier_frequency=63.87123e6,
        nucleus="13C",
        units="V",
        sample="phantom $$ A\n##END=",
        coil="loop",
        averages=8,
    )
    for name, signal in (("fid.dx", fid), ("spectrum.jdx", fk.fourier_transform(fid))):
        back = fk.read(fk.write(signal, tmp_path / name))
        for part in ("real", "imag"):
            wanted, found = getattr(signal.values, part), getattr(back.values, part)
            count = np.abs(wanted).max() / (2**31 - 1)
            # half a count, and the rounding of a double at full scale
            assert np.abs(found - wanted).max() <= 0.5 * count + 1e-15 * np.abs(wanted).max()
        axis = signal.dims[-1]
        width = float(np.ptp(signal[axis].values))
        np.testing.assert_allclose(
            back[axis].values, signal[axis].values, rtol=0, atol=1e-15 * width
        )
        for key in ("carrier_frequency", "nucleus", "units", "coil", "averages"):
            assert back.attrs[key] == signal.attrs[key]
        assert back.attrs["sample"] == signal.attrs["sample"]
        assert "notes" not in back.attrs
        lines = (tmp_path / name).read_text().splitlines()
        assert max(len(line) for line in lines if not line.startswith("##")) <= 100


def test_a_flat_record_can_be_written(tmp_path):
    fid = fk.from_array(np.zeros(5) + 0j, dwell_time=1e-3, carrier_frequency=1e6)
    assert not fk.read(fk.write(fid, tmp_path / "flat.dx")).values.any()


def test_written_files_are_read_by_another_library(tmp_path):
    """nmrglue decodes differences with Y checks right."""
    import nmrglue

    rng = np.random.default_rng(6)
    values = rng.normal(size=100) + 1j * rng.normal(size=100)
    fid = fk.from_array(values, dwell_time=1e-4, carrier_frequency=1e6)
    _, (real, imaginary) = nmrglue.jcampdx.read(str(fk.write(fid, tmp_path / "fid.dx")))
    np.testing.assert_allclose(real + 1j * imaginary, values, rtol=0, atol=2e-9)  # 31 bits


@pytest.mark.parametrize("first", ["0", "0.0", "0.00"])
def test_a_printed_zero_is_exact(read, first):
    """However few digits it has: the X check is as sharp, and a FACTOR that is off does not win."""
    rows = "".join(f"{i} {i + 1} {i + 2}\n" for i in range(0, 4000, 2))
    head = {
        "VAR_DIM": "4000, 4000, 8, 2",
        "SYMBOL": "X, R, N, N",
        "MIN": "0, 1",
        "MAX": "0.3999, 4000",
    }
    last = {"FIRST": f"{first}, 1", "LAST": "0.3999, 4000", "FACTOR": "0.00011, 1, 1, 1"}
    long = small(PAGE_R=rows, **head, **last)
    long = re.sub(r"##PAGE= N=2\n.*?##END N", "##END N", long, flags=re.DOTALL)
    fid = read(long)
    # half of the last printed place of LAST over the points
    assert fk.signals.dwell_time(fid) == pytest.approx(1e-4, abs=5e-5 / 3999)
    lines = long.splitlines(keepends=True)
    place = lines.index("20 21 22\n")
    lines[place], lines[place + 500] = lines[place + 500], lines[place]
    with pytest.raises(FidkitError, match="the X check fails"):
        read("".join(lines))


def test_private_codes_say_nothing(read):
    """Only a label that is spelled out is taken for the delay of a digital filter."""
    assert "filter_delay" not in read(small(**{"$GROUP DELAY TABLE": "5"})).attrs
    assert "filter_delay" not in read(small(**{"$GROUP DELAY": "unknown"})).attrs


def test_a_record_without_a_sample_has_none(tmp_path):
    fid = fk.from_array(np.ones(5) + 0j, dwell_time=1e-3, carrier_frequency=1e6)
    back = fk.read(fk.write(fid, tmp_path / "bench.dx"))
    assert back.attrs == fid.attrs | {"source": "bench.dx"}


def test_the_way_back_from_a_written_spectrum(tmp_path):
    """Dead time and the measured points survive the file."""
    fid = fk.from_array(REAL + 1j, dwell_time=1e-3, carrier_frequency=1e6, time_start=2e-3)
    spectrum = fk.fourier_transform(fk.zero_fill(fid, factor=2))
    back = fk.inverse_transform(fk.read(fk.write(spectrum, tmp_path / "bench.dx")))
    assert float(back.time[0]) == pytest.approx(2e-3, rel=1e-12)
    # 31 bits of the spectrum, whose values are some milliseconds times those of the FID
    np.testing.assert_allclose(back.values[:8], fid.values, rtol=0, atol=1e-7)


def test_a_nucleus_outside_the_table_can_be_read(read):
    text = small(**{".OBSERVE NUCLEUS": "^27Al"})
    with pytest.raises(
        FidkitError, match=r"got '\^27Al' in the file; give nucleus \(--nucleus NAME\)"
    ):
        read(text)
    fid = read(text, nucleus="1H")
    assert "nucleus '1H' was given; the file says '^27Al'" in fid.attrs["notes"]


def test_a_label_that_stands_twice(read):
    text = small().replace("##FIRST=", "##OWNER= someone\n##.DELAY= (30, 30)\n##FIRST=")
    fid = read(text)
    assert fid.time.values[0] == pytest.approx(20e-6)
    assert "line 10 says what .DELAY is; line 19 does not count" in fid.attrs["notes"]
    assert "DELAY" not in read(small()).attrs.get("notes", "")
