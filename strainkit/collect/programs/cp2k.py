"""CP2K: stress positive in compression; cell vectors to three decimals only, so the files beside the output are asked.

The output holds the lengths and angles of the cell to six decimals but its orientation to three, and only the positions
from which a relaxation began. The restart file of the same run holds both to sixteen digits, the input file the cell.
"""

from __future__ import annotations

import re
from dataclasses import dataclass
from pathlib import Path

import numpy as np
from ase.units import Bohr, Hartree

from strainkit.collect.returned import Geometry, Problems, Settings, Stress
from strainkit.collect.source import Source, read_source
from strainkit.collect.text import (
    NUMBER,
    elements,
    found,
    fractional,
    last,
    last_number,
    lines_after,
    names,
    needed,
    number,
    rows,
    symmetric,
)
from strainkit.errors import InputError
from strainkit.tensors.arrays import FloatArray
from strainkit.units import STRESS_UNITS_IN_GPA

__all__ = [
    "BAD_MARKS",
    "END_MARK",
    "doubts",
    "energy",
    "forces",
    "geometry",
    "load",
    "recognises",
    "settings",
    "stress",
    "version",
]

END_MARK = re.compile(r"PROGRAM ENDED AT")
BAD_MARKS = ((re.compile(r"MAXIMUM NUMBER OF OPTIMIZATION STEPS REACHED"), "unconverged", "ions not relaxed: too few steps"),)
_VECTOR = re.compile(
    rf" CELL\| Vector ([abc]) \[angstrom\]: *({NUMBER}) +({NUMBER}) +({NUMBER}) +\|\1\| += *({NUMBER})\s*$", re.M
)
_ANGLE = re.compile(rf" CELL\| Angle .*\[degree\]: *({NUMBER})\s*$", re.M)
_SITES = re.compile(r" MODULE QUICKSTEP: +ATOMIC COORDINATES IN (?:ANGSTROM|angstrom) *\n")
_SITE = re.compile(
    rf"\s+(\d+)\s+\d+\s+([A-Z][a-z]?)\s+\d+\s+({NUMBER})\s+({NUMBER})\s+({NUMBER})\s+({NUMBER})\s+({NUMBER})\s*\Z"
)
_ENERGY = re.compile(rf" ENERGY\| Total FORCE_EVAL \( \w+ \) energy \[(?:a\.u\.|hartree)\]:? +({NUMBER})\s*$", re.M)
_STRESS = re.compile(r" STRESS(?:\| Analytical stress tensor| TENSOR) \[(\S+?)\] *\n")
_FORCES = re.compile(r" (?:ATOMIC FORCES in \[a\.u\.\]|FORCES\| Atomic forces \[hartree/bohr\]) *\n")
_SCF = re.compile(r"SCF (?:run|loop) (NOT |FAILED to )?converge")
_CYCLE = re.compile(r"SCF WAVEFUNCTION OPTIMIZATION")
_STEP = re.compile(r"OPTIMIZATION STEP:\s+(\d+)\s*$", re.M)
_TIME = r"(\d{4}-\d\d-\d\d \d\d:\d\d:\d\d)"
#: half of the last digit of a printed cell vector, A
_ROUNDING = 0.5e-3


@dataclass(frozen=True)
class Output:
    """The text of the last run and its folder."""

    text: str
    folder: Path


def recognises(head: bytes) -> bool:
    return b"CP2K| version string" in head or (b"PROGRAM STARTED AT" in head and b"DBCSR|" in head)


def load(source: Source) -> Output:
    text = source.text
    return Output(text[max(text.rfind("PROGRAM STARTED AT"), 0) :], source.path.parent)


def _beside(output: Output, name: str) -> str:
    """Text of a file of this run; empty when there is none."""
    if Path(name).name != name or name.startswith(".") or (output.folder / name).is_symlink():
        return ""
    try:
        return read_source(output.folder / name).text
    except (InputError, ValueError):
        return ""


def _restart(output: Output) -> str:
    """The restart file, if it was written by this run at its last step."""
    project = re.search(r" GLOBAL\| Project name +(\S+)$", output.text, re.M)
    text = _beside(output, f"{project[1]}-1.restart") if project else ""
    written = re.search(rf"# current date {_TIME}", text)
    start, end = re.search(rf"PROGRAM STARTED AT +{_TIME}", output.text), re.search(rf"PROGRAM ENDED AT +{_TIME}", output.text)
    if not (written and start and start[1] <= written[1] and (not end or written[1] <= end[1])):
        return ""
    taken, printed = re.search(r"STEP_START_VAL +(\d+)", text), last(_STEP, output.text)
    return text if taken and printed and taken[1] == printed[1] else ""


def _cell_of(text: str) -> FloatArray | None:
    """Vectors A, B, C (A) of an input's CELL section."""
    vectors = [re.search(rf"^ *{axis} +({NUMBER}) +({NUMBER}) +({NUMBER}) *$", text, re.M) for axis in "ABC"]
    if not all(vectors):
        return None
    return np.array([[number(word) for word in vector.groups()] for vector in vectors if vector])


def _printed_cell(text: str) -> FloatArray:
    """The printed lengths and angles (six decimals), turned as the printed vectors (three decimals) stand."""
    marks = list(_VECTOR.finditer(text))[-3:]
    angles = list(_ANGLE.finditer(text))[-3:]
    if [mark[1] for mark in marks] != ["a", "b", "c"] or len(angles) != 3:
        raise ValueError("no cell vectors")
    vectors = np.array([[number(mark[i]) for i in (2, 3, 4)] for mark in marks])
    lengths = np.array([number(mark[5]) for mark in marks])
    if np.abs(np.linalg.norm(vectors, axis=1) - lengths).max() > 2 * _ROUNDING:
        raise ValueError("the cell vectors do not have the lengths printed beside them")
    alpha, beta, gamma = np.cos(np.radians([number(angle[1]) for angle in angles]))
    metric = np.array([[1, gamma, beta], [gamma, 1, alpha], [beta, alpha, 1]]) * np.outer(lengths, lengths)
    root = np.linalg.cholesky(metric)
    left, _, right = np.linalg.svd(root.T @ vectors)
    lattice = root @ left @ right
    if np.abs(lattice - vectors).max() > 4 * _ROUNDING:
        raise ValueError("the cell vectors do not make the angles printed below them")
    return np.asarray(lattice)


def geometry(output: Output) -> Geometry:
    text = output.text
    printed = _printed_cell(text)
    restart = _restart(output)
    named = re.search(r" CP2K\| Input file name +(\S+)$", text, re.M)
    lattice, precision = printed, _ROUNDING
    for other in (restart, _beside(output, named[1]) if named else ""):
        cell = _cell_of(other)
        if cell is not None and np.abs(cell - printed).max() < 2 * _ROUNDING:
            lattice, precision = cell, 1e-9
            break
    heading = last(_SITES, text)
    count = int(found(re.compile(r"- Atoms: +(\d+)\s*$", re.M), text, "number of atoms")[1])
    if heading is None:
        raise ValueError("no atomic coordinates")
    lines = [line for line in lines_after(text, heading.start(), count + 3) if line.strip() and "Element" not in line][:count]
    sites = [match for row, line in enumerate(lines) if (match := _SITE.match(line)) and match[1] == str(row + 1)]
    if len(sites) != count:
        raise ValueError("the atomic coordinates cannot be read")
    numbers = elements([site[2] for site in sites])
    positions = fractional(np.array([[number(site[i]) for i in (3, 4, 5)] for site in sites]), lattice)
    moved = _STEP.search(text) is not None
    final = _restart_positions(restart, count, lattice) if moved else None
    return Geometry(lattice, positions if final is None else final, numbers, precision, not moved or final is not None)


def _restart_positions(restart: str, count: int, lattice: FloatArray) -> FloatArray | None:
    block = re.search(r"&COORD\s*\n(.*?)&END COORD", restart, re.S)
    if block is None:
        return None
    atoms = [re.match(rf"\s*\S+ +({NUMBER}) +({NUMBER}) +({NUMBER})", line) for line in block[1].splitlines()[:count]]
    if len(atoms) != count or not all(atoms):
        return None
    positions = np.array([[number(word) for word in atom.groups()] for atom in atoms if atom])
    return positions if re.search(r"SCALED +T", block[1]) else fractional(positions, lattice)


def stress(output: Output) -> Stress | None:
    """Negated: the diagonal of a compressed cell is printed positive. The third of the trace below must agree."""
    heading = last(_STRESS, output.text)
    if heading is None:
        return None
    start = heading.start()
    older, unit = "STRESS|" not in heading[0], STRESS_UNITS_IN_GPA.get(heading[1])
    if unit is None:
        raise ValueError(f"stress in {heading[1][:20]}")
    mark = "" if older else r"STRESS\| +"
    matrix = rows(output.text, start, 3, mark + "@...#...#...#", "stress", 2 if older else 1, "XYZ" if older else "xyz")
    if not older:
        trace = last_number(re.compile(rf" STRESS\| 1/3 Trace +({NUMBER})\s*$", re.M), output.text, start)
        if trace is None or abs(np.trace(matrix) / 3 - trace) > 1e-6 * np.abs(matrix).max() + 1e-9:
            raise ValueError("the stress does not agree with the trace printed below it")
    return Stress(unit * symmetric(-matrix, 1e-5 * float(np.abs(matrix).max()) + 1e-7))


def energy(output: Output) -> float | None:
    """The energy that the forces belong to: the free energy where there is smearing."""
    cycle = last(_CYCLE, output.text)
    return float(needed(last_number(_ENERGY, output.text, cycle.start() if cycle else 0), "total energy") * Hartree)


def forces(output: Output) -> FloatArray | None:
    heading = last(_FORCES, output.text)
    if heading is None:
        return None
    count = int(found(re.compile(r"- Atoms: +(\d+)\s*$", re.M), output.text, "number of atoms")[1])
    newer = "FORCES|" in heading[0]
    form = rf"FORCES\| +@...#...#...#...{NUMBER}" if newer else r"@...\d+...[A-Z][a-z]?...#...#...#"
    values = rows(output.text, heading.start(), count, form, "forces", skip=1 if newer else 2)
    return np.asarray(values * Hartree / Bohr)


def doubts(output: Output) -> Problems:
    """CP2K ends well after electronic steps that did not converge, and after stopping a relaxation."""
    text, problems = output.text, []
    cycle = last(_SCF, text)
    if cycle is None or cycle[1]:
        problems.append(("unconverged", "electronic steps did not converge"))
    if re.search(r"STARTING (GEOMETRY|CELL) OPTIMIZATION", text) and "GEOMETRY OPTIMIZATION COMPLETED" not in text:
        problems.append(("unconverged", "ions not relaxed"))
    # once the ions are relaxed, CP2K computes the energy again, but neither forces nor stress
    moving = text[: text.find("Reevaluating energy at the minimum")] if "Reevaluating energy" in text else text
    printed, again = last(_STRESS, text), last(_CYCLE, moving)
    if printed and again and again.start() > printed.start():
        problems.append(("unfinished", "the stress is of an earlier ionic step than the last geometry"))
    return tuple(problems)


_SETTINGS = {
    "functional": re.compile(r" FUNCTIONAL\| (\S+?):"),
    "smearing": re.compile(r"Smear method: +(\S+)"),
    "dispersion": re.compile(r"vdW POTENTIAL\| +(DFT-D\S+)"),
    "kpoints": re.compile(r"BRILLOUIN\| K-Point grid +(\d+ +\d+ +\d+)"),
    "spin": re.compile(r"DFT\| Spin (restricted|unrestricted)"),
}
_PSEUDO = re.compile(r"^ +(?:Orbital Basis Set|GTH Potential information for) +(\S+) *$", re.M)


def settings(output: Output) -> Settings:
    said = {key: match[1] for key, pattern in _SETTINGS.items() if (match := pattern.search(output.text))}
    result: dict[str, str | float | tuple[float, ...]] = {"smearing": "none", "dispersion": "none", **said}
    result["kpoints"] = "x".join(said["kpoints"].split()) if "kpoints" in said else "1x1x1"
    result["spin"] = "polarised" if said.get("spin") == "unrestricted" else "none"
    result["pseudopotentials"] = names(_PSEUDO.findall(output.text))
    if cutoff := last_number(re.compile(rf"QS\| Density cutoff \[a\.u\.\]: +({NUMBER})\s*$", re.M), output.text):
        result["cutoff_eV"] = cutoff * Hartree
    return result


def version(output: Output) -> str:
    match = re.search(r"CP2K version (\S+)", output.text)
    return match[1] if match else ""
