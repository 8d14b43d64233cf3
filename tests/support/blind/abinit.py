"""Blind fault injector: the editor of ABINIT's main output."""

from __future__ import annotations

import re
from collections.abc import Callable

import numpy as np

from support.blind.text import BOHR, HARTREE, HARTREE_BOHR3, Editor, lengths_angles, like, numbers, rewrite

_SIX = ((0, 0), (2, 1), (1, 1), (2, 0), (2, 2), (1, 0))


class Abinit(Editor):
    """ABINIT main output."""

    mark = "of ABINIT"
    unit = HARTREE_BOHR3

    def matrix(self) -> np.ndarray:
        rows = re.findall(r"\n Cartesian components of stress tensor \(hartree/bohr\^3\)\n((?:.*\n){3})", self.text)[-1]
        values, matrix = numbers(re.sub(r"sigma\(\d \d\)=", " ", rows)), np.zeros((3, 3))
        for (i, j), value in zip(_SIX, values, strict=True):
            matrix[i, j] = matrix[j, i] = value
        return matrix

    def put_matrix(self, old: np.ndarray, new: np.ndarray) -> None:
        def blocks(pattern: str, factor: float, same: Callable[[list[float]], bool]) -> None:
            def one(found: re.Match[str]) -> str:
                rows = found[2].splitlines()
                if not same([x / factor for row in rows for x in numbers(re.sub(r"\(\d \d\)", "", row))]):
                    return found[0]
                for k, row in enumerate(rows):
                    values = new[k] if "[" in row else [new[_SIX[2 * k]], new[_SIX[2 * k + 1]]]
                    rows[k] = rewrite(row, np.array(values) * factor)
                return found[1] + "\n".join(rows) + "\n"

            self.text = re.sub(pattern, one, self.text)

        six, nine, close = [old[p] for p in _SIX], old.ravel(), 2e-6 * np.abs(old).max() + 1e-16
        for unit, factor in (("hartree/bohr", 1.0), ("GPa", HARTREE_BOHR3)):
            pattern = rf"(-? *Cartesian components of stress tensor \({unit}.*\n)((?:.*sigma.*\n){{3}})"
            blocks(pattern, factor, lambda v, f=factor: np.allclose(v, six, rtol=0, atol=close * (1 if f == 1 else 10)))
        tensor = r"(cartesian_stress_tensor:.*\n)((?:- \[.*\n){3})"
        blocks(tensor, 1.0, lambda v: np.allclose(v, nine, rtol=0, atol=close))
        pressure = -np.trace(new) / 3 * HARTREE_BOHR3
        before = f"{-np.trace(old) / 3 * HARTREE_BOHR3:.3E}"

        def press(m: re.Match[str]) -> str:
            return m[1] + like(m[2], pressure, True) if f"{float(m[2]):.3E}" == before else m[0]

        self.swap(r"(pressure_GPa:|\[Pressure=)( +\S+)", press, 0)
        echo = [new[0, 0], new[1, 1], new[2, 2], new[2, 1], new[2, 0], new[1, 0]]
        self.swap(r"( strten .*\n)(.*\n)", lambda m: rewrite(m[1], echo[:3]) + rewrite(m[2], echo[3:]))

    def energy(self) -> float:
        """The last energy, eV."""
        return float(re.findall(r"\(etotal\) \[Ha\]=\s*(\S+)", self.text)[-1]) * HARTREE

    def change_energy(self, jump: float) -> None:
        """Shift the last energy (eV)."""
        old = float(re.findall(r"\(etotal\) \[Ha\]=\s*(\S+)", self.text)[-1])
        self.change_value(old, old + jump / HARTREE)
        for word in re.findall(r"total_energy_eV +: *(\S+)", self.text)[-1:]:
            self.change_value(float(word), float(word) + jump)

    def drift(self, change: np.ndarray) -> None:
        """Another cell, x' = change x, in every place that prints it."""
        axes = np.array([numbers(x)[:3] for x in re.findall(r" R\(\d\)=(.*?)G", self.text)[:3]]) @ change.T
        inverse = np.linalg.inv(axes).T
        for k in range(3):
            new = [*axes[k], *inverse[k]]
            self.swap(rf"( R\({k + 1}\)=)(.*)", lambda m, new=new: m[1] + rewrite(m[2], new), 0)
        self.swap(r"(ucvol=)( +\S+)", lambda m: m[1] + like(m[2], abs(np.linalg.det(axes)), True), 0)
        lengths, angles = lengths_angles(axes)
        self.swap(r"(Angles \(23,13,12\)=)(.*)", lambda m: m[1] + rewrite(m[2], angles), 0)
        self.swap(r"(lattice_lengths:)(.*)", lambda m: m[1] + rewrite(m[2], lengths), 0)
        self.swap(r"(lattice_angles:)(.*)(#)", lambda m: m[1] + rewrite(m[2], angles) + m[3], 0)
        self.swap(r"(lattice_volume:)(.*)", lambda m: m[1] + like(m[2], float(abs(np.linalg.det(axes))), True), 0)
        self.lines_after("^lattice_vectors:", 3, lambda k, line: rewrite(line, axes[k]))
        self._rows("rprim", lambda k, x: change @ x)
        for name in ("xcart", "xangst"):
            self._rows(name, lambda k, x: change @ x)
        count = len(re.findall(r"^ +xcart|^ {20,}\S+ +\S+ +\S+$", self.text, re.M)) and self._atoms()
        self.lines_after(r"\(xcart\) \[bohr\]", count, lambda k, line: rewrite(line, change @ numbers(line)))

    def _atoms(self) -> int:
        return int(re.search(r"natom +(\d+)", self.text)[1])

    def _rows(self, name: str, change: Callable[[int, np.ndarray], np.ndarray], which: slice = slice(None)) -> None:
        """Change the rows of an echoed array."""
        lines, count = self.text.split("\n"), 3 if name == "rprim" else self._atoms()
        for place in [i for i, line in enumerate(lines) if re.match(rf" +{name} ", line)][which]:
            for k in range(count):
                lines[place + k] = rewrite(lines[place + k], change(k, np.array(numbers(lines[place + k])[:3])))
        self.text = "\n".join(lines)

    def move_atom(self, step: np.ndarray, rng: np.random.Generator) -> bool:
        """Move one atom of the last positions by a Cartesian step; is there such a place?"""
        axes = np.array([numbers(x)[:3] for x in re.findall(r" R\(\d\)=(.*?)G", self.text)[:3]]) * BOHR
        atom, count = int(rng.integers(self._atoms())), self._atoms()
        moves = {"xred": np.linalg.solve(axes.T, step), "xangst": step, "xcart": step / BOHR}
        for name, move in moves.items():
            self._rows(name, lambda k, x, move=move: x + move * (k == atom), slice(-1, None))

        def moved(move: np.ndarray) -> Callable[[int, str], str]:
            return lambda k, line: rewrite(line, np.array(numbers(line)[:3]) + move) if k == atom else line

        last = slice(-1, None)
        self.lines_after(r"Cartesian coordinates \(xcart\)", count, moved(moves["xcart"]), last)
        for pattern in (r"Reduced coordinates \(xred\)", r"reduced coordinates \(array xred\)", r"^xred +:"):
            self.lines_after(pattern, count, moved(moves["xred"]), last)
        return True
