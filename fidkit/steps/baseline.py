"""The baseline of a spectrum."""

from __future__ import annotations

import math
from typing import Annotated, Any

import numpy as np
import numpy.typing as npt
import xarray as xr

from fidkit import signals
from fidkit.params import Along, FidkitError, Range, Slider, Unit, step

#: Signal-free points wanted for each coefficient of the polynomial.
POINTS_PER_COEFFICIENT = 4

#: Rounds of finding the signal; it settles in a handful.
ROUNDS = 20


@step
def correct_baseline(
    spectrum: xr.DataArray,
    *,
    order: Annotated[int, Range(0, 10), Slider(0, 6, 1)] = 1,
    region: Annotated[tuple[float, float] | None, Unit("Hz"), Along("frequency")] = None,
    threshold: Annotated[
        float, Unit("standard deviations"), Range(2, 100), Slider(2, 10, 0.5)
    ] = 3.0,
) -> xr.DataArray:
    """Take a polynomial off that goes through the points without signal.

    Parameters
    ----------
    order : int
        Order of the polynomial; 0 is a constant.
    region : pair of float, optional
        Where signal is, Hz: points within are left out of the fit. Where nothing is said the
        points with signal are found, in each record.
    threshold : float
        A point holds signal where its magnitude above the baseline passes this many times the
        noise (standard deviation of either part).

    Returns
    -------
    xarray.DataArray
        The spectrum without its baseline, real and imaginary part each corrected. What was taken away is in the coordinate
        ``baseline``, so that `fidkit.measure` can put it back.

    Raises
    ------
    FidkitError
        If too few points without signal are left.

    Notes
    -----
    Least squares in Legendre polynomials over the axis scaled to [-1, 1], which keeps them well
    conditioned. Signal is found by repetition: fit, take the noise from the median magnitude of
    what is left over (for Gaussian noise 1.1774 standard deviations of either part; 0.6745 of a
    real-valued spectrum), leave out the points that pass the threshold and their neighbours, and
    fit again until the same points are left out. Common practice. The feet of strong lines below
    the threshold stay in the fit, and those of the dispersive part reach far: phase first.
    """
    axis = np.asarray(spectrum["frequency"].values, dtype=float)
    basis = np.polynomial.legendre.legvander(np.linspace(-1, 1, axis.size), order)
    records = spectrum.values.reshape(-1, axis.size)
    baselines = np.empty_like(records)
    quiet = np.ones(axis.size, bool)
    if region is not None:
        quiet[signals.points_in(spectrum["frequency"], *region, "correct_baseline: region")] = False
    for number, record in enumerate(records):
        if region is None:
            baselines[number] = _found(record, basis, threshold)
        else:
            baselines[number] = _through(record, basis, quiet)
    result = spectrum.copy(data=(records - baselines).reshape(spectrum.shape))
    taken = xr.Variable(spectrum.dims, baselines.reshape(spectrum.shape))
    if "baseline" in spectrum.coords:
        taken = taken + spectrum["baseline"].variable
    taken.attrs = {"units": spectrum.attrs.get("units", "1"), "long_name": "baseline taken away"}
    return result.assign_coords(baseline=taken)


def _found(record: npt.NDArray[Any], basis: npt.NDArray[Any], threshold: float) -> npt.NDArray[Any]:
    """The baseline of one record, the points with signal found by repetition."""
    middle = math.sqrt(2 * math.log(2)) if np.iscomplexobj(record) else 0.6744897501960817
    quiet = np.ones(record.size, bool)
    for _ in range(ROUNDS):
        baseline = _through(record, basis, quiet)
        left = np.abs(record - baseline)
        noise = float(np.median(left[quiet])) / middle
        signal = left > threshold * noise
        signal = signal | np.roll(signal, 1) | np.roll(signal, -1)
        if np.array_equal(signal, ~quiet):
            break
        quiet = ~signal
    return baseline


def _through(
    record: npt.NDArray[Any], basis: npt.NDArray[Any], quiet: npt.NDArray[np.bool_]
) -> npt.NDArray[Any]:
    """The least-squares polynomial through the quiet points of one record."""
    wanted = POINTS_PER_COEFFICIENT * basis.shape[1]
    if quiet.sum() < wanted:
        raise FidkitError(
            # a record's number is not known here: a chain may have split the records
            f"correct_baseline: {wanted} points without signal are wanted for order "
            f"{basis.shape[1] - 1} in every record; {quiet.sum()} of {quiet.size} are left in one; "
            "lower the order, raise the threshold, or give the region that holds the signal"
        )
    coefficients, *_ = np.linalg.lstsq(basis[quiet].astype(record.dtype), record[quiet])
    return basis @ coefficients  # type: ignore[no-any-return]
