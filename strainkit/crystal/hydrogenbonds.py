"""Hydrogen bonds of a crystal, counted by geometry."""

from __future__ import annotations

import numpy as np

from strainkit.crystal.crystal import Crystal
from strainkit.crystal.neighbours import Neighbours, find_neighbours
from strainkit.crystal.pairs import close_pairs

__all__ = ["count_hydrogen_bonds"]

#: N, O, F give and take hydrogen bonds; S, Cl, Br, I take them
_DONORS = (7, 8, 9)
_ACCEPTORS = (7, 8, 9, 16, 17, 35, 53)
#: H...A closer than the sum of van der Waals radii by this, angstrom, and D-H...A above this, degrees (common practice, no
#: source)
_CLOSER, _STRAIGHTER = 0.2, 120.0


def count_hydrogen_bonds(crystal: Crystal, neighbours: Neighbours | None = None) -> int:
    """Hydrogen bonds D-H...A a cell, D being N, O or F and A also S, Cl, Br or I; two acceptors of one hydrogen count twice.

    Parameters
    ----------
    crystal : Crystal
    neighbours : Neighbours, optional
        Of this crystal, when they are known already.
    """
    from ase.data.vdw import vdw_radii

    numbers = crystal.numbers
    if not (numbers == 1).any() or not np.isin(numbers, _DONORS).any():
        return 0
    bonds = (neighbours or find_neighbours(crystal)).bonds
    donated = (numbers[bonds.first] == 1) & np.isin(numbers[bonds.second], _DONORS)
    acceptor = np.isin(numbers, _ACCEPTORS)
    reach = np.where(acceptor | (numbers == 1), np.nan_to_num(vdw_radii)[numbers] - 0.5 * _CLOSER, 0.0)
    near = close_pairs(crystal.lattice, crystal.positions, reach)
    count = 0
    taken = {(int(i), int(j), *map(int, s)) for i, j, s in zip(bonds.first, bonds.second, bonds.shifts, strict=True)}
    for hydrogen, to_donor in zip(bonds.first[donated], bonds.vectors[donated], strict=True):
        for k in np.flatnonzero((near.first == hydrogen) & acceptor[near.second]):
            if (int(hydrogen), int(near.second[k]), *map(int, near.shifts[k])) in taken:
                continue
            cosine = float(near.vectors[k] @ to_donor / near.lengths[k] / np.linalg.norm(to_donor))
            count += np.degrees(np.arccos(np.clip(cosine, -1.0, 1.0))) > _STRAIGHTER
    return int(count)
