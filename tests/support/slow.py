"""Slow, obvious elasticity with four indices, from the definitions (J. F. Nye, Physical Properties of Crystals, 1957)."""

from __future__ import annotations

import numpy as np


def four_indices(voigt_stiffness: np.ndarray) -> np.ndarray:
    """Compliance (3, 3, 3, 3) of a Voigt stiffness (6, 6): S_mn times 1, 1/2, 1/4 for 0, 1, 2 shear indices."""
    s = np.linalg.inv(voigt_stiffness)
    voigt = {(0, 0): 0, (1, 1): 1, (2, 2): 2, (1, 2): 3, (0, 2): 4, (0, 1): 5}
    out = np.zeros((3, 3, 3, 3))
    for i, j, k, m in np.ndindex(3, 3, 3, 3):
        a, b = voigt[min(i, j), max(i, j)], voigt[min(k, m), max(k, m)]
        out[i, j, k, m] = s[a, b] * 0.5 ** ((a > 2) + (b > 2))
    return out


def young(s: np.ndarray, n: np.ndarray) -> float:
    """Young's modulus along n."""
    return 1.0 / np.einsum("ijkl,i,j,k,l", s, n, n, n, n)


def compressibility(s: np.ndarray, n: np.ndarray) -> float:
    """Linear compressibility along n."""
    return float(np.einsum("ijkk,i,j", s, n, n))


def shear(s: np.ndarray, n: np.ndarray, m: np.ndarray) -> float:
    """Shear modulus on the plane with normal n along m."""
    return 0.25 / np.einsum("ijkl,i,j,k,l", s, n, m, n, m)


def poisson(s: np.ndarray, n: np.ndarray, m: np.ndarray) -> float:
    """Poisson's ratio for tension along n and contraction along m."""
    return -young(s, n) * np.einsum("ijkl,i,j,k,l", s, n, n, m, m)
