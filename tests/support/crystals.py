"""Synthetic crystals of every Laue class in their conventional cells, and random ways to write them down."""

from __future__ import annotations

import numpy as np
from ase.spacegroup import crystal
from scipy.spatial.transform import Rotation

from strainkit.crystal.crystal import Crystal

#: Laue class -> (space group number, cell lengths and angles, sites); invented structures, only their symmetry matters
_SITES = [(0.13, 0.21, 0.07), (0.37, 0.09, 0.31)]
SPACE_GROUPS = {
    "-1": (2, (5.1, 6.3, 7.7, 82.0, 97.0, 105.0)),
    "2/m": (14, (5.3, 7.9, 9.1, 90.0, 107.0, 90.0)),
    "mmm": (62, (5.7, 7.3, 9.9, 90.0, 90.0, 90.0)),
    "4/m": (88, (6.1, 6.1, 10.3, 90.0, 90.0, 90.0)),
    "4/mmm": (92, (6.3, 6.3, 8.9, 90.0, 90.0, 90.0)),
    "-3": (148, (7.1, 7.1, 12.7, 90.0, 90.0, 120.0)),
    "-3m": (152, (6.7, 6.7, 9.3, 90.0, 90.0, 120.0)),
    "6/m": (176, (7.9, 7.9, 9.7, 90.0, 90.0, 120.0)),
    "6/mmm": (178, (7.7, 7.7, 12.1, 90.0, 90.0, 120.0)),
    "m-3": (205, (9.1, 9.1, 9.1, 90.0, 90.0, 90.0)),
    "m-3m": (212, (9.7, 9.7, 9.7, 90.0, 90.0, 90.0)),
}


def conventional(laue: str) -> Crystal:
    """Synthetic crystal of a Laue class: conventional cell, standard orientation (a along x, b in the xy plane)."""
    number, parameters = SPACE_GROUPS[laue]
    atoms = crystal(["Mg", "O"], basis=_SITES, spacegroup=number, cellpar=parameters)
    return Crystal.from_atoms(atoms, name=f"synthetic-{number}")


def random_rotation(rng: np.random.Generator) -> np.ndarray:
    """Uniformly random proper rotation (3, 3)."""
    return Rotation.random(random_state=np.random.RandomState(rng.integers(2**31))).as_matrix()


def random_unimodular(rng: np.random.Generator) -> np.ndarray:
    """Random integer matrix (3, 3) of determinant one with small entries."""
    matrix = np.eye(3, dtype=int)
    for _ in range(3):
        i, j = rng.choice(3, 2, replace=False)
        step = np.eye(3, dtype=int)
        step[i, j] = rng.choice([-1, 1])
        matrix = step @ matrix
    return matrix


def rewritten(crystal: Crystal, rotation: np.ndarray, basis: np.ndarray, order: np.ndarray | None = None) -> Crystal:
    """The same crystal turned, in another basis of its lattice (rows basis @ lattice), with its atoms in another order."""
    order = np.arange(len(crystal.numbers)) if order is None else order
    return Crystal(
        lattice=basis @ crystal.lattice @ rotation.T,
        positions=((crystal.positions @ np.linalg.inv(basis)) % 1.0)[order],
        numbers=crystal.numbers[order],
        name=crystal.name,
    )


def supercell(crystal: Crystal, repeats: tuple[int, int, int]) -> Crystal:
    """The same crystal in a larger cell."""
    return Crystal.from_atoms(crystal.to_atoms() * repeats, name=crystal.name)
