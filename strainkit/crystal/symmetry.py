"""Symmetry of the reference cell, through spglib: the only module that talks to it."""

from __future__ import annotations

from collections.abc import Iterator
from contextlib import contextmanager, suppress
from dataclasses import dataclass
from functools import cached_property
from typing import Any

import numpy as np

from strainkit.crystal.crystal import Crystal
from strainkit.errors import InputError
from strainkit.findings import Finding, finding
from strainkit.tensors.arrays import FloatArray, IntArray
from strainkit.tensors.invariants import invariant_matrices

__all__ = ["DEFAULT_SYMPREC", "LAUE_CLASSES", "Symmetry", "find_symmetry", "mean_lattice", "operations", "tolerance_ladder"]

#: default distance tolerance of the symmetry search, angstrom
DEFAULT_SYMPREC = 1e-3

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


@contextmanager
def _spglib_raises() -> Iterator[None]:
    """spglib 2.8 still hides its errors by default; ask for exceptions here and put the switch back afterwards."""
    import spglib

    before = getattr(spglib.error, "OLD_ERROR_HANDLING", None)
    if before is not None:
        spglib.error.OLD_ERROR_HANDLING = False
    try:
        yield
    finally:
        if before is not None:
            spglib.error.OLD_ERROR_HANDLING = before


def _species(crystal: Crystal) -> IntArray:
    """Integer kind of every atom: element, and the signed moment where there is one (never too much symmetry)."""
    moments = crystal.magnetic_moments
    if moments is None:
        return crystal.numbers
    pairs = np.column_stack([crystal.numbers, np.round(moments, 2)])
    return np.unique(pairs, axis=0, return_inverse=True)[1].ravel() + 1


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
    data, kinds = _dataset(crystal, symprec)
    standard = _standard_operations(data.hall_number)
    point_group = data.pointgroup.strip()
    laue_class, system = next((lc, sy) for lc, (sy, groups) in LAUE_CLASSES.items() if point_group in groups)
    lattice, rotations = _cartesian(np.linalg.inv(data.transformation_matrix).T @ crystal.lattice, standard)
    return Symmetry(
        space_group=data.international,
        number=int(data.number),
        point_group=point_group,
        laue_class=laue_class,
        system=system,
        rotations=rotations,
        standard_lattice=lattice,
        transformation=data.transformation_matrix,
        tolerance=symprec,
        deviation=_deviation(crystal, kinds, *_exact_operations(data)),
    )


def operations(crystal: Crystal, symprec: float = DEFAULT_SYMPREC) -> tuple[IntArray, FloatArray, IntArray]:
    """Symmetry operations in the basis of the cell as given, the lattice translations of a supercell among them.

    Returns
    -------
    rotations : (m, 3, 3)
        x' = W x + w on columns of fractional coordinates.
    translations : (m, 3)
    kinds : (n,)
        Integer of every atom that the operations preserve (element and magnetic moment).
    """
    data, kinds = _dataset(crystal, symprec)
    return (*_exact_operations(data), kinds)


def _dataset(crystal: Crystal, symprec: float) -> tuple[Any, IntArray]:
    """spglib's dataset of a crystal, and the kinds of its atoms."""
    import spglib

    kinds = _species(crystal)
    cell = (crystal.lattice.tolist(), crystal.positions.tolist(), kinds.tolist())
    where = crystal.source or crystal.name
    try:
        with _spglib_raises():
            data = spglib.get_symmetry_dataset(cell, symprec=symprec)
            if data is None:
                raise spglib.SpglibError("no symmetry found")
    except spglib.SpglibError as error:
        raise InputError(
            f"no symmetry found at a tolerance of {symprec:g} A ({error})", where, "Try another --symprec, check the atoms."
        ) from None
    return data, kinds


def _exact_operations(data: Any) -> tuple[IntArray, FloatArray]:
    """The tabulated operations brought into the given cell: a closed group, which spglib's own list need not be for supercells.

    With x_standard = P x + p: W = P^-1 R P and w = P^-1 (R p + t + v - p), v running over the standard cell's lattice
    modulo that of the given one. Operations that do not map the given lattice onto itself are left out.
    """
    import spglib

    with _spglib_raises():
        table = spglib.get_symmetry_from_database(data.hall_number) or {}
    to_standard = np.round(12.0 * data.transformation_matrix) / 12.0
    if np.abs(to_standard - data.transformation_matrix).max() > 1e-4:
        return np.array(data.rotations), np.array(data.translations)
    back, origin = np.linalg.inv(to_standard), data.origin_shift
    span = np.arange(int(np.ceil(np.abs(to_standard).sum(axis=1).max())) + 1)
    steps = np.stack(np.meshgrid(span, span, span, indexing="ij"), axis=-1).reshape(-1, 3) @ back.T % 1.0
    steps = np.unique(np.round(steps, 6) % 1.0, axis=0)
    rotations, translations = [], []
    for rotation, translation in zip(table["rotations"], table["translations"], strict=True):
        mine = back @ rotation @ to_standard
        if np.abs(mine - np.round(mine)).max() > 1e-6:
            continue
        start = back @ (rotation @ origin + translation - origin)
        for step in steps:
            rotations.append(np.round(mine).astype(np.int64))
            translations.append((start + step) % 1.0)
    return np.array(rotations), np.array(translations)


def _standard_operations(hall_number: int) -> IntArray:
    """Distinct rotations (m, 3, 3) of a space group in its standard cell."""
    import spglib

    with _spglib_raises():
        standard = spglib.get_symmetry_from_database(hall_number) or {}
    return np.unique(standard["rotations"], axis=0)


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


def _deviation(crystal: Crystal, kinds: IntArray, rotations: IntArray, translations: FloatArray) -> float:
    """Largest distance from a symmetry image of an atom to the nearest atom of its kind, angstrom."""
    from scipy.spatial import cKDTree

    ways = np.zeros((len(rotations), len(kinds), 3))
    for kind in np.unique(kinds):
        mine = crystal.positions[kinds == kind] % 1.0 % 1.0
        tree = cKDTree(mine, boxsize=1.0)
        images = (np.einsum("gij,nj->gni", rotations, mine) + translations[:, None, :]) % 1.0 % 1.0
        # the nearest in fractional space can differ from the nearest in real space only when atoms nearly coincide
        away = images - mine[tree.query(images)[1]]
        ways[:, kinds == kind] = away - np.round(away)
    ways -= ways.mean(axis=1, keepdims=True)  # spglib places an operation only within its tolerance
    return float(np.linalg.norm(ways @ crystal.lattice, axis=-1).max())


def tolerance_ladder(crystal: Crystal, symprec: float) -> tuple[list[tuple[float, str, str]], list[Finding]]:
    """Space group at a tenth, one and ten times the tolerance, and a finding where it changes.

    Returns
    -------
    rungs : list of (tolerance in angstrom, space group, Laue class)
        A rung where the search fails is left out.
    findings : list of Finding
    """
    found = []
    for factor in (0.1, 1.0, 10.0):
        with suppress(InputError):
            found.append(find_symmetry(crystal, symprec * factor))
    rungs = [(symmetry.tolerance, symmetry.space_group, symmetry.laue_class) for symmetry in found]
    findings = []
    if len({group for _, group, _ in rungs}) > 1:
        text = ", ".join(f"{group} at {tolerance:g} A" for tolerance, group, _ in rungs)
        loosest = found[-1]
        offer = (
            f"; if {loosest.space_group} is meant (atoms are up to {loosest.deviation:.2g} A off it), "
            f"prepare --symmetrize --symprec {loosest.tolerance:g} moves them onto it"
        )
        where = crystal.source or crystal.name
        findings.append(finding("symmetry-depends-on-tolerance", where, text + offer))
    return rungs, findings
