"""Symmetry of the reference cell: its space group, and its rotations in the Cartesian frame as given."""

from __future__ import annotations

from contextlib import suppress
from dataclasses import dataclass
from functools import cached_property
from typing import Any

import numpy as np

from strainkit.crystal.crystal import Crystal
from strainkit.crystal.spacegroup import (
    DEFAULT_SYMPREC,
    deviation,
    exact_operations,
    higher_symmetry_possible,
    space_group_data,
    species,
    spglib_raises,
    standard_rotations,
)
from strainkit.errors import InputError
from strainkit.findings import Finding, finding
from strainkit.tensors.arrays import FloatArray, IntArray
from strainkit.tensors.invariants import invariant_matrices

__all__ = [
    "DEFAULT_SYMPREC",
    "LAUE_CLASSES",
    "Symmetry",
    "find_symmetry",
    "laue_class_of",
    "mean_lattice",
    "tolerance_ladder",
    "translation_denominators",
]

#: a cell this close to its group, in tolerances, has the same group at a tenth of the tolerance
EXACT = 0.01
#: tolerances by which an image may miss when an operation is placed on one atom, not in the middle of all (two; and spare)
PLACED = 3.0
#: Laue class -> (crystal system, point groups)
LAUE_CLASSES: dict[str, tuple[str, tuple[str, ...]]] = {
    "-1": ("triclinic", ("1", "-1")),
    "2/m": ("monoclinic", ("2", "m", "2/m")),
    "mmm": ("orthorhombic", ("222", "mm2", "mmm")),
    "4/m": ("tetragonal", ("4", "-4", "4/m")),
    "4/mmm": ("tetragonal", ("422", "4mm", "-42m", "4/mmm")),
    "-3": ("trigonal", ("3", "-3")),
    "-3m": ("trigonal", ("32", "3m", "-3m")),
    "6/m": ("hexagonal", ("6", "-6", "6/m")),
    "6/mmm": ("hexagonal", ("622", "6mm", "-62m", "-6m2", "6/mmm")),
    "m-3": ("cubic", ("23", "m-3")),
    "m-3m": ("cubic", ("432", "-43m", "m-3m")),
}


@dataclass(frozen=True)
class Symmetry:
    """Space group of a crystal and its rotations in the crystal's own Cartesian frame.

    Attributes
    ----------
    space_group, number, point_group, laue_class, system
        International symbol and number, point group, Laue class, crystal system.
    rotations : (m, 3, 3)
        Cartesian proper rotations of the Laue class in the given frame: improper operations count by their proper part.
        Exactly orthogonal (the metric is averaged over the group).
    standard_lattice : (3, 3)
        Conventional standard cell, rows, angstrom, metric averaged over the group, turned into the given frame.
    transformation : (3, 3)
        P with (a b c)_standard = (a b c)_given P^-1, columns being basis vectors (spglib's convention).
    tolerance : float
        Distance tolerance of the search, angstrom.
    deviation : float
        Largest distance between an atom and the symmetry image of another one, angstrom.
    """

    space_group: str
    number: int
    point_group: str
    laue_class: str
    system: str
    rotations: FloatArray
    standard_lattice: FloatArray
    transformation: FloatArray
    tolerance: float
    deviation: float

    @cached_property
    def invariants(self) -> FloatArray:
        """Orthonormal basis (n, 6, 6) of the stiffness matrices (Mandel, given frame) that the crystal allows."""
        return invariant_matrices(self.rotations)

    def to_dict(self) -> dict[str, Any]:
        """JSON-ready: what `from_dict` needs, but for the names of space group and Laue class."""
        return {
            "number": self.number,
            "point_group": self.point_group,
            "system": self.system,
            "tolerance_A": self.tolerance,
            "deviation_A": self.deviation,
            "rotations": self.rotations,
            "standard_lattice_A": self.standard_lattice,
            "transformation": self.transformation,
        }

    @classmethod
    def from_dict(cls, data: dict[str, Any], space_group: str, laue_class: str) -> Symmetry:
        """The inverse of `to_dict`."""
        return cls(
            space_group=space_group,
            number=data["number"],
            point_group=data["point_group"],
            laue_class=laue_class,
            system=data["system"],
            rotations=np.array(data["rotations"]),
            standard_lattice=np.array(data["standard_lattice_A"]),
            transformation=np.array(data["transformation"]),
            tolerance=data["tolerance_A"],
            deviation=data["deviation_A"],
        )


def find_symmetry(crystal: Crystal, symprec: float = DEFAULT_SYMPREC) -> Symmetry:
    """Space group of a crystal.

    Parameters
    ----------
    crystal : Crystal
    symprec : float
        Distance tolerance, angstrom.

    Raises
    ------
    InputError
        When spglib finds no group (atoms on top of each other, a tolerance larger than the crystal).
    """
    return _symmetry(crystal, symprec, *space_group_data(crystal, symprec))


def _symmetry(crystal: Crystal, symprec: float, data: Any, kinds: IntArray) -> Symmetry:
    standard = standard_rotations(data.hall_number)
    laue_class, system = _class_of(data.pointgroup)
    lattice, rotations = _cartesian(np.linalg.inv(data.transformation_matrix).T @ crystal.lattice, standard)
    return Symmetry(
        space_group=data.international,
        number=int(data.number),
        point_group=data.pointgroup.strip(),
        laue_class=laue_class,
        system=system,
        rotations=rotations,
        standard_lattice=lattice,
        transformation=data.transformation_matrix,
        tolerance=symprec,
        deviation=deviation(crystal, kinds, *exact_operations(data)),
    )


def _class_of(point_group: str) -> tuple[str, str]:
    """Laue class and crystal system of a point group."""
    return next((lc, sy) for lc, (sy, groups) in LAUE_CLASSES.items() if point_group.strip() in groups)


def mean_lattice(lattice: FloatArray, rotations: IntArray) -> FloatArray:
    """Lattice (3, 3) whose metric is the mean over a group (m, 3, 3), reached from `lattice` without a rotation."""
    metric = np.mean([w.T @ (lattice @ lattice.T) @ w for w in rotations.astype(float)], axis=0)
    inverse = np.linalg.inv(lattice)
    values, vectors = np.linalg.eigh(inverse @ metric @ inverse.T)
    mean: FloatArray = lattice @ (vectors * np.sqrt(values)) @ vectors.T
    return mean


def _cartesian(lattice: FloatArray, operations: IntArray) -> tuple[FloatArray, FloatArray]:
    """Lattice with the group's exact metric, and the group's distinct proper rotations, both in the given frame."""
    exact = mean_lattice(lattice, operations)
    columns = exact.T
    cartesian = columns @ operations @ np.linalg.inv(columns)
    proper = cartesian * np.round(np.linalg.det(cartesian))[:, None, None]
    distinct: list[FloatArray] = []
    for rotation in proper:
        if not any(np.abs(rotation - other).max() < 1e-6 for other in distinct):
            distinct.append(rotation)
    return exact, np.array(distinct)


def tolerance_ladder(crystal: Crystal, symprec: float) -> tuple[Symmetry, list[tuple[float, str, str]], list[Finding]]:
    """Symmetry at a tolerance, the space groups at a tenth and ten times of it, and a finding where they differ.

    Returns
    -------
    symmetry : Symmetry
        As by `find_symmetry`, which raises the same errors.
    rungs : list of (tolerance in angstrom, space group, Laue class)
        A tenth, one and ten times the tolerance; one where the search fails is left out.
    findings : list of Finding
    """
    data, kinds = space_group_data(crystal, symprec)
    symmetry = _symmetry(crystal, symprec, data, kinds)
    given = np.linalg.inv(symmetry.transformation).T @ crystal.lattice
    off = max(symmetry.deviation, float(np.abs(given - symmetry.standard_lattice).max()))
    # searches that cannot find another group are left out: they take longer than all else that is known of a cell
    loose = 10.0 * symprec
    same = {0.1: off < EXACT * symprec, 1.0: True, 10.0: not higher_symmetry_possible(crystal, kinds, data, PLACED * loose)}
    rungs = []
    for factor, known in same.items():
        with suppress(InputError):
            found = data if known else space_group_data(crystal, symprec * factor)[0]
            rungs.append((symprec * factor, found.international, _class_of(found.pointgroup)[0]))
    findings = []
    if len({group for _, group, _ in rungs}) > 1:
        text = ", ".join(f"{group} at {tolerance:g} A" for tolerance, group, _ in rungs)
        loosest = find_symmetry(crystal, rungs[-1][0])
        offer = (
            f"; if {loosest.space_group} is meant (atoms are up to {loosest.deviation:.2g} A off it), "
            f"prepare --symmetrize --symprec {loosest.tolerance:g} moves them onto it"
        )
        where = crystal.source or crystal.name
        findings.append(finding("symmetry-depends-on-tolerance", where, text + offer))
    return symmetry, rungs, findings


def translation_denominators(crystal: Crystal, symprec: float = DEFAULT_SYMPREC) -> tuple[int, int, int]:
    """Smallest whole numbers of grid points along a, b, c whose multiples every symmetry operation maps onto themselves.

    Glide planes and screw axes move the grid by a fraction of a lattice vector; operations whose fraction is none of
    the usual ones (a crystal with its origin elsewhere) do not count, since no grid suits them.
    """
    import spglib

    cell = (crystal.lattice.tolist(), crystal.positions.tolist(), species(crystal).tolist())
    try:
        with spglib_raises():
            found = spglib.get_symmetry(cell, symprec=symprec)
    except spglib.SpglibError:
        return 1, 1, 1
    needed = np.ones(3, dtype=int)
    for translation in found["translations"] if found else ():
        fits = [next((d for d in (1, 2, 3, 4, 6) if abs(d * x - round(d * x)) < 1e-3), 0) for x in translation]
        if all(fits):
            needed = np.lcm(needed, fits)
    return int(needed[0]), int(needed[1]), int(needed[2])


def laue_class_of(rotations: FloatArray) -> str:
    """Laue class of a group of proper rotations (m, 3, 3), in any frame, by its numbers of rotation axes."""
    angles = np.degrees(np.arccos(np.clip(0.5 * (np.trace(rotations, axis1=1, axis2=2) - 1.0), -1.0, 1.0)))
    two_fold = int((np.round(angles) == 180).sum())
    four_fold = int((np.round(angles) == 90).sum())
    match len(rotations):
        case 1:
            return "-1"
        case 2:
            return "2/m"
        case 3:
            return "-3"
        case 4:
            return "4/m" if four_fold else "mmm"
        case 6:
            return "-3m" if two_fold == 3 else "6/m"
        case 8:
            return "4/mmm"
        case 12:
            return "m-3" if two_fold == 3 else "6/mmm"
        case _:
            return "m-3m"
