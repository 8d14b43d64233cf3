"""What a group of rotations leaves unchanged: invariant 6-vectors and stiffness matrices.

The subspaces come from averaging over the group in whatever Cartesian frame the rotations are given, never from a
table that assumes a setting.
"""

from __future__ import annotations

import numpy as np

from strainkit.tensors.arrays import BoolArray, FloatArray
from strainkit.tensors.rotations import rotation6

__all__ = ["invariant_matrices", "invariant_vectors", "stabiliser"]


def _range_of_projector(projector: FloatArray) -> FloatArray:
    """Orthonormal columns spanning the range of a (nearly exact) symmetric projector."""
    values, vectors = np.linalg.eigh(0.5 * (projector + projector.T))
    return np.ascontiguousarray(vectors[:, values > 0.5])


def invariant_vectors(rotations: FloatArray, signs: FloatArray | None = None) -> FloatArray:
    """Orthonormal basis (6, d) of the Mandel vectors v with Q_g v = sign_g v for every rotation g of a group.

    Parameters
    ----------
    rotations : (m, 3, 3)
        All operations of the group, improper ones given by their proper part.
    signs : (m,), optional
        +1 or -1 per operation (a one-dimensional representation); all +1 when left out.
    """
    q = rotation6(rotations)
    if signs is not None:
        q = q * np.asarray(signs, dtype=float)[:, None, None]
    return _range_of_projector(q.mean(axis=0))


def invariant_matrices(rotations: FloatArray) -> FloatArray:
    """Orthonormal basis (n, 6, 6) of the symmetric Mandel matrices that every rotation (m, 3, 3) leaves unchanged."""
    q = rotation6(rotations)
    rows, columns = np.triu_indices(6)
    weight = np.where(rows == columns, 1.0, 2.0**0.5)
    basis = np.zeros((21, 6, 6))
    basis[np.arange(21), rows, columns] = 1.0 / weight
    basis[np.arange(21), columns, rows] = 1.0 / weight
    averaged = np.einsum("gij,ajk,glk->ail", q, basis, q, optimize=True) / len(q)
    projector = np.einsum("aij,bij->ab", averaged, basis)
    return np.asarray(np.einsum("ab,aij->bij", _range_of_projector(projector), basis))


def stabiliser(rotations: FloatArray, vector: FloatArray, sign: int = 1, atol: float = 1e-6) -> BoolArray:
    """Which rotations (m, 3, 3) map the Mandel vector (6,) to itself (sign +1) or to its negative (sign -1): (m,) bool.

    `atol` is relative to the length of the vector.
    """
    turned = rotation6(rotations) @ vector
    close: BoolArray = np.abs(turned - sign * vector).max(axis=-1) <= atol * np.linalg.norm(vector)
    return close
