"""What an FID and a spectrum are: the one module that writes their axes, units and attributes.

Both are `xarray.DataArray` with the signal axis last: ``time`` (s, counted from the middle of the
pulse) or ``frequency`` (Hz from the carrier, ascending, positive = faster than the carrier) with a
second coordinate ``shift`` (ppm from the carrier). Any leading dimensions are independent records.

Attributes, all plain text or numbers so that every file format keeps them:

===================== ==============================================================
units, long_name      CF text
carrier_frequency     Hz
nucleus               as in `fidkit.nuclei`
sample, coil, source  free text, may be empty
notes                 what a reader had to assume or has mended, one line each
history               the steps taken, one replayable line each
acquired_points       how many points are measured, where zeros follow them
time_start            (spectra) time of the first point, s, for the way back
first_point           (spectra) how the first point counted: ``full`` or ``half``
spectral_width        (spectra) of the whole spectrum, of which this may be a part, Hz
measured_from         time of the first measured point where rebuilt ones come before it, s
===================== ==============================================================
"""

from __future__ import annotations

from collections.abc import Iterable, Mapping, Sequence
from numbers import Integral, Real
from typing import Any

import numpy as np
import numpy.typing as npt
import xarray as xr

from fidkit.nuclei import find_nucleus
from fidkit.params import SIGNAL_CHECKS, FidkitError, shown

__all__ = [
    "acquired_points",
    "add_note",
    "check_signal",
    "dwell_time",
    "even_spacing",
    "fid_array",
    "frequency_coordinates",
    "from_array",
    "is_fid",
    "like",
    "points_before",
    "points_in",
    "require_complex",
    "spectral_width",
    "spectrum_array",
    "spectrum_from_array",
    "time_coordinate",
    "time_start",
]

#: How far one spacing may be from the mean spacing, as a fraction of it. Relative, never absolute:
#: dwell times run from nanoseconds to milliseconds. Coordinates in double precision after a
#: million points are off by 1e-10 of a spacing; a table that rounds its times has its own bound.
EVEN_SPACING = 1e-4

LEADING = {1: (), 2: ("shot",), 3: ("channel", "shot")}

SPECTRUM_ATTRIBUTES = ("time_start", "first_point", "spectral_width")
SIGNAL_ATTRIBUTES = (*SPECTRUM_ATTRIBUTES, "acquired_points", "measured_from")


def from_array(
    data: npt.ArrayLike,
    *,
    dwell_time: float,
    carrier_frequency: float,
    nucleus: str = "1H",
    time_start: float = 0.0,
    dims: Sequence[str] | None = None,
    coords: Mapping[str, Any] | None = None,
    units: str = "1",
    sample: str = "",
    coil: str = "",
    source: str = "",
    **more: str | float | int,
) -> xr.DataArray:
    """Make an FID from an array.

    Parameters
    ----------
    data : array_like, shape (..., time)
        Complex, or real for a single-channel record (then see `fidkit.make_analytic`).
        Single precision stays single precision.
    dwell_time : float
        Time between complex points, s.
    carrier_frequency : float
        Receiver frequency, Hz.
    nucleus : str
        Name from `fidkit.NUCLEI`.
    time_start : float
        Time of the first point since the middle of the pulse, s: the dead time.
    dims : sequence of str, optional
        Names of the leading dimensions, with or without a final ``time``. Two dimensions are taken
        as ``shot, time`` and three as ``channel, shot, time`` where nothing is said.
    coords : mapping, optional
        Coordinates of the leading dimensions.
    units : str
        CF unit of the values, such as ``V``; ``1`` where they are only counts.
    sample, coil, source : str
        Free text.
    **more
        Further attributes, text or numbers.

    Returns
    -------
    xarray.DataArray
        The FID; see this module's head for what it carries.

    Raises
    ------
    FidkitError
        If a value is missing, not finite or out of range.
    """
    values = _values(data, "data")
    if values.shape[-1] < 2:
        raise FidkitError(f"data must have at least 2 points along time; got shape {values.shape}")
    leading = _leading(values.ndim, dims, "time")
    attributes = _attributes(
        carrier_frequency, nucleus, units, sample, coil, source, more, long_name="signal"
    )
    dwell = _number(dwell_time, "dwell_time", "s", positive=True)
    start = _number(time_start, "time_start", "s")
    given = _checked_coords(coords, values.shape[:-1], leading)
    fid = fid_array(
        values, dwell=dwell, start=start, dims=leading, coords=given, attributes=attributes
    )
    check_signal(fid, "from_array")
    carrier = float(attributes["carrier_frequency"])
    # megahertz taken for hertz: there are no such small carriers with so wide a band
    if carrier < 1000 and 2 * carrier * dwell < 1:
        raise FidkitError(
            f"carrier_frequency must be more than half the spectral width of {1 / dwell:g} Hz; got "
            f"{carrier:g} Hz; give it in Hz, not MHz, and dwell_time in s"
        )
    return fid


def spectrum_from_array(
    data: npt.ArrayLike,
    *,
    frequency: npt.ArrayLike,
    carrier_frequency: float,
    nucleus: str = "1H",
    dims: Sequence[str] | None = None,
    coords: Mapping[str, Any] | None = None,
    units: str = "1",
    sample: str = "",
    coil: str = "",
    source: str = "",
    **more: str | float | int,
) -> xr.DataArray:
    """Make a spectrum from an array, for records that come as a spectrum.

    Parameters
    ----------
    data : array_like, shape (..., frequency)
        Complex, or real where only the real part was kept.
    frequency : array_like, shape (frequency,)
        Hz from the carrier, evenly spaced, ascending or descending (then both are turned round).
    carrier_frequency, nucleus, dims, coords, units, sample, coil, source, **more
        As in `from_array`.

    Returns
    -------
    xarray.DataArray
        The spectrum. Nothing is known of how it was made, and `fidkit.measure` says so.

    Raises
    ------
    FidkitError
        If a value is missing, not finite or out of range, or the axis is uneven.
    """
    values = _values(data, "data")
    axis = _values(frequency, "frequency")
    if np.iscomplexobj(axis):
        raise FidkitError("frequency must be real numbers of Hz; got complex ones")
    axis = axis.astype(float)
    if axis.shape != values.shape[-1:] or axis.size < 2:
        raise FidkitError(
            f"frequency must have one value a point and at least 2; got {axis.shape} for {values.shape}"
        )
    if axis[0] > axis[-1]:
        axis, values = axis[::-1].copy(), values[..., ::-1].copy()
    even_spacing(axis, "frequency", "Hz")
    leading = _leading(values.ndim, dims, "frequency")
    attributes = _attributes(
        carrier_frequency, nucleus, units, sample, coil, source, more, long_name="spectrum"
    )
    given = _checked_coords(coords, values.shape[:-1], leading)
    return spectrum_array(values, frequency=axis, dims=leading, coords=given, attributes=attributes)


def fid_array(
    values: npt.NDArray[Any],
    *,
    dwell: float,
    start: float,
    dims: Sequence[str] = (),
    coords: Mapping[str, Any] | None = None,
    attributes: Mapping[str, Any],
) -> xr.DataArray:
    """Put values, axis and attributes together to an FID (for readers and steps)."""
    kept = {key: value for key, value in attributes.items() if key not in SPECTRUM_ATTRIBUTES}
    kept["long_name"] = "signal"
    if kept.get("acquired_points", 0) > values.shape[-1]:
        del kept["acquired_points"]  # of a longer record than what is left
    return xr.DataArray(
        values,
        dims=(*dims, "time"),
        coords={
            **_leading_coords(dims, coords),
            "time": time_coordinate(values.shape[-1], dwell, start),
        },
        name="fid",
        attrs=kept,
    )


def spectrum_array(
    values: npt.NDArray[Any],
    *,
    frequency: npt.NDArray[np.float64],
    dims: Sequence[str] = (),
    coords: Mapping[str, Any] | None = None,
    attributes: Mapping[str, Any],
) -> xr.DataArray:
    """Put values, axis and attributes together to a spectrum (for readers and steps)."""
    kept = dict(attributes)
    kept["long_name"] = "spectrum"
    return xr.DataArray(
        values,
        dims=(*dims, "frequency"),
        coords={
            **_leading_coords(dims, coords),
            **frequency_coordinates(frequency, float(kept["carrier_frequency"])),
        },
        name="spectrum",
        attrs=kept,
    )


def like(signal: xr.DataArray, values: npt.NDArray[Any], **axis: Any) -> xr.DataArray:
    """Values on a new axis, with the leading dimensions and facts of a signal (for steps).

    The axis is `dwell` and `start` of an FID, or `frequency` of a spectrum.
    """
    make = spectrum_array if "frequency" in axis else fid_array
    return make(
        values,
        dims=[str(name) for name in signal.dims[:-1]],
        coords={str(name): value for name, value in signal.coords.items()},
        attributes={str(name): value for name, value in signal.attrs.items()},
        **axis,
    )


def time_coordinate(points: int, dwell: float, start: float) -> xr.Variable:
    """The time axis, s."""
    return xr.Variable(
        ("time",),
        start + dwell * np.arange(points),
        {"units": "s", "long_name": "time since the middle of the pulse"},
    )


def frequency_coordinates(
    frequency: npt.NDArray[np.float64], carrier: float
) -> dict[str, xr.Variable]:
    """The frequency axis, Hz, and the same in ppm of the carrier."""
    return {
        "frequency": xr.Variable(
            ("frequency",), frequency, {"units": "Hz", "long_name": "offset from the carrier"}
        ),
        "shift": xr.Variable(
            ("frequency",),
            frequency / carrier * 1e6,
            {"units": "ppm", "long_name": "shift from the carrier"},
        ),
    }


def is_fid(signal: xr.DataArray) -> bool:
    """Whether the signal is in time; raises `FidkitError` for anything that is no signal."""
    dims = getattr(signal, "dims", ())
    if isinstance(signal, xr.DataArray) and dims and dims[-1] in ("time", "frequency"):
        return bool(dims[-1] == "time")
    raise FidkitError(
        "a signal is a DataArray with time or frequency as its last dimension, as fidkit.read and "
        f"fidkit.from_array give it; got {type(signal).__name__} with dimensions {tuple(dims)}"
    )


def check_signal(signal: Any, where: str) -> None:
    """Raise `FidkitError` unless something is a signal that steps and measurements can trust.

    Parameters
    ----------
    signal : object
        What was given.
    where : str
        Who asks, for the message.
    """
    in_time = is_fid(signal)
    name, unit = ("time", "s") if in_time else ("frequency", "Hz")
    for other in signal.dims[:-1]:
        if other in ("time", "frequency", "shift"):
            raise FidkitError(
                f"{where}: {other} may be the last dimension only; got {signal.dims}; rename it"
            )
    if signal.size == 0 or signal.shape[-1] < 2:
        raise FidkitError(
            f"{where}: a signal needs at least one record of 2 points; got shape {signal.shape}"
        )
    if name not in signal.coords or signal[name].dtype.kind not in "fiu":
        got = f"values of type {signal[name].dtype}" if name in signal.coords else "none"
        raise FidkitError(
            f"{where}: the signal needs a {name} coordinate, numbers in {unit}; got {got}; "
            "take it from the record as it was read"
        )
    even_spacing(signal[name].values, f"{where}: {name}", unit)
    carrier = signal.attrs.get("carrier_frequency")
    if not isinstance(carrier, Real) or not 0 < float(carrier) < np.inf:
        raise FidkitError(
            f"{where}: the attribute carrier_frequency must be a positive number of Hz; got "
            f"{shown(carrier)}; arithmetic may have dropped it: set it, or use .copy(data=...)"
        )
    for name in ("time_start", "spectral_width", "measured_from"):
        value = signal.attrs.get(name, 0.0)
        if not isinstance(value, Real) or not np.isfinite(float(value)):
            raise FidkitError(
                f"{where}: the attribute {name} is written by fidkit as a number; got "
                f"{shown(value)}; leave it as it was, or remove it"
            )
    # of a spectrum a part may be cut out, of an FID with zeros not
    most = signal.shape[-1] if in_time else np.inf
    measured = signal.attrs.get("acquired_points", 1)
    if not isinstance(measured, Integral) or not 0 < int(measured) <= most:
        raise FidkitError(
            f"{where}: the attribute acquired_points must be a whole number in [1, {most}], the "
            f"points here; got {shown(measured)}; shorten a record with "
            "remove_start and remove_end, which keep count"
        )


SIGNAL_CHECKS.append(check_signal)


def even_spacing(axis: npt.NDArray[Any], name: str, unit: str) -> float:
    """The mean spacing of an axis, or `FidkitError` where it is uneven or does not ascend."""
    if axis.size < 2 or not np.isfinite(axis).all():
        raise FidkitError(
            f"{name} must hold at least 2 values, all finite; got {shown(axis)} {unit}"
        )
    axis = np.asarray(axis, dtype=float)
    spacing = float((axis[-1] - axis[0]) / (axis.size - 1))
    if spacing <= 0:
        raise FidkitError(f"{name} must ascend evenly; got {axis[0]:g} to {axis[-1]:g} {unit}")
    # rounding of large coordinates is allowed for: a few units in the last place
    rounding = 4 * np.finfo(float).eps * float(np.abs(axis[[0, -1]]).max())
    if rounding > EVEN_SPACING * spacing:
        raise FidkitError(
            f"{name} must keep its spacing of {spacing:g} {unit} in double precision; got values of "
            f"{axis[-1]:g} {unit}; count from the pulse instead of from a date"
        )
    off = np.abs(np.diff(axis) - spacing)
    worst = int(np.argmax(off))
    if off[worst] > EVEN_SPACING * spacing + rounding:
        raise FidkitError(
            f"{name} must be evenly spaced; the step from point {worst} to {worst + 1} is "
            f"{axis[worst + 1] - axis[worst]:.6g} {unit}, the mean {spacing:.6g} {unit}; "
            "resample the record first"
        )
    return spacing


def dwell_time(fid: xr.DataArray) -> float:
    """Time between points, s, from the axis."""
    axis = fid["time"].values
    return float((axis[-1] - axis[0]) / (axis.size - 1))


def time_start(fid: xr.DataArray) -> float:
    """Time of the first point since the middle of the pulse, s, from the axis."""
    return float(fid["time"].values[0])


def spectral_width(spectrum: xr.DataArray) -> float:
    """Points times spacing of the frequency axis, Hz: one over the dwell time."""
    axis = spectrum["frequency"].values
    return float((axis[-1] - axis[0]) / (axis.size - 1) * axis.size)


def points_before(fid: xr.DataArray, time: float) -> int:
    """How many points of an FID come before a time, s; rounding does not count."""
    return int(np.searchsorted(fid["time"].values, time - 0.01 * dwell_time(fid)))


def acquired_points(signal: xr.DataArray) -> int:
    """How many points were measured: all, or fewer where zeros were filled in."""
    return int(signal.attrs.get("acquired_points", signal.shape[-1]))


def points_in(axis: xr.DataArray, low: float, high: float, what: str) -> slice:
    """The slice of an ascending axis within [low, high], or `FidkitError` if it holds no point."""
    values = axis.values
    chosen = slice(
        int(np.searchsorted(values, low, "left")), int(np.searchsorted(values, high, "right"))
    )
    if chosen.stop <= chosen.start:
        unit = axis.attrs.get("units", "")
        raise FidkitError(
            f"{what} must hold at least one point of the {axis.name} axis "
            f"[{values[0]:g}, {values[-1]:g}] {unit}; got ({low:g}, {high:g})"
        )
    return chosen


def require_complex(signal: xr.DataArray, where: str) -> None:
    """Raise `FidkitError` for a real-valued signal where a complex one is needed."""
    if not np.iscomplexobj(signal.data):
        remedy = (
            "apply make_analytic first"
            if is_fid(signal)
            else "its imaginary part was not kept; start from the FID"
        )
        raise FidkitError(f"{where}: needs a complex signal; got real values; {remedy}")


def add_note(signal: xr.DataArray, note: str) -> None:
    """Add a line to the notes of a signal that was just made (in place)."""
    before = signal.attrs.get("notes", "")
    signal.attrs["notes"] = f"{before}\n{note}" if before else note


def _leading_coords(dims: Sequence[str], coords: Mapping[str, Any] | None) -> dict[str, Any]:
    """Those coordinates that do not run along the signal axis."""
    kept = {}
    for name, value in (coords or {}).items():
        along = getattr(value, "dims", (name,))
        if "time" not in along and "frequency" not in along and name not in ("time", "frequency"):
            kept[str(name)] = value
    return kept


def _checked_coords(
    coords: Mapping[str, Any] | None, shape: tuple[int, ...], dims: Sequence[str]
) -> Mapping[str, Any]:
    """Coordinates as given, if they fit the leading dimensions."""
    if coords is None:
        return {}
    taken = {"time", "frequency", "shift"}
    if not isinstance(coords, Mapping) or taken & {str(name) for name in coords}:
        raise FidkitError(
            f"coords must name coordinates of the leading dimensions {tuple(dims)}; got "
            f"{shown(coords)}; the signal axis follows from the other arguments"
        )
    try:
        xr.DataArray(np.zeros(shape), dims=tuple(dims), coords=coords)
    except (ValueError, TypeError) as error:
        raise FidkitError(
            f"coords must fit the leading dimensions {dict(zip(dims, shape, strict=True))}; "
            f"{shown(str(error))}"
        ) from None
    return coords


def _values(data: npt.ArrayLike, name: str) -> npt.NDArray[Any]:
    if np.ma.isMaskedArray(data) and np.ma.getmaskarray(data).any():
        raise FidkitError(
            f"{name} must have no masked values; got {int(np.ma.getmaskarray(data).sum())}; "
            "cut them out or fill them"
        )
    try:
        # a copy: an acquisition may use its buffer again
        values = np.array(data)
    except (ValueError, TypeError) as error:
        raise FidkitError(f"{name} must be an array of numbers; {shown(str(error))}") from None
    values = values.astype(values.dtype.newbyteorder("="), copy=False)
    if values.dtype.kind not in "iufc":
        raise FidkitError(f"{name} must be an array of numbers; got {values.dtype}")
    if values.dtype.kind in "iu" or values.dtype == np.float16:
        values = values.astype(np.float64)
    elif values.dtype not in (np.float32, np.float64, np.complex64, np.complex128):
        values = values.astype(np.complex128 if values.dtype.kind == "c" else np.float64)
    if values.ndim == 0 or values.size == 0:
        raise FidkitError(f"{name} must hold at least one record; got shape {values.shape}")
    bad = ~np.isfinite(values)
    if bad.any():
        first = tuple(int(index[0]) for index in np.nonzero(bad))
        raise FidkitError(
            f"{name} must be finite; {int(bad.sum())} of {values.size} values are not, the first "
            f"at index {first if len(first) > 1 else first[0]}; cut them out or repair the record"
        )
    return values


def _number(value: Any, name: str, unit: str, *, positive: bool = False) -> float:
    allowed = f"a {'positive ' if positive else ''}number of {unit}"
    if isinstance(value, bool | np.bool_):
        raise FidkitError(f"{name} must be {allowed}; got {value!r}")
    try:
        number = float(value)
    except (TypeError, ValueError, OverflowError):
        raise FidkitError(
            f"{name} must be {allowed}; got {shown(value)}; please give {name}"
        ) from None
    if not np.isfinite(number) or (positive and number <= 0):
        raise FidkitError(f"{name} must be {allowed}; got {shown(value)}")
    return number


def _leading(ndim: int, dims: Sequence[str] | None, last: str) -> tuple[str, ...]:
    if dims is None:
        if ndim not in LEADING:
            raise FidkitError(f"dims must name the {ndim - 1} leading dimensions; got none")
        return LEADING[ndim]
    if isinstance(dims, str):
        dims = (dims,)
    if not isinstance(dims, Iterable):
        raise FidkitError(f"dims must be a list of names; got {shown(dims)}")
    names = tuple(str(name) for name in dims)
    if names and names[-1] == last:
        names = names[:-1]
    if (
        len(names) != ndim - 1
        or len(set(names)) != len(names)
        or {"time", "frequency", "shift"} & set(names)
    ):
        raise FidkitError(
            f"dims must name the {ndim - 1} leading dimensions, each once, then {last}; got {dims!r}"
        )
    return names


def _attributes(
    carrier: Any,
    nucleus: str,
    units: str,
    sample: str,
    coil: str,
    source: str,
    more: Mapping[str, Any],
    *,
    long_name: str,
) -> dict[str, Any]:
    reserved = {"history", *SIGNAL_ATTRIBUTES} & set(more)
    if reserved:
        raise FidkitError(f"{', '.join(sorted(reserved))}: written by fidkit itself; leave it out")
    return {
        "units": str(units),
        "long_name": long_name,
        "carrier_frequency": _number(carrier, "carrier_frequency", "Hz", positive=True),
        "nucleus": find_nucleus(nucleus).name,
        "sample": str(sample),
        "coil": str(coil),
        "source": str(source),
        **more,
        "history": "",
    }
