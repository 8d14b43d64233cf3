"""Internal strain: how the ions answer a strain, and what that takes off the clamped-ion stiffness.

With the energy of a strain eta and displacements u from their affine places E = V eta:C0:eta/2 - u.L eta + u.K u/2, the ions
settle at u = K^+ L eta and C = C0 - L^T K^+ L / V (X. Wu, D. Vanderbilt & D. R. Hamann, Phys. Rev. B 72, 035105, 2005), K being
the force constants at q = 0 with the three translations projected out and L the force response to strain.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from strainkit.crystal.crystal import Crystal
from strainkit.crystal.operations import Operations
from strainkit.errors import NoTensorError
from strainkit.tensors.arrays import FloatArray
from strainkit.tensors.rotations import rotation6
from strainkit.units import EV_PER_A3_IN_GPA

__all__ = ["ForceResponse", "InternalStrain", "force_response", "internal_strain", "ions_answer"]

#: modes softer than this part of the stiffest one count as translations or as unstable (force constants)
_SOFT = 1e-5


@dataclass(frozen=True)
class InternalStrain:
    """What the ions do.

    Attributes
    ----------
    correction : (6, 6)
        To be subtracted from the clamped-ion stiffness, Mandel, GPa, given frame.
    displacements : (n, 3, 6)
        Displacement of every atom per unit Mandel strain, angstrom, given frame.
    """

    correction: FloatArray
    displacements: FloatArray


@dataclass(frozen=True)
class ForceResponse:
    """Forces on the ions per unit strain, at their affine places.

    Attributes
    ----------
    matrix : (3 n, 6)
        eV/A per unit Mandel strain, given frame, no net force.
    noise : float or None
        Standard deviation of one force component, eV/A; None without spare degrees of freedom.
    degrees_of_freedom : int
    """

    matrix: FloatArray
    noise: float | None
    degrees_of_freedom: int


def force_response(strains: FloatArray, forces: FloatArray, operations: Operations) -> ForceResponse:
    """Force response L to strain from a few strained cells and the crystal's symmetry.

    Every calculation is copied by all operations; copies that fall on one strain are averaged; L follows from the odd part of
    opposite strains by least squares. The degrees of freedom are those of forces that obey the symmetry of each strained
    cell, so that programs which symmetrise and programs which do not get the same error bars.

    Parameters
    ----------
    strains : (jobs, 6)
        Green-Lagrange strains, Mandel, given frame; zero rows (the reference) are left out.
    forces : (jobs, n, 3)
        Forces on the ions at their affine places, eV/A, pulled back to the reference frame (F^T f), given frame.
    operations : Operations

    Raises
    ------
    NoTensorError
        When the strains do not determine the response.
    """
    q = rotation6(operations.cartesian)
    keep = np.linalg.norm(strains, axis=1) > 1e-9
    eta = np.einsum("gij,sj->sgi", q, strains[keep])
    turned = np.einsum("gij,snj->sgni", operations.cartesian, operations.average(forces[keep]))
    copies = np.empty_like(turned)
    for g, permutation in enumerate(operations.permutations):
        copies[:, g, permutation] = turned[:, g]
    copies -= copies.mean(axis=2, keepdims=True)
    points, fields = eta.reshape(-1, 6), copies.reshape(-1, 3 * copies.shape[2])
    groups = _equal_strains(points)
    means = {key: fields[rows].mean(axis=0) for key, rows in groups.items()}
    keys = [key for key in groups if key > _opposite(key) and _opposite(key) in groups]
    weights = np.array([2.0 / sum(1.0 / len(groups[k]) for k in (key, _opposite(key))) for key in keys])
    rows = np.array([points[groups[key][0]] for key in keys]).reshape(-1, 6)
    if np.linalg.matrix_rank(rows, tol=1e-6 * np.abs(rows).max(initial=1e-12)) < 6:
        raise NoTensorError("the strained cells do not determine the force response to strain", remedy="Use the whole set.")
    data = np.array([0.5 * (means[key] - means[_opposite(key)]) for key in keys])
    root = np.sqrt(weights)[:, None]
    solution = np.linalg.lstsq(root * rows, root * data, rcond=None)[0]
    freedom = _spare(points, [points[groups[key][0]] for key in keys], operations)
    squares = float((weights * ((data - rows @ solution) ** 2).sum(axis=1)).sum()) * 2.0 / len(operations.cartesian)
    share = len(operations.classes) / operations.permutations.shape[1]
    noise = (squares * share / freedom) ** 0.5 if freedom > 0 else None
    response = solution.reshape(6, -1, 3)[:, operations.classes]
    return ForceResponse(response.reshape(6, -1).T, noise, freedom)


def _opposite(key: tuple[float, ...]) -> tuple[float, ...]:
    return tuple(-x + 0.0 for x in key)


def _equal_strains(points: FloatArray) -> dict[tuple[float, ...], list[int]]:
    """Rows of points (m, 6) by their rounded strain."""
    groups: dict[tuple[float, ...], list[int]] = {}
    for i, row in enumerate(np.round(points / np.abs(points).max(initial=1e-12), 5) + 0.0):
        groups.setdefault(tuple(row.tolist()), []).append(i)
    return groups


def _spare(points: FloatArray, strains: list[FloatArray], operations: Operations) -> int:
    """Independent odd force data at the strains, some of them images of others, less the independent elements of the response.

    Both are dimensions of invariant spaces, counted by characters.
    """
    q, character = rotation6(operations.cartesian), _field_characters(operations)
    size = np.abs(points).max()
    left, data = list(strains), 0
    while left:
        images = q @ left[0]
        sign = (np.abs(images - left[0]).max(axis=1) < 1e-4 * size) * 1.0
        sign -= np.abs(images + left[0]).max(axis=1) < 1e-4 * size
        data += round(float((sign * character).sum() / np.abs(sign).sum()))
        orbit = np.concatenate([images, -images])
        left = [other for other in left if np.abs(orbit - other).max(axis=1).min() > 1e-4 * size]
    return data - _free_elements(operations)


def _field_characters(operations: Operations) -> FloatArray:
    """Characters (m,) of the representation on fields of vectors on the atoms, translations left out."""
    fixed = (operations.permutations == np.arange(operations.permutations.shape[1])).sum(axis=1)
    return np.asarray((fixed - 1) * np.trace(operations.cartesian, axis1=1, axis2=2))


def _free_elements(operations: Operations) -> int:
    """Independent elements of the response of such a field to strain."""
    strains = np.trace(rotation6(operations.cartesian), axis1=1, axis2=2)
    return round(float((_field_characters(operations) * strains).mean()))


def ions_answer(operations: Operations) -> bool:
    """Does symmetry allow the ions to leave their affine places under some strain?"""
    return _free_elements(operations) > 0


def internal_strain(crystal: Crystal, constants: FloatArray, response: FloatArray) -> InternalStrain:
    """Correction and displacements from force constants (3 n, 3 n), eV/A^2, and response (3 n, 6), eV/A.

    Raises
    ------
    NoTensorError
        When a mode other than a translation is not stable: the reference is no minimum.
    """
    values, vectors = np.linalg.eigh(constants)
    soft = np.abs(values) < _SOFT * values[-1]
    if (values < -_SOFT * values[-1]).any() or soft.sum() > 3:
        unstable = values[values < -_SOFT * values[-1]]
        raise NoTensorError(
            f"the reference is no minimum: {len(unstable)} unstable and {int(soft.sum())} free modes at q = 0",
            crystal.name,
            "Relax it further, or into its true structure, before asking for a stiffness.",
        )
    v = vectors[:, ~soft]
    moved = (v / values[~soft]) @ (v.T @ response)
    correction = response.T @ moved * EV_PER_A3_IN_GPA / crystal.volume
    return InternalStrain(0.5 * (correction + correction.T), moved.reshape(len(crystal.numbers), 3, 6))
