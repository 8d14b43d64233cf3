"""Blind fault injector: editors of CP2K's and GPAW's text (and of what GPAW's job script returns)."""

from __future__ import annotations

import re

import numpy as np

from strainkit.units import EV_PER_A3_IN_GPA
from support.blind.text import HARTREE, Editor, lengths_angles, like, numbers, rewrite


class Cp2k(Editor):
    """CP2K output with its restart or input beside it."""

    mark = "CP2K|"
    unit = -1.0
    _block = r" STRESS\| Analytical stress tensor \[GPa\]\n(?:.*STRESS\|.*\n|\n)+"

    def matrix(self) -> np.ndarray:
        rows = re.findall(r"STRESS\|      [xyz] (.*)", re.findall(self._block, self.text)[-1])[:3]
        return np.array([numbers(row) for row in rows])

    def put_matrix(self, old: np.ndarray, new: np.ndarray) -> None:
        last = list(re.finditer(self._block, self.text))[-1]
        lines, row = last[0].split("\n"), 0
        values = {"1/3 Trace": [np.trace(new) / 3], "Determinant": [np.linalg.det(new)]}
        axes = np.full((3, 3), np.nan)
        if np.isfinite(new).all():
            values["Eigenvalues"], axes = np.linalg.eigh((new + new.T) / 2)
        for i, line in enumerate(lines):
            if re.search(r"STRESS\|      [xyz] ", line):
                lines[i] = rewrite(line, new[row] if row < 3 else axes[row - 3])
                row += 1
            for word, value in values.items():
                if f"STRESS| {word} " in line:
                    head, _, rest = line.partition(word)
                    lines[i] = head + word + rewrite(rest, value)
        self.text = self.text[: last.start()] + "\n".join(lines) + self.text[last.end() :]

    def energy(self) -> float:
        """The last energy, eV."""
        return float(re.findall(r"ENERGY\| Total FORCE_EVAL.*?(-?\d+\.\d+)", self.text)[-1]) * HARTREE

    def change_energy(self, jump: float) -> None:
        """Shift the last energies (eV): of the last step, and of the evaluation at the end."""
        found = re.findall(r"ENERGY\| Total FORCE_EVAL.*?(-?\d+\.\d+)", self.text)[-2:]
        for old in {float(x) for x in found}:
            self.change_value(old, old + jump / HARTREE)

    def drift(self, change: np.ndarray) -> None:
        """Another cell, x' = change x, in every place that prints it, and in restart and input."""

        def one(found: re.Match[str]) -> str:
            vector = change @ numbers(found[2])[:3]
            return found[1] + rewrite(found[2], vector) + found[3] + like(found[4], float(np.linalg.norm(vector)), True)

        self.swap(r"(CELL\w*\| Vector [abc] \[angstrom\]?:?)((?: +-?\d+\.\d+){3})( +\|[abc]\| =)( +\S+)", one, 0)
        self._shape(change)
        for name in self.names:
            if name.endswith((".restart", ".inp")):
                lines = self.files[name].split("\n")
                for i, line in enumerate(lines):
                    if re.match(r" +[ABC] +\S+ +\S+ +\S+$", line):
                        vector = change @ [float(x) for x in line.split()[1:]]
                        lines[i] = line[: line.index(line.split()[0]) + 1] + " " + " ".join(f"{x:.16E}" for x in vector)
                self.files[name] = "\n".join(lines)

    def _shape(self, change: np.ndarray) -> None:
        """Volume and angles of the drifted cell, from the input (the reference cell has its own)."""
        text = next(self.files[n] for n in self.names if n.endswith((".inp", ".restart")) and "&CELL" in self.files[n])
        rows = np.array([[float(x) for x in row.split()] for row in re.findall(r"^ +[ABC] +(\S+ +\S+ +\S+)$", text, re.M)[:6]])
        for name, axes in (("CELL(?:_TOP)?", rows[:3]), ("CELL_REF", rows[3:] if len(rows) == 6 else rows[:3])):
            axes = axes @ change.T
            angles = dict(zip(("alpha", "beta", "gamma"), lengths_angles(axes)[1], strict=True))
            for word, value in angles.items():
                self.swap(rf"( {name}\| Angle .*{word}.*:)( +\S+)", lambda m, v=value: m[1] + like(m[2], float(v), True), 0)
            volume = float(abs(np.linalg.det(axes)))
            self.swap(rf"( {name}\| Volume .*:)( +\S+)", lambda m, v=volume: m[1] + like(m[2], v, True), 0)

    def move_atom(self, step: np.ndarray, rng: np.random.Generator) -> bool:
        """Move one atom of the restart by a Cartesian step; is there such a place?"""
        for name in self.names:
            block = re.search(r"&COORD\n((?:.*\n)*?)( *SCALED.*\n| *&END COORD)", self.files[name])
            if name.endswith(".restart") and block and "SCALED" in block[2]:
                rows = re.findall(r"^ +[ABC] +(\S+ +\S+ +\S+)$", self.files[name], re.M)[:3]
                cell = np.array([[float(x) for x in row.split()] for row in rows])
                atoms = block[1].splitlines()
                k = int(rng.integers(len(atoms)))
                place = np.array([float(x) for x in atoms[k].split()[1:4]]) + np.linalg.solve(cell.T, step)
                atoms[k] = atoms[k].split()[0] + " " + " ".join(f"{x:.16E}" for x in place)
                text = self.files[name]
                self.files[name] = text[: block.start(1)] + "\n".join(atoms) + "\n" + text[block.end(1) :]
                return True
        return False


class Gpaw(Editor):
    """GPAW's text and the extended XYZ that the job script writes from the same calculation."""

    mark = "gpaw"
    fortran = False
    unit = EV_PER_A3_IN_GPA
    _block = r"(Stress tensor(?::|  # .*)\n(?:\|.*[a-z-] *\|\n)*)((?:.*\d.*\n?){3})"

    def __init__(self, files: dict[str, str], label: str) -> None:
        super().__init__(files, label)
        self.main = max(n for n in self.names if "User:" in files[n][:2000])
        self.xyz = next((n for n in self.names if n.endswith("returned.extxyz")), "")

    def matrix(self) -> np.ndarray:
        if self.xyz and self.files[self.xyz]:
            text = re.search(r'stress="([^"]*)"', self.files[self.xyz])[1]
            return np.array([float(x) for x in text.split()]).reshape(3, 3)
        return np.array([numbers(row)[:3] for row in re.findall(self._block, self.text)[-1][1].splitlines()])

    def put_matrix(self, old: np.ndarray, new: np.ndarray) -> None:
        found = list(re.finditer(self._block, self.text))
        if found:
            rows = [rewrite(row, new[i], False) for i, row in enumerate(found[-1][2].splitlines())]
            self.text = self.text[: found[-1].start(2)] + "\n".join(rows) + "\n" + self.text[found[-1].end(2) :]
        if self.xyz:
            stress = " ".join(repr(float(x)) for x in new.ravel())
            self.files[self.xyz] = re.sub(r'stress="[^"]*"', f'stress="{stress}"', self.files[self.xyz])

    def energy(self) -> float:
        """The last free energy, eV."""
        return float(re.findall(r"Free energy: +(\S+)", self.text)[-1])

    def change_energy(self, jump: float) -> None:
        """Shift the last energies (eV), free and extrapolated."""
        for word in ("Free energy:", "Extrapolated:"):
            old = float(re.findall(rf"{word} +(\S+)", self.text)[-1])
            self.change_value(old, old + jump)

    def drift(self, change: np.ndarray) -> None:
        """Another cell, x' = change x, in every place that prints it."""

        def turned(found: re.Match[str]) -> str:
            return found[1] + rewrite(found[2], change @ numbers(found[2])[:3], False)

        vectors = [numbers(x)[:3] for x in re.findall(r"(?:axis: +yes|\| +yes \|)(.*)", self.text)[:3]]
        lengths, angles = lengths_angles(np.array(vectors) @ change.T)
        self.swap(r"(\n  Lengths:)(.*)", lambda m: m[1] + rewrite(m[2], lengths, False), 0)
        self.swap(r"(\n  Angles:)(.*)", lambda m: m[1] + rewrite(m[2], angles, False), 0)
        three = r"((?: *\|? +-?\d+\.\d+){3})"
        self.swap(r"(axis: +yes|\| +yes \|)" + three, turned, 0)
        self.swap(r"(\n +\d+ [A-Z][a-z]? +)" + three, turned, 0)
        self._xyz(change, None, 0)

    def move_atom(self, step: np.ndarray, rng: np.random.Generator) -> bool:
        """Move one atom of the last positions by a Cartesian step; is there such a place?"""
        start = self.text.rfind("Positions:")
        end = self.text.find("Unit cell:", start)
        rows = list(re.finditer(r"\n +\d+ [A-Z][a-z]?((?: +-?\d+\.\d+){3})", self.text[start:end]))
        if start < 0 or not rows:
            return False
        k = int(rng.integers(len(rows)))
        head, tail = start + rows[k].start(1), start + rows[k].end(1)
        self.text = self.text[:head] + rewrite(rows[k][1], np.array(numbers(rows[k][1])) + step, False) + self.text[tail:]
        self._xyz(np.eye(3), step, k)
        return True

    def _xyz(self, change: np.ndarray, step: np.ndarray | None, atom: int) -> None:
        """Turn cell and positions of the returned file, move one atom."""
        if not self.xyz:
            return
        lines = self.files[self.xyz].splitlines()

        def cell(found: re.Match[str]) -> str:
            vectors = np.array([float(x) for x in found[1].split()]).reshape(3, 3) @ change.T
            return 'Lattice="' + " ".join(f"{x:.16g}" for x in vectors.ravel()) + '"'

        lines[1] = re.sub(r'Lattice="([^"]*)"', cell, lines[1])
        for i in range(2, len(lines)):
            words = lines[i].split()
            place = change @ [float(x) for x in words[1:4]] + (step if step is not None and i - 2 == atom else 0.0)
            lines[i] = " ".join([words[0], *(f"{x:.16g}" for x in place), *words[4:]])
        self.files[self.xyz] = "\n".join(lines) + "\n"
