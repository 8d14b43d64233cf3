"""Quantum ESPRESSO, pw.x: energies in Ry, stress positive in compression, printed in Ry/bohr^3 and in kbar side by side."""

from __future__ import annotations

import re

import numpy as np
from ase.units import Bohr, Rydberg

from strainkit.collect.returned import Geometry, Problems, Settings, Stress
from strainkit.collect.source import Source
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

END_MARK = re.compile(r"JOB DONE\.")
_SCF = "electronic steps did not converge"
BAD_MARKS = (
    (re.compile(r"convergence NOT achieved"), "unconverged", _SCF),
    (re.compile(r"The maximum number of steps has been reached"), "unconverged", "ions not relaxed: too few steps"),
    (re.compile(r"bfgs failed after"), "unconverged", "ions not relaxed: bfgs failed"),
    (re.compile(r"Entering Dynamics"), "unconverged", "ions moved by dynamics"),
    (re.compile(r"%%%%\s+Error in routine"), "broken", "the program stopped with an error"),
)
_COUNT = re.compile(r"number of atoms/cell\s+=\s+(\d+)\s*$", re.M)
_ALAT = re.compile(rf"celldm\(1\)=\s*({NUMBER})\s+celldm")
_AXES = "crystal axes: (cart. coord. in units of alat)"
_CELL = re.compile(rf"CELL_PARAMETERS +[({{]?(?:alat *= *({NUMBER})|(angstrom)|(bohr))[)}}]? *$", re.M)
_SITES = re.compile(r" site n\. +atom +positions \((alat) units\)", re.M)
_MOVED = re.compile(r"ATOMIC_POSITIONS +[({]?(alat|bohr|angstrom|crystal)[)}]? *$", re.M)
_SITE = re.compile(rf"\s+(\d+)\s+(\S+)\s+tau\(\s*\d+\s*\)\s+=\s+\(\s*({NUMBER})\s+({NUMBER})\s+({NUMBER})\s+\)\s*\Z")
_ATOM = re.compile(rf"\s*(\S+)\s+({NUMBER})\s+({NUMBER})\s+({NUMBER})(?:\s+[01]\s+[01]\s+[01])?\s*\Z")
_ENERGY = re.compile(rf"\n!!? +total energy +=\s+({NUMBER}) Ry *\n")
_STRESS = re.compile(rf"total\s+stress\s+\(Ry/bohr\*\*3\)\s+\(kbar\)\s+P=\s*({NUMBER})\s*$", re.M)
_ACCURACY = re.compile(rf"estimated scf accuracy\s+<\s+({NUMBER}) Ry\s*$", re.M)
_THRESHOLD = re.compile(rf"scf convergence threshold\s+=\s+({NUMBER})\s*$", re.M)


def recognises(head: bytes) -> bool:
    return b"Program PWSCF" in head


def load(source: Source) -> str:
    """The last run in the file: a restarted job may append to its output."""
    return source.text[max(source.text.rfind("Program PWSCF"), 0) :]


def _atom_count(text: str) -> int:
    return int(found(_COUNT, text, "number of atoms")[1])


def _lattice(text: str) -> tuple[FloatArray, float, float]:
    """Lattice (A, rows) of the last step, half of its last digit, and alat in A."""
    alat = last_number(_ALAT, text)
    if alat is None:
        raise ValueError("no lattice parameter celldm(1)")
    start, moved = text.rfind(_AXES), last(_CELL, text)
    if moved is None or moved.start() < start:
        if start < 0:
            raise ValueError("no crystal axes")
        axes = rows(text, start, 3, r"a\(@\) = \( *#...#...# *\)", "crystal axes")
        return axes * alat * Bohr, 0.5e-6 * alat * Bohr, alat * Bohr
    scale = number(moved[1]) * Bohr if moved[1] else 1.0 if moved[2] else Bohr
    return rows(text, moved.start(), 3, "#...#...#", "cell parameters") * scale, 0.5e-9 * scale, alat * Bohr


def geometry(text: str) -> Geometry:
    lattice, precision, alat = _lattice(text)
    start, moved = last(_SITES, text), last(_MOVED, text)
    printed = moved if moved is not None and (start is None or moved.start() > start.start()) else start
    if printed is None:
        raise ValueError("no atomic positions")
    pattern = _SITE if printed is start else _ATOM
    matches = [pattern.match(line) for line in lines_after(text, printed.start(), _atom_count(text))]
    atoms = [match.groups() for match in matches if match is not None]
    if printed is start:
        atoms = [atom[1:] for row, atom in enumerate(atoms) if atom[0] == str(row + 1)]
    if len(atoms) != len(matches):
        raise ValueError("the atomic positions cannot be read")
    positions = np.array([[number(word) for word in atom[1:4]] for atom in atoms])
    if printed[1] != "crystal":
        scale = {"alat": alat, "bohr": Bohr, "angstrom": 1.0}[printed[1]]
        positions = fractional(positions * scale, lattice)
    return Geometry(lattice, positions, elements([atom[0] for atom in atoms]), precision)


def stress(text: str) -> Stress | None:
    """Both blocks; eight decimals of Ry/bohr^3 (1.5e-4 GPa) are finer than two of kbar (1e-3 GPa)."""
    start = text.rfind("total   stress")
    if start < 0:
        return None
    head = _STRESS.match(text, start)
    if head is None:
        raise ValueError("the heading of the stress cannot be read")
    block = rows(text, head.start(), 3, "...".join("#" * 6), "stress")
    unit = STRESS_UNITS_IN_GPA["Ry/bohr^3"]
    value = symmetric(-unit * block[:, :3], 2.5e-8 * unit)
    repeat = symmetric(-0.1 * block[:, 3:], 2.1e-3)
    if abs(np.trace(repeat) / 3 + 0.1 * number(head[1])) > 1.1e-3:
        raise ValueError("the stress does not agree with the pressure printed above it")
    return Stress(value, repeat, 0.6e-8 * unit + 0.6e-3)


def energy(text: str) -> float | None:
    """The total energy, which is the free energy F = E - TS where there is smearing."""
    start = text.rfind("\n!")
    return None if start < 0 else float(needed(last_number(_ENERGY, text, start), "total energy") * Rydberg)


def forces(text: str) -> FloatArray | None:
    start = text.rfind("Forces acting on atoms (cartesian axes, Ry/au):")
    if start < 0:
        return None
    values = rows(text, start, _atom_count(text), r"atom +@ +type +\d+ +force = +#...#...#", "forces", skip=1)
    return np.asarray(values * Rydberg / Bohr)


def doubts(text: str) -> Problems:
    """The threshold against the accuracy reached (scf_must_converge = .false. prints the words of success), steps, end."""
    problems = []
    threshold, reached = found(_THRESHOLD, text, "scf threshold"), last_number(_ACCURACY, text)
    if reached is None or reached > 1.01 * number(threshold[1]):
        problems.append(("unconverged", _SCF))
    relaxing = "force convergence thresh." in text or "BFGS Geometry Optimization" in text
    if relaxing and "bfgs converged" not in text:
        problems.append(("unconverged", "ions not relaxed"))
    ends = text.find("Begin final coordinates")
    stepped = last(_MOVED, text[:ends] if ends > 0 else text)
    # energy, forces and stress follow each other in every step
    solved, pulled = text.rfind("\n!"), text.rfind("Forces acting on atoms (cartesian axes, Ry/au):")
    pressed = text.rfind("total   stress")
    stale = stepped is not None and solved < stepped.start()
    if pressed >= 0 and (stale or pressed < solved or 0 <= pulled < solved):
        problems.append(("unfinished", "the stress is of an earlier ionic step than the last geometry"))
    return tuple(problems)


_SETTINGS = {
    "cutoff_Ry": re.compile(rf"kinetic-energy cutoff\s+=\s+({NUMBER})\s+Ry"),
    "functional": re.compile(r"Exchange-correlation *= *(\S.*?) *$", re.M),
    "kpoint_count": re.compile(r"number of k points=\s+(\d+)"),
    "smearing": re.compile(r"number of k points= +\d+ +(\S.*?) *$", re.M),
    "dispersion": re.compile(
        r"(DFT-D3|DFT-D|MBD|XDM|Tkatchenko-Scheffler) (?:Dispersion|dispersion|energy|correction)"
        r"|Dispersion \(?(Grimme-D2|T-S|MBD|XDM)\)? Correction"
    ),
}
_POINT = re.compile(rf"^ +k\( *\d+\) = \( *({NUMBER}) +({NUMBER}) +({NUMBER})\), wk = +({NUMBER}) *$", re.M)
_PSEUDO = re.compile(r"PseudoPot\. # *\d+ for +(\S+) +read from file:\s+\S+\s+MD5 check sum: +(\w+)")


def settings(text: str) -> Settings:
    said = {key: match[match.lastindex or 0] for key, pattern in _SETTINGS.items() if (match := pattern.search(text))}
    cutoff = said.pop("cutoff_Ry", None)
    result: dict[str, str | float | tuple[float, ...]] = {key: " ".join(value.split()) for key, value in said.items()}
    result.setdefault("smearing", "none")
    result.setdefault("dispersion", "none")
    result["spin"] = "polarised" if "Starting magnetic structure" in text else "none"
    if cutoff is not None:
        result["cutoff_eV"] = number(cutoff) * Rydberg
    if points := _mesh_points(text):
        result["kpoint_total"] = str(points)
    result["pseudopotentials"] = names(f"{kind} {md5[:8]}" for kind, md5 in _PSEUDO.findall(text))
    return result


def _mesh_points(text: str) -> int:
    """Points of the whole mesh: Gamma stands for itself alone. 0 where it is not in the mesh, or the list not printed."""
    start = text.rfind("number of k points=")
    block = text[start : text.find("\n\n", start)]
    count = re.match(r"number of k points= *(\d+)", block)
    listed = [[number(word) for word in match.groups()] for match in _POINT.finditer(block)]
    mine = [point[3] for point in listed if not any(point[:3])]
    if count is None or len(listed) != int(count[1]) or not mine or mine[0] <= 0:
        return 0
    whole = round(sum(point[3] for point in listed))  # 1 or 2, but for the digits printed
    return round(whole / mine[0] / len(mine))


def version(text: str) -> str:
    match = re.search(r"Program PWSCF\s+v\.(\S+)", text)
    return match[1] if match else ""
