"""Nuclei: their frequencies in a field, with the published source of every number.

Two conventions stand side by side and must not be mixed:

* *shielded*: the frequency of a usual reference compound, from the frequency ratios (Xi, in per
  cent of the proton's) of Harris et al., Pure Appl. Chem. 73, 1795-1818 (2001), IUPAC, on top of
  the shielded proton in water (sphere, 25 C) of CODATA 2022. This is what a sample in a coil shows,
  to a few parts per million (the ratios refer to tetramethylsilane, the constant to water).
* *bare*: the free nucleus, from the magnetogyric ratios of the same recommendation, and from
  CODATA 2022 for the proton.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Literal

from fidkit.params import FidkitError

__all__ = ["NUCLEI", "Nucleus", "field_from_frequency", "find_nucleus", "larmor_frequency"]

#: CODATA 2022, Hz/T: free proton, and proton in water (sphere, 25 C), each with its standard
#: uncertainty. Written out, not taken from scipy, so that the year does not change under us.
PROTON_BARE = (42.577478461e6, 0.018)
PROTON_SHIELDED = (42.57638543e6, 0.17)


@dataclass(frozen=True)
class Nucleus:
    """One nucleus: frequency ratio in per cent and magnetogyric ratio in 1e7 rad/(s T)."""

    name: str
    frequency_ratio: float
    magnetogyric_ratio: float

    def hertz_per_tesla(self, shielding: Literal["shielded", "bare"] = "shielded") -> float:
        """Frequency in a field of 1 T, Hz, always positive."""
        if shielding == "shielded":
            return self.frequency_ratio / 100 * PROTON_SHIELDED[0]
        if shielding == "bare":
            if self.name == "1H":
                return PROTON_BARE[0]
            return abs(self.magnetogyric_ratio) * 1e7 / (2 * math.pi)
        raise FidkitError(f"shielding must be 'shielded' or 'bare'; got {shielding!r}")

    @property
    def relative_uncertainty(self) -> float:
        """Standard uncertainty of the shielded frequency, as a fraction of it.

        That of the constant for the proton, and the rounding of the ratio to six decimals.
        """
        rounding = 0.0 if self.name == "1H" else 1e-6 / math.sqrt(12) / self.frequency_ratio
        return math.hypot(PROTON_SHIELDED[1] / PROTON_SHIELDED[0], rounding)


#: Frequency ratios (Xi) and magnetogyric ratios: Harris et al. 2001, table 1.
NUCLEI: dict[str, Nucleus] = {
    name: Nucleus(name, ratio, magnetogyric)
    for name, ratio, magnetogyric in (
        ("1H", 100.0, 26.7522128),
        ("2H", 15.350609, 4.10662791),
        ("3He", 76.179437, -20.3801587),
        ("7Li", 38.863797, 10.3977013),
        ("13C", 25.145020, 6.728284),
        ("15N", 10.136767, -2.71261804),
        ("19F", 94.094011, 25.18148),
        ("23Na", 26.451900, 7.0808493),
        ("31P", 40.480742, 10.8394),
        ("129Xe", 27.810186, -7.452103),
    )
}


def find_nucleus(name: str) -> Nucleus:
    """Return a nucleus by its name, such as ``1H`` or ``^1H``.

    Raises
    ------
    FidkitError
        If the table does not hold it.
    """
    plain = str(name).strip().lstrip("^")
    for known, nucleus in NUCLEI.items():
        if known.lower() == plain.lower():
            return nucleus
    raise FidkitError(f"nucleus must be one of {', '.join(NUCLEI)}; got {name!r}")


def larmor_frequency(
    field: float, nucleus: str = "1H", *, shielding: Literal["shielded", "bare"] = "shielded"
) -> float:
    """Frequency of a nucleus in a field.

    Parameters
    ----------
    field : float
        Flux density, T.
    nucleus : str
        Name, such as ``1H``.
    shielding : {'shielded', 'bare'}
        Reference compound or free nucleus; they differ by 26 ppm for the proton.

    Returns
    -------
    float
        Frequency, Hz, positive.

    Raises
    ------
    FidkitError
        For an unknown nucleus.
    """
    return field * find_nucleus(nucleus).hertz_per_tesla(shielding)


def field_from_frequency(
    frequency: float, nucleus: str = "1H", *, shielding: Literal["shielded", "bare"] = "shielded"
) -> float:
    """Field in which a nucleus has the given frequency: the inverse of `larmor_frequency`.

    Parameters
    ----------
    frequency : float
        Frequency of the line, Hz.
    nucleus, shielding
        As in `larmor_frequency`.

    Returns
    -------
    float
        Flux density, T.

    Raises
    ------
    FidkitError
        For an unknown nucleus.
    """
    return frequency / find_nucleus(nucleus).hertz_per_tesla(shielding)
