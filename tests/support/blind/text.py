"""Blind fault injector: editing a program's own text as that program would have printed it.

One editor a program. Numbers are rewritten in the format and width in which they stand; a stress is changed in every place that
prints it, an energy wherever its value stands. The forms are those of the outputs in tests/data/outputs.
"""

from __future__ import annotations

import re
from collections.abc import Callable, Sequence

import numpy as np

from strainkit.run.plan import job_folder
from strainkit.units import EV_PER_A3_IN_GPA

HARTREE, BOHR = 27.211386, 0.52917721
HARTREE_BOHR3 = HARTREE / BOHR**3 * EV_PER_A3_IN_GPA
NUMBER = re.compile(r"[ ]*[-+]?\d+\.\d*(?:[EeDd][-+]?\d+)?")
Change = Callable[[np.ndarray], np.ndarray]


def like(token: str, value: float, fortran: bool) -> str:
    """A number in the format of a token, right-aligned in its width; what does not fit becomes asterisks in Fortran."""
    digits = token.strip()
    mantissa, _, exponent = re.sub("[eDd]", "E", digits).partition("E")
    decimals = len(mantissa.partition(".")[2])
    if not np.isfinite(value):
        text = "NaN" if np.isnan(value) else ("Infinity" if value > 0 else "-Infinity") if fortran else str(value)
    else:
        text = f"{value:.{decimals}{'E' if exponent else 'f'}}"
        if exponent and "e" in digits:
            text = text.lower()
    if len(text) <= len(token):
        return text.rjust(len(token))
    if fortran and not exponent and len(token) > 2:
        return "*" * (len(token) - 1) if token.startswith(" ") else "*" * len(token)
    return " " * token.startswith(" ") + text


def rewrite(line: str, values: Sequence[float], fortran: bool = True, first: int = 0) -> str:
    """A line with its numbers, from number `first` on, replaced by values as long as there are any."""
    left, count = list(values), 0

    def one(found: re.Match[str]) -> str:
        nonlocal count
        count += 1
        return like(found[0], left.pop(0), fortran) if left and count > first else found[0]

    return NUMBER.sub(one, line)


class Editor:
    """The output of one job of a real set; subclasses know the program's forms. Stress in GPa, positive in tension."""

    mark = ""
    fortran = True
    #: sign and size of the unit in which the stress matrix stands
    unit = 1.0

    def __init__(self, files: dict[str, str], label: str) -> None:
        self.files = files
        self.folder = job_folder(label) + "/"
        self.main = max((n for n, t in files.items() if n.startswith(self.folder) and self.mark in t[:20000]), default="")

    @property
    def names(self) -> list[str]:
        """Files of the job."""
        return [name for name in self.files if name.startswith(self.folder)]

    @property
    def text(self) -> str:
        """The main output."""
        return self.files[self.main]

    @text.setter
    def text(self, text: str) -> None:
        self.files[self.main] = text

    def remove(self, empty: bool = False) -> None:
        """All outputs gone, or the main one empty."""
        main = self.main
        for name in self.names:
            self.files[name] = ""
        if empty:
            self.files[f"{main}.empty"] = ""

    def swap(self, old: str, new: str, count: int = 1, last: bool = False) -> bool:
        """Replace by regular expression in the main output; was there anything?"""
        if last:
            found = list(re.finditer(old, self.text))
            if not found:
                return False
            self.text = self.text[: found[-1].start()] + re.sub(old, new, found[-1][0]) + self.text[found[-1].end() :]
            return True
        self.text, n = re.subn(old, new, self.text, count=count)
        return bool(n)

    def lines_after(self, pattern: str, count: int, change: Callable[[int, str], str], which: slice = slice(None)) -> int:
        """Change each of the lines after the lines that match; how many places there were."""
        lines = self.text.split("\n")
        places = [i for i, line in enumerate(lines) if re.search(pattern, line)][which]
        for place in places:
            for k in range(count):
                if place + 1 + k < len(lines):
                    lines[place + 1 + k] = change(k, lines[place + 1 + k])
        self.text = "\n".join(lines)
        return len(places)

    def change_value(self, old: float, new: float) -> None:
        """Change a number wherever its value stands, to the digits printed there (six at least)."""

        def one(found: re.Match[str]) -> str:
            mantissa = re.split("[EeDd]", found[0].strip())[0]
            digits = sum(map(str.isdigit, mantissa.lstrip("-+0.")))
            value = float(re.sub("[Dd]", "E", found[0]))
            step = 0.6 * 10.0 ** -(len(mantissa.partition(".")[2])) * max(1.0, 10.0 ** np.floor(np.log10(abs(value) or 1.0)) if
                re.search("[EeDd]", found[0]) else 1.0)  # fmt: skip
            return like(found[0], new, self.fortran) if digits >= 6 and abs(value - old) <= step else found[0]

        for name in self.names:
            if not name.endswith((".inp", ".in", ".abi")):
                self.files[name] = NUMBER.sub(one, self.files[name])

    def matrix(self) -> np.ndarray:
        """The last stress as it is printed (3, 3)."""
        raise NotImplementedError

    def put_matrix(self, old: np.ndarray, new: np.ndarray) -> None:
        """Print another one in every place of the last."""
        raise NotImplementedError

    def energy(self) -> float:
        """The last energy, eV."""
        raise NotImplementedError

    def stress(self) -> np.ndarray:
        """The last stress; NaN where another fault took it away."""
        try:
            return self.matrix() * self.unit
        except (IndexError, KeyError, TypeError, ValueError):
            return np.full((3, 3), np.nan)

    def change_stress(self, change: Change) -> None:
        """Change the last stress in every place and unit in which it is printed."""
        old = self.matrix()
        with np.errstate(invalid="ignore"):
            self.put_matrix(old, change(old * self.unit) / self.unit)


def lengths_angles(axes: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Lengths and angles alpha, beta, gamma (degrees) of lattice vectors (rows)."""
    lengths = np.linalg.norm(axes, axis=1)
    cosines = [axes[i] @ axes[j] / lengths[i] / lengths[j] for i, j in ((1, 2), (0, 2), (0, 1))]
    return lengths, np.degrees(np.arccos(cosines))


def numbers(text: str) -> list[float]:
    """The decimal numbers of a text."""
    return [float(re.sub("[Dd]", "E", x)) for x in NUMBER.findall(text)]


class Espresso(Editor):
    """Quantum ESPRESSO pw.x."""

    mark = "Program PWSCF"
    unit = -HARTREE_BOHR3 / 2
    _block = r"(total   stress .*P=)(.*)\n((?:.*\n){3})"

    def matrix(self) -> np.ndarray:
        rows = re.findall(self._block, self.text)[-1][2].splitlines()
        return np.array([numbers(row)[:3] for row in rows])

    def put_matrix(self, old: np.ndarray, new: np.ndarray) -> None:
        last = list(re.finditer(self._block, self.text))[-1]
        kbar = new * HARTREE_BOHR3 / 2 * 10
        rows = [rewrite(row, [*new[i], *kbar[i]]) for i, row in enumerate(last[3].splitlines())]
        block = last[1] + rewrite(last[2], [np.trace(kbar) / 3]) + "\n" + "\n".join(rows) + "\n"
        self.text = self.text[: last.start()] + block + self.text[last.end() :]

    def energy(self) -> float:
        """The last energy, eV."""
        return float(re.findall(r"!    total energy\s+=\s+(\S+)", self.text)[-1]) * HARTREE / 2

    def change_energy(self, jump: float) -> None:
        """Shift the last energy (eV)."""
        old = float(re.findall(r"!    total energy\s+=\s+(\S+)", self.text)[-1])
        self.change_value(old, old + 2 * jump / HARTREE)
        for word in re.findall(r"Final energy +=\s+(\S+)", self.text):
            self.change_value(float(word), float(word) + 2 * jump / HARTREE)

    def drift(self, change: np.ndarray) -> None:
        """Another cell, x' = change x, in every place that prints it."""
        alat = float(re.search(r"celldm\(1\)=\s*(\S+)", self.text)[1])
        axes = np.array([numbers(x)[:3] for x in re.findall(r"  a\(\d\) = \((.*)\)", self.text)[:3]]) @ change.T
        self.lines_after("crystal axes:", 3, lambda k, line: line[:23] + rewrite(line[23:], axes[k]))
        inverse = np.linalg.inv(axes).T
        self.lines_after("reciprocal axes:", 3, lambda k, line: line[:23] + rewrite(line[23:], inverse[k]))
        volume = abs(np.linalg.det(axes)) * alat**3
        self.swap(r"(unit-cell volume +=)( +\S+)", lambda m: m[1] + like(m[2], volume, True))
        self.swap(r"(tau\( *\d+\) = \()(.*)(\))", lambda m: m[1] + rewrite(m[2], change @ numbers(m[2])) + m[3], 0)

    def move_atom(self, step: np.ndarray, rng: np.random.Generator) -> bool:
        """Move one atom of the last positions by a Cartesian step; is there such a place?"""
        alat = float(re.search(r"celldm\(1\)=\s*(\S+)", self.text)[1]) * BOHR
        axes = np.array([numbers(x)[:3] for x in re.findall(r"  a\(\d\) = \((.*)\)", self.text)[:3]]) * alat
        found = list(re.finditer(r"ATOMIC_POSITIONS \(crystal\)\n((?:[A-Z][a-z]?\w* +[-\d].*\n)+)", self.text))
        if not found:
            return False
        rows = found[-1][1].splitlines()
        k = int(rng.integers(len(rows)))
        rows[k] = rewrite(rows[k], np.array(numbers(rows[k])) + np.linalg.solve(axes.T, step))
        self.text = self.text[: found[-1].start(1)] + "\n".join(rows) + "\n" + self.text[found[-1].end(1) :]
        return True


def editor(work: object, label: str) -> Editor:
    """The editor of a job of a real set (its kind is the program's name)."""
    from support.blind.abinit import Abinit
    from support.blind.text_cp2k_gpaw import Cp2k, Gpaw

    classes = {"qe": Espresso, "abinit": Abinit, "cp2k": Cp2k, "gpaw": Gpaw}
    return classes[work.kind](work.files, label)
