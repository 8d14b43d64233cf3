"""One k-mesh and one real-space grid for a whole strain set, chosen from the reference cell.

A program that chooses for itself may choose differently for a strained cell, and the jump looks like stress.
"""

from __future__ import annotations

from collections.abc import Iterable
from itertools import count

import numpy as np

from strainkit.crystal.crystal import Crystal
from strainkit.crystal.kpoints import kpoint_mesh
from strainkit.tensors.arrays import FloatArray, IntArray

__all__ = ["DEFAULT_KSPACING", "fixed_grid", "k_mesh"]

#: largest distance between k-points along a reciprocal vector, 1/A, 2 pi included
DEFAULT_KSPACING = 0.25


def k_mesh(crystal: Crystal, spacing: float, odd: bool = False) -> tuple[int, int, int]:
    """Gamma-centred mesh of the reference cell, its numbers rounded up to odd ones for programs that move even meshes."""
    one, two, three = kpoint_mesh(crystal, spacing)
    return (one | 1, two | 1, three | 1) if odd else (one, two, three)


def fixed_grid(
    lattices: Iterable[FloatArray], largest: float, multiples: IntArray | tuple[int, int, int] = (1, 1, 1)
) -> tuple[int, int, int]:
    """Points of a Fourier grid that holds every wave vector up to `largest` in every one of the cells.

    Parameters
    ----------
    lattices : iterable of (3, 3)
        All cells of the set, rows, angstrom: the grid must hold the largest of them.
    largest : float
        Largest wave vector, 1/A, 2 pi included.
    multiples : (3,)
        Each number of points is a multiple of this, so that the symmetry operations of the crystal map the grid to itself.

    Returns
    -------
    tuple of int
        Products of 2, 3 and 5, which every Fourier library takes.
    """
    lengths = np.max([np.linalg.norm(lattice, axis=1) for lattice in lattices], axis=0)
    needed = 2 * np.floor(largest * lengths / (2.0 * np.pi) + 1e-9).astype(int) + 1
    one, two, three = (
        next(n for n in count(int(m), int(m)) if n >= least and _smooth(n)) for least, m in zip(needed, multiples, strict=True)
    )
    return one, two, three


def _smooth(number: int) -> bool:
    for prime in (2, 3, 5):
        while number % prime == 0:
            number //= prime
    return number == 1
