"""FHI-aims: eV and angstrom, stress in eV/A^3, positive in tension, above a pressure of the other sign."""

from __future__ import annotations

import re

import numpy as np

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
    needed,
    number,
    rows,
    symmetric,
)
from strainkit.tensors.arrays import FloatArray
from strainkit.units import EV_PER_A3_IN_GPA

END_MARK = re.compile(r"Have a nice day\.")
BAD_MARKS = ((re.compile(r"Self-consistency cycle not converged"), "unconverged", "electronic steps did not converge"),)
_STRESS = re.compile(r" stress tensor(?: - Symmetrized)? +\| *\n")
_PRESSURE = re.compile(rf"^ *\| +Pressure: +({NUMBER}) +\[eV/A\*\*3\] +\|\s*$", re.M)
_MOVED = re.compile(r" (?:Updated|Final) atomic structure: *\n")
_AXIS = re.compile(rf"^ *lattice_vector +({NUMBER}) +({NUMBER}) +({NUMBER})\s*$", re.M)
_ATOM = re.compile(rf"^ *atom +({NUMBER}) +({NUMBER}) +({NUMBER}) +(\S+)\s*$", re.M)
_SITE = re.compile(rf"\s*\| *\d+: Species (\S+) +({NUMBER}) +({NUMBER}) +({NUMBER})\s*\Z")


def recognises(head: bytes) -> bool:
    return b"Invoking FHI-aims" in head or (b"| Number of atoms " in head and b"| Number of spin channels " in head)


def load(source: Source) -> str:
    return source.text


def _atom_count(text: str) -> int:
    return int(found(re.compile(r"The structure contains +(\d+) atoms"), text, "number of atoms")[1])


def geometry(text: str) -> Geometry:
    """The input geometry, or the last update of it; an update without lattice vectors keeps the cell."""
    count = _atom_count(text)
    cell_at, sites_at = text.find("| Unit cell:"), text.find("| Atomic structure:")
    if cell_at < 0 or sites_at < 0:
        raise ValueError("no unit cell or atomic structure")
    lattice = rows(text, cell_at, 3, r"\|...#...#...#", "unit cell")
    sites = [_SITE.match(line) for line in lines_after(text, sites_at, count, skip=1)]
    atoms = [(site[1], site[2], site[3], site[4]) for site in sites if site]
    if moved := last(_MOVED, text):
        block = text[moved.end() : text.find("\n-----", moved.end())]
        axes = [axis.groups() for axis in _AXIS.finditer(block)]
        atoms = [(atom[4], atom[1], atom[2], atom[3]) for atom in _ATOM.finditer(block)]
        if len(axes) not in (0, 3):
            raise ValueError("the lattice vectors cannot be read")
        lattice = np.array([[number(word) for word in axis] for axis in axes]) if axes else lattice
    if len(atoms) != count:
        raise ValueError("the atomic structure cannot be read")
    positions = np.array([[number(word) for word in atom[1:]] for atom in atoms])
    return Geometry(lattice, fractional(positions, lattice), elements([atom[0] for atom in atoms]), 0.5e-8)


def stress(text: str) -> Stress | None:
    """The last symmetrised tensor; the pressure below it must agree."""
    heading = last(_STRESS, text)
    if heading is None:
        return None
    matrix = rows(text, heading.start(), 3, r"\|...@...#...#...#...\|", "stress", 4, "xyz")
    pressure = _PRESSURE.search(text, heading.start())
    if pressure is None or abs(np.trace(matrix) / 3 + number(pressure[1])) > 1.1e-8:
        raise ValueError("the stress does not agree with the pressure printed below it")
    return Stress(symmetric(matrix, 2.1e-8) * EV_PER_A3_IN_GPA)


def energy(text: str) -> float | None:
    """Electronic free energy, with the dispersion correction where there is one."""
    cycle = max(text.rfind("Begin self-consistency loop"), 0)
    value = last_number(re.compile(rf"\| Electronic free energy +: +(?:{NUMBER} Ha +)?({NUMBER}) eV\s*$", re.M), text, cycle)
    return needed(value, "electronic free energy")


def forces(text: str) -> FloatArray | None:
    start = text.rfind("Total atomic forces (unitary forces")
    return None if start < 0 else rows(text, start, _atom_count(text), r"\|...@...#...#...#", "forces")


def doubts(text: str) -> Problems:
    problems = []
    cycle = max(text.rfind("Begin self-consistency loop"), 0)
    if "Self-consistency cycle converged" not in text[cycle:]:
        problems.append(("unconverged", "electronic steps did not converge"))
    if "Geometry optimization: Attempting to predict" in text and "Present geometry is converged" not in text:
        problems.append(("unconverged", "ions not relaxed"))
    printed = last(_STRESS, text)
    if printed and "Numerical" not in text[printed.start() - 10 : printed.start()] and printed.start() < cycle:
        problems.append(("unfinished", "the stress is of an earlier ionic step than the last one begun"))
    return tuple(problems)


_SETTINGS = {
    "functional": re.compile(r" XC: +(?:Using )?(.*?)\.? *$", re.M),
    "kpoints": re.compile(r" Found k-point grid: +(\d+ +\d+ +\d+)", re.M),
    "kpoint_count": re.compile(r"\| Number of k-points +: +(\d+)"),
    "smearing": re.compile(r" Occupation type: +(.*?)\.? *$", re.M),
    "dispersion": re.compile(r"(Tkatchenko-Scheffler|many-body dispersion|MBD)"),
}


def settings(text: str) -> Settings:
    said = {key: " ".join(match[1].split()) for key, pattern in _SETTINGS.items() if (match := pattern.search(text))}
    result: dict[str, str | float | tuple[float, ...]] = {"dispersion": "none", **said}
    if "kpoints" in said:
        result["kpoints"] = said["kpoints"].replace(" ", "x")
    channels = re.search(r"\| Number of spin channels +: +(\d)", text)
    result["spin"] = "polarised" if channels and channels[1] == "2" else "none"
    return result


def version(text: str) -> str:
    match = re.search(r"FHI-aims version +: +(\S+)|Version (\S+)", text[:10_000])
    return (match[1] or match[2]) if match else ""
