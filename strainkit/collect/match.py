"""A returned structure against a planned one: rotation, basis, origin and order of the atoms.

Programs turn the cell, choose another basis of the same lattice, move the origin and sort the atoms. What is left after all
that must be nil: a strain that remains means that the job changed its cell, or that it belongs to another strain.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property

import numpy as np

from strainkit.collect.returned import Returned
from strainkit.crystal.crystal import Crystal, formula_of
from strainkit.errors import InputError
from strainkit.tensors.arrays import FloatArray, IntArray
from strainkit.tensors.rotations import polar
from strainkit.tensors.strain import gradient_between

__all__ = ["Match", "MismatchError", "match", "strain_tolerance"]

#: strain between planned and returned lattice that is put down to rounding even where an output prints finely
LEAST_TOLERANCE = 3e-5
#: strains up to this are reported as a drift of the cell; beyond it the lattice is another one
LARGEST_DRIFT = 0.15
#: atoms closer to their planned sites than this (A) are where they belong without looking further
CLOSE = 0.25
#: in another basis or order, atoms farther than this (A) from their planned sites are not the planned crystal
FAR = 0.5


_ONE, _SAME = np.eye(3), np.eye(3, dtype=np.int64)


class MismatchError(InputError):
    """A returned structure that is not the planned one; `code` is the finding that says how."""

    def __init__(self, what: str, code: str = "cell-mismatch") -> None:
        super().__init__(what)
        self.code = code

    def __reduce__(self) -> tuple[type[MismatchError], tuple[str, str]]:
        return MismatchError, (self.what, self.code)


@dataclass(frozen=True)
class Match:
    """How a returned structure lies in the planned one.

    Attributes
    ----------
    rotation : (3, 3)
        R with x_returned = R x_planned.
    order : (n,)
        Returned atom on each planned site.
    basis : (3, 3) of int
        Returned lattice vectors as rows in planned ones.
    displacements : (n, 3)
        Planned order and frame, from the planned positions to the returned ones, A, mean removed.
    drift : float
        Largest principal strain that remains: rounding.
    """

    rotation: FloatArray
    order: IntArray
    basis: IntArray
    displacements: FloatArray
    drift: float

    @cached_property
    def farthest(self) -> float:
        """Largest displacement, A."""
        return float(np.sqrt((self.displacements**2).sum(axis=1).max(initial=0.0)))


def strain_tolerance(lattice: FloatArray, precision: float) -> float:
    """Largest strain that rounding of the lattice vectors by up to `precision` (A) in each component can explain."""
    heights = 1.0 / np.linalg.norm(np.linalg.inv(lattice), axis=0)
    return max(LEAST_TOLERANCE, 3.0 * precision / float(heights.min()))


def match(crystal: Crystal, returned: Returned, gradient: FloatArray | None = None) -> Match:
    """Place a returned structure in the planned one.

    Parameters
    ----------
    crystal : Crystal
        The planned cell or, with a gradient, the reference cell.
    returned : Returned
    gradient : (3, 3), optional
        Deformation gradient that makes the planned cell of the reference cell, its atoms moved affinely.

    Raises
    ------
    MismatchError
        Another composition, cell or arrangement of atoms; the message says which, and by how much the cell drifted.
    """
    if len(returned.numbers) != len(crystal.numbers):
        raise MismatchError(f"{len(returned.numbers)} atoms instead of {len(crystal.numbers)}")
    same_order = np.array_equal(returned.numbers, crystal.numbers)
    if not same_order and sorted(returned.numbers) != sorted(crystal.numbers):
        raise MismatchError(f"another composition than planned: {_formula(returned.numbers)} instead of {crystal.formula}")
    lattice = crystal.lattice if gradient is None else crystal.lattice @ gradient.T
    plain = _plain(lattice, crystal.positions, returned) if same_order else None
    if plain is not None and plain.farthest <= CLOSE:
        return plain
    planned = crystal if gradient is None else crystal.deformed(gradient)
    tolerance = strain_tolerance(planned.lattice, returned.lattice_precision)
    best = _search(planned, returned, tolerance)
    if best is not None and (plain is None or best.farthest < 0.5 * plain.farthest):
        return best
    if plain is not None:
        return plain
    raise _reason(planned, returned, tolerance)


def _plain(lattice: FloatArray, positions: FloatArray, returned: Returned) -> Match | None:
    """The match in the planned basis and order; None when the cell is not the planned one in this basis."""
    turned = gradient_between(lattice, returned.lattice)
    drift = 0.5 * float(np.abs(turned.T @ turned - _ONE).max())
    if drift > LEAST_TOLERANCE and drift > strain_tolerance(lattice, returned.lattice_precision):
        return None
    rotation = polar(turned)[0] if drift > 1e-9 else turned
    if np.linalg.det(rotation) < 0:
        return None
    moved = _moves(lattice, positions, returned.positions)
    return Match(rotation, np.arange(len(moved)), _SAME, moved, drift)


def _formula(numbers: IntArray) -> str:
    from ase.data import chemical_symbols

    return formula_of([chemical_symbols[n] for n in numbers])


def _moves(lattice: FloatArray, positions: FloatArray, fractions: FloatArray) -> FloatArray:
    """Way of each atom (n, 3), A, mean removed, from fractional coordinates (n, 3) in the planned basis and order."""
    shift = fractions - positions
    shift -= np.round(shift)
    # a whole cell shifted near half a lattice vector wraps differently for different atoms: centre on the first atom
    shift -= np.round(shift - shift[0])
    return np.asarray((shift - shift.mean(axis=0)) @ lattice)


def _search(planned: Crystal, returned: Returned, tolerance: float) -> Match | None:
    """The best of all equivalent bases, origins and orders; None when atoms fit in none."""
    best: Match | None = None
    for basis, rotation, drift in _bases(planned.lattice, returned.lattice, tolerance):
        fractions = returned.positions @ basis
        for order in _orders(planned, fractions, returned.numbers):
            moved = _moves(planned.lattice, planned.positions, fractions[order])
            found = Match(rotation, order, basis, moved, drift)
            if found.farthest <= FAR and (best is None or found.farthest < best.farthest - 1e-3):
                best = found
        if best is not None and best.farthest < 0.1 * CLOSE:
            break
    return best


def _bases(start: FloatArray, end: FloatArray, tolerance: float) -> list[tuple[IntArray, FloatArray, float]]:
    """Unimodular M, rotation R and remaining strain with end = M start R^T, the smallest remainder first.

    Both lattices are Minkowski-reduced first: between reduced bases of one lattice small integers are enough.
    """
    from ase.geometry import minkowski_reduce

    (first, p), (second, q) = minkowski_reduce(start), minkowski_reduce(end)
    steps = np.array([n for n in np.ndindex(5, 5, 5) if n != (2, 2, 2)]) - 2
    vectors = steps @ first
    lengths, wanted = np.linalg.norm(vectors, axis=1), np.linalg.norm(second, axis=1)
    choices = [np.flatnonzero(np.abs(lengths - w) <= 4 * tolerance * w).tolist() for w in wanted]
    metric = second @ second.T

    def close(i: int, j: int, a: int, b: int) -> bool:
        return abs(float(vectors[i] @ vectors[j]) - float(metric[a, b])) <= 8 * tolerance * float(wanted[a] * wanted[b])

    found = []
    for i in choices[0]:
        for j in (j for j in choices[1] if close(i, j, 0, 1)):
            for k in (k for k in choices[2] if close(i, k, 0, 2) and close(j, k, 1, 2)):
                small = steps[[i, j, k]]
                gradient = gradient_between(small @ first, second)
                if abs(round(float(np.linalg.det(small)))) != 1 or np.linalg.det(gradient) <= 0:
                    continue
                rotation, stretch = polar(gradient)
                drift = float(np.abs(stretch - np.eye(3)).max())
                if drift <= tolerance:
                    basis = np.rint(np.linalg.solve(q.astype(float), small @ p)).astype(np.int64)
                    found.append((basis, rotation, drift))
    return sorted(found, key=lambda item: int(np.abs(item[0] - np.eye(3)).sum()))


def _orders(planned: Crystal, fractions: FloatArray, numbers: IntArray) -> list[IntArray]:
    """Orders (n,) of the atoms by nearest sites, one for each origin that puts a rare atom on a planned site of its kind."""
    kinds, counts = np.unique(planned.numbers, return_counts=True)
    rare = kinds[counts.argmin()]
    anchor = fractions[np.flatnonzero(numbers == rare)[0]]
    other = planned.numbers[:, None] != numbers[None, :]
    found = []
    for site in planned.positions[planned.numbers == rare]:
        apart = (fractions + (site - anchor))[None, :, :] - planned.positions[:, None, :]
        apart -= np.round(apart)
        squares = ((apart @ planned.lattice) ** 2).sum(axis=-1)
        squares[other] = np.inf
        order = squares.argmin(axis=1)
        if len(np.unique(order)) == len(order) and squares[np.arange(len(order)), order].max() <= (2 * FAR) ** 2:
            found.append(order)
    return found


def _reason(planned: Crystal, returned: Returned, tolerance: float) -> MismatchError:
    """Why nothing fits."""
    if _bases(planned.lattice, returned.lattice, tolerance):
        if np.linalg.det(gradient_between(planned.lattice, returned.lattice)) < 0:
            return MismatchError(
                "the returned cell has the other handedness, and its atoms are not where an inversion puts them"
            )
        return MismatchError("the cell is the planned one, but its atoms are not on the planned sites in any order")
    drift = _drift(planned.lattice, returned.lattice)
    if drift is None:
        return MismatchError(f"another cell: {_volume(returned):.2f} A^3 instead of {planned.volume:.2f} A^3")
    size, volume = drift
    return MismatchError(
        f"the returned cell differs from the planned one by a strain of {100 * size:.3g} % (volume {100 * volume:+.3g} %)",
        "cell-drifted",
    )


def _drift(start: FloatArray, end: FloatArray) -> tuple[float, float] | None:
    """Largest strain and change of volume (fractions) between two lattices, None when they are not alike."""
    gradient = gradient_between(start, end)
    if np.linalg.det(gradient) <= 0:
        return None
    size = float(np.abs(polar(gradient)[1] - np.eye(3)).max())
    if size > LARGEST_DRIFT:
        loose = _bases(start, end, LARGEST_DRIFT / 4)
        if not loose:
            return None
        size = min(drift for _, _, drift in loose)
    return size, float(abs(np.linalg.det(gradient)) - 1.0)


def _volume(returned: Returned) -> float:
    return float(abs(np.linalg.det(returned.lattice)))
