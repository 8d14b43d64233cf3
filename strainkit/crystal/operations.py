"""Space-group operations of a crystal and what they do to its atoms, also where the given cell is a supercell.

Fields with the period of the crystal (forces on atoms under a homogeneous strain, their displacements) are the same on all
atoms that a lattice translation of the crystal maps to each other. Operations therefore act on such classes of atoms, and none
is lost because a supercell does not have its lattice symmetry.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from strainkit.crystal.crystal import Crystal
from strainkit.crystal.spacegroup import space_group_data, spglib_raises
from strainkit.errors import InputError
from strainkit.tensors.arrays import BoolArray, FloatArray, IntArray

__all__ = ["Operations", "crystal_operations"]


@dataclass(frozen=True)
class Operations:
    """Operations of a crystal.

    Attributes
    ----------
    cartesian : (m, 3, 3)
        Orthogonal matrices, improper ones included, given frame.
    classes : (n,)
        Class of each atom: atoms that lattice translations map to each other share one.
    permutations : (m, c)
        Atoms of class i go to the places of class permutations[g, i].
    """

    cartesian: FloatArray
    classes: IntArray
    permutations: IntArray

    def average(self, fields: FloatArray) -> FloatArray:
        """Mean (..., c, 3) over each class of fields on the atoms (..., n, 3)."""
        share = (self.classes[None, :] == np.arange(self.permutations.shape[1])[:, None]).astype(float)
        return np.asarray((share / share.sum(axis=1, keepdims=True)) @ fields)

    def project(self, field: FloatArray, keeps: BoolArray) -> FloatArray:
        """The part of a field on the atoms (n, 3) that the operations marked in `keeps` (m,), a group, leave unchanged."""
        means = self.average(field)
        total = np.zeros_like(means)
        for rotation, permutation in zip(self.cartesian[keeps], self.permutations[keeps], strict=True):
            total[permutation] += means @ rotation.T
        return np.asarray(total[self.classes] / keeps.sum())


def crystal_operations(crystal: Crystal, symprec: float) -> Operations:
    """All operations of the crystal, one for each element of its point group and centring translation.

    Raises
    ------
    InputError
        When spglib finds none, or the atoms do not obey those that it found.
    """
    import spglib
    from scipy.spatial import cKDTree

    data, kinds = space_group_data(crystal, symprec)
    with spglib_raises():
        table = spglib.get_symmetry_from_database(data.hall_number) or {}
    rotations, translations = np.array(table["rotations"]), np.array(table["translations"])
    centring = translations[(rotations == np.eye(3, dtype=int)).all(axis=(1, 2))]
    # fractional coordinates in the standard cell, in which the tabulated operations act
    places = crystal.positions @ data.transformation_matrix.T + data.origin_shift
    columns = (np.linalg.inv(data.transformation_matrix).T @ crystal.lattice).T
    copies = (places[:, None, :] + centring[None, :, :]).reshape(-1, 3) % 1.0 % 1.0
    owners = np.repeat(np.arange(len(places)), len(centring))
    tree = cKDTree(copies, boxsize=1.0)
    reach = max(10.0 * symprec, 0.1) / float(np.linalg.norm(columns, axis=0).min())
    classes = -np.ones(len(places), dtype=np.int64)
    for atom in range(len(places)):
        if classes[atom] < 0:
            same = owners[tree.query_ball_point(places[atom] % 1.0 % 1.0, reach)]
            classes[same[kinds[same] == kinds[atom]]] = classes.max() + 1
    first = np.unique(classes, return_index=True)[1]
    permutations = np.empty((len(rotations), len(first)), dtype=np.int64)
    for g, (w, t) in enumerate(zip(rotations, translations, strict=True)):
        away, nearest = tree.query((places[first] @ w.T + t) % 1.0 % 1.0)
        permutations[g] = classes[owners[nearest]]
        if away.max() > reach or len(set(permutations[g])) < len(first):
            raise InputError("the atoms do not obey the symmetry found", crystal.source or crystal.name, "Try --symmetrize.")
    cartesian = columns @ rotations @ np.linalg.inv(columns)
    u, _, vt = np.linalg.svd(cartesian)
    return Operations(u @ vt, classes, permutations)
