"""Reading and writing records: one file per open format behind `read` and `write`."""

from __future__ import annotations

import math
import os
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass
from functools import partial
from numbers import Integral, Real
from pathlib import Path
from typing import Any

import numpy as np
import xarray as xr

from fidkit import signals
from fidkit.formats import archive, jcamp, numpy_file, text_table
from fidkit.formats.record import FIELDS, SPREADSHEET, Record, check_facts, text_of, writable
from fidkit.nuclei import find_nucleus
from fidkit.params import FidkitError, shown

__all__ = ["from_universal", "read", "write"]


@dataclass(frozen=True)
class Format:
    """What `read` and `write` know of a format."""

    name: str
    suffixes: tuple[str, ...]
    """How such files are called; those with which `write` takes this format."""
    knows: Callable[[Path, bytes], bool]
    """Whether a file is of it, by its path and first 64 kB (none for a folder)."""
    read: Callable[..., Record | xr.DataArray]
    write: Callable[[xr.DataArray, Path], object] | None = None
    option: str = ""
    """The argument of `read` that is for this format only."""


def _begins(*marks: bytes) -> Callable[[Path, bytes], bool]:
    return lambda path, head: head.startswith(marks)


def _text(looks_like: Callable[[str], bool], *suffixes: str) -> Callable[[Path, bytes], bool]:
    return lambda path, head: (
        bool(head)
        and b"\0" not in head
        and (looks_like(text_of(head)) or path.suffix.lower() in suffixes)
    )


#: Every format, in the order in which they are tried: the one place where a new one is named.
FORMATS = (
    Format(
        "JCAMP-DX",
        (".dx", ".jdx"),
        _text(jcamp.looks_like, ".dx", ".jdx", ".jcm", ".jcamp"),
        jcamp.read,
        jcamp.write,
        option="block",
    ),
    Format(
        "text table",
        (".csv", ".txt"),
        _text(text_table.looks_like, ".csv", ".txt", ".tsv", ".dat"),
        text_table.read,
        text_table.write,
    ),
    Format("numpy array", (".npy",), _begins(b"\x93NUMPY"), numpy_file.read),
    Format("numpy archive", (".npz",), _begins(b"PK\x03\x04"), numpy_file.read, numpy_file.write),
    Format(
        "netCDF",
        (".nc",),
        _begins(b"\x89HDF\r\n\x1a\n"),
        partial(archive.read, kind="netCDF"),
        partial(archive.write, kind="netCDF"),
    ),
    Format(
        "Zarr",
        (".zarr",),
        lambda path, head: (path / "zarr.json").is_file(),
        partial(archive.read, kind="Zarr"),
        partial(archive.write, kind="Zarr"),
        option="chunks",
    ),
)
KNOWN = "fidkit reads " + ", ".join(f"{form.name} ({', '.join(form.suffixes)})" for form in FORMATS)


def read(
    path: str | os.PathLike[str],
    *,
    dwell_time: float | None = None,
    carrier_frequency: float | None = None,
    nucleus: str | None = None,
    time_start: float | None = None,
    units: str | None = None,
    sample: str | None = None,
    coil: str | None = None,
    dims: Sequence[str] | None = None,
    block: int | None = None,
    chunks: Any = None,
) -> xr.DataArray:
    """Read a record; the format is told by the content of the file, then by its suffix.

    Parameters
    ----------
    path : path-like
        File, or folder of a Zarr store.
    dwell_time : float, optional
        Time between points, s.
    carrier_frequency : float, optional
        Receiver frequency, Hz.
    nucleus : str, optional
        Name from `fidkit.NUCLEI`.
    time_start : float, optional
        Time of the first point since the middle of the pulse, s.
    units, sample, coil : str, optional
        Unit of the values, and free text.
    dims : sequence of str, optional
        Names of leading dimensions, for a file that does not name them.
    block : int, optional
        For a JCAMP-DX file of several data blocks: which one, from 1.
    chunks : optional
        For Zarr: stay lazy in blocks of this shape, as `xarray.open_zarr` takes them (needs dask).

    Returns
    -------
    xarray.DataArray
        FID or spectrum. Whatever was given here has won over what the file says. The attribute
        ``notes`` tells what had to be assumed or was mended.

    Raises
    ------
    FidkitError
        If the file cannot be read, is damaged, or lacks something; it says what, and begins with
        the name of the file.
    """
    path = _path(path)
    try:
        given = _given(
            dwell_time=dwell_time,
            carrier_frequency=carrier_frequency,
            nucleus=nucleus,
            time_start=time_start,
            units=units,
            sample=sample,
            coil=coil,
            dims=dims,
        )
        if block is not None and (not isinstance(block, Integral) or isinstance(block, bool)):
            raise FidkitError(f"block must be a whole number from 1; got {shown(block)}")
        options = {"block": block, "chunks": chunks}
        options = {name: value for name, value in options.items() if value is not None}
        here = _format_of(path)
        for form in FORMATS:
            if form.option in options and form is not here:
                raise FidkitError(f"{form.option} is for {form.name} only; this is {here.name}")
        found = here.read(path, **options)
        if isinstance(found, Record):
            return _assemble(found, given, path.name)
        # a signal already
        return _assemble(archive.as_record(found), given, path.name, found) if given else found
    except FidkitError as error:
        text = " ".join(str(error).splitlines())
        raise type(error)(f"{path.name}: {text}") from error
    except FileNotFoundError as error:
        raise FidkitError(f"{path}: there is no such file or folder; check the path") from error
    except OSError as error:
        raise FidkitError(f"{path.name}: cannot be read: {error.strerror or error}") from error
    except MemoryError as error:
        raise FidkitError(f"{path.name}: is larger than the memory; cut it into parts") from error


def write(signal: xr.DataArray, path: str | os.PathLike[str]) -> Path:
    """Write a record, whole or not at all; the suffix says in which format.

    Parameters
    ----------
    signal : xarray.DataArray
        FID or spectrum.
    path : path-like
        ``.nc`` and ``.zarr`` keep everything to the last bit; ``.npz`` keeps everything with which
        `fidkit.from_array` makes a signal; ``.csv`` and ``.txt`` hold one record in full precision;
        ``.dx`` and ``.jdx`` one record, rounded to 31 bits. Tables and JCAMP-DX keep no coordinates
        beside the axis. A file that is there already is replaced; a folder only if it is a Zarr
        store that fidkit wrote.

    Returns
    -------
    pathlib.Path
        The file.

    Raises
    ------
    FidkitError
        If the suffix is not known or the format cannot hold this signal.

    Notes
    -----
    Every format keeps all attributes: text, numbers, whole numbers of 64 bits and switches, under
    names of letters, digits, blanks and ``_ . -``. Anything else is refused. Only ``source`` becomes
    the name of the file that is read, except in ``.nc`` and ``.zarr``, which alone keep numpy's own
    types of numbers.
    """
    path = _path(path)
    suffix = path.suffix.lower()
    try:
        signal = writable(signal)
        writers = {end: form.write for form in FORMATS if form.write for end in form.suffixes}
        if suffix not in writers:
            raise FidkitError(
                f"the suffix must be one of {', '.join(writers)}; got {suffix or 'none'}"
            )
        writers[suffix](signal, path)
    except FidkitError as error:
        raise type(error)(f"{path.name}: {error}") from error
    except OSError as error:
        raise FidkitError(f"{path.name}: cannot be written: {error.strerror or error}") from error
    return path


def from_universal(
    universal: Mapping[Any, Any],
    data: Any,
    *,
    carrier_frequency: float | None = None,
    dwell_time: float | None = None,
    nucleus: str | None = None,
    dims: Sequence[str] | None = None,
) -> xr.DataArray:
    """Make a signal from nmrglue's universal dictionary and the array that belongs to it.

    Parameters
    ----------
    universal : mapping
        The dictionary, as ``guess_udic`` or ``create_blank_udic`` make it.
    data : array_like, shape (..., points)
        The array, or a list of a real and an imaginary one.
    carrier_frequency, dwell_time, nucleus, dims
        As in `read`; they win over the dictionary, whose placeholders count as missing.

    Returns
    -------
    xarray.DataArray
        FID or spectrum.

    Raises
    ------
    FidkitError
        If the dictionary does not fit the array, or lacks something that is not given here.

    Notes
    -----
    For JCAMP-DX nmrglue 0.12 puts the duration of an FID where the width belongs; read such files
    with `read`, or pass `dwell_time`.
    """
    from fidkit.formats import universal_dictionary

    try:
        given = _given(
            carrier_frequency=carrier_frequency, dwell_time=dwell_time, nucleus=nucleus, dims=dims
        )
        return _assemble(universal_dictionary.read(universal, data), given, "")
    except FidkitError as error:
        raise type(error)(f"universal dictionary: {error}") from error


def _path(path: Any) -> Path:
    text = (
        path if isinstance(path, str) else os.fspath(path) if hasattr(path, "__fspath__") else None
    )
    if not isinstance(text, str) or not text or "\0" in text:
        raise FidkitError(
            f"path must be text or a path, not empty and without NUL; got {shown(path)}"
        )
    return Path(text)


def _given(**arguments: Any) -> dict[str, Any]:
    """Those arguments that were given, each of its kind."""
    given = {name: value for name, value in arguments.items() if value is not None}
    for name, value in given.items():
        if name in ("dwell_time", "carrier_frequency", "time_start"):
            fits, kind = isinstance(value, Real) and not isinstance(value, bool), "a number"
        elif name == "dims":
            value = (value,) if isinstance(value, str) else value
            fits = isinstance(value, Sequence) and all(isinstance(part, str) for part in value)
            given[name] = tuple(value) if fits else value
            kind = "names of dimensions"
        else:
            fits, kind = isinstance(value, str), "text"
        if not fits:
            raise FidkitError(f"{name} must be {kind}; got {shown(value)}")
    if "nucleus" in given:
        given["nucleus"] = find_nucleus(given["nucleus"]).name
    return given


def _format_of(path: Path) -> Format:
    head = b""
    if not path.is_dir():
        if path.exists() and not path.is_file():  # reading from a pipe or a device may never end
            raise FidkitError("is neither a file nor a folder; copy the record into a file first")
        with path.open("rb") as file:
            head = file.read(65536)
        if not head.strip():
            raise FidkitError("the file is empty; copy or record it again")
    for form in FORMATS:
        if form.knows(path, head):
            return form
    if path.is_dir():
        raise FidkitError(f"is a folder, and no Zarr store (format 3); {KNOWN}")
    if head.startswith((b"CDF\x01", b"CDF\x02", b"CDF\x05")):
        raise FidkitError("is netCDF of an older kind; fidkit reads netCDF-4, as it writes it")
    if head.startswith(b"\xd0\xcf\x11\xe0"):
        raise FidkitError(SPREADSHEET)
    raise FidkitError(f"is of no format that fidkit knows; {KNOWN}")


def _assemble(
    record: Record, given: Mapping[str, Any], source: str, before: xr.DataArray | None = None
) -> xr.DataArray:
    """Let the caller's words win over the file's, ask for what is missing, and make the signal."""
    notes = list(record.notes)
    for name, value in given.items():
        stated = getattr(record, name)
        if stated is not None and not _same(stated, value):
            notes.append(
                f"{name} {_value_text(value)} was given; the file says {_value_text(stated)}"
            )
        elif name != "dims":
            notes.append(f"{name} {_value_text(value)} was given")
        setattr(record, name, value)
    is_fid = record.frequency is None
    if record.carrier_frequency is None:
        raise FidkitError(
            "carrier_frequency is not in the file; give carrier_frequency in Hz (--carrier-frequency HZ)"
        )
    if is_fid and record.dwell_time is None:
        raise FidkitError("dwell_time is not in the file; give dwell_time in s (--dwell-time S)")
    if not is_fid and {"dwell_time", "time_start"} & given.keys():
        raise FidkitError("holds a spectrum, which has no dwell_time or time_start to give")
    if not record.nucleus:
        notes.append("the nucleus is not in the file; taken as 1H")
    if is_fid and record.time_start is None:
        notes.append("the time of the first point is not in the file; taken as 0 s after the pulse")
    try:
        nucleus = find_nucleus(record.nucleus or "1H").name
    except FidkitError as error:
        raise FidkitError(
            f"{error} in the file; give nucleus (--nucleus NAME) to read it as another one"
        ) from None
    shared: dict[str, Any] = {
        "carrier_frequency": record.carrier_frequency,
        "nucleus": nucleus,
        "units": "1" if record.units is None else record.units,
        "sample": record.sample or "",
        "coil": record.coil or "",
        "source": source,
        "dims": record.dims,
        "coords": record.coords,
    }
    try:
        if is_fid:
            signal = signals.from_array(
                record.values,
                dwell_time=record.dwell_time,  # type: ignore[arg-type]
                time_start=record.time_start or 0.0,
                **shared,
            )
        else:
            frequency = np.asarray(record.frequency, dtype=float)
            if record.frequency_in_ppm:
                frequency = frequency * float(record.carrier_frequency) * 1e-6
            signal = signals.spectrum_from_array(record.values, frequency=frequency, **shared)
    except FidkitError:
        raise
    except ValueError as error:  # of xarray, where a coordinate does not fit
        raise FidkitError(f"the coordinates do not fit the values: {error}") from error
    made = signal.attrs.pop("notes", "")
    signal.attrs |= {
        name: str(value) if name in ("history", "notes") else value
        for name, value in record.more.items()
        if name not in (*FIELDS, "source")
    }
    check_facts(signal.attrs, signal.shape[-1])
    if made and made not in signal.attrs.get("notes", ""):
        notes.append(made)
    if before is not None:
        signal.name = before.name
        along = {name: item for name, item in before.coords.items() if name not in signal.coords}
        signal = signal.assign_coords({name: item.variable for name, item in along.items()})
        signal.attrs["source"] = before.attrs.get("source", source)
    for note in notes:
        signals.add_note(signal, note)
    return signal


def _same(one: Any, other: Any) -> bool:
    """Equal, numbers to the rounding of a double."""
    if isinstance(one, Real) and isinstance(other, Real):
        return math.isclose(one, other, rel_tol=1e-12)
    return bool(one == other)


def _value_text(value: Any) -> str:
    return f"{value:.10g}" if isinstance(value, Real) else repr(value)
