"""Text tables, .npy, .npz, netCDF, Zarr and the universal dictionary; what is missing or wrong.

No published source: round trips are exact by definition, and what is refused is common practice.
"""

from __future__ import annotations

import io
import os
import re
import subprocess
import sys
import zipfile

import h5netcdf
import nmrglue
import numpy as np
import pytest
import xarray as xr

import fidkit as fk
from fidkit import formats
from fidkit.formats.record import Record
from fidkit.params import FidkitError

CARRIER = 63.87e6


def make_fid(dtype=np.complex128, seed=3) -> xr.DataArray:
    rng = np.random.default_rng(seed)
    values = rng.normal(size=(3, 2, 40)) + 1j * rng.normal(size=(3, 2, 40))
    values = values if np.dtype(dtype).kind == "c" else values.real
    times = np.array(["2026-01-02T03:04:05.678901234", "2026-01-02"], dtype="datetime64[ns]")
    fid = fk.from_array(
        values.astype(dtype),
        dwell_time=1e-4 / 3,
        time_start=1.23e-5,
        carrier_frequency=CARRIER / 3,
        nucleus="13C",
        dims=("channel", "acquired"),
        coords={
            "channel": xr.Variable("channel", ["left", "ö", "µ µ"], {"long_name": "Spüle"}),
            "acquired": xr.Variable("acquired", times, {"long_name": "time of day"}),
            "recovery_delay": xr.Variable("acquired", np.float32([0.1, 2]), {"units": "seconds"}),
            "turns": xr.Variable("channel", np.int16([1, -2, 3])),
            "good": xr.Variable("channel", np.array([True, False, True])),
            "width": xr.Variable("acquired", np.array([5, 7], dtype="timedelta64[us]")),
            "temperature": xr.Variable((), 21.5, {"units": "degC"}),
        },
        units="V",
        sample="Wässrige Lösung, 1 µL",
        coil="",
        averages=16,
        gain=2.0,
        text_that_looks_like_a_number="16",
    )
    fid.attrs["history"] = "remove_offset(tail=0.1)\nzero_fill(factor=2)"
    fid.attrs["notes"] = "erste Zeile\nzweite: ü"
    return fid


def assert_same(found: xr.DataArray, wanted: xr.DataArray) -> None:
    """Bit for bit: values, types, order, coordinates, attributes."""
    assert found.name == wanted.name
    assert found.dims == wanted.dims
    assert found.dtype == wanted.dtype
    assert found.values.tobytes() == wanted.values.tobytes()
    assert list(found.attrs.items()) == list(wanted.attrs.items())
    assert [type(v) for v in found.attrs.values()] == [type(v) for v in wanted.attrs.values()]
    assert list(found.coords) == list(wanted.coords)
    for name in wanted.coords:
        one, other = found[name], wanted[name]
        assert (one.dims, one.dtype) == (other.dims, other.dtype)
        assert one.values.tobytes() == other.values.tobytes()
        assert list(one.attrs.items()) == list(other.attrs.items())


@pytest.mark.parametrize("suffix", ["nc", "zarr"])
@pytest.mark.parametrize("dtype", [np.complex128, np.complex64, np.float64, np.float32])
def test_archives_keep_everything(tmp_path, suffix, dtype):
    fid = make_fid(dtype)
    path = tmp_path / f"bench.{suffix}"
    for _ in range(2):  # the second time it replaces the first
        assert fk.write(fid, path) == path
        assert_same(fk.read(path), fid)
    assert [entry.name for entry in tmp_path.iterdir()] == [path.name]


@pytest.mark.parametrize("suffix", ["nc", "zarr"])
def test_archives_keep_a_spectrum_and_hard_values(tmp_path, suffix):
    fid = make_fid().copy()
    fid.attrs["history"] = ""
    spectrum = fk.correct_phase(fk.fourier_transform(fk.zero_fill(fid, factor=2)), zero_order=10.0)
    assert_same(fk.read(fk.write(spectrum, tmp_path / f"s.{suffix}")), spectrum)
    hard = fid.copy(data=fid.values)
    hard[0, 0, 0] = complex(-0.0, 5e-324)
    hard[0, 0, 1] = complex(1.7976931348623157e308, -0.0)
    assert_same(fk.read(fk.write(hard, tmp_path / f"h.{suffix}")), hard)


def test_other_tools_can_open_the_netcdf(tmp_path):
    """h5netcdf alone, without xarray: real and imaginary parts, axis and units stand there."""
    fid = make_fid(np.complex64)
    with h5netcdf.File(fk.write(fid, tmp_path / "bench.nc"), "r") as file:
        np.testing.assert_array_equal(file["signal_real"][...], fid.values.real)
        np.testing.assert_array_equal(file["signal_imaginary"][...], fid.values.imag)
        np.testing.assert_array_equal(file["time"][...], fid.time.values)
        assert file["signal_real"].attrs["units"] == "V"
        assert file["time"].attrs["units"] == "s"
        assert file.attrs["sample"] == fid.attrs["sample"]


def test_zarr_stays_lazy_where_asked(tmp_path):
    fid = make_fid()
    path = fk.write(fid, tmp_path / "bench.zarr")
    lazy = fk.read(path, chunks={})
    assert lazy.chunks is not None
    assert fk.read(path).chunks is None
    assert_same(fk.read(fk.write(lazy, tmp_path / "again.zarr")), fid)
    assert_same(fk.read(fk.write(lazy, tmp_path / "again.nc")), fid)
    uneven = fid.chunk({"channel": (1, 2)})
    assert_same(fk.read(fk.write(uneven, tmp_path / "uneven.zarr")), fid)
    with pytest.raises(FidkitError, match=r"again\.nc: chunks is for Zarr only"):
        fk.read(tmp_path / "again.nc", chunks={})


@pytest.mark.parametrize("suffix", ["npz", "csv", "txt"])
@pytest.mark.parametrize("dtype", [np.complex128, np.complex64, np.float64, np.float32])
def test_tables_and_npz_read_back_exactly(tmp_path, suffix, dtype):
    one = make_fid(dtype)[0, 0].reset_coords(drop=True)
    hard = one.values.copy()
    hard[3:6] = [-0.0, 1e-300 if hard.real.dtype == float else 1e-30, 1 / 3]
    one = one.copy(data=hard)
    back = fk.read(fk.write(one, tmp_path / f"bench.{suffix}"))
    assert back.dtype == one.dtype
    assert back.values.tobytes() == one.values.tobytes()
    assert back.time.values.tobytes() == one.time.values.tobytes()
    assert back.attrs.pop("source") == f"bench.{suffix}"
    wanted = dict(one.attrs)
    wanted.pop("source")
    assert back.attrs == wanted
    if back.dtype == np.complex128:
        spectrum = fk.fourier_transform(one.assign_attrs(history=""))
        found = fk.read(fk.write(spectrum, tmp_path / f"spectrum.{suffix}"))
        assert found.values.tobytes() == spectrum.values.tobytes()
        assert found.frequency.values.tobytes() == spectrum.frequency.values.tobytes()
        assert found.attrs == spectrum.attrs | {"source": f"spectrum.{suffix}"}


def test_npz_keeps_leading_dimensions(tmp_path):
    fid = make_fid()
    back = fk.read(fk.write(fid, tmp_path / "bench.npz"))
    assert back.dims == fid.dims
    for name in fid.coords:
        assert back[name].dtype == fid[name].dtype
        np.testing.assert_array_equal(back[name].values, fid[name].values)
        assert back[name].attrs == fid[name].attrs


@pytest.mark.parametrize("suffix", ["csv", "dx"])
def test_one_record_to_a_file(tmp_path, suffix):
    with pytest.raises(FidkitError, match="one record"):
        fk.write(make_fid(), tmp_path / f"bench.{suffix}")
    assert not list(tmp_path.iterdir())


def test_what_was_there_stays_when_writing_fails(tmp_path):
    fid = make_fid()
    for suffix in ("nc", "zarr"):
        path = fk.write(fid, tmp_path / f"bench.{suffix}")
        with pytest.raises(FidkitError, match="attribute bad must be text or a number"):
            fk.write(fid.assign_attrs(bad=[1, 2]), path)
        assert_same(fk.read(path), fid)
    with pytest.raises(FidkitError, match="the suffix must be"):
        fk.write(fid, tmp_path / "bench.mat")
    with pytest.raises(FidkitError, match="cannot be written"):
        fk.write(fid, tmp_path / "nowhere" / "bench.nc")


REAL, IMAGINARY = np.array([1.5, -2.0, 3.25, 4.0]), np.array([0.5, 0.25, -1.0, 2.0])
HEAD = "# carrier_frequency_hz: 63.87e6\n# nucleus: 13C\n# sample: water phantom\n"


def table(header: str, *columns: object, mark: str = ",", head: str = HEAD) -> str:
    rows = zip(*columns, strict=True)
    return head + header + "\n" + "".join(mark.join(map(str, row)) + "\n" for row in rows)


TIME = [0.001, 0.002, 0.003, 0.004]


@pytest.fixture
def read(tmp_path):
    def read(text, name="bench.csv", **arguments):
        path = tmp_path / name
        path.write_bytes(text if isinstance(text, bytes) else text.encode())
        return fk.read(path, **arguments)

    return read


@pytest.mark.parametrize(
    "text",
    [
        table("time_s,real,imag", TIME, REAL, IMAGINARY),
        table("time_ms;real;imag", [1, 2, 3, 4], REAL, IMAGINARY, mark=";"),
        table("time_us\treal\timag", [1000, 2000, 3000, 4000], REAL, IMAGINARY, mark="\t"),
        table("time_s real imag", TIME, REAL, IMAGINARY, mark="   "),
        table("Time [ms], Real, Imaginary", [1, 2, 3, 4], REAL, IMAGINARY, mark=" , "),
        table("imag,time_s,real", IMAGINARY, TIME, REAL),
        table("real,imag", REAL, IMAGINARY, head=HEAD + "# dwell_time_s: 0.001\n# time_start_ms: 1\n"),
        table("real,imag", REAL, IMAGINARY, head=HEAD + "#dwell_time_us:1000\n#time_start_us:1000\n\n"),
        table("time_s,real,imag", TIME, REAL, IMAGINARY).replace("\n", "\r\n"),
        "\ufeff" + table("time_s,real,imag", TIME, REAL, IMAGINARY),
        table("time_s,real,imag", TIME, REAL, IMAGINARY).replace("_hz: 63.87e6", "_mhz: 63.87"),
    ],
)  # fmt: skip
def test_text_tables(read, text):
    fid = read(text)
    np.testing.assert_array_equal(fid.values, REAL + 1j * IMAGINARY)
    np.testing.assert_allclose(fid.time.values, TIME, rtol=1e-14)  # rounding of a double
    assert fid.attrs["carrier_frequency"] == pytest.approx(CARRIER, rel=1e-15)
    assert (fid.attrs["nucleus"], fid.attrs["sample"]) == ("13C", "water phantom")
    assert fid.attrs["source"] == "bench.csv"


def test_other_columns_and_keys(read):
    text = table("time_s,signal_mV", TIME, REAL, head=HEAD + "# probe temperature: 21.5\n# note\n")
    fid = read(text, "bench.txt")
    assert fid.dtype == np.float64
    assert fid.attrs["units"] == "mV"
    assert fid.attrs["probe_temperature"] == 21.5
    spectrum = read(table("frequency_khz,real", [4, 3, 2, 1], REAL))
    assert spectrum.frequency.values.tolist() == [1000, 2000, 3000, 4000]
    assert spectrum.values.tolist() == REAL[::-1].tolist()
    # by content alone
    assert read(text, "bench.unknown").dims == ("time",)


@pytest.mark.parametrize("form", ["%.6f", "%.5g", "%.7e"])
def test_printed_rounding_of_the_time_column(read, form):
    """A dwell time that the print cannot hold: the span gives it, and the rounding is no fault."""
    dwell, points = 1 / 30011.7, 400
    time = 1e-4 + dwell * np.arange(points)
    text = table("time_s,signal", [form % t for t in time], np.ones(points))
    fid = read(text)
    last = {"%.6f": 5e-7, "%.5g": 5e-7, "%.7e": 5e-10}[form]
    assert fk.signals.dwell_time(fid) == pytest.approx(dwell, abs=2 * last / points)
    rows = text.splitlines()
    with pytest.raises(FidkitError, match=r"line 105 steps by"):
        read("\n".join(rows[:104] + rows[109:]))


def test_arguments_win_and_are_noted(read):
    fid = read(
        table("time_s,real,imag", TIME, REAL, IMAGINARY), nucleus="1H", dwell_time=2e-3, coil="loop"
    )
    assert fid.attrs["nucleus"] == "1H"
    assert fk.signals.dwell_time(fid) == pytest.approx(2e-3, rel=1e-14)
    assert fid.attrs["coil"] == "loop"
    assert "nucleus '1H' was given; the file says '13C'" in fid.attrs["notes"]


def test_arguments_win_over_an_archive(tmp_path):
    fid = make_fid()
    path = fk.write(fid, tmp_path / "bench.nc")
    back = fk.read(path, carrier_frequency=2e6)
    assert back.attrs["carrier_frequency"] == 2e6
    assert back.attrs["history"] == fid.attrs["history"]
    assert back.attrs["notes"].startswith(fid.attrs["notes"])
    np.testing.assert_array_equal(back.values, fid.values)
    np.testing.assert_array_equal(back.time.values, fid.time.values)
    assert list(back.coords) == list(fid.coords)


def test_a_new_format_needs_one_place(tmp_path, monkeypatch):
    """Its line in the table: reading, writing and the words about it follow."""

    def put(signal, path):
        path.write_bytes(b"BENCH" + np.asarray(signal.values, np.complex128).tobytes())

    def get(path):
        return Record(np.frombuffer(path.read_bytes()[5:], np.complex128).copy())

    new = formats.Format(
        "bench dump", (".bench",), lambda path, head: head.startswith(b"BENCH"), get, put
    )
    monkeypatch.setattr(formats, "FORMATS", (*formats.FORMATS, new))
    fid = fk.from_array(np.arange(5) * 2j, dwell_time=1e-3, carrier_frequency=CARRIER)
    path = fk.write(fid, tmp_path / "loop.bench")
    back = fk.read(path, dwell_time=1e-3, carrier_frequency=CARRIER)
    np.testing.assert_array_equal(back.values, fid.values)
    with pytest.raises(FidkitError, match="block is for JCAMP-DX only; this is bench dump"):
        fk.read(path, block=1)
    with pytest.raises(FidkitError, match=r"one of \.dx, .*\.bench; got \.else"):
        fk.write(fid, tmp_path / "loop.else")


def test_bare_arrays(tmp_path):
    data = np.arange(12).reshape(3, 4) * (1 + 2j)
    path = tmp_path / "coil_3.npy"
    np.save(path, data)
    with pytest.raises(FidkitError) as caught:
        fk.read(path)
    assert str(caught.value) == (
        "coil_3.npy: carrier_frequency is not in the file; give carrier_frequency in Hz (--carrier-frequency HZ)"
    )
    with pytest.raises(
        FidkitError, match=r"coil_3\.npy: dwell_time .* give dwell_time in s \(--dwell-time S\)"
    ):
        fk.read(path, carrier_frequency=CARRIER)
    fid = fk.read(path, carrier_frequency=CARRIER, dwell_time=1e-3, dims="echo_time")
    assert fid.dims == ("echo_time", "time")
    np.testing.assert_array_equal(fid.values, data)
    assert "taken as 1H" in fid.attrs["notes"]
    assert "taken as 0 s" in fid.attrs["notes"]
    np.save(path, np.asfortranarray(data))
    assert fk.read(path, carrier_frequency=CARRIER, dwell_time=1e-3).dims == ("shot", "time")


def test_archives_of_plain_arrays(tmp_path):
    path = tmp_path / "bench.npz"
    np.savez_compressed(
        path, signal=REAL + 1j, dwell_time=1e-3, carrier_frequency=CARRIER, nucleus="31P", time_start=2e-5
    )  # fmt: skip
    fid = fk.read(path)
    assert fid.attrs["nucleus"] == "31P"
    np.testing.assert_allclose(fid.time.values, 2e-5 + 1e-3 * np.arange(4), rtol=1e-15)
    np.savez(path, data=REAL, frequency=[40.0, 30, 20, 10], carrier_frequency=CARRIER, stray=[1, 2])
    spectrum = fk.read(path)
    assert spectrum.frequency.values.tolist() == [10, 20, 30, 40]
    assert "stray" in spectrum.attrs["notes"]


@pytest.mark.parametrize(
    ("digits", "says"),
    [
        # closed form: half a unit of 0.1 ms at either end, over 255 steps of 0.2 ms, is 0.2 %
        (".4f", "the dwell time is known to 0.2 % only, from the digits of the time column"),
        (".9g", ""),
        (".8e", ""),
    ],
)
def test_how_well_a_time_column_tells_the_dwell_time(read, digits, says):
    dwell = 2.0123456e-4
    rows = [f"{number * dwell:{digits}},1,{number}" for number in range(256)]
    fid = read("\n".join([HEAD + "time_s,real,imag", *rows]) + "\n", "clock.csv")
    told = [note for note in fid.attrs.get("notes", "").splitlines() if "dwell" in note]
    assert told == ([says] if says else [])
    #: What the note says, or what goes without a note.
    known = 2e-3 if says else 1e-5
    assert fk.signals.dwell_time(fid) == pytest.approx(dwell, rel=known)


def npy(header: str, content: bytes = b"") -> bytes:
    text = header.encode()
    return b"\x93NUMPY\x01\x00" + len(text).to_bytes(2, "little") + text + content


def npz(**members: bytes) -> bytes:
    target = io.BytesIO()
    with zipfile.ZipFile(target, "w", zipfile.ZIP_DEFLATED) as archive:
        for name, content in members.items():
            archive.writestr(name, content)
    return target.getvalue()


def saved(*, objects: bool = False, **arrays: object) -> bytes:
    target = io.BytesIO()
    np.savez(target, allow_pickle=objects, **arrays)
    return target.getvalue()


GOOD = table("time_s,real,imag", TIME, REAL, IMAGINARY)
FACTS = {"carrier_frequency": CARRIER, "dwell_time": 1e-3}
HUGE = "{'descr': '<c16', 'fortran_order': False, 'shape': (1000000000000,)}"

MALFORMED = {
    "empty.csv": (b"", "the file is empty"),
    "blank.dx": (b" \n\n", "the file is empty"),
    "junk.bin": (bytes(range(256)) * 40, "is of no format that fidkit knows; fidkit reads JCAMP-DX"),
    "junk.dx": (b"\0\1\2" * 99, "is of no format that fidkit knows"),
    "prose.md": ("so it was\n", "is of no format that fidkit knows"),
    "prose.csv": ("so it was\n", "line 1: must name the columns, such as time_s,real,imag"),
    "comments.csv": ("# nucleus: 1H\n", "holds no table"),
    "no_rows.csv": (HEAD + "time_s,real,imag\n", "at least 2 rows; got 0"),
    "one_row.csv": (HEAD + "time_s,real,imag\n0,1,2\n", "at least 2 rows; got 1"),
    "word.csv": (GOOD.replace("3.25", "three"), "line 7: real must be a number; got 'three'"),
    "nan.csv": (GOOD.replace("3.25", "nan"), "line 7: real must be a finite number; got 'nan'"),
    "short.csv": (GOOD.replace(",-1.0", ""), "nothing stands for imag; complete the line"),
    "cut.csv": (GOOD[:-8], "line 8: has 2 columns"),
    "comma.csv": (GOOD.replace(",", ";").replace("3.25", "3,25"), "got '3,25'; write a decimal point"),
    "commas.csv": (GOOD.replace("3.25", "3,25"), "line 7: has 4 columns"),
    "uneven.csv": (GOOD.replace("0.003", "0.0034"), "time must be evenly spaced; line 7"),
    "still.csv": (table("time_s,signal", [1, 1], [2, 3]), "time must ascend"),
    "backwards.csv": (table("time_s,signal", [2, 1], [2, 3]), "time must ascend"),
    "no_time.csv": (table("real,imag", REAL, IMAGINARY), "dwell_time is not in the file; give dwell_time in s"),
    "no_carrier.csv": (GOOD.replace("carrier_frequency_hz: 63.87e6", "x: 1"), "carrier_frequency is not in the file"),
    "no_unit.csv": (GOOD.replace("frequency_hz", "frequency"), "line 1: carrier_frequency must carry its unit"),
    "bad_key.csv": (GOOD.replace("63.87e6", "fast"), "line 1: carrier_frequency_hz must be a number; got 'fast'"),
    "zero_carrier.csv": (GOOD.replace("63.87e6", "0"), "carrier_frequency must be a positive number of Hz"),
    "nucleus.csv": (GOOD.replace("13C", "99Zz"), "nucleus must be one of 1H"),
    "twice.csv": (table("time_s,real,real", TIME, REAL, REAL), "names real twice"),
    "lonely.csv": (table("time_s,imag", TIME, REAL), "must name real (and imag), or signal"),
    "disagrees.csv": ("# dwell_time_s: 0.002\n" + GOOD, "but dwell_time_s says 0.002 s"),
    "twice_stated.csv": ("# carrier_frequency_mhz: 1\n" + GOOD, "line 2: states carrier_frequency again, otherwise than line 1"),
    "acquired_word.csv": ("# acquired_points: abc\n" + GOOD, "acquired_points must be a whole number in [1, 4], the points here; got 'abc'"),
    "acquired.csv": ("# acquired_points: 99999\n" + GOOD, "acquired_points must be a whole number in [1, 4]"),
    "filter.csv": ("# filter_delay: soon\n" + GOOD, "filter_delay must be a number of points, 0 or more; got 'soon'"),
    "first.csv": ("# first_point: third\n" + GOOD, "first_point must be full or half"),
    "json.csv": ("# attributes: {1\n" + GOOD, "line 1: attributes must be JSON, a mapping of names"),
    "two_members.npz": (npz(**{"data.npy": b"x", "data": b"x"}), "holds two arrays of one name"),
    "starts.csv": ("# time_start_s: 0.5\n" + GOOD, "but time_start_s says"),
    "two_points.npz": (saved(data=REAL[:1], **FACTS), "at least 2 points"),
    "nan.npz": (saved(data=REAL * np.nan, **FACTS), "data must be finite; 4 of 4 values are not"),
    "text.npz": (saved(data=["a", "b"], **FACTS), "data must be an array of numbers"),
    "none.npz": (saved(other=REAL), "must hold one array called data or signal; got other"),
    "dwell.npz": (saved(data=REAL, dwell_time=[1, 2], carrier_frequency=1e6), "dwell_time must be one number"),
    "negative.npz": (saved(data=REAL, dwell_time=-1.0, carrier_frequency=1e6), "dwell_time must be a positive number"),
    "objects.npz": (saved(objects=True, data=np.array([{}], dtype=object)), "data holds Python objects"),
    "attributes.npz": (saved(data=REAL, attributes="[", **FACTS), "attributes must be JSON"),
    "dims.npz": (saved(data=REAL, dims=np.array(["a", "b"]), **FACTS), "dims must name"),
    "coordinate.npz": (saved(data=REAL[None], coordinate_shot=REAL, **FACTS), "coordinate"),
    "book.xlsx": (npz(**{"xl/workbook.xml": b"<a/>", "[Content_Types].xml": b"<a/>"}), "is a spreadsheet or office document; save the table as .csv"),
    "book.xls": (b"\xd0\xcf\x11\xe0\xa1\xb1\x1a\xe1" + bytes(600), "is a spreadsheet or office document"),
    "cut.npz": (saved(data=REAL, **FACTS)[:-30], "the archive is damaged"),
    "bomb.npz": (npz(**{"data.npy": bytes(300_000_000)}), "which no measured record does"),
    "huge.npz": (npz(**{"data.npy": npy(HUGE)}), "must hold 16000000000000 bytes"),
    "huge.npy": (npy(HUGE), "must hold 16000000000000 bytes"),
    "cut.npy": (npy("{'descr': '<f8', 'fortran_order': False, 'shape': (2,)}", bytes(12)), "must hold 16 bytes"),
    "header.npy": (npy("__import__('os')"), "is no readable array"),
    "objects.npy": (npy("{'descr': '|O', 'fortran_order': False, 'shape': (1,)}", b"cos\nsystem\n"), "holds Python objects"),
    "stub.npy": (b"\x93NUMPY", "is no readable array"),
    "cut.nc": (b"\x89HDF\r\n\x1a\n" + bytes(100), "this netCDF cannot be read"),
    "old.nc": (b"CDF\x01" + bytes(100), "fidkit reads netCDF-4"),
    "none.dx": ("just text\n", "begins with ##TITLE="),
}  # fmt: skip


@pytest.mark.parametrize("name", MALFORMED)
def test_malformed_input_is_one_line_with_the_reason(read, name):
    content, says = MALFORMED[name]
    with pytest.raises(FidkitError) as caught:
        read(content, name)
    message = str(caught.value)
    assert message.startswith(f"{name}: ")
    assert says in message
    assert "\n" not in message
    assert len(message) < 400


def test_files_that_cannot_be_opened(tmp_path):
    with pytest.raises(
        FidkitError, match=r"gone\.dx: there is no such file or folder; check the path"
    ):
        fk.read(tmp_path / "gone.dx")
    (tmp_path / "folder.zarr").mkdir()
    with pytest.raises(FidkitError, match=r"folder\.zarr: is a folder, and no Zarr store"):
        fk.read(tmp_path / "folder.zarr")


def test_archives_of_other_makers_and_damaged_ones(tmp_path):
    path = tmp_path / "other.nc"
    xr.Dataset({"signal": ("time", REAL)}).to_netcdf(path, engine="h5netcdf")
    with pytest.raises(FidkitError, match=r"other\.nc: holds no fidkit_layout; fidkit reads the"):
        fk.read(path)
    path = fk.write(make_fid(), tmp_path / "bench.nc")
    raw = path.read_bytes()
    value = make_fid().values.real.astype("<f8").tobytes()[:8]
    assert raw.count(value) == 1
    path.write_bytes(raw.replace(value, bytes(8)))  # one number changed: the check sum tells
    with pytest.raises(FidkitError, match=r"^bench\.nc: "):
        fk.read(path)
    for part in (0.1, 0.5, 0.9):
        path.write_bytes(raw[: int(len(raw) * part)])
        with pytest.raises(FidkitError, match=r"^bench\.nc: "):
            fk.read(path)
    path = fk.write(make_fid(), tmp_path / "bench.zarr")
    (path / "signal" / "zarr.json").write_text("{")
    with pytest.raises(FidkitError, match=r"^bench\.zarr: "):
        fk.read(path)


def universal(**changes: object) -> dict:
    found = nmrglue.fileio.fileiobase.create_blank_udic(1)
    found[0] |= {"size": 4, **changes}
    return found


def test_universal_dictionary():
    """Placeholders of nmrglue's blank dictionary count as missing."""
    data = REAL + 1j * IMAGINARY
    with pytest.raises(FidkitError, match=r"^universal dictionary: carrier_frequency is not in"):
        fk.from_universal(universal(sw=1000.0), data)
    with pytest.raises(FidkitError, match=r"^universal dictionary: dwell_time is not in"):
        fk.from_universal(universal(obs=63.87), data)
    fid = fk.from_universal(universal(sw=2000.0, obs=63.87, label="13C"), data)
    np.testing.assert_array_equal(fid.values, data)
    assert fid.time.values.tolist() == [0, 0.0005, 0.001, 0.0015]
    assert (fid.attrs["carrier_frequency"], fid.attrs["nucleus"]) == (CARRIER, "13C")
    fid = fk.from_universal(universal(), [REAL, IMAGINARY], carrier_frequency=1e6, dwell_time=1e-3)
    np.testing.assert_array_equal(fid.values, data)
    with pytest.raises(
        FidkitError, match="size of dimension 0 must be that of the array, 4; got 5"
    ):
        fk.from_universal(universal(size=5), data)
    with pytest.raises(FidkitError, match="ndim must be"):
        fk.from_universal({"ndim": 2}, data)


def test_a_duration_in_place_of_the_width_is_noted():
    """As nmrglue 0.12 gives it for JCAMP-DX: 2.93 s where 2793 Hz belong."""
    fid = fk.from_universal(universal(sw=2.93, obs=63.87, size=8192), np.ones(8192) + 0j)
    assert "pass dwell_time" in fid.attrs["notes"]


def test_universal_spectrum_has_the_axis_of_nmrglue():
    """Against nmrglue's own unit conversion, with its carrier at 0."""
    found = universal(sw=1000.0, obs=63.87, car=0.0, time=False, freq=True)
    spectrum = fk.from_universal(found, REAL)
    wanted = nmrglue.fileio.fileiobase.uc_from_udic(found).hz_scale()
    np.testing.assert_allclose(spectrum.frequency.values, wanted[::-1], rtol=0, atol=1e-12)
    np.testing.assert_array_equal(spectrum.values, REAL[::-1])


def test_import_loads_no_format_library():
    code = "import fidkit, sys; fidkit.read; print(sorted({'nmrglue', 'zarr', 'h5netcdf', 'h5py', 'dask', 'bokeh'} & set(sys.modules)))"
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True)
    assert done.stdout.strip() == "[]"


# what must not be lost ------------------------------------------------------------------------

HARD_ATTRIBUTES = {
    "good": True,
    "off": False,
    "large": 2**60,
    "empty": "",
    "Gain of": -0.5,
    "precision": "single",
    "dwell_time": 7,
    "data": "5",
    "frequency": 5,
    "attributes": "{}",
    "layout_of_coordinates": "x",
    "title": "a $$ b",
    "processing": "by hand",
    "units": "V, peak $$ x\n##END=",
    "sample": "  x\n##END= y",
    "coil": "a\u2028b\r",
    "long_name": "voltage",
    "notes": "first\nsecond",
    "history": "zero_fill(factor=2)",
    "filter_delay": 3,
    "acquired_points": 17,
    "infinite": np.inf,
}


def one_record(**attributes: object) -> xr.DataArray:
    return make_fid()[0, 0].reset_coords(drop=True).assign_attrs(attributes)


@pytest.mark.parametrize("suffix", ["nc", "zarr", "npz", "csv", "txt", "dx"])
def test_every_format_keeps_every_attribute(tmp_path, suffix):
    for signal in (one_record(**HARD_ATTRIBUTES), plain_record()):
        for made in (signal, fk.fourier_transform(signal.assign_attrs(history="", filter_delay=0))):
            wanted = {name: value for name, value in made.attrs.items() if name != "source"}
            found = dict(fk.read(fk.write(made, tmp_path / f"bench.{suffix}")).attrs)
            found.pop("source", None)
            assert found == wanted
            assert {k: type(v) for k, v in found.items()} == {k: type(v) for k, v in wanted.items()}


def plain_record() -> xr.DataArray:
    return fk.from_array(REAL + 1j, dwell_time=1e-3, carrier_frequency=CARRIER)


@pytest.mark.parametrize(
    ("name", "value", "says"),
    [
        ("bad", [1, 2], "attribute bad must be text or a number to be written; got [1, 2]"),
        ("bad", np.arange(2), "attribute bad must be text or a number"),
        ("bad", b"x", "attribute bad must be text or a number"),
        ("bad", None, "attribute bad must be text or a number"),
        ("bad", 1j, "attribute bad must be text or a number"),
        ("bad", 2**70, "attribute bad must fit into 64 bits; got 1180591620717411303424"),
        ("bad", "a\0b", "attribute bad must be text without NUL"),
        ("bad", "\ud800", "attribute bad must be text without NUL and without halves"),
        ("a\0b", 1, "attribute names must be letters, digits, blanks"),
        ("", 1, "attribute names must be letters"),
        ("_NCProperties", 1, "attribute names must be letters"),
        ("a/b", 1, "attribute names must be letters"),
        (5, 1, "attribute names must be letters"),
        ("CLASS", 1, "attribute CLASS: files keep this name for themselves; rename it"),
        ("acquired_points", 41, "acquired_points must be a whole number in [1, 40]"),
        ("filter_delay", -1, "filter_delay must be a number of points, 0 or more; got -1"),
        ("filter_delay", 10**400, "filter_delay must be a number of points"),
        ("time_start", 1.0, "time_start is for spectra"),
        ("carrier_frequency", None, "carrier_frequency"),
        ("nucleus", "27Al", "nucleus must be one of"),
    ],
)  # fmt: skip
def test_what_no_file_can_keep_is_refused_alike(tmp_path, name, value, says):
    signal = one_record()
    signal.attrs = signal.attrs | {name: value}
    for suffix in ("nc", "zarr", "npz", "csv", "dx"):
        with pytest.raises(FidkitError, match=rf"^bench\.{suffix}: .*{re.escape(says)}"):
            fk.write(signal, tmp_path / f"bench.{suffix}")
    if name in ("carrier_frequency", "nucleus"):
        del signal.attrs[name]
        for suffix in ("nc", "zarr", "npz", "csv", "dx"):
            with pytest.raises(FidkitError, match=name):
                fk.write(signal, tmp_path / f"bench.{suffix}")
    assert not list(tmp_path.iterdir())


@pytest.mark.parametrize("suffix", ["nc", "zarr", "npz"])
def test_coordinates_come_back_or_are_refused(tmp_path, suffix):
    path = tmp_path / f"bench.{suffix}"
    fid = fk.from_array(np.ones((2, 4)) * (1 + 1j), dwell_time=1e-3, carrier_frequency=CARRIER)
    for name in ("signal", "signal_real", "a/b", "", "..", "_x"):
        with pytest.raises(FidkitError, match="dimension or coordinate"):
            fk.write(fid.assign_coords({name: ("shot", [1.0, 2.0])}), path)
    for values in (np.array(["a", None], object), np.array([b"a", b"b"]), ["a\0b", "c"], np.array([1, 2], np.longdouble)):  # fmt: skip
        with pytest.raises(FidkitError, match="coordinate gain must be"):
            fk.write(fid.assign_coords(gain=("shot", values)), path)
    with pytest.raises(FidkitError, match="gain attribute odd must be text or a number"):
        fk.write(fid.assign_coords(gain=("shot", [1, 2], {"odd": [1]})), path)
    assert not list(tmp_path.iterdir())
    big = fid.astype(">c8").assign_coords(
        {
            "my gain": ("shot", np.array([1, 2], ">f4")),
            "who": ("shot", np.array(["a", "b"], object)),
        }
    )
    back = fk.read(fk.write(big, path))
    assert back.dtype == np.complex64
    np.testing.assert_array_equal(back.values, fid.values)
    assert back["my gain"].values.tolist() == [1, 2]
    assert back["who"].values.tolist() == ["a", "b"]


@pytest.mark.parametrize("suffix", ["npz", "csv", "dx"])
def test_values_that_would_not_be_read_are_not_written(tmp_path, suffix):
    fid = one_record().copy(deep=True)
    fid[3] = np.nan
    with pytest.raises(FidkitError, match="the values must be finite in this format; 1 of 40 are"):
        fk.write(fid, tmp_path / f"bench.{suffix}")
    with pytest.raises(FidkitError, match="must be float32, float64, complex64 or complex128"):
        fk.write(one_record().astype(np.clongdouble), tmp_path / f"bench.{suffix}")
    assert not list(tmp_path.iterdir())


def test_a_missing_block_of_a_zarr_store_is_told(tmp_path):
    """Zarr itself reads zeros there; a block of zeros that was measured is no missing one."""
    fid = fk.from_array(np.ones((2, 8)) + 0j, dwell_time=1e-3, carrier_frequency=CARRIER)
    fid = fid.copy(data=fid.values * [[0], [1]]).assign_coords(shot=[0, 1])
    for name in ("signal/c/1/0", "shot/c/0"):
        path = fk.write(fid.chunk({"shot": 1}), tmp_path / "bench.zarr")
        assert_same(fk.read(path), fid)
        (path / name).unlink()
        for chunks in (None, {}):
            with pytest.raises(FidkitError, match=r"bench\.zarr: 1 of [12] blocks of s\w+ are mis"):
                fk.read(path, chunks=chunks)


@pytest.mark.parametrize("suffix", ["nc", "zarr", "csv", "npz", "dx"])
def test_no_folder_but_a_store_of_our_own_is_replaced(tmp_path, suffix):
    path = tmp_path / f"work.{suffix}"
    path.mkdir()
    (path / "thesis.txt").write_text("x")
    with pytest.raises(FidkitError, match=rf"work\.{suffix}: .*folder"):
        fk.write(one_record(), path)
    assert (path / "thesis.txt").read_text() == "x"
    if suffix == "zarr":
        store = fk.write(one_record(), tmp_path / "bench.zarr")
        (store / "thesis.txt").write_text("x")
        with pytest.raises(FidkitError, match="no Zarr store written by fidkit"):
            fk.write(one_record(), store)
        (tmp_path / "file.zarr").write_text("x")
        with pytest.raises(FidkitError, match="it is a file, and a folder is to be written"):
            fk.write(one_record(), tmp_path / "file.zarr")


@pytest.mark.parametrize("suffix", ["nc", "csv"])
def test_permissions_and_links_stay(tmp_path, suffix):
    """A new file follows the umask, one that is there keeps its mode, a link stays a link."""
    path = tmp_path / f"bench.{suffix}"
    before = os.umask(0o027)
    try:
        fk.write(one_record(), path)
        assert path.stat().st_mode & 0o777 == 0o640
        path.chmod(0o600)
        link = tmp_path / f"link.{suffix}"
        link.symlink_to(path)
        assert fk.write(one_record(sample="new"), link) == link
    finally:
        os.umask(before)
    assert link.is_symlink()
    assert path.stat().st_mode & 0o777 == 0o600
    assert fk.read(path).attrs["sample"] == "new"
    os.mkfifo(tmp_path / f"pipe.{suffix}")
    with pytest.raises(FidkitError, match="neither a file nor a folder"):
        fk.write(one_record(), tmp_path / f"pipe.{suffix}")
    assert len(list(tmp_path.iterdir())) == 3


def test_a_pipe_is_not_waited_for(tmp_path):
    os.mkfifo(tmp_path / "pipe.csv")
    for path in (tmp_path / "pipe.csv", "/dev/zero"):
        with pytest.raises(FidkitError, match="is neither a file nor a folder"):
            fk.read(path)


@pytest.mark.parametrize("path", [None, 5, "a\0b", "", b"x.csv"])
def test_a_path_that_is_none(path):
    for use in (fk.read, lambda path: fk.write(one_record(), path)):
        with pytest.raises(FidkitError, match="path must be text or a path"):
            use(path)


@pytest.mark.parametrize(
    ("arguments", "says"),
    [
        ({"block": "a"}, "block must be a whole number from 1; got 'a'"),
        ({"block": 1.0}, "block must be a whole number from 1; got 1.0"),
        ({"time_start": np.zeros(2)}, "time_start must be a number; got array"),
        ({"dwell_time": "1e-3"}, "dwell_time must be a number; got '1e-3'"),
        ({"carrier_frequency": True}, "carrier_frequency must be a number; got True"),
        ({"nucleus": 1}, "nucleus must be text; got 1"),
        ({"sample": 5}, "sample must be text"),
        ({"dims": 5}, "dims must be names of dimensions; got 5"),
        ({"dims": (None,)}, "dims must be names of dimensions"),
    ],
)
def test_arguments_of_the_wrong_kind(read, arguments, says):
    with pytest.raises(FidkitError, match=rf"^bench\.csv: {re.escape(says)}"):
        read(GOOD, **arguments)


@pytest.mark.parametrize("chunks", ["abc", {"shot": "x"}, {"nowhere": 1}])
def test_chunks_of_the_wrong_kind(tmp_path, chunks):
    path = fk.write(make_fid(), tmp_path / "bench.zarr")
    with pytest.raises(FidkitError, match=r"bench\.zarr: chunks must be \{\}, 'auto', a number"):
        fk.read(path, chunks=chunks)


@pytest.mark.parametrize(("suffix", "library"), [("nc", "h5netcdf"), ("nc", "h5py"), ("zarr", "zarr"), ("zarr", "dask")])  # fmt: skip
def test_a_missing_library_is_named(tmp_path, monkeypatch, suffix, library):
    path = fk.write(make_fid(), tmp_path / f"bench.{suffix}")
    monkeypatch.setitem(sys.modules, library, None)
    chunks = {} if library == "dask" else None
    with pytest.raises(FidkitError, match=rf"needs the library {library}, .*install {library}$"):
        fk.read(path, chunks=chunks)
    if library != "dask":
        with pytest.raises(FidkitError, match=rf"needs the library {library}"):
            fk.write(make_fid(), path)


def test_parts_of_different_length(tmp_path):
    for data in ([REAL, IMAGINARY[:3]], [[1, 2], [3]]):
        with pytest.raises(FidkitError, match="the parts of the array must be of one length"):
            fk.from_universal(universal(sw=2000.0, obs=63.87), data)


def test_facts_of_other_names_are_attributes(read, tmp_path):
    fid = read("# data: 5\n# frequency: 6\n# dims: 7\n# coords: x\n" + GOOD)
    assert [fid.attrs[name] for name in ("data", "frequency", "dims", "coords")] == [5, 6, 7, "x"]
    text = '{"data": 1, "dwell_time": 3, "list": [1], "sample": "water"}'
    fid = read(saved(data=REAL, attributes=text, **FACTS), "bench.npz")
    assert (fid.attrs["data"], fid.attrs["dwell_time"], fid.attrs["sample"]) == (1, 3, "water")
    assert "attribute list ([1]) is neither text nor a number and left out" in fid.attrs["notes"]


def test_an_empty_nucleus_is_a_missing_one(read):
    fid = read(GOOD.replace("13C", ""))
    assert fid.attrs["nucleus"] == "1H"
    assert "the nucleus is not in the file; taken as 1H" in fid.attrs["notes"]


def test_values_in_notes_are_short(read):
    assert "dwell_time 0.0001 was given; the file says 0.001" in read(
        GOOD, dwell_time=9.999999999999999e-05
    ).attrs["notes"]  # fmt: skip


@pytest.mark.parametrize(
    "text",
    [
        table("# time_s,real,imag", TIME, REAL, IMAGINARY),
        table("# time_s,real,imag", TIME, REAL, IMAGINARY, mark=" "),
        table('"time_s","real","imag"', *([f'"{x}"' for x in c] for c in (TIME, REAL, IMAGINARY))),
        table("time_\N{GREEK SMALL LETTER MU}s,real,imag", [1000, 2000, 3000, 4000], REAL, IMAGINARY),
        table("time_\N{MICRO SIGN}s,real,imag", [1000, 2000, 3000, 4000], REAL, IMAGINARY),
        table("time_s,real,imag", TIME, REAL, IMAGINARY).replace("\n", "\r"),
    ],
)  # fmt: skip
def test_tables_as_other_programs_write_them(read, text):
    for name in ("bench.csv", "bench.unknown"):
        fid = read(text, name)
        np.testing.assert_array_equal(fid.values, REAL + 1j * IMAGINARY)
        np.testing.assert_allclose(fid.time.values, TIME, rtol=1e-14)  # rounding of a double


def test_a_table_as_numpy_writes_it(tmp_path):
    path = tmp_path / "bench.txt"
    np.savetxt(path, np.column_stack([TIME, REAL, IMAGINARY]), header="time_s,real,imag")
    fid = fk.read(path, carrier_frequency=CARRIER)
    np.testing.assert_array_equal(fid.values, REAL + 1j * IMAGINARY)


def test_a_key_that_stands_twice(read):
    fid = read("# gain: 1\n# gain: 2\n# nucleus: 13C\n" + GOOD)
    assert fid.attrs["gain"] == 1
    assert "line 1 says what gain is; line 2 does not count" in fid.attrs["notes"]
    assert "nucleus is" not in fid.attrs["notes"]


def test_a_missing_coordinate_is_named(tmp_path):
    path = fk.write(make_fid(), tmp_path / "bench.zarr")
    (path / "turns" / "zarr.json").unlink()
    with pytest.raises(FidkitError, match=r"^bench\.zarr: holds no turns; fidkit reads"):
        fk.read(path)
