"""netCDF and Zarr, as fidkit writes them: everything comes back to the last bit.

A complex signal is kept in netCDF as two variables, ``signal_real`` and ``signal_imaginary``, so
that any other tool can open the file; Zarr has complex numbers of its own. What these formats
cannot say (types of text, times and switches, what belongs to which) stands in the attribute
``fidkit_layout`` as JSON.
"""

from __future__ import annotations

import importlib
import json
import warnings
from collections.abc import Mapping
from pathlib import Path
from typing import Any

import numpy as np
import xarray as xr

from fidkit import signals
from fidkit.files import replacing
from fidkit.formats.record import Record, exact_spacing, plain_value
from fidkit.params import FidkitError, shown

__all__ = ["as_record", "read", "write"]

LAYOUT = "fidkit_layout"
SINCE = "since 1970-01-01"
TICKS = {"s": "seconds", "ms": "milliseconds", "us": "microseconds", "ns": "nanoseconds"}


def write(signal: xr.DataArray, path: Path, kind: str) -> None:
    """Write a signal.

    Parameters
    ----------
    signal : xarray.DataArray
        FID or spectrum, also a lazy one.
    path : pathlib.Path
        File, or folder for Zarr.
    kind : {'netCDF', 'Zarr'}
        The format.

    Raises
    ------
    FidkitError
        If a coordinate is of no kind that the format can hold, or `path` is a folder that is no
        store of fidkit's own.
    """
    _need(kind)
    if path.is_dir() and not (kind == "Zarr" and _is_own_store(path)):
        raise FidkitError(
            "is a folder that is no Zarr store written by fidkit, and is left as it is; give another name"
        )
    if signal.chunks is not None:  # Zarr holds blocks of one shape only
        signal = signal.chunk(dict(zip(signal.dims, map(max, signal.chunks), strict=True)))
    dataset = _packed(signal, split=kind == "netCDF")
    with replacing(path, folder=kind == "Zarr") as target, warnings.catch_warnings():
        # the way Zarr stores text is still to be put into its specification; it reads back
        warnings.filterwarnings("ignore", message=".*Zarr V3 specification.*")
        # which variables are coordinates stands in the layout
        warnings.filterwarnings("ignore", message="coordinate .* has a space in its name")
        # check sums, so that damage is seen when the file is read
        sums: dict[str, Any] = {"fletcher32": True}
        if kind == "Zarr":
            from zarr.codecs import ZstdCodec

            sums = {"compressors": (ZstdCodec(level=0, checksum=True),)}
        told = {
            name: {"_FillValue": None, **sums}
            for name, item in dataset.variables.items()
            if item.ndim and item.dtype.kind != "O"
        }
        if kind == "netCDF":
            dataset.to_netcdf(target, engine="h5netcdf", format="NETCDF4", encoding=told)
        else:
            # blocks of nothing but zeros are written too, so that a lost one can be told
            dataset.to_zarr(
                target, zarr_format=3, consolidated=False, encoding=told, write_empty_chunks=True
            )


def read(path: Path, kind: str, chunks: Any = None) -> xr.DataArray:
    """Read a signal that `write` wrote.

    Parameters
    ----------
    path : pathlib.Path
        File or folder.
    kind : {'netCDF', 'Zarr'}
        The format.
    chunks : optional
        For Zarr: stay lazy in blocks of this shape.

    Returns
    -------
    xarray.DataArray
        The signal.

    Raises
    ------
    FidkitError
        If the file was not written by fidkit or is damaged.
    """
    _need(kind)
    if chunks is not None:
        _need("chunks")
    try:
        with warnings.catch_warnings():
            warnings.filterwarnings("ignore", message=".*Zarr V3 specification.*")
            warnings.filterwarnings("ignore", message=".*not recognized as a component of a Zarr")
            if kind == "netCDF":
                import h5py

                # h5netcdf trips over its own feet where the head of a file is damaged; see first
                with h5py.File(path, "r") as file:
                    dict(file.attrs)
                with xr.open_dataset(path, engine="h5netcdf", decode_cf=False) as opened:
                    dataset = opened.load()
            else:
                dataset = _open_store(path, chunks)
        layout = json.loads(dataset.attrs[LAYOUT])
        signal = _unpacked(dataset, layout)
    except (MemoryError, FidkitError):
        raise
    except KeyError as error:
        raise FidkitError(
            f"holds no {error.args[0] if error.args else 'signal'}; fidkit reads the {kind} that fidkit writes"
        ) from None
    except Exception as error:
        reason = " ".join(str(error).split())[:160] or type(error).__name__
        raise FidkitError(f"this {kind} cannot be read: {reason}; it may be damaged") from error
    axis = np.asarray(signal[signal.dims[-1]].values, dtype=float)
    signals.even_spacing(axis, str(signal.dims[-1]), "s" if signals.is_fid(signal) else "Hz")
    return signal


def _open_store(path: Path, chunks: Any) -> xr.Dataset:
    import zarr

    for name, array in zarr.open_group(
        path, mode="r", zarr_format=3, use_consolidated=False
    ).arrays():
        missing = array.nchunks - array.nchunks_initialized
        if missing:  # Zarr itself would fill them with zeros
            raise FidkitError(
                f"{missing} of {array.nchunks} blocks of {name} are missing; the store is damaged or "
                "was not copied whole"
            )

    def opened(chunks: Any) -> xr.Dataset:
        return xr.open_dataset(
            path, engine="zarr", decode_cf=False, consolidated=False, zarr_format=3, chunks=chunks
        )

    dataset = opened(None)
    if chunks is None:
        return dataset.load()
    try:
        if isinstance(chunks, Mapping) and not chunks.keys() <= set(dataset.dims):
            raise ValueError(f"the dimensions are {', '.join(map(str, dataset.dims))}")
        return opened(chunks)
    except Exception as error:
        reason = " ".join(str(error).split())[:160]
        raise FidkitError(
            "chunks must be {}, 'auto', a number of points or such numbers by dimension; "
            f"got {shown(chunks)}: {reason}"
        ) from error


#: Libraries by what they are needed for.
LIBRARIES = {"netCDF": ("h5py", "h5netcdf"), "Zarr": ("zarr",), "chunks": ("dask",)}


def _need(what: str) -> None:
    for name in LIBRARIES[what]:
        try:
            importlib.import_module(name)
        except ImportError as error:
            raise FidkitError(
                f"{what} needs the library {name}, which cannot be loaded ({error}); install {name}"
            ) from error


def _is_own_store(path: Path) -> bool:
    """Whether a folder holds what `write` puts there, and nothing else."""
    try:
        attributes = json.loads((path / "zarr.json").read_bytes()).get("attributes", {})
    except (OSError, ValueError, AttributeError):
        return False
    return LAYOUT in attributes and all(
        entry.name == "zarr.json" or (entry / "zarr.json").is_file() for entry in path.iterdir()
    )


def as_record(signal: xr.DataArray) -> Record:
    """Take a signal apart again, so that the caller's words can win over the file's."""
    axis = np.asarray(signal[signal.dims[-1]].values, dtype=float)
    more = dict(signal.attrs)
    facts = {
        name: more.pop(name, None)
        for name in ("carrier_frequency", "nucleus", "units", "sample", "coil")
    }
    record = Record(
        signal.values,
        dims=tuple(str(name) for name in signal.dims),
        # those along the axis are as they were, or follow from the caller's words
        coords={
            str(name): coordinate
            for name, coordinate in signal.coords.items()
            if signal.dims[-1] not in coordinate.dims
        },
        more=more,
        **facts,
    )
    if signals.is_fid(signal):
        record.dwell_time, record.time_start = exact_spacing(axis), float(axis[0])
    else:
        record.frequency = axis
    return record


def _packed(signal: xr.DataArray, *, split: bool) -> xr.Dataset:
    dims = [str(name) for name in signal.dims]
    data = signal.variable
    coordinates, types = {}, {}
    for name, coordinate in signal.coords.items():
        values = coordinate.values
        types[str(name)] = values.dtype.str
        attributes = dict(coordinate.attrs)
        if values.dtype.kind in "mM":
            unit, count = np.datetime_data(values.dtype)
            if unit not in TICKS or count != 1:
                raise FidkitError(
                    f"coordinate {name} must count s, ms, us or ns; got {values.dtype}"
                )
            units = TICKS[unit] if values.dtype.kind == "m" else f"{TICKS[unit]} {SINCE}"
            values, attributes = values.astype(np.int64), {**attributes, "units": units}
        elif values.dtype.kind == "b":
            values = values.astype(np.int8)
        elif values.dtype.kind == "U":
            values = values.astype(object)
        coordinates[str(name)] = xr.Variable(
            coordinate.dims, values, _attributes(attributes), {"_FillValue": None}
        )
    layout = {
        "name": signal.name if signal.name is None else str(signal.name),
        "dims": dims,
        "type": str(signal.dtype),
        "coordinates": types,
        "attributes": {str(key): _attribute_type(value) for key, value in signal.attrs.items()},
    }
    told = {key: str(signal.attrs[key]) for key in ("units", "long_name") if key in signal.attrs}
    parts = {"signal": data}
    if split and signal.dtype.kind == "c":
        parts = {"signal_real": data.real, "signal_imaginary": data.imag}
    variables = {
        name: xr.Variable(dims, part.data, dict(told), {"_FillValue": None})
        for name, part in parts.items()
    }
    attributes = _attributes(signal.attrs)
    return xr.Dataset(
        variables,
        coordinates,
        {"Conventions": "CF-1.11", **attributes, LAYOUT: json.dumps(layout, ensure_ascii=False)},
    )


def _unpacked(dataset: xr.Dataset, layout: dict[str, Any]) -> xr.DataArray:
    wanted = np.dtype(layout["type"])
    if "signal" in dataset.variables:
        data = dataset["signal"].variable.data
    else:
        real = dataset["signal_real"].variable.data
        data = np.empty(real.shape, dtype=wanted)
        data.real, data.imag = real, dataset["signal_imaginary"].variable.data
    if data.dtype != wanted:
        raise FidkitError(f"the signal must be {wanted}; got {data.dtype}; the file is damaged")
    coordinates = {}
    for name, kind in layout["coordinates"].items():
        if name not in dataset.variables:
            raise KeyError(name)
        stored = dataset[name].variable
        coordinate_type = np.dtype(kind)
        if coordinate_type.kind not in "iufbUmM":
            raise FidkitError(f"coordinate {name} is of a type that fidkit does not write: {kind}")
        attributes = _restored(stored.attrs)
        if coordinate_type.kind in "mM":
            attributes.pop("units", None)
        coordinates[name] = xr.Variable(
            stored.dims, np.asarray(stored.values).astype(coordinate_type), attributes
        )
    attributes = {
        key: _restored_value(dataset.attrs[key], kind) for key, kind in layout["attributes"].items()
    }
    for key in ("carrier_frequency", "nucleus"):
        if key not in attributes:
            raise KeyError(key)
    return xr.DataArray(
        data, dims=layout["dims"], coords=coordinates, attrs=attributes, name=layout["name"]
    )


def _attribute_type(value: Any) -> str:
    if isinstance(value, bool):
        return "switch"
    if isinstance(value, np.generic):
        return value.dtype.str
    return "plain"


def _attributes(attributes: Any) -> dict[str, Any]:
    kept: dict[str, Any] = {}
    for key, value in attributes.items():
        if isinstance(value, bool | np.bool_):
            kept[str(key)] = int(value)
        elif isinstance(value, str):
            kept[str(key)] = str(value)
        else:
            kept[str(key)] = plain_value(value)
    return kept


def _restored(attributes: Any) -> dict[str, Any]:
    return {str(key): _restored_value(value, "plain") for key, value in attributes.items()}


def _restored_value(value: Any, kind: str) -> Any:
    plain = plain_value(value)
    if kind == "plain":
        return plain
    return bool(plain) if kind == "switch" else np.dtype(kind).type(plain)
