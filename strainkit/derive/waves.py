"""Sound: Christoffel speeds and polarisations, and the Debye temperature from the exact angular average.

Small waves on a crystal under initial Cauchy stress t obey (C_ijkl n_j n_l + d_ik n.t.n) u_k = rho v^2 u_i with the
thermodynamic stiffness C and the density rho of the stressed crystal (Wallace, Phys. Rev. 162, 776, 1967).
The Debye temperature is hbar/k_B (6 pi^2 N/V)^(1/3) v_D with v_D^-3 the mean over directions and branches of v^-3.
"""

from __future__ import annotations

import numpy as np

from strainkit.tensors.arrays import FloatArray
from strainkit.tensors.averages import averages_of
from strainkit.tensors.sixvectors import full_tensor
from strainkit.units import HBAR_OVER_K_IN_K_S

__all__ = ["christoffel", "debye_speed", "debye_temperature", "quadrature_order", "shortcut_speed", "sound_speeds", "speed"]

#: orders of the angular quadrature, tried until two agree
_ORDERS = (8, 16, 32, 64, 128)


def christoffel(stiffness: FloatArray, stress: FloatArray, directions: FloatArray) -> FloatArray:
    """Christoffel matrices (..., k, 3, 3), GPa: rho v^2 are their eigenvalues.

    Parameters
    ----------
    stiffness : (..., 6, 6)
        Thermodynamic stiffness, Mandel, GPa.
    stress : (3, 3)
        Initial Cauchy stress, GPa, positive in tension.
    directions : (..., k, 3)
        Unit vectors along which the waves run, in the same frame; leading axes broadcast.
    """
    n = np.asarray(directions, dtype=float)
    acoustic = np.einsum("...ijkl->...jlik", full_tensor(stiffness)).reshape(*np.shape(stiffness)[:-2], 9, 9)
    dyads = (n[..., :, None] * n[..., None, :]).reshape(*n.shape[:-1], 9)
    push = dyads @ np.asarray(stress, dtype=float).ravel()
    gamma = dyads @ acoustic
    return np.asarray(gamma.reshape(*gamma.shape[:-1], 3, 3) + push[..., None, None] * np.eye(3))


def speed(modulus: FloatArray, density: float) -> FloatArray:
    """Speed in m/s of a modulus rho v^2 in GPa at a density in kg/m^3; NaN where the modulus is negative."""
    modulus = np.asarray(modulus, dtype=float)
    return np.asarray(np.sqrt(np.where(modulus >= 0, modulus, np.nan) * 1e9 / density))


def sound_speeds(
    stiffness: FloatArray, stress: FloatArray, density: float, directions: FloatArray
) -> tuple[FloatArray, FloatArray]:
    """Phase speeds (..., k, 3), m/s, slowest first, and polarisations (..., k, 3, 3), one unit vector a row."""
    values, vectors = np.linalg.eigh(christoffel(stiffness, stress, directions))
    return speed(values, density), np.swapaxes(vectors, -1, -2)


def _quadrature(order: int) -> tuple[FloatArray, FloatArray]:
    """Directions (k, 3) over half the sphere and weights (k,) of sum one: Gauss-Legendre in z, equal steps in azimuth."""
    z, weight = np.polynomial.legendre.leggauss(order)
    angle = np.pi * (np.arange(order) + 0.5) / order
    z, angle = (grid.ravel() for grid in np.meshgrid(z, angle, indexing="ij"))
    radius = np.sqrt(1.0 - z**2)
    directions = np.column_stack([radius * np.cos(angle), radius * np.sin(angle), z])
    return directions, np.repeat(0.5 * weight / order, order)


def quadrature_order(stiffness: FloatArray, stress: FloatArray, agreement: float = 1e-7) -> int:
    """Order of the angular quadrature at which v_D of a stiffness (6, 6) has settled to a relative `agreement`.

    The sum over branches is the trace of a power of the Christoffel matrix, smooth in the direction, so the quadrature
    converges geometrically: its order is doubled until two agree.
    """
    before = np.nan
    for order in _ORDERS:
        result = float(debye_speed(stiffness, stress, 1.0, order))
        if np.isnan(result) or abs(result - before) < agreement * result:
            break
        before = result
    return order


def debye_speed(stiffness: FloatArray, stress: FloatArray, density: float, order: int) -> FloatArray:
    """Debye speed v_D (...), m/s, of stiffnesses (..., 6, 6): (mean of v^-3 over directions and branches)^(-1/3).

    The mean is taken with order^2 directions (`quadrature_order`). NaN when a wave has no real speed.
    """
    directions, weights = _quadrature(order)
    values = np.linalg.eigvalsh(christoffel(stiffness, stress, directions))
    slowness = (np.where(values > 0, values, np.nan) ** -1.5).sum(axis=-1) @ weights / 3.0
    return speed(slowness ** (-2.0 / 3.0), density)


def debye_temperature(debye_speed: FloatArray, number_density: float) -> FloatArray:
    """Debye temperature (...), K, of Debye speeds in m/s for a number of atoms, or of molecules, per cubic angstrom."""
    wavenumber = (6.0 * np.pi**2 * number_density * 1e30) ** (1.0 / 3.0)
    return np.asarray(HBAR_OVER_K_IN_K_S * wavenumber * np.asarray(debye_speed))


def shortcut_speed(stiffness: FloatArray, density: float) -> FloatArray:
    """Anderson's shortcut to v_D (...), m/s: the same mean for the two speeds of the Hill averages.

    O. L. Anderson, J. Phys. Chem. Solids 24, 909 (1963). Above the exact average, by 2 to 5 % in anisotropic crystals.
    """
    bulk, shear = averages_of(stiffness)[..., 0, 2], averages_of(stiffness)[..., 1, 2]
    slow, fast = speed(shear, density), speed(bulk + 4.0 / 3.0 * shear, density)
    return np.asarray(((2.0 / slow**3 + 1.0 / fast**3) / 3.0) ** (-1.0 / 3.0))
