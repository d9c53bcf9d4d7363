"""What an FID and a spectrum are: how they are made, and what is refused."""

import dask.array
import numpy as np
import pytest
import xarray as xr

import fidkit as fk
from fidkit import signals

FACTS = {"dwell_time": 1e-4, "carrier_frequency": 63.87e6}


def fid(points=64, **more):
    values = np.exp((200j - 30) * 1e-4 * np.arange(points))
    return fk.from_array(values, **{**FACTS, **more})


def test_the_axis_is_the_true_time():
    """Source: definition, start + n * dwell."""
    made = fid(time_start=3e-4, sample="water", coil="loop", operator="A")
    np.testing.assert_array_equal(made.time.values, 3e-4 + 1e-4 * np.arange(64))
    assert made.time.attrs["units"] == "s"
    assert made.attrs["carrier_frequency"] == 63.87e6
    assert made.attrs["operator"] == "A"
    assert made.attrs["history"] == ""
    assert signals.time_start(made) == 3e-4
    rounding = 1e-12
    assert signals.dwell_time(made) == pytest.approx(1e-4, rel=rounding)


def test_precision_order_and_ownership():
    for kind in (np.complex64, np.float32, np.complex128, np.float64):
        values = np.ones(8, kind)
        made = fk.from_array(values, **FACTS)
        assert made.dtype == kind
        values[:] = 5  # an acquisition may use its buffer again
        assert (made.values == 1).all()
    assert fk.from_array(np.ones(8, ">c8"), **FACTS).dtype == np.complex64
    assert fk.from_array(np.ones(8, ">c8"), **FACTS).dtype.isnative
    assert fk.from_array([1, 2, 3], **FACTS).dtype == np.float64
    lazy = fk.from_array(dask.array.ones((2, 8), dtype=complex), **FACTS)
    assert lazy.dims == ("shot", "time")


def test_leading_dimensions():
    cube = fk.from_array(np.ones((2, 3, 8)), **FACTS)
    assert cube.dims == ("channel", "shot", "time")
    named = fk.from_array(
        np.ones((3, 8)),
        dims=["pulse_width", "time"],
        coords={"pulse_width": [1e-5, 2e-5, 3e-5]},
        **FACTS,
    )
    assert list(named.pulse_width.values) == [1e-5, 2e-5, 3e-5]


def test_spectrum_axis():
    descending = fk.spectrum_from_array(
        [1.0, 2.0, 3.0], frequency=[20, 10, 0], carrier_frequency=1e6
    )
    assert list(descending.frequency.values) == [0, 10, 20]
    assert list(descending.values) == [3, 2, 1]
    # Source: definition, parts per million of the carrier
    assert descending["shift"].values == pytest.approx([0, 10, 20], rel=1e-12)


@pytest.mark.parametrize(
    ("change", "message"),
    [
        ({"data": np.ones(1)}, "at least 2 points"),
        ({"data": np.ones((0, 8))}, "at least one record"),
        ({"data": 5.0}, "at least one record"),
        ({"data": ["a", "b"]}, "must be an array of numbers"),
        ({"data": [[1, 2], [3]]}, "must be an array of numbers"),
        ({"data": np.array([object(), None])}, "must be an array of numbers"),
        ({"data": [1, np.nan, 2]}, "must be finite; 1 of 3 values are not, the first at index 1"),
        ({"data": np.ma.masked_less([1, -9999, 3], 0)}, "no masked values; got 1"),
        ({"data": np.ones((2, 2, 2, 2))}, "dims must name the 3 leading dimensions"),
        ({"dims": ["a", "b"]}, "dims must name the 0 leading dimensions"),
        ({"dims": 5}, "dims must be a list of names; got 5"),
        ({"data": np.ones((2, 8)), "dims": ["frequency"]}, "dims must name"),
        ({"dwell_time": 0}, "dwell_time must be a positive number of s; got 0"),
        ({"dwell_time": -1e-4}, "dwell_time must be a positive number"),
        ({"dwell_time": "fast"}, "dwell_time must be a positive number of s; got 'fast'"),
        ({"dwell_time": 10**400}, "dwell_time must be a positive number"),
        ({"dwell_time": None}, "please give dwell_time"),
        ({"carrier_frequency": None}, "please give carrier_frequency"),
        ({"carrier_frequency": True}, "carrier_frequency must be a positive number of Hz"),
        ({"time_start": np.inf}, "time_start must be a number of s"),
        ({"time_start": 1.7e9, "dwell_time": 1e-6}, "count from the pulse instead of from a date"),
        ({"carrier_frequency": 63.87}, "give it in Hz, not MHz"),
        ({"dwell_time": 1e-5, "carrier_frequency": 400}, "more than half the spectral width"),
        ({"nucleus": "27X"}, "nucleus must be one of 1H"),
        ({"history": "x"}, "written by fidkit itself"),
        ({"coords": {"time": np.arange(8)}}, "coords must name coordinates of the leading"),
        ({"data": np.ones((2, 8)), "coords": {"shot": [1, 2, 3]}}, "coords must fit"),
        ({"coords": [1]}, "coords must name"),
    ],
)
def test_what_from_array_refuses(change, message):
    given = {"data": np.ones(8), **FACTS, **change}
    with pytest.raises(fk.FidkitError) as error:
        fk.from_array(given.pop("data"), **given)
    assert message in str(error.value)
    assert "\n" not in str(error.value)


@pytest.mark.parametrize(
    ("axis", "message"),
    [
        ([0, 1, np.nan, 3, 4], "frequency must be finite"),
        ([0, 1, 2, 3], "one value a point"),
        (["a", "b", "c", "d", "e"], "must be an array of numbers"),
        ([0, 1, 2, 3, 4j], "frequency must be real"),
        ([0, 1, 2, 3, 5], "evenly spaced; the step from point 3 to 4"),
        ([1, 1, 1, 1, 1], "ascend evenly"),
    ],
)
def test_what_spectrum_from_array_refuses(axis, message):
    with pytest.raises(fk.FidkitError) as error:
        fk.spectrum_from_array(np.ones(5), frequency=axis, carrier_frequency=1e6)
    assert message in str(error.value)


SPOILED = {
    "no axis": lambda fid: fid.drop_vars("time"),
    "dates": lambda fid: fid.assign_coords(time=np.arange(64).astype("datetime64[ns]")),
    "durations": lambda fid: fid.assign_coords(time=np.arange(64).astype("timedelta64[ns]")),
    "text": lambda fid: fid.assign_coords(time=[str(n) for n in range(64)]),
    "uneven": lambda fid: fid.assign_coords(time=np.arange(64) ** 1.01),
    "not a number": lambda fid: fid.assign_coords(time=[*range(63), np.nan]),
    "descending": lambda fid: fid[::-1],
    "one point": lambda fid: fid[:1],
    "nothing": lambda fid: fid[:0],
    "no carrier": lambda fid: fid.drop_attrs(),
    "text carrier": lambda fid: fid.assign_attrs(carrier_frequency="63 MHz"),
    "too many measured": lambda fid: fid.assign_attrs(acquired_points=65),
    "cut after zeros": lambda fid: fk.zero_fill(fid, factor=4)[:32],
    "two axes": lambda fid: fid.expand_dims(frequency=2),
    "axis first": lambda fid: fid.expand_dims(shot=2).transpose("time", "shot"),
    "variable": lambda fid: fid.variable,
    "dataset": lambda fid: fid.to_dataset(),
    "array": lambda fid: fid.values,
}


@pytest.mark.parametrize("spoil", SPOILED.values(), ids=SPOILED)
@pytest.mark.parametrize(
    "taker",
    [fk.remove_offset, fk.fourier_transform, fk.measure, fk.Chain(["zero_fill"]), fk.Chain()],
    ids=["step", "transform", "measure", "chain", "empty chain"],
)
def test_what_is_no_signal_is_refused_everywhere(spoil, taker):
    with pytest.raises(fk.FidkitError) as error:
        taker(spoil(fid()))
    assert "\n" not in str(error.value)


def test_a_part_of_a_spectrum_is_a_spectrum():
    spectrum = fk.fourier_transform(fid())
    part = fk.correct_phase(spectrum[10:40], zero_order=90.0)
    xr.testing.assert_allclose(part.variable, (1j * spectrum[10:40]).variable, rtol=1e-12)
    assert signals.acquired_points(fk.inverse_transform(spectrum[10:40])) == 30
