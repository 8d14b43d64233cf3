"""Can two estimates be told apart: probabilities under Student's errors, and many such questions at once.

Errors of two fits rest on few and different degrees of freedom. The difference of the true values is then distributed as
the difference of the estimates plus s1 T1 - s2 T2 with independent Student T1, T2 (Behrens and Fisher; R. A. Fisher, Ann.
Eugen. 6, 391, 1935). The test from it keeps its level; Welch's approximate degrees of freedom do not where it matters here:
with 3 and 11 of them and ten times the variance on the side of the 3, false alarms at a level of 0.0017 were four times as
frequent as they should be (a million simulated pairs). The price: with few degrees of freedom the test is cautious
(tests/benchmarks/false_alarms.py).
"""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from functools import lru_cache
from string import ascii_letters

import numpy as np
from numpy.typing import ArrayLike

from strainkit.tensors.arrays import FloatArray

__all__ = ["LEVEL", "holm", "letters", "probability_larger", "probability_of_order", "two_sided"]

#: family-wise level of false alarms
LEVEL = 0.05
#: draws behind the probability of an order of three or more: good to 0.001
_DRAWS = 200_000

#: u = sinh(x): dense in the middle, far enough in the tails of Student with one degree of freedom
_X = np.linspace(-18.0, 18.0, 361)
_U, _STEP = np.sinh(_X), np.cosh(_X) * (_X[1] - _X[0])


def two_sided(gap: ArrayLike, errors: tuple[ArrayLike, ArrayLike], freedom: tuple[float | None, float | None]) -> FloatArray:
    """Probability (...,) of a difference at least as large as `gap` (...,) when there is none.

    Parameters
    ----------
    gap : (...,)
        Difference of two estimates.
    errors : two of (...,)
        Their standard errors.
    freedom : two of float or None
        Degrees of freedom behind the errors; None for errors that are known.
    """
    return np.asarray(2.0 * _tail(np.abs(np.asarray(gap, dtype=float)), errors, freedom))


def probability_larger(
    gap: ArrayLike, errors: tuple[ArrayLike, ArrayLike], freedom: tuple[float | None, float | None]
) -> FloatArray:
    """Probability (...,) that the first true value is the larger one, `gap` being first less second estimate."""
    gap = np.asarray(gap, dtype=float)
    tail = _tail(np.abs(gap), errors, freedom)
    return np.where(gap < 0, tail, 1.0 - tail)


def _tail(gap: FloatArray, errors: tuple[ArrayLike, ArrayLike], freedom: tuple[float | None, float | None]) -> FloatArray:
    """P(s1 T1 + s2 T2 > gap) for gap >= 0: the sum over the narrower one of the tail of the wider one."""
    gap, first, second = np.broadcast_arrays(gap, *(np.asarray(e, dtype=float) for e in errors))
    wider = (first >= second)[..., None]
    small, large = np.where(wider, second[..., None], first[..., None]), np.where(wider, first[..., None], second[..., None])
    z = (gap[..., None] - small * _U) / np.where(large == 0.0, 1.0, large)
    beyond = _beyond(z, freedom[0])
    if freedom[0] != freedom[1]:
        beyond = np.where(wider, beyond, _beyond(z, freedom[1]))
    tail = np.clip((np.where(wider, _weights(freedom[1]), _weights(freedom[0])) * beyond).sum(axis=-1), 0.0, 0.5)
    return np.asarray(np.where(large[..., 0] == 0.0, np.where(gap > 0, 0.0, 0.5), tail))


def _beyond(z: FloatArray, freedom: float | None) -> FloatArray:
    """P(T > z)."""
    from scipy.special import ndtr, stdtr

    return np.asarray(ndtr(-z) if freedom is None else stdtr(freedom, -z))


@lru_cache(maxsize=64)
def _weights(freedom: float | None) -> FloatArray:
    """Density of T at the nodes, times their spacing."""
    from scipy.special import gammaln

    if freedom is None:
        return np.asarray(np.exp(-0.5 * _U**2) / np.sqrt(2.0 * np.pi) * _STEP)
    scale = gammaln(0.5 * (freedom + 1.0)) - gammaln(0.5 * freedom) - 0.5 * np.log(freedom * np.pi)
    return np.asarray(np.exp(scale - 0.5 * (freedom + 1.0) * np.log1p(_U**2 / freedom)) * _STEP)


def probability_of_order(
    values: Sequence[float], errors: Sequence[float], freedom: Sequence[float | None], seed: int = 0
) -> float:
    """Probability that the true values fall in the order of these estimates, the largest first.

    By quadrature for two, by seeded sampling of independent Student errors for more.
    """
    if len(values) == 2:
        return float(probability_larger(values[0] - values[1], (errors[0], errors[1]), (freedom[0], freedom[1])))
    rng = np.random.default_rng(seed)
    right = np.ones(_DRAWS, dtype=bool)
    above: FloatArray = np.full(_DRAWS, np.inf)
    for value, error, nu in zip(values, errors, freedom, strict=True):
        drawn = value + error * (rng.standard_normal(_DRAWS) if nu is None else rng.standard_t(nu, _DRAWS))
        right &= above >= drawn
        above = drawn
    return float(right.mean())


def holm(p_values: FloatArray) -> FloatArray:
    """Adjusted p-values (..., m) of m tests (..., m): below a level, the family-wise error rate is below it.

    S. Holm, Scand. J. Statist. 6, 65 (1979); valid however the tests depend on each other.
    """
    p = np.asarray(p_values, dtype=float)
    m = p.shape[-1]
    order = np.argsort(p, axis=-1)
    sorted_p = np.take_along_axis(p, order, axis=-1) * np.arange(m, 0, -1)
    adjusted = np.minimum(np.maximum.accumulate(sorted_p, axis=-1), 1.0)
    out = np.empty_like(p)
    np.put_along_axis(out, order, adjusted, axis=-1)
    return out


def letters(order: Sequence[int], different: Iterable[tuple[int, int]]) -> dict[int, str]:
    """Letters for some members so that two share one exactly when they cannot be told apart.

    By insertion and absorption (H.-P. Piepho, J. Comput. Graph. Stat. 13, 456, 2004).

    Parameters
    ----------
    order : sequence of int
        Members in the order in which letters are given out.
    different : pairs of members that can be told apart
    """
    sets: list[frozenset[int]] = [frozenset(order)]
    for i, j in different:
        split: list[frozenset[int]] = []
        for group in sets:
            split += [group - {i}, group - {j}] if {i, j} <= group else [group]
        unique = list(dict.fromkeys(split))
        sets = [g for g in unique if not any(g < other for other in unique)]
    place = {member: k for k, member in enumerate(order)}
    sets.sort(key=lambda group: sorted(place[m] for m in group))
    names = [*ascii_letters, *(f"({k})" for k in range(len(sets)))]
    return {m: "".join(name for name, group in zip(names, sets, strict=False) if m in group) for m in order}
