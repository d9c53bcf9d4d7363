"""Damped-line fits on plain arrays.

A record of ``N`` points holds lines ``c z^n`` with ``z = exp(kappa dt)``, ``kappa = 2 pi i f - R``.
Its discrete transform is known in closed form,

    sum_n z^n exp(-2 pi i m n / N) = (1 - z^N) / (1 - q),   q = z exp(-2 pi i m / N),

with truncation included, and white noise stays white under it. So a line is fitted on a band of
transform points around it, not on the whole record: as exact, faster, and blind to what lies
elsewhere. ``kappa`` and ``c`` are complex and the model is analytic in both; hence the normal
equations are complex, and real and imaginary part of each estimate have the same variance
(circular noise).
"""

from __future__ import annotations

import functools
from collections.abc import Callable
from dataclasses import dataclass
from typing import Any

import numpy as np
import numpy.typing as npt
import scipy.fft

Complex = npt.NDArray[Any]
Real = npt.NDArray[Any]
Whole = npt.NDArray[Any]

__all__ = [
    "ADDITION_COST",
    "GAUSSIAN_WIDTH",
    "Band",
    "Crowd",
    "SingleFit",
    "band_around",
    "composite",
    "decay_time",
    "fit_crowd",
    "fit_single",
    "half_band",
    "model_in_time",
    "reach_of",
    "search",
    "shape_in_band",
    "shapes_of_record",
    "shapes_of_spectrum",
    "strip",
    "voigt_width",
]

#: An addition to the model (background, another line, a Gaussian part) is kept where it lowers the
#: Bayesian information criterion (Schwarz, Ann. Stat. 6, 461 (1978)) by more than this: "very
#: strong" in the scale of Kass and Raftery, J. Am. Stat. Assoc. 90, 773 (1995).
ADDITION_COST = 10.0

#: Full width of the line of ``exp(-G t^2)`` over the square root of G: 2 sqrt(ln 2) / pi.
GAUSSIAN_WIDTH = 2 * np.sqrt(np.log(2)) / np.pi

#: Half the band, in full widths of the line (a band of +-25 loses 0.6 % in the uncertainty), and
#: at least in points (for the noise estimate).
BAND_WIDTHS = 25.0
BAND_POINTS = 128

#: Iterations of a fit; three to five are usual.
MOST_ITERATIONS = 40


@dataclass(frozen=True)
class Band:
    """Which transform points are used: `index` (records, points), for records of `points`."""

    index: Whole
    points: int
    dwell: float

    @property
    def rotation(self) -> Complex:
        """exp(-2 pi i m / N) at each point of the band."""
        return np.exp((-2j * np.pi / self.points) * self.index)


def band_around(frequency: Real, half: int, points: int, dwell: float) -> Band:
    """`half` points to either side of each frequency, wrapping at the ends of the spectrum."""
    centre = np.rint(frequency * points * dwell).astype(np.int64)
    if 2 * half + 1 >= points:
        index = np.broadcast_to(np.arange(points), (frequency.size, points)).copy()
        return Band(index, points, dwell)
    return Band((centre[:, None] + np.arange(-half, half + 1)) % points, points, dwell)


def half_band(rate: Real, points: int, dwell: float) -> Whole:
    """Half the band for each rate, rounded up to a power of two so that records can be grouped."""
    wanted = BAND_WIDTHS * np.abs(rate) / np.pi * points * dwell
    return (2 ** np.ceil(np.log2(np.clip(wanted, BAND_POINTS, points)))).astype(np.int64)


def shape_in_band(kappa: Complex, rotation: Complex, band: Band, order: int = 1) -> list[Complex]:
    """Transforms of ``n^k z^n`` for k = 0 .. `order` (at most 2), each (records, band points)."""
    points = band.points
    step = kappa[:, None] * band.dwell
    q = np.exp(step) * rotation
    # a line exactly on a point with no decay at all would divide by zero
    q = np.where(np.abs(1 - q) < 1e-11, q * (1 - 1e-11), q)
    last = np.exp(np.minimum(step.real * points, 500.0) + 1j * (step.imag * points))
    inverse = 1 / (1 - q)
    shapes = [(1 - last) * inverse]
    if order >= 1:
        shapes.append((q * (1 + (points - 1) * last) - points * last) * inverse**2)
    if order >= 2:
        shapes.append(
            (
                q * (1 + q)
                - points**2 * last
                + (2 * points**2 - 2 * points - 1) * last * q
                - (points - 1) ** 2 * last * q**2
            )
            * inverse**3
        )
    return shapes


def _dot(left: npt.NDArray[Any], right: npt.NDArray[Any]) -> npt.NDArray[Any]:
    """Inner products over the band, record by record."""
    return np.asarray(np.einsum("ij,ij->i", left.conj(), right))


# --- where is a line -----------------------------------------------------------------------------


@dataclass(frozen=True)
class Found:
    """Where the search found a line: Hz, 1/s, and its energy over noise variance per part."""

    frequency: Real
    rate: Real
    energy: Real


def search(
    values: Complex,
    dwell: float,
    *,
    allowed: npt.NDArray[np.bool_] | None = None,
) -> Found:
    """Find the strongest line of each record with a bank of matched exponential windows.

    Parameters
    ----------
    values : complex array, shape (records, points)
        The records.
    dwell : float
        Time between points, s.
    allowed : bool array, shape (points,) or (records, points), optional
        Transform points (in the order of `scipy.fft.fft`) among which to look.

    Returns
    -------
    Found
        Start values; the frequency is good to half a transform point, the rate to a factor of two.
    """
    records, points = values.shape
    index = np.arange(points)
    best = np.full(records, -1.0)
    place = np.zeros(records, dtype=np.int64)
    rate = np.zeros(records)
    # noise twice, as either may hold signal: the end of the record, and most of the transform
    tail = values[:, -max(points // 10, min(points // 2, 64)) :]
    noise = tail.real.var(axis=-1) / 2 + tail.imag.var(axis=-1) / 2
    # a window off by a factor of two from the line's own decay loses only 6 % in height
    decays = 4.0 ** np.arange(0, max(1, int(np.log(points / 4) / np.log(4)) + 1))
    for decay in decays:
        window = np.exp(-decay / points * index)
        power = np.abs(scipy.fft.fft(values * window, axis=-1)) ** 2 / (window**2).sum()
        if decay == decays[0]:
            # the median of an exponential distribution is ln 2 of its mean 2 sigma^2; a thousand
            # points give it well enough
            some = power[:, :: max(1, points // 1024)]
            noise = np.minimum(noise, np.median(some, axis=-1) / (2 * np.log(2)))
        if allowed is not None:
            power = np.where(allowed, power, -1.0)
        top = power.argmax(axis=-1)
        height = power[np.arange(records), top]
        better = height > best
        best = np.where(better, height, best)
        place = np.where(better, top, place)
        rate = np.where(better, decay / (points * dwell), rate)
    frequency = scipy.fft.fftfreq(points, dwell)[place]
    with np.errstate(divide="ignore", invalid="ignore", over="ignore"):
        energy = np.where(noise > 0, best / (2 * noise), np.where(best > 0, np.inf, 0.0))
    return Found(frequency, rate, energy)


def strip(
    values: Complex,
    dwell: float,
    least: float,
    most: int,
    allowed: npt.NDArray[np.bool_] | None = None,
) -> tuple[Found, Complex]:
    """Take the strongest line off a record, then the next, and so on.

    Parameters
    ----------
    values : complex array, shape (points,)
        One record.
    dwell : float
        Time between points, s.
    least : float
        Energy at which to stop.
    most : int
        How many lines to take off at most.
    allowed : bool array, shape (points,), optional
        As in `search`.

    Returns
    -------
    Found
        The lines in the order found; good enough to start from, and to choose among.
    rest : complex array, shape (points,)
        What is left.

    Notes
    -----
    After each new line the earlier ones are fitted again, each to the record less all others (Li
    and Stoica, IEEE Trans. Signal Process. 44, 281 (1996), from memory), so that a first fit that
    lay between two lines moves to one of them.
    """
    points = values.size
    time = dwell * np.arange(points)
    rest = values
    models: list[Complex] = []
    places: list[tuple[float, float, float]] = []

    def fitted(record: Complex, frequency: float, rate: float) -> tuple[Complex, float, float]:
        """The one line of a record, its frequency and its rate."""
        half = int(half_band(np.array([rate]), points, dwell)[0])
        band = band_around(np.array([frequency]), half, points, dwell)
        spectrum = scipy.fft.fft(record)[band.index]
        fit = fit_single(spectrum, band, np.array([2j * np.pi * frequency - rate]))
        kappa = complex(fit.kappa[0])
        model = fit.scale[0] * np.exp(kappa * time)
        return model, kappa.imag / (2 * np.pi), max(-kappa.real, 0.0)

    for _ in range(most):
        found = search(rest[None], dwell, allowed=allowed)
        if found.energy[0] < least:
            break
        model, frequency, rate = fitted(rest, float(found.frequency[0]), float(found.rate[0]))
        if not np.linalg.norm(rest - model) < np.linalg.norm(rest):
            break
        rest = rest - model
        models.append(model)
        places.append((frequency, rate, float(found.energy[0])))
        for earlier in range(len(models) - 1):
            frequency, rate, energy = places[earlier]
            alone = rest + models[earlier]
            model, frequency, rate = fitted(alone, frequency, max(rate, 1 / (points * dwell)))
            if np.linalg.norm(alone - model) < np.linalg.norm(rest):
                rest = alone - model
                models[earlier] = model
                places[earlier] = frequency, rate, energy
    frequency_found, rate_found, energy_found = np.array(places).reshape(-1, 3).T
    return Found(frequency_found, rate_found, energy_found), rest


# --- one Lorentzian line, many records at once ---------------------------------------------------


@dataclass(frozen=True)
class SingleFit:
    """Fits of one line a record; every field has shape (records,).

    `variance` is of each part of kappa, `variance_log` of each part of log c, `covariance` between
    log c and kappa (complex), all for unit noise: multiply by noise^2. `noise` is the standard
    deviation of each part of a transform point. `gaussian` (test for a Gaussian part), `other`
    (largest residual power) and `background` (a constant in the band) and `offset` (one in the record) are what the residual says against the model,
    in units of twice the log-likelihood.
    """

    kappa: Complex
    scale: Complex
    variance: Real
    variance_log: Real
    covariance: Complex
    noise: Real
    gaussian: Real
    other: Real
    background: Real
    offset: Real
    converged: npt.NDArray[np.bool_]


def fit_single(spectrum: Complex, band: Band, kappa: Complex) -> SingleFit:
    """Fit one Lorentzian line to each record by variable projection and Gauss-Newton steps.

    Parameters
    ----------
    spectrum : complex array, shape (records, band points)
        Unscaled forward transforms on the band.
    band : Band
        Which points these are.
    kappa : complex array, shape (records,)
        Start values ``2 pi i f - R``.

    Returns
    -------
    SingleFit
        Estimates, with what is needed for their uncertainty.
    """
    rotation = band.rotation
    records, width = spectrum.shape
    dwell = band.dwell
    total = _dot(spectrum, spectrum).real
    damping = np.zeros(records)

    def project(kappa: Complex) -> tuple[Complex, Complex, Complex, Real, Real]:
        shape, slope = shape_in_band(kappa, rotation, band)
        power = _dot(shape, shape).real
        scale = _dot(shape, spectrum) / power
        cost = np.maximum(total - np.abs(scale) ** 2 * power, 0.0)
        return shape, slope, scale, power, cost

    shape, slope, scale, power, cost = project(kappa)
    converged = np.zeros(records, dtype=bool)
    for _ in range(MOST_ITERATIONS):
        gradient = dwell * scale[:, None] * slope
        gradient -= shape * (_dot(shape, gradient) / power)[:, None]
        stiffness = _dot(gradient, gradient).real
        residual = spectrum - scale[:, None] * shape
        move = _dot(gradient, residual) / (stiffness * (1 + damping))
        # no step may turn a decay into growth, or leap past the next points
        limit = 0.7 * np.maximum(np.abs(kappa.real), 2 / (band.points * dwell))
        move *= np.minimum(1.0, limit / np.maximum(np.abs(move), 1e-300))
        move = np.where(converged, 0.0, move)
        trial = project(kappa + move)
        better = trial[4] <= cost
        reach = 1 / np.sqrt(stiffness / np.maximum(cost / width, 1e-300))  # one standard deviation
        small = np.abs(move) < 1e-4 * reach + 1e-13 * np.abs(kappa)
        kappa = np.where(better, kappa + move, kappa)
        mask = better[:, None]
        shape = np.where(mask, trial[0], shape)
        slope = np.where(mask, trial[1], slope)
        scale, power, cost = (
            np.where(better, new, old)
            for new, old in zip(trial[2:], (scale, power, cost), strict=True)
        )
        damping = np.where(better, damping * 0.2, np.maximum(damping * 5, 1.0))
        converged |= small | (damping > 1e8)
        if converged.all():
            break

    shape, slope, curve = shape_in_band(kappa, rotation, band, order=2)
    power = _dot(shape, shape).real
    residual = spectrum - scale[:, None] * shape
    gradient = dwell * scale[:, None] * slope
    overlap = _dot(shape, gradient) / power
    gradient -= shape * overlap[:, None]
    stiffness = _dot(gradient, gradient).real
    noise = np.sqrt(_dot(residual, residual).real / (2 * max(width - 2, 1)))
    size = np.abs(residual) ** 2
    # the noise that tests use must not swell with what they look for
    plain = np.minimum(noise, np.sqrt(np.median(size, axis=-1) / (2 * np.log(2))))
    plain = np.maximum(plain, 1e-300)

    def unexplained(column: Complex) -> Any:
        """A column less what the fit can take up itself."""
        column = column - shape * (_dot(shape, column) / power)[:, None]
        return column - gradient * (_dot(gradient, column) / stiffness)[:, None]

    bend = unexplained(-scale[:, None] * dwell**2 * curve)
    with np.errstate(divide="ignore", invalid="ignore"):
        # one real parameter, so only the real part counts; either sign speaks against the line
        gaussian = (_dot(bend, residual).real / plain) ** 2 / _dot(bend, bend).real
    flat = unexplained(np.ones_like(shape))
    background = np.abs(_dot(flat, residual) / plain) ** 2 / _dot(flat, flat).real
    # a constant offset of the record sits in point 0 of the transform alone
    carrier = unexplained((band.index == 0).astype(complex))
    with np.errstate(divide="ignore", invalid="ignore"):
        offset = np.abs(_dot(carrier, residual) / plain) ** 2 / _dot(carrier, carrier).real
    other = size.max(axis=-1) / plain**2
    # log c = log scale; d(scale)/scale = ... - overlap/scale d(kappa)
    variance = 1 / stiffness
    lever = overlap / scale
    return SingleFit(
        kappa=kappa,
        scale=scale,
        variance=variance,
        variance_log=1 / (power * np.abs(scale) ** 2) + np.abs(lever) ** 2 * variance,
        covariance=-lever * variance,
        noise=noise,
        gaussian=np.nan_to_num(gaussian),
        other=other,
        background=background,
        offset=np.nan_to_num(offset),
        converged=converged,
    )


# --- several lines, a background, a Gaussian part: one record at a time --------------------------

Shapes = Callable[[Complex, float], tuple[Complex, Complex, Complex | None]]
"""Columns of the lines for (kappa, G), their derivatives by kappa, and that of the first by G."""


def shapes_of_record(band: Band, start: float, *, gaussian: bool = False) -> Shapes:
    """Transforms of ``exp(kappa t)`` on the band of one record; the first may have ``exp(-G t^2)``.

    `start` is the time of the first point, s.
    """
    time = start + band.dwell * np.arange(band.points) if gaussian else None

    def shapes(kappa: Complex, part: float) -> tuple[Complex, Complex, Complex | None]:
        plain, slope = shape_in_band(kappa, band.rotation, band)
        lead = np.exp(kappa * start)[:, None]
        by_kappa = lead * (band.dwell * slope + start * plain)
        plain = lead * plain
        if time is None:
            return plain.T, by_kappa.T, None
        decay = np.exp(kappa[0] * time - part * time**2)
        stack = scipy.fft.fft(np.stack([decay, time * decay, -(time**2) * decay]), axis=-1)
        plain[0], by_kappa[0], by_part = stack[:, band.index[0]]
        return plain.T, by_kappa.T, by_part

    return shapes


def shapes_of_spectrum(frequency: Real) -> Shapes:
    """Lorentzian lines on a frequency axis, for a spectrum of which nothing more is known."""

    def shapes(kappa: Complex, _: float) -> tuple[Complex, Complex, Complex | None]:
        plain = 1 / (2j * np.pi * frequency[:, None] - kappa)
        return plain, plain**2, None

    return shapes


@dataclass(frozen=True)
class Crowd:
    """A joint fit; lines have shape (lines,), `scale` refers to time zero; `linear` holds the
    coefficients of all linear columns, lines first.

    `covariance` is of the parameters (f, R of each line in turn, then G if there is a Gaussian
    part, then real and imaginary part of each linear coefficient, lines first).
    """

    frequency: Real
    rate: Real
    gaussian: float
    scale: Complex
    linear: Complex
    covariance: Real
    noise: float
    residual: Complex
    criterion: float


def reach_of(rate: float, resolution: float) -> float:
    """How far a joint fit may move a line from its start, Hz."""
    return float(2 * (abs(rate) + resolution) / np.pi + resolution)


def fit_crowd(
    values: npt.NDArray[Any],
    shapes: Shapes,
    frequency: Real,
    rate: Real,
    *,
    resolution: float,
    gaussian: float | None = None,
    only_gaussian: bool = False,
    columns: Complex | None = None,
) -> Crowd:
    """Fit several lines to one record; the first may have a Gaussian part.

    Parameters
    ----------
    values : array, shape (points,)
        Transform points (unscaled) or a piece of spectrum, complex or real.
    shapes : callable
        What a line looks like there.
    frequency, rate : array, shape (lines,)
        Start values, Hz and 1/s.
    resolution : float
        One over the length of the record, Hz.
    gaussian : float, optional
        Start value of ``G`` in the factor ``exp(-G t^2)`` of the first line, 1/s^2.
    only_gaussian : bool
        Hold the rate of the first line at 0.
    columns : complex array, shape (points, k), optional
        Further columns that enter linearly, such as a background.

    Returns
    -------
    Crowd
        Estimates with their covariance.

    Notes
    -----
    Variable projection: Golub and Pereyra, SIAM J. Numer. Anal. 10, 413 (1973), with the
    derivative of Kaufman, BIT 15, 49 (1975).
    """
    from scipy.optimize import least_squares

    lines = frequency.size
    extra = np.empty((values.size, 0), complex) if columns is None else columns
    is_complex = np.iscomplexobj(values)

    def apart(column: Complex) -> Real:
        """What of a complex column meets the data."""
        return np.concatenate([column.real, column.imag]) if is_complex else column.real

    def both(columns: Complex) -> Real:
        """Two real columns, for real and imaginary part of the coefficient, to each complex one."""
        pair = np.stack([apart(columns), apart(1j * columns)], axis=-1)
        return pair.reshape(pair.shape[0], -1)

    data = apart(values.astype(complex))
    size = float(np.linalg.norm(data)) or 1.0

    free = np.ones(2 * lines + (gaussian is not None), dtype=bool)
    free[1] = not only_gaussian
    full = np.zeros(free.size)
    full[0 : 2 * lines : 2], full[1 : 2 * lines : 2] = frequency, rate
    scale = np.repeat(np.abs(full[1 : 2 * lines : 2]) + resolution, 2)
    low, high = np.full(free.size, -np.inf), np.full(free.size, np.inf)
    # a line stays in reach of its start, lest it run over to a stronger neighbour
    reach = np.array([reach_of(one, resolution) for one in rate])
    low[0 : 2 * lines : 2] = frequency - reach
    high[0 : 2 * lines : 2] = frequency + reach
    # a line may come out as slightly growing where it hardly decays; not more
    low[1 : 2 * lines : 2] = -2 * resolution
    if gaussian is not None:
        full[-1] = gaussian
        scale = np.append(scale, gaussian)
        low[[1, -1]] = 0.0
    full[~free] = 0.0
    scale, low, high = scale[free], low[free], high[free]

    @functools.lru_cache(maxsize=2)  # the optimiser asks for value and slope at the same place
    def solve(place: bytes) -> tuple[Real, Real, Real, Real, Real]:
        theta = full.copy()
        theta[free] = np.frombuffer(place)
        kappa = 2j * np.pi * theta[0 : 2 * lines : 2] - theta[1 : 2 * lines : 2]
        part = float(theta[-1]) if gaussian is not None else 0.0
        plain, by_kappa, by_part = shapes(kappa, part)
        basis = both(np.concatenate([plain, extra], axis=1))
        orthogonal, triangle = np.linalg.qr(basis)
        # least squares of a small triangle: columns that are alike or empty do no harm
        linear = np.linalg.lstsq(triangle, orthogonal.T @ data, rcond=1e-12)[0]
        weights = linear[0 : 2 * lines : 2] + 1j * linear[1 : 2 * lines : 2]
        change = np.empty((data.size, theta.size))
        change[:, 0 : 2 * lines : 2] = apart(2j * np.pi * by_kappa * weights)
        change[:, 1 : 2 * lines : 2] = apart(-by_kappa * weights)
        if by_part is not None:
            change[:, -1] = apart(by_part * weights[0])
        return basis, orthogonal, linear, data - basis @ linear, change[:, free]

    def miss(theta: Real) -> Real:
        return np.asarray(solve(theta.tobytes())[3] / size)

    def slope(theta: Real) -> Real:
        _, orthogonal, _, _, change = solve(theta.tobytes())
        return np.asarray(-(change - orthogonal @ (orthogonal.T @ change)) / size)

    with np.errstate(divide="ignore", invalid="ignore"):  # of a fit that is exactly singular
        outcome = least_squares(
            miss,
            np.clip(full[free], low + 1e-9 * scale, high),
            jac=slope,
            bounds=(low, high),
            x_scale=scale,
            xtol=1e-10,
            ftol=1e-14,
            gtol=1e-14,
            max_nfev=60,
        )
    basis, _, linear, residual, change = solve(outcome.x.tobytes())
    theta = full.copy()
    theta[free] = outcome.x
    jacobian = np.zeros((data.size, theta.size + basis.shape[1]))
    jacobian[:, : theta.size][:, free] = change
    jacobian[:, theta.size :] = basis
    norm = np.linalg.norm(jacobian, axis=0)
    # what is held, and an imaginary background in a real spectrum, is no parameter
    used = norm > 0
    count = int(used.sum())
    norm[~used] = 1.0
    power = max(float(residual @ residual), (1e-12 * size) ** 2)
    noise = float(np.sqrt(power / max(data.size - count, 1)))
    inverse = np.linalg.pinv((jacobian / norm).T @ (jacobian / norm), rcond=1e-14, hermitian=True)
    with np.errstate(over="ignore", invalid="ignore"):
        # a line that fades out of a fit has no uncertainty that could be written down
        covariance = noise**2 * inverse / np.outer(norm, norm)
    return Crowd(
        frequency=theta[0 : 2 * lines : 2],
        rate=theta[1 : 2 * lines : 2],
        gaussian=float(theta[-1]) if gaussian is not None else 0.0,
        scale=linear[0 : 2 * lines : 2] + 1j * linear[1 : 2 * lines : 2],
        linear=linear[0::2] + 1j * linear[1::2],
        covariance=covariance,
        noise=noise,
        residual=residual[: values.size] + 1j * residual[values.size :]
        if is_complex
        else residual + 0j,
        criterion=float(data.size * np.log(power / data.size) + count * np.log(data.size)),
    )


def model_in_time(fit: Crowd, points: int, dwell: float, start: float) -> Complex:
    """The fitted lines (not the background) as a record, shape (lines, points)."""
    time = start + dwell * np.arange(points)
    kappa = 2j * np.pi * fit.frequency - fit.rate
    records = fit.scale[:, None] * np.exp(kappa[:, None] * time)
    if fit.gaussian:
        records[0] *= np.exp(-fit.gaussian * time**2)
    return records


def voigt_width(rate: float, gaussian: float) -> tuple[float, float, float]:
    """Full width at half maximum of the line of ``exp(-R t - G t^2)``, and its derivatives.

    Parameters
    ----------
    rate : float
        ``R``, 1/s, not negative.
    gaussian : float
        ``G``, 1/s^2, not negative.

    Returns
    -------
    tuple of float
        Width (Hz), its derivative by R and by G.

    Notes
    -----
    The absorption line is the real part of the Faddeeva function; its half height is found
    numerically, starting from Olivero and Longbothum, J. Quant. Spectrosc. Radiat. Transfer 17,
    233 (1977).
    """
    from scipy.optimize import brentq
    from scipy.special import wofz

    if gaussian <= 1e-12 * rate**2:  # below this the Faddeeva function tells no difference
        return rate / np.pi, 1 / np.pi, 0.0
    spread = np.sqrt(2 * gaussian)  # standard deviation of the line, rad/s
    ratio = rate / (spread * np.sqrt(2))
    half_top = wofz(1j * ratio).real / 2

    def above(offset: float) -> float:
        return float(wofz(offset + 1j * ratio).real - half_top)

    offset = brentq(above, 0.0, 2.0 + 2 * ratio, xtol=1e-13)

    def slope(at: complex) -> complex:
        return complex(-2 * at * wofz(at) + 2j / np.sqrt(np.pi))

    # implicit: d(Re w(x + i y) - w(i y) / 2) = 0
    along, down = slope(offset + 1j * ratio), slope(1j * ratio)
    by_ratio = -((1j * along).real - (1j * down).real / 2) / along.real
    to_hertz = spread * np.sqrt(2) / np.pi  # full width = offset * 2 * spread * sqrt(2) / (2 pi)
    width = offset * to_hertz
    by_rate = by_ratio / np.pi
    by_gaussian = (width - by_rate * rate) / (2 * gaussian)
    return float(width), float(by_rate), float(by_gaussian)


def composite(fit: Crowd, members: list[int]) -> tuple[Real, Real]:
    """One shape out of several overlapping lines, with its uncertainty.

    Parameters
    ----------
    fit : Crowd
        A joint fit.
    members : list of int
        The lines that make up the shape.

    Returns
    -------
    values : array, shape (4,)
        Place of the top (Hz), full width at half its height (Hz), amplitude and phase (rad) at
        time zero, of the absorption shape in the common phase, free of noise and truncation.
    covariance : array, shape (4, 4)
        By the derivative of the values, taken numerically over a hundredth of each parameter's
        standard deviation.
    """
    from scipy.optimize import brentq, minimize_scalar
    from scipy.special import wofz

    count = fit.frequency.size
    width = float(fit.rate[members].max() / np.pi + GAUSSIAN_WIDTH * np.sqrt(fit.gaussian))
    low = float(fit.frequency[members].min()) - 3 * width
    high = float(fit.frequency[members].max()) + 3 * width
    grid = np.linspace(low, high, 400 * len(members) + 1)
    has_gaussian = fit.covariance.shape[0] - 2 * fit.linear.size > 2 * count

    def of(parameters: Real) -> Real:
        kappa = 2j * np.pi * parameters[0 : 2 * count : 2] - parameters[1 : 2 * count : 2]
        part = parameters[2 * count] if has_gaussian else 0.0
        linear = parameters[2 * count + has_gaussian :]
        scale = (linear[0::2] + 1j * linear[1::2])[:count]
        total = scale[members].sum()
        turn = np.conj(total) / abs(total)

        def height(frequency: Real) -> Real:
            value = np.zeros_like(frequency, dtype=complex)
            for member in members:
                decay = 2j * np.pi * frequency - kappa[member]
                if member == 0 and part > 0:
                    root = 2 * np.sqrt(part)
                    value += scale[0] * np.sqrt(np.pi) / root * wofz(1j * decay / root)
                else:
                    value += scale[member] / decay
            return np.asarray((turn * value).real)

        top = int(height(grid).argmax())
        spacing = grid[1] - grid[0]
        peak = minimize_scalar(
            lambda frequency: -float(height(np.array(frequency))),
            bounds=(grid[top] - spacing, grid[top] + spacing),
            method="bounded",
            options={"xatol": 1e-9 * (high - low)},
        ).x
        half = float(height(np.array(peak))) / 2
        if half <= 0:
            return np.full(4, np.nan)

        def above(frequency: float) -> float:
            return float(height(np.array(frequency))) - half

        edges = []
        for direction in (-1, 1):
            end = peak
            while above(end) > 0 and abs(end - peak) < 1e3 * (high - low):
                end += direction * width / 20
            if above(end) > 0:
                return np.full(4, np.nan)
            edges.append(brentq(above, end - direction * width / 20, end))
        return np.array([peak, edges[1] - edges[0], abs(total), np.angle(total)])

    parameters = np.empty(fit.covariance.shape[0])
    parameters[0 : 2 * count : 2], parameters[1 : 2 * count : 2] = fit.frequency, fit.rate
    if has_gaussian:
        parameters[2 * count] = fit.gaussian
    parameters[2 * count + has_gaussian :: 2] = fit.linear.real
    parameters[2 * count + has_gaussian + 1 :: 2] = fit.linear.imag
    values = of(parameters)
    slope = np.zeros((4, parameters.size))
    deviation = np.sqrt(np.diag(fit.covariance))
    for place in np.flatnonzero(deviation):
        change = np.zeros(parameters.size)
        change[place] = 0.01 * deviation[place]
        ahead, behind = of(parameters + change), of(parameters - change)
        difference = ahead - behind
        difference[3] = np.angle(np.exp(1j * difference[3]))
        slope[:, place] = difference / (2 * change[place])
    return values, slope @ fit.covariance @ slope.T


def decay_time(
    values: Complex,
    start: float,
    dwell: float,
    frequency: Real,
    phase: Real,
    rate: Real,
    noise: Real,
    blocks: int = 32,
) -> tuple[Real, Real]:
    """Time constant of an exponential laid through the decay itself, and its uncertainty.

    Parameters
    ----------
    values : complex array, shape (records, points)
        The records, with all but the line in question taken away.
    start, dwell : float
        Time of the first point and between points, s.
    frequency, phase, rate : array, shape (records,)
        Of the line: Hz, rad at time zero, 1/s.
    noise : array, shape (records,)
        Standard deviation of the noise in each part of a point.
    blocks : int
        The decay, turned to zero frequency and phase, is summed over so many blocks in its first
        three time constants; the sums are fitted in time.

    Returns
    -------
    tuple of array
        Time constant and standard uncertainty, s; NaN where there is no decay.
    """
    records, points = values.shape
    time = start + dwell * np.arange(points)
    turn = np.exp(-1j * (2 * np.pi * frequency[:, None] * time + phase[:, None]))
    inphase = (values * turn).real
    with np.errstate(divide="ignore"):
        length = np.where(rate > 0, 3 / (rate * dwell), points)
    length = np.clip(length, 8, points)
    edges = np.rint(np.linspace(0, 1, blocks + 1) * length[:, None]).astype(np.int64)
    sums = np.concatenate([np.zeros((records, 1)), np.cumsum(inphase, axis=-1)], axis=-1)
    heights = np.diff(np.take_along_axis(sums, edges, axis=-1), axis=-1)
    counts = np.diff(edges, axis=-1)
    weight = np.divide(1.0, counts, out=np.zeros(counts.shape), where=counts > 0)
    found = np.array(rate, dtype=float)

    def shape(rate: Real) -> tuple[Real, Real]:
        """Block sums of exp(-R n dt), and their derivative by R, exactly."""
        safe = np.where(np.abs(rate * dwell) < 1e-9, 1e-9 / dwell, rate)[:, None]
        decay = np.exp(-safe * dwell * edges)
        single = -np.expm1(-safe * dwell)
        whole = -np.diff(decay, axis=-1) / single
        by_rate = np.diff(dwell * edges * decay, axis=-1) / single
        return whole, by_rate - whole * dwell * np.exp(-safe * dwell) / single

    stiffness = np.zeros(records)
    for _ in range(15):
        whole, by_rate = shape(found)
        power = (weight * whole**2).sum(-1)
        level = (weight * whole * heights).sum(-1) / power
        gradient = level[:, None] * by_rate
        gradient -= whole * ((weight * whole * gradient).sum(-1) / power)[:, None]
        stiffness = (weight * gradient**2).sum(-1)
        move = (weight * gradient * (heights - level[:, None] * whole)).sum(-1)
        move = np.divide(move, stiffness, out=np.zeros(records), where=stiffness > 0)
        limit = 0.5 * np.abs(found) + 1e-12
        found = found + np.clip(move, -limit, limit)
    with np.errstate(divide="ignore", invalid="ignore"):
        value = np.where(found > 0, 1 / found, np.nan)
        std = noise / np.sqrt(stiffness) * value**2
    return value, std
