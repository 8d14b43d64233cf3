"""Space-group operations of a cell as it is given: Cartesian rotations and how they permute the atoms."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from strainkit.crystal.crystal import Crystal
from strainkit.crystal.symmetry import species, spglib_raises
from strainkit.errors import InputError
from strainkit.tensors.arrays import FloatArray, IntArray

__all__ = ["Operations", "cell_operations"]


@dataclass(frozen=True)
class Operations:
    """Operations of the cell.

    Attributes
    ----------
    cartesian : (m, 3, 3)
        Orthogonal matrices, improper ones included, given frame.
    permutations : (m, n)
        Atom i goes to the place of atom permutations[g, i].
    """

    cartesian: FloatArray
    permutations: IntArray


def cell_operations(crystal: Crystal, symprec: float) -> Operations:
    """All operations of a cell (a supercell has its translations among them).

    Raises
    ------
    InputError
        When spglib finds none.
    """
    import spglib
    from scipy.spatial import cKDTree

    kinds = species(crystal)
    cell = (crystal.lattice.tolist(), crystal.positions.tolist(), kinds.tolist())
    with spglib_raises():
        found = spglib.get_symmetry_dataset(cell, symprec=symprec)
    if found is None:
        raise InputError(f"no symmetry found at a tolerance of {symprec:g} A", crystal.name)
    columns = crystal.lattice.T
    cartesian = columns @ found.rotations @ np.linalg.inv(columns)
    u, _, vt = np.linalg.svd(cartesian)
    permutations = np.empty((len(found.rotations), len(kinds)), dtype=np.int64)
    for kind in np.unique(kinds):
        mine = np.flatnonzero(kinds == kind)
        places = crystal.positions[mine] % 1.0 % 1.0
        tree = cKDTree(places, boxsize=1.0)
        for g, (w, t) in enumerate(zip(found.rotations, found.translations, strict=True)):
            _, nearest = tree.query((places @ w.T + t) % 1.0 % 1.0)
            permutations[g, mine] = mine[nearest]
    return Operations(u @ vt, permutations)
