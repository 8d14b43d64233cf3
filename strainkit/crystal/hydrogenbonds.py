"""Hydrogen bonds of a crystal, counted by geometry."""

from __future__ import annotations

import numpy as np

from strainkit.crystal.crystal import Crystal
from strainkit.crystal.neighbours import Neighbours, find_neighbours

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
    from ase.neighborlist import primitive_neighbor_list

    numbers = crystal.numbers
    if not (numbers == 1).any() or not np.isin(numbers, _DONORS).any():
        return 0
    bonds = (neighbours or find_neighbours(crystal)).bonds
    donated = (numbers[bonds.first] == 1) & np.isin(numbers[bonds.second], _DONORS)
    limit = {int(z): float(vdw_radii[1] + vdw_radii[z]) - _CLOSER for z in set(numbers.tolist()) & set(_ACCEPTORS)}
    pairs = {(1, z): reach for z, reach in limit.items()}
    first, second, vectors, shifts = primitive_neighbor_list(
        "ijDS", (True, True, True), crystal.lattice, crystal.positions @ crystal.lattice, pairs, numbers=numbers
    )
    count = 0
    taken = {(int(i), int(j), *map(int, s)) for i, j, s in zip(bonds.first, bonds.second, bonds.shifts, strict=True)}
    for hydrogen, to_donor in zip(bonds.first[donated], bonds.vectors[donated], strict=True):
        mine = np.flatnonzero((first == hydrogen) & np.isin(numbers[second], _ACCEPTORS))
        for k in mine:
            if (int(hydrogen), int(second[k]), *map(int, shifts[k])) in taken:
                continue
            cosine = float(vectors[k] @ to_donor / np.linalg.norm(vectors[k]) / np.linalg.norm(to_donor))
            count += np.degrees(np.arccos(np.clip(cosine, -1.0, 1.0))) > _STRAIGHTER
    return int(count)
