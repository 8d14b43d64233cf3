"""Where planes pass between the atoms: covalent bonds that a flat cut crosses, and the gap between layers of molecules.

Bonds and molecules are those of `strainkit.crystal.molecules`, ions of a salt included. In a molecular crystal a plane is
judged by how far the molecules on its two sides stay apart, or interlock, along its normal; in metals, ionic and network
crystals by the bonds (near neighbours) that it cuts.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from strainkit.crystal.crystal import Crystal
from strainkit.crystal.molecules import Molecules, find_molecules
from strainkit.crystal.neighbours import Neighbours, find_neighbours
from strainkit.tensors.arrays import FloatArray

__all__ = ["Cut", "bonds_and_molecules", "easiest_cut"]

#: atoms whose heights differ by less lie in one plane, angstrom
_SAME_HEIGHT = 0.02


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


def bonds_and_molecules(crystal: Crystal) -> tuple[Neighbours, Molecules | None]:
    """Bonds, each once, and the molecules; None when some atoms belong to chains, layers, a network or a metal."""
    neighbours = find_neighbours(crystal)
    molecules = find_molecules(crystal, neighbours)
    bonds = neighbours.bonds
    order = np.column_stack([bonds.first, bonds.second, bonds.shifts])
    back = np.column_stack([bonds.second, bonds.first, -bonds.shifts])
    column = (order != back).argmax(axis=1)
    row = np.arange(len(order))
    return bonds.where(order[row, column] < back[row, column]), molecules if molecules.movable.all() else None


def easiest_cut(crystal: Crystal, bonds: Neighbours, molecules: Molecules | None, reciprocal: FloatArray) -> Cut:
    """Where among the planes normal to a reciprocal-lattice vector the fewest bonds are cut.

    Parameters
    ----------
    crystal : Crystal
    bonds : Neighbours
        Each bond once.
    molecules : Molecules or None
    reciprocal : (3,)
        Shortest reciprocal-lattice vector along the normal, 1/angstrom, given frame.
    """
    indices = np.rint(crystal.lattice @ reciprocal)  # of the cell as given, whatever the vector was made from
    spacing = 1.0 / float(np.linalg.norm(np.linalg.inv(crystal.lattice) @ indices))
    height = crystal.positions @ indices
    middles, widths = _between(height, spacing)
    ends = np.column_stack([height[bonds.first], height[bonds.second] + bonds.shifts @ indices])
    low, high = ends.min(axis=1), ends.max(axis=1)
    crossed = (np.floor(high[:, None] - middles) - np.floor(low[:, None] - middles)).sum(axis=0)
    best = np.lexsort((-widths, crossed))[0]
    area = crystal.volume / spacing / 100.0
    gap = float(widths[best])
    if molecules is not None and crossed[best] > 0:
        gap = _interlock(height + molecules.images @ indices, molecules, spacing)
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
    every = [heights[molecules.part == number] for number in range(len(molecules.kinds))]
    centre, low, high = np.array([(h.mean(), h.min(), h.max()) for h in every]).T
    cuts, _ = _between(centre, spacing)
    below = np.floor(cuts[:, None] - centre)
    return float(((low + below + 1.0).min(axis=1) - (high + below).max(axis=1)).max() * spacing)
