"""Ordinary least squares that knows which parameters the rows determine."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from strainkit.tensors.arrays import BoolArray, FloatArray

__all__ = ["LeastSquares", "factorise"]

#: singular values of the column-scaled matrix below this count as zero
_SINGULAR = 1e-4
#: columns this much shorter than the longest are rounding errors
_NEGLIGIBLE = 1e-9
#: a parameter with more than this share in what the rows do not see is not determined
_UNKNOWN = 1e-8


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


def factorise(matrix: FloatArray) -> LeastSquares:
    """Singular value decomposition of the matrix with its columns scaled to unit length."""
    sizes = np.linalg.norm(matrix, axis=0)
    real = sizes > _NEGLIGIBLE * max(sizes.max(initial=0.0), 1e-300)
    scale = np.where(real, sizes, 1.0)
    u, s, vt = np.linalg.svd(np.where(real, matrix / scale, 0.0), full_matrices=len(matrix) < matrix.shape[1])
    keep = np.zeros(len(vt), dtype=bool)
    keep[: len(s)] = s > _SINGULAR
    v = vt[keep].T
    determined = np.linalg.norm(vt[~keep], axis=0) < _UNKNOWN
    s = s[keep[: len(s)]]
    inverse = (v / s**2) @ v.T / np.outer(scale, scale)
    return LeastSquares(
        rank=int(keep.sum()),
        determined=determined,
        inverse=np.where(np.outer(determined, determined), inverse, np.nan),
        solver=(v / s) @ u[:, : len(s)].T / scale[:, None],
    )
