"""The house itself: imports go down only, nothing heavy is loaded, every step is documented."""

import ast
import inspect
import math
import re
import shutil
import subprocess
import sys
from pathlib import Path

import numpy as np
import pytest

import fidkit as fk

PACKAGE = Path(fk.__file__).parent

#: The floor of every room; a module may import from its own room and from lower floors. Rooms of
#: the first floor work on plain arrays or on signals; steps may use numerics.
FLOORS = {
    "params": 0,
    "nuclei": 0,
    "signals": 0,
    "files": 0,
    "threads": 0,
    "version": 0,
    "display": 0,
    "numerics": 1,
    "steps": 1,
    "measure": 2,
    "chain": 2,
    "formats": 2,
    "simulate": 2,
    "figures": 3,
    "limits": 3,
    "report": 4,
    "workbench": 5,
    "the whole package": 4.5,
    "cli": 5,
    "__main__": 6,
}
#: Within one floor: which room may look into which.
SAME_FLOOR = {("steps", "numerics"), ("signals", "nuclei"), ("signals", "params")}
SAME_FLOOR |= {("nuclei", "params"), ("measure", "chain")}


def modules():
    return sorted(path for path in PACKAGE.rglob("*.py") if path != PACKAGE / "__init__.py")


def room_of(parts):
    return parts[0].removesuffix(".py")


def imported_rooms(path):
    """Rooms that a module imports, wherever in the module the import stands."""
    package = path.relative_to(PACKAGE.parent).with_suffix("").parts
    for node in ast.walk(ast.parse(path.read_text())):
        if isinstance(node, ast.Import):
            names = [alias.name for alias in node.names]
        elif isinstance(node, ast.ImportFrom):
            base = node.module or ""
            if node.level:
                base = ".".join((*package[: len(package) - node.level], *filter(None, [base])))
            names = [base, *(f"{base}.{alias.name}" for alias in node.names)]
        else:
            continue
        for name in names:
            first, _, rest = name.partition(".")
            room = rest.partition(".")[0]
            if first == "fidkit" and room in FLOORS:
                yield room, node.lineno
            elif name == "fidkit" and isinstance(node, ast.Import):
                yield "the whole package", node.lineno


def test_every_module_has_a_floor():
    rooms = {room_of(path.relative_to(PACKAGE).parts) for path in modules()}
    assert rooms <= set(FLOORS), f"give {sorted(rooms - set(FLOORS))} a floor"


@pytest.mark.parametrize("path", modules(), ids=lambda path: str(path.relative_to(PACKAGE)))
def test_imports_go_down(path):
    here = room_of(path.relative_to(PACKAGE).parts)
    wrong = [
        f"line {line}: {here} (floor {FLOORS[here]}) imports {there} (floor {FLOORS[there]})"
        for there, line in imported_rooms(path)
        if there != here and FLOORS[there] >= FLOORS[here] and (here, there) not in SAME_FLOOR
    ]
    assert not wrong


def test_the_floor_test_can_fail(tmp_path, monkeypatch):
    monkeypatch.setattr(sys.modules[__name__], "PACKAGE", tmp_path / "fidkit")
    (tmp_path / "fidkit" / "steps").mkdir(parents=True)
    bad = tmp_path / "fidkit" / "steps" / "bad.py"
    bad.write_text(
        "import fidkit\ndef late():\n    from ..measure import line\n    import fidkit.cli\n"
    )
    assert {there for there, _ in imported_rooms(bad)} == {"the whole package", "measure", "cli"}


def test_import_loads_nothing_heavy():
    code = "import fidkit, sys; print(*sys.modules)"
    run = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True)
    loaded = {name.partition(".")[0] for name in run.stdout.split()}
    heavy = {
        *("nmrglue", "bokeh", "dask", "h5netcdf", "h5py", "netCDF4", "zarr", "lmfit", "matplotlib"),
        *("tkinter", "PyQt5", "PyQt6", "PySide6", "ipywidgets", "IPython", "jupyter_bokeh"),
        *("tornado", "panel", "tsdownsample"),
    }
    assert "numpy" in loaded
    assert not loaded & heavy


# every step -----------------------------------------------------------------------------------

EVERY_STEP = list(fk.STEPS.values())
EVERY_PARAMETER = [
    (step, parameter) for step in EVERY_STEP for parameter in step.parameters.values()
]


def a_signal(kind):
    if kind == "spectrum":
        return fk.fourier_transform(a_signal("fid"))
    decay = np.exp((2j * np.pi * 40 - 20) * np.arange(64) * 1e-3)
    return fk.from_array(decay, dwell_time=1e-3, carrier_frequency=63.87e6)


@pytest.mark.parametrize("step", EVERY_STEP, ids=lambda step: step.name)
def test_docstring_names_every_parameter(step):
    text = inspect.getdoc(step.function)
    assert text
    assert re.search(r"^Returns\n-------$", text, re.MULTILINE)
    section = re.search(r"^Parameters\n-{10}\n(.*?)(?=^\w[^\n]*\n-{3,}$|\Z)", text, re.M | re.S)
    documented = re.findall(r"^(\w+(?:, \w+)*) ?:", section.group(1), re.M) if section else []
    named = [name.strip() for line in documented for name in line.split(",")]
    assert [name for name in named if name != step.takes] == list(step.parameters)


@pytest.mark.parametrize(
    ("step", "parameter"), EVERY_PARAMETER, ids=lambda item: getattr(item, "name", "")
)
def test_values_out_of_range_raise(step, parameter):
    signal = a_signal(step.takes)
    wrong = [object(), [], {}, math.nan, 1j, "no such choice"]
    if parameter.kind in ("number", "whole number"):
        wrong += [math.inf, -math.inf, True, "1", (1.0, 2.0)]
        if parameter.kind == "whole number":
            wrong += [1.5]
        if parameter.range.low > -math.inf:
            wrong.append(parameter.range.low - 1)
            if parameter.range.above:
                wrong.append(parameter.range.low)
        if parameter.range.high < math.inf:
            wrong.append(parameter.range.high + max(1, abs(parameter.range.high) * 1e-9))
    elif parameter.kind == "pair":
        wrong += [(2.0, 1.0), (1.0,), (1.0, math.inf), (1.0, "2"), 1.0]
    elif parameter.kind == "switch":
        wrong += [1, 0, "True"]
    if not parameter.optional:
        wrong.append(None)
    for value in wrong:
        with pytest.raises(fk.FidkitError) as caught:
            step.function(signal, **{parameter.name: value})
        assert str(caught.value).startswith(f"{step.name}: {parameter.name} must be")
        assert "got" in str(caught.value)


@pytest.mark.parametrize("step", EVERY_STEP, ids=lambda step: step.name)
def test_unknown_parameter_raises(step):
    with pytest.raises(fk.FidkitError, match="there is no parameter 'nothing'"):
        step.function(a_signal(step.takes), nothing=1)


def test_a_new_step_needs_one_place(tmp_path):
    """One function in a file of steps: the command, chains and the package all know it."""
    copy = tmp_path / "fidkit"
    shutil.copytree(PACKAGE, copy, ignore=shutil.ignore_patterns("__pycache__"))
    with (copy / "steps" / "conditioning.py").open("a") as file:
        file.write(
            '''

from typing import Annotated as _Annotated
from fidkit.params import Range as _Range, Unit as _Unit, step as _step


@_step
def scale_signal(fid: xr.DataArray, *, ratio: _Annotated[float, _Unit("V/V"), _Range(0, 9)] = 2.0) -> xr.DataArray:
    """Multiply the record by a number.

    Parameters
    ----------
    ratio : float
        By how much, V/V.

    Returns
    -------
    xarray.DataArray
        The louder record.
    """
    return fid.copy(data=ratio * fid.values)
'''
        )
    script = tmp_path / "use.py"
    script.write_text(
        "import numpy as np, fidkit as fk, fidkit.cli\n"
        f"assert fk.__file__.startswith({str(copy)!r})\n"
        "fid = fk.from_array(np.ones(8, complex), dwell_time=1e-3, carrier_frequency=6e7)\n"
        "louder = fk.scale_signal(fid, ratio=3.0)\n"
        "assert louder.values[0] == 3\n"
        "fk.chain_of(louder).save('louder.py')\n"
        "assert fk.Chain.load('louder.py')(fid).identical(louder)\n"
        "assert 'scale_signal' in dir(fk)\n"
        "assert fidkit.cli.main(['steps']) == 0\n"
        "assert fidkit.cli.main(['steps', 'scale_signal']) == 0\n"
    )
    run = subprocess.run(
        [sys.executable, str(script)], cwd=tmp_path, capture_output=True, text=True, check=False
    )
    assert run.returncode == 0, run.stderr
    assert "scale_signal (fid to fid): Multiply the record by a number." in run.stdout
    assert "ratio = 2.0: a number in [0, 9] V/V" in run.stdout
    assert "By how much, V/V." in run.stdout


def test_readme_has_two_commands():
    """One measures the demo, one passes the tests; each sets everything up by itself."""
    readme = (PACKAGE.parent / "README.md").read_text()
    commands = re.findall(r"^```sh\n(.*)\n```$", readme, re.M)
    assert len(commands) == 2
    assert all(command.startswith("python3 -m venv .venv && ") for command in commands)
    assert commands[0].endswith(".venv/bin/fidkit measure data_demo")
    assert ".venv/bin/pytest" in commands[1]
