"""Symmetric 3x3 tensors as 6-vectors, and fourth-rank tensors as 6x6 matrices.

Order is xx yy zz yz xz xy throughout. Voigt strains carry engineering shear (twice the tensor component), Voigt
stresses carry no factor. The Mandel form (shear times sqrt 2, for strain and stress alike) keeps scalar products, so
rotations are orthogonal 6x6 matrices (Mehrabadi & Cowin, Q. J. Mech. Appl. Math. 43, 15, 1990); strainkit computes in
it and converts at the edges. Leading axes of every argument are free.
"""

from __future__ import annotations

import numpy as np

from strainkit.tensors.arrays import FloatArray

__all__ = [
    "COMPONENTS",
    "compliance_to_voigt",
    "from_mandel",
    "full_tensor",
    "matrix_from_full",
    "stiffness_from_voigt",
    "stiffness_to_voigt",
    "strain_from_voigt",
    "strain_to_voigt",
    "stress_from_voigt",
    "stress_to_voigt",
    "to_mandel",
]

#: names of the six components, in the order used everywhere
COMPONENTS = ("xx", "yy", "zz", "yz", "xz", "xy")

_I = np.array([0, 1, 2, 1, 0, 0])
_J = np.array([0, 1, 2, 2, 2, 1])
#: places of the six components in the nine of a flat tensor, of their transposes, and of the nine in the six
_FLAT, _TRANSPOSED = 3 * _I + _J, 3 * _J + _I
_NINE = np.array([0, 5, 4, 5, 1, 3, 4, 3, 2])
_W = np.array([1.0, 1.0, 1.0, 2.0**0.5, 2.0**0.5, 2.0**0.5])
_WW = np.outer(_W, _W)


def to_mandel(tensor: FloatArray) -> FloatArray:
    """Mandel 6-vector (..., 6) of a symmetric tensor (..., 3, 3); off-diagonal pairs are averaged."""
    tensor = np.asarray(tensor, dtype=float)
    flat = tensor.reshape(*tensor.shape[:-2], 9)
    return np.asarray(0.5 * (flat.take(_FLAT, axis=-1) + flat.take(_TRANSPOSED, axis=-1)) * _W)


def from_mandel(vector: FloatArray) -> FloatArray:
    """Symmetric tensor (..., 3, 3) of a Mandel 6-vector (..., 6)."""
    vector = np.asarray(vector, dtype=float) / _W
    return np.asarray(vector.take(_NINE, axis=-1).reshape(*vector.shape[:-1], 3, 3))


def stress_to_voigt(tensor: FloatArray) -> FloatArray:
    """Voigt stress (..., 6), no shear factor, of a stress tensor (..., 3, 3)."""
    return np.asarray(to_mandel(tensor) / _W)


def stress_from_voigt(voigt: FloatArray) -> FloatArray:
    """Stress tensor (..., 3, 3) of a Voigt stress (..., 6) without shear factor."""
    return from_mandel(np.asarray(voigt, dtype=float) * _W)


def strain_to_voigt(tensor: FloatArray) -> FloatArray:
    """Voigt strain (..., 6) with engineering shear of a strain tensor (..., 3, 3)."""
    return np.asarray(to_mandel(tensor) * _W)


def strain_from_voigt(voigt: FloatArray) -> FloatArray:
    """Strain tensor (..., 3, 3) of a Voigt strain (..., 6) with engineering shear."""
    return from_mandel(np.asarray(voigt, dtype=float) / _W)


def stiffness_to_voigt(mandel: FloatArray) -> FloatArray:
    """Voigt stiffness (..., 6, 6) of a Mandel stiffness (..., 6, 6), same unit."""
    return np.asarray(mandel, dtype=float) / _WW


def stiffness_from_voigt(voigt: FloatArray) -> FloatArray:
    """Mandel stiffness (..., 6, 6) of a Voigt stiffness (..., 6, 6), same unit."""
    return np.asarray(voigt, dtype=float) * _WW


def compliance_to_voigt(mandel: FloatArray) -> FloatArray:
    """Voigt compliance (..., 6, 6) of a Mandel compliance (..., 6, 6): the inverse of the Voigt stiffness."""
    return np.asarray(mandel, dtype=float) * _WW


def full_tensor(mandel: FloatArray) -> FloatArray:
    """Fourth-rank tensor (..., 3, 3, 3, 3) of a Mandel 6x6 matrix (..., 6, 6)."""
    once = from_mandel(np.asarray(mandel, dtype=float))
    return np.moveaxis(from_mandel(np.moveaxis(once, -3, -1)), (-2, -1), (-4, -3))


def matrix_from_full(tensor: FloatArray) -> FloatArray:
    """Mandel 6x6 matrix (..., 6, 6) of a fourth-rank tensor (..., 3, 3, 3, 3) with both minor symmetries."""
    once = to_mandel(tensor)
    return np.moveaxis(to_mandel(np.moveaxis(once, -1, -3)), -1, -2)
