"""Reading numbers out of printed blocks: a row that does not look as the program prints it is an error, never a guess."""

from __future__ import annotations

import re
from collections.abc import Iterable
from functools import lru_cache
from math import isfinite

import numpy as np
from ase.data import atomic_numbers

from strainkit.tensors.arrays import FloatArray, IntArray

__all__ = [
    "NUMBER",
    "elements",
    "found",
    "fractional",
    "last",
    "last_number",
    "lines_after",
    "names",
    "needed",
    "number",
    "rows",
    "symmetric",
]

#: one printed number
NUMBER = r"[-+]?(?:\d+(?:\.\d*)?|\.\d+)(?:[eEdD][-+]?\d+)?"


def number(word: str) -> float:
    """A printed number, with Fortran's D exponents; ValueError when it is beyond any floating-point number."""
    value = float(word.replace("D", "E").replace("d", "e"))
    if not isfinite(value):
        raise ValueError(f"{word[:20]} cannot be read as a finite number")
    return value


def names(found: Iterable[str]) -> str:
    """Names, each once, in an order that does not depend on that of the atoms."""
    return ", ".join(sorted(set(found)))


def last(pattern: re.Pattern[str], text: str, start: int = 0) -> re.Match[str] | None:
    """The last match of a pattern."""
    match = None
    for match in pattern.finditer(text, start):  # noqa: B007
        pass
    return match


def found(pattern: re.Pattern[str], text: str, what: str) -> re.Match[str]:
    """The first match of a pattern; ValueError names what is missing."""
    match = pattern.search(text)
    if match is None:
        raise ValueError(f"no {what}")
    return match


def needed(value: float | None, what: str) -> float:
    """The value; ValueError names what is missing."""
    if value is None:
        raise ValueError(f"no {what}")
    return value


def last_number(pattern: re.Pattern[str], text: str, start: int = 0) -> float | None:
    """The first group of the last match."""
    match = last(pattern, text, start)
    return None if match is None else number(match[1])


def lines_after(text: str, start: int, count: int, skip: int = 0) -> list[str]:
    """Whole lines after the one that holds position `start`; the last of them must have ended."""
    lines = []
    position = start
    for _ in range(count + skip + 1):
        end = text.find("\n", position)
        if end < 0:
            raise ValueError("a block of numbers is cut short")
        lines.append(text[position:end])
        position = end + 1
    return lines[skip + 1 :]


@lru_cache(maxsize=4096)
def _row(form: str) -> re.Pattern[str]:
    return re.compile(r"\s*" + form.replace("#", f"({NUMBER})").replace("...", r"\s+") + r"\s*\Z")


def rows(text: str, start: int, count: int, form: str, what: str, skip: int = 0, labels: str = "") -> FloatArray:
    """Numbers (count, m) from as many lines after position `start`.

    Parameters
    ----------
    text, start : str, int
        Where the heading of the block is.
    count, skip : int
        Lines of the block, and lines between it and its heading.
    form : str
        Pattern of one line: # is a number that is kept, ... is white space, @ the label or number of the row.
    what : str
        Name of the block in the message when a line has another form.
    labels : str
        One letter for each row; rows are numbered from 1 when there are none.
    """
    values = []
    for row, line in enumerate(lines_after(text, start, count, skip)):
        match = _row(form.replace("@", labels[row] if labels else str(row + 1)) if "@" in form else form).match(line)
        if match is None:
            raise ValueError(f"the {what} cannot be read: {line.strip()[:60]!r}")
        values.append([number(word) for word in match.groups()])
    return np.array(values, dtype=float)


def symmetric(matrix: FloatArray, rounding: float, what: str = "stress") -> FloatArray:
    """The symmetric part; ValueError when the matrix is not symmetric to its printed digits."""
    if np.abs(matrix - matrix.T).max() > rounding:
        raise ValueError(f"the {what} is not symmetric")
    return np.asarray(0.5 * (matrix + matrix.T))


def elements(labels: list[str]) -> IntArray:
    """Atomic numbers of labels such as Si, fe, O1, C_alpha."""
    return np.array([_element(label) for label in labels], dtype=np.int64)


@lru_cache(maxsize=512)
def _element(label: str) -> int:
    letters = found(re.compile(r"[A-Za-z]+"), label, "chemical symbol").group()
    for symbol in (letters[:2].capitalize(), letters[:1].upper()):
        if (known := atomic_numbers.get(symbol, 0)) > 0:
            return int(known)
    raise ValueError(f"no element in the label {label[:20]!r}")


def fractional(cartesian: FloatArray, lattice: FloatArray) -> FloatArray:
    """Fractional positions (n, 3) of Cartesian ones in the same unit as the lattice (rows)."""
    return np.linalg.solve(lattice.T, cartesian.T).T
