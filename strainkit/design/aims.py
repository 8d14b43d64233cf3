"""Fewest jobs, and sharpest constants for a number of jobs.

Both search in the crystal's standard axes, so that the same crystal gets the same strains however its cell is given; they
depend on nothing but the Laue group, and the results are kept. The best strains have all three principal values at the bound:
e = 1 - 2 n n^T, a stretch with compression along n. Directions n of small integers serve as long as that costs less than
`TIDY_COST` against the best continuous set.
"""

from __future__ import annotations

from functools import lru_cache

import numpy as np

from strainkit.design.criterion import best_continuous
from strainkit.design.exchange import SPARE, Candidates, exchange
from strainkit.design.shapes import image_strains, one_of_each, reflection_strains, smallest_directions
from strainkit.errors import UsageError, counted
from strainkit.tensors.arrays import FloatArray
from strainkit.tensors.invariants import invariant_matrices, invariant_vectors

__all__ = ["TIDY_COST", "fewest", "fewest_jobs", "sharpest"]

#: how much larger the criterion of a tidy set may be than that of the best continuous one
TIDY_COST = 0.02
#: directions of integers up to this serve where more shapes than the fewest are wanted
LARGEST_INDEX = 3


def group_key(rotations: FloatArray) -> bytes:
    """Cache key of a group: its rotations without rounding errors."""
    return bytes((np.round(rotations, 9) + 0.0).tobytes())


def group_of(key: bytes) -> FloatArray:
    """Rotations (m, 3, 3) of a cache key."""
    return np.frombuffer(key).reshape(-1, 3, 3)


def fewest_jobs(rotations: FloatArray) -> int:
    """Fewest strained jobs at one magnitude that fix every constant to second order.

    Twice the number of totally symmetric strains: with fewer jobs there is always a quadratic-plus-cubic energy that is
    stress-free at all of them, and that many generic pairs do determine every constant of every Laue class.
    """
    return 2 * int(invariant_vectors(rotations).shape[1])


def fewest(rotations: FloatArray) -> FloatArray:
    """Unit strains (k, 6), Mandel, of the A-optimal set with the fewest strained jobs: k pairs.

    Parameters
    ----------
    rotations : (m, 3, 3)
        Proper rotations of the Laue group in the crystal's standard axes; the strains are in the same axes.
    """
    return _fewest(group_key(rotations)).copy()


@lru_cache(maxsize=64)
def _fewest(key: bytes) -> FloatArray:
    rotations = group_of(key)
    invariants = invariant_matrices(rotations)
    count = fewest_jobs(rotations) // 2
    best, continuous = best_continuous(invariants, count)
    for largest in (1, 2, 3, 4, 5):
        value, units = exchange([_pairs(key, largest)] * count, np.zeros((len(invariants),) * 2))
        if value <= best * (1.0 + TIDY_COST):
            return units
    return np.round(continuous, 9)


@lru_cache(maxsize=64)
def _pairs(key: bytes, largest: int) -> Candidates:
    """Reflection strains along directions of integers up to `largest`, one of each orbit."""
    rotations = group_of(key)
    units = one_of_each(reflection_strains(smallest_directions(largest).astype(float)), rotations)
    return Candidates.of(units, rotations, invariant_matrices(rotations))


@lru_cache(maxsize=16)
def _many_pairs(key: bytes) -> Candidates:
    """The strains of the fewest jobs and reflection strains beyond."""
    rotations = group_of(key)
    units = np.concatenate([_fewest(key), _pairs(key, LARGEST_INDEX).units])
    return Candidates.of(one_of_each(units, rotations), rotations, invariant_matrices(rotations))


@lru_cache(maxsize=16)
def _singles(key: bytes) -> Candidates:
    """Tidy strains whose negative is an image of themselves: one job each."""
    rotations = group_of(key)
    return Candidates.of(image_strains(rotations), rotations, invariant_matrices(rotations))


def sharpest(
    rotations: FloatArray,
    jobs: int,
    start: FloatArray | None = None,
    rows: int = 0,
    taken: FloatArray | None = None,
) -> FloatArray:
    """Unit strains (k, 6), Mandel, of at most `jobs` strained jobs with the smallest A-criterion.

    Parameters
    ----------
    rotations : (m, 3, 3)
        Proper rotations of the Laue group in the crystal's standard axes.
    jobs : int
        Strained jobs at one magnitude.
    start : (n, n), optional
        Information that other jobs give already, in units of one job's at this magnitude (coordinates of
        `invariant_matrices(rotations)`).
    rows : int
        Components of odd stress behind it.
    taken : (m, 6), optional
        Unit strains of those jobs, which are not to be repeated.

    Raises
    ------
    UsageError
        When that many jobs cannot fix every constant.
    """
    key = group_key(rotations)
    pairs, singles = (c.without(taken, rotations) for c in (_many_pairs(key), _singles(key)))
    size = len(pairs.information[0])
    known = np.zeros((size, size)) if start is None else start
    best = np.inf
    winner: FloatArray = np.zeros((0, 6))
    for single in (jobs % 2, jobs % 2 + 2):
        if single > jobs or (single and not len(singles.units)):
            continue
        slots = [pairs] * ((jobs - single) // 2) + [singles] * single
        value, units = exchange(slots, known, SPARE, rows, starts=6 if len(slots) <= 6 else 2)
        if value < best:
            best, winner = value, units
    if np.isfinite(best):
        return winner
    if jobs % 2:
        return sharpest(rotations, jobs - 1, start, rows, taken)
    raise UsageError(
        f"{counted(jobs, 'strained job')} cannot fix every constant",
        "--jobs",
        f"This Laue class needs at least {fewest_jobs(rotations)}.",
    )
