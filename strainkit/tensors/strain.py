"""Finite strain: measures, deformation gradients and the stresses that belong to them.

Lattice vectors are rows. With deformation gradient F (x' = F x) the new lattice is L F^T. Strain is the
Green-Lagrange strain eta = (F^T F - 1)/2 (Thurston 1964; Wallace, Thermodynamics of Crystals, 1972). Stress is
positive in tension.
"""

from __future__ import annotations

import numpy as np

from strainkit.errors import UsageError
from strainkit.tensors.arrays import FloatArray

__all__ = [
    "cauchy_from_pk2",
    "gradient_between",
    "gradient_from_strain",
    "green_lagrange",
    "largest_principal",
    "pk2_from_cauchy",
]


def green_lagrange(gradient: FloatArray) -> FloatArray:
    """Green-Lagrange strain (..., 3, 3) of a deformation gradient (..., 3, 3)."""
    gradient = np.asarray(gradient, dtype=float)
    return 0.5 * (np.swapaxes(gradient, -1, -2) @ gradient - np.eye(3))


def gradient_from_strain(strain: FloatArray) -> FloatArray:
    """Rotation-free deformation gradient F = (1 + 2 eta)^(1/2), (3, 3), of a Green-Lagrange strain (3, 3).

    Raises
    ------
    UsageError
        When no deformation has this strain (1 + 2 eta not positive definite).
    """
    values, vectors = np.linalg.eigh(np.eye(3) + 2.0 * np.asarray(strain, dtype=float))
    if values[0] <= 0.0:
        raise UsageError(f"a strain with principal value {0.5 * (values[0] - 1):.3g} would turn the cell inside out")
    root: FloatArray = (vectors * np.sqrt(values)) @ vectors.T
    return root


def gradient_between(start: FloatArray, end: FloatArray) -> FloatArray:
    """Deformation gradient (3, 3) that takes lattice `start` to lattice `end`, both (3, 3) with vectors as rows."""
    return np.linalg.solve(start, end).T


def largest_principal(strain: FloatArray) -> float:
    """Largest absolute principal value of a strain tensor (3, 3): the strain magnitude."""
    return float(np.abs(np.linalg.eigvalsh(strain)).max())


def pk2_from_cauchy(stress: FloatArray, gradient: FloatArray) -> FloatArray:
    """Second Piola-Kirchhoff stress S = J F^-1 sigma F^-T, (..., 3, 3), of a Cauchy stress and gradient (..., 3, 3)."""
    inverse = np.linalg.inv(gradient)
    jacobian = np.linalg.det(gradient)[..., None, None]
    return np.asarray(jacobian * (inverse @ stress @ np.swapaxes(inverse, -1, -2)))


def cauchy_from_pk2(stress: FloatArray, gradient: FloatArray) -> FloatArray:
    """Cauchy stress sigma = F S F^T / J, (..., 3, 3), of a second Piola-Kirchhoff stress and gradient (..., 3, 3)."""
    gradient = np.asarray(gradient, dtype=float)
    jacobian = np.linalg.det(gradient)[..., None, None]
    return np.asarray(gradient @ stress @ np.swapaxes(gradient, -1, -2) / jacobian)
