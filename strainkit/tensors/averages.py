"""Averages of a stiffness over all orientations: Voigt, Reuss, Hill, and the universal anisotropy index.

R. Hill, Proc. Phys. Soc. A 65, 349 (1952); S. I. Ranganathan & M. Ostoja-Starzewski, Phys. Rev. Lett. 101, 055504 (2008).
"""

from __future__ import annotations

import numpy as np

from strainkit.tensors.arrays import FloatArray

__all__ = ["AVERAGES", "SCHEMES", "anisotropy_of", "averages_of", "pugh_of"]

SCHEMES = ("voigt", "reuss", "hill")
#: rows of `averages_of`
AVERAGES = ("bulk_GPa", "shear_GPa", "young_GPa", "poisson")

_TRACE = np.array([1.0, 1.0, 1.0, 0.0, 0.0, 0.0])


def averages_of(mandel: FloatArray) -> FloatArray:
    """Bulk, shear and Young's modulus (GPa) and Poisson's ratio by Voigt, Reuss and Hill.

    Parameters
    ----------
    mandel : (..., 6, 6)
        Mandel stiffness, GPa.

    Returns
    -------
    (..., 4, 3) in the order of `AVERAGES` and `SCHEMES`.
    """
    compliance = np.linalg.inv(mandel)
    bulk_v = np.einsum("i,...ij,j->...", _TRACE, mandel, _TRACE) / 9.0
    shear_v = (np.trace(mandel, axis1=-2, axis2=-1) - 3.0 * bulk_v) / 10.0
    bulk_r = 1.0 / np.einsum("i,...ij,j->...", _TRACE, compliance, _TRACE)
    shear_r = 2.5 / (np.trace(compliance, axis1=-2, axis2=-1) - 1.0 / (3.0 * bulk_r))
    bulk = np.stack([bulk_v, bulk_r, 0.5 * (bulk_v + bulk_r)], axis=-1)
    shear = np.stack([shear_v, shear_r, 0.5 * (shear_v + shear_r)], axis=-1)
    young = 9.0 * bulk * shear / (3.0 * bulk + shear)
    poisson = (3.0 * bulk - 2.0 * shear) / (6.0 * bulk + 2.0 * shear)
    return np.stack([bulk, shear, young, poisson], axis=-2)


def anisotropy_of(mandel: FloatArray) -> FloatArray:
    """Universal anisotropy index 5 G_V/G_R + K_V/K_R - 6, (...), of a Mandel stiffness (..., 6, 6); zero when isotropic."""
    values = averages_of(mandel)
    ratio = values[..., 0] / values[..., 1]
    return np.asarray(5.0 * ratio[..., 1] + ratio[..., 0] - 6.0)


def pugh_of(mandel: FloatArray) -> FloatArray:
    """Pugh ratio K/G of the Hill averages, (...), of a Mandel stiffness (..., 6, 6) (Pugh, Phil. Mag. 45, 823, 1954)."""
    values = averages_of(mandel)
    return np.asarray(values[..., 0, 2] / values[..., 1, 2])
