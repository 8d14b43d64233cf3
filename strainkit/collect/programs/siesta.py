"""SIESTA 4: final block in eV and angstrom; stress (1/V) dE/dstrain, positive in tension, above pressures of the other sign.

Written from the manual and from memory of its output; no real output was at hand.
"""

from __future__ import annotations

import re

import numpy as np
from ase.units import Bohr

from strainkit.collect.returned import Geometry, Problems, Settings, Stress
from strainkit.collect.source import Source
from strainkit.collect.text import NUMBER, found, fractional, last, last_number, number, rows, symmetric
from strainkit.tensors.arrays import FloatArray
from strainkit.units import EV_PER_A3_IN_GPA

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

END_MARK = re.compile(r"^Job completed|^>> End of run", re.M)
BAD_MARKS = (
    (re.compile(r"SCF_NOT_CONV|SCF did not converge"), "unconverged", "electronic steps did not converge"),
    (re.compile(r"outcoor: Final \(unrelaxed\)"), "unconverged", "ions not relaxed"),
)
_SITES = re.compile(
    r"^outcoor: .*coordinates \((Ang|Bohr|fractional|scaled)\):\s*$|^siesta: Atomic coordinates \((Bohr)\) and species\s*$",
    re.M,
)
_CELL = re.compile(r"^outcell: Unit cell vectors \(Ang\):\s*$", re.M)
_STRESS = re.compile(r"^siesta: Stress tensor \(static\) \(eV/Ang\*\*3\):\s*$", re.M)
_PRESSURE = re.compile(rf"^siesta: +({NUMBER}) +{NUMBER} +eV/Ang\*\*3\s*$", re.M)


def recognises(head: bytes) -> bool:
    return b"Siesta Version" in head or (b"Executable" in head and b": siesta" in head)


def load(source: Source) -> str:
    return source.text


def _atom_count(text: str) -> int:
    return int(found(re.compile(r"Number of atoms, orbitals, and projectors: +(\d+)"), text, "number of atoms")[1])


def _charges(text: str) -> dict[int, int]:
    """Atomic number of each species."""
    found_lines = re.findall(r"^Species number: +(\d+) .*?Atomic number: +(-?\d+)", text, re.M)
    return {int(species): int(charge) for species, charge in found_lines}


def geometry(text: str) -> Geometry:
    cell, heading = last(_CELL, text), last(_SITES, text)
    if cell is None or heading is None:
        raise ValueError("no unit cell or atomic coordinates")
    lattice = rows(text, cell.start(), 3, "#...#...#", "unit cell")
    count, unit = _atom_count(text), heading[1] or heading[2]
    form = r"#...#...#...#...\d+(?:...\S+)?" if heading[1] else r"siesta:...#...#...#...#...\d+"
    values = rows(text, heading.start(), count, form, "atomic coordinates")
    charges = _charges(text)
    numbers = np.array([charges.get(int(species), 0) for species in values[:, 3]], dtype=np.int64)
    if numbers.min() < 1:
        raise ValueError("the species of the atoms cannot be read")
    positions = values[:, :3]
    if unit in ("Ang", "Bohr"):
        positions = fractional(positions * (Bohr if unit == "Bohr" else 1.0), lattice)
    elif unit == "scaled":
        raise ValueError("coordinates in units of the lattice constant: ask for fractional ones")
    return Geometry(lattice, positions, numbers, 0.5e-6)


def stress(text: str) -> Stress | None:
    heading = last(_STRESS, text)
    if heading is None:
        return None
    matrix = rows(text, heading.start(), 3, "siesta:...#...#...#", "stress")
    pressure = _PRESSURE.search(text, heading.start())
    if pressure is None or abs(np.trace(matrix) / 3 + number(pressure[1])) > 1.1e-6:
        raise ValueError("the stress does not agree with the pressure printed below it")
    return Stress(symmetric(matrix, 2.1e-6) * EV_PER_A3_IN_GPA)


def energy(text: str) -> float | None:
    """The free energy."""
    value = last_number(re.compile(rf"^siesta: +FreeEng += +({NUMBER})\s*$", re.M), text)
    return last_number(re.compile(rf"^siesta: +Total += +({NUMBER})\s*$", re.M), text) if value is None else value


def forces(text: str) -> FloatArray | None:
    start = text.rfind("\nsiesta: Atomic forces (eV/Ang):")
    return None if start < 0 else rows(text, start + 1, _atom_count(text), r"siesta:...@...#...#...#", "forces")


def doubts(text: str) -> Problems:
    problems = []
    if not re.search(r"SCF cycle converged after|SCF Convergence by", text):
        problems.append(("unconverged", "electronic steps did not converge"))
    if re.search(r"Begin (CG|FIRE|Broyden) (opt\.|move)", text) and "outcoor: Relaxed atomic coordinates" not in text:
        problems.append(("unconverged", "ions not relaxed"))
    cycle = text.rfind("\n   scf:    1")
    if 0 <= text.rfind("\nsiesta: Stress tensor (static)") < cycle:
        problems.append(("unfinished", "the stress is of an earlier ionic step than the last one begun"))
    return tuple(problems)


def settings(text: str) -> Settings:
    result: dict[str, str | float | tuple[float, ...]] = {}
    if functional := re.search(r"^redata: .*(?:functional|XC\.functional) .*= *(\S+)|^xc_check: *(\S.*?) *$", text, re.M):
        result["functional"] = functional[1] or functional[2]
    if count := re.search(r"siesta: k-grid: Number of k-points = +(\d+)", text):
        result["kpoint_count"] = count[1]
    if spin := re.search(r"^redata: (?:Spin configuration|Number of spin components) +[:=] +(\S+)", text, re.M):
        result["spin"] = "none" if spin[1] in ("none", "1") else "polarised"
    return result


def version(text: str) -> str:
    match = re.search(r"Siesta Version *: *(\S+)|^Version *: *(\S+)", text, re.M)
    return (match[1] or match[2]) if match else ""
