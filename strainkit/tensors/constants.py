"""Independent constants by name: C11, C12, ... as coordinates of an invariant subspace."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from strainkit.tensors.arrays import FloatArray
from strainkit.tensors.invariants import invariant_matrices
from strainkit.tensors.rotations import rotate_matrix
from strainkit.tensors.sixvectors import stiffness_to_voigt

__all__ = ["ALL_NAMES", "ConstantBasis", "basis_of_group", "constant_basis"]

#: the 21 names of the upper triangle, row by row
ALL_NAMES = tuple(f"C{i + 1}{j + 1}" for i in range(6) for j in range(i, 6))


@dataclass(frozen=True)
class ConstantBasis:
    """Named independent constants of one crystal.

    Attributes
    ----------
    names : tuple of str
        "C11", "C12", ...: Voigt constants in the naming frame (IEEE axes).
    matrices : (n, 6, 6)
        Mandel matrices in the given frame; the stiffness is sum_a value_a matrices_a, values in GPa.
    """

    names: tuple[str, ...]
    matrices: FloatArray

    def stiffness(self, values: FloatArray) -> FloatArray:
        """Mandel stiffness (..., 6, 6) in the given frame from the constants (..., n)."""
        return np.asarray(np.tensordot(np.asarray(values, dtype=float), self.matrices, axes=1))

    def values(self, mandel: FloatArray) -> FloatArray:
        """Constants (n,) that come closest to a Mandel stiffness (6, 6) in the given frame (its symmetric projection)."""
        flat = self.matrices.reshape(len(self.names), 36).T
        return np.asarray(np.linalg.lstsq(flat, np.asarray(mandel, dtype=float).ravel(), rcond=None)[0])


def constant_basis(invariants: FloatArray, naming_rotation: FloatArray) -> ConstantBasis:
    """Choose independent constants for an invariant subspace: the first of C11, C12, ..., C66 that are independent.

    Parameters
    ----------
    invariants : (n, 6, 6)
        Basis of the invariant Mandel matrices in the given frame.
    naming_rotation : (3, 3)
        Rows are the axes of the naming frame in the given frame (v_naming = R v_given).
    """
    voigt = stiffness_to_voigt(rotate_matrix(naming_rotation, invariants))
    entries = np.array([voigt[:, i, j] for i in range(6) for j in range(i, 6)])
    chosen: list[int] = []
    span = np.zeros((0, len(invariants)))
    for row, entry in enumerate(entries):
        rest = entry - span.T @ (span @ entry)
        if np.linalg.norm(rest) > 1e-6:
            chosen.append(row)
            span = np.vstack([span, rest / np.linalg.norm(rest)])
    matrices = np.tensordot(np.linalg.inv(entries[chosen]).T, invariants, axes=1)
    return ConstantBasis(tuple(ALL_NAMES[row] for row in chosen), matrices)


def basis_of_group(rotations: FloatArray, naming_rotation: FloatArray) -> ConstantBasis:
    """`constant_basis` for a Laue group (m, 3, 3), given frame, kept for the groups that look alike in the naming axes."""
    group = naming_rotation @ rotations @ naming_rotation.T
    # what is kept follows from the key alone: it must not matter which crystal of a class came first
    rounded = np.round(group, 12) + 0.0
    key = rounded.tobytes()
    if key not in _KEPT:
        if len(_KEPT) >= _MOST_KEPT:
            _KEPT.clear()
        u, _, vt = np.linalg.svd(rounded)
        _KEPT[key] = constant_basis(invariant_matrices(u @ vt), np.eye(3))
    named = _KEPT[key]
    return ConstantBasis(named.names, rotate_matrix(naming_rotation.T, named.matrices))


#: group in naming axes -> basis in them
_KEPT: dict[bytes, ConstantBasis] = {}
_MOST_KEPT = 256
