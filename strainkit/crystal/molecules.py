"""Molecules of a crystal, found from its bonds, and moved as bodies when the cell is strained."""

from __future__ import annotations

from collections import Counter
from dataclasses import dataclass, replace
from typing import Any, Literal, get_args

import numpy as np

from strainkit.crystal.crystal import Crystal, formula_of
from strainkit.crystal.neighbours import Neighbours, find_neighbours, is_metal
from strainkit.tensors.arrays import BoolArray, FloatArray, IntArray

__all__ = ["Molecules", "Part", "find_molecules"]

Part = Literal["molecule", "chain", "layer", "network", "unbonded"]
_PERIODIC: dict[int, Part] = {1: "chain", 2: "layer", 3: "network"}


@dataclass(frozen=True)
class Molecules:
    """The parts that the bonds of a crystal leave unconnected.

    Attributes
    ----------
    part : (n,)
        Number of the part that each atom belongs to, from 0.
    images : (n, 3)
        Lattice translation that brings each atom (at its fractional position as given) to the other atoms of its
        molecule. Without meaning where the part is not a molecule.
    kinds : tuple
        Of each part: "molecule" (finite); "chain", "layer" or "network" (endless in one, two, three directions; one
        repeat unit); "unbonded" (finite, but only of metal atoms or a lone hydrogen, hence no molecule).
    formulas : tuple of str
        Of each part, in Hill order.
    """

    part: IntArray
    images: IntArray
    kinds: tuple[Part, ...]
    formulas: tuple[str, ...]

    def __post_init__(self) -> None:
        object.__setattr__(self, "part", np.array(self.part, dtype=np.int64))
        object.__setattr__(self, "images", np.array(self.images, dtype=np.int64).reshape(-1, 3))
        count = len(self.kinds)
        if len(self.formulas) != count or not set(self.kinds) <= set(get_args(Part)) or len(self.part) != len(self.images):
            raise ValueError("parts of the crystal do not fit together")
        if not np.array_equal(np.unique(self.part), np.arange(count)):
            raise ValueError("some part of the crystal holds no atoms")

    @property
    def movable(self) -> BoolArray:
        """(n,) which atoms belong to a molecule."""
        return np.array([kind == "molecule" for kind in self.kinds])[self.part]

    @property
    def molecular(self) -> bool:
        """Does every atom belong to a molecule, and has one of these more than one atom?"""
        return bool(self.movable.all()) and len(self.kinds) < len(self.part)

    @property
    def counts(self) -> list[tuple[Part, str, int]]:
        """(kind, formula, how many in the cell), in the order of the file."""
        return [(*key, count) for key, count in Counter(zip(self.kinds, self.formulas, strict=True)).items()]

    def deformed(self, crystal: Crystal, gradient: FloatArray) -> Crystal:
        """The crystal in the lattice L F^T, each molecule moved as a body with its centre of mass.

        Molecules are shifted, not turned: F is symmetric, it has no rotation to give them. Bond lengths and angles of the
        molecules stay as they are, and so do the symmetry operations of the crystal that leave the strain as it is. Atoms
        outside molecules move affinely.

        Parameters
        ----------
        crystal : Crystal
            The cell that the molecules were found in.
        gradient : (3, 3)
            Deformation gradient F (x' = F x), symmetric.
        """
        moved = crystal.deformed(gradient)
        inverse = np.linalg.inv(np.asarray(gradient, dtype=float)).T
        back = crystal.lattice @ (inverse - np.eye(3)) @ np.linalg.inv(crystal.lattice)
        shift = (crystal.positions + self.images - self._centres(crystal)[self.part]) @ back
        return replace(moved, positions=crystal.positions + np.where(self.movable[:, None], shift, 0.0))

    def _centres(self, crystal: Crystal) -> FloatArray:
        """Centre of mass of every part, fractional."""
        from ase.data import atomic_masses

        masses = atomic_masses[crystal.numbers]
        sums = np.zeros((len(self.kinds), 3))
        np.add.at(sums, self.part, masses[:, None] * (crystal.positions + self.images))
        return sums / np.bincount(self.part, weights=masses)[:, None]

    def to_dict(self) -> dict[str, Any]:
        """JSON-ready: a summary for the reader, and what it takes to move the molecules again."""
        return {
            "counts": [{"kind": kind, "formula": formula, "count": count} for kind, formula, count in self.counts],
            "kinds": list(self.kinds),
            "formulas": list(self.formulas),
            "part_of_atom": self.part,
            "image_of_atom": self.images,
        }

    @classmethod
    def from_dict(cls, data: dict[str, Any]) -> Molecules:
        """The inverse of `to_dict`."""
        return cls(data["part_of_atom"], data["image_of_atom"], tuple(data["kinds"]), tuple(data["formulas"]))


def find_molecules(crystal: Crystal, neighbours: Neighbours | None = None) -> Molecules:
    """Molecules, chains, layers and networks of a crystal.

    A finite group of bonded atoms is a molecule, also a single nonmetal atom (the chloride of NH4Cl, an argon atom). Groups
    of metal atoms alone and a lone hydrogen are not. Bonds are those of `find_neighbours`: in ionic solids such as MgO or
    NaCl these join all ions to one network.

    Parameters
    ----------
    crystal : Crystal
    neighbours : Neighbours, optional
        Of this crystal, when they are known already.
    """
    from scipy.sparse import csr_array
    from scipy.sparse.csgraph import breadth_first_order, connected_components

    bonds = (neighbours or find_neighbours(crystal)).bonds
    atoms = len(crystal.numbers)
    steps = dict(zip(zip(bonds.first.tolist(), bonds.second.tolist(), strict=True), bonds.shifts, strict=True))
    pairs = np.array(list(steps)).reshape(-1, 2).T
    graph = csr_array((np.ones(len(steps)), pairs), shape=(atoms, atoms))
    count, part = connected_components(graph, directed=False)
    images = np.zeros((atoms, 3), dtype=np.int64)
    for root in np.unique(part, return_index=True)[1]:
        order, before = breadth_first_order(graph, root, directed=False)
        for atom in order[1:]:
            images[atom] = images[before[atom]] + steps[int(before[atom]), int(atom)]
    loops = images[bonds.first] + bonds.shifts - images[bonds.second]
    symbols = np.array(crystal.symbols)
    members = [np.flatnonzero(part == number) for number in range(count)]
    return Molecules(
        part=part,
        images=images,
        kinds=tuple(_kind(loops[part[bonds.first] == n], crystal.numbers[of]) for n, of in enumerate(members)),
        formulas=tuple(formula_of(list(symbols[of])) for of in members),
    )


def _kind(loops: IntArray, numbers: IntArray) -> Part:
    """Kind of a part from the lattice translations (k, 3) around its closed loops and from its elements."""
    rank = int(np.linalg.matrix_rank(loops)) if len(loops) else 0
    if rank:
        return _PERIODIC[rank]
    lone = len(numbers) == 1 and numbers[0] == 1
    return "unbonded" if lone or is_metal(numbers).all() else "molecule"
