"""Where is the line, how wide is it, how strong, and how sure is that."""

from __future__ import annotations

from numbers import Real
from typing import TYPE_CHECKING, Any

import numpy as np
import numpy.typing as npt
import xarray as xr

from fidkit import signals
from fidkit.measure.found import QUANTITIES, Line, Wanted, column_name
from fidkit.measure.record import (
    Record,
    Unseen,
    one_channel,
    record_as_it_stands,
    record_of,
    total_shift,
)
from fidkit.measure.recorded import measure_block
from fidkit.measure.standing import measure_standing
from fidkit.nuclei import find_nucleus
from fidkit.numerics.lines import ADDITION_COST
from fidkit.params import FidkitError, ParameterError, shown
from fidkit.threads import in_threads

if TYPE_CHECKING:
    import pandas

__all__ = ["QUANTITIES", "measure", "table"]

METHOD = (
    "least-squares fit of damped lines to the discrete transform of the record within 25 widths of "
    "the line; windows divided out, truncation in the model; a background, a further line or a "
    "Gaussian part is kept where it lowers the Bayesian information criterion by more than "
    f"{ADDITION_COST:g}; t2_star_decay by an exponential laid through the decay in its first three "
    "time constants; uncertainties hold for the shape chosen"
)
METHOD_STANDING = (
    "least-squares fit of Lorentzian lines and a constant to the spectrum as it stands, within 25 "
    "widths of the line"
)
SNR_DEFINITION = (
    "height of the line over the rms noise of the real part, in the spectrum as it stands; for an "
    "FID, in its plain transform"
)
FIELD_ASSUMPTION = (
    "field: shielded nucleus of the reference compound (for 1H water, sphere, 25 C); "
    "the sample's own shift is not known"
)

FEWEST_POINTS = 16
MOST_LINES = 50
#: Records handled at once: a few megabytes of scratch.
BLOCK_POINTS = 2**20


def measure(
    signal: xr.DataArray,
    *,
    near: float | None = None,
    region: tuple[float, float] | None = None,
    lines: int = 1,
    noise: tuple[float, float] | None = None,
) -> xr.Dataset:
    """Measure the strongest line, or chosen ones, with uncertainties.

    Parameters
    ----------
    signal : xarray.DataArray, dims (..., time) or (..., frequency)
        A complex FID, or a spectrum. Of a spectrum made by fidkit steps the record behind it is
        measured, so that apodization, zero filling and phase change nothing but the noise.
    near : float, optional
        Hz: the line nearest to this frequency instead of the strongest.
    region : (float, float), optional
        Hz: look only between these frequencies.
    lines : int
        How many lines to fit together; they then run along the dimension ``line``, by frequency.
    noise : (float, float), optional
        Hz: a region without any line, to take the noise of ``snr`` from.

    Returns
    -------
    xarray.Dataset
        For each quantity ``q`` of `QUANTITIES`: ``q``, ``q_std`` (one standard uncertainty, same
        unit) and ``q_status`` (``ok``, or what is doubtful or missing; then the value or its
        uncertainty may be NaN), along the leading dimensions of the signal. ``lineshape`` says
        which shape was chosen, ``status`` sums up.

    Raises
    ------
    FidkitError
        If the record is too short or real-valued, or a parameter is not allowed.

    Notes
    -----
    Linewidth and T2*: ``T2* = 1 / (pi FWHM)``, Fourier pair of the exponential decay. Signal to
    noise: height over rms noise. Uncertainties are from the covariance of the fit with the noise
    found in its residual. A decay that differs from the linewidth's T2* by more than three of its
    standard uncertainties is said in ``t2_star_decay_status``. A constant offset is fitted where it
    shows; under a line at the carrier a small one may not, so take it off with `remove_offset`.
    """
    wanted = _checked(signal, near, region, lines, noise)
    results: list[list[Line]] = []
    notes = [line for line in str(signal.attrs.get("notes", "")).splitlines() if line]
    record: Record | None
    reason = ""
    try:
        record = record_of(signal)
    except Unseen as why:
        reason = str(why)
        record = record_as_it_stands(signal) if signals.is_fid(signal) else None
    points = signal.shape[-1] if record is None else record.values.shape[1]
    if points < FEWEST_POINTS:
        raise FidkitError(
            f"measure: needs at least {FEWEST_POINTS} measured points; got {points}; "
            "record for longer"
        )
    if record is not None:
        method = METHOD
        for found in in_threads(
            lambda block: measure_block(block, wanted), record.blocks(BLOCK_POINTS)
        ):
            results += found
    else:
        method = METHOD_STANDING
        frequency = signal["frequency"].values
        for values in signal.values.reshape(-1, points):
            results.append(measure_standing(values, frequency, wanted))
    if one_channel(signal):
        for line in (line for found in results for line in found):
            for name in ("frequency_offset", "frequency_offset_ppm", "field"):
                line.status.setdefault(name, "doubtful: one channel cannot tell the sign")
    if reason:
        notes.append(
            f"measured as it stands, since {reason}: the linewidth holds any apodization, and the "
            "uncertainties take neighbouring points as independent"
        )
        for line in (line for found in results for line in found):
            for name in QUANTITIES:
                line.status.setdefault(
                    name, "doubtful: measured as it stands, with any apodization"
                )
            if np.isfinite(line.frequency):
                line.notes.append("measured as it stands")
    return _dataset(signal, results, lines, method, notes)


def _checked(
    signal: xr.DataArray,
    near: float | None,
    region: tuple[float, float] | None,
    lines: int,
    noise: tuple[float, float] | None,
) -> Wanted:
    signals.check_signal(signal, "measure")
    in_time = signals.is_fid(signal)
    taken = {f"{name}{end}" for name in QUANTITIES for end in ("", "_std", "_status")}
    taken |= {"lineshape", "status"} | ({"line"} if lines != 1 else set())
    clash = sorted(taken & {str(name) for name in (*signal.dims, *signal.coords)})
    if clash:
        raise FidkitError(
            f"measure: {', '.join(clash)} is the name of a result and may not be that of a dimension "
            "or coordinate of the signal too; rename it with .rename"
        )
    if not np.isfinite(signal.values).all():
        raise FidkitError("measure: the signal must be finite; cut out or repair its NaN values")
    if "nucleus" not in signal.attrs:
        raise FidkitError(
            "measure: the attribute nucleus is missing; arithmetic may have dropped it; set it, or "
            "use .copy(data=...)"
        )
    if in_time:
        half = 0.5 / signals.dwell_time(signal)
        low, high = -half, half
    else:
        axis = signal["frequency"].values
        low, high = float(axis[0]), float(axis[-1])
    limits = f"[{low:g}, {high:g}] Hz"

    def pair(value: Any, name: str) -> tuple[float, float] | None:
        if value is None:
            return None
        try:
            first, second = (float(part) for part in value)
        except (TypeError, ValueError):
            first, second = np.nan, np.nan
        if not (low <= first < second <= high):
            raise ParameterError(
                f"measure: {name} must be a pair (low, high) of numbers within {limits}, "
                f"or None; got {shown(value)}"
            )
        return first, second

    if near is not None and (
        isinstance(near, bool) or not isinstance(near, Real) or not low <= float(near) <= high
    ):
        raise ParameterError(
            f"measure: near must be a number in {limits}, or None; got {shown(near)}"
        )
    if isinstance(lines, bool) or not isinstance(lines, int | np.integer):
        raise ParameterError(f"measure: lines must be a whole number; got {shown(lines)}")
    if not 1 <= lines <= MOST_LINES:
        raise ParameterError(f"measure: lines must be in [1, {MOST_LINES}]; got {lines!r}")
    return Wanted(
        None if near is None else float(near),
        pair(region, "region"),
        int(lines),
        pair(noise, "noise"),
    )


def _dataset(
    signal: xr.DataArray,
    results: list[list[Line]],
    lines: int,
    method: str,
    notes: list[str],
) -> xr.Dataset:
    leading = signal.dims[:-1]
    dims = (*leading, "line") if lines > 1 else leading
    shape = (*signal.shape[:-1], lines) if lines > 1 else signal.shape[:-1]
    flat = [line for found in results for line in found]
    carrier = float(signal.attrs["carrier_frequency"])
    nucleus = find_nucleus(str(signal.attrs["nucleus"]))
    units = str(signal.attrs.get("units", "1"))
    if not signals.is_fid(signal):
        units = "1" if units == "s" else units.removesuffix(" s")

    def column(name: str, factor: float = 1.0) -> npt.NDArray[Any]:
        return factor * np.array([getattr(line, name) for line in flat], dtype=float)

    frequency, frequency_std = column("frequency"), column("frequency_std")
    width, width_std = column("width"), column("width_std")
    with np.errstate(divide="ignore", invalid="ignore"):
        t2_star = np.where(width > 0, 1 / (np.pi * width), np.nan)
        t2_star_std = t2_star * width_std / width
    # a line that was shifted by hand is still where it was in the field
    tesla = (carrier + frequency - total_shift(signal)) / nucleus.hertz_per_tesla()
    tesla_std = np.hypot(
        frequency_std / nucleus.hertz_per_tesla(), tesla * nucleus.relative_uncertainty
    )
    numbers = {
        "frequency_offset": (frequency, frequency_std),
        "frequency_offset_ppm": (frequency / carrier * 1e6, frequency_std / carrier * 1e6),
        "linewidth": (width, width_std),
        "linewidth_ppm": (width / carrier * 1e6, width_std / carrier * 1e6),
        "t2_star": (t2_star, t2_star_std),
        "t2_star_decay": (column("decay"), column("decay_std")),
        "field": (tesla, tesla_std),
        "amplitude": (column("amplitude"), column("amplitude_std")),
        "phase": (
            np.rad2deg(np.angle(np.exp(1j * column("phase")))),
            np.rad2deg(column("phase_std")),
        ),
        "snr": (column("snr"), column("snr_std")),
    }
    variables: dict[str, Any] = {}
    for name, (unit, long_name) in QUANTITIES.items():
        value, std = numbers[name]
        unit = units if unit is None else unit
        status = [_status(line, name, lines) for line in flat]
        for place, text in enumerate(status):
            if not np.isfinite(value[place]):
                std[place] = np.nan
                reason = "not to be had from this record" if text == "ok" else text
                status[place] = (
                    f"missing: {reason.removeprefix('missing: ').removeprefix('doubtful: ')}"
                )
            elif not np.isfinite(std[place]) and text == "ok":
                status[place] = "doubtful: uncertainty not known"
        variables[name] = (
            dims,
            value.reshape(shape),
            {
                "units": unit,
                "long_name": long_name,
                "ancillary_variables": f"{name}_std {name}_status",
            },
        )
        variables[f"{name}_std"] = (
            dims,
            std.reshape(shape),
            {"units": unit, "long_name": f"standard uncertainty: {long_name}"},
        )
        variables[f"{name}_status"] = (
            dims,
            np.array(status, dtype=str).reshape(shape),
            {"long_name": f"status: {long_name}"},
        )
    texts = {
        "lineshape": [line.shape for line in flat],
        "status": ["; ".join(dict.fromkeys(line.notes)) or "ok" for line in flat],
    }
    for name, entries in texts.items():
        variables[name] = (dims, np.array(entries, dtype=str).reshape(shape), {"long_name": name})
    variables["snr"][2]["definition"] = SNR_DEFINITION
    variables["field"][2]["assumption"] = FIELD_ASSUMPTION
    coords = {
        name: coordinate
        for name, coordinate in signal.coords.items()
        if signal.dims[-1] not in coordinate.dims
    }
    kept = ("carrier_frequency", "nucleus", "sample", "coil", "source", "history")
    return xr.Dataset(
        variables,
        coords=coords,
        attrs={
            **{name: signal.attrs[name] for name in kept if name in signal.attrs},
            "method": method,
            "notes": "\n".join(notes),
        },
    )


def _status(line: Line, name: str, lines: int) -> str:
    if name == "t2_star_decay" and lines > 1:
        return line.status.get(name, "missing: the decay is shared by several lines")
    return line.status.get(name, "ok")


def table(*results: xr.Dataset) -> pandas.DataFrame:
    """One row a line: the results of one or many measurements as a table.

    Parameters
    ----------
    *results : xarray.Dataset
        What `measure` gave, of one record each or of many.

    Returns
    -------
    pandas.DataFrame
        Columns: ``source``, the leading dimensions where there are any, then every quantity, its
        standard uncertainty and its status, such as ``linewidth_hz``, ``linewidth_std_hz`` and
        ``linewidth_status``; an amplitude is in the unit of its record, ``amplitude_unit``.

    Raises
    ------
    FidkitError
        If nothing is given.
    """
    import pandas

    if not results:
        raise FidkitError("table: give at least one result of measure")
    frames = []
    for result in results:
        # a single record has no dimension, and then xarray makes no table of it
        rows = (
            result.to_dataframe().reset_index()
            if result.sizes
            else result.expand_dims("record").to_dataframe().reset_index(drop=True)
        )
        for name in QUANTITIES:
            unit = str(result[name].attrs["units"])
            columns = {f"{name}{end}": column_name(name, unit, end) for end in ("", "_std")}
            rows = rows.rename(columns=columns)
        rows["amplitude_unit"] = str(result["amplitude"].attrs["units"])
        rows.insert(0, "source", str(result.attrs.get("source", "")))
        frames.append(rows)
    return pandas.concat(frames, ignore_index=True)
