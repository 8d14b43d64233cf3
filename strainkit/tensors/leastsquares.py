"""Ordinary least squares that knows which parameters the rows determine."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from strainkit.tensors.arrays import BoolArray, FloatArray

__all__ = ["LeastSquares", "factorise"]

#: singular values of the column-scaled matrix below this count as zero
_SINGULAR = 1e-7
#: columns this much shorter than the longest are rounding errors
_NEGLIGIBLE = 1e-9


@dataclass(frozen=True)
class LeastSquares:
    """A factorised design matrix (rows, parameters).

    Attributes
    ----------
    rank : int
    determined : (parameters,) bool
        Whether the rows fix the parameter.
    inverse : (parameters, parameters)
        (X^T X)^-1: the covariance for unit noise; NaN where undetermined.
    solver : (parameters, rows)
        Pseudo-inverse; undetermined parameters come out with the smallest scaled norm.
    """

    rank: int
    determined: BoolArray
    inverse: FloatArray
    solver: FloatArray

    def determines(self, combination: FloatArray, tolerance: float = 1e-7) -> bool:
        """Do the rows fix this linear combination (parameters,) of parameters (all parts of which must be known)?"""
        return bool(self.determined[np.abs(combination) > tolerance].all())


def factorise(matrix: FloatArray) -> LeastSquares:
    """Singular value decomposition of the matrix with its columns scaled to unit length."""
    sizes = np.linalg.norm(matrix, axis=0)
    real = sizes > _NEGLIGIBLE * max(sizes.max(initial=0.0), 1e-300)
    scale = np.where(real, sizes, 1.0)
    u, s, vt = np.linalg.svd(np.where(real, matrix / scale, 0.0), full_matrices=False)
    keep = s > _SINGULAR
    v = vt[keep].T
    determined = (v**2).sum(axis=1) > 1.0 - 1e-10
    inverse = (v / s[keep] ** 2) @ v.T / np.outer(scale, scale)
    return LeastSquares(
        rank=int(keep.sum()),
        determined=determined,
        inverse=np.where(np.outer(determined, determined), inverse, np.nan),
        solver=(v / s[keep]) @ u[:, keep].T / scale[:, None],
    )
