"""The command: what it prints, writes and refuses."""

import csv
import io
import json
import os
import re
import shlex
import subprocess
import sys
from pathlib import Path

import numpy as np
import pytest
import xarray as xr

import fidkit as fk
from fidkit import cli
from fidkit.display import number_text, quantity_text, scaled_unit
from fidkit.simulate import Receiver, Sample, simulate_fid

DEMO = Path(__file__).parent.parent / "data_demo"
CARRIER = 63.87e6
NOT_KNOWN = float("nan")
#: Within how many standard uncertainties a measured value must be of the simulated one. The
#: records are seeded, so this fails by a fault, never by chance.
WITHIN = 4

QUANTITIES = ("frequency_offset", "linewidth", "t2_star", "t2_star_decay")
QUANTITIES += ("amplitude", "phase", "snr")


@pytest.fixture(autouse=True)
def wide(monkeypatch):
    monkeypatch.setenv("COLUMNS", "120")


@pytest.fixture
def run(capsys):
    def run(*words):
        status = cli.main([str(word) for word in words])
        out, err = capsys.readouterr()
        assert "Traceback" not in out + err
        return status, out, err

    return run


def simulated(offset=137.4, t2=0.05, seed=1, points=1024, shots=0, noise=0.01):
    def one(number):
        return simulate_fid(
            Sample([offset], 0.8, t2=t2),
            points=points,
            dwell_time=200e-6,
            carrier_frequency=CARRIER,
            receiver=Receiver(noise=noise),
            seed=seed + number,
            units="V",
            coil="loop 40 mm",
        )

    if not shots:
        return one(0)
    return fk.from_array(
        np.stack([one(number).values for number in range(shots)]),
        dwell_time=200e-6,
        carrier_frequency=CARRIER,
        units="V",
    )


@pytest.fixture
def folder(tmp_path):
    """Two good records, and things that are none."""
    fk.write(simulated(), tmp_path / "b_first.csv")
    fk.write(simulated(offset=-212.0, t2=0.08, seed=7), tmp_path / "a_second.nc")
    (tmp_path / ".hidden.csv").write_text("x")
    (tmp_path / "README.txt").write_text("none")
    (tmp_path / "make.py").write_text("none")
    (tmp_path / "inner").mkdir()
    return tmp_path


# numbers as text ------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("value", "std", "text"),
    [
        # written out by the rule: one digit, two where the first is a 1
        (137.4123, 0.02, "137.41(2)"),
        (137.4123, 0.0149, "137.412(15)"),
        (137.4123, 0.0957, "137.4(1)"),
        (12345.0, 230.0, "12345(230)"),
        (-0.4, 3.0, "-0(3)"),
        (1.50013449123, 5e-10, "1.5001344912(5)"),
        (1e-7, 3e-9, "1.00(3)e-07"),
        (1.5, NOT_KNOWN, "1.5(?)"),
        (1.5, -1.0, "1.5(?)"),
        (NOT_KNOWN, 0.1, "-"),
        (3.0, 0.0, "3"),
    ],
)
def test_number_text(value, std, text):
    assert number_text(value, std) == text


def test_quantity_text():
    assert quantity_text(137.4123, 0.02, "Hz") == "137.41(2) Hz"
    assert quantity_text(0.0497, 8e-5, "s") == "49.70(8) ms"
    assert quantity_text(200e-6, 0.0, "s") == "200 µs"
    assert quantity_text(1.5, NOT_KNOWN, "T") == "1.5 T (uncertainty not known)"
    assert quantity_text(NOT_KNOWN, NOT_KNOWN, "T") == "not known"
    assert quantity_text(61.0, 2.0, "1") == "61(2)"


def test_one_prefix_for_a_column():
    assert scaled_unit([0.05, 0.049, 2.0, NOT_KNOWN], "s") == (1e3, "ms")
    assert scaled_unit([1.0, 2.0], "s") == (1.0, "s")
    assert scaled_unit([NOT_KNOWN, 0.0], "s") == (1.0, "s")
    assert scaled_unit([0.001], "T") == (1.0, "T")
    assert scaled_unit([1e-30], "V") == (1e12, "pV")


# measure --------------------------------------------------------------------------------------


def test_json(run, folder):
    status, out, _ = run("measure", folder, "--format", "json")
    document = json.loads(out)
    assert status == 0
    assert document["fidkit"] == fk.__version__
    assert [result["source"] for result in document["results"]] == ["a_second.nc", "b_first.csv"]
    for result, offset, t2 in zip(document["results"], (-212.0, 137.4), (0.08, 0.05), strict=True):
        assert isinstance(result["notes"], list)
        found = result["quantities"]
        assert set(QUANTITIES) <= set(found)
        for quantity in found.values():
            assert set(quantity) == {"value", "std", "unit", "status"}
            assert quantity["status"] == "ok"
        units = [found[name]["unit"] for name in QUANTITIES]
        assert units == ["Hz", "Hz", "s", "s", "V", "degree", "1"]
        # closed form: the parameters of the simulation
        for name, true in (
            ("frequency_offset", offset),
            ("linewidth", 1 / (np.pi * t2)),
            ("t2_star", t2),
            ("t2_star_decay", t2),
            ("amplitude", 0.8),
            ("phase", 0.0),
        ):
            assert abs(found[name]["value"] - true) < WITHIN * found[name]["std"]
            assert found[name]["std"] < 0.1 * max(abs(true), 10)


def test_csv(run, folder):
    status, out, _ = run("measure", folder, "--format", "csv")
    rows = list(csv.DictReader(io.StringIO(out)))
    assert status == 0
    assert [row["source"] for row in rows] == ["a_second.nc", "b_first.csv"]
    direct = fk.measure(fk.read(folder / "b_first.csv"))
    for column, quantity in (
        ("frequency_offset_hz", "frequency_offset"),
        ("frequency_offset_std_hz", "frequency_offset_std"),
        ("frequency_offset_ppm", "frequency_offset_ppm"),
        ("linewidth_hz", "linewidth"),
        ("t2_star_s", "t2_star"),
        ("t2_star_decay_std_s", "t2_star_decay_std"),
        ("field_tesla", "field"),
        ("amplitude", "amplitude"),
        ("phase_degree", "phase"),
        ("snr", "snr"),
    ):
        assert float(rows[1][column]) == direct[quantity].item()  # every digit is there
    assert rows[1]["amplitude_unit"] == "V"
    assert rows[1]["error"] == ""


@pytest.mark.parametrize("columns", [120, 100, 80])
def test_table_fits(run, folder, monkeypatch, columns):
    monkeypatch.setenv("COLUMNS", str(columns))
    status, out, err = run("measure", folder)
    lines = out.splitlines()
    assert status == 0
    assert err == ""
    assert max(map(len, lines)) <= columns
    head = " ".join(lines[:3])
    for word in ("offset", "Hz", "linewidth", "ms", "amplitude", "mV", "SNR"):
        assert word in head
    assert re.search(r"137\.\d+\(\d+\)", out)
    points = [line.index(".", 21) for line in lines if re.search(r"(137|-21[12])\.\d+\(", line)]
    assert len(set(points)) <= 1 or columns == 80  # the decimals line up
    assert "passed over, no records: README.txt, make.py" in out
    assert "hidden" not in out


def test_leading_dimensions(run, tmp_path):
    shots = simulated(shots=3).rename(shot="channel").assign_coords(channel=[4, 5, 9])
    fk.write(shots, tmp_path / "array.nc")
    _, out, _ = run("measure", tmp_path / "array.nc", "--format", "json")
    assert [result["channel"] for result in json.loads(out)["results"]] == [4, 5, 9]
    _, out, _ = run("measure", tmp_path / "array.nc", "--format", "csv")
    assert [row["channel"] for row in csv.DictReader(io.StringIO(out))] == ["4", "5", "9"]
    _, out, _ = run("measure", tmp_path / "array.nc")
    assert re.search(r"record +channel", out)


def test_blocks_join_up(run, tmp_path, monkeypatch):
    fk.write(simulated(shots=5, points=256), tmp_path / "shots.nc")
    _, whole, _ = run("measure", tmp_path / "shots.nc", "--format", "json")
    monkeypatch.setattr(cli, "BLOCK", 2)
    _, parts, _ = run("measure", tmp_path / "shots.nc", "--format", "json")
    assert json.loads(parts) == json.loads(whole)
    assert [result["shot"] for result in json.loads(whole)["results"]] == [0, 1, 2, 3, 4]


def test_chain_near_region_and_lines(run, tmp_path):
    two = simulated(offset=100.0) + 0.5 * simulated(offset=-300.0, seed=9)
    fid = fk.from_array(two.values, dwell_time=200e-6, carrier_frequency=CARRIER)
    fk.write(fid, tmp_path / "two.npz")
    fk.Chain([fk.Call("apodize_exponential", broadening=3.0), "fourier_transform"]).save(
        tmp_path / "chain.py"
    )

    def measured(*words):
        status, out, _ = run("measure", tmp_path / "two.npz", *words, "--format", "json")
        assert status == 0
        return json.loads(out)["results"]

    def offset(result):
        return result["quantities"]["frequency_offset"]["value"]

    #: Far above the uncertainty of some mHz, far below the distance of the lines.
    near_enough = 1.0  # Hz
    assert abs(offset(measured()[0]) - 100) < near_enough
    assert abs(offset(measured("--near", "-3e2")[0]) + 300) < near_enough
    assert abs(offset(measured("--region", "-400", "-2.5e2")[0]) + 300) < near_enough
    both = measured("--lines", 2)
    assert sorted(round(offset(result)) for result in both) == [-300, 100]
    assert len({result["line"] for result in both}) == 2
    chained = measured("--chain", tmp_path / "chain.py")[0]["quantities"]["linewidth"]
    # closed form: natural width of T2* 50 ms, although the chain broadened the line by 3 Hz
    assert abs(chained["value"] - 1 / (np.pi * 0.05)) < max(WITHIN * chained["std"], 0.05)


def test_one_bad_file_does_not_stop_the_rest(run, folder):
    (folder / "aa_broken.dx").write_text("##TITLE= broken\n##JCAMP-DX= 5.01\n")
    status, out, err = run("measure", folder, folder / "missing.dx", "--format", "json")
    results = json.loads(out)["results"]
    assert status == 1
    bad = [result for result in results if "error" in result]
    assert len(results) - len(bad) == 2
    assert {Path(result["source"]).name for result in bad} == {"aa_broken.dx", "missing.dx"}
    assert all(set(result) == {"source", "error"} for result in bad)
    assert err.count("fidkit: ") == 2
    assert "missing.dx: there is no such file or folder; check the path" in err
    status, out, err = run("measure", folder)
    assert (status, err) == (1, "")  # once is enough
    assert "not measured: aa_broken.dx: " in out
    assert re.search(r"137\.[34]", out)
    status, out, err = run("measure", folder, "--format", "csv")
    assert [bool(row["error"]) for row in csv.DictReader(io.StringIO(out))] == [False, True, False]


def test_a_fault_in_one_file_does_not_stop_the_rest(run, folder, monkeypatch):
    real = fk.read

    def read(path, **facts):
        if path.name == "a_second.nc":
            raise ZeroDivisionError("a fault of ours")
        return real(path, **facts)

    monkeypatch.setattr(fk, "read", read)
    status, out, _ = run("measure", folder)
    assert status == 1
    words = re.sub(r"\s+", " ", out)
    assert "a_second.nc: a fault in fidkit or a library, ZeroDivisionError in test_cli.py" in words
    assert re.search(r"137\.[34]", out)


def test_what_is_not_known_is_null(run, folder, monkeypatch):
    real = fk.measure

    def measure(signal, **wanted):
        found = real(signal, **wanted)
        found["t2_star_std"] = xr.full_like(found["t2_star_std"], np.nan)
        found["snr"] = xr.full_like(found["snr"], np.inf)
        return found

    monkeypatch.setattr(fk, "measure", measure)
    _, out, _ = run("measure", folder / "b_first.csv", "--format", "json")
    quantities = json.loads(out)["results"][0]["quantities"]
    assert quantities["t2_star"]["std"] is None
    assert quantities["t2_star"]["value"] is not None
    assert quantities["snr"]["value"] is None
    _, out, _ = run("measure", folder / "b_first.csv", "--format", "csv")
    assert next(csv.DictReader(io.StringIO(out)))["t2_star_std_s"] == ""
    _, out, _ = run("measure", folder / "b_first.csv")
    assert "(?)" in out


def test_stopping_keeps_what_is_measured(run, folder, monkeypatch):
    real = fk.read

    def read(path, **facts):
        if path.name == "b_first.csv":
            raise KeyboardInterrupt
        return real(path, **facts)

    monkeypatch.setattr(fk, "read", read)
    status, out, err = run("measure", folder, "--format", "json", "--out", folder / "out.json")
    assert status == 130
    assert "stopped in record 2 of 2" in err
    kept = json.loads((folder / "out.json").read_text())["results"]
    assert [result["source"] for result in kept] == ["a_second.nc"]
    assert out == ""


def test_stopping_early(run, monkeypatch):
    def load(path):
        raise KeyboardInterrupt

    monkeypatch.setattr(fk.Chain, "load", load)
    status, _, err = run("measure", "x", "--chain", "y")
    assert (status, err) == (130, "fidkit: stopped\n")


def test_out(run, folder, tmp_path):
    target = tmp_path / "result.csv"
    status, out, err = run("measure", folder / "b_first.csv", "--out", target)
    assert (status, out) == (0, "")
    assert err == f"fidkit: wrote {target}\n"
    assert target.read_text().startswith("source,")  # the ending chose the form
    for name in ("result.xlsx", "result"):
        status, out, err = run("measure", folder / "b_first.csv", "--out", tmp_path / name)
        assert (status, out) == (1, "")
        assert "the name must end in .csv, .json, .txt; got" in err
        assert not (tmp_path / name).exists()
    run("measure", folder / "b_first.csv", "--out", tmp_path / "result.xyz", "--format", "json")
    assert json.loads((tmp_path / "result.xyz").read_text())["results"]
    target = tmp_path / "no" / "such" / "result.json"
    status, out, err = run("measure", folder / "b_first.csv", "--out", target)
    assert status == 1
    assert json.loads(out)["results"]  # nothing is lost
    assert "was not written: no such file or directory; the result is printed instead" in err


def test_missing_facts_can_be_given(run, tmp_path):
    np.save(tmp_path / "bare.npy", simulated().values)
    status, out, err = run("measure", tmp_path / "bare.npy")
    assert (status, err) == (1, "")
    assert "give carrier_frequency in Hz (--carrier-frequency HZ)" in out
    words = ("--carrier-frequency", CARRIER, "--dwell-time", 200e-6, "--nucleus", "1H")
    status, out, err = run("measure", tmp_path / "bare.npy", *words)
    assert (status, err) == (0, "")
    assert re.search(r"137\.[34]", out)
    status, out, err = run("info", tmp_path / "bare.npy", *words)
    assert "dwell time      200 µs" in out


def test_names_are_told_apart(run, tmp_path):
    for name in ("one", "two"):
        (tmp_path / name).mkdir()
        fk.write(simulated(points=256), tmp_path / name / "loop.npz")
    _, out, _ = run("measure", tmp_path / "one", tmp_path / "two", "--format", "json")
    sources = [result["source"] for result in json.loads(out)["results"]]
    assert sources == [str(tmp_path / "one" / "loop.npz"), str(tmp_path / "two" / "loop.npz")]


def test_a_store_is_a_record(run, tmp_path):
    fk.write(simulated(points=256), tmp_path / "loop.zarr")
    status, out, _ = run("measure", tmp_path)
    assert status == 0
    assert "loop.zarr" in out
    status, out, _ = run("info", tmp_path / "loop.zarr")
    assert status == 0


def test_empty_folder(run, tmp_path):
    status, _, err = run("measure", tmp_path)
    assert status == 1
    assert "nothing in it could be a record" in err


def test_bar_only_on_a_terminal(monkeypatch):
    class Terminal(io.StringIO):
        def isatty(self):
            return True

    for stream, drawn in ((Terminal(), True), (io.StringIO(), False)):
        monkeypatch.setattr(sys, "stderr", stream)
        progress = cli.Progress(4)
        progress.start -= 5
        progress.last -= 5
        progress.show(2, "loop.dx")
        progress.clear()
        assert ("50% of 4 files, loop.dx" in stream.getvalue()) == drawn
        assert stream.getvalue().endswith("\x1b[K" if drawn else "")
    stream = Terminal()
    monkeypatch.setattr(sys, "stderr", stream)
    cli.Progress(4).show(2, "loop.dx")  # short work draws nothing
    assert stream.getvalue() == ""


# info, steps, version -------------------------------------------------------------------------


def test_info(run, folder):
    status, out, _ = run("info", folder / "b_first.csv")
    assert status == 0
    for words in (
        "free induction decay, 1024 complex points",
        "200 µs",
        "204.8 ms",
        "5000 Hz",
        "63.87 MHz, 1H in about 1.500",
        "loop 40 mm",
    ):
        assert words in out
    fk.write(fk.fourier_transform(simulated()), folder / "spectrum.nc")
    status, out, _ = run("info", folder / "spectrum.nc")
    assert "spectrum, 1024 complex points" in out
    assert "fourier_transform()" in out
    status, _, err = run("info", folder / "missing.dx", folder)
    assert status == 1
    assert "missing.dx: there is no such file or folder; check the path" in err
    assert "is a folder; name a file in it" in err


def test_steps(run):
    status, out, _ = run("steps")
    assert status == 0
    for step in fk.STEPS.values():
        assert f"{step.name} ({step.takes} to {step.gives})" in out
        for parameter in step.parameters.values():
            line = f"{parameter.name} = {parameter.default!r}: {parameter}"
            assert line in re.sub(r"\n {10}", " ", out)
    status, out, _ = run("steps", "apodize_exponential")
    assert "What a Lorentzian line gains" in out
    assert "broadening = 1.0: a number in [0, inf) Hz" in out
    status, _, err = run("steps", "apodize")
    assert status == 1
    assert "there is no step 'apodize'" in err


def test_version_and_usage(capsys):
    with pytest.raises(SystemExit) as caught:
        cli.main(["--version"])
    assert caught.value.code == 0
    assert capsys.readouterr().out == f"fidkit {fk.__version__}\n"
    with pytest.raises(SystemExit) as caught:
        cli.main(["measure"])
    assert caught.value.code == 2


@pytest.mark.parametrize("module", ["fidkit", "fidkit.cli"])
def test_as_a_module(module):
    words = [sys.executable, "-m", module]
    done = subprocess.run([*words, "--version"], capture_output=True, text=True, check=False)
    assert (done.returncode, done.stdout) == (0, f"fidkit {fk.__version__}\n")
    done = subprocess.run([*words, "info", "none.dx"], capture_output=True, text=True, check=False)
    assert (done.returncode, done.stdout) == (1, "")


def test_as_a_process(tmp_path, folder):
    """The installed command, without a terminal, in a locale that knows no micro sign."""
    environment = {**os.environ, "LC_ALL": "C", "PYTHONCOERCECLOCALE": "0", "PYTHONUTF8": "0"}
    command = [sys.executable, "-c", "import sys; from fidkit.cli import main; sys.exit(main())"]
    done = subprocess.run(
        [*command, "info", str(folder / "b_first.csv")],
        capture_output=True,
        env=environment,
        check=False,
    )
    assert done.returncode == 0
    assert done.stderr == b""
    assert b"200 ?s" in done.stdout
    # whoever reads only the first line ends the command quietly
    reader = subprocess.run(
        ["bash", "-c", 'set -o pipefail; "$@" measure "$FOLDER" | head -c 1', "bash", *command],
        capture_output=True,
        env={**os.environ, "FOLDER": str(folder)},
        check=False,
    )
    assert b"Traceback" not in reader.stderr
    assert b"Exception" not in reader.stderr


# the demo -------------------------------------------------------------------------------------


def test_demo_is_made_again(tmp_path):
    for name in ("one", "two"):
        (tmp_path / name).mkdir()
        subprocess.run(
            [sys.executable, str(DEMO / "make_demo.py"), str(tmp_path / name)], check=True
        )
    made = sorted(path.name for path in (tmp_path / "one").iterdir())
    kept = sorted(
        path.name for path in DEMO.iterdir() if path.is_file() and path.name != "make_demo.py"
    )
    assert made == kept
    for name in made:
        again = (tmp_path / "one" / name).read_bytes()
        # containers differ: older HDF5 libraries put the time of writing into theirs, and zipfile of
        # older Pythons another version
        if name.endswith((".nc", ".npz")):
            for other in (DEMO / name, tmp_path / "two" / name):
                assert fk.read(other).identical(fk.read(tmp_path / "one" / name))
        else:
            assert (tmp_path / "two" / name).read_bytes() == again
            assert (DEMO / name).read_bytes() == again
        assert len(again) < 200_000
    assert sum(path.stat().st_size for path in DEMO.iterdir() if path.is_file()) < 1_000_000


def test_demo_measures(run):
    status, out, err = run("measure", DEMO)
    assert (status, err) == (0, "")
    assert max(map(len, out.splitlines())) <= 120
    _, out, _ = run("measure", DEMO, "--format", "json")
    results = json.loads(out)["results"]
    by_name = {result["source"]: result for result in results if result.get("shot", 1) == 1}
    assert len(results) == 11
    # closed form: the parameters that make_demo.py simulates
    for name, offset, t2, amplitude in (
        ("loop_40mm.dx", 137.4, 0.05, 0.8),
        ("loop_40mm_shots.nc", 137.4, 0.05, 0.8),
        ("loop_80mm_noisy.npz", 331.0, 0.05, 0.4),
    ):
        found = by_name[name]["quantities"]
        for quantity, true in (
            ("frequency_offset", offset),
            ("linewidth", 1 / (np.pi * t2)),
            ("amplitude", amplitude),
        ):
            assert abs(found[quantity]["value"] - true) < WITHIN * found[quantity]["std"], name
    assert "not Lorentzian" in by_name["loop_60mm_shim.csv"]["status"]


def test_demo_with_its_chain(run):
    status, out, _ = run("measure", DEMO, "--chain", DEMO / "bench_check.py", "--format", "json")
    assert status == 0
    assert len(json.loads(out)["results"]) == 11


# twenty malformed inputs ----------------------------------------------------------------------

TABLE_HEAD = "# carrier_frequency_hz: 63870000\n# nucleus: 1H\ntime_s,real,imag\n"


def rows(*lines):
    return TABLE_HEAD + "".join(f"{line}\n" for line in lines)


def decay(points=64):
    return [
        f"{n * 1e-3:.3f},{np.exp(-n / 10):.6f},{-np.exp(-n / 10) / 3:.6f}" for n in range(points)
    ]


def replaced(lines, number, line):
    return [*lines[:number], line, *lines[number + 1 :]]


JCAMP = (DEMO / "loop_40mm.dx").read_text

#: File name, content, and a word that the remedy or the reason must hold.
MALFORMED = {
    "empty file": ("a.csv", "", "empty"),
    "empty JCAMP": ("a.dx", "", "empty"),
    "only a heading": ("a.csv", TABLE_HEAD, "rows"),
    "two points": ("a.csv", rows(*decay(2)), "point"),
    "text in numbers": ("a.csv", rows(*replaced(decay(), 9, "0.009000,loud,0")), "loud"),
    "missing column": ("a.csv", rows(*replaced(decay(), 9, "0.009000,1")), "column"),
    "not a number": ("a.csv", rows(*replaced(decay(), 9, "0.009000,nan,0")), "finite"),
    "infinite": ("a.csv", rows(*replaced(decay(), 9, "0.009000,inf,0")), "finite"),
    "uneven time": ("a.csv", rows(*replaced(decay(), 9, "0.009300,0.4,0")), "even"),
    "time runs back": ("a.csv", rows(*decay()[::-1]), "time"),
    "unknown nucleus": ("a.csv", rows(*decay()).replace("1H", "9H"), "nucleus must be one of"),
    "no carrier": ("a.csv", rows(*decay()).replace("# carrier", "# other"), "carrier_frequency"),
    "carrier of zero": ("a.csv", rows(*decay()).replace("63870000", "0"), "positive"),
    "decimal comma": (
        "a.csv",
        rows(*(d.replace(",", ";").replace(".", ",") for d in decay())),
        "poi",
    ),
    "real where complex is needed": (
        "a.csv",
        TABLE_HEAD.replace(",imag", "") + "".join(d.rpartition(",")[0] + "\n" for d in decay()),
        "apply make_analytic first (in a chain file, --chain)",
    ),
    "unknown format": ("a.csv", "\x89PNG\r\n\x1a\n\x00\x00", ""),
    "truncated JCAMP": ("a.dx", lambda: JCAMP()[:20000], ""),
    "wrong count in JCAMP": (
        "a.dx",
        lambda: JCAMP().replace("4096, 4096, 4096", "4000, 4000, 4000"),
        "",
    ),
    "altered digits in JCAMP": (
        "a.dx",
        lambda: JCAMP()[:30000] + "9" + JCAMP()[30001:],
        "",
    ),
    "array of text": ("a.npy", lambda: npy(np.array(["a", "b", "c"])), "number"),
    "pickle in an array": ("a.npy", lambda: npy(np.array([{}, print], dtype=object)), ""),
    "truncated archive": ("a.npz", lambda: (DEMO / "loop_80mm_noisy.npz").read_bytes()[:9000], ""),
    "truncated netCDF": ("a.nc", lambda: (DEMO / "loop_40mm_shots.nc").read_bytes()[:9000], ""),
    "single number": ("a.npy", lambda: npy(np.array(3.0)), ""),
}


def npy(array):
    buffer = io.BytesIO()
    np.save(buffer, array)
    return buffer.getvalue()


@pytest.mark.parametrize(("name", "content", "said"), MALFORMED.values(), ids=MALFORMED.keys())
def test_malformed_input(run, tmp_path, name, content, said):
    content = content() if callable(content) else content
    (tmp_path / name).write_bytes(content if isinstance(content, bytes) else content.encode())
    words = ("--carrier-frequency", "63.87e6", "--dwell-time", "1e-3") if name[-3:] == "npy" else ()
    status, out, err = run("measure", tmp_path / name, *words, "--format", "csv")
    assert status == 1
    assert next(csv.DictReader(io.StringIO(out)))["error"] == err.removeprefix("fidkit: ").strip()
    assert err.startswith(f"fidkit: {name}: ")
    assert err.count("\n") == 1
    assert said in err
    assert "a fault in fidkit" not in err
    assert "; " in err or "must" in err, "no remedy in it"


@pytest.mark.parametrize(
    ("text", "said"),
    [
        ("import os\nos.abort()\n", "expected `import fidkit as fk`"),
        (
            "import fidkit as fk\n\n\ndef process(fid):\n    fid = fk.no(fid)\n    return fid\n",
            "no",
        ),
        ("\0", "null"),
        ("(" * 200, "not Python"),
    ],
)
def test_hostile_chain_file(run, tmp_path, text, said):
    (tmp_path / "chain.py").write_text(text)
    status, out, err = run("measure", DEMO, "--chain", tmp_path / "chain.py")
    assert (status, out) == (1, "")
    assert err.startswith("fidkit: chain.py")
    assert err.count("\n") == 1
    assert said in err


def test_missing_chain_file(run, tmp_path):
    status, _, err = run("measure", DEMO, "--chain", tmp_path / "none.py")
    assert status == 1
    assert err.count("\n") == 1
    assert "none.py: there is no such file or folder; check the path" in err


@pytest.mark.parametrize(
    ("words", "said"),
    [
        (("--near", "1e9"), "near"),
        (("--near", "nan"), "near"),
        (("--region", "500", "-5e2"), "low comes before high; give --region -500 500"),
        (("--region", "nan", "5"), "region"),
        (("--region", "1e6", "2e6"), "region"),
        (("--lines", "0"), "lines"),
        (("--lines", "100000"), "lines"),
        (("--noise", "3", "2"), "low comes before high; give --noise 2 3"),
        (("--noise", "3", "3"), "low comes before high; they must differ"),
    ],
)
def test_values_that_make_no_sense(run, words, said):
    status, _, err = run("measure", DEMO / "loop_40mm.dx", *words, "--format", "csv")
    assert status == 1
    assert said in err
    assert "a fault in fidkit" not in err
    assert err.count("\n") == 1


README = (DEMO.parent / "README.md").read_text()
SHOWN = re.findall(r"^```console\n\$ fidkit ([^\n]+)\n(?!\$)(.+?)^```$", README, re.M | re.S)
TOLD = re.findall(r"^\$ fidkit (.+)$", README, re.M)


@pytest.fixture
def beside_the_demo(tmp_path, monkeypatch):
    (tmp_path / "data_demo").symlink_to(DEMO)
    monkeypatch.chdir(tmp_path)


@pytest.mark.usefixtures("beside_the_demo")
@pytest.mark.parametrize(("command", "shown"), SHOWN)
def test_the_readme_shows_what_is_printed(command, shown, run):
    """Every number in the README is one that the command gives today."""
    status, out, _ = run(*command.split())
    assert (status, out) == (0, shown)


@pytest.mark.usefixtures("beside_the_demo")
@pytest.mark.parametrize("command", TOLD)
def test_the_commands_of_the_readme_work(command, run):
    status, out, err = run(*shlex.split(command, comments=True))
    assert status == 0
    assert bool(out) != ("wrote" in err)


@pytest.mark.usefixtures("beside_the_demo")
def test_the_python_of_the_readme_works(capsys):
    blocks = re.findall(r"^```python\n(.+?)^```$", README, re.M | re.S)
    assert len(blocks) == 2
    names = {}
    for block in blocks:
        exec(block, names)
    assert "linewidth" in capsys.readouterr().out
    # closed form: the width of T2* 50 ms, whatever window the chain holds
    error = names["result"]["linewidth"].item() - 1 / (np.pi * 0.05)
    assert abs(error) < WITHIN * names["result"]["linewidth_std"].item()


def test_the_readme_is_looked_through():
    assert {command.split()[0] for command, _ in SHOWN} == {"measure", "info", "steps"}
    assert len(TOLD) == len(SHOWN) + 5
