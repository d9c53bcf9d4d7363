"""Bloch simulation of a bench record: pulse, free precession, and what a receiver makes of it.

Everything is a closed form, so there is no time step to choose: a pulse of constant strength is a
rotation about its effective field, free precession is a rotation about z with two exponentials.

The rotating frame turns with the carrier. `offset` is in Hz from it; positive is faster, and turns
from x to y, so that the transverse part x + iy runs as ``exp(+2 pi i offset t)``. Source of the
equations: F. Bloch, Phys. Rev. 70, 460 (1946) (from memory).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt
import xarray as xr

from fidkit.params import FidkitError
from fidkit.signals import from_array

__all__ = [
    "Receiver",
    "Sample",
    "equilibrium",
    "precess",
    "pulse",
    "record",
    "simulate_fid",
    "sphere_sample",
]

Array = npt.NDArray[np.float64]

#: Isochromats worked on at a time, so that they and their signals stay in the cache.
BLOCK = 64


@dataclass(frozen=True)
class Sample:
    """Isochromats: small parts of the sample that each see one field.

    Parameters
    ----------
    offset : array_like, shape (isochromat,)
        Larmor frequency of each from the carrier, Hz.
    weight : array_like, shape (isochromat,)
        Equilibrium magnetization of each, in units of the signal; one number for all shares it out.
    t1, t2 : float
        Relaxation times, s; infinite where nothing relaxes.

    Raises
    ------
    FidkitError
        If the arrays do not match or a relaxation time is not above zero.
    """

    offset: Array
    weight: Array
    t1: float = np.inf
    t2: float = np.inf

    def __init__(
        self,
        offset: npt.ArrayLike,
        weight: npt.ArrayLike = 1.0,
        t1: float = np.inf,
        t2: float = np.inf,
    ):
        offsets = np.atleast_1d(np.asarray(offset, dtype=float))
        weights = np.asarray(weight, dtype=float)
        if weights.ndim == 0:
            weights = np.full(offsets.shape, float(weights) / offsets.size)
        if offsets.ndim != 1 or weights.shape != offsets.shape:
            raise FidkitError(
                "weight must be one number or one for each offset; got shapes "
                f"{weights.shape} and {offsets.shape}"
            )
        for name, time in (("t1", t1), ("t2", t2)):
            if not time > 0:
                raise FidkitError(f"{name} must be above 0 s; got {time!r}")
        for name, value in (("offset", offsets), ("weight", weights), ("t1", t1), ("t2", t2)):
            object.__setattr__(self, name, value)


def sphere_sample(
    *,
    offset: float,
    linear: float = 0.0,
    quadratic: float = 0.0,
    amplitude: float = 1.0,
    isochromats: int = 2000,
    t1: float = np.inf,
    t2: float = np.inf,
) -> Sample:
    """A round sample in a field that a shim left uneven.

    Parameters
    ----------
    offset : float
        Frequency at the centre, Hz from the carrier.
    linear : float
        What a gradient along z adds at the pole, Hz; it takes as much off at the other.
    quadratic : float
        Strength of the term ``(3 z^2 - r^2) / 2``, Hz at the pole; it makes the line lopsided.
    amplitude : float
        Equilibrium magnetization of the whole sample, in units of the signal.
    isochromats : int
        In how many parts of equal volume the sphere is cut.
    t1, t2 : float
        Relaxation times, s.

    Returns
    -------
    Sample
        The isochromats, always at the same places.
    """
    # an additive lattice (multiples of powers of the root of x^3 = x + 1) fills a square evenly
    root = 1.324717957244746
    steps = 1 / root ** np.arange(1, 3)
    places = np.modf(0.5 + np.outer(np.arange(1, isochromats + 1), steps))[0]
    radius = np.cbrt(places[:, 0])
    z = radius * (2 * places[:, 1] - 1)
    offsets = offset + linear * z + quadratic * (3 * z**2 - radius**2) / 2
    return Sample(offsets, amplitude, t1, t2)


def equilibrium(sample: Sample) -> Array:
    """Magnetization vectors at rest, shape (isochromat, 3): x, y, z in units of the signal."""
    vectors = np.zeros((sample.offset.size, 3))
    vectors[:, 2] = sample.weight
    return vectors


def pulse(
    magnetization: Array,
    *,
    flip_angle: npt.ArrayLike,
    phase: float = 0.0,
    duration: float = 0.0,
    offset: npt.ArrayLike = 0.0,
) -> Array:
    """Turn the magnetization by a rectangular pulse.

    Parameters
    ----------
    magnetization : ndarray, shape (isochromat, 3)
        Vectors before the pulse.
    flip_angle : float or array_like, shape (isochromat,)
        On-resonance flip angle, degree: 360 times the strength of the pulse in Hz times its
        duration. One for each isochromat where the coil's field is uneven.
    phase : float
        Direction of the pulse in the transverse plane, degree from x towards y.
    duration : float
        Length, s; 0 for a pulse too short to see the offset.
    offset : float or array_like, shape (isochromat,)
        Larmor frequency from the carrier, Hz.

    Returns
    -------
    ndarray, shape (isochromat, 3)
        Vectors after the pulse.

    Notes
    -----
    Exact rotation about the effective field (Rodrigues' formula). Relaxation during the pulse is
    left out: the pulse must be short against T1 and T2.
    """
    flip, turn = np.broadcast_arrays(
        np.deg2rad(np.asarray(flip_angle, dtype=float)),
        2 * np.pi * np.asarray(offset, dtype=float) * duration,
    )
    flip, turn = np.atleast_1d(flip), np.atleast_1d(turn)
    direction = np.deg2rad(phase)
    axis = np.stack([flip * np.cos(direction), flip * np.sin(direction), turn], axis=-1)
    angle = np.hypot(flip, turn)[:, None]
    axis = np.divide(axis, angle, out=np.zeros_like(axis), where=angle > 0)
    along = np.sum(axis * magnetization, axis=-1, keepdims=True)
    return np.asarray(
        magnetization * np.cos(angle)
        + np.cross(axis, magnetization) * np.sin(angle)
        + axis * along * (1 - np.cos(angle))
    )


def precess(magnetization: Array, sample: Sample, time: float) -> Array:
    """Let the magnetization precess and relax freely.

    Parameters
    ----------
    magnetization : ndarray, shape (isochromat, 3)
        Vectors at the start.
    sample : Sample
        Offsets, relaxation times and the equilibrium that it returns to.
    time : float
        How long, s.

    Returns
    -------
    ndarray, shape (isochromat, 3)
        Vectors after that time.
    """
    transverse = magnetization[:, 0] + 1j * magnetization[:, 1]
    transverse = transverse * np.exp(2j * np.pi * sample.offset * time - time / sample.t2)
    missing = sample.weight - magnetization[:, 2]
    return np.stack(
        [transverse.real, transverse.imag, sample.weight - missing * np.exp(-time / sample.t1)],
        axis=-1,
    )


def record(
    magnetization: Array, sample: Sample, times: npt.ArrayLike
) -> npt.NDArray[np.complex128]:
    """The transverse magnetization of the whole sample while it precesses freely.

    Parameters
    ----------
    magnetization : ndarray, shape (isochromat, 3)
        Vectors at time zero.
    sample : Sample
        Offsets and T2.
    times : array_like, shape (time,)
        When to look, s.

    Returns
    -------
    ndarray, shape (time,), complex
        Sum of x + iy over the isochromats.
    """
    at = np.asarray(times, dtype=float)
    transverse = magnetization[:, 0] + 1j * magnetization[:, 1]
    total = np.zeros(at.shape, dtype=complex)
    for first in range(0, transverse.size, BLOCK):
        part = slice(first, first + BLOCK)
        total += transverse[part] @ np.exp(2j * np.pi * np.outer(sample.offset[part], at))
    return np.asarray(total * np.exp(-at / sample.t2))


@dataclass(frozen=True)
class Receiver:
    """What a receiver does to a signal; everything is left out unless asked for.

    Parameters
    ----------
    gain : float
        Factor from magnetization to the unit of the record.
    phase : float
        Phase of the receiver, degree.
    noise : float
        Standard deviation of the white noise on each of the real and imaginary parts.
    offset : complex
        Constant (DC) on the two lines.
    mains : float
        Amplitude of the mains pick-up at its fundamental; the third harmonic has a third of it.
    mains_frequency : float
        Frequency of the mains, Hz.
    gain_imbalance : float
        By how much the imaginary line is louder than the real one, as a fraction.
    phase_imbalance : float
        By how much the two lines are off a right angle, degree.
    digitizer_step : float
        Smallest step of the record; 0 for none.
    """

    gain: float = 1.0
    phase: float = 0.0
    noise: float = 0.0
    offset: complex = 0.0
    mains: float = 0.0
    mains_frequency: float = 50.0
    gain_imbalance: float = 0.0
    phase_imbalance: float = 0.0
    digitizer_step: float = 0.0

    def __call__(
        self,
        signal: npt.NDArray[np.complex128],
        times: npt.ArrayLike,
        random: np.random.Generator | None = None,
    ) -> npt.NDArray[np.complex128]:
        """Return the record of a signal.

        Parameters
        ----------
        signal : ndarray, shape (time,), complex
            Transverse magnetization.
        times : array_like, shape (time,)
            When it was taken, s.
        random : numpy.random.Generator, optional
            Where the noise and the phase of the mains come from.

        Returns
        -------
        ndarray, shape (time,), complex
            Record in units of the gain.

        Raises
        ------
        FidkitError
            If there is noise or mains pick-up, but nowhere to draw it from.
        """
        at = np.asarray(times, dtype=float)
        if (self.noise or self.mains) and random is None:
            raise FidkitError("noise and mains pick-up need a random generator; give a seed")
        signal = self.gain * np.exp(1j * np.deg2rad(self.phase)) * signal
        skew = np.deg2rad(self.phase_imbalance)
        imaginary = (1 + self.gain_imbalance) * (
            signal.imag * np.cos(skew) + signal.real * np.sin(skew)
        )
        out = signal.real + 1j * imaginary + self.offset
        if random is not None and self.mains:
            # each line picks it up with its own phase, so both +50 Hz and -50 Hz appear
            for harmonic in (1, 3):
                for line in (1, 1j):
                    turn = 2 * np.pi * (self.mains_frequency * harmonic * at + random.uniform())
                    out = out + line * self.mains / harmonic * np.cos(turn)
        if random is not None and self.noise:
            noise = random.standard_normal((2, at.size))
            out = out + self.noise * (noise[0] + 1j * noise[1])
        if self.digitizer_step:
            step = self.digitizer_step
            out = step * (np.round(out.real / step) + 1j * np.round(out.imag / step))
        return np.asarray(out, dtype=complex)


def simulate_fid(
    sample: Sample,
    *,
    points: int,
    dwell_time: float,
    carrier_frequency: float,
    nucleus: str = "1H",
    flip_angle: npt.ArrayLike = 90.0,
    pulse_phase: float = 90.0,
    pulse_duration: float = 0.0,
    dead_time: float = 0.0,
    receiver: Receiver | None = None,
    seed: int | np.random.Generator | None = None,
    units: str = "1",
    coil: str = "",
    sample_name: str = "",
) -> xr.DataArray:
    """One pulse on a sample at rest, and the record that follows.

    Parameters
    ----------
    sample : Sample
        Isochromats.
    points : int
        Points recorded.
    dwell_time : float
        Time between them, s.
    carrier_frequency : float
        Receiver frequency, Hz.
    nucleus : str
        Name from `fidkit.NUCLEI`.
    flip_angle, pulse_phase, pulse_duration
        As `flip_angle`, `phase` and `duration` of `pulse`; with the phase of 90 degree an
        on-resonance record begins on the real axis.
    dead_time : float
        Time of the first point since the middle of the pulse, s.
    receiver : Receiver, optional
        What the receiver adds; a perfect one if left out.
    seed : int or numpy.random.Generator, optional
        Of the noise: the same seed gives the same record.
    units, coil, sample_name : str
        Attributes of the record.

    Returns
    -------
    xarray.DataArray
        The FID.

    Raises
    ------
    FidkitError
        If the first point would fall into the pulse, or a value is out of range.
    """
    if dead_time < pulse_duration / 2:
        raise FidkitError(
            f"dead_time must reach past the pulse, {pulse_duration / 2:g} s; got {dead_time:g} s"
        )
    turned = pulse(
        equilibrium(sample),
        flip_angle=flip_angle,
        phase=pulse_phase,
        duration=pulse_duration,
        offset=sample.offset,
    )
    times = dead_time + dwell_time * np.arange(points)
    signal = record(turned, sample, times - pulse_duration / 2)
    random = np.random.default_rng(seed) if seed is not None else None
    values = (receiver or Receiver())(signal, times, random)
    return from_array(
        values,
        dwell_time=dwell_time,
        carrier_frequency=carrier_frequency,
        nucleus=nucleus,
        time_start=dead_time,
        units=units,
        coil=coil,
        sample=sample_name,
        source="simulated",
    )
