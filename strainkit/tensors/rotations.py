"""Rotations of 6-vectors and 6x6 matrices in the Mandel form, and the polar decomposition."""

from __future__ import annotations

import numpy as np

from strainkit.tensors.arrays import FloatArray
from strainkit.tensors.sixvectors import from_mandel, to_mandel

__all__ = ["polar", "rotate_matrix", "rotation6"]


def rotation6(rotation: FloatArray) -> FloatArray:
    """Matrix (..., 6, 6) that takes Mandel vectors to those of R t R^T, for R (..., 3, 3); orthogonal where R is."""
    rotation = np.asarray(rotation, dtype=float)[..., None, :, :]
    turned = rotation @ from_mandel(np.eye(6)) @ np.swapaxes(rotation, -1, -2)
    return np.swapaxes(to_mandel(turned), -1, -2)


def rotate_matrix(rotation: FloatArray, mandel: FloatArray) -> FloatArray:
    """Mandel 6x6 matrix (..., 6, 6) seen after the active rotation R (3, 3): Q C Q^T."""
    q = rotation6(rotation)
    return np.asarray(q @ np.asarray(mandel, dtype=float) @ np.swapaxes(q, -1, -2))


def polar(gradient: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Rotation R and right stretch U with F = R U, for F of shape (3, 3) and positive determinant."""
    u, s, vt = np.linalg.svd(gradient)
    rotation = u @ vt
    return rotation, vt.T @ np.diag(s) @ vt
