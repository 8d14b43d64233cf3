"""Atoms moved onto their space group: exactly, as little as needed, setting and orientation as given."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
import spglib
from ase.build import bulk
from hypothesis import given, settings
from hypothesis import strategies as st
from support.crystals import conventional, random_rotation, random_unimodular, rewritten, supercell
from support.groups import LAUE_CLASSES

from strainkit.crystal.crystal import Crystal
from strainkit.crystal.spacegroup import operations
from strainkit.crystal.symmetrize import symmetrize
from strainkit.crystal.symmetry import find_symmetry
from strainkit.prepare.runfolder import plan_run
from strainkit.tensors.rotations import polar
from strainkit.tensors.strain import gradient_between

pytestmark = pytest.mark.filterwarnings("ignore:Set OLD_ERROR_HANDLING:DeprecationWarning")
NOISE = 5e-4


def blurred(crystal: Crystal, rng: np.random.Generator, cell: bool = False) -> Crystal:
    """Every Cartesian coordinate off by up to NOISE; optionally the lattice too."""
    shift = rng.uniform(-NOISE, NOISE, crystal.positions.shape) @ np.linalg.inv(crystal.lattice)
    lattice = crystal.lattice + (rng.uniform(-NOISE, NOISE, (3, 3)) if cell else 0.0)
    return replace(crystal, positions=crystal.positions + shift, lattice=lattice)


def order(crystal: Crystal, symprec: float) -> int:
    """Number of operations that spglib finds."""
    return len(spglib.get_symmetry((crystal.lattice, crystal.positions, crystal.numbers), symprec)["rotations"])


@pytest.mark.parametrize("laue", LAUE_CLASSES)
@pytest.mark.parametrize("repeats", [(1, 1, 1), (1, 2, 1), (2, 2, 1)])
def test_the_whole_group_is_found_at_a_tight_tolerance(laue, repeats):
    """Oracle: spglib on the unblurred cell. Supercells that break the lattice keep only what fits them."""
    rng = np.random.default_rng(1)
    exact = rewritten(supercell(conventional(laue), repeats), random_rotation(rng), random_unimodular(rng))
    rough = blurred(exact, rng)
    assert order(rough, 1e-6) < order(exact, 1e-6)
    found = symmetrize(rough, 1e-2)
    assert order(found.crystal, 1e-7) == order(exact, 1e-6)
    assert find_symmetry(found.crystal, 1e-2).deviation < 1e-10
    assert 0 < found.largest_move < 2 * 3**0.5 * NOISE
    assert found.cell_strain < 1e-12
    moved = (found.crystal.positions - rough.positions) @ rough.lattice
    np.testing.assert_allclose(np.linalg.norm(moved, axis=1).max(), found.largest_move, rtol=1e-9)
    np.testing.assert_allclose(moved.mean(axis=0), 0.0, rtol=0, atol=1e-12)


@settings(max_examples=20, deadline=None)
@given(st.integers(0, 2**32 - 1), st.sampled_from(LAUE_CLASSES))
def test_setting_orientation_and_order_stay(seed, laue):
    rng = np.random.default_rng(seed)
    start = conventional(laue)
    exact = rewritten(start, random_rotation(rng), random_unimodular(rng), rng.permutation(len(start.numbers)))
    rough = blurred(exact, rng, cell=True)
    found = symmetrize(rough, 2e-2)
    rotation, stretch = polar(gradient_between(rough.lattice, found.crystal.lattice))
    np.testing.assert_allclose(rotation, np.eye(3), rtol=0, atol=1e-12)
    assert np.abs(stretch - np.eye(3)).max() < 1e-3
    np.testing.assert_array_equal(found.crystal.numbers, rough.numbers)
    again = symmetrize(found.crystal, 2e-2)
    assert again.largest_move < 1e-9
    assert again.cell_strain < 1e-9


@pytest.mark.parametrize("laue", LAUE_CLASSES)
def test_operations_are_a_group_also_in_supercells(laue):
    rotations, translations, _ = operations(blurred(supercell(conventional(laue), (1, 2, 1)), np.random.default_rng(2)), 1e-2)

    def key(rotation, translation):
        return (*rotation.ravel().tolist(), *(np.round(translation % 1.0, 6) % 1.0).tolist())

    known = {key(w, t) for w, t in zip(rotations, translations, strict=True)}
    assert len(known) == len(rotations)
    for w, t in zip(rotations[::3], translations[::3], strict=True):
        for v, s in zip(rotations, translations, strict=True):
            assert key(w @ v, w @ s + t) in known


def test_moments_are_averaged_over_what_is_equal():
    atoms = bulk("Fe", cubic=True)
    atoms.set_initial_magnetic_moments([2.001, 2.003])
    found = symmetrize(Crystal.from_atoms(atoms))
    assert found.crystal.magnetic_moments == pytest.approx([2.002, 2.002])


def test_plan_says_how_far_it_went():
    rough = blurred(conventional("mmm"), np.random.default_rng(3))
    assert plan_run(rough).symmetry.space_group == "P1"
    plan = plan_run(rough, symprec=1e-2, symmetrize=True)
    assert plan.symmetry.space_group == "Pnma"
    (said,) = [f for f in plan.findings if f.code == "symmetrized"]
    assert f"{symmetrize(rough, 1e-2).largest_move:.2g} A" in said.message
    assert "off-symmetry" not in [f.code for f in plan.findings]
