"""``.npy`` and ``.npz``: an array, and by its side what a signal needs. Nothing is unpickled."""

from __future__ import annotations

import io
import json
import math
import tokenize
import warnings
import zipfile
from collections.abc import Mapping
from pathlib import Path
from typing import Any, BinaryIO

import numpy as np
import numpy.typing as npt
import xarray as xr

from fidkit import signals
from fidkit.files import write_whole
from fidkit.formats.record import (
    SPREADSHEET,
    Record,
    exact_spacing,
    mapping,
    plain_value,
    require_finite,
)
from fidkit.params import FidkitError

__all__ = ["read", "write"]

NUMBERS = ("dwell_time", "carrier_frequency", "time_start")
TEXTS = ("nucleus", "units", "sample", "coil")
#: An archive that unpacks to more than this, and to more than a hundred times its size, is refused.
LARGEST_UNPACKED = 2**28
COORDINATE = "coordinate_"
#: What numpy raises on a header that is none.
UNREADABLE = (ValueError, TypeError, SyntaxError, EOFError, OverflowError, tokenize.TokenError)


def read(path: Path) -> Record:
    """Read an array, or an archive with ``data`` (or ``signal``) and its facts.

    Parameters
    ----------
    path : pathlib.Path
        The file. An archive may also hold ``dwell_time``, ``carrier_frequency``, ``nucleus``,
        ``time_start``, ``units``, ``sample``, ``coil``, and ``frequency`` for a spectrum.

    Returns
    -------
    Record
        Values and facts.

    Raises
    ------
    FidkitError
        If the file is damaged or holds no such array.
    """
    with path.open("rb") as file:
        if file.read(2) != b"PK":
            file.seek(0)
            return Record(_array(file, path.stat().st_size, path.name))
    try:
        with zipfile.ZipFile(path) as archive:
            return _archive(archive, path.stat().st_size)
    except (zipfile.BadZipFile, NotImplementedError, RuntimeError, EOFError, OSError) as error:
        raise FidkitError(f"the archive is damaged: {error}; save it again") from None
    except Exception as error:
        if type(error).__module__ in ("zlib", "_lzma", "lzma"):
            raise FidkitError(f"the archive is damaged: {error}; save it again") from None
        raise


def _array(file: BinaryIO, size: int, name: str) -> npt.NDArray[Any]:
    """Read an array of which every byte is there, and no more than that."""
    try:
        version = np.lib.format.read_magic(file)
        if version[0] not in (1, 2):
            raise ValueError(f"format {version} is not known")
        header = np.lib.format.read_array_header_1_0 if version[0] == 1 else np.lib.format.read_array_header_2_0  # fmt: skip
        with warnings.catch_warnings():  # of Python's parser, about damaged text
            warnings.simplefilter("ignore")
            shape, fortran, dtype = header(file)
        if dtype.hasobject:
            raise FidkitError(f"{name} holds Python objects; save an array of plain numbers")
        wanted = math.prod(shape) * dtype.itemsize
        offset = file.tell()
        if wanted != size - offset:
            raise FidkitError(
                f"{name} must hold {wanted} bytes for shape {shape} of {dtype}; got {size - offset}; "
                "the file is cut short or damaged"
            )
        raw = file.read(wanted)
        if len(raw) != wanted:
            raise ValueError("it ends too early")
        values = np.frombuffer(raw, dtype=dtype).reshape(shape, order="F" if fortran else "C")
    except FidkitError:
        raise
    except UNREADABLE as error:
        raise FidkitError(f"{name} is no readable array: {error}; save it again") from None
    return values.copy()


def _archive(archive: zipfile.ZipFile, size: int) -> Record:
    members = {info.filename.removesuffix(".npy"): info for info in archive.infolist()}
    if "[Content_Types].xml" in members or "mimetype" in members:
        raise FidkitError(SPREADSHEET)
    if len(members) < len(archive.infolist()):
        raise FidkitError("holds two arrays of one name; save it again with numpy.savez")
    unpacked = sum(info.file_size for info in members.values())
    if unpacked > LARGEST_UNPACKED and unpacked > 100 * size:
        raise FidkitError(
            f"unpacks from {size} to {unpacked} bytes, which no measured record does; "
            "save it with numpy.savez"
        )

    def load(name: str) -> npt.NDArray[Any]:
        with archive.open(members[name]) as file:
            return _array(file, members[name].file_size, name)  # type: ignore[arg-type]

    known = [name for name in ("data", "signal") if name in members]
    if len(known) != 1:
        raise FidkitError(
            f"must hold one array called data or signal; got {', '.join(sorted(members))[:200] or 'nothing'}"
        )
    record = Record(load(known[0]))
    along: dict[str, Any] = {}
    for name in members:
        if name in known:
            continue
        value = load(name)
        if name in NUMBERS:
            if value.size != 1 or value.dtype.kind not in "iuf":
                raise FidkitError(f"{name} must be one number; got {value.dtype} of {value.shape}")
            setattr(record, name, float(value.reshape(()).item()))
        elif name in TEXTS and value.size == 1:
            setattr(record, name, str(value.reshape(-1)[0]))
        elif name == "frequency":
            if value.dtype.kind not in "iuf":
                raise FidkitError(f"frequency must be numbers of Hz; got {value.dtype}")
            record.frequency = value.astype(float)
        elif name == "dims" and value.dtype.kind == "U":
            record.dims = tuple(str(part) for part in value.reshape(-1))
        elif name == "attributes" and value.dtype.kind == "U" and value.size == 1:
            record.keep(mapping(str(value.reshape(-1)[0]), name))
        elif name == "layout_of_coordinates":
            along = mapping(str(value.reshape(-1)[0]) if value.size == 1 else "", name)
        elif name.startswith(COORDINATE):
            record.coords[name.removeprefix(COORDINATE)] = value
        elif value.size == 1 and value.dtype.kind in "iufU":
            record.more[name] = value.reshape(()).item()
        else:
            record.notes.append(
                f"{name} ({value.dtype} of {value.shape}) is not known and left out"
            )
    for name, value in record.coords.items():
        try:
            facts = along.get(name, {})
            record.coords[name] = xr.Variable(
                facts.get("dims", (name,)), value, facts.get("attributes", {})
            )
        except (ValueError, TypeError, AttributeError) as error:
            raise FidkitError(f"coordinate {name}: {error}") from None
    return record


def write(signal: xr.DataArray, path: Path) -> None:
    """Write a signal as an archive of plain arrays.

    Parameters
    ----------
    signal : xarray.DataArray
        FID or spectrum.
    path : pathlib.Path
        File to write.

    Raises
    ------
    FidkitError
        For values that are not finite.
    """
    require_finite(signal.values)
    axis = np.asarray(signal[signal.dims[-1]].values, dtype=float)
    attributes = dict(signal.attrs)
    entries: dict[str, Any] = {
        "data": np.asarray(signal.values),
        "dims": np.array([str(name) for name in signal.dims]),
        "carrier_frequency": float(attributes.pop("carrier_frequency")),
    }
    if signals.is_fid(signal):
        entries |= {"dwell_time": exact_spacing(axis), "time_start": float(axis[0])}
    else:
        entries["frequency"] = axis
    for name in TEXTS:
        entries[name] = str(attributes.pop(name, ""))
    facts = {}
    for key, coordinate in signal.coords.items():
        name = str(key)
        if signal.dims[-1] in coordinate.dims:
            continue
        values = np.asarray(coordinate.values)
        # some versions of xarray hang metadata on the dtype of text, which numpy cannot write
        entries[COORDINATE + name] = values.astype(values.dtype.str)
        facts[name] = {
            "dims": [str(dim) for dim in coordinate.dims],
            "attributes": _plain(coordinate.attrs),
        }
    entries["attributes"] = json.dumps(_plain(attributes))
    entries["layout_of_coordinates"] = json.dumps(facts)
    target = io.BytesIO()
    np.savez(target, allow_pickle=False, **entries)
    write_whole(path, target.getvalue())


def _plain(attributes: Mapping[Any, Any]) -> dict[str, Any]:
    return {str(key): plain_value(value) for key, value in attributes.items()}
