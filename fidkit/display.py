"""Numbers as text: the one place where a value, its uncertainty and its unit become words."""

from __future__ import annotations

import math
from collections.abc import Iterable

__all__ = ["number_text", "quantity_text", "scaled_unit"]

#: Units that people read with a prefix, and the prefixes in use; a field stays in T.
SCALED_UNITS = ("s", "V", "A", "V s", "A s")
PREFIXES = {0: "", -3: "m", -6: "µ", -9: "n", -12: "p"}


def scaled_unit(values: Iterable[float], unit: str) -> tuple[float, str]:
    """A prefix that suits all the values together.

    Parameters
    ----------
    values : iterable of float
        What will stand in one column; what is not finite is left out.
    unit : str
        Their unit, such as ``s``.

    Returns
    -------
    factor : float
        Multiply the values by this.
    unit : str
        The unit with its prefix, such as ``ms``; ``""`` for a plain number.
    """
    if unit == "1":
        return 1.0, ""
    sizes = sorted(abs(value) for value in values if math.isfinite(value) and value)
    if unit not in SCALED_UNITS or not sizes:
        return 1.0, unit
    middle = sizes[len(sizes) // 2]
    exponent = max(min(math.floor(math.log10(middle) / 3 + 1e-9) * 3, 0), min(PREFIXES))
    return float(f"1e{-exponent}"), PREFIXES[exponent] + unit


def number_text(value: float, std: float = math.nan, *, digits: int = 5) -> str:
    """A value with its standard uncertainty in brackets, such as ``137.41(2)``.

    Parameters
    ----------
    value, std : float
        In one unit. The uncertainty is shown with one digit, or two where the first is a 1,
        so that rounding never changes it by more than a quarter.
    digits : int
        Significant digits of a value whose uncertainty is unknown.

    Returns
    -------
    str
        ``-`` where there is no value; ``137.41(?)`` where its uncertainty is unknown.
    """
    if not math.isfinite(value):
        return "-"
    if not math.isfinite(std) or std < 0:
        return f"{value:.{digits}g}(?)"
    if std == 0:
        return f"{value:.{digits}g}"
    from uncertainties import ufloat

    shown = 2 if f"{std:.1e}".startswith("1") else 1
    size = max(abs(value), std)
    plain = "f" if 1e-5 < size < 1e10 else "e"  # decimals line up only without exponents
    return f"{ufloat(value, std):.{shown}u{plain}S}"


def quantity_text(value: float, std: float = math.nan, unit: str = "", *, digits: int = 5) -> str:
    """A quantity in full, such as ``49.71(8) ms``.

    Parameters
    ----------
    value, std : float
        Value and standard uncertainty, in `unit`.
    unit : str
        Unit; ``1`` or nothing for a plain number.
    digits : int
        As in `number_text`.

    Returns
    -------
    str
        Value, uncertainty and unit; says so where one is missing.
    """
    if not math.isfinite(value):
        return "not known"
    factor, unit = scaled_unit([value], unit or "1")
    number = number_text(value * factor, std * factor, digits=digits)
    known = number.removesuffix("(?)")
    text = f"{known} {unit}".rstrip()
    return text if known == number else f"{text} (uncertainty not known)"
