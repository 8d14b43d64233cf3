"""Symmetry operations through spglib: everything that asks it for a space group goes through here."""

from __future__ import annotations

from collections.abc import Iterator
from contextlib import contextmanager
from typing import Any

import numpy as np

from strainkit.crystal.crystal import Crystal
from strainkit.errors import InputError
from strainkit.tensors.arrays import FloatArray, IntArray

__all__ = [
    "DEFAULT_SYMPREC",
    "deviation",
    "exact_operations",
    "higher_symmetry_possible",
    "operations",
    "space_group_data",
    "species",
    "spglib_raises",
    "standard_rotations",
]

#: default distance tolerance of the symmetry search, angstrom
DEFAULT_SYMPREC = 1e-3


@contextmanager
def spglib_raises() -> Iterator[None]:
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


def species(crystal: Crystal) -> IntArray:
    """Integer kind of every atom: element, and the signed moment where there is one (never too much symmetry)."""
    moments = crystal.magnetic_moments
    if moments is None:
        return crystal.numbers
    pairs = np.column_stack([crystal.numbers, np.round(moments, 2)])
    return np.unique(pairs, axis=0, return_inverse=True)[1].ravel() + 1


def space_group_data(crystal: Crystal, symprec: float) -> tuple[Any, IntArray]:
    """spglib's dataset of a crystal, and the kinds of its atoms."""
    import spglib

    kinds = species(crystal)
    cell = (crystal.lattice.tolist(), crystal.positions.tolist(), kinds.tolist())
    where = crystal.source or crystal.name
    try:
        with spglib_raises():
            data = spglib.get_symmetry_dataset(cell, symprec=symprec)
            if data is None:
                raise spglib.SpglibError("no symmetry found")
    except spglib.SpglibError as error:
        raise InputError(
            f"no symmetry found at a tolerance of {symprec:g} A ({error})", where, "Try another --symprec, check the atoms."
        ) from None
    return data, kinds


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
    data, kinds = space_group_data(crystal, symprec)
    return (*exact_operations(data), kinds)


def exact_operations(data: Any) -> tuple[IntArray, FloatArray]:
    """The tabulated operations brought into the given cell: a closed group, which spglib's own list need not be for supercells.

    With x_standard = P x + p: W = P^-1 R P and w = P^-1 (R p + t + v - p), v running over the standard cell's lattice
    modulo that of the given one. Operations that do not map the given lattice onto itself are left out.
    """
    import spglib

    with spglib_raises():
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


def standard_rotations(hall_number: int) -> IntArray:
    """Distinct rotations (m, 3, 3) of a space group in its standard cell."""
    import spglib

    with spglib_raises():
        standard = spglib.get_symmetry_from_database(hall_number) or {}
    return np.unique(standard["rotations"], axis=0)


def deviation(crystal: Crystal, kinds: IntArray, rotations: IntArray, translations: FloatArray) -> float:
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


def higher_symmetry_possible(crystal: Crystal, kinds: IntArray, data: Any, reach: float) -> bool:
    """Could an operation that the group found lacks map the crystal onto itself with every atom within `reach` (angstrom)?

    No is certain; yes asks for a search. One operation of every coset of the lattice's point group is tried, with every
    translation that takes one atom of the rarest kind to another.
    """
    from scipy.spatial import cKDTree

    lattice = data.primitive_lattice
    if 4.0 * reach > np.linalg.norm(lattice, axis=1).min():  # nearly every matrix would do
        return True
    kept = np.unique(data.mapping_to_primitive, return_index=True)[1]
    to_primitive = crystal.lattice @ np.linalg.inv(lattice)
    positions, kinds = crystal.positions[kept] @ to_primitive % 1.0 % 1.0, kinds[kept]
    trees = {kind: cKDTree(positions[kinds == kind], boxsize=1.0) for kind in np.unique(kinds)}
    rarest = min(trees, key=lambda kind: trees[kind].n)
    least = reach * float(np.linalg.norm(np.linalg.inv(lattice), 2))  # as a distance in fractional coordinates, or less
    mine = np.unique(np.round(to_primitive.T @ data.rotations @ np.linalg.inv(to_primitive.T)).astype(int), axis=0)
    tried = [np.eye(3, dtype=int)]
    for rotation in _lattice_rotations(lattice, reach):
        if not any((rotation == other @ mine).all(axis=(1, 2)).any() for other in tried):
            tried.append(rotation)
    for number, rotation in enumerate(tried):
        images = positions @ rotation.T
        shifts = trees[rarest].data - images[kinds == rarest][0]
        shifts = shifts if number else shifts[1:]  # without a rotation: translations other than none
        for image, kind in zip(images, kinds, strict=True):
            away, _ = trees[kind].query((image + shifts) % 1.0 % 1.0, distance_upper_bound=least)
            shifts = shifts[away < least]
            if not len(shifts):
                break
        else:
            return True
    return False


def _lattice_rotations(lattice: FloatArray, reach: float) -> IntArray:
    """Integer matrices (m, 3, 3) that map a lattice of shortest vectors (rows) onto itself within `reach`, angstrom."""
    lengths = np.linalg.norm(lattice, axis=1)
    steps = np.stack(np.meshgrid(*[(-1, 0, 1)] * 3, indexing="ij"), axis=-1).reshape(-1, 3)
    alike = np.abs(np.linalg.norm(steps @ lattice, axis=1)[:, None] - lengths) < reach
    rows = np.meshgrid(*(np.flatnonzero(column) for column in alike.T), indexing="ij")
    matrices = np.stack([steps[row.ravel()] for row in rows], axis=1)
    images = matrices @ lattice
    change = images @ images.transpose(0, 2, 1) - lattice @ lattice.T
    found: IntArray = matrices[(np.abs(change) < reach * (lengths + lengths[:, None])).all(axis=(1, 2))].transpose(0, 2, 1)
    return found
