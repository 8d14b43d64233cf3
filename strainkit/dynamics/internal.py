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

__all__ = ["InternalStrain", "force_response", "internal_strain"]

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


def force_response(strains: FloatArray, forces: FloatArray, operations: Operations) -> tuple[FloatArray, float]:
    """Force response L to strain from a few strained cells and the crystal's symmetry.

    Every calculation is copied by all operations, the odd part of opposite strains is taken, and L follows by least squares.

    Parameters
    ----------
    strains : (jobs, 6)
        Green-Lagrange strains, Mandel, given frame; zero rows (the reference) are left out.
    forces : (jobs, n, 3)
        Forces on the ions at their affine places, eV/A, given frame.
    operations : Operations

    Returns
    -------
    response : (3 n, 6)
        eV/A per unit Mandel strain.
    noise : float
        Root mean square of what is left over, eV/A.

    Raises
    ------
    NoTensorError
        When the strains do not determine the response.
    """
    q = rotation6(operations.cartesian)
    keep = np.linalg.norm(strains, axis=1) > 1e-9
    eta = np.einsum("gij,sj->sgi", q, strains[keep]).reshape(-1, 6)
    turned = np.einsum("gij,snj->sgni", operations.cartesian, operations.average(forces[keep]))
    copies = np.empty_like(turned)
    for g, permutation in enumerate(operations.permutations):
        copies[:, g, permutation] = turned[:, g]
    copies = copies.reshape(len(eta), -1)
    rows, data = _odd_parts(eta, copies)
    if np.linalg.matrix_rank(rows, tol=1e-6 * np.abs(rows).max(initial=1e-12)) < 6:
        raise NoTensorError("the strained cells do not determine the force response to strain", remedy="Use the whole set.")
    solution = np.linalg.lstsq(rows, data, rcond=None)[0]
    left = data - rows @ solution
    response = solution.reshape(6, -1, 3)[:, operations.classes]
    return response.reshape(6, -1).T, float(np.sqrt((left**2).mean()))


def _odd_parts(eta: FloatArray, values: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Strains (k, 6) and odd parts (k, ...) of values at opposite strains; strains without an opposite are left out."""
    size = np.abs(eta).max()
    keys = {tuple(np.round(row / size, 5) + 0.0): i for i, row in enumerate(eta)}
    rows, data, seen = [], [], set()
    for key, i in keys.items():
        other = tuple(-x + 0.0 for x in key)
        if other in keys and key not in seen:
            seen |= {key, other}
            rows.append(eta[i])
            data.append(0.5 * (values[i] - values[keys[other]]))
    return np.array(rows).reshape(-1, 6), np.array(data).reshape(len(rows), -1)


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
