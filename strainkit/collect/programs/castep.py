"""CASTEP .castep: stress in GPa, positive in tension, above a pressure of the other sign."""

from __future__ import annotations

import re

import numpy as np

from strainkit.collect.returned import Geometry, Problems, Settings, Stress
from strainkit.collect.source import Source
from strainkit.collect.text import NUMBER, elements, found, last, last_number, lines_after, number, rows, symmetric
from strainkit.tensors.arrays import FloatArray

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

END_MARK = re.compile(r"Total time +=")
BAD_MARKS = (
    (re.compile(r"SCF cycles performed but system has not reached"), "unconverged", "electronic steps did not converge"),
    (re.compile(r"Geometry optimi[sz]ation failed to converge"), "unconverged", "ions not relaxed"),
    (re.compile(r"Starting MD iteration"), "unconverged", "ions moved by dynamics"),
)
_BANNER = b"CCC   AA    SSS  TTTTT  EEEEE  PPPP"
_AXES = re.compile(r" Real Lattice\(A\) +Reciprocal Lattice\(1/A\) *\n")
_SITES = re.compile(r" Fractional coordinates of atoms +x *\n")
_SITE = re.compile(rf"\s*x +([A-Z][a-z]?)\S* +\d+ +({NUMBER}) +({NUMBER}) +({NUMBER}) +x\s*\Z")
_STRESS = re.compile(r" Stress Tensor \*+ *\n")
_FORCES = re.compile(r" Forces \*+ *\n")
_FREE = re.compile(rf"^ *(?:Dispersion corrected final|Final) free energy[^=\n]*= +({NUMBER}) +eV *$", re.M)
_FINAL = re.compile(rf"^ *(?:Dispersion corrected final|Final) energy[^=\n]*= +({NUMBER}) +eV *$", re.M)
_PRESSURE = re.compile(rf"\* +Pressure: +({NUMBER}) +\*\s*$", re.M)


def recognises(head: bytes) -> bool:
    return _BANNER in head


def load(source: Source) -> str:
    """The last run in the file: CASTEP appends."""
    return source.text[max(source.text.rfind(_BANNER.decode()), 0) :]


def _atom_count(text: str) -> int:
    return int(found(re.compile(r"Total number of ions in cell = +(\d+)\s*$", re.M), text, "number of ions")[1])


def geometry(text: str) -> Geometry:
    axes, heading = last(_AXES, text), last(_SITES, text)
    if axes is None or heading is None:
        raise ValueError("no lattice or positions")
    lattice = rows(text, axes.start(), 3, "...".join("#" * 6), "lattice")[:, :3]
    sites = [_SITE.match(line) for line in lines_after(text, heading.start(), _atom_count(text), skip=2)]
    if not all(sites):
        raise ValueError("the positions cannot be read")
    atoms = [site.groups() for site in sites if site]
    positions = np.array([[number(word) for word in atom[1:]] for atom in atoms])
    return Geometry(lattice, positions, elements([atom[0] for atom in atoms]), 0.5e-7)


def stress(text: str) -> Stress | None:
    heading = last(_STRESS, text)
    if heading is None:
        return None
    unit = re.compile(r"Cartesian components \((\S+)\)").search(text, heading.start())
    if unit is None or unit[1] != "GPa":
        raise ValueError("the unit of the stress is not GPa")
    body = text.find(" x             y             z", heading.start())
    matrix = rows(text, body, 3, r"\*...@...#...#...#...\*", "stress", 1, "xyz") if body > 0 else np.zeros((0, 3))
    pressure = _PRESSURE.search(text, heading.start())
    if not len(matrix) or pressure is None or abs(np.trace(matrix) / 3 + number(pressure[1])) > 1.1e-4:
        raise ValueError("the stress does not agree with the pressure printed below it")
    return Stress(symmetric(matrix, 2.1e-6))


def energy(text: str) -> float | None:
    """Free energy, with the dispersion correction where there is one."""
    cycle = max(text.rfind("<-- SCF"), 0)
    value = last_number(_FREE, text, cycle)
    return last_number(_FINAL, text, cycle) if value is None else value


def forces(text: str) -> FloatArray | None:
    heading = last(_FORCES, text)
    if heading is None:
        return None
    return rows(text, heading.start(), _atom_count(text), r"\*...[A-Z]\S*...\d+...#...#...#...\*", "forces", skip=5)


def doubts(text: str) -> Problems:
    problems = []
    if re.search(r"type of calculation +: geometry optimi", text) and not re.search(
        r"Geometry optimi[sz]ation completed", text
    ):
        problems.append(("unconverged", "ions not relaxed"))
    printed, computed = last(_STRESS, text), last(_FINAL, text)
    if printed and computed and printed.start() < computed.start():
        problems.append(("unfinished", "the stress is of an earlier ionic step than the last energy"))
    return tuple(problems)


_SETTINGS = {
    "functional": re.compile(r" using functional +: (.*?) *$", re.M),
    "dispersion": re.compile(r"dispersion correction +: (\S.*?) *$", re.M),
    "smearing": re.compile(r"smearing scheme +: (\S.*?) *$", re.M),
    "kpoints": re.compile(r"MP grid size for SCF calculation is +(\d+ +\d+ +\d+)"),
    "kpoint_count": re.compile(r"Number of kpoints used = +(\d+)"),
}


def settings(text: str) -> Settings:
    said = {key: match[1] for key, pattern in _SETTINGS.items() if (match := pattern.search(text))}
    result: dict[str, str | float | tuple[float, ...]] = {"smearing": "none", **said}
    result["dispersion"] = "none" if said.get("dispersion", "off") == "off" else said["dispersion"]
    if "kpoints" in said:
        result["kpoints"] = "x".join(said["kpoints"].split())
    result["spin"] = "none" if "treating system as non-spin-polarized" in text else "polarised"
    if cutoff := last_number(re.compile(rf"plane wave basis set cut-off +: +({NUMBER}) +eV"), text):
        result["cutoff_eV"] = cutoff
    return result


def version(text: str) -> str:
    match = re.search(r"CASTEP version (\S+)", text)
    return match[1] if match else ""
