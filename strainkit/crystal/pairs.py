"""Pairs of atoms closer than some distance, under periodic boundaries: one search tree over the images about the cell."""

from __future__ import annotations

from typing import NamedTuple

import numpy as np

from strainkit.tensors.arrays import FloatArray, IntArray

__all__ = ["Pairs", "close_pairs"]


class Pairs(NamedTuple):
    """Pairs in both directions, by first atom, second atom and shift.

    first, second (m,); shifts (m, 3) lattice translation of the second atom; vectors (m, 3) from the first to the second and
    lengths (m,), angstrom.
    """

    first: IntArray
    second: IntArray
    shifts: IntArray
    vectors: FloatArray
    lengths: FloatArray


def close_pairs(lattice: FloatArray, positions: FloatArray, reach: FloatArray) -> Pairs:
    """Pairs closer than the sum of their reaches; an atom and its own images count, an atom and itself does not.

    Parameters
    ----------
    lattice : (3, 3)
        Rows, angstrom.
    positions : (n, 3)
        Fractional, wrapped or not.
    reach : (n,)
        Angstrom.
    """
    from scipy.spatial import cKDTree

    most = 2.0 * float(reach.max(initial=0.0))
    heights = 1.0 / np.linalg.norm(np.linalg.inv(lattice), axis=0)
    margin = most / heights * (1.0 + 1e-9) + 1e-9
    home = np.floor(positions).astype(np.int64)
    inside = positions - home
    spans = [np.arange(-int(np.ceil(m)), int(np.ceil(m)) + 1) for m in margin]
    steps = np.stack(np.meshgrid(*spans, indexing="ij"), axis=-1).reshape(-1, 3)
    copies = inside[None] + steps[:, None]
    step, atom = np.nonzero(((copies >= -margin) & (copies <= 1.0 + margin)).all(axis=-1))
    images = copies[step, atom] @ lattice
    centres = inside @ lattice
    near = cKDTree(centres).sparse_distance_matrix(cKDTree(images), most, output_type="ndarray")
    first, image = near["i"].astype(np.int64), near["j"].astype(np.int64)
    second, moved = atom[image], steps[step[image]]
    vectors = images[image] - centres[first]
    lengths = np.linalg.norm(vectors, axis=1)
    itself = (first == second) & (moved == 0).all(axis=1)
    keep = np.flatnonzero((lengths < reach[first] + reach[second]) & ~itself)
    # shifts of one pair differ from its steps by a constant
    places = np.ravel_multi_index(tuple((moved[keep] - steps[0]).T), tuple(2 * -steps[0] + 1))
    order = np.lexsort((places, first[keep] * len(positions) + second[keep]))
    keep = keep[order]
    shifts = moved[keep] - home[second[keep]] + home[first[keep]]
    return Pairs(first[keep], second[keep], shifts, vectors[keep], lengths[keep])
