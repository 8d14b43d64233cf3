"""Pairs of atoms against ASE's neighbour list, and hydrogen bonds against what the crystals are known for."""

from __future__ import annotations

import numpy as np
import pytest
from ase.neighborlist import primitive_neighbor_list
from hypothesis import given, settings
from hypothesis import strategies as st
from support.crystals import random_rotation, random_unimodular, rewritten
from support.molecular import dry_ice, urea

from strainkit.crystal.crystal import Crystal
from strainkit.crystal.hydrogenbonds import count_hydrogen_bonds
from strainkit.crystal.pairs import close_pairs
from strainkit.crystal.read import read_crystal
from strainkit.shipped import shipped_folder


@settings(max_examples=60, deadline=None)
@given(seed=st.integers(0, 10**6), atoms=st.integers(1, 12), skew=st.floats(0.0, 3.0))
def test_pairs_are_those_of_ase(seed, atoms, skew):
    """Flat and skew cells, atoms inside and outside of them, reaches beyond the cell."""
    rng = np.random.default_rng(seed)
    lattice = np.diag(rng.uniform(1.5, 9.0, 3)) + skew * np.tril(rng.normal(size=(3, 3)), -1)
    positions = rng.uniform(-2.0, 3.0, size=(atoms, 3))
    reach = rng.uniform(0.3, 2.5, size=atoms)
    mine = close_pairs(lattice, positions, reach)
    i, j, shifts, lengths = primitive_neighbor_list("ijSd", (True,) * 3, lattice, positions @ lattice, reach)
    ours = np.column_stack([mine.first, mine.second, mine.shifts])
    theirs = np.column_stack([i, j, shifts])
    order = np.lexsort(theirs.T[::-1])
    np.testing.assert_array_equal(ours, theirs[order])
    np.testing.assert_allclose(mine.lengths, lengths[order], rtol=0, atol=1e-9)
    straight = (positions[mine.second] + mine.shifts - positions[mine.first]) @ lattice
    np.testing.assert_allclose(mine.vectors, straight, rtol=0, atol=1e-9)


#: N-H...O of urea: each oxygen takes four, eight a cell (Swaminathan et al. 1984); ammonia: each nitrogen takes three, twelve a
#: cell (Boese et al. 1997); NH4F: each ammonium gives four, eight a cell (Adrian & Feil 1969); all from memory
@pytest.mark.parametrize(
    ("crystal", "count"),
    [
        (urea(), 8),
        (read_crystal(shipped_folder("sample_cells") / "ammonia.cif"), 12),
        (dry_ice(), 0),
        (read_crystal(shipped_folder("sample_cells") / "ammonium_fluoride.cif"), 8),
        (read_crystal(shipped_folder("sample_cells") / "naphthalene.cif"), 0),
    ],
    ids=["urea", "ammonia", "dry ice", "ammonium fluoride", "naphthalene"],
)
def test_hydrogen_bonds_in_the_cell(crystal: Crystal, count: int):
    assert count_hydrogen_bonds(crystal) == count
    rng = np.random.default_rng(3)
    turned = rewritten(crystal, random_rotation(rng), random_unimodular(rng), rng.permutation(len(crystal.numbers)))
    assert count_hydrogen_bonds(turned) == count


def test_atoms_far_outside_the_cell_have_the_same_neighbours():
    lattice, reach = np.diag([4.0, 4.5, 5.0]), np.full(3, 1.6)
    positions = np.array([[0.1, 0.2, 0.3], [0.5, 0.5, 0.5], [0.9, 0.8, 0.1]])
    far = np.array([[3_000_000, 0, 0], [0, -3_000_000, 0], [0, 0, 3_000_000]])
    here, there = close_pairs(lattice, positions, reach), close_pairs(lattice, positions + far, reach)
    assert len(here.first) > 0
    np.testing.assert_array_equal(there.first, here.first)
    np.testing.assert_array_equal(there.shifts, here.shifts - far[here.second] + far[here.first])
