"""Windows: every step here multiplies an FID, point by point, by a real weight.

`fidkit.measure` relies on that: it applies the same windows to a record of ones to learn how a
spectrum was weighted. A step that does anything else belongs in another file.
"""

from __future__ import annotations

from typing import Annotated, Any

import numpy as np
import numpy.typing as npt
import xarray as xr

from fidkit.params import Range, Slider, Unit, step

Broadening = Annotated[float, Unit("Hz"), Range(0), Slider(0, 50, 0.1)]


@step
def apodize_exponential(fid: xr.DataArray, *, broadening: Broadening = 1.0) -> xr.DataArray:
    """Weight by a decaying exponential, so that every line widens by `broadening`.

    Parameters
    ----------
    broadening : float
        What a Lorentzian line gains in full width at half maximum, Hz.

    Returns
    -------
    xarray.DataArray
        The weighted FID.

    Notes
    -----
    Weight ``exp(-pi * broadening * t)``: the Fourier pair of a Lorentzian of that width.
    """
    return _weighted(fid, np.exp(-np.pi * broadening * fid["time"].values))


def _weighted(fid: xr.DataArray, weight: npt.NDArray[Any]) -> xr.DataArray:
    """The FID times a weight along time; single precision stays single."""
    return fid.copy(data=fid.values * weight.astype(fid.real.dtype))
