"""Stress-strain coefficients of a crystal under initial stress."""

from __future__ import annotations

from functools import cache

import numpy as np

from strainkit.tensors.arrays import FloatArray
from strainkit.tensors.sixvectors import from_mandel, matrix_from_full, to_mandel

__all__ = ["stress_strain_coefficients"]


def stress_strain_coefficients(mandel: FloatArray, stress: FloatArray) -> FloatArray:
    """Coefficients B (6, 6), Mandel, GPa, that tie the change of Cauchy stress to a small rotation-free strain.

    B_ijkl = C_ijkl + (d_ik t_jl + d_jk t_il + d_il t_jk + d_jl t_ik - 2 d_kl t_ij) / 2 (Wallace, Phys. Rev. 162, 776,
    1967; Barron & Klein, Proc. Phys. Soc. 85, 523, 1965). Not symmetric unless t is a pressure.

    Parameters
    ----------
    mandel : (6, 6)
        Thermodynamic stiffness C at the reference state, GPa.
    stress : (3, 3)
        Initial Cauchy stress t, GPa, positive in tension.
    """
    part = np.einsum("n,nij->ij", to_mandel(stress), _parts())
    return np.asarray(np.asarray(mandel, dtype=float) + part)


@cache
def _parts() -> FloatArray:
    """What each Mandel component of t adds, (6, 6, 6)."""
    return np.array([_part(t) for t in from_mandel(np.eye(6))])


def _part(t: FloatArray) -> FloatArray:
    d = np.eye(3)
    terms = (
        np.einsum("ik,jl->ijkl", d, t)
        + np.einsum("jk,il->ijkl", d, t)
        + np.einsum("il,jk->ijkl", d, t)
        + np.einsum("jl,ik->ijkl", d, t)
        - 2.0 * np.einsum("kl,ij->ijkl", d, t)
    )
    return matrix_from_full(0.5 * terms)
