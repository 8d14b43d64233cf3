"""The most symmetric set: every strain keeps as much of the crystal's symmetry as it can, so that each job is small.

A job that keeps the subgroup H of the Laue group G costs about |G|/|H| reference jobs. The search goes through all subgroups
K of G and their one-dimensional real representations (trivial, or plus and minus one): strains that K maps to themselves, or to
plus and minus themselves. The cheapest combination that determines every constant is found exactly; within it the strains
are the A-optimal ones among tidy candidates.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import lru_cache

import numpy as np

from strainkit.design.aims import group_key, group_of
from strainkit.design.exchange import Candidates, exchange
from strainkit.design.shapes import (
    Shape,
    largest_principal_of,
    one_of_each,
    reflection_strains,
    smallest_directions,
    tidy_strains,
)
from strainkit.tensors.arrays import FloatArray
from strainkit.tensors.invariants import invariant_matrices, invariant_vectors
from strainkit.tensors.rotations import rotation6

__all__ = ["most_symmetric", "subgroups"]

_MOST_COVERS = 24
_MOST_CANDIDATES = 150


def most_symmetric(rotations: FloatArray) -> FloatArray:
    """Unit strains (k, 6), Mandel, of the set with the smallest cost by lost symmetry, in the rotations' axes.

    Parameters
    ----------
    rotations : (m, 3, 3)
        Proper rotations of the Laue group in the crystal's standard axes.
    """
    return _most_symmetric(group_key(rotations)).copy()


@lru_cache(maxsize=64)
def _most_symmetric(key: bytes) -> FloatArray:
    rotations = group_of(key)
    invariants = invariant_matrices(rotations)
    kinds = _kinds(rotations, invariants)
    start = np.zeros((len(invariants),) * 2)
    best = np.inf
    winner: FloatArray = np.zeros((0, 6))
    for cover in _cheapest_covers(kinds, len(invariants)):
        value, units = exchange([kinds[i].candidates for i in cover], start, spare=0)
        if value < best:
            best, winner = value, units
    return winner


def subgroups(rotations: FloatArray) -> list[frozenset[int]]:
    """All subgroups of a rotation group (m, 3, 3), as sets of indices, smallest first."""
    products = np.einsum("aij,bjk->abik", rotations, rotations)
    table = np.abs(products[:, :, None] - rotations[None, None]).max(axis=(-1, -2)).argmin(axis=-1)

    def closure(elements: frozenset[int]) -> frozenset[int]:
        while True:
            grown = elements | {int(table[a, b]) for a in elements for b in elements}
            if grown == elements:
                return elements
            elements = frozenset(grown)

    cyclic = {closure(frozenset([g])) for g in range(len(rotations))}
    found = set(cyclic)
    frontier = set(cyclic)
    while frontier:
        frontier = {closure(a | b) for a in frontier for b in cyclic} - found
        found |= frontier
    return sorted(found, key=lambda s: (len(s), sorted(s)))


@dataclass(frozen=True)
class _Kind:
    """Strains of one symmetry.

    Attributes
    ----------
    candidates : Candidates
        Tidy ones.
    cost : float
        Of the jobs of one such shape, in reference jobs.
    blocks : tuple of (6, n)
        Odd stress for unit constants of a few generic strains, different ones.
    """

    candidates: Candidates
    cost: float
    blocks: tuple[FloatArray, ...]


def _kinds(rotations: FloatArray, invariants: FloatArray) -> list[_Kind]:
    """All symmetries that a strain can have, cheapest first; of equivalent ones that with the most tidy candidates."""
    tidy = np.concatenate([reflection_strains(smallest_directions(3).astype(float)), tidy_strains()])
    # the longest are the most informative; reflection strains stand first among equals
    tidy = tidy[np.argsort(-np.round(np.linalg.norm(tidy, axis=1), 6), kind="stable")]
    groups = subgroups(rotations)
    q = rotation6(rotations)
    best: dict[tuple[float, ...], tuple[FloatArray, FloatArray]] = {}
    for group in groups:
        members = sorted(group)
        for half in (group, *(h for h in groups if h < group and 2 * len(h) == len(group))):
            signs = np.array([1.0 if g in half else -1.0 for g in members])
            space = invariant_vectors(rotations[members], signs)
            if not space.shape[1]:
                continue
            inside = tidy[np.abs(tidy - tidy @ space @ space.T).max(axis=1) < 1e-7]
            images = np.round(q @ (space @ space.T) @ np.swapaxes(q, 1, 2), 5) + 0.0
            orbit = max(map(tuple, images.reshape(len(q), 36).tolist()))
            if orbit not in best or len(inside) > len(best[orbit][1]):
                best[orbit] = (space, inside)
    kinds = [_kind(space, inside, rotations, invariants) for space, inside in best.values()]
    return sorted(kinds, key=lambda kind: (kind.cost, len(kind.candidates.units)))


def _kind(space: FloatArray, inside: FloatArray, rotations: FloatArray, invariants: FloatArray) -> _Kind:
    rng = np.random.default_rng(0)
    sample = (space @ rng.normal(size=(space.shape[1], 60))).T
    sample /= largest_principal_of(sample)[:, None]
    generic = Shape.of(sample[0], rotations)
    shapes = [Shape.of(unit, rotations) for unit in inside[:_MOST_CANDIDATES]]
    usable = [s.unit for s in shapes if s.jobs == generic.jobs and len(s.residual) >= len(generic.residual)]
    # where no tidy strain has this symmetry, a fixed sample of the space serves
    units = one_of_each(np.array(usable) if usable else sample, rotations)
    blocks = tuple(np.einsum("aij,j->ia", invariants, unit) for unit in sample[:8])
    return _Kind(Candidates.of(units, rotations, invariants), generic.cost(len(rotations)), blocks)


def _cheapest_covers(kinds: list[_Kind], constants: int) -> list[tuple[int, ...]]:
    """All combinations of kinds (with repeats) of the smallest cost whose generic strains determine every constant."""
    best = [np.inf]
    covers: list[tuple[int, ...]] = []
    cheapest_row = min(kind.cost / np.linalg.matrix_rank(kind.blocks[0], tol=1e-9) for kind in kinds)

    def grow(first: int, span: FloatArray, cost: float, chosen: tuple[int, ...]) -> None:
        if len(span) == constants:
            if cost < best[0] - 1e-9:
                best[0] = cost
                covers.clear()
            covers.append(chosen)
            return
        for index in range(first, len(kinds)):
            total = cost + kinds[index].cost
            block = kinds[index].blocks[chosen.count(index) % len(kinds[index].blocks)]
            wider = _span(np.vstack([span, block]))
            if total + cheapest_row * (constants - len(wider)) > best[0] + 1e-9 or len(wider) == len(span):
                continue
            grow(index, wider, total, (*chosen, index))

    grow(0, np.zeros((0, constants)), 0.0, ())
    return covers[:_MOST_COVERS]


def _span(rows: FloatArray) -> FloatArray:
    """Orthonormal basis (r, n) of the space of some rows."""
    _, s, vt = np.linalg.svd(rows, full_matrices=False)
    return vt[s > 1e-9]
