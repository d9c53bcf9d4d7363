"""Phase of a spectrum, by hand and by itself.

Every step here keeps account of all phase that was applied, in two coordinates of the result:
``applied_phase`` (degree, at 0 Hz) and ``applied_delay`` (degree/Hz, the slope), so that
`fidkit.measure` can take it off again:
``applied = exp(i pi/180 (applied_phase + applied_delay * f))``.
"""

from __future__ import annotations

import itertools
import math
from typing import Annotated, Any, Literal

import numpy as np
import numpy.typing as npt
import scipy.special
import xarray as xr

from fidkit import signals
from fidkit.params import Along, FidkitError, Slider, Together, Unit, step
from fidkit.steps.common import line_threshold, note_without_line
from fidkit.steps.transform import fourier_transform, inverse_transform, zero_fill

#: Weight of the negative share of the energy against the entropy.
PENALTY = 10.0

#: How far down a line counts for its centre, as a fraction of the top of its power.
LINE_FOOT = 0.05

#: What counts as a line of its own: its integral over its noise against that of the strongest.
LEAST_LINE = 0.1

#: Points of the spectrum a phase is found in, at least, over those measured: by construction,
#: with one line that falls to 1/e within the record, 2 leaves up to 1.6 degree, 3 below 0.2.
GRID = 3

#: How far lines must lie apart, as a fraction of the width, to tell a first-order phase.
LEAST_SPREAD = 0.05


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


@step
def auto_phase(
    spectrum: Annotated[xr.DataArray, Together()],
    *,
    method: Literal["entropy", "integral"] = "entropy",
    first_order: bool = True,
    pivot: Annotated[float | None, Unit("Hz"), Along("frequency")] = None,
) -> xr.DataArray:
    """Find the phase of a spectrum, record by record, so that its lines stand upright.

    Parameters
    ----------
    method : {'entropy', 'integral'}
        ``entropy`` looks at every line, and chooses the first-order phase that makes the lines as
        short and positive as they can be. ``integral`` looks at one line and finds no first order.
    first_order : bool
        Whether ``entropy`` looks for a first-order phase, within 360 degrees over the spectral
        width either way. It does so only where lines lie at least a twentieth of the width apart:
        one line alone says nothing of it.
    pivot : float, optional
        Frequency near the line that must stand upright, Hz; the strongest where nothing is said.

    Returns
    -------
    xarray.DataArray
        The turned spectrum; the phase found is in ``applied_phase`` and ``applied_delay``, one a
        record. Records in which no line stands out are left as they are and named in the notes.

    Raises
    ------
    FidkitError
        For a real-valued spectrum, or if no record has a line that stands out.

    Notes
    -----
    The first-order phase is found by the entropy of the normalised derivative of the real part,
    with a penalty on negative parts: Chen, Weng, Goh and Garland, J. Magn. Reson. 158, 164 (2002).
    Here it is taken over the regions where signal stands out of the noise, and the penalty is the
    negative part's share of the real part's energy there.

    The entropy is jagged on the scale of some degrees and blind to a turn by 180, so the rest is
    settled by the integrals: over every line, an integral in which its dispersive part and the feet
    of other lines cancel has the phase of the line. The line of `pivot` stands upright, the others
    follow by least squares. All lines are taken to have one sign. The phase of a line that is not
    symmetric depends on what is called upright, by some degrees, and so does
    that of a line that has not fallen to a third by the end of the record. A spectrum with few zeros
    filled in is looked at on a finer grid.
    """
    signals.require_complex(spectrum, "auto_phase")
    fine = _on_finer_grid(spectrum)
    axis = np.asarray(fine["frequency"].values, dtype=float)
    width = signals.spectral_width(spectrum)
    records = fine.values.reshape(-1, axis.size)
    found = np.array(
        [_own_phase(record, axis, width, method, first_order, pivot) for record in records]
    )
    missing = np.isnan(found[:, 0])
    if missing.all():
        raise FidkitError(
            "auto_phase: no line stands out of the noise, so there is no phase to find; average "
            "more shots, or give the phase to correct_phase"
        )
    found[missing] = 0.0
    leading = spectrum.shape[:-1]
    result = _turned(spectrum, found[:, 0].reshape(leading), found[:, 1].reshape(leading))
    note_without_line(result, missing, "auto_phase")
    return result


def _on_finer_grid(spectrum: xr.DataArray) -> xr.DataArray:
    """The spectrum with zeros filled in to GRID times the measured points, if it has fewer.

    On the bare grid what is between the points of a line counts in no integral, and real and
    imaginary part are not tied to each other (Bartholdi and Ernst, J. Magn. Reson. 11, 9 (1973),
    from memory).
    """
    size = spectrum.shape[-1]
    measured = signals.acquired_points(spectrum)
    if not size / GRID < measured <= size:
        return spectrum  # fine enough, or only a part of the spectrum that was made
    # phase that was applied would turn part of the FID round to its end, and stay there
    phase, slope = (
        np.asarray(spectrum.coords[name].values if name in spectrum.coords else 0.0)
        for name in ("applied_phase", "applied_delay")
    )
    fid = zero_fill(inverse_transform(_turned(spectrum, -phase, -slope)), points=GRID * measured)
    first: Any = spectrum.attrs.get("first_point", "full")
    return _turned(fourier_transform(fid, first_point=first), phase, slope)


def derivative_entropy(
    real: npt.NDArray[Any], joints: npt.ArrayLike = ()
) -> npt.NDArray[np.float64]:
    """Entropy ``-sum h ln h`` of ``h = |dR| / sum |dR|`` along the last axis (Chen et al. 2002).

    The steps after the points `joints` are left out: there one region ends and the next begins.
    """
    steps = np.abs(np.diff(real, axis=-1))
    steps[..., np.asarray(joints, dtype=int)] = 0
    share = steps / steps.sum(axis=-1, keepdims=True)
    entropy: npt.NDArray[np.float64] = scipy.special.entr(share).sum(axis=-1)
    return entropy


def _line_regions(magnitude: npt.NDArray[Any], threshold: float) -> list[slice]:
    """Where the magnitude stands out of the noise, each place widened by its width either way."""
    edges = np.flatnonzero(np.diff(magnitude > threshold, prepend=False, append=False))
    regions: list[slice] = []
    for start, stop in zip(edges[::2].tolist(), edges[1::2].tolist(), strict=True):
        reach = max(4, stop - start)
        start, stop = max(0, start - reach), min(magnitude.size, stop + reach)
        if regions and start <= regions[-1].stop:
            start = regions.pop().start
        regions.append(slice(start, stop))
    return regions


def _line_places(
    magnitude: npt.NDArray[Any], regions: list[slice], threshold: float
) -> list[slice]:
    """The place of every line: its region, cut at the valley where several lines share one."""
    import scipy.signal  # slow to load, and needed nowhere else

    places = []
    for region in regions:
        part = magnitude[region]
        tops, found = scipy.signal.find_peaks(part, height=threshold, prominence=threshold)
        # what rises by less than half of its height is the same line still
        tops = tops[found["prominences"] >= 0.5 * found["peak_heights"]]
        valleys = [int(part[a:b].argmin()) + a for a, b in itertools.pairwise(tops.tolist())]
        places += [
            slice(region.start + a, region.start + b)
            for a, b in itertools.pairwise([0, *valleys, part.size])
        ]
    return places


def _line_integral(
    record: npt.NDArray[Any], magnitude: npt.NDArray[Any], place: slice
) -> tuple[complex, float, float]:
    """Integral over the line of a place, its centre (in points) and the integral over its noise.

    The weight is even about the centre, so that the dispersive part of a line cancels, and sums to
    zero, so that the feet of other lines do.
    """
    power = magnitude[place].astype(np.float64) ** 2
    index = np.arange(power.size)
    excess = np.maximum(power - LINE_FOOT * power.max(), 0)
    centre = float(np.sum(index * excess) / np.sum(excess))
    distance = (index - centre) / (min(centre, power.size - 1 - centre) + 1)
    within = np.abs(distance) <= 1
    weight = np.where(within, np.cos(np.pi * distance), 0.0)
    weight -= within * weight.sum() / within.sum()
    integral = complex(np.sum(weight * record[place]))
    return integral, place.start + centre, abs(integral) / float(np.sum(weight**2)) ** 0.5


def _own_phase(
    record: npt.NDArray[Any],
    axis: npt.NDArray[np.float64],
    width: float,
    method: str,
    first_order: bool,
    pivot: float | None,
) -> tuple[float, float]:
    """Phase (degree, at 0 Hz) and slope (degree/Hz) of one record; NaN without a line."""
    magnitude = np.abs(record)
    # the median of a noise magnitude (Rayleigh) is sqrt(2 ln 2) of the noise in either part, and
    # the mean power twice the square of that
    noise = float(np.median(magnitude)) / math.sqrt(2 * math.log(2))
    threshold = noise * math.sqrt(2 * line_threshold(axis.size))
    regions = _line_regions(magnitude, threshold)
    if not regions:
        return math.nan, math.nan
    places = _line_places(magnitude, regions, threshold)
    lines = [_line_integral(record, magnitude, place) for place in places]
    # what is left of a foot that sinks into the noise is no line of its own
    strongest = max(weight for *_, weight in lines)
    lines = [line for line in lines if line[2] >= LEAST_LINE * strongest]
    integrals, centres, weights = (np.array(column) for column in zip(*lines, strict=True))
    positions = np.interp(centres, np.arange(axis.size), axis)
    main = int(np.argmax(weights) if pivot is None else np.argmin(np.abs(positions - pivot)))
    phase, slope = -float(np.angle(integrals[main])), 0.0  # radian, at that line; radian/Hz
    if method == "entropy" and len(lines) > 1:
        offsets = positions - positions[main]
        sloped = first_order and float(np.ptp(positions)) >= LEAST_SPREAD * width
        if sloped:
            slope = _slope_of_least_entropy(record, regions, axis - positions[main], width, phase)
        basis = np.stack([np.ones(positions.size), offsets])[: 1 + sloped] * weights
        for _ in range(3):
            left = np.angle(integrals * np.exp(1j * (phase + slope * offsets)))
            left = (left + np.pi / 2) % np.pi - np.pi / 2  # the odd inverted line may stay so
            correction, *_ = np.linalg.lstsq(basis.T, left * weights)
            phase -= float(correction[0])
            slope -= float(correction[1]) if sloped else 0.0
        if (integrals[main] * np.exp(1j * phase)).real < 0:
            phase += math.pi
    phase = math.remainder(phase - slope * float(positions[main]), 2 * math.pi)
    return math.degrees(phase), math.degrees(slope)


def _slope_of_least_entropy(
    record: npt.NDArray[Any],
    regions: list[slice],
    offset: npt.NDArray[np.float64],
    width: float,
    phase: float,
) -> float:
    """Slope (radian/Hz) of least penalised entropy, with the phase (radian) at offset 0 given."""
    values = np.concatenate([record[part] for part in regions]) * np.exp(1j * phase)
    position = np.concatenate([offset[part] for part in regions]) / width
    joints = np.cumsum([part.stop - part.start for part in regions])[:-1] - 1
    slopes = np.radians(np.arange(-360.0, 361.0, 10.0))
    real = (values * np.exp(1j * slopes[:, None] * position)).real
    entropy = derivative_entropy(real, joints)
    energy = real**2
    negative = (energy * (real < 0)).sum(axis=-1) / energy.sum(axis=-1)
    # of slopes that do as well, as lines far apart allow, the smallest
    return float(slopes[np.argmin(entropy + PENALTY * negative + 1e-3 * np.abs(slopes))]) / width


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
    turn = np.exp(1j * np.radians(angle)).astype(spectrum.dtype)
    result = spectrum.copy(data=spectrum.values * turn)
    if "baseline" in spectrum.coords:  # what correct_baseline took away turns with the rest
        taken = spectrum["baseline"].variable
        result = result.assign_coords(baseline=taken.copy(data=taken.values * turn))
    for name, added, units, text in (
        ("applied_phase", phase, "degree", "phase applied so far, at the carrier"),
        ("applied_delay", slope, "degree/Hz", "slope of the phase applied so far"),
    ):
        booked = xr.Variable(leading if np.ndim(added) else (), added)
        if name in spectrum.coords:
            booked = booked + spectrum.coords[name].variable
        booked.attrs = {"units": units, "long_name": text}
        result = result.assign_coords({name: booked})
    return result
