"""Several records made one: shots averaged, coil channels combined."""

from __future__ import annotations

from typing import Annotated, Any, Literal

import numpy as np
import numpy.typing as npt
import scipy.fft
import xarray as xr

from fidkit import signals
from fidkit.params import FidkitError, ParameterError, Together, step
from fidkit.steps.common import Tail


@step
def average_shots(
    signal: Annotated[xr.DataArray, Together()],
    *,
    align_frequency: bool = False,
    align_phase: bool = False,
) -> xr.DataArray:
    """Average over the dimension ``shot``, where wished after aligning the shots.

    Parameters
    ----------
    align_frequency : bool
        First bring every shot to the frequency of the first one (FIDs only).
    align_phase : bool
        First bring every shot to the phase of the first one.

    Returns
    -------
    xarray.DataArray
        The mean, without the dimension ``shot`` and what ran along it. Real or complex.

    Raises
    ------
    FidkitError
        If there is no dimension ``shot``, or shots of real values are to be aligned.
    ParameterError
        If the frequencies of spectra are to be aligned.

    Notes
    -----
    Independent noise falls by the square root of the number of shots. Frequency difference f and
    phase difference p of a shot s from a reference r are where
    ``sum_n s_n conj(r_n) exp(-i (2 pi f t_n + p))`` is largest: the maximum of the cross-correlation
    of their spectra, which is least squares for a noiseless reference. It is found on a fourfold
    zero-filled transform and refined by Newton's method; the phase is closed form. The reference
    is the first shot and, in a second round, the mean of the first round. At low signal to noise
    alignment fits noise: use it only where the line stands out in every single shot.
    """
    where = "average_shots"
    _require(signal, "shot", where)
    in_time = signals.is_fid(signal)
    if align_frequency and not in_time:
        raise ParameterError(
            f"{where}: align_frequency must be False for spectra; got True; average the FIDs, "
            "before fourier_transform"
        )
    values = np.moveaxis(signal.values, signal.dims.index("shot"), 0)
    if align_frequency or align_phase:
        signals.require_complex(signal, where)
        axis = signal[signal.dims[-1]].values
        reference = values[0]
        for _ in range(2):
            aligned = _aligned(values, reference, axis, align_frequency, align_phase)
            reference = aligned.mean(axis=0)
        mean = reference.astype(values.dtype)
    else:
        # summed in double precision: rounding would grow with the number of shots
        wide = np.complex128 if np.iscomplexobj(values) else np.float64
        mean = values.mean(axis=0, dtype=wide).astype(values.dtype)
    return _without(signal, "shot").copy(data=mean)


@step
def combine_channels(
    fid: Annotated[xr.DataArray, Together()],
    *,
    method: Literal["whitened", "sum of squares"] = "whitened",
    tail: Tail = 0.1,
) -> xr.DataArray:
    """Combine the receiver channels of a coil array, dimension ``channel``, to one signal.

    Parameters
    ----------
    method : {'whitened', 'sum of squares'}
        ``whitened`` is the sum of best signal to noise ratio, in units and phase of the strongest
        channel. ``sum of squares`` is a magnitude: real, never negative, with noise that does not
        average to zero; it cannot be phased or transformed.
    tail : float
        Fraction of the measured points, counted from the last one, that the noise of the channels
        and its correlation are taken from (``whitened`` only).

    Returns
    -------
    xarray.DataArray
        One signal, without the dimension ``channel`` and what ran along it.

    Raises
    ------
    FidkitError
        If there is no dimension ``channel``, `tail` holds fewer than two points a channel, or the
        noise of one channel follows from that of the others.

    Notes
    -----
    Weights ``w = inverse(P) b`` with the noise covariance P and the signal b of each channel
    (Roemer et al., Magn. Reson. Med. 16, 192 (1990), from memory). b is the first singular vector of the
    whitened record before the tail. The result is ``w^H x / w^H b`` times b of the channel that is
    strongest; P and b are taken over all other leading dimensions together, as the coils are the
    same. Lines that still stand out in the spectrum of the tail are cut out of the noise: the
    weights would turn against them.
    """
    where = "combine_channels"
    _require(fid, "channel", where)
    values = np.moveaxis(fid.values, fid.dims.index("channel"), 0)
    if method == "sum of squares":
        combined = np.sqrt(np.sum(values.real**2 + values.imag**2, axis=0))
    else:
        weights = _best_weights(values, signals.acquired_points(fid), tail, where)
        combined = np.tensordot(weights.astype(values.dtype), values, axes=1)
    return _without(fid, "channel").copy(data=combined)


def _require(signal: xr.DataArray, dimension: str, where: str) -> None:
    if dimension not in signal.dims:
        got = ", ".join(str(name) for name in signal.dims)
        raise FidkitError(
            f"{where}: the signal must have a dimension {dimension}; got {got}; leave the step out, "
            f"or name the dimension with .rename or in from_array(dims=...)"
        )


def _without(signal: xr.DataArray, dimension: str) -> xr.DataArray:
    """The signal less a dimension, and less every coordinate that runs along it."""
    along = [name for name, value in signal.coords.items() if dimension in value.dims]
    return signal.drop_vars(along).isel({dimension: 0})


def _aligned(
    values: npt.NDArray[Any],
    reference: npt.NDArray[Any],
    axis: npt.NDArray[np.float64],
    frequency: bool,
    phase: bool,
) -> npt.NDArray[Any]:
    """The shots, first axis, turned to the reference."""
    product = values.astype(np.complex128) * np.conj(reference)
    turn: npt.NDArray[Any] = np.ones(product.shape, np.complex128)
    if frequency:
        turn = np.exp(-2j * np.pi * _difference(product, axis)[..., None] * axis)
    if phase:
        overlap = np.sum(product * turn, axis=-1, keepdims=True)
        turn = turn * np.exp(-1j * np.angle(overlap))
    aligned: npt.NDArray[Any] = values * turn
    return aligned


def _difference(
    product: npt.NDArray[np.complex128], time: npt.NDArray[np.float64]
) -> npt.NDArray[np.float64]:
    """The frequency, Hz, at which the transform of the product is largest."""
    dwell = (time[-1] - time[0]) / (time.size - 1)
    length = scipy.fft.next_fast_len(4 * time.size)
    size = np.abs(scipy.fft.fft(product, length, axis=-1))
    found: npt.NDArray[np.float64] = scipy.fft.fftfreq(length, dwell)[np.argmax(size, axis=-1)]
    # times from the middle of the product's energy, where the sums below are best conditioned
    weight = np.sum(np.abs(product), axis=tuple(range(product.ndim - 1)))
    total = float(weight.sum())
    since = time - (float(np.sum(weight * time)) / total if total > 0 else 0.0)
    for _ in range(4):
        turned = product * np.exp(-2j * np.pi * found[..., None] * since)
        zeroth, first, second = (np.sum(turned * since**power, axis=-1) for power in range(3))
        # derivatives of |sum|^2 by the angular frequency
        slope = 2 * np.imag(np.conj(zeroth) * first)
        curvature = 2 * (np.abs(first) ** 2 - np.real(np.conj(zeroth) * second))
        change = np.divide(-slope, curvature, out=np.zeros_like(slope), where=curvature < 0)
        found = found + change / (2 * np.pi)
    return found


def _best_weights(
    values: npt.NDArray[Any], measured: int, tail: float, where: str
) -> npt.NDArray[Any]:
    """What each channel, first axis, is multiplied by before the sum."""
    channels = values.shape[0]
    count = round(tail * measured)
    wide = values.astype(np.complex128 if np.iscomplexobj(values) else np.float64)
    noise = wide[..., measured - count : measured]
    if noise[0].size < 2 * channels or count >= measured:
        raise ParameterError(
            f"{where}: tail must hold at least two points a channel ({2 * channels} for {channels} "
            f"channels) and leave some of the {measured} measured points; got {tail:g} fraction, "
            f"{noise[0].size} points"
        )
    flat = _without_lines(noise).reshape(channels, -1)
    covariance = flat @ flat.conj().T / max(flat.shape[1], 1)
    scale = np.sqrt(np.real(np.diag(covariance)))
    # the channels' own gains say nothing about whether their noise is independent
    relative = covariance / np.outer(scale, scale) if np.all(scale > 0) else None
    if relative is None or np.linalg.eigvalsh(relative)[0] < 1e-10:
        raise FidkitError(
            f"{where}: the noise of each channel must be independent of the others; got a channel "
            "without noise or one that follows from the rest; drop it, or use method='sum of squares'"
        )
    lower = np.linalg.cholesky(covariance)
    before = wide[..., : measured - count].reshape(channels, -1)
    whitened = np.linalg.solve(lower, before)
    vector = np.linalg.eigh(whitened @ whitened.conj().T)[1][:, -1]
    pattern = lower @ vector
    strongest = int(np.argmax(np.abs(pattern)))
    # with w = inverse(P) b, w^H x is vector^H inverse(lower) x, and w^H b is one
    weights: npt.NDArray[Any] = np.linalg.solve(lower.conj().T, vector).conj() * pattern[strongest]
    return weights


def _without_lines(noise: npt.NDArray[Any]) -> npt.NDArray[Any]:
    """The noise of the channels, up to a common factor, without lines that stand out of it.

    Where there is none the record itself; else its spectrum under a raised cosine, whose feet fall
    fast, without the bins of the lines.
    """
    if noise.shape[-1] > 1:
        noise = noise - noise.mean(axis=-1, keepdims=True)
    window = np.sin(np.pi * (np.arange(noise.shape[-1]) + 0.5) / noise.shape[-1]) ** 2
    spectrum = scipy.fft.fft(noise * window, axis=-1)
    power = np.abs(spectrum) ** 2
    records = noise[0, ..., 0].size
    power = power.reshape(power.shape[0], records, -1).mean(axis=1)
    # of one record of noise one bin in a million is above 20 times the median
    limit = (1 + 19 / np.sqrt(records)) * np.median(power, axis=-1, keepdims=True)
    loud = np.any(power > limit, axis=0)
    if not loud.any():
        return noise
    around = np.any([np.roll(loud, place) for place in range(-2, 3)], axis=0)
    quiet: npt.NDArray[Any] = spectrum[..., ~around]
    return quiet
