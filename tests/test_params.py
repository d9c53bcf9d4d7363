"""The step mechanism: what a signature allows, says and refuses."""

import math
from typing import Annotated, Literal

import numpy as np
import pytest
import xarray as xr

import fidkit as fk
from fidkit.params import (
    STEPS,
    Along,
    Gives,
    Parameter,
    ParameterError,
    Range,
    Slider,
    Unit,
    find_step,
    step,
)


@pytest.fixture(autouse=True)
def table():
    """Steps made here are gone afterwards."""
    before = dict(STEPS)
    yield
    STEPS.clear()
    STEPS.update(before)


@pytest.fixture
def fid():
    return fk.from_array(np.ones(8, complex), dwell_time=1e-3, carrier_frequency=63.87e6)


def make(annotation, default):
    def trial(fid, *, value=default):
        """Try."""
        return fid

    trial.__annotations__ = {"value": annotation, "return": xr.DataArray}
    return step(trial)


@pytest.mark.parametrize(
    ("annotation", "default", "phrase"),
    [
        (Annotated[float, Unit("Hz"), Range(0)], 1.0, "a number in [0, inf) Hz"),
        (Annotated[float, Range(0, 1, above=True)], 0.5, "a number in (0, 1]"),
        (float, 1.0, "a number in (-inf, inf)"),
        (Annotated[int, Range(1, 8)], 1, "a whole number in [1, 8]"),
        (Annotated[int | None, Range(1, 8)], None, "a whole number in [1, 8], or None"),
        (bool, True, "True or False"),
        (Literal["full", "half"], "full", "'full' or 'half'"),
        (Literal["full", "half"] | None, None, "'full' or 'half', or None"),
        (
            Annotated[tuple[float, float] | None, Unit("Hz"), Along("frequency")],
            None,
            "a pair (low, high) of numbers in (-inf, inf) Hz within the frequency axis, or None",
        ),
        (
            Annotated[float, Unit("Hz"), Range(0), Slider(0, 50, 0.1)],
            1.0,
            "a number in [0, inf) Hz",  # a slider forbids nothing
        ),
    ],
)
def test_one_phrase(annotation, default, phrase, fid):
    function = make(annotation, default)
    assert str(STEPS["trial"].parameters["value"]) == phrase
    with pytest.raises(ParameterError) as caught:
        function(fid, value=object)
    assert str(caught.value) == f"trial: value must be {phrase}; got {object!r}"


@pytest.mark.parametrize(
    ("annotation", "default", "said"),
    [
        (str, "a", "must be float, int, bool"),
        (list[float], None, "must be float, int, bool"),
        (Literal[1, 2], 1, "must be float, int, bool"),
        (float | int, 1.0, "must be float, int, bool"),
        (Annotated[float, Range(0)], -1.0, "default of trial: value must be a number in"),
        (float, None, "default of trial"),
    ],
)
def test_other_kinds_fail_when_defined(annotation, default, said):
    with pytest.raises(TypeError, match=said):
        make(annotation, default)


def test_shape_of_a_step():
    with pytest.raises(TypeError, match="call the first parameter fid, spectrum or signal"):

        @step
        def first(data: xr.DataArray) -> xr.DataArray:
            """Try."""
            return data

    with pytest.raises(TypeError, match="value must be keyword-only and have a default"):

        @step
        def second(fid: xr.DataArray, value: float) -> xr.DataArray:
            """Try."""
            return fid

    with pytest.raises(TypeError, match="needs a docstring"):

        @step
        def third(fid: xr.DataArray) -> xr.DataArray:
            return fid

    with pytest.raises(TypeError, match=r"has a step of that name already"):

        @step
        def fourier_transform(fid: xr.DataArray) -> xr.DataArray:
            """Try."""
            return fid


@pytest.mark.parametrize(
    ("kind", "value", "plain"),
    [
        ("number", np.float32(0.5), 0.5),
        ("number", np.float64(0.5), 0.5),
        ("number", np.int64(3), 3.0),
        ("number", 3, 3.0),
        ("whole number", np.uint8(3), 3),
        ("switch", np.bool_(True), True),
        ("pair", [1, np.float32(2)], (1.0, 2.0)),
    ],
)
def test_numpy_numbers_become_plain(kind, value, plain):
    found = Parameter("value", kind, None).check(value, "here")
    assert found == plain
    assert type(found) is type(plain)
    assert "np." not in repr(found)


def test_huge_integers_are_refused():
    with pytest.raises(ParameterError, match="must be a number"):
        Parameter("value", "number", None).check(10**400, "here")


def test_range():
    assert 0.0 in Range(0)
    assert 0.0 not in Range(0, above=True)
    assert 1.0 in Range(0, 1)
    assert math.inf not in Range()
    assert math.nan not in Range()


def test_position_along_an_axis():
    def centre(
        spectrum: xr.DataArray,
        *,
        position: Annotated[float | None, Unit("Hz"), Along("frequency")] = None,
    ) -> xr.DataArray:
        """Try."""
        return spectrum

    function = step(centre)
    spectrum = fk.spectrum_from_array(
        np.ones(4, complex), frequency=[-10, 0, 10, 20], carrier_frequency=63.87e6
    )
    function(spectrum, position=20.0)
    with pytest.raises(ParameterError, match=r"within the frequency axis \[-10, 20\] Hz; got 20.1"):
        function(spectrum, position=20.1)


def test_history_is_written_after_the_work(fid):
    @step
    def fails(fid: xr.DataArray, *, value: float = 1.0) -> xr.DataArray:
        """Try."""
        raise fk.FidkitError("fails: no")

    function = make(float, 1.0)
    once = function(fid, value=np.float64(0.1))
    twice = function(once)
    assert fid.attrs["history"] == ""
    assert once.attrs["history"] == "trial(value=0.1)"
    assert twice.attrs["history"] == "trial(value=0.1)\ntrial()"
    with pytest.raises(fk.FidkitError):
        fails(once)
    assert once.attrs["history"] == "trial(value=0.1)"


@pytest.mark.parametrize(
    ("signal", "said"),
    [
        (np.ones(8), "must be a signal as fidkit.read or fidkit.from_array gives it; got ndarray"),
        (None, "got NoneType"),
        (xr.DataArray(np.ones(8), dims="place"), "must be time; got 'place'"),
        (xr.Dataset({"a": ("time", np.ones(8))}), "got Dataset"),
    ],
)
def test_what_is_no_signal(signal, said):
    with pytest.raises(fk.FidkitError, match=said):
        fk.apodize_exponential(signal)


def test_wrong_kind_of_signal_names_the_remedy(fid):
    spectrum = fk.fourier_transform(fid)
    with pytest.raises(fk.FidkitError, match="take the step before fourier_transform"):
        fk.apodize_exponential(spectrum)
    with pytest.raises(fk.FidkitError, match="apply fourier_transform first"):
        fk.inverse_transform(fid)
    with pytest.raises(fk.FidkitError, match="got 2 positional arguments"):
        fk.apodize_exponential(fid, 1.0)


def test_too_little_memory_is_said(fid):
    @step
    def fill_memory(fid: xr.DataArray) -> xr.DataArray:
        """Ask for more than there is."""
        raise MemoryError("Unable to allocate 8 EiB")

    with pytest.raises(fk.FidkitError, match="fill_memory: the computer has not enough memory"):
        fill_memory(fid)


def test_find_step_helps():
    with pytest.raises(fk.FidkitError, match="did you mean apodize_exponential"):
        find_step("apodise_exponential")
    with pytest.raises(fk.FidkitError, match="`fidkit steps` lists them"):
        find_step("zzz")
    with pytest.raises(AttributeError, match="has no attribute 'no_such_step'"):
        _ = fk.no_such_step


def test_gives_marks_the_kind():
    assert STEPS["fourier_transform"].takes == "fid"
    assert STEPS["fourier_transform"].gives == "spectrum"
    assert STEPS["inverse_transform"].gives == "fid"
    assert Gives("fid").kind == "fid"
