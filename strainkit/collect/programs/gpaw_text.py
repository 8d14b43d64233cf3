"""GPAW's text output: eV and angstrom, stress in eV/A^3, positive in tension.

Stress and forces are printed when they are asked for, so either may belong to an earlier geometry than the last. Whether
the ions are relaxed is known to the optimiser that called GPAW, not to this file.
"""

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
    names,
    number,
    rows,
    symmetric,
)
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

END_MARK = re.compile(r"\nTotal: +[\d.]+ +100\.0% *\n(?:.*\n){0,4}Date: ")
BAD_MARKS: tuple[tuple[re.Pattern[str], str, str], ...] = ()
_BANNER = re.compile(r" \|__ \|  _\|___\|_____\| +(\S+) *\n")
_SITE = re.compile(rf"\s*(\d+) +([A-Z][a-z]?) +({NUMBER}) +({NUMBER}) +({NUMBER})(?: +\(.*\))?\s*\Z")
_CYCLE = re.compile(r"\niter: +1 ")


def recognises(head: bytes) -> bool:
    return b"|__ |  _|___|_____|" in head


def load(source: Source) -> str:
    """The last run in the file."""
    text = source.text
    banner = last(_BANNER, text)
    return text[banner.start() :] if banner else text


def _atom_count(text: str) -> int:
    return int(found(re.compile(r"\nNumber of atoms: (\d+) *\n"), text, "number of atoms")[1])


def geometry(text: str) -> Geometry:
    count = _atom_count(text)
    sites_at, cell_at = text.rfind("\nPositions:"), text.rfind("\nUnit cell:")
    if sites_at < 0 or cell_at < sites_at:
        raise ValueError("no positions and unit cell")
    lattice = rows(text, cell_at + 1, 3, rf"@\. axis:...(?:yes|no)...#...#...#...\d+...{NUMBER}", "unit cell", skip=1)
    sites = [_SITE.match(line) for line in lines_after(text, sites_at + 1, count)]
    atoms = [site.groups()[1:] for row, site in enumerate(sites) if site and site[1] == str(row)]
    if len(atoms) != count:
        raise ValueError("the positions cannot be read")
    positions = np.array([[number(word) for word in atom[1:]] for atom in atoms])
    return Geometry(lattice, fractional(positions, lattice), elements([atom[0] for atom in atoms]), 0.5e-6)


def stress(text: str) -> Stress | None:
    start = text.rfind("\nStress tensor:")
    if start < 0:
        return None
    matrix = rows(text, start + 1, 3, "#...#...#", "stress")
    return Stress(symmetric(matrix, 2.1e-6) * EV_PER_A3_IN_GPA)


def energy(text: str) -> float | None:
    """Free energy, relative to the reference atoms as GPAW gives it everywhere."""
    cycle = last(_CYCLE, text)
    return last_number(re.compile(rf"\nFree energy: +({NUMBER}) *\n"), text, cycle.start() if cycle else 0)


def forces(text: str) -> FloatArray | None:
    start = text.rfind("\nForces in eV/Ang:")
    if start < 0:
        return None
    values = rows(text, start + 1, _atom_count(text), "#...[A-Z][a-z]?...#...#...#", "forces")
    if not np.array_equal(values[:, 0], np.arange(len(values))):
        raise ValueError("the forces are not in the order of the atoms")
    return values[:, 1:]


def doubts(text: str) -> Problems:
    problems = []
    cycle = last(_CYCLE, text)
    if cycle is None or not re.compile(r"\nConverged after \d+ iterations").search(text, cycle.start()):
        problems.append(("unconverged", "electronic steps did not converge"))
    moved = text.rfind("\nPositions:")
    if 0 <= text.rfind("\nStress tensor:") < moved:
        problems.append(("unfinished", "the stress is of an earlier ionic step than the last geometry"))
    if 0 <= text.rfind("\nForces in eV/Ang:") < moved:
        problems.append(("unfinished", "the forces are of an earlier ionic step than the last geometry"))
    return tuple(problems)


_SETTINGS = {
    "kpoint_count": re.compile(r"\n(\d+) k-points? in the [Ii]rreducible"),
    "kpoints": re.compile(r"\n\d+ k-points?: (\d+ x \d+ x \d+)"),
    "functional": re.compile(r"Using the (\S+) Exchange-Correlation functional"),
    "dispersion": re.compile(r"\n(vdW\S+|DFT-?D\S+)"),
}
#: checksum and file name of a data set
SETUP = re.compile(r"^ +id: +(\w+)\n(?: .*\n){0,8}? +file: +\S*?([^/\s]+?)(?:\.gz)?$", re.M)


def settings(text: str) -> Settings:
    said = {key: match[1] for key, pattern in _SETTINGS.items() if (match := pattern.search(text))}
    result: dict[str, str | float | tuple[float, ...]] = {"dispersion": "none", **said}
    if "kpoints" in said:
        result["kpoints"] = said["kpoints"].replace(" ", "")
    if occupations := re.search(r"^Occupation numbers:\s*(.*(?:\n  +\S.*)*)", text, re.M):
        result["smearing"] = " ".join(occupations[1].split("#")[0].split()) or "none"
    result["spin"] = "polarised" if re.search(r"^Spin-polarized calculation", text, re.M) else "none"
    result["pseudopotentials"] = names(f"{name} {md5[:8]}" for md5, name in SETUP.findall(text))
    if cutoff := last_number(re.compile(rf"Cutoff energy: ({NUMBER}) eV"), text):
        result["cutoff_eV"] = cutoff
    return result


def version(text: str) -> str:
    match = _BANNER.search(text)
    return match[1] if match else ""
