"""The A-optimal strain set of the fewest jobs: which unit strains fix every constant with the smallest errors.

At one magnitude the odd part of a pair measures C:e, so the information on the constants (coordinates x_a on orthonormal
invariant matrices B_a) is a sum of A_e A_e^T with A_e = (B_a e)_a. The trace of its inverse is the trace of the covariance
of the 6x6 Mandel stiffness: the A-criterion, the same in every frame. Strains are bounded by their largest principal
value, and the best ones have all three principal values at the bound: e = 1 - 2 n n^T, a stretch with compression
along n. The search takes n from directions of small integers in the crystal's standard axes as long as that costs
less than `TIDY_COST` against the best continuous set, which a few quasi-Newton runs find.
"""

from __future__ import annotations

from functools import lru_cache
from itertools import product
from math import gcd

import numpy as np

from strainkit.design.model import Shape
from strainkit.tensors.arrays import FloatArray, IntArray
from strainkit.tensors.invariants import invariant_matrices, invariant_vectors
from strainkit.tensors.sixvectors import from_mandel, to_mandel

__all__ = ["a_criterion", "best_continuous", "fewest_pairs", "reflection_strains", "smallest_directions"]

#: how much larger the criterion of a tidy set may be than that of the best continuous one
TIDY_COST = 0.02
#: spare degrees of freedom that a set should keep to estimate its own noise
SPARE = 3
_STARTS = 6


def a_criterion(units: FloatArray, invariants: FloatArray, weights: FloatArray | None = None) -> float:
    """Trace of the covariance of the Mandel stiffness for unit noise and unit magnitude; infinite if undetermined.

    Parameters
    ----------
    units : (k, 6)
        Unit strains, Mandel.
    invariants : (n, 6, 6)
        Orthonormal invariant matrices in the same frame.
    weights : (k,), optional
        Jobs per shape; two (a pair) when left out.
    """
    a = np.einsum("aij,kj->kai", invariants, units)
    w = np.full(len(units), 2.0) if weights is None else np.asarray(weights, dtype=float)
    return float(_trace_of_inverse(np.einsum("k,kai,kbi->ab", w, a, a)))


def _trace_of_inverse(information: FloatArray) -> FloatArray:
    values = np.linalg.eigvalsh(information)
    with np.errstate(divide="ignore"):
        total: FloatArray = np.where(values[..., 0] > 1e-9 * values[..., -1], (1.0 / values).sum(-1), np.inf)
    return total


def smallest_directions(largest: int) -> IntArray:
    """Directions (m, 3) of coprime integers up to `largest` in size, one of each opposite pair, simplest first."""
    span = range(-largest, largest + 1)
    found = [h for h in product(span, repeat=3) if h > (0, 0, 0) and gcd(*h) == 1]
    found.sort(key=lambda h: (sum(x * x for x in h), sum(x < 0 for x in h), tuple(-x for x in h)))
    return np.array(found)


def reflection_strains(directions: FloatArray) -> FloatArray:
    """Unit strains (m, 6), Mandel, that stretch by one and compress by one along each direction (m, 3)."""
    n = directions / np.linalg.norm(directions, axis=1)[:, None]
    return to_mandel(np.eye(3) - 2.0 * n[:, :, None] * n[:, None, :])


def fewest_pairs(rotations: FloatArray) -> FloatArray:
    """Unit strains (k, 3, 3) of the best set with the fewest strained jobs, 2 k of them.

    k is the number of totally symmetric strains: fewer jobs always leave a quadratic-plus-cubic energy that is
    stress-free at all of them. For every Laue class k generic pairs do determine every constant.

    Parameters
    ----------
    rotations : (m, 3, 3)
        Proper rotations of the Laue group in the crystal's standard axes.
    """
    key = np.round(rotations, 9) + 0.0
    return np.array(_fewest_pairs(key.tobytes()))


@lru_cache(maxsize=64)
def _fewest_pairs(key: bytes) -> tuple[tuple[tuple[float, ...], ...], ...]:
    rotations = np.frombuffer(key).reshape(-1, 3, 3)
    invariants = invariant_matrices(rotations)
    count = invariant_vectors(rotations).shape[1]
    best, continuous = best_continuous(invariants, count)
    for largest in (1, 2, 3, 4, 5):
        candidates = reflection_strains(smallest_directions(largest).astype(float))
        value, chosen = _exchange(candidates, rotations, invariants, count)
        if value <= best * (1.0 + TIDY_COST):
            return tuple(map(_rows, from_mandel(candidates[chosen])))
    return tuple(map(_rows, from_mandel(np.round(continuous, 9))))


def _rows(matrix: FloatArray) -> tuple[tuple[float, ...], ...]:
    return tuple(tuple(map(float, row)) for row in matrix)


def _exchange(candidates: FloatArray, rotations: FloatArray, invariants: FloatArray, count: int) -> tuple[float, IntArray]:
    """Best set of `count` candidates by coordinate exchange, with enough spare degrees of freedom.

    Returns the criterion and the sorted indices of the candidates.
    """
    a = np.einsum("aij,kj->kai", invariants, candidates)
    information = 2.0 * np.einsum("kai,kbi->kab", a, a)
    spare = np.array([Shape.of(unit, rotations).allowed.shape[1] for unit in candidates])
    need = len(invariants) + SPARE
    rng = np.random.default_rng(0)
    best, winner = np.inf, np.zeros(0, dtype=np.int64)
    for _ in range(_STARTS):
        chosen = rng.choice(len(candidates), count, replace=True)
        value = np.inf
        while True:
            for slot in range(count):
                others = np.delete(chosen, slot)
                scores = _trace_of_inverse(information[others].sum(axis=0) + information)
                # rounding makes ties exact, so that every machine takes the first of equals
                scores = np.round(scores, 8) + np.where(spare[others].sum() + spare < need, 1e6, 0.0)
                chosen[slot] = int(scores.argmin())
            if not scores.min() < value:
                break
            value = float(scores.min())
        if value < best:
            best, winner = value, np.sort(chosen)
    return best, winner


def best_continuous(invariants: FloatArray, count: int, starts: int = _STARTS) -> tuple[float, FloatArray]:
    """Smallest A-criterion over all sets of `count` pairs with principal strains in [-1, 1].

    Returns the criterion and the unit strains (count, 6), Mandel. Every start ends in the same value in practice.
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
    strains = from_mandel(units)
    torque = 2.0 * (slope @ strains)
    axial = np.stack([torque[:, i, j] - torque[:, j, i] for i, j in ((2, 1), (0, 2), (1, 0))], axis=1)
    length = np.linalg.norm(p[:, :4], axis=1)[:, None]
    q = p[:, :4] / length
    w, v = q[:, :1], q[:, 1:]
    gradient[:, 0] = -2.0 * (axial * v).sum(axis=1) / length[:, 0]
    gradient[:, 1:4] = 2.0 * (w * axial + np.cross(axial, v)) / length
    return float((1.0 / values).sum()), gradient.ravel()
