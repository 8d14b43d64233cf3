"""Where planes pass between the atoms: covalent bonds that a lattice plane cuts, and the gap it finds.

Bonds are pairs of atoms closer than 1.2 times the sum of their covalent radii (Cordero et al., Dalton Trans. 2008, 2832,
as tabulated in ASE). In a molecular crystal a plane that cuts none separates layers of molecules; in metals and ionic
crystals the count is of nearest neighbours.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from strainkit.crystal.crystal import Crystal
from strainkit.tensors.arrays import FloatArray, IntArray

__all__ = ["Bonds", "Cut", "covalent_bonds", "easiest_cut", "molecules_in_cell"]

#: two atoms are bonded below this multiple of the sum of their covalent radii
BOND_FACTOR = 1.2
#: atoms whose heights differ by less lie in one plane, angstrom
_SAME_HEIGHT = 0.02


@dataclass(frozen=True)
class Bonds:
    """Covalent bonds of a cell, each once.

    Attributes
    ----------
    pairs : (b, 2)
        Indices of the atoms.
    shifts : (b, 3)
        Lattice vectors, in cells, to add to the second atom.
    """

    pairs: IntArray
    shifts: IntArray


@dataclass(frozen=True)
class Cut:
    """The height at which a plane cuts the fewest bonds.

    Attributes
    ----------
    bonds_per_nm2 : float
        Bonds that it cuts, a square nanometre; zero between molecular layers.
    gap : float
        Distance between the planes of atoms on either side, angstrom: the widest there is with as few bonds.
    layers : int
        Heights in one lattice spacing at which no bond is cut: layers of molecules; zero where every plane cuts some.
    """

    bonds_per_nm2: float
    gap: float
    layers: int


def covalent_bonds(crystal: Crystal, factor: float = BOND_FACTOR) -> Bonds:
    """Bonds from covalent radii under periodic boundaries."""
    from ase.data import covalent_radii
    from ase.neighborlist import neighbor_list

    first, second, shifts = neighbor_list("ijS", crystal.to_atoms(), factor * covalent_radii[crystal.numbers])
    order = np.column_stack([first, second, shifts])
    back = np.column_stack([second, first, -shifts])
    differs = order != back
    column = differs.argmax(axis=1)
    row = np.arange(len(order))
    once = order[row, column] < back[row, column]
    return Bonds(np.column_stack([first, second])[once], shifts[once])


def molecules_in_cell(atoms: int, bonds: Bonds) -> int | None:
    """Number of molecules in the cell; None when a network of bonds runs through the crystal."""
    neighbours: list[list[tuple[int, IntArray]]] = [[] for _ in range(atoms)]
    for (i, j), shift in zip(bonds.pairs, bonds.shifts, strict=True):
        neighbours[i].append((j, shift))
        neighbours[j].append((i, -shift))
    place: dict[int, IntArray] = {}
    count = 0
    for start in range(atoms):
        if start in place:
            continue
        count += 1
        place[start] = np.zeros(3, dtype=int)
        waiting = [start]
        while waiting:
            atom = waiting.pop()
            for other, shift in neighbours[atom]:
                there = place[atom] + shift
                if other not in place:
                    place[other] = there
                    waiting.append(other)
                elif (place[other] != there).any():
                    return None
    return count


def easiest_cut(crystal: Crystal, bonds: Bonds, reciprocal: FloatArray) -> Cut:
    """Where among the planes normal to a reciprocal-lattice vector the fewest bonds are cut.

    Parameters
    ----------
    crystal : Crystal
    bonds : Bonds
    reciprocal : (3,)
        Shortest reciprocal-lattice vector along the normal, 1/angstrom, given frame.
    """
    indices = np.rint(crystal.lattice @ reciprocal)  # of the cell as given, whatever the vector was made from
    spacing = 1.0 / float(np.linalg.norm(np.linalg.inv(crystal.lattice) @ indices))
    height = crystal.positions @ indices
    levels = np.sort(height % 1.0)
    levels = np.append(levels, levels[0] + 1.0)
    open_ = np.diff(levels) * spacing > _SAME_HEIGHT
    middles, widths = (0.5 * (levels[1:] + levels[:-1]))[open_], (np.diff(levels) * spacing)[open_]
    ends = np.column_stack([height[bonds.pairs[:, 0]], height[bonds.pairs[:, 1]] + bonds.shifts @ indices])
    low, high = ends.min(axis=1), ends.max(axis=1)
    crossed = (np.floor(high[:, None] - middles) - np.floor(low[:, None] - middles)).sum(axis=0)
    best = np.lexsort((-widths, crossed))[0]
    area = crystal.volume / spacing / 100.0
    return Cut(float(crossed[best] / area), float(widths[best]), int((crossed == 0).sum()))
