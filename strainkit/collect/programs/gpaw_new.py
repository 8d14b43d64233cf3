"""Text output of GPAW's newer code (default in 26): tables between bars, eV and angstrom, stress positive in tension.

As in the older text, stress and forces are printed when they are asked for, and only the optimiser that called GPAW knows
whether the ions are relaxed. There is no end mark that every run writes: the line below the stress stands for it.
"""

from __future__ import annotations

import re

import numpy as np

from strainkit.collect.programs.gpaw_text import SETUP
from strainkit.collect.returned import Geometry, Problems, Settings, Stress
from strainkit.collect.source import Source
from strainkit.collect.text import NUMBER, elements, fractional, last, last_number, names, number, rows, symmetric
from strainkit.tensors.arrays import FloatArray
from strainkit.units import EV_PER_A3_IN_GPA

END_MARK = re.compile(r"\nStress computation time: |\ntiming:  # \[seconds\]")
BAD_MARKS: tuple[tuple[re.Pattern[str], str, str], ...] = ()
_BANNER = re.compile(r" \|__\|\|  \| \|\|/\\\| - +(\S+) *\n")
_SITE = re.compile(rf"\| +(\d+) \| +([A-Z][a-z]?) \| +({NUMBER}) \| +({NUMBER}) \| +({NUMBER}) \|.*")
_CYCLE = re.compile(r"\n\|iter: +1\|")
_STRESS, _FORCES = "\nStress tensor  # eV/Ang^3", "\nForces  # eV/Ang"


def recognises(head: bytes) -> bool:
    return rb" |__||  | ||/\| - " in head


def load(source: Source) -> str:
    """The last run in the file."""
    text = source.text
    banner = last(_BANNER, text)
    return text[banner.start() :] if banner else text


def _table(text: str, heading: str) -> int:
    """Position of the last table of a name; ValueError when there is none."""
    start = text.rfind(heading)
    if start < 0:
        raise ValueError(f"no table of {heading.split()[0].lower()}")
    return start + 1


def _atoms(text: str) -> list[tuple[str, ...]]:
    """Index, symbol and Cartesian position (A) of each row of the last table of atoms."""
    lines = text[_table(text, "\nAtoms  #") :].split("\n", 100_000)[3:]
    count = next((row for row, line in enumerate(lines) if not line.startswith("|")), 0)
    matches = [_SITE.fullmatch(line) for line in lines[:count]]
    atoms = [match.groups() for row, match in enumerate(matches) if match and match[1] == str(row)]
    if not atoms or len(atoms) != count:
        raise ValueError("the positions cannot be read")
    return atoms


def geometry(text: str) -> Geometry:
    """The last tables; the lengths printed beside the lattice vectors must be theirs."""
    atoms, start = _atoms(text), _table(text, "\nUnit cell  #")
    if start < _table(text, "\nAtoms  #"):
        raise ValueError("no unit cell with the last atoms")
    form = r"\|...(?:yes|no)...\|...#...\|...#...\|...#...\|...#...\|...#...\|"
    cell = rows(text, start, 3, form, "unit cell", skip=2)
    lattice = cell[:, :3]
    if np.abs(np.linalg.norm(lattice, axis=1) - cell[:, 3]).max() > 1.5e-6:
        raise ValueError("the lattice vectors do not have the lengths printed beside them")
    positions = np.array([[number(word) for word in atom[2:]] for atom in atoms])
    return Geometry(lattice, fractional(positions, lattice), elements([atom[1] for atom in atoms]), 0.5e-6)


def stress(text: str) -> Stress | None:
    start = text.rfind(_STRESS)
    if start < 0:
        return None
    matrix = rows(text, start + 1, 3, r"\|...#...\|...#...\|...#...\|", "stress", skip=2)
    return Stress(symmetric(matrix, 2.1e-6) * EV_PER_A3_IN_GPA)


def energy(text: str) -> float | None:
    """Free energy, relative to the reference atoms as GPAW gives it everywhere."""
    cycle = last(_CYCLE, text)
    return last_number(re.compile(rf"\n  Free energy: +({NUMBER}) *\n"), text, cycle.start() if cycle else 0)


def forces(text: str) -> FloatArray | None:
    start = text.rfind(_FORCES)
    if start < 0:
        return None
    # \x23 is the # that begins a remark, which in a form would be a number
    form = r"\|...#...\|...#...\|...#...\|...\x23...[A-Z][a-z]?...#"
    values = rows(text, start + 1, len(_atoms(text)), form, "forces", skip=2)
    if not np.array_equal(values[:, 3], np.arange(len(values))):
        raise ValueError("the forces are not in the order of the atoms")
    return values[:, :3]


def doubts(text: str) -> Problems:
    problems = []
    cycle = last(_CYCLE, text)
    if cycle is None or text.find("\nConverged in ", cycle.start()) < 0:
        problems.append(("unconverged", "electronic steps did not converge"))
    moved = text.rfind("\nAtoms  #")
    for name, heading in (("stress", _STRESS), ("forces", _FORCES)):
        if 0 <= text.rfind(heading) < moved:
            verb = "is" if name == "stress" else "are"
            problems.append(("unfinished", f"the {name} {verb} of an earlier ionic step than the last geometry"))
    return tuple(problems)


_SETTINGS = {
    "kpoint_count": re.compile(r"Number of IBZ points: (\d+)"),
    "kpoints": re.compile(r"Monkhorst-Pack size: \[(\d+, \d+, \d+)\]"),
    "functional": re.compile(r"\nxc functional:\n +name: (\S+)"),
}


def settings(text: str) -> Settings:
    said = {key: match[1] for key, pattern in _SETTINGS.items() if (match := pattern.search(text))}
    result: dict[str, str | float | tuple[float, ...]] = dict(said)
    if "kpoints" in said:
        result["kpoints"] = said["kpoints"].replace(", ", "x")
    if occupations := re.search(r"\noccupation numbers:\n +(\S.*?):\n(?: +width: (\S+))?", text):
        result["smearing"] = f"{occupations[1]}: width: {occupations[2]}" if occupations[2] else "none"
    result["spin"] = "none" if "Spin-components: 1 " in text else "polarised"
    result["pseudopotentials"] = names(f"{name} {md5[:8]}" for md5, name in SETUP.findall(text))
    if cutoff := last_number(re.compile(rf"\nCutoff: ({NUMBER}) eV"), text):
        result["cutoff_eV"] = cutoff
    return result


def version(text: str) -> str:
    match = _BANNER.search(text)
    return match[1] if match else ""
