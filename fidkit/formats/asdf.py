"""The compressed number tables of JCAMP-DX: AFFN, PAC, SQZ, DIF and DUP, decoded and encoded.

Forms and check rules: McDonald and Wilks, Appl. Spectrosc. 42, 151 (1988), JCAMP-DX 4.24.
"""

from __future__ import annotations

import re
from collections.abc import Iterable, Sequence
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from fidkit.params import FidkitError

__all__ = ["Table", "decode", "encode"]

#: Leading digit, with its sign, by mark.
DIGITS = [f"{sign}{digit}" for sign in "+-" for digit in range(1, 10)]
SQUEEZED = {"@": "0"} | dict(zip("ABCDEFGHIabcdefghi", DIGITS, strict=True))
DIFFERENCE = {"%": "0"} | dict(zip("JKLMNOPQRjklmnopqr", DIGITS, strict=True))
REPEAT = dict(zip("STUVWXYZs", "123456789", strict=True))

#: No table may unfold to more; a few repeat marks could fill any memory.
MOST_POINTS = 2**24

# E and e are squeezed digits too, so an exponent must carry its sign wherever the form may be
# squeezed; a table of plain numbers may leave it out.
X = re.compile(r"\s*([+-]?(?:\d+\.?\d*|\.\d+)(?:[eE][+-]\d{1,3}(?!\d))?)", re.ASCII)
X_PLAIN = re.compile(r"\s*([+-]?(?:\d+\.?\d*|\.\d+)(?:[eE][+-]?\d{1,3}(?!\d))?)", re.ASCII)
ORDINATE = re.compile(r"[@-Ia-i%J-Rj-rS-Zs]\d*|[+-]?\d+|\S", re.ASCII)
ORDINATE_PLAIN = re.compile(r"[+-]?(?:\d+\.?\d*|\.\d+)(?:[eE][+-]?\d{1,3}(?!\d))?|\S", re.ASCII)
COMPRESSED = re.compile(r"[@-DF-Ia-df-i%J-Zj-s]")
LONGEST_NUMBER = 40
#: As words these are no numbers, though their letters might pass for compressed digits.
NO_NUMBER = re.compile(r"(?<!\S)[+-]?(?:nan|inf\w*)(?![^\s+-])", re.IGNORECASE)


@dataclass(frozen=True)
class Table:
    """A decoded table: the ordinates, and where each line of it said that it starts."""

    ordinates: npt.NDArray[np.float64]
    line_numbers: list[int]
    """Line of the file, for every line of the table."""
    line_x: list[str]
    """X as printed at the head of the line."""
    line_index: list[int]
    """Which ordinate that X belongs to."""
    unit: float
    """What the last printed place of the ordinates is worth."""


def decode(lines: Iterable[tuple[int, str]], expected: int | None) -> Table:
    """Decode a table of the form ``(X++(Y..Y))``.

    Parameters
    ----------
    lines : iterable of (int, str)
        Line numbers for the errors, and the text without comments.
    expected : int or None
        How many ordinates the header promises.

    Returns
    -------
    Table
        Ordinates before any scaling.

    Raises
    ------
    FidkitError
        For anything that is no number, a failed Y check, or a count that is not kept; the line is
        named.
    """
    rows = [(number, text) for number, text in lines if text and not text.isspace()]
    joined = "\n".join(text for _, text in rows)
    whole = COMPRESSED.search(joined) is not None or (
        len(re.findall(r"[eE]", joined)) > len(re.findall(r"[\d.][eE][+-]?\d", joined))
    )
    # numbers that stand apart need no expression to find them
    apart = not whole and re.fullmatch(r"[\d\s.+-]*", joined, re.ASCII) is not None
    apart = apart and re.search(r"\S[+-]", joined) is None
    suspect = NO_NUMBER.search(joined) is not None
    head, body = (X, ORDINATE) if whole else (X_PLAIN, ORDINATE_PLAIN)
    limit = MOST_POINTS if expected is None else min(expected, MOST_POINTS)
    values: list[float] = []
    line_x, line_index = [], []
    last: float = 0
    difference: int | None = None  # the last difference, where the last ordinate came from one
    for number, text in rows:
        if apart:
            parts = text.split()
        else:
            if suspect and (word := NO_NUMBER.search(text)):
                raise FidkitError(f"line {number}: holds {word[0]!r}, which is no number")
            start = head.match(text)
            if start is None:
                raise FidkitError(
                    f"line {number}: must begin with an X value; got {text.strip()[:40]!r}"
                )
            parts = [start[1], *body.findall(text, start.end())]
        if len(parts) < 2:
            raise FidkitError(f"line {number}: holds an X value but no ordinate")
        check = difference is not None
        line_x.append(parts[0])
        line_index.append(len(values) - check)
        if not whole:
            try:
                _, *numbers = map(float, parts)
            except ValueError:
                junk = next((part for part in parts if not _is_number(part)), parts[0])
                raise _no_number(number, text, junk) from None
            values += numbers
            if len(values) > limit:
                raise _too_many(number, expected)
            continue
        tokens = parts[1:]
        fresh = True
        for token in tokens:
            mark = token[0]
            if len(token) > LONGEST_NUMBER:
                raise FidkitError(f"line {number}: no number is that long: {token[:20]!r}...")
            if mark in DIFFERENCE:
                if fresh:
                    raise FidkitError(
                        f"line {number}: begins with a difference ({token!r}); an ordinate must come first"
                    )
                difference = int(DIFFERENCE[mark] + token[1:])
                last += difference
                values.append(last)
            elif mark in REPEAT:
                if fresh:
                    raise FidkitError(
                        f"line {number}: begins with a repeat mark ({token!r}); an ordinate must come first"
                    )
                more = int(REPEAT[mark] + token[1:]) - 1  # the count includes the first one
                if len(values) + more > limit:
                    raise _too_many(number, expected)
                if difference:
                    values += [last + difference * (n + 1) for n in range(more)]
                    last += difference * more
                else:  # after an ordinate it repeats the ordinate, not the difference before it
                    values += [last] * more
            else:
                try:
                    value = int(SQUEEZED[mark] + token[1:] if mark in SQUEEZED else token)
                except ValueError:
                    raise _no_number(number, text, token) from None
                if check and fresh:
                    if value != last:
                        raise FidkitError(
                            f"line {number}: the Y check fails: the line before ends at {last:g}, "
                            f"this one begins with {value:g}; the table is damaged, export it again"
                        )
                else:
                    values.append(value)
                last, difference = value, None
            fresh = False
        if len(values) > limit:
            raise _too_many(number, expected)
    if expected is not None and len(values) != expected:
        where = f"line {rows[-1][0]}: the table ends" if rows else "the table is empty"
        raise FidkitError(
            f"{where} after {len(values)} points where the header promises {expected}; "
            "the file is cut short or damaged"
        )
    ordinates = np.array(values, dtype=np.float64)
    if not np.isfinite(ordinates).all():
        worst = int(np.argmin(np.isfinite(ordinates)))
        raise FidkitError(f"ordinate {worst} of the table is too large for a number")
    unit = 1.0
    if (
        ordinates % 1
    ).any():  # then what the longest fraction says; an X can only have made it longer
        unit = 10.0 ** -max(map(len, re.findall(r"\.(\d+)", joined)), default=0)
    return Table(ordinates, [number for number, _ in rows], line_x, line_index, unit)


def _too_many(number: int, expected: int | None) -> FidkitError:
    promised = (
        f"the header promises {expected}" if expected is not None else "fidkit reads none so long"
    )
    return FidkitError(
        f"line {number}: the table holds more than {min(expected or MOST_POINTS, MOST_POINTS)} points, "
        f"and {promised}; the file is damaged"
    )


def _is_number(text: str) -> bool:
    try:
        float(text)
    except ValueError:
        return False
    return True


def _no_number(number: int, text: str, token: str) -> FidkitError:
    place = text.find(token)
    around = text[max(place - 10, 0) : place + 10].strip()
    return FidkitError(f"line {number}: {around!r} holds {token!r}, which is no number")


def encode(
    ordinates: npt.NDArray[np.int64], x_start: float = 0, x_step: float = 1, width: int = 76
) -> list[str]:
    """Encode whole numbers as differences with repeat marks, with Y checks.

    Parameters
    ----------
    ordinates : ndarray of int, shape (points,)
        Ordinates.
    x_start, x_step : float
        X of the first point and from point to point, as to be printed.
    width : int
        Longest line, characters.

    Returns
    -------
    list of str
        The lines; the last one holds nothing but the check of the last point.
    """
    values = ordinates.tolist()
    steps = np.diff(ordinates)
    # where the difference changes, a new run begins
    edges = np.flatnonzero(np.diff(steps)) + 1
    starts = [0, *edges.tolist()] if steps.size else []
    ends = [*edges.tolist(), steps.size] if steps.size else []
    lines = []
    line = f"{x_start:.12g}" + _squeeze(values[0], "@ABCDEFGHI", "abcdefghi")
    for start, end in zip(starts, ends, strict=True):
        token = _squeeze(int(steps[start]), "%JKLMNOPQR", "jklmnopqr")
        if end - start > 1:
            token += _squeeze(end - start, "0STUVWXYZs", "")
        if len(line) + len(token) > width:
            lines.append(line)
            line = f"{x_start + x_step * start:.12g}"
            line += _squeeze(values[start], "@ABCDEFGHI", "abcdefghi")
        line += token
    lines.append(line)
    if steps.size:
        last = x_start + x_step * (len(values) - 1)
        lines.append(f"{last:.12g}" + _squeeze(values[-1], "@ABCDEFGHI", "abcdefghi"))
    return lines


def _squeeze(number: int, positive: Sequence[str], negative: Sequence[str]) -> str:
    digits = str(abs(number))
    lead = int(digits[0])
    return (positive[lead] if number >= 0 else negative[lead - 1]) + digits[1:]
