"""Moduli in a direction, on arrays of directions and of tensors at once.

E(n) = 1 / (S_ijkl n_i n_j n_k n_l), beta(n) = S_ijkk n_i n_j, G(n, m) = 1 / (4 S_ijkl n_i m_j n_k m_l) and
nu(n, m) = -E(n) S_ijkl n_i n_j m_k m_l (J. F. Nye, Physical Properties of Crystals, 1957). Over all m at right angles to
a fixed n, 1/G and nu are quadratic forms on a plane, so their extremes are eigenvalues of 2x2 matrices.

Every function takes Mandel compliances (..., 6, 6) in 1/GPa and unit vectors (..., k, 3) in the same frame, with leading
axes that broadcast (one tensor and k directions; s tensors and the same k directions; s tensors with k directions each),
and returns (..., k).
"""

from __future__ import annotations

import numpy as np

from strainkit.tensors.arrays import FloatArray
from strainkit.tensors.sixvectors import to_mandel

__all__ = [
    "hemisphere",
    "linear_compressibility",
    "poisson",
    "poisson_range",
    "shear",
    "shear_range",
    "tangents",
    "young",
]

_TRACE = np.array([1.0, 1.0, 1.0, 0.0, 0.0, 0.0])


def hemisphere(count: int) -> FloatArray:
    """Unit vectors (count, 3) spread evenly over half the sphere (Fibonacci lattice), one of each opposite pair."""
    z = (np.arange(count) + 0.5) / count
    turn = np.pi * (3.0 - 5.0**0.5) * np.arange(count)
    radius = np.sqrt(1.0 - z**2)
    return np.column_stack([radius * np.cos(turn), radius * np.sin(turn), z])


def tangents(directions: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Two unit vectors (..., 3) each, at right angles to unit vectors (..., 3) and to each other, right-handed with them."""
    n = np.asarray(directions, dtype=float)
    least = np.eye(3)[np.argmin(np.abs(n), axis=-1)]
    first = np.cross(n, least)
    first = first / np.linalg.norm(first, axis=-1, keepdims=True)
    return first, np.cross(n, first)


def _pair(first: FloatArray, second: FloatArray) -> FloatArray:
    """Mandel 6-vector (..., 6) of the symmetric part of a dyad of vectors (..., 3)."""
    return to_mandel(first[..., :, None] * second[..., None, :])


def _form(left: FloatArray, matrix: FloatArray, right: FloatArray) -> FloatArray:
    """left . matrix . right over the last axes: (..., k) from (..., k, 6), (..., 6, 6), (..., k, 6)."""
    return np.asarray(((left @ matrix) * right).sum(axis=-1))


def young(compliance: FloatArray, directions: FloatArray) -> FloatArray:
    """Young's modulus E(n) for tension along n, GPa."""
    along = _pair(directions, directions)
    return np.asarray(1.0 / _form(along, compliance, along))


def linear_compressibility(compliance: FloatArray, directions: FloatArray) -> FloatArray:
    """Linear compressibility beta(n) = -d ln(length along n)/dp, 1/GPa."""
    return np.asarray((_pair(directions, directions) * (compliance @ _TRACE)[..., None, :]).sum(axis=-1))


def shear(compliance: FloatArray, normals: FloatArray, sides: FloatArray) -> FloatArray:
    """Shear modulus G(n, m) on the plane with normal n along the direction m in it, GPa; G(n, m) = G(m, n)."""
    pair = _pair(normals, sides)
    return np.asarray(0.25 / _form(pair, compliance, pair))


def poisson(compliance: FloatArray, directions: FloatArray, sides: FloatArray) -> FloatArray:
    """Poisson's ratio nu(n, m): contraction along m over extension along n under tension along n."""
    along = _pair(directions, directions)
    return np.asarray(-_form(along, compliance, _pair(sides, sides)) / _form(along, compliance, along))


def shear_range(compliance: FloatArray, normals: FloatArray) -> tuple[FloatArray, FloatArray, FloatArray, FloatArray]:
    """Smallest and largest shear modulus on planes with normals n, GPa, and the directions (..., k, 3) in which they act.

    Returns
    -------
    smallest, largest, direction of the smallest, direction of the largest
    """
    first, second = tangents(normals)
    one, two = _pair(normals, first), _pair(normals, second)
    low, high, at_low, at_high = _two_by_two(
        _form(one, compliance, one), _form(one, compliance, two), _form(two, compliance, two), first, second
    )
    return 0.25 / high, 0.25 / low, at_high, at_low


def poisson_range(compliance: FloatArray, directions: FloatArray) -> tuple[FloatArray, FloatArray, FloatArray, FloatArray]:
    """Smallest and largest Poisson's ratio under tension along n, and the directions (..., k, 3) of the contraction.

    Returns
    -------
    smallest, largest, direction of the smallest, direction of the largest
    """
    first, second = tangents(directions)
    along = _pair(directions, directions)
    strain = along @ compliance
    one, both, two = ((strain * _pair(*t)).sum(axis=-1) for t in ((first, first), (first, second), (second, second)))
    low, high, at_low, at_high = _two_by_two(one, both, two, first, second)
    inverse = 1.0 / (strain * along).sum(axis=-1)
    return -high * inverse, -low * inverse, at_high, at_low


def _two_by_two(
    a: FloatArray, b: FloatArray, c: FloatArray, first: FloatArray, second: FloatArray
) -> tuple[FloatArray, FloatArray, FloatArray, FloatArray]:
    """Eigenvalues of [[a, b], [b, c]], the smaller first, and their eigenvectors in the basis of first and second."""
    mean, half = 0.5 * (a + c), 0.5 * (a - c)
    radius = np.hypot(half, b)
    angle = 0.5 * np.arctan2(b, half)[..., None]
    high = np.cos(angle) * first + np.sin(angle) * second
    low = np.cos(angle) * second - np.sin(angle) * first
    return mean - radius, mean + radius, low, high
