"""What a reader hands over, before the caller's arguments and `fidkit.signals` make it a signal."""

from __future__ import annotations

import json
import re
from collections.abc import Mapping
from dataclasses import dataclass, field
from decimal import Decimal, InvalidOperation
from numbers import Integral, Real
from typing import Any

import numpy as np
import numpy.typing as npt
import xarray as xr

from fidkit import signals
from fidkit.nuclei import find_nucleus
from fidkit.params import FidkitError, shown

__all__ = [
    "FREQUENCY_UNITS",
    "SPREADSHEET",
    "TIME_UNITS",
    "Record",
    "check_facts",
    "exact_spacing",
    "further_attributes",
    "mapping",
    "plain_value",
    "printed_unit",
    "real_number",
    "require_finite",
    "rounding_note",
    "text_of",
    "writable",
]

#: Seconds and hertz by what files call their units, in small letters; both letters mu.
TIME_UNITS = {
    **dict.fromkeys(("s", "sec", "second", "seconds"), 1.0),
    **dict.fromkeys(("ms", "msec", "milliseconds"), 1e-3),
    **dict.fromkeys(("us", "\N{MICRO SIGN}s", "\N{GREEK SMALL LETTER MU}s", "usec", "microseconds"), 1e-6),
    **dict.fromkeys(("ns", "nanoseconds"), 1e-9),
}  # fmt: skip
FREQUENCY_UNITS = {"hz": 1.0, "hertz": 1.0, "khz": 1e3, "mhz": 1e6}

#: What is said of such a file.
SPREADSHEET = "is a spreadsheet or office document; save the table as .csv"

#: A spacing known better than this, of itself, needs no note: the offset of a line 100 Hz from the
#: carrier is then known to 1 mHz.
KNOWN_WELL = 1e-5

#: Facts of a record that are attributes of the signal too.
FIELDS = ("carrier_frequency", "nucleus", "units", "sample", "coil")
#: Names that every format can hold; files keep some for themselves.
NAME = re.compile(r"[^\W_]([\w .-]*[\w-])?")
RESERVED_VARIABLES = ("signal", "signal_real", "signal_imaginary")
RESERVED_ATTRIBUTES = ("fidkit_layout", "CLASS", "NAME", "DIMENSION_LIST", "DIMENSION_LABELS", "REFERENCE_LIST")  # fmt: skip


@dataclass
class Record:
    """Values and facts as a file states them; None where it is silent."""

    values: npt.NDArray[Any]
    frequency: npt.NDArray[np.float64] | None = None
    """Axis in Hz where the record is a spectrum."""
    frequency_in_ppm: bool = False
    """That axis is in ppm of the carrier instead."""
    dwell_time: float | None = None
    time_start: float | None = None
    carrier_frequency: float | None = None
    nucleus: str | None = None
    units: str | None = None
    sample: str | None = None
    coil: str | None = None
    dims: tuple[str, ...] | None = None
    coords: dict[str, Any] = field(default_factory=dict)
    more: dict[str, Any] = field(default_factory=dict)
    notes: list[str] = field(default_factory=list)

    def keep(self, attributes: Mapping[str, Any]) -> None:
        """Take over attributes of a signal; what is none is left out with a note."""
        for name, value in attributes.items():
            if not isinstance(value, str | int | float):
                self.notes.append(
                    f"attribute {name} ({shown(value)}) is neither text nor a number and left out"
                )
            elif name not in FIELDS:
                self.more[name] = value
            elif getattr(self, name) is None:
                setattr(self, name, value)
            elif getattr(self, name) != value:
                self.notes.append(f"{name} is stated twice; {getattr(self, name)!r} counts")


def printed_unit(text: str, *, trimmed: bool = False) -> float:
    """One unit in the last printed place of a number: ``1.25`` gives 0.01.

    With `trimmed`, zeros at the end of the fraction do not count: ``-422.0000`` gives 1.
    """
    if not trimmed and "e" not in text and "E" not in text:
        return 10.0 ** -len(text.strip().partition(".")[2])
    try:
        number = Decimal(text.strip())
    except InvalidOperation:
        return float("nan")
    exponent: int | str = number.as_tuple().exponent
    if not isinstance(exponent, int):
        return float("nan")
    if trimmed and exponent < 0:
        normal = number.normalize().as_tuple().exponent
        exponent = min(normal, 0) if isinstance(normal, int) else exponent
    return 10.0**exponent if abs(exponent) < 300 else float("nan")


def real_number(text: str, what: str) -> float:
    """A finite number from text, or `FidkitError`."""
    try:
        value = float(text.strip().replace("_", "?"))  # Python's 1_000 is no number in a file
    except ValueError:
        hint = "; write a decimal point, not a comma" if "," in text else ""
        raise FidkitError(f"{what} must be a number; got {text.strip()[:40]!r}{hint}") from None
    if not np.isfinite(value):
        raise FidkitError(f"{what} must be a finite number; got {text.strip()[:40]!r}")
    return value


def rounding_note(name: str, known: float, source: str) -> list[str]:
    """The note that a spacing is known to `known` of itself only, where it matters."""
    if not known > KNOWN_WELL:
        return []
    return [f"the {name} is known to {100 * known:.2g} % only, from the digits of {source}"]


def exact_spacing(axis: npt.NDArray[np.float64]) -> float:
    """The spacing with which ``axis[0] + spacing * arange`` gives back the axis, to the last bit
    where there is such a number near at hand."""
    mean = float((axis[-1] - axis[0]) / (axis.size - 1))
    index = np.arange(axis.size)
    near = [
        mean,
        float(axis[1] - axis[0]),
        *(float(f"{mean:.{digits}g}") for digits in range(3, 17)),
    ]
    near += [float(np.nextafter(mean, side)) for side in (-np.inf, np.inf)]
    return next((step for step in near if np.array_equal(axis[0] + step * index, axis)), mean)


def text_of(raw: bytes) -> str:
    """Text from UTF-8, or else from Latin-1."""
    try:
        return raw.decode("utf-8-sig")
    except UnicodeDecodeError:
        return raw.decode("latin-1")


def mapping(text: Any, name: str) -> dict[str, Any]:
    """A mapping from JSON, or `FidkitError`."""
    try:
        found = json.loads(text)
    except (ValueError, TypeError, RecursionError):
        found = None
    if not isinstance(found, dict):
        raise FidkitError(f"{name} must be JSON, a mapping of names")
    return found


def plain_value(value: Any) -> Any:
    """Python's own number for one of numpy's."""
    return value.item() if isinstance(value, np.generic) else value


def further_attributes(attributes: Mapping[Any, Any], stated: Mapping[str, Any]) -> dict[str, Any]:
    """Those attributes that a file does not state as they are, as plain values."""
    further = {}
    for name, value in attributes.items():
        plain = plain_value(value)
        same = name in stated and type(stated[name]) is type(plain) and stated[name] == plain
        if name != "source" and not same:
            further[name] = plain
    return further


def require_finite(values: npt.NDArray[Any]) -> None:
    """Raise `FidkitError` for values that no reader would take back."""
    bad = int(np.count_nonzero(~np.isfinite(values)))
    if bad:
        raise FidkitError(
            f"the values must be finite in this format; {bad} of {values.size} are not; cut them "
            "out, or write .nc or .zarr, which keep them"
        )


def check_facts(attributes: Mapping[Any, Any], points: int) -> None:
    """Raise `FidkitError` for attributes that steps rely on, where they cannot be what they say."""

    def number(value: Any) -> bool:
        real = isinstance(value, Real) and not isinstance(value, bool)
        return real and bool(abs(value) < 1e300)  # whole numbers may be too long for a float

    def points_here(value: Any) -> bool:
        return number(value) and isinstance(value, Integral) and 0 < int(value) <= points

    for name, allowed, holds in (
        ("acquired_points", f"a whole number in [1, {points}], the points here", points_here),
        (
            "filter_delay",
            "a number of points, 0 or more",
            lambda value: number(value) and bool(value >= 0),
        ),
        ("time_start", "a number of s", number),
        ("first_point", "full or half", lambda value: value in ("full", "half")),
    ):
        if name in attributes and not holds(attributes[name]):
            raise FidkitError(
                f"{name} must be {allowed}; got {shown(attributes[name])}; correct or remove it"
            )


def writable(signal: xr.DataArray) -> xr.DataArray:
    """The signal as every format can hold it, in the machine's byte order.

    Raises
    ------
    FidkitError
        For anything that would be lost, or would not read back: one rule for all formats.
    """
    signals.check_signal(signal, "write")
    native = signal.dtype.newbyteorder("=")
    if native not in (np.float32, np.float64, np.complex64, np.complex128):
        raise FidkitError(
            f"the values must be float32, float64, complex64 or complex128; got {signal.dtype}; "
            "convert them with .astype"
        )
    find_nucleus(signal.attrs.get("nucleus", ""))
    if signals.is_fid(signal) and "time_start" in signal.attrs:
        raise FidkitError("attribute time_start is for spectra; the time axis of an FID says it")
    check_facts(signal.attrs, signal.shape[-1])
    _check_attributes(signal.attrs, "attribute")
    changed = {}
    for name in dict.fromkeys((*signal.dims, *signal.coords)):
        _check_name(name, "dimension or coordinate", RESERVED_VARIABLES)
        if name not in signal.coords:
            continue
        coordinate = signal.coords[name]
        _check_attributes(coordinate.attrs, f"{name} attribute")
        values = coordinate.values
        if values.dtype.kind == "O" and all(isinstance(text, str) for text in values.flat):
            values = values.astype(str)
        if values.dtype.kind not in "biufUmM" or values.dtype.str[1:] in ("f16", "f12"):
            raise FidkitError(
                f"coordinate {name} must be numbers, text or times; got {values.dtype}"
            )
        if values.dtype.kind == "U":
            for text in values.flat:
                _check_text(str(text), f"coordinate {name}")
        if values.dtype != coordinate.dtype or not values.dtype.isnative:
            plain = values.astype(values.dtype.newbyteorder("="))
            changed[name] = (coordinate.dims, plain, coordinate.attrs)
    signal = signal.assign_coords(changed) if changed else signal
    return signal if signal.dtype.isnative else signal.astype(native)


def _check_attributes(attributes: Mapping[Any, Any], what: str) -> None:
    for name, value in attributes.items():
        _check_name(name, what, RESERVED_ATTRIBUTES)
        if isinstance(value, str):
            _check_text(value, f"{what} {name}")
        elif not isinstance(value, int | float | np.bool_ | np.integer | np.floating) or isinstance(
            value, np.longdouble
        ):
            raise FidkitError(
                f"{what} {name} must be text or a number to be written; got {shown(value)}"
            )
        elif isinstance(value, Integral) and not -(2**63) <= int(value) < 2**63:
            raise FidkitError(f"{what} {name} must fit into 64 bits; got {shown(value)}")


def _check_name(name: Any, what: str, reserved: tuple[str, ...]) -> None:
    if name in reserved:
        raise FidkitError(f"{what} {name}: files keep this name for themselves; rename it")
    if not isinstance(name, str) or not NAME.fullmatch(name):
        raise FidkitError(
            f"{what} names must be letters, digits, blanks and _ . - after a letter or digit; "
            f"got {shown(name)}; rename it"
        )
    _check_text(name, what)


def _check_text(text: str, what: str) -> None:
    if "\0" in text or (not text.isascii() and text != text.encode("utf-8", "replace").decode()):
        raise FidkitError(
            f"{what} must be text without NUL and without halves of characters; got {shown(text)}"
        )
