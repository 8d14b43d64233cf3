"""A stiffness tensor typed into a text file: a 6x6 matrix, or constants by name that a Laue class completes.

::

    # what follows # is ignored; one entry a line; every word but the constants may be left out
    name silicon
    laue m-3m
    axes ieee
    unit GPa
    density 2329 kg/m^3
    temperature 298 K
    source where the numbers are from
    C11 165.78
    C12 = 63.94(2)
    C44 79.62 +- 0.05

or six rows of six numbers (or of a triangle), Voigt order xx yy zz yz xz xy, and six more after the word `errors`.
Nothing is guessed: a constant that is neither given nor fixed by symmetry is an error that names it.
"""

from __future__ import annotations

import re
from dataclasses import dataclass
from pathlib import Path

import numpy as np

from strainkit.errors import InputError
from strainkit.tensors.arrays import FloatArray
from strainkit.tensors.complete import Entry, complete, misfits
from strainkit.tensors.constants import ALL_NAMES
from strainkit.tensors.laue import LAUE_SYMBOLS, Setting, laue_settings
from strainkit.tensors.stiffness import Stiffness
from strainkit.units import STRESS_UNITS_IN_GPA

__all__ = ["AXES", "TensorFile", "parse_tensor", "read_tensor"]

#: what `axes` may say; how they lie in a crystal is known once there is a cell
AXES = ("ieee", "crystal", "given")

#: whatever the unit, a larger number is a slip of the pen
_LARGEST = 1e9
_WORDS = ("name", "source", "unit", "axes", "laue", "density", "temperature")
#: those whose value is prose, in which commas and brackets stay
_FREE = ("name", "source")
_NUMBER = re.compile(r"[-+]?(?:\d+\.?\d*|\.\d+)(?:[eE][-+]?\d+)?")
_CONSTANT = re.compile(r"[Cc]_?([1-6])([1-6])\s*[=:]?\s*(.*)")
_VALUE = re.compile(rf"({_NUMBER.pattern})(?:\((\d+)\)|\s*(?:\+-|\+/-|±)?\s*({_NUMBER.pattern}))?")


@dataclass(frozen=True)
class TensorFile:
    """What a tensor file says.

    Attributes
    ----------
    entries : dict
        Name ("C11", ...) -> value with its error, GPa.
    laue_class : str or None
    axes : str or None
        One of `AXES`; None when the file does not say.
    name, where, source : str
    density, temperature : float or None
        kg/m^3, K.
    """

    entries: dict[str, Entry]
    laue_class: str | None
    axes: str | None
    name: str
    where: str
    source: str = ""
    density: float | None = None
    temperature: float | None = None

    def stiffness(self, rotations: FloatArray | None = None) -> tuple[Stiffness, str]:
        """The tensor in the file's axes, and where the symmetry axes lie in them, in words.

        Parameters
        ----------
        rotations : (m, 3, 3), optional
            Proper rotations of the crystal's Laue class in the file's axes; conventional ones of the Laue class that the
            file names when left out. Errors are taken as independent: a file does not say how they correlate.

        Raises
        ------
        InputError
            Constants missing, or at odds with the symmetry beyond their rounding. A full matrix is taken as it is.
        """
        if rotations is not None:
            settings = [Setting("as in the cell", rotations)]
        elif self.laue_class is not None:
            settings = laue_settings(self.laue_class)
        else:
            settings = [Setting("not stated", np.eye(3)[None])]
        best = min(settings, key=lambda setting: len(misfits(self.entries, setting.rotations)))
        frame = self.axes or "typed"
        try:
            return complete(self.entries, best.rotations, self.where, frame), best.words
        except InputError:
            if len(self.entries) < len(ALL_NAMES):
                raise
        return complete(self.entries, np.eye(3)[None], self.where, frame), best.words


def read_tensor(path: str | Path) -> TensorFile:
    """Read a tensor file; the module says what may stand in it.

    Raises
    ------
    InputError
        Unreadable, with the line and the remedy.
    """
    path = Path(path)
    try:
        text = path.read_text(encoding="utf-8")
    except (OSError, UnicodeDecodeError) as error:
        reason = getattr(error, "strerror", None) or "not a text file"
        raise InputError(reason, path, "Give a text file with a 6x6 matrix or lines such as: C11 165.8") from None
    return parse_tensor(text, str(path))


def parse_tensor(text: str, where: str = "tensor") -> TensorFile:
    """The same from text; `where` is named in errors."""
    if text.lstrip().startswith("{"):
        raise InputError("this is JSON, not a typed tensor", where, "For a fitted run give its folder: strainkit derive RUN")
    words: dict[str, str] = {}
    named: dict[str, Entry] = {}
    rows: dict[str, list[list[str]]] = {"values": [], "errors": []}
    block = "values"
    for number, raw in enumerate(text.splitlines(), start=1):
        written = raw.split("#")[0].strip()
        line = re.sub(r"[\[\];,|]", " ", written).strip()
        place = f"{where}, line {number}"
        if not line:
            continue
        constant = _CONSTANT.fullmatch(line)
        if constant:
            _add(named, f"C{min(constant[1], constant[2])}{max(constant[1], constant[2])}", _entry(constant[3], place), place)
        elif line.rstrip(":").lower() in ("errors", "standard errors"):
            block = "errors"
        elif all(_NUMBER.fullmatch(cell) for cell in line.split()):
            rows[block].append(line.split())
        else:
            _word(words, written if line.lower().startswith(_FREE) else line, place)
    if named and rows["values"]:
        raise InputError("both a matrix and named constants", where, "Keep one of them.")
    scale = _scale(words, where)
    if rows["values"]:
        named = _from_matrix(rows["values"], rows["errors"], where)
    if not named:
        raise InputError("no constants", where, "Give a 6x6 matrix in GPa, or lines such as: C11 165.8")
    laue, axes = words.get("laue"), words.get("axes")
    if laue is not None and laue not in LAUE_SYMBOLS:
        raise InputError(f"{laue!r} is not a Laue class", where, f"Use one of {', '.join(LAUE_SYMBOLS)}.")
    if axes is not None and axes not in AXES:
        raise InputError(f"unknown axes {axes!r}", where, f"Use one of {', '.join(AXES)}.")
    return TensorFile(
        entries={name: entry.scaled(scale) for name, entry in named.items()},
        laue_class=laue,
        axes=axes,
        name=words.get("name", Path(where).stem),
        where=where,
        source=words.get("source", ""),
        density=_positive(words, "density", where),
        temperature=_positive(words, "temperature", where),
    )


def _entry(text: str, place: str) -> Entry:
    found = _VALUE.fullmatch(text.strip())
    if not found:
        raise InputError(
            f"{text.strip()!r} is not a number with or without an error", place, "Write 165.8, 165.8(5) or 165.8 0.5."
        )
    if not abs(float(found[1])) < _LARGEST:
        raise InputError(f"{found[1]} is too large for an elastic constant", place)
    last = _last_place(found[1])
    error = int(found[2]) * last if found[2] else abs(float(found[3])) if found[3] else None
    return Entry(float(found[1]), error, last)


def _last_place(number: str) -> float:
    """One unit of the last digit that was written: 0.01 of "63.94"."""
    mantissa, _, exponent = number.lower().partition("e")
    decimals = len(mantissa.partition(".")[2])
    return float(10.0 ** (int(exponent or 0) - decimals))


def _add(named: dict[str, Entry], name: str, entry: Entry, place: str) -> None:
    if name in named and abs(named[name].value - entry.value) > entry.last_place:
        raise InputError(f"{name} is {named[name].value:g} further up and {entry.value:g} here", place)
    named[name] = entry


def _word(words: dict[str, str], line: str, place: str) -> None:
    key, _, value = re.sub(r"\s*[=:]\s*|\s+", " ", line, count=1).partition(" ")
    key = key.lower()
    if key not in _WORDS or not value:
        raise InputError(
            f"cannot make sense of {line!r}",
            place,
            f"Lines are: C11 165.8, six numbers, errors, or one of {', '.join(_WORDS)} with a value.",
        )
    words[key] = value.strip()


def _scale(words: dict[str, str], where: str) -> float:
    unit = words.get("unit", "GPa")
    if unit not in STRESS_UNITS_IN_GPA:
        raise InputError(f"unknown unit {unit!r}", where, f"Use one of {', '.join(STRESS_UNITS_IN_GPA)}.")
    return STRESS_UNITS_IN_GPA[unit]


#: units that may follow a number, the first one when none does -> factor to it
_UNITS = {
    "density": {"kg/m^3": 1.0, "kg/m3": 1.0, "g/cm^3": 1e3, "g/cm3": 1e3},
    "temperature": {"K": 1.0},
}


def _positive(words: dict[str, str], key: str, where: str) -> float | None:
    if key not in words:
        return None
    found = re.fullmatch(rf"({_NUMBER.pattern})\s*(\S*)", words[key])
    if not found or not float(found[1]) > 0:
        raise InputError(f"{key} {words[key]!r} is not a positive number", where)
    units = _UNITS[key]
    if found[2] and found[2] not in units:
        raise InputError(f"unknown unit {found[2]!r} of the {key}", where, f"Give it in {next(iter(units))}.")
    return float(found[1]) * units.get(found[2], 1.0)


def _from_matrix(rows: list[list[str]], errors: list[list[str]], where: str) -> dict[str, Entry]:
    """Entries of a matrix or triangle, which must be symmetric within its rounding."""
    cells, spread = _square(rows, where, "matrix"), _square(errors, where, "matrix of errors") if errors else {}
    entries = {}
    for i in range(6):
        for j in range(i, 6):
            upper, lower = cells[i, j], cells.get((j, i), cells[i, j])
            first, second = _entry(upper, where), _entry(lower, where)
            last = max(first.last_place, second.last_place)
            if abs(first.value - second.value) > 1.5 * last:
                raise InputError(
                    f"not symmetric: row {i + 1} column {j + 1} is {upper}, row {j + 1} column {i + 1} is {lower}", where
                )
            error = abs(float(spread[i, j])) if spread else None
            entries[f"C{i + 1}{j + 1}"] = Entry(0.5 * (first.value + second.value), error, last)
    return entries


def _square(rows: list[list[str]], where: str, what: str) -> dict[tuple[int, int], str]:
    """Cells by (row, column) of six full rows, or of the upper triangle, or of the lower one (mirrored)."""
    lengths = [len(row) for row in rows]
    if lengths == [6] * 6:
        return {(i, j): cell for i, row in enumerate(rows) for j, cell in enumerate(row)}
    if lengths == [6, 5, 4, 3, 2, 1]:
        return {(i, i + j): cell for i, row in enumerate(rows) for j, cell in enumerate(row)}
    if lengths == [1, 2, 3, 4, 5, 6]:
        return {(j, i): cell for i, row in enumerate(rows) for j, cell in enumerate(row)}
    raise InputError(
        f"the {what} has rows of {', '.join(map(str, lengths))} numbers", where, "Give six rows of six, or a triangle."
    )
