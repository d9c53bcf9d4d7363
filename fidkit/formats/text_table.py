"""Text tables: ``# key: value`` lines, a line that names the columns with their unit, then numbers.

::

    # carrier_frequency_hz: 63.87e6
    # nucleus: 1H
    # sample: water phantom
    time_s,real,imag
    0.0001,0.52,-0.11
    0.0002,0.49,-0.08

Instead of a time column the line ``# dwell_time_s: ...`` will do. A spectrum has ``frequency_hz``.
The line of the columns may be a comment too. Attributes that such a line cannot say stand as JSON in
``# attributes: {...}``.
"""

from __future__ import annotations

import contextlib
import json
import re
from pathlib import Path
from typing import Any

import numpy as np
import numpy.typing as npt
import xarray as xr

from fidkit import signals
from fidkit.files import write_whole
from fidkit.formats.record import (
    FREQUENCY_UNITS,
    TIME_UNITS,
    Record,
    exact_spacing,
    further_attributes,
    mapping,
    printed_unit,
    real_number,
    require_finite,
    rounding_note,
    text_of,
)
from fidkit.params import FidkitError

__all__ = ["looks_like", "read", "write"]

UNITS = TIME_UNITS | FREQUENCY_UNITS
OF_TIME, OF_FREQUENCY = "|".join(TIME_UNITS), "|".join(FREQUENCY_UNITS)
AXIS = re.compile(rf"(time)_({OF_TIME})|(frequency)_({OF_FREQUENCY})")
VALUES = re.compile(r"(real|imag|imaginary|signal)(?:_(\w+))?")
#: Keys that are numbers with a unit in their name.
MEASURED = re.compile(rf"(carrier_frequency)_({OF_FREQUENCY})|(dwell_time|time_start)_({OF_TIME})")
TEXTS = ("nucleus", "sample", "coil", "units")
#: What must not be stated twice.
FACTS = (*TEXTS, *signals.SIGNAL_ATTRIBUTES, "carrier_frequency", "dwell_time", "filter_delay")
BARE = ("carrier_frequency", "dwell_time", "time_start")
COLUMNS = "such as time_s,real,imag or time_us,signal or frequency_hz,real"


def looks_like(text: str) -> bool:
    """Whether the first line that is no comment, or a comment before it, names known columns."""
    for line in text.splitlines():
        plain = line.strip()
        if plain.startswith("#"):
            if _named_by(plain):
                return True
        elif plain:
            names = [_name(part) for part in re.split(_delimiter(plain), plain)]
            return any(AXIS.fullmatch(name) or VALUES.fullmatch(name) for name in names)
    return False


def _named_by(comment: str) -> list[str]:
    """The columns that a comment lists, where every one of them is known; else none."""
    plain = comment.lstrip("# \t").strip()
    names = re.split(_delimiter(plain), plain)
    known = all(AXIS.fullmatch(_name(name)) or VALUES.fullmatch(_name(name)) for name in names)
    return names if known else []


def _name(text: str) -> str:
    """``Time [s]`` and ``time_s`` are the same."""
    return re.sub(r"[\W_]+", "_", text.strip().strip('"').lower()).strip("_")


def _delimiter(line: str) -> str:
    for mark in (";", "\t", ","):
        if mark in line:
            return mark
    return r"\s+"


def read(path: Path) -> Record:
    """Read a text table.

    Parameters
    ----------
    path : pathlib.Path
        The file.

    Returns
    -------
    Record
        Values and facts; the printed rounding of a time column has been allowed for.

    Raises
    ------
    FidkitError
        If a number, column or row is wrong; the line is named.
    """
    lines = re.split(r"\r\n|\n|\r", text_of(path.read_bytes()))
    record = Record(np.empty(0))
    printed: dict[str, float] = {}  # one unit in the last place of the keys
    header: list[str] | None = None
    listed: list[str] = []  # columns that a comment names
    stated: dict[str, tuple[int, str]] = {}
    delimiter = ","
    rows: list[list[str]] = []
    numbers: list[int] = []
    for number, line in enumerate(lines, 1):
        plain = line.strip()
        if not plain:
            continue
        if plain.startswith("#"):
            _key(plain.lstrip("# \t"), number, record, printed, stated)
            listed = _named_by(plain) or listed
            continue
        if header is None:
            delimiter = _delimiter(plain)
            header = [_unquoted(part) for part in re.split(delimiter, plain)]
            if listed and re.match(r"[+-]?\.?\d", header[0]):
                header, cells = listed, header
            else:
                cells = []
            columns = _columns(header, number)
        else:
            cells = [_unquoted(cell) for cell in re.split(delimiter, plain)]
        if cells:
            if len(cells) != len(header):
                if len(cells) < len(header):
                    missing = ", ".join(header[len(cells) :])
                    remedy = f"nothing stands for {missing}; complete the line"
                elif "," in plain:
                    remedy = "write decimal points, not commas, or remove what is too much"
                else:
                    remedy = "remove what is too much"
                raise FidkitError(
                    f"line {number}: has {len(cells)} columns where the table names "
                    f"{len(header)} ({', '.join(header)}); {remedy}"
                )
            rows.append(cells)
            numbers.append(number)
    if header is None:
        raise FidkitError(f"holds no table; a line must name the columns, {COLUMNS}")
    if len(rows) < 2:
        raise FidkitError(f"the table must have at least 2 rows; got {len(rows)}")
    single = record.values.dtype == np.float32
    texts = list(zip(*rows, strict=True))

    def column(name: str) -> npt.NDArray[np.float64]:
        place = columns[name][0]
        return np.array(
            [
                real_number(text, f"line {number}: {header[place]}")
                for text, number in zip(texts[place], numbers, strict=True)
            ]
        )

    if "signal" in columns:
        record.values = column("signal")
    elif "imag" in columns:
        record.values = np.empty(len(rows), dtype=np.complex128)  # so that -0.0 stays what it is
        record.values.real, record.values.imag = column("real"), column("imag")
    else:
        record.values = column("real")
    if single:
        wanted = np.complex64 if np.iscomplexobj(record.values) else np.float32
        record.values = record.values.astype(wanted)
    value_units = {
        unit for name, (_, unit) in columns.items() if name in ("real", "imag", "signal")
    }
    if len(value_units) > 1:
        raise FidkitError(f"real and imag must have one unit; got {', '.join(sorted(value_units))}")
    if value_units != {""}:
        record.units = value_units.pop()
    for name in ("time", "frequency"):
        if name in columns:
            place, unit = columns[name]
            _axis(record, name, column(name), texts[place], UNITS[unit], numbers, printed)
    if record.frequency is not None and record.time_start is not None:
        record.more["time_start"], record.time_start = record.time_start, None
    return record


def _unquoted(cell: str) -> str:
    cell = cell.strip()
    return cell[1:-1] if len(cell) > 1 and cell[0] == cell[-1] == '"' else cell


def _key(
    text: str,
    number: int,
    record: Record,
    printed: dict[str, float],
    stated: dict[str, tuple[int, str]],
) -> None:
    """Take a line ``key: value`` into the record; `stated` holds those before it."""
    key, colon, value = text.partition(":")
    if not colon:
        return
    name, value = _name(key), value.strip()
    measured = MEASURED.fullmatch(name)
    fact = next(filter(None, measured.groups())) if measured else name
    before, other = stated.setdefault(fact, (number, value))
    if before != number:
        if fact in FACTS and value != other:
            raise FidkitError(
                f"line {number}: states {fact} again, otherwise than line {before}; remove one of them"
            )
        if value != other:
            record.notes.append(f"line {before} says what {fact} is; line {number} does not count")
        return
    if measured:
        target, unit = (part for part in measured.groups() if part)
        scale = UNITS[unit]
        found = real_number(value, f"line {number}: {name}")
        setattr(record, target, found * scale)
        printed[target] = printed_unit(value) * scale
    elif name in BARE:
        unit = "hz" if name == "carrier_frequency" else "s"
        raise FidkitError(
            f"line {number}: {name} must carry its unit in its name, such as {name}_{unit}; got {name}"
        )
    elif name in TEXTS:
        # an empty one says nothing
        setattr(record, name, str(_plain(value)) or None)
    elif (name, value) == ("precision", "single"):
        record.values = np.empty(0, dtype=np.float32)
    elif name == "attributes" and value.startswith("{"):
        record.keep(mapping(value, f"line {number}: attributes"))
    elif name != "source":
        record.more[name] = _plain(value)


def _plain(value: str) -> Any:
    """A number where the text is one, text in quotes as JSON has it, or the text itself."""
    if value.startswith('"'):
        try:
            return json.loads(value)
        except (ValueError, RecursionError):
            return value
    if re.fullmatch(r"[+-]?\d{1,18}", value):
        return int(value)
    try:
        number = float(value)
    except ValueError:
        return value
    return number if np.isfinite(number) else value


def _columns(header: list[str], number: int) -> dict[str, tuple[int, str]]:
    """Place and unit by name: time, frequency, real, imag, signal."""
    found: dict[str, tuple[int, str]] = {}
    for place, text in enumerate(header):
        name = _name(text)
        axis, values = AXIS.fullmatch(name), VALUES.fullmatch(name)
        if axis:
            key, unit = (part for part in axis.groups() if part)
        elif values:
            key = {"imaginary": "imag"}.get(values[1], values[1])
            # the unit as it was written: mV is not MV
            unit = re.sub(r"[\W_]+", "_", text.strip()).strip("_")[len(values[1]) + 1 :]
        else:
            raise FidkitError(
                f"line {number}: must name the columns, {COLUMNS}; got {text.strip()[:40]!r}"
            )
        if key in found:
            raise FidkitError(f"line {number}: names {key} twice")
        found[key] = (place, unit)
    if ("signal" in found) == ("real" in found) or ("imag" in found and "real" not in found):
        raise FidkitError(f"line {number}: must name real (and imag), or signal; {COLUMNS}")
    if "time" in found and "frequency" in found:
        raise FidkitError(f"line {number}: must name time or frequency, not both")
    return found


def _axis(
    record: Record,
    name: str,
    axis: npt.NDArray[np.float64],
    texts: tuple[str, ...],
    scale: float,
    numbers: list[int],
    printed: dict[str, float],
) -> None:
    """Check that an axis is even as far as its digits go, and put it into the record."""
    span = float(axis[-1] - axis[0])
    if not span or (name == "time" and span < 0):
        raise FidkitError(
            f"{name} must ascend evenly; it runs from {texts[0]} to {texts[-1]} in the table"
        )
    # what one printed digit is worth, row by row: either decimals or digits are the same in all
    places = np.array([printed_unit(text) for text in texts])
    digits = max(len(re.sub(r"^[+-]?0*\.?0*|[eE].*$|\.", "", text.strip())) for text in texts)
    with np.errstate(divide="ignore"):
        leading = np.floor(np.log10(np.abs(axis)))
    unit = np.maximum(np.nanmin(places), 10.0 ** (leading + 1 - digits))
    end = max(unit[0], unit[-1])
    rounding = 8 * np.finfo(float).eps * float(np.abs(axis[[0, -1]]).max())
    step = span / (axis.size - 1)
    line = axis[0] + step * np.arange(axis.size)
    # half a unit of the row and, by way of the line, half a unit of the ends
    wrong = np.abs(axis - line) > 0.51 * (unit + end) + rounding
    if wrong.any():
        steps = np.diff(axis)
        worst = int(np.argmax(np.abs(steps - np.median(steps))))
        raise FidkitError(
            f"{name} must be evenly spaced; line {numbers[worst + 1]} steps by {steps[worst]:.6g} where "
            f"{np.median(steps):.6g} is usual; rows are missing or the record must be resampled first"
        )
    if name == "frequency":
        exact = np.abs(np.diff(axis) - step).max() <= signals.EVEN_SPACING * abs(step)
        record.frequency = (axis if exact else line) * scale
        return
    start, stated = record.time_start, record.dwell_time
    known = (0.51 * (unit[0] + unit[-1]) + rounding) / (axis.size - 1)
    loose = 0.51 * printed.get("dwell_time", 0.0) / scale
    if stated is not None and abs(stated / scale - step) > known + loose:
        raise FidkitError(
            f"the time column steps by {step * scale:.8g} s, but dwell_time_s says {stated:.8g} s; "
            "correct one of them"
        )
    if stated is None or loose > known:
        record.dwell_time = exact_spacing(axis) * scale
        record.notes += rounding_note("dwell time", known / step, "the time column")
    if start is None:
        record.time_start = float(axis[0]) * scale
    elif abs(start - axis[0] * scale) > 0.51 * unit[0] * scale + printed["time_start"]:
        raise FidkitError(
            f"line {numbers[0]}: time begins at {texts[0].strip()}, but time_start_s says "
            f"{start:g} s; correct one of them"
        )


def write(signal: xr.DataArray, path: Path) -> None:
    """Write one record as a comma-separated table; every number reads back as it was.

    Parameters
    ----------
    signal : xarray.DataArray, shape (points,)
        FID or spectrum.
    path : pathlib.Path
        File to write.

    Raises
    ------
    FidkitError
        For more than one record, or values that are not finite.
    """
    if signal.ndim != 1:
        raise FidkitError(
            f"a text table holds one record; got dimensions {signal.dims}; choose one with .isel, "
            "or write .nc or .zarr"
        )
    values = np.asarray(signal.values)
    require_finite(values)
    axis = np.asarray(signal[signal.dims[-1]].values, dtype=float)
    is_fid = signals.is_fid(signal)
    attributes = signal.attrs | {"carrier_frequency": float(signal.attrs["carrier_frequency"])}
    said = {
        "long_name": "signal" if is_fid else "spectrum",
        "history": "",
        "sample": "",
        "coil": "",
    }
    head = []
    for key, plain in further_attributes(attributes, said).items():
        unit = {"carrier_frequency": "_hz", "time_start": "_s"}.get(key, "")
        line, trial = f"{key}{unit}: {_written(plain)}", Record(np.empty(0))
        with contextlib.suppress(FidkitError):
            _key(line, 1, trial, {}, {})
        read = trial.more | {name: getattr(trial, name) for name in (*TEXTS, *BARE)}
        if not further_attributes({key: plain}, read):
            head.append(f"# {line}")
            said[key] = plain
    # whatever such a line would not give back
    further = further_attributes(attributes, said)
    if further:
        head.append(f"# attributes: {json.dumps(further)}")
    if values.dtype in (np.complex64, np.float32):
        head.append("# precision: single")
    if is_fid:
        # all digits, so that the reader sees how exact it is
        head.append(f"# dwell_time_s: {exact_spacing(axis):.16e}")
        head.append(f"# time_start_s: {float(axis[0])!r}")
    names = ["time_s" if is_fid else "frequency_hz", "real"]
    columns = [axis.tolist(), _texts(values.real)]
    if np.iscomplexobj(values):
        names.append("imag")
        columns.append(_texts(values.imag))
    rows = (",".join([repr(x), *y]) for x, *y in zip(*columns, strict=True))
    write_whole(path, ("\n".join([*head, ",".join(names), *rows]) + "\n").encode())


def _texts(values: npt.NDArray[Any]) -> list[str]:
    """The shortest text of every number that reads back as the same number."""
    return [str(value) for value in values]


def _written(value: object) -> str:
    if isinstance(value, str):
        plain = value.strip() == value and value.isprintable() and not value.startswith('"')
        return value if plain and _plain(value) == value else json.dumps(value, ensure_ascii=False)
    return repr(value)
