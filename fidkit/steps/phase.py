"""Phase of a spectrum, by hand and by itself.

Every step here keeps account of all phase that was applied, in two coordinates of the result:
``applied_phase`` (degree, at 0 Hz) and ``applied_delay`` (degree/Hz, the slope), so that
`fidkit.measure` can take it off again:
``applied = exp(i pi/180 (applied_phase + applied_delay * f))``.
"""

from __future__ import annotations

from typing import Annotated, Any

import numpy as np
import numpy.typing as npt
import xarray as xr

from fidkit import signals
from fidkit.params import Along, Slider, Unit, step


@step
def correct_phase(
    spectrum: xr.DataArray,
    *,
    zero_order: Annotated[float, Unit("degree"), Slider(-180, 180, 0.1)] = 0.0,
    first_order: Annotated[float, Unit("degree"), Slider(-720, 720, 1)] = 0.0,
    pivot: Annotated[float | None, Unit("Hz"), Along("frequency")] = None,
) -> xr.DataArray:
    """Turn the phase of a spectrum by a constant and by a part that grows along the axis.

    Parameters
    ----------
    zero_order : float
        Added to the phase at the pivot, degree: a line found at +38 degrees is mended by -38.
    first_order : float
        Added to the phase over one spectral width, degree: 360 is a shift by one dwell time.
    pivot : float, optional
        Frequency that `first_order` leaves alone, Hz; 0 Hz where nothing is said.

    Returns
    -------
    xarray.DataArray
        The turned spectrum, with all phase applied so far in ``applied_phase`` and
        ``applied_delay``.

    Raises
    ------
    FidkitError
        For a real-valued spectrum.

    Notes
    -----
    Times ``exp(i phase)``, ``phase = zero_order + first_order * (f - pivot) / spectral_width``:
    the delay theorem of the Fourier transform.
    """
    signals.require_complex(spectrum, "correct_phase")
    slope = first_order / signals.spectral_width(spectrum)
    return _turned(spectrum, np.float64(zero_order - slope * (pivot or 0.0)), np.float64(slope))


def _turned(
    spectrum: xr.DataArray,
    phase: np.float64 | npt.NDArray[np.float64],
    slope: np.float64 | npt.NDArray[np.float64],
) -> xr.DataArray:
    """Apply a phase (degree, at 0 Hz) and a slope (degree/Hz), one or one a record, and book them."""
    leading = spectrum.dims[:-1]
    angle = np.asarray(phase)[..., None] + np.asarray(slope)[..., None] * (
        spectrum["frequency"].values
    )
    values = spectrum.values * np.exp(1j * np.radians(angle)).astype(spectrum.dtype)
    result = spectrum.copy(data=values)
    for name, added, units, text in (
        ("applied_phase", phase, "degree", "phase applied so far, at the carrier"),
        ("applied_delay", slope, "degree/Hz", "slope of the phase applied so far"),
    ):
        new: Any = xr.DataArray(added, dims=leading if np.ndim(added) else ())
        if name in spectrum.coords:
            new = new.variable + spectrum.coords[name].variable
        else:
            new = new.variable
        new.attrs = {"units": units, "long_name": text}
        result = result.assign_coords({name: new})
    return result
