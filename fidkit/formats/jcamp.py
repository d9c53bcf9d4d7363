"""JCAMP-DX 4.24, 5.x and 6.0: FIDs and spectra, as NTUPLES and as XYDATA.

Labels and their meaning: McDonald and Wilks, Appl. Spectrosc. 42, 151 (1988); for magnetic
resonance Davies and Lampen, Appl. Spectrosc. 47, 1093 (1993).

The format offers many checks (Y and X of every line, counts, first, last, smallest and largest
value), and all of them are kept: a file that fails one is refused, with the line that is at fault.
"""

from __future__ import annotations

import contextlib
import json
import math
import re
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import numpy as np
import numpy.typing as npt
import scipy.fft
import xarray as xr

from fidkit import signals
from fidkit.files import write_whole
from fidkit.formats import asdf
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

#: Attributes by label, the first one found.
TEXTS = {
    "sample": ("SAMPLEDESCRIPTION", "NAMES"),
    "coil": ("$COIL",),
    "title": ("TITLE",),
    "spectrometer": ("SPECTROMETER/DATASYSTEM", "SPECTROMETERDATASYSTEM"),
    "pulse_sequence": (".PULSESEQUENCE",),
    "solvent": (".SOLVENTNAME",),
    "shift_reference": (".SHIFTREFERENCE",),
    "processing": ("DATAPROCESSING",),
}


#: What `write` adds, since no label of the standard says it: with it nothing need be assumed.
SIGN_LABEL = "$FREQUENCY SIGN"
SIGN_TEXT = "COUNTED FROM THE CARRIER, POSITIVE IS FASTER"
#: Attributes that the labels cannot say, as JSON.
FURTHER_LABEL = "$ATTRIBUTES"


@dataclass
class Entry:
    """One labelled record: its value, the line it begins at, and the lines that follow it."""

    label: str
    line: int
    value: str
    body: list[tuple[int, str]] = field(default_factory=list)

    @property
    def text(self) -> str:
        return "\n".join([self.value, *(text for _, text in self.body)]).strip()


@dataclass
class Block:
    """From ##TITLE to ##END."""

    entries: list[Entry] = field(default_factory=list)
    ended: bool = False

    def find(self, *labels: str) -> Entry | None:
        for label in labels:
            for entry in self.entries:
                if entry.label == label:
                    return entry
        return None

    def text(self, *labels: str) -> str:
        entry = self.find(*labels)
        return entry.text if entry else ""

    @property
    def kind(self) -> str:
        return " ".join(self.text("DATATYPE").upper().split())

    @property
    def states_sign(self) -> bool:
        return self.text(SIGN_LABEL.replace(" ", "")) == SIGN_TEXT


@dataclass
class Column:
    """What the header says of one variable; texts as printed, with their lines."""

    symbol: str
    stated: dict[str, tuple[str, int]]
    unit: str

    def number(self, what: str) -> float | None:
        text, line = self.stated.get(what, ("", 0))
        return real_number(text, f"line {line}: {what}") if text else None

    def rounding(self, what: str) -> float:
        """One unit in the last printed place of a position on the axis, or of a factor."""
        text = self.stated[what][0]
        if float(text) == 0:  # where counting begins, however it is printed
            return 0.0
        if re.fullmatch(r"[+-]?\d+", text):  # printed short: zeros of the fraction were dropped
            return abs(float(text)) * 1e-6
        return printed_unit(text)

    @property
    def points(self) -> int | None:
        number = self.number("points")
        if number is None:
            return None
        if number != int(number) or not 1 <= number <= asdf.MOST_POINTS:
            text, line = self.stated["points"]
            raise FidkitError(
                f"line {line}: the number of points must be a whole number from 1 to "
                f"{asdf.MOST_POINTS}; got {text}"
            )
        return int(number)


def looks_like(text: str) -> bool:
    """Whether a text begins as a JCAMP-DX file does: with a label, after blanks and comments."""
    for line in re.split(r"[\r\n]+", text):
        plain = line.strip()
        if plain and not plain.startswith("$$"):
            return plain.startswith("##")
    return False


def read(path: Path, *, block: int | None = None) -> Record:
    """Read one block of a JCAMP-DX file.

    Parameters
    ----------
    path : pathlib.Path
        The file.
    block : int, optional
        Which of the blocks that hold magnetic resonance data, counted from 1. Where it is not
        given the first is read and the others are noted.

    Returns
    -------
    Record
        Values and facts.

    Raises
    ------
    FidkitError
        If the file holds no such data, or fails one of the format's checks.
    """
    chosen, notes = _choose(_blocks(text_of(path.read_bytes())), block)
    notes += _repeated(chosen)
    x, pages = _ntuples(chosen) if chosen.find("NTUPLES") else _xydata(chosen)
    is_fid = _is_fid(chosen, x, notes)
    parts = {
        symbol: _ordinates(column, table, x, notes) for symbol, (column, table) in pages.items()
    }
    sizes = {symbol: part.size for symbol, part in parts.items()}
    if len(set(sizes.values())) > 1:
        raise FidkitError(f"the pages differ in length: {sizes}; the file is damaged")
    points = next(iter(sizes.values()))
    if x.points not in (None, points):
        raise FidkitError(
            f"line {x.stated['points'][1]}: X is to have {x.points} points, but the tables hold {points}"
        )
    first, step = _axis(x, points, notes, "dwell time" if is_fid else "spacing of the axis")
    record = Record(parts["R"], notes=notes)
    _facts(chosen, record)
    if is_fid:
        _fid(chosen, record, parts, first, step, TIME_UNITS[x.unit.lower()])
    else:
        if "I" in parts:
            record.values = parts["R"] + 1j * parts["I"]
            if not chosen.states_sign:
                notes.append(
                    "the imaginary part is taken as it stands; the file does not state its sign"
                )
        if first is None or step is None:
            raise FidkitError("the X axis is not stated; FIRST and LAST (or FIRSTX, LASTX) must be")
        axis = np.asarray(first + step * np.arange(points), dtype=np.float64)
        record.frequency = axis * FREQUENCY_UNITS.get(x.unit.lower(), 1.0)
        record.frequency_in_ppm = x.unit == "PPM"
        if not chosen.states_sign:
            notes.append(
                f"the {x.unit} axis is counted from the reference of the file, not from the carrier"
            )
    if not chosen.ended:
        raise FidkitError("the file ends without ##END=; it is cut short")
    return record


def _fid(
    block: Block,
    record: Record,
    parts: dict[str, npt.NDArray[np.float64]],
    first: float | None,
    step: float | None,
    second: float,
) -> None:
    """Put the two channels and the time axis together."""
    notes = record.notes
    record.dwell_time = step * second if step is not None else None
    delays, dwell = _delays(block), record.dwell_time
    start = (first or 0.0) * second
    if delays:
        record.time_start = delays[0] * 1e-6
        if start:
            notes.append(f"FIRST ({start:g} s) is not added to the delay of {delays[0]:g} us")
    elif start:
        record.time_start = start
    if "I" in parts:
        lag = 0.0  # of the imaginary part, in points
        mode = " ".join(block.text(".ACQUISITIONMODE").upper().split())
        if len(delays) > 1 and delays[1] != delays[0]:
            if dwell is None or abs(delays[1] - delays[0]) * 1e-6 > dwell:
                raise FidkitError(
                    f".DELAY: the two channels may differ by up to a dwell time; got {delays} us"
                )
            lag = (delays[1] - delays[0]) * 1e-6 / dwell
        elif mode == "SEQUENTIAL":
            lag = 0.5
        elif mode not in ("SIMULTANEOUS", "SEQUENTIAL"):
            notes.append(
                "the file does not say how the two channels were sampled "
                f"(.ACQUISITION MODE {mode or 'is missing'}); taken as simultaneous"
            )
        imaginary = parts["I"]
        if lag:
            imaginary = _earlier(imaginary, lag)
            notes.append(
                f"the imaginary part was sampled {lag:g} of a dwell time after the real part; "
                "it has been moved back to the same instants"
            )
        record.values = parts["R"] + 1j * imaginary
        if not block.states_sign:
            notes.append(
                "the sense of rotation is not stated in a JCAMP-DX file and is taken as it stands; "
                "reverse_frequency turns it round"
            )
    delay = record.more.get("filter_delay", 0)
    if delay and not block.states_sign:
        notes.append(
            f"the file states a digital-filter delay of {delay:g} points, which is still in the "
            "record; remove_filter_delay takes it out"
        )


def _earlier(values: npt.NDArray[np.float64], lag: float) -> npt.NDArray[np.float64]:
    """The band-limited signal `lag` points earlier: the delay theorem."""
    spectrum = scipy.fft.rfft(values)
    spectrum *= np.exp(-2j * np.pi * lag * scipy.fft.rfftfreq(values.size))
    return np.asarray(scipy.fft.irfft(spectrum, values.size), dtype=np.float64)


def _blocks(text: str) -> list[Block]:
    """Cut a file into blocks; a block within a block stands beside it."""
    blocks: list[Block] = []
    stack: list[Block] = []
    entry: Entry | None = None
    for number, line in enumerate(re.split(r"\r\n|\n|\r", text), 1):
        plain = line.split("$$", 1)[0] if "$$" in line else line
        if not plain.lstrip().startswith("##"):
            if entry is not None:
                entry.body.append((number, plain))
            continue
        name, equals, value = plain.lstrip()[2:].partition("=")
        if not equals:
            raise FidkitError(f"line {number}: a label must end with =; got {line.strip()[:40]!r}")
        label = re.sub(r"[\s\-/_]", "", name).upper()
        if label == "TITLE":
            stack.append(Block())
            blocks.append(stack[-1])
        if not stack:
            raise FidkitError(
                f"line {number}: a JCAMP-DX file begins with ##TITLE=; got ##{label}="
            )
        if label == "END":
            stack.pop().ended = True
            entry = None  # further blocks may follow; anything but a title is refused above
            continue
        entry = Entry(label, number, value.strip())
        stack[-1].entries.append(entry)
    if not blocks:
        raise FidkitError("a JCAMP-DX file begins with ##TITLE=; this one has no such label")
    return blocks


def _repeated(block: Block) -> list[str]:
    """A note for every label that stands twice and says different things."""
    first: dict[str, Entry] = {}
    notes = []
    for entry in block.entries:
        before = first.setdefault(entry.label, entry)
        # pages and comments are meant to repeat, private labels are not read
        if before.text != entry.text and not re.match(
            r"\$|PAGE|DATATABLE|END|COMMENT|$", entry.label
        ):
            notes.append(
                f"line {before.line} says what {entry.label} is; line {entry.line} does not count"
            )
    return notes


def _choose(blocks: list[Block], number: int | None) -> tuple[Block, list[str]]:
    fitting = [
        block
        for block in blocks
        if (not block.kind or re.search(r"NMR (FID|SPECTRUM)", block.kind))
        and block.find("XYDATA", "NTUPLES")
    ]
    if not fitting:
        kinds = sorted({block.kind for block in blocks if block.kind}) or ["no DATA TYPE"]
        raise FidkitError(
            "holds no magnetic resonance data that fidkit reads: NMR FID or NMR SPECTRUM as NTUPLES "
            f"or XYDATA; got {', '.join(kinds)}"
        )
    if number is not None and not 1 <= number <= len(fitting):
        raise FidkitError(
            f"block must be from 1 to {len(fitting)}, the blocks that hold data; got {number}"
        )
    chosen = fitting[(number or 1) - 1]
    if re.match(r"[2-9N]D ", chosen.kind):
        raise FidkitError(f"fidkit reads one-dimensional records; this block is {chosen.kind}")
    notes = []
    if len(fitting) > 1 and number is None:
        others = ", ".join(
            f"{place}: {block.text('TITLE')[:60] or 'untitled'}"
            for place, block in enumerate(fitting[1:], 2)
        )
        notes.append(f"the first of {len(fitting)} data blocks; block= reads the others ({others})")
    return chosen, notes


def _is_fid(block: Block, x: Column, notes: list[str]) -> bool:
    in_time = x.unit.lower() in TIME_UNITS
    if not in_time and x.unit.lower() not in FREQUENCY_UNITS and x.unit != "PPM":
        raise FidkitError(
            "the unit of X must be SECONDS (or MILLISECONDS, MICROSECONDS) for an FID, HZ or PPM for a "
            f"spectrum; got {x.unit or 'none'!r}"
        )
    if not block.kind:
        notes.append(
            f"DATA TYPE is not stated; with X in {x.unit} taken as {'an FID' if in_time else 'a spectrum'}"
        )
    elif ("FID" in block.kind) != in_time:
        raise FidkitError(f"DATA TYPE is {block.kind}, but X is in {x.unit}; correct one of them")
    return in_time


def _xydata(block: Block) -> tuple[Column, dict[str, tuple[Column, Entry]]]:
    table = block.find("XYDATA")
    assert table is not None
    if not re.match(r"\(X\+\+\(Y\.\.Y\)", re.sub(r"\s", "", table.value.upper())):
        raise FidkitError(
            f"line {table.line}: fidkit reads tables of the form (X++(Y..Y)); got {table.value[:40]!r}"
        )

    def column(letter: str, more: dict[str, str]) -> Column:
        labels = {
            "first": f"FIRST{letter}",
            "last": f"LAST{letter}",
            "smallest": f"MIN{letter}",
            "largest": f"MAX{letter}",
            "factor": f"{letter}FACTOR",
            "points": "NPOINTS",
            **more,
        }
        found = {what: block.find(label) for what, label in labels.items()}
        stated = {w: (entry.text, entry.line) for w, entry in found.items() if entry and entry.text}
        return Column(letter, stated, block.text(f"{letter}UNITS").upper())

    x = column("X", {"step": "DELTAX"})
    return x, {"R": (column("Y", {}), table)}


def _ntuples(block: Block) -> tuple[Column, dict[str, tuple[Column, Entry]]]:
    labels = {
        "first": "FIRST",
        "last": "LAST",
        "smallest": "MIN",
        "largest": "MAX",
        "factor": "FACTOR",
        "points": "VARDIM",
    }
    header = {what: block.find(label) for what, label in labels.items()}
    symbols = [part.strip().upper() for part in block.text("SYMBOL").split(",")]

    def part(entry: Entry | None, place: int) -> str:
        parts = entry.text.split(",") if entry else []
        return parts[place].strip() if place < len(parts) else ""

    units = block.find("UNITS")
    columns = {}
    for place, symbol in enumerate(symbols):
        stated = {}
        for what, entry in header.items():
            text = part(entry, place)
            if entry and text:
                stated[what] = (text, entry.line)
        columns[symbol] = Column(symbol, stated, part(units, place).upper())
    if "X" not in columns:
        raise FidkitError(f"SYMBOL must name X, and R or I; got {symbols}")
    pages: dict[str, tuple[Column, Entry]] = {}
    for table in block.entries:
        if table.label != "DATATABLE":
            continue
        form = re.match(
            r"\(X\+\+\((\w)\.\.\1\)\)(,XYDATA)?", re.sub(r"\s", "", table.value.upper())
        )
        if form is None:
            raise FidkitError(
                f"line {table.line}: fidkit reads tables of the form (X++(R..R)), XYDATA; "
                f"got {table.value[:40]!r}"
            )
        symbol = {"Y": "R"}.get(form[1], form[1])
        if symbol not in ("R", "I") or form[1] not in columns:
            raise FidkitError(
                f"line {table.line}: fidkit reads pages of R and I that SYMBOL names "
                f"({', '.join(symbols)}); got {form[1]}"
            )
        if symbol in pages:
            raise FidkitError(
                f"line {table.line}: a second page of {form[1]}; fidkit reads one record from a block"
            )
        pages[symbol] = (columns[form[1]], table)
    if "R" not in pages:
        raise FidkitError("holds no page of real values (R); the file is cut short or damaged")
    if "I" in columns and "I" not in pages:
        raise FidkitError(
            "SYMBOL promises imaginary values (I), but their page is missing; the file is cut short"
        )
    return columns["X"], pages


def _ordinates(
    column: Column, table: Entry, x: Column, notes: list[str]
) -> npt.NDArray[np.float64]:
    """Decode one table and hold it against all that the header says of it."""
    expected = column.points or x.points
    if expected is None:
        raise FidkitError(
            "the number of points (VAR_DIM or NPOINTS) is not stated; it must be, or a record that is "
            "cut short could not be told"
        )
    decoded = asdf.decode(table.body, expected)
    factor = column.number("factor")
    scale = 1.0 if factor is None else factor
    if scale == 0:
        raise FidkitError(f"line {column.stated['factor'][1]}: FACTOR must not be 0")
    values = decoded.ordinates * scale
    # what the header states may have been taken before the values were rounded to the counts or
    # digits of the table; where these are the values themselves (factor 1) there is no such room
    loose = 0.0 if decoded.unit == 1 and abs(scale) == 1 else decoded.unit * abs(scale)
    # a factor of a few digits is exact, any other is known to half its last printed place
    factor_unit = 0.0
    if factor is not None and float(f"{factor:.3g}") != factor:
        factor_unit = column.rounding("factor") / 2
    ends = {
        "first": 0,
        "last": values.size - 1,
        "smallest": int(np.argmin(values)),
        "largest": int(np.argmax(values)),
    }
    for what, place in ends.items():
        stated = column.number(what)
        if stated is None or (what == "last" and column.symbol == "Y"):
            continue
        unit = printed_unit(column.stated[what][0], trimmed=True)
        # half a unit where the value is printed whole; some programs cut digits off instead
        allowed = unit * (0.5 if values[place] == round(values[place]) else 1.0)
        allowed += loose + abs(decoded.ordinates[place]) * factor_unit + 1e-12 * abs(values[place])
        if not abs(stated - values[place]) <= allowed:
            text, line = column.stated[what]
            raise FidkitError(
                f"line {line}: the {what} value of {column.symbol} is stated as {text}, but the table "
                f"holds {values[place]:.10g}; the file is damaged, export it again (or correct the "
                "header, if only that is wrong)"
            )
    _check_x(decoded, x, expected, notes)
    return values


def _check_x(table: asdf.Table, x: Column, points: int, notes: list[str]) -> None:
    """Hold the X of every line against the axis of the header, to half a point and its digits.

    Not closer: programs add up a rounded step, and drift by a quarter of a point.
    """
    first, last, factor = x.number("first"), x.number("last"), x.number("factor")
    if first is None or last is None or points < 2:
        return
    printed = np.array([float(text) for text in table.line_x])
    unit = np.array([printed_unit(text) for text in table.line_x])
    index = np.array(table.line_index)
    axis = first + (last - first) / (points - 1) * index
    rounding = x.rounding("first") + x.rounding("last") + 0.5 * abs(last - first) / (points - 1)
    if printed.size > 2 and np.ptp(printed) == 0:
        notes.append("the lines carry no X values of their own; lost lines could go unseen")
        return
    # X times FACTOR by the rules; but some files print X itself, or plain point numbers
    scale, loose = (1.0, 0.0) if factor is None else (factor, x.rounding("factor"))
    counted = printed - printed[0]
    misses = [
        ~(np.abs(printed * scale - axis) <= unit * abs(scale) + np.abs(printed) * loose + rounding),
        # whole numbers beyond the span are no positions that were rounded
        ~(np.abs(printed - axis) <= unit + rounding) | ((unit >= 1) & (unit > abs(last - first))),
        ~(np.abs(counted - index + index[0]) <= 0.5),
        ~(np.abs(counted + index - index[0]) <= 0.5),
    ]
    wrong = min(misses, key=np.count_nonzero)
    if wrong.any():
        worst = int(np.argmax(wrong))
        raise FidkitError(
            f"line {table.line_numbers[worst]}: the X check fails: X is {table.line_x[worst]} where "
            f"point {index[worst]} is due, at {axis[worst]:.8g}; lines are missing, doubled or damaged, "
            "or first and last X in the header are wrong"
        )


def _axis(x: Column, points: int, notes: list[str], name: str) -> tuple[float | None, float | None]:
    """First value and step, from those of the stated numbers that are printed most exactly."""
    first, last = x.number("first"), x.number("last")
    delta, factor = x.number("step"), x.number("factor")
    if points < 2:
        raise FidkitError(f"a record must have at least 2 points; got {points}")
    if first is None or last is None:
        return first, delta
    span = (last - first) / (points - 1)
    if span == 0:
        raise FidkitError(
            f"line {x.stated['last'][1]}: the X axis runs from {first:g} to {last:g}; "
            "FIRST and LAST must differ"
        )
    step, rounding = span, (x.rounding("first") + x.rounding("last")) / 2 / (points - 1)
    span_rounding = rounding
    for what, value in (("step", delta), ("factor", factor)):
        if not value:
            continue
        own = x.rounding(what) / 2
        fits = abs(abs(value) - abs(span)) <= 2 * (own + span_rounding) + 1e-12 * abs(span)
        if what == "step" and not fits:
            notes.append(
                f"DELTAX ({x.stated[what][0]}) does not fit first and last X, which give {span:.8g}; "
                "it is not used"
            )
        if fits and own < rounding:
            step, rounding = math.copysign(value, span), own
    for what, extreme in (("smallest", min(first, last)), ("largest", max(first, last))):
        stated = x.number(what)
        if stated is not None:
            allowed = x.rounding(what) + x.rounding("first") + x.rounding("last")
            if not abs(stated - extreme) <= allowed:
                raise FidkitError(
                    f"line {x.stated[what][1]}: the {what} X is stated as {x.stated[what][0]}, but the "
                    f"axis reaches {extreme:.8g}; the file is damaged (or correct the header)"
                )
    notes += rounding_note(name, rounding / abs(step), "the header")
    return first, step


def _delays(block: Block) -> list[float]:
    entry = block.find(".DELAY")
    if entry is None or not entry.text.strip("() "):
        return []
    what = f"line {entry.line}: .DELAY"
    return [real_number(part, what) for part in entry.text.strip("() ").split(",")]


def _facts(block: Block, record: Record) -> None:
    frequency = block.find(".OBSERVEFREQUENCY")
    if frequency and frequency.text:
        text = frequency.text.split()[0]
        number = real_number(text, f"line {frequency.line}: .OBSERVE FREQUENCY")
        record.carrier_frequency = float(f"{number * 1e6:.15g}")
    record.nucleus = block.text(".OBSERVENUCLEUS").strip("<> ") or None
    units = block.text("YUNITS")
    if block.find("NTUPLES"):
        symbols = [part.strip().upper() for part in block.text("SYMBOL").split(",")]
        parts = block.text("UNITS").split(",")
        place = next((n for n, s in enumerate(symbols) if s in ("R", "Y")), len(parts))
        units = parts[place].strip() if place < len(parts) else ""
    if units.upper() not in ("", "ARBITRARY UNITS", "ARBITRARY", "COUNTS"):
        record.units = {"VOLTS": "V", "VOLT": "V", "MILLIVOLTS": "mV"}.get(units.upper(), units)
    for name, labels in TEXTS.items():
        text = block.text(*labels)
        if text:
            record.more[name] = text
    if block.states_sign:  # of `write`, which has to fill these in
        for name in ("title", "processing"):
            record.more.pop(name, None)
    record.sample = record.more.pop("sample", None) or record.more.get("title")
    record.coil = record.more.pop("coil", None)
    date = block.text("LONGDATE") or " ".join(
        filter(None, (block.text("DATE"), block.text("TIME")))
    )
    if date:
        record.more["acquired_at"] = " ".join(date.split())
    averages = block.text(".AVERAGES")
    if averages.isdecimal() and len(averages) < 12:
        record.more["averages"] = int(averages)
    group_delay = block.text("$GROUPDELAY")
    if group_delay and "FID" in block.kind:
        with contextlib.suppress(FidkitError):  # a private label may mean anything
            delay = real_number(group_delay, "$GROUP DELAY")
            if delay > 0:
                record.more["filter_delay"] = delay
    further = block.find(FURTHER_LABEL)
    if further:
        found = mapping(further.text, f"line {further.line}: {FURTHER_LABEL}")
        for name in ("units", "sample", "coil"):
            if isinstance(found.get(name), str):
                setattr(record, name, found.pop(name))
        record.keep(found)


#: Largest whole number that `write` scales to: 31 bits and a sign.
FULL_SCALE = 2**31 - 1


def write(signal: xr.DataArray, path: Path) -> None:
    """Write an FID or spectrum as JCAMP-DX 5.01, NTUPLES, differences of 31-bit whole numbers.

    Parameters
    ----------
    signal : xarray.DataArray, shape (points,)
        One record; the values are rounded to the largest one over 2**31.
    path : pathlib.Path
        File to write.

    Raises
    ------
    FidkitError
        For more than one record, or values that are not finite.
    """
    if signal.ndim != 1:
        raise FidkitError(
            f"a JCAMP-DX file holds one record; got dimensions {signal.dims}; choose one with .isel, "
            "or write .nc or .zarr"
        )
    is_fid = signals.is_fid(signal)
    values = np.asarray(signal.values)
    require_finite(values)
    axis = np.asarray(signal[signal.dims[-1]].values, dtype=float)
    step = exact_spacing(axis)
    first = 0.0 if is_fid else float(axis[0])
    last = first + step * (axis.size - 1) if is_fid else float(axis[-1])
    kind = "NMR FID" if is_fid else "NMR SPECTRUM"
    pages = {"R": values.real.astype(float)}
    if np.iscomplexobj(values):
        pages["I"] = values.imag.astype(float)
    wide = {symbol: float(np.abs(page).max()) / FULL_SCALE or 1.0 for symbol, page in pages.items()}
    counts = {s: np.round(page / wide[s]).astype(np.int64) for s, page in pages.items()}

    def row(label: str, *cells: object) -> str:
        return f"##{label}= " + ", ".join(
            # all digits, so that the reader sees how exact it is
            f"{c:.16e}" if isinstance(c, float) else str(c)
            for c in cells
        )

    units = signal.attrs.get("units", "1")
    # a comma would begin the next column
    units = "ARBITRARY UNITS" if units == "1" else _line(units).replace(",", ";")
    names = [f"{kind.removeprefix('NMR ')}/{'REAL' if s == 'R' else 'IMAG'}" for s in pages]
    numbers = [f"N={place}" for place in range(1, len(pages) + 1)]

    def each(pick: Any) -> list[float]:
        return [float(pick(counts[s]) * wide[s]) for s in pages]

    attributes = signal.attrs
    head = [
        f"##TITLE= {_line(attributes.get('title') or attributes.get('sample') or 'untitled')}",
        "##JCAMP-DX= 5.01",
        f"##DATA TYPE= {kind}",
        "##DATA CLASS= NTUPLES",
        "##ORIGIN= fidkit",
        "##OWNER= not stated",
        row(".OBSERVE FREQUENCY", float(attributes["carrier_frequency"]) / 1e6),
        f"##.OBSERVE NUCLEUS= ^{attributes['nucleus']}",
        "##.ACQUISITION MODE= " + ("SIMULTANEOUS" if "I" in pages else "SINGLE"),
    ]
    head.append(f"##{SIGN_LABEL}= {SIGN_TEXT}")
    if is_fid:
        delay = repr(float(axis[0]) * 1e6)
        head.append(f"##.DELAY= ({delay}, {delay})")
    texts = {
        "LONG DATE": "acquired_at",
        ".AVERAGES": "averages",
        "SAMPLE DESCRIPTION": "sample",
        "DATA PROCESSING": "history",
        "$COIL": "coil",
        "$GROUP DELAY": "filter_delay",
        ".PULSE SEQUENCE": "pulse_sequence",
        ".SOLVENT NAME": "solvent",
    }
    head += [
        f"##{label}= {_line(attributes[key])}"
        for label, key in texts.items()
        if attributes.get(key) not in (None, "")
    ]
    columns = [
        f"##NTUPLES= {kind}",
        row("VAR_NAME", "TIME" if is_fid else "FREQUENCY", *names, "PAGE NUMBER"),
        row("SYMBOL", "X", *pages, "N"),
        row("VAR_TYPE", "INDEPENDENT", *("DEPENDENT" for _ in pages), "PAGE"),
        row("VAR_FORM", "AFFN", *("ASDF" for _ in pages), "AFFN"),
        row("VAR_DIM", axis.size, *(axis.size for _ in pages), len(pages)),
        row("UNITS", "SECONDS" if is_fid else "HZ", *(units for _ in pages), ""),
        row("FIRST", first, *each(lambda c: c[0]), 1),
        row("LAST", last, *each(lambda c: c[-1]), len(pages)),
        row("MIN", min(first, last), *each(np.min), 1),
        row("MAX", max(first, last), *each(np.max), len(pages)),
        row("FACTOR", step, *wide.values(), 1),
    ]
    # whatever these labels do not give back stands as JSON, in which no text begins a comment
    trial = Record(values)
    _facts(_blocks("\n".join([*head, *columns]))[0], trial)
    said = trial.more | {"long_name": "signal" if is_fid else "spectrum", "history": ""}
    for name, usual in (("units", "1"), ("sample", ""), ("coil", "")):
        said[name] = getattr(trial, name) or usual
    further = further_attributes(
        {k: v for k, v in attributes.items() if k not in ("carrier_frequency", "nucleus")}, said
    )
    if further:
        head.append(f"##{FURTHER_LABEL}= " + json.dumps(further).replace("$", "\\u0024"))
    head += columns
    start = first / step
    start = round(start) if abs(start - round(start)) < 1e-3 else round(start, 3)
    for number, (symbol, whole) in zip(numbers, counts.items(), strict=True):
        head += [f"##PAGE= {number}", f"##DATA TABLE= (X++({symbol}..{symbol})), XYDATA"]
        lines = asdf.encode(whole, start)
        back = asdf.decode(enumerate(lines), whole.size).ordinates
        if np.abs(back * wide[symbol] - pages[symbol]).max() > 0.5001 * wide[symbol]:
            raise FidkitError("the table does not read back as it was written; write .nc instead")
        head += lines
    head += [f"##END NTUPLES= {kind}", "##END="]
    write_whole(path, ("\n".join(head) + "\n").encode())


def _line(text: object) -> str:
    """Text that is safe as the value of a label."""
    return "; ".join(part for part in str(text).replace("$$", "$ $").splitlines() if part)
