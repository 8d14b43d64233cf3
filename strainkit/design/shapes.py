"""Shapes: unit strain tensors, what their symmetry allows, and the tidy candidates that a search picks from."""

from __future__ import annotations

from dataclasses import dataclass
from functools import cache
from itertools import product
from math import gcd

import numpy as np

from strainkit.tensors.arrays import FloatArray, IntArray
from strainkit.tensors.invariants import invariant_vectors
from strainkit.tensors.rotations import rotation6
from strainkit.tensors.sixvectors import from_mandel, to_mandel

__all__ = [
    "SAME_SHAPE",
    "Shape",
    "firsts",
    "image_strains",
    "largest_principal_of",
    "one_of_each",
    "reflection_strains",
    "same_magnitude",
    "same_to_second_order",
    "smallest_directions",
    "tidy_strains",
]

#: how close two strains must be, relative to their size, to be of one shape
SAME_SHAPE = 1e-5


def same_to_second_order(size: float) -> float:
    """How close unit strains of this magnitude must be to be opposites or repeats of each other.

    Cells deformed by plus and minus a small-strain matrix e have Lagrangian strains e + e^2/2 and -e + e^2/2, and those
    made to keep the volume differ by up to twice e^2: pairs to second order, and as good as exact ones, since what sets them
    apart times the stiffness is in the model.
    """
    return max(SAME_SHAPE, 2.5 * size)


def same_magnitude(one: float, other: float) -> bool:
    """Are two magnitudes those of plus and minus the same small-strain matrix?"""
    return abs(one - other) <= max(1e-9, 1.2 * min(one, other) ** 2)


@dataclass(frozen=True)
class Shape:
    """A unit strain tensor and what its symmetry allows.

    Attributes
    ----------
    unit : (6,)
        Mandel vector whose largest absolute principal value is one, given frame.
    allowed : (6, d)
        Stresses that the residual symmetry of the strained cell allows (orthonormal columns, Mandel).
    even, odd : (6, d_even), (6, d_odd)
        Responses even and odd in the magnitude that all rotations mapping the shape to plus or minus itself allow.
    residual : (r,)
        Indices of the Laue group's rotations that the strained cell keeps.
    has_image : bool
        A rotation of the crystal maps the shape to its negative.
    """

    unit: FloatArray
    allowed: FloatArray
    even: FloatArray
    odd: FloatArray
    residual: IntArray
    has_image: bool

    @classmethod
    def of(cls, unit: FloatArray, rotations: FloatArray, opposite_within: float = SAME_SHAPE) -> Shape:
        """Shape of a Mandel vector (6,) in a crystal with the proper Laue rotations (m, 3, 3).

        A rotation maps it to its negative when it does so to `opposite_within` of its size.
        """
        turned = rotation6(rotations) @ unit
        size = float(np.linalg.norm(unit))
        same = np.abs(turned - unit).max(axis=1) < SAME_SHAPE * size
        opposite = np.abs(turned + unit).max(axis=1) < opposite_within * size
        both = same | opposite
        allowed = invariant_vectors(rotations[same])
        residual = np.flatnonzero(same)
        # in a group, those that map to the negative are as many as those that keep
        if opposite.sum() != same.sum() or (same & opposite).any():
            return cls(unit, allowed, allowed, allowed, residual, False)
        signs = np.where(same, 1.0, -1.0)[both]
        even, odd = invariant_vectors(rotations[both]), invariant_vectors(rotations[both], signs)
        return cls(unit, allowed, even, odd, residual, True)

    def turned(self, q: FloatArray) -> Shape:
        """The same shape in other axes, for the 6x6 Mandel matrix q of their rotation."""
        unit, allowed = q @ self.unit, q @ self.allowed
        even = allowed if self.even is self.allowed else q @ self.even
        odd = allowed if self.odd is self.allowed else q @ self.odd
        return Shape(unit, allowed, even, odd, self.residual, self.has_image)

    @property
    def jobs(self) -> int:
        """Strained jobs that a central difference needs: one where a rotation supplies the opposite side, else two."""
        return 1 if self.has_image else 2

    def cost(self, order: int) -> float:
        """Cost of these jobs in reference jobs, by the symmetry lost, for a group of `order` rotations."""
        return self.jobs * order / len(self.residual)


def largest_principal_of(vectors: FloatArray) -> FloatArray:
    """Largest absolute principal values (...,) of strains given as Mandel vectors (..., 6)."""
    return np.asarray(np.abs(np.linalg.eigvalsh(from_mandel(vectors))).max(axis=-1))


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


@cache
def tidy_strains() -> FloatArray:
    """Unit strains (m, 6), Mandel, with components proportional to 0, 1/2 and 1, one of each opposite pair.

    Fewest different components first; largest principal value one.
    """
    grid = np.array(list(product((0.0, 1.0, -1.0, 0.5, -0.5), repeat=6)))[1:]
    first = grid[np.arange(len(grid)), (grid != 0).argmax(axis=1)]
    grid = grid[first > 0]
    complexity = (grid != 0).sum(axis=1) + 0.1 * (np.abs(grid) == 0.5).sum(axis=1) + 0.01 * (grid < 0).sum(axis=1)
    grid = grid[np.argsort(complexity, kind="stable")]
    vectors = grid * np.array([1.0, 1.0, 1.0, 2**0.5, 2**0.5, 2**0.5])
    vectors /= largest_principal_of(vectors)[:, None]
    _, kept = np.unique(np.round(vectors, 6), axis=0, return_index=True)
    return np.asarray(vectors[np.sort(kept)])


def image_strains(rotations: FloatArray) -> FloatArray:
    """Tidy unit strains (m, 6), Mandel, that some rotation (g, 3, 3) maps to their negative, one of each orbit."""
    units = tidy_strains()
    free = invariant_vectors(rotations)
    units = units[np.abs(units @ free).max(axis=1) < 1e-9]
    turned = np.einsum("gij,mj->mgi", rotation6(rotations), units)
    mapped = (np.abs(turned + units[:, None]).max(axis=2) < 1e-9).any(axis=1)
    return one_of_each(units[mapped], rotations)


def one_of_each(vectors: FloatArray, rotations: FloatArray) -> FloatArray:
    """The vectors (m, 6) without those that a rotation (g, 3, 3) maps to plus or minus an earlier one."""
    return vectors[firsts(vectors, rotations)]


def firsts(vectors: FloatArray, rotations: FloatArray) -> list[int]:
    """Indices of the vectors (m, 6) that no rotation (g, 3, 3) maps to plus or minus an earlier one."""
    images = np.einsum("gij,mj->mgi", rotation6(rotations), vectors)
    both = np.round(np.concatenate([images, -images], axis=1), 5) + 0.0
    first: dict[tuple[float, ...], int] = {}
    for index, orbit in enumerate(both.tolist()):
        first.setdefault(max(map(tuple, orbit)), index)
    return sorted(first.values())
