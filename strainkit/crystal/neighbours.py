"""Neighbours of every atom under periodic boundaries, and which of them are bonded."""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property
from typing import TYPE_CHECKING

import numpy as np

from strainkit.crystal.pairs import close_pairs
from strainkit.tensors.arrays import BoolArray, FloatArray, IntArray

if TYPE_CHECKING:
    from strainkit.crystal.crystal import Crystal

__all__ = ["BOND_TOLERANCE", "Neighbours", "find_neighbours", "is_metal"]

#: atoms are bonded when they are closer than the sum of their covalent radii plus this, angstrom
BOND_TOLERANCE = 0.4
#: bonds of metals are longer than that sum by more: with a nonmetal (PbS 1.18), with a metal (Pb 1.20) or hydrogen (LiH 1.28)
METAL_STRETCH = 1.25
METALLIC_STRETCH = 1.3
#: a hydrogen that binds a nonmetal binds another one only if that is at most this many times farther away
HYDROGEN_SHARE = 1.15
#: contacts are listed at least up to this distance, angstrom
CONTACT_RANGE = 2.5

_NONMETALS = (1, 2, *range(5, 11), *range(14, 19), *range(32, 37), *range(51, 55), 85, 86)


def is_metal(numbers: IntArray) -> BoolArray:
    """Which atomic numbers are metals; B, Si, Ge, As, Sb and Te are not counted as such."""
    return ~np.isin(numbers, (0, *_NONMETALS))


@dataclass(frozen=True)
class Neighbours:
    """Pairs of atoms, each in both directions.

    Attributes
    ----------
    first, second : (m,)
        Atoms of each pair.
    shifts : (m, 3)
        Lattice translation of the second atom: it is at positions[second] + shift (fractional).
    vectors : (m, 3)
        From the first atom to the second, angstrom.
    lengths : (m,)
        Angstrom.
    bonded : (m,)
        Closer than covalent radii allow two atoms to be without a bond.
    """

    first: IntArray
    second: IntArray
    shifts: IntArray
    vectors: FloatArray
    lengths: FloatArray
    bonded: BoolArray

    @cached_property
    def bonds(self) -> Neighbours:
        """The bonded pairs alone."""
        return self.where(self.bonded)

    def where(self, chosen: BoolArray) -> Neighbours:
        """The chosen pairs, (m,)."""
        return Neighbours(
            self.first[chosen],
            self.second[chosen],
            self.shifts[chosen],
            self.vectors[chosen],
            self.lengths[chosen],
            self.bonded[chosen],
        )

    def of_atom(self, atoms: int) -> list[IntArray]:
        """For each of `atoms` atoms the numbers of its pairs, as first atom."""
        order = np.argsort(self.first, kind="stable")
        ends = np.cumsum(np.bincount(self.first, minlength=atoms))
        return np.split(order, ends[:-1])


def find_neighbours(crystal: Crystal) -> Neighbours:
    """All pairs within bonding distance, and all within 2.5 A.

    Two atoms are bonded below the sum of their covalent radii (Cordero et al., Dalton Trans. 2008, 2832, as in ASE) plus
    0.4 A; metals also below 1.25 times that sum, to another metal or a hydrogen 1.3 times. Of two nonmetals near one hydrogen
    the farther one is bonded only when it is less than 15 % farther away: hydrogen bonds are no bonds, a proton in the
    middle binds both.
    """
    from ase.data import covalent_radii

    numbers = crystal.numbers
    radii = covalent_radii[np.clip(numbers, 0, len(covalent_radii) - 1)]
    metal = is_metal(numbers)
    soft = metal | (numbers == 1)
    reach = np.maximum(np.where(soft, METALLIC_STRETCH, METAL_STRETCH) * radii, radii + 0.5 * BOND_TOLERANCE)
    first, second, shifts, vectors, lengths = close_pairs(
        crystal.lattice, crystal.positions, np.maximum(reach, 0.5 * CONTACT_RANGE)
    )
    total = radii[first] + radii[second]
    any_metal, both_soft = metal[first] | metal[second], soft[first] & soft[second]
    stretch = np.where(any_metal, np.where(both_soft, METALLIC_STRETCH, METAL_STRETCH), 1.0)
    bonded = lengths < np.maximum(stretch * total, total + BOND_TOLERANCE)
    found = Neighbours(first, second, shifts, vectors, lengths, bonded)
    return Neighbours(first, second, shifts, vectors, lengths, bonded & ~_hydrogen_bonds(found, numbers))


def _hydrogen_bonds(found: Neighbours, numbers: IntArray) -> BoolArray:
    """Bonded pairs of a hydrogen with a nonmetal that is much farther from it than its nearest one."""
    hydrogen = numbers == 1
    nonmetal = ~is_metal(numbers)
    weak = np.zeros(len(found.first), dtype=bool)
    for one, other in ((found.first, found.second), (found.second, found.first)):
        mine = found.bonded & hydrogen[one] & nonmetal[other]
        nearest = np.full(len(numbers), np.inf)
        np.minimum.at(nearest, one[mine], found.lengths[mine])
        weak |= mine & (found.lengths > HYDROGEN_SHARE * nearest[one])
    return weak
