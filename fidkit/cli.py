"""The command `fidkit`: measure records, say what a file holds, list the steps."""

from __future__ import annotations

import argparse
import contextlib
import csv
import inspect
import io
import json
import math
import os
import re
import shutil
import sys
import textwrap
import time
import traceback
from collections.abc import Iterator, Sequence
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import numpy as np
import xarray as xr

import fidkit
from fidkit import signals
from fidkit.display import number_text, quantity_text, scaled_unit
from fidkit.files import write_whole
from fidkit.measure.found import QUANTITIES, column_name

__all__ = ["main"]

#: What a folder may hold beside its records: these are passed over, and named beneath the table.
NO_RECORD_NAMES = ("readme", "license", "licence", "changes", "notes")
NO_RECORD_SUFFIXES = (
    *(".py", ".pyc", ".ipynb", ".sh", ".bat", ".toml", ".yaml", ".yml", ".ini", ".json", ".log"),
    *(".md", ".rst", ".html", ".pdf", ".png", ".jpg", ".jpeg", ".svg"),
)
FOLDER_RULE = (
    "From a folder come all its files, sorted by name, but not hidden ones, folders inside it (other "
    "than .zarr stores), README, LICENSE, CHANGES and NOTES files, scripts, settings, pages and "
    f"pictures ({' '.join(NO_RECORD_SUFFIXES)})."
)

#: Quantities that the table has room for, with their heading; CSV and JSON hold all.
TABLE = {
    "frequency_offset": ("", "offset"),
    "linewidth": ("", "linewidth"),
    "t2_star": ("T2* of", "width"),
    "t2_star_decay": ("T2* of", "decay"),
    "amplitude": ("", "amplitude"),
    "snr": ("", "SNR"),
}
#: Form of the result by the ending of `--out`.
FORMS = {".csv": "csv", ".json": "json", ".txt": "table"}

#: Records measured at a time, so that long work can be shown and stopped.
BLOCK = 256
#: Width where the output goes to no terminal, and the least room for words beside the numbers.
PAGE_WIDTH = 120
LEAST_STATUS = 22


@dataclass
class Quantity:
    """A value with its standard uncertainty; NaN where it is not known, and `status` says why."""

    value: float
    std: float
    unit: str
    status: str


@dataclass
class Result:
    """One line of one record, or the reason why there is none."""

    source: str
    where: dict[str, Any] = field(default_factory=dict)
    quantities: dict[str, Quantity] = field(default_factory=dict)
    lineshape: str = ""
    status: str = ""
    notes: list[str] = field(default_factory=list)
    error: str = ""


def main(argv: Sequence[str] | None = None) -> int:
    """Run the command.

    Parameters
    ----------
    argv : sequence of str, optional
        Words of the command line; those of the process if left out.

    Returns
    -------
    int
        0 where all went well, 1 where something could not be read or measured, 130 where it was
        stopped by the user. Words that make no command leave by `SystemExit`, as argparse does it.
    """
    for stream in (sys.stdout, sys.stderr):
        if isinstance(stream, io.TextIOWrapper):
            stream.reconfigure(errors="replace")  # a terminal that has no micro sign
    try:
        options = _parser().parse_args(argv)
        return int(options.run(options))
    except KeyboardInterrupt:
        print("fidkit: stopped", file=sys.stderr)
        return 130
    except BrokenPipeError:
        # whoever read the output has seen enough; nothing more may be written on the way out
        with contextlib.suppress(OSError, ValueError):
            os.dup2(os.open(os.devnull, os.O_WRONLY), sys.stdout.fileno())
        return 1
    except (fidkit.FidkitError, OSError) as error:
        print(f"fidkit: {_reason(error)}", file=sys.stderr)
        return 1


def _parser() -> argparse.ArgumentParser:
    parser = argparse.ArgumentParser(
        prog="fidkit",
        description="Frequency offset, linewidth, T2* and signal to noise of raw free induction "
        "decays, each with its standard uncertainty.",
    )
    parser.add_argument("--version", action="version", version=f"fidkit {fidkit.__version__}")
    commands = parser.add_subparsers(metavar="COMMAND", required=True)

    facts = argparse.ArgumentParser(add_help=False)
    group = facts.add_argument_group("what the files themselves do not say")
    group.add_argument("--carrier-frequency", type=float, metavar="HZ", help="receiver frequency")
    group.add_argument("--dwell-time", type=float, metavar="S", help="time between points")
    group.add_argument("--block", type=int, metavar="N", help="which of several JCAMP-DX blocks")
    group.add_argument("--nucleus", metavar="NAME", help=f"one of {', '.join(fidkit.NUCLEI)}")

    measure = commands.add_parser(
        "measure",
        parents=[facts],
        help="measure the line in each record",
        description="Measure the strongest line of each record, or the one asked for.",
        epilog=f"{FOLDER_RULE} Numbers read 137.41(2): the bracket is one standard uncertainty of "
        "the last digits, (?) an uncertainty and - a value that is not known. CSV and JSON hold all "
        "digits, and also phase, field and ppm. Exit status 1 if a record could not be measured.",
    )
    measure.add_argument("paths", nargs="+", metavar="PATH", help="record, or folder of records")
    measure.add_argument("--chain", metavar="FILE", help="saved chain of steps to take first")
    measure.add_argument("--near", type=float, metavar="HZ", help="the line nearest this offset")
    measure.add_argument(
        *("--region",),
        nargs=2,
        type=float,
        metavar=("LOW", "HIGH"),
        help="look only between these offsets, Hz",
    )
    measure.add_argument(
        *("--noise",),
        nargs=2,
        type=float,
        metavar=("LOW", "HIGH"),
        help="take the noise from between these offsets, Hz",
    )
    measure.add_argument("--lines", type=int, default=1, metavar="N", help="how many lines to fit")
    measure.add_argument(
        *("--format",),
        choices=("table", "csv", "json"),
        help="form of the result (as the name of --out ends: .csv, .json, .txt; else table)",
    )
    measure.add_argument("--out", metavar="FILE", help="write the result here, whole or not at all")
    measure.set_defaults(run=_measure)

    info = commands.add_parser("info", parents=[facts], help="say what a file holds")
    info.add_argument("paths", nargs="+", metavar="FILE")
    info.set_defaults(run=_info)

    steps = commands.add_parser(
        "steps", help="list the steps of a chain with their parameters, units and ranges"
    )
    steps.add_argument("names", nargs="*", metavar="NAME", help="tell all about this step")
    steps.set_defaults(run=_steps)
    for one in (measure, info):
        # argparse takes -1e3 for an option, and -1000 for a number
        one._negative_number_matcher = re.compile(r"^-(\d+\.?\d*|\.\d+)([eE][-+]?\d+)?$")
    return parser


# measure ------------------------------------------------------------------------------------------


def _measure(options: argparse.Namespace) -> int:
    form = options.format or "table"
    if options.out and not options.format:
        ending = Path(options.out).suffix.lower()
        if ending not in FORMS:
            raise fidkit.FidkitError(
                f"--out {options.out}: the name must end in {', '.join(FORMS)}; got "
                f"{ending or 'no ending'}; or give --format"
            )
        form = FORMS[ending]
    for name, pair in (("region", options.region), ("noise", options.noise)):
        if pair and pair[0] >= pair[1]:
            given, right = (f"{x:g} {y:g}" for x, y in (pair, sorted(pair)))
            remedy = f"give --{name} {right}" if pair[0] > pair[1] else "they must differ"
            raise fidkit.FidkitError(f"--{name} {given}: low comes before high; {remedy}")
    chain = fidkit.Chain.load(options.chain) if options.chain else None
    records, passed_over = _records(options.paths)
    results: list[Result] = []
    in_table = form == "table" and not options.out  # failures are then read there, once
    stopped = False
    progress = Progress(len(records))
    for number, (name, path) in enumerate(records):
        found: list[Result] = []
        try:
            for result, done in _results(name, path, chain, options):
                found.append(result)
                progress.show(number + done, name)
        except KeyboardInterrupt:
            stopped = True
        except Exception as error:  # whatever one file does, the others are still measured
            found.append(Result(name, error=_named(name, error)))
            if not in_table:
                progress.clear()
                print(f"fidkit: {found[-1].error}", file=sys.stderr)
        results += found
        if stopped:
            break
    progress.clear()
    bad = sum(bool(result.error) for result in results)
    if stopped:
        print(
            f"fidkit: stopped in record {number + 1} of {len(records)}; what was measured follows",
            file=sys.stderr,
        )
    if not results and not stopped:
        raise fidkit.FidkitError(
            f"{', '.join(options.paths)}: nothing in it could be a record (`fidkit measure --help` "
            "says what is passed over); name a file to read it all the same"
        )
    if form == "json":
        text = _json(results)
    elif form == "csv":
        text = _csv(results)
    else:
        width = PAGE_WIDTH if options.out else _width()
        text = _table(results, passed_over, width)
    failed = not _put(text, options.out)
    return 130 if stopped else int(bad > 0 or failed)


def _records(paths: Sequence[str]) -> tuple[list[tuple[str, Path]], list[str]]:
    """Name and path of every record, and names passed over."""
    found: list[Path] = []
    passed_over: list[str] = []
    for text in paths:
        path = Path(text)
        if path.is_dir() and not _is_store(path):
            for inner in sorted(path.iterdir()):
                if inner.name.startswith((".", "__")) or (inner.is_dir() and not _is_store(inner)):
                    continue
                if (
                    inner.suffix.lower() in NO_RECORD_SUFFIXES
                    or inner.stem.lower() in NO_RECORD_NAMES
                ):
                    passed_over.append(inner.name)
                else:
                    found.append(inner)
        else:
            found.append(path)
    names = [path.name for path in found]
    unique = len(set(names)) == len(names)
    return [(path.name if unique else str(path), path) for path in found], passed_over


def _is_store(path: Path) -> bool:
    return path.is_dir() and (path.suffix == ".zarr" or (path / "zarr.json").exists())


def _facts(options: argparse.Namespace) -> dict[str, Any]:
    names = ("carrier_frequency", "dwell_time", "nucleus", "block")
    return {name: value for name in names if (value := getattr(options, name)) is not None}


def _results(
    name: str, path: Path, chain: fidkit.Chain | None, options: argparse.Namespace
) -> Iterator[tuple[Result, float]]:
    """Every result of one file, and which part of the file is done with it."""
    signal = fidkit.read(path, **_facts(options))
    notes = _lines(signal.attrs.get("notes"))
    if chain is not None:
        signal = chain(signal)
    wanted = {
        "near": options.near,
        "region": tuple(options.region) if options.region else None,
        "noise": tuple(options.noise) if options.noise else None,
        "lines": options.lines,
    }
    leading = signal.dims[0] if signal.ndim > 1 else None
    count = signal.shape[0] if leading else 1
    for start in range(0, count, BLOCK):
        block = signal.isel({leading: slice(start, start + BLOCK)}) if leading else signal
        measured = fidkit.measure(block, **wanted)
        done = min(start + BLOCK, count) / count
        for result in _rows(measured, name, notes, {leading: start} if leading else {}):
            yield result, done


def _rows(
    measured: xr.Dataset, name: str, notes: list[str], first: dict[Any, int]
) -> Iterator[Result]:
    dims = measured["frequency_offset"].dims
    notes = list(dict.fromkeys(notes + _lines(measured.attrs.get("notes"))))
    arrays = {str(key): variable.values for key, variable in measured.data_vars.items()}
    units = {key: str(measured[key].attrs.get("units", "1")) for key in QUANTITIES}
    for index in np.ndindex(measured["frequency_offset"].shape):
        where = {}
        for dim, at in zip(dims, index, strict=True):
            if dim in measured.coords:
                value = measured.coords[dim].values[at]
                where[str(dim)] = value.item() if value.dtype.kind in "iufb" else str(value)
            else:
                where[str(dim)] = at + first.get(dim, 0)
        quantities = {
            key: Quantity(
                float(arrays[key][index]),
                float(arrays[f"{key}_std"][index]),
                units[key],
                str(arrays[f"{key}_status"][index]),
            )
            for key in QUANTITIES
        }
        yield Result(
            name,
            where,
            quantities,
            lineshape=str(arrays["lineshape"][index]),
            status=str(arrays["status"][index]),
            notes=notes,
        )


def _lines(notes: Any) -> list[str]:
    if notes is None:
        return []
    parts = notes.splitlines() if isinstance(notes, str) else [str(note) for note in notes]
    return [part.strip() for part in parts if part.strip()]


def _json(results: Sequence[Result]) -> str:
    def number(value: float) -> float | None:
        return value if math.isfinite(value) else None

    out: list[dict[str, Any]] = []
    for result in results:
        if result.error:
            out.append({"source": result.source, "error": result.error})
            continue
        out.append(
            {
                "source": result.source,
                **result.where,
                "quantities": {
                    name: {
                        "value": number(quantity.value),
                        "std": number(quantity.std),
                        "unit": quantity.unit,
                        "status": quantity.status,
                    }
                    for name, quantity in result.quantities.items()
                },
                "lineshape": result.lineshape,
                "status": result.status,
                "notes": result.notes,
            }
        )
    document = {"fidkit": fidkit.__version__, "results": out}
    return json.dumps(document, indent=2, ensure_ascii=False, allow_nan=False) + "\n"


def _csv(results: Sequence[Result]) -> str:
    where = list(dict.fromkeys(key for result in results for key in result.where))
    rows = []
    columns = ["source", *where]
    for result in results:
        row: dict[str, Any] = {"source": result.source, **result.where}
        for name, quantity in result.quantities.items():
            # repr is the shortest text that reads back as the same number
            for end, value in (("", quantity.value), ("_std", quantity.std)):
                column = column_name(name, quantity.unit, end)
                row[column] = repr(value) if math.isfinite(value) else ""
            if name == "amplitude":
                row[f"{name}_unit"] = quantity.unit
            row[f"{name}_status"] = quantity.status
        row |= {"lineshape": result.lineshape, "status": result.status}
        row |= {"notes": " | ".join(result.notes), "error": result.error}
        rows.append(row)
        columns += [column for column in row if column not in columns]
    last = ["lineshape", "status", "notes", "error"]
    columns = [column for column in columns if column not in last] + last
    text = io.StringIO()
    writer = csv.DictWriter(text, columns, restval="", lineterminator="\n")
    writer.writeheader()
    writer.writerows(rows)
    return text.getvalue()


def _table(results: Sequence[Result], passed_over: Sequence[str], width: int) -> str:
    good = [result for result in results if not result.error]
    lines = _grid(good, width) if good else []
    beneath = []
    notes: dict[str, list[str]] = {}
    for result in good:
        for note in result.notes:
            if result.source not in notes.setdefault(note, []):
                notes[note].append(result.source)
    sources = list(dict.fromkeys(result.source for result in good))
    for note, of in notes.items():
        beneath.append(("every record" if of == sources and len(of) > 1 else ", ".join(of), note))
    beneath += [("not measured", result.error) for result in results if result.error]
    if passed_over:
        beneath.append(("passed over, no records", ", ".join(passed_over)))
    if lines and beneath:
        lines.append("")
    for head, text in beneath:
        lines += textwrap.wrap(
            f"{head}: {text}",
            width,
            subsequent_indent="  ",
            break_long_words=False,
            break_on_hyphens=False,
        )
    return "\n".join(lines) + "\n"


def _grid(results: Sequence[Result], width: int) -> list[str]:
    """The rows: numbers with their decimals below each other, words at the end or above."""
    where = list(dict.fromkeys(key for result in results for key in result.where))
    label = _texts(
        ["record", *where],
        [[r.source, *(_plain(r.where.get(key, "")) for key in where)] for r in results],
    )
    columns = []
    for name, heading in TABLE.items():
        quantities = [result.quantities[name] for result in results]
        units = {quantity.unit for quantity in quantities}
        own = len(units) > 1  # records in different units: the unit then stands in the row
        factor, unit = (1.0, "") if own else scaled_unit((q.value for q in quantities), *units)
        cells = [
            number_text(q.value * factor, q.std * factor) + (f" {q.unit}" if own else "")
            for q in quantities
        ]
        columns.append(_numbers([*heading, unit], cells))
    numbers = ["  ".join(parts) for parts in zip(*columns, strict=True)]
    status = [_status(result) for result in results]
    side_by_side = len(label[0]) + 2 + len(numbers[0])
    if side_by_side + 2 + min(LEAST_STATUS, max(map(len, ["status", *status]))) <= width:
        room = width - side_by_side - 2
        lines = [
            f"{left}  {middle}  {words}"
            for left, middle, words in zip(label, numbers, ("", "status", ""), strict=False)
        ]
        for left, middle, words in zip(label[3:], numbers[3:], status, strict=True):
            first, *more = textwrap.wrap(words, room) or [""]
            lines.append(f"{left}  {middle}  {first}")
            lines += [" " * (side_by_side + 2) + line for line in more]
    else:  # a narrow terminal: the words get a line of their own above the numbers
        lines = [f"  {line}" for line in numbers[:3]]
        for result, middle, words in zip(results, numbers[3:], status, strict=True):
            head = [result.source, *(f"{key} {_plain(at)}" for key, at in result.where.items())]
            lines += textwrap.wrap(f"{', '.join(head)}: {words}", width, subsequent_indent="    ")
            lines.append(f"  {middle}")
    return [line.rstrip() for line in lines]


def _plain(value: Any) -> str:
    return f"{value:g}" if isinstance(value, float) else str(value)


def _status(result: Result) -> str:
    return result.status or "ok"


def _texts(heading: Sequence[str], rows: Sequence[Sequence[str]]) -> list[str]:
    """Words to the left, under a heading in the second of three lines."""
    empty = [""] * len(heading)
    lines = [empty, list(heading), empty, *map(list, rows)]
    widths = [max(map(len, column)) for column in zip(*lines, strict=True)]
    return [
        "  ".join(text.ljust(wide) for text, wide in zip(line, widths, strict=True))
        for line in lines
    ]


def _numbers(heading: Sequence[str], cells: Sequence[str]) -> list[str]:
    """Numbers with their decimal points below each other."""
    parts = []
    for cell in cells:
        digits = re.match(r"-?\d*", cell)
        whole = digits.group() if digits and digits.group() else cell
        parts.append((whole, cell[len(whole) :]))
    left = max(len(whole) for whole, _ in parts)
    right = max(len(rest) for _, rest in parts)
    wide = max(left + right, *map(len, heading))
    body = [f"{whole.rjust(left)}{rest.ljust(right)}".rjust(wide) for whole, rest in parts]
    return [*(text.rjust(wide) for text in heading), *body]


def _put(text: str, out: str | None) -> bool:
    """Print the text or write it to a file; what cannot be written is printed, so never lost."""
    if out is None:
        sys.stdout.write(text)
        sys.stdout.flush()
        return True
    try:
        write_whole(out, text.encode())
    except OSError as error:
        print(
            f"fidkit: {out} was not written: {(error.strerror or str(error)).lower()}; "
            "the result is printed instead",
            file=sys.stderr,
        )
        sys.stdout.write(text)
        return False
    print(f"fidkit: wrote {out}", file=sys.stderr)
    return True


class Progress:
    """A bar on standard error, only on a terminal, and only once the work has taken a second."""

    def __init__(self, total: int):
        self.total = total
        self.start = time.monotonic()
        self.last = self.start
        self.shown = False

    def show(self, done: float, name: str) -> None:
        """Draw the bar, at most five times a second."""
        now = time.monotonic()
        if not sys.stderr.isatty() or now - self.start < 1 or now - self.last < 0.2:
            return
        self.last, self.shown = now, True
        share = done / self.total
        text = f"[{'#' * round(20 * share):20s}] {share:4.0%} of {self.total} files, {name}"
        sys.stderr.write(f"\r\x1b[K{text[: shutil.get_terminal_size().columns - 1]}")
        sys.stderr.flush()

    def clear(self) -> None:
        """Take the bar away."""
        if self.shown:
            sys.stderr.write("\r\x1b[K")
            sys.stderr.flush()


# info ---------------------------------------------------------------------------------------------


def _info(options: argparse.Namespace) -> int:
    bad = False
    for number, text in enumerate(options.paths):
        path = Path(text)
        try:
            if path.is_dir() and not _is_store(path):
                raise fidkit.FidkitError(f"{text} is a folder; name a file in it")
            signal = fidkit.read(path, **_facts(options))
        except (fidkit.FidkitError, OSError) as error:
            print(f"fidkit: {_named(path.name, error)}", file=sys.stderr)
            bad = True
            continue
        print("\n" * (number > 0) + _description(path.name, signal), end="")
    return int(bad)


def _description(name: str, signal: xr.DataArray) -> str:
    attributes = signal.attrs
    carrier = float(attributes["carrier_frequency"])
    nucleus = str(attributes["nucleus"])
    kind = "complex" if np.iscomplexobj(signal.data) else "real"
    rows: list[tuple[str, str]] = []
    if signals.is_fid(signal):
        dwell, start = signals.dwell_time(signal), signals.time_start(signal)
        points = signal.sizes["time"]
        rows += [
            ("holds", f"free induction decay, {points} {kind} points"),
            ("dwell time", _exact(dwell, "s")),
            ("duration", _exact(points * dwell, "s")),
            ("first point", f"{_exact(start, 's')} after the middle of the pulse"),
            ("spectral width", _exact(1 / dwell, "Hz")),
        ]
    else:
        axis = signal["frequency"].values
        rows += [
            ("holds", f"spectrum, {axis.size} {kind} points"),
            ("from, to", f"{_exact(axis[0], 'Hz')}, {_exact(axis[-1], 'Hz')} from the carrier"),
            ("spectral width", _exact(signals.spectral_width(signal), "Hz")),
        ]
    if signal.ndim > 1:
        leading = [f"{dim}: {size}" for dim, size in signal.sizes.items()][:-1]
        rows.insert(1, ("records", ", ".join(leading)))
    field_here = fidkit.field_from_frequency(carrier, nucleus)
    rows += [
        ("carrier", f"{carrier / 1e6:.9g} MHz, {nucleus} in about {field_here:.6g} T"),
        ("unit", "counts or none" if attributes["units"] == "1" else str(attributes["units"])),
    ]
    shown = {"carrier_frequency", "nucleus", "units", "long_name", "notes", "history", "source"}
    rows += [
        (str(key).replace("_", " "), str(value))
        for key, value in attributes.items()
        if key not in shown and str(value)
    ]
    rows += [("note", note) for note in _lines(attributes.get("notes"))]
    rows += [("step taken", line) for line in _lines(attributes.get("history"))]
    wide = max(len(key) for key, _ in rows)
    out = [name]
    for key, value in rows:
        out += textwrap.wrap(
            value,
            max(_width(), 40),
            initial_indent=f"  {key.ljust(wide)}  ",
            subsequent_indent=" " * (wide + 4),
        )
    return "\n".join(out) + "\n"


def _exact(value: float, unit: str) -> str:
    """A setting, which has no uncertainty, to the digits that files keep."""
    return quantity_text(float(value), 0.0, unit, digits=9)


# steps --------------------------------------------------------------------------------------------


def _steps(options: argparse.Namespace) -> int:
    width = min(_width(), PAGE_WIDTH)
    lines: list[str] = []
    if options.names:
        for name in options.names:
            step = fidkit.params.find_step(name)
            lines += [f"{step.name}: {step.takes} to {step.gives}", ""]
            lines += (inspect.getdoc(step.function) or "").splitlines()
            lines += ["", "Allowed", "-------", *_parameter_lines(step, width), ""]
    else:
        rooms: dict[str, list[fidkit.params.Step]] = {}
        for step in fidkit.STEPS.values():
            rooms.setdefault(step.room.rpartition(".")[2], []).append(step)
        for room, steps in rooms.items():
            lines.append(room.replace("_", " "))
            for step in steps:
                way = f"{step.takes} to {step.gives}"
                lines += textwrap.wrap(
                    f"{step.name} ({way}): {step.summary}",
                    width,
                    initial_indent="  ",
                    subsequent_indent="      ",
                )
                lines += _parameter_lines(step, width)
            lines.append("")
    print("\n".join(lines).rstrip())
    return 0


def _parameter_lines(step: fidkit.params.Step, width: int) -> list[str]:
    lines = []
    for parameter in step.parameters.values():
        lines += textwrap.wrap(
            f"{parameter.name} = {parameter.default!r}: {parameter}",
            width,
            initial_indent="      ",
            subsequent_indent="          ",
        )
    return lines


# words --------------------------------------------------------------------------------------------


def _width() -> int:
    return shutil.get_terminal_size((PAGE_WIDTH, 24)).columns


def _named(name: str, error: BaseException) -> str:
    reason = _reason(error)
    return reason if name in reason else f"{name}: {reason}"


def _reason(error: BaseException) -> str:
    """One line that says what went wrong."""
    if isinstance(error, FileNotFoundError) and error.filename:
        return f"{error.filename}: there is no such file or folder; check the path"
    if isinstance(error, OSError) and error.strerror:
        where = f"{error.filename}: " if error.filename else ""
        return f"{where}{error.strerror.lower()}; check the path and who may use it"
    text = " ".join(str(error).split())
    if isinstance(error, fidkit.FidkitError | OSError):
        # a step is no word of the command line
        return re.sub(r"; apply (\w+) first", r"; apply \1 first (in a chain file, --chain)", text)
    if isinstance(error, MemoryError):
        return "not enough memory for this record; measure fewer records at a time"
    last = traceback.extract_tb(error.__traceback__)[-1]
    return (
        f"a fault in fidkit or a library, {type(error).__name__} in {Path(last.filename).name} line "
        f"{last.lineno}: {text}; please report it with the file"
    )


if __name__ == "__main__":
    sys.exit(main())
