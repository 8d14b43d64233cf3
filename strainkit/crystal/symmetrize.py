"""Atoms moved onto the exact positions of a space group that rounding has blurred."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np

from strainkit.crystal.crystal import Crystal
from strainkit.crystal.spacegroup import DEFAULT_SYMPREC, operations
from strainkit.crystal.symmetry import mean_lattice
from strainkit.findings import Finding, finding
from strainkit.tensors.arrays import FloatArray, IntArray
from strainkit.tensors.strain import gradient_between, green_lagrange, largest_principal

__all__ = ["Symmetrized", "symmetrize"]


@dataclass(frozen=True)
class Symmetrized:
    """A crystal on the positions of its group, and how far it had to go.

    Attributes
    ----------
    crystal : Crystal
        Same setting, orientation, order and labels.
    largest_move : float
        Largest displacement of an atom against the cell, angstrom.
    cell_strain : float
        Largest principal strain between the old and the new cell.
    """

    crystal: Crystal
    largest_move: float
    cell_strain: float

    @property
    def finding(self) -> Finding:
        """What was done, as a finding."""
        text = f"atoms moved by at most {self.largest_move:.2g} A, the cell strained by at most {100 * self.cell_strain:.2g} %"
        return finding("symmetrized", self.crystal.source or self.crystal.name, text)


def symmetrize(crystal: Crystal, symprec: float = DEFAULT_SYMPREC) -> Symmetrized:
    """Average the cell and the atoms over the symmetry operations found at a tolerance.

    The metric of the lattice is averaged and reached without a rotation; every atom moves to the mean of its symmetry
    images. Setting, orientation and order stay as given.

    Parameters
    ----------
    crystal : Crystal
    symprec : float
        Distance tolerance of the symmetry search, angstrom.
    """
    rotations, translations, kinds = operations(crystal, symprec)
    lattice = mean_lattice(crystal.lattice, rotations)
    positions = crystal.positions
    shift = np.zeros_like(positions)
    for rotation, translation in zip(rotations, translations, strict=True):
        images = positions @ rotation.T + translation
        source, away = _nearest(images, positions, kinds, crystal.lattice)
        np.add.at(shift, source, away)
    shift /= len(rotations)
    shift -= shift.mean(axis=0)  # the origin is only as exact as the atoms
    moments = crystal.magnetic_moments
    return Symmetrized(
        crystal=replace(
            crystal,
            lattice=lattice,
            positions=positions + shift,
            magnetic_moments=None if moments is None else np.array([moments[kinds == kind].mean() for kind in kinds]),
        ),
        largest_move=float(np.linalg.norm(shift @ crystal.lattice, axis=1).max()),
        cell_strain=largest_principal(green_lagrange(gradient_between(crystal.lattice, lattice))),
    )


def _nearest(images: FloatArray, positions: FloatArray, kinds: IntArray, lattice: FloatArray) -> tuple[IntArray, FloatArray]:
    """For every image the number of the atom of its kind that it falls onto, and the fractional way from there to it."""
    atoms = np.empty(len(images), dtype=np.int64)
    ways = np.empty_like(images)
    for kind in np.unique(kinds):
        mine = np.flatnonzero(kinds == kind)
        way = images[mine, None] - positions[None, mine]
        way -= np.round(way)
        nearest = np.linalg.norm(way @ lattice, axis=-1).argmin(axis=1)
        atoms[mine] = mine[nearest]
        ways[mine] = way[np.arange(len(mine)), nearest]
    return atoms, ways
