"""The A-criterion: how well a set of unit strains fixes the constants, and the best that any set can do.

At one magnitude the odd part of a pair measures C:e, so the information on the constants (coordinates x_a on orthonormal
invariant matrices B_a) is a sum of A_e A_e^T over jobs, with A_e = (B_a e)_a. The trace of its inverse is the trace of the
covariance of the 6x6 Mandel stiffness: the A-criterion, the same in every frame.
"""

from __future__ import annotations

import numpy as np

from strainkit.tensors.arrays import FloatArray
from strainkit.tensors.sixvectors import from_mandel, to_mandel

__all__ = ["a_criterion", "best_continuous", "information", "trace_of_inverse"]


def information(units: FloatArray, invariants: FloatArray) -> FloatArray:
    """Information matrices (k, n, n) of one job each for unit strains (k, 6), Mandel, and unit noise and magnitude."""
    a = np.einsum("aij,kj->kai", invariants, units)
    return np.asarray(a @ np.swapaxes(a, 1, 2))


def trace_of_inverse(matrices: FloatArray) -> FloatArray:
    """Trace of the inverse of symmetric matrices (..., n, n); infinite for singular ones."""
    values = np.linalg.eigvalsh(matrices)
    good = values[..., 0] > 1e-9 * values[..., -1]
    with np.errstate(divide="ignore", invalid="ignore"):
        return np.where(good, (1.0 / values).sum(-1), np.inf)


def a_criterion(units: FloatArray, invariants: FloatArray, jobs: FloatArray | None = None) -> float:
    """Trace of the covariance of the Mandel stiffness for unit noise and unit magnitude; infinite if undetermined.

    Parameters
    ----------
    units : (k, 6)
        Unit strains, Mandel.
    invariants : (n, 6, 6)
        Orthonormal invariant matrices in the same frame.
    jobs : (k,), optional
        Jobs per shape; two (a pair) when left out.
    """
    weights = np.full(len(units), 2.0) if jobs is None else np.asarray(jobs, dtype=float)
    return float(trace_of_inverse(np.einsum("k,kab->ab", weights, information(units, invariants))))


def best_continuous(invariants: FloatArray, count: int, starts: int = 6) -> tuple[float, FloatArray]:
    """Smallest A-criterion over all sets of `count` pairs with principal strains in [-1, 1].

    Quasi-Newton runs over a rotation and three bounded principal values a strain; every start ends in the same value in
    practice. Returns the criterion and the unit strains (count, 6), Mandel.
    """
    from scipy.optimize import minimize

    rng = np.random.default_rng(0)
    best: tuple[float, FloatArray] = (np.inf, np.zeros((count, 6)))
    bounds = ([(None, None)] * 4 + [(-1.0, 1.0)] * 3) * count
    for _ in range(starts):
        start = rng.normal(size=(count, 7))
        start[:, 4:] = np.clip(start[:, 4:], -1.0, 1.0)
        end = minimize(_objective, start.ravel(), (invariants,), method="L-BFGS-B", jac=True, bounds=bounds)
        if end.fun < best[0]:
            best = (float(end.fun), _strains(end.x.reshape(count, 7))[0])
    return best


def _strains(parameters: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Strains (k, 6) and rotations (k, 3, 3) from a quaternion and three principal values each, (k, 7)."""
    q = parameters[:, :4] / np.linalg.norm(parameters[:, :4], axis=1)[:, None]
    w, v = q[:, 0], q[:, 1:]
    cross = np.cross(np.eye(3)[None], v[:, None, :])
    rotations = (
        (w**2 - (v**2).sum(1))[:, None, None] * np.eye(3) + 2.0 * v[:, :, None] * v[:, None, :] + 2.0 * w[:, None, None] * cross
    )
    strains = np.einsum("kij,kj,klj->kil", rotations, parameters[:, 4:], rotations)
    return to_mandel(strains), rotations


def _objective(parameters: FloatArray, invariants: FloatArray) -> tuple[float, FloatArray]:
    """A-criterion of pairs and its gradient."""
    p = parameters.reshape(-1, 7)
    units, rotations = _strains(p)
    a = np.einsum("aij,kj->kai", invariants, units)
    values, vectors = np.linalg.eigh(2.0 * np.einsum("kai,kbi->ab", a, a))
    values = np.maximum(values, 1e-9)
    inverse_squared = (vectors / values**2) @ vectors.T
    slope = from_mandel(-4.0 * np.einsum("ab,kbi,aij->kj", inverse_squared, a, invariants))
    gradient = np.empty_like(p)
    gradient[:, 4:] = np.einsum("kij,kil,klj->kj", rotations, slope, rotations)
    # a turn by the small vector o changes e by [o]x e - e [o]x, and the quaternion q by (0, o) q / 2
    torque = 2.0 * (slope @ from_mandel(units))
    axial = np.stack([torque[:, i, j] - torque[:, j, i] for i, j in ((2, 1), (0, 2), (1, 0))], axis=1)
    length = np.linalg.norm(p[:, :4], axis=1)[:, None]
    q = p[:, :4] / length
    w, v = q[:, :1], q[:, 1:]
    gradient[:, 0] = -2.0 * (axial * v).sum(axis=1) / length[:, 0]
    gradient[:, 1:4] = 2.0 * (w * axial + np.cross(axial, v)) / length
    return float((1.0 / values).sum()), gradient.ravel()
