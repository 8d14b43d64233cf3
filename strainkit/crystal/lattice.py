"""Planes (hkl) and directions [uvw] of a crystal: normals, spacings, lattice vectors, what low indices lie near.

Whose a, b, c the indices refer to is decided once, in `index_axes`, and always said in words.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from fractions import Fraction
from functools import cache, cached_property
from itertools import product
from math import gcd, lcm

import numpy as np

from strainkit.crystal.frames import conventional_axes
from strainkit.crystal.symmetry import Symmetry
from strainkit.errors import UsageError
from strainkit.tensors.arrays import FloatArray, IntArray

__all__ = ["LOW_INDEX", "IndexAxes", "index_axes", "low_indices", "parse_indices"]

#: the largest absolute index of a "low-index" plane or direction
LOW_INDEX = 2

#: primitive translations in terms of a standard cell, by centring letter (International Tables A, standard settings)
_PRIMITIVE: dict[str, list[list[float]]] = {
    "P": [[1, 0, 0], [0, 1, 0], [0, 0, 1]],
    "A": [[1, 0, 0], [0, 0.5, -0.5], [0, 0.5, 0.5]],
    "C": [[0.5, -0.5, 0], [0.5, 0.5, 0], [0, 0, 1]],
    "I": [[-0.5, 0.5, 0.5], [0.5, -0.5, 0.5], [0.5, 0.5, -0.5]],
    "F": [[0, 0.5, 0.5], [0.5, 0, 0.5], [0.5, 0.5, 0]],
    "R": [[2 / 3, 1 / 3, 1 / 3], [-1 / 3, 1 / 3, 1 / 3], [-1 / 3, -2 / 3, 1 / 3]],
}


@dataclass(frozen=True)
class IndexAxes:
    """The a, b, c that (hkl) and [uvw] refer to.

    Attributes
    ----------
    vectors : (3, 3)
        a, b, c as rows, angstrom, given frame, metric averaged over the point group.
    primitive : (3, 3)
        Primitive basis of the crystal's lattice as rows, angstrom, given frame.
    rotations : (m, 3, 3)
        Proper rotations of the Laue class, given frame: what makes planes and directions alike.
    revolution : (2, 3) or None
        a and c of a hexagonal crystal, whose stiffness no turn about c changes.
    words : str
        Whose axes these are.
    """

    vectors: FloatArray
    primitive: FloatArray
    rotations: FloatArray
    revolution: FloatArray | None
    words: str

    @cached_property
    def reciprocal(self) -> FloatArray:
        """a*, b*, c* as rows, 1/angstrom (without 2 pi)."""
        return np.linalg.inv(self.vectors).T

    @property
    def hexagonal(self) -> bool:
        """Are they axes for four indices: a and b alike at 120 degrees, c a threefold axis across them?"""
        metric = self.vectors @ self.vectors.T / np.dot(self.vectors[0], self.vectors[0])
        threefold = (np.abs(np.trace(self.rotations, axis1=1, axis2=2)) < 1e-6) & (
            np.abs(self.rotations @ self.vectors[2] - self.vectors[2]).max(axis=1) < 1e-6 * np.abs(self.vectors).max()
        )
        return bool(np.allclose(metric[:2], [[1.0, -0.5, 0.0], [-0.5, 1.0, 0.0]], rtol=0, atol=1e-6) and threefold.any())

    def normal(self, plane: IntArray) -> FloatArray:
        """Unit normals (..., 3), given frame, of planes (..., 3)."""
        return _unit(np.asarray(plane) @ self.reciprocal)

    def direction(self, indices: IntArray) -> FloatArray:
        """Unit vectors (..., 3), given frame, along directions [uvw] (..., 3)."""
        return _unit(np.asarray(indices) @ self.vectors)

    def spacing(self, plane: IntArray) -> FloatArray:
        """d-spacing 1/|h a* + k b* + l c*| of planes (..., 3) with the indices as they are, angstrom."""
        return np.asarray(1.0 / np.linalg.norm(np.asarray(plane) @ self.reciprocal, axis=-1))

    def lattice_planes(self, plane: IntArray) -> tuple[FloatArray, float]:
        """Shortest reciprocal-lattice vector (3,), 1/angstrom, normal to a plane, and the distance of its lattice planes.

        Centring counts: the planes of a face-centred cube parallel to (1 0 0) are a/2 apart.
        """
        shortest = np.linalg.solve(self.primitive, np.array(_coprime(self.primitive @ self.normal(plane))))
        return shortest, float(1.0 / np.linalg.norm(shortest))

    def shortest_in_plane(self, plane: IntArray) -> tuple[tuple[int, ...], float]:
        """The shortest lattice vector in a plane: indices of its direction [uvw], and its length in angstrom."""
        first, second = (np.array(v) @ self.primitive for v in _kernel(*_coprime(self.primitive @ self.normal(plane))))
        while True:  # Lagrange-Gauss reduction of the plane's lattice
            if first @ first > second @ second + 1e-9:
                first, second = second, first
            share = float(first @ second / (first @ first))
            if abs(share) < 0.5 + 1e-9:  # hexagonal nets sit on the tie
                return _upright(_coprime(self.reciprocal @ first)), float(np.linalg.norm(first))
            second = second - round(share) * first

    def images(self, plane: IntArray) -> list[tuple[int, ...]]:
        """All planes that the Laue class makes alike, one of each pair of opposite normals, the nicest to print first."""
        turned = np.rint(self.rotations @ (np.asarray(plane) @ self.reciprocal) @ self.vectors.T).astype(int)
        return sorted({_upright(row) for row in turned}, key=_ugliness)

    @cached_property
    def families(self) -> list[tuple[int, ...]]:
        """One low-index plane of every set that the Laue class makes alike, widest lattice spacing first."""
        found = {self.images(plane)[0] for plane in low_indices()}
        return sorted(found, key=lambda plane: (-round(self.lattice_planes(np.array(plane))[1], 6), _ugliness(plane)))

    def alike(self, vectors: FloatArray) -> FloatArray:
        """A rigid set of vectors (v, 3) turned by everything that leaves the stiffness unchanged: (n, v, 3).

        The stiffness of a hexagonal crystal does not change under any turn about c: there the first vector is brought into
        the planes of c with a and with a*.
        """
        if self.revolution is None:
            return np.asarray(vectors @ self.rotations.transpose(0, 2, 1))
        z, x = _unit(self.revolution[1]), _unit(self.revolution[0])
        y = np.cross(z, x)
        start = np.arctan2(vectors[0] @ y, vectors[0] @ x)
        turned = []
        for angle in start - np.radians(30.0 * np.arange(12)):
            c, s = np.cos(angle), np.sin(angle)
            along = vectors @ np.array([c * x + s * y, -s * x + c * y, z]).T  # components in turned axes
            turned.append(along @ np.array([x, y, z]))
        return np.array(turned)

    def nearest(self, vectors: FloatArray, planes: bool = False) -> list[tuple[tuple[int, ...], float]]:
        """Low-index directions (or planes, by normal) nearest to vectors (n, 3) or their opposites, and the angles, degrees."""
        units = self._low_normals if planes else self._low_directions
        return _closest(low_indices(), units, np.asarray(vectors, dtype=float).reshape(-1, 3))

    def nearest_in_plane(self, vector: FloatArray, plane: IntArray) -> tuple[tuple[int, ...], float]:
        """The low-index direction in a plane nearest to a vector (3,) or its opposite, and the angle, degrees."""
        indices = low_indices()[low_indices() @ np.asarray(plane) == 0]
        if not len(indices):
            indices = np.array([self.shortest_in_plane(plane)[0]])
        return _closest(indices, self.direction(indices), np.asarray(vector, dtype=float).reshape(1, 3))[0]

    @cached_property
    def _low_normals(self) -> FloatArray:
        return self.normal(low_indices())

    @cached_property
    def _low_directions(self) -> FloatArray:
        return self.direction(low_indices())


@cache
def low_indices(limit: int = LOW_INDEX) -> IntArray:
    """Coprime indices (n, 3) with no absolute value above the limit, one of each opposite pair, lowest first."""
    every = [i for i in product(range(-limit, limit + 1), repeat=3) if any(i) and gcd(*i) == 1]
    found = np.array(sorted({_upright(i) for i in every}, key=lambda i: (sum(map(abs, i)), [-x for x in i])))
    found.flags.writeable = False  # shared by every caller
    return found


def index_axes(symmetry: Symmetry, given: bool = False) -> IndexAxes:
    """Axes of the indices: the cell as given when it is conventional (or when asked for), otherwise the standard cell."""
    own = symmetry.transformation.T @ symmetry.standard_lattice
    axes, words = conventional_axes(symmetry)
    if given or any(np.allclose(np.roll(own, -k, axis=0), axes, rtol=0, atol=1e-9) for k in range(3)):
        axes, words = own, "a, b, c of the cell as given"
    return IndexAxes(
        vectors=axes,
        primitive=np.array(_PRIMITIVE[symmetry.space_group[0]]) @ symmetry.standard_lattice,
        rotations=symmetry.rotations,
        revolution=symmetry.standard_lattice[[0, 2]] if symmetry.system == "hexagonal" else None,
        words=words,
    )


def parse_indices(text: str, option: str, plane: bool, axes: IndexAxes | None = None) -> tuple[int, ...]:
    """Indices (3,) from "0,1,-2" or "0 1 -2"; four are Miller-Bravais ones of a hexagonal lattice (i = -h-k, t = -u-v).

    Raises
    ------
    UsageError
        Not three or four whole numbers, all zero, or four that do not add up or refer to axes that are not hexagonal.
    """
    try:
        numbers = [int(part) for part in text.replace(",", " ").split()]
    except ValueError:
        numbers = []
    if len(numbers) == 4:
        h, k, i, last = numbers
        if axes is not None and not axes.hexagonal:
            what = f"{text!r} has four indices, and the axes are not hexagonal ({axes.words})"
            raise UsageError(what, option, "Give three.")
        if h + k + i:
            raise UsageError(f"the first three of {text!r} add up to {h + k + i}, not to zero", option, "The third is -h-k.")
        numbers = [h, k, last] if plane else [h - i, k - i, last]
    if len(numbers) != 3 or not any(numbers):
        raise UsageError(
            f"{text!r} are not indices", option, "Give three whole numbers such as 0,1,-2 (or four that are hexagonal)."
        )
    return tuple(numbers)


def _unit(vectors: FloatArray) -> FloatArray:
    return np.asarray(vectors / np.linalg.norm(vectors, axis=-1, keepdims=True))


def _closest(indices: IntArray, units: FloatArray, vectors: FloatArray) -> list[tuple[tuple[int, ...], float]]:
    """Which of the unit vectors (m, 3) lies nearest to each vector (n, 3), the lowest indices first where several do."""
    vectors = _unit(vectors)
    cosines = np.abs(vectors @ units.T)
    best = np.argmax(np.round(cosines, 9) - 1e-11 * np.abs(indices).sum(axis=1), axis=1)
    sines = np.linalg.norm(np.cross(units[best], vectors), axis=1)
    angles = np.degrees(np.arcsin(np.minimum(1.0, sines)))
    return [(tuple(int(i) for i in indices[b]), float(angle)) for b, angle in zip(best, angles, strict=True)]


def _ugliness(indices: tuple[int, ...]) -> tuple[int, int, tuple[int, ...]]:
    """Sorts alike planes for print: small indices first, then few minus signs, then h before k before l."""
    return max(map(abs, indices)), sum(i < 0 for i in indices), tuple(-i for i in indices)


def _upright(indices: Sequence[int] | IntArray) -> tuple[int, ...]:
    """The indices or their opposite: whichever has fewer minus signs, or else the first non-zero one positive."""
    numbers = tuple(int(i) for i in indices)
    opposite = tuple(-i for i in numbers)
    return min(numbers, opposite, key=lambda n: (sum(i < 0 for i in n), next(i for i in n if i) < 0))


def _coprime(vector: FloatArray) -> tuple[int, ...]:
    """Coprime integers (3,) proportional to a vector that is a multiple of whole numbers."""
    shares = [Fraction(float(x)).limit_denominator(1000) for x in vector / np.abs(vector).max()]
    whole = lcm(*(share.denominator for share in shares))
    numbers = [int(share * whole) for share in shares]
    return tuple(n // gcd(*numbers) for n in numbers)


def _kernel(p: int, q: int, r: int) -> tuple[tuple[int, ...], tuple[int, ...]]:
    """Two integer vectors that span all integer solutions of p u + q v + r w = 0 for coprime p, q, r."""
    if p == 0 and q == 0:
        return (1, 0, 0), (0, 1, 0)
    common = gcd(p, q)
    x = next(x for x in range(abs(q) + 1) if (common - p * x) % (q or 1) == 0) if q else common // p
    y = (common - p * x) // q if q else 0
    return (q // common, -p // common, 0), (-r * x, -r * y, common)
