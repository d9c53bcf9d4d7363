"""What is mended in a raw record before it is weighted and transformed."""

from __future__ import annotations

import numpy as np
import xarray as xr

from fidkit import signals
from fidkit.params import step


@step
def reverse_frequency(fid: xr.DataArray) -> xr.DataArray:
    """Turn the sense of rotation round, for a record in which faster lines come out as slower.

    Returns
    -------
    xarray.DataArray
        The complex conjugate: a line at +f is at -f afterwards, and phases change sign.

    Raises
    ------
    FidkitError
        For a real-valued record, which has no sense of rotation.
    """
    signals.require_complex(fid, "reverse_frequency")
    return fid.copy(data=np.conj(fid.values))
