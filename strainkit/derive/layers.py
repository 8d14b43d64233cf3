"""Where planes pass between the atoms: covalent bonds that a flat cut crosses, and the gap between layers of molecules.

Bonds are pairs of atoms closer than 1.2 times the sum of their covalent radii (Cordero et al., Dalton Trans. 2008, 2832,
as tabulated in ASE). Molecules are what bonds hold together, ions of a salt included. In a molecular crystal a plane is judged
by how far the molecules on its two sides stay apart, or interlock, along its normal; in metals, ionic and network crystals by
the bonds (near neighbours) that it cuts.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from strainkit.crystal.crystal import Crystal
from strainkit.tensors.arrays import FloatArray, IntArray

__all__ = ["Bonds", "Cut", "Molecules", "covalent_bonds", "easiest_cut", "find_molecules"]

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
class Molecules:
    """Finite groups of bonded atoms.

    Attributes
    ----------
    count : int
        In the cell.
    of_atom : (n,)
        Number of the group of every atom, from 0.
    shifts : (n, 3)
        Lattice vectors, in cells, that bring every atom beside the first one of its group.
    """

    count: int
    of_atom: IntArray
    shifts: IntArray


@dataclass(frozen=True)
class Cut:
    """The flat cut across a direction that crosses the fewest bonds.

    Attributes
    ----------
    bonds_per_nm2 : float
        Bonds that it crosses, a square nanometre; zero between flat layers of molecules.
    gap : float
        Distance along the normal between the atoms on its two sides, angstrom, the widest there is with as few bonds. In a
        molecular crystal without a flat gap it is negative: by how much the molecules on its two sides interlock.
    layers : int
        Heights in one lattice spacing at which no bond is crossed: flat layers; zero where there are none.
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


def find_molecules(atoms: int, bonds: Bonds) -> Molecules | None:
    """Molecules of a cell with so many atoms; None when a network of bonds runs through the crystal."""
    neighbours: list[list[tuple[int, IntArray]]] = [[] for _ in range(atoms)]
    for (i, j), shift in zip(bonds.pairs, bonds.shifts, strict=True):
        neighbours[i].append((j, shift))
        neighbours[j].append((i, -shift))
    place: dict[int, IntArray] = {}
    group: dict[int, int] = {}
    count = 0
    for start in range(atoms):
        if start in place:
            continue
        place[start], group[start] = np.zeros(3, dtype=int), count
        waiting = [start]
        while waiting:
            atom = waiting.pop()
            for other, shift in neighbours[atom]:
                there = place[atom] + shift
                if other not in place:
                    place[other], group[other] = there, count
                    waiting.append(other)
                elif (place[other] != there).any():
                    return None
        count += 1
    every = range(atoms)
    return Molecules(count, np.array([group[i] for i in every]), np.array([place[i] for i in every]))


def easiest_cut(crystal: Crystal, bonds: Bonds, molecules: Molecules | None, reciprocal: FloatArray) -> Cut:
    """Where among the planes normal to a reciprocal-lattice vector the fewest bonds are cut.

    Parameters
    ----------
    crystal : Crystal
    bonds : Bonds
    molecules : Molecules or None
    reciprocal : (3,)
        Shortest reciprocal-lattice vector along the normal, 1/angstrom, given frame.
    """
    indices = np.rint(crystal.lattice @ reciprocal)  # of the cell as given, whatever the vector was made from
    spacing = 1.0 / float(np.linalg.norm(np.linalg.inv(crystal.lattice) @ indices))
    height = crystal.positions @ indices
    middles, widths = _between(height, spacing)
    ends = np.column_stack([height[bonds.pairs[:, 0]], height[bonds.pairs[:, 1]] + bonds.shifts @ indices])
    low, high = ends.min(axis=1), ends.max(axis=1)
    crossed = (np.floor(high[:, None] - middles) - np.floor(low[:, None] - middles)).sum(axis=0)
    best = np.lexsort((-widths, crossed))[0]
    area = crystal.volume / spacing / 100.0
    gap = float(widths[best])
    if molecules is not None and crossed[best] > 0:
        gap = _interlock(height + molecules.shifts @ indices, molecules, spacing)
    return Cut(float(crossed[best] / area), gap, int((crossed == 0).sum()))


def _between(heights: FloatArray, spacing: float) -> tuple[FloatArray, FloatArray]:
    """Middles (m,), in spacings, and widths (m,), angstrom, of the intervals between periodic heights (n,)."""
    levels = np.sort(heights % 1.0)
    levels = np.append(levels, levels[0] + 1.0)
    widths = np.diff(levels) * spacing
    wide = widths > _SAME_HEIGHT
    return (0.5 * (levels[1:] + levels[:-1]))[wide], widths[wide]


def _interlock(heights: FloatArray, molecules: Molecules, spacing: float) -> float:
    """Largest distance, angstrom, of the molecules above a cut from those below it, as their centres divide them."""
    every = [heights[molecules.of_atom == number] for number in range(molecules.count)]
    centre, low, high = np.array([(h.mean(), h.min(), h.max()) for h in every]).T
    cuts, _ = _between(centre, spacing)
    below = np.floor(cuts[:, None] - centre)
    return float(((low + below + 1.0).min(axis=1) - (high + below).max(axis=1)).max() * spacing)
