"""Symmetry and frames: the same crystal however it is written down."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from ase.build import bulk
from support.crystals import conventional, random_rotation, random_unimodular, rewritten, supercell
from support.groups import LAUE_CLASSES, rotations

from strainkit.crystal.crystal import Crystal
from strainkit.crystal.frames import crystal_frame
from strainkit.crystal.spacegroup import space_group_data
from strainkit.crystal.symmetry import find_symmetry, tolerance_ladder
from strainkit.errors import InputError, UsageError
from strainkit.tensors.constants import constant_basis


@pytest.mark.parametrize("laue", LAUE_CLASSES)
def test_rotations_of_the_conventional_cell_are_the_group_in_ieee_axes(laue):
    symmetry = find_symmetry(conventional(laue))
    axes = crystal_frame("ieee", symmetry).rotation
    turned = axes @ symmetry.rotations @ axes.T
    expected = rotations(laue)
    assert len(turned) == len(expected)
    for element in turned:
        assert np.abs(expected - element).max(axis=(1, 2)).min() < 1e-9


@pytest.mark.parametrize("laue", LAUE_CLASSES)
@pytest.mark.parametrize("seed", range(3))
def test_group_turns_with_the_crystal_and_ignores_the_basis(laue, seed):
    rng = np.random.default_rng(seed)
    start = conventional(laue)
    turn = random_rotation(rng)
    moved = rewritten(start, turn, random_unimodular(rng), rng.permutation(len(start.numbers)))
    before, after = find_symmetry(start), find_symmetry(moved)
    assert after.space_group == before.space_group
    assert after.deviation < 1e-9
    for element in turn @ before.rotations @ turn.T:
        assert np.abs(after.rotations - element).max(axis=(1, 2)).min() < 1e-8
    products = np.einsum("aij,bjk->abik", after.rotations, after.rotations).reshape(-1, 3, 3)
    for element in products[:: max(1, len(products) // 50)]:
        assert np.abs(after.rotations - element).max(axis=(1, 2)).min() < 1e-9


@pytest.mark.parametrize("laue", LAUE_CLASSES)
def test_a_supercell_that_breaks_the_lattice_keeps_the_group(laue):
    start = conventional(laue)
    larger = find_symmetry(supercell(start, (1, 2, 1)))
    assert len(larger.rotations) == len(find_symmetry(start).rotations)
    assert larger.laue_class == laue


@pytest.mark.parametrize("laue", LAUE_CLASSES)
@pytest.mark.parametrize("name", ["ieee", "crystal", "given"])
def test_frames_are_right_handed(laue, name):
    rng = np.random.default_rng(8)
    crystal = rewritten(conventional(laue), random_rotation(rng), random_unimodular(rng))
    rotation = crystal_frame(name, find_symmetry(crystal)).rotation
    np.testing.assert_allclose(rotation @ rotation.T, np.eye(3), rtol=0, atol=1e-12)
    assert np.linalg.det(rotation) == pytest.approx(1.0, abs=1e-12)


def test_ieee_axes_follow_the_given_conventional_cell():
    """IEEE 176-1987 (from memory): monoclinic Y||b, Z||c, X||a*; triclinic Z||c, Y||b*."""
    for laue in ("2/m", "-1"):
        crystal = conventional(laue)
        x, y, z = crystal_frame("ieee", find_symmetry(crystal)).rotation
        a, b, c = crystal.lattice
        assert z @ c == pytest.approx(np.linalg.norm(c), rel=1e-9)
        normal = np.cross(c, a) / np.linalg.norm(np.cross(c, a))
        assert y @ normal == pytest.approx(1.0, abs=1e-9)
        np.testing.assert_allclose(np.cross(y, z), x, rtol=0, atol=1e-12)
        if laue == "2/m":
            assert y @ b == pytest.approx(np.linalg.norm(b), rel=1e-9)


@pytest.mark.parametrize("order", [(0, 1, 2), (1, 2, 0), (2, 0, 1)])
def test_monoclinic_cell_with_its_unique_axis_elsewhere_gets_b_renamed(order):
    start = conventional("2/m")
    basis = np.eye(3)[list(order)]
    moved = rewritten(start, np.eye(3), basis)
    frame = crystal_frame("ieee", find_symmetry(moved))
    np.testing.assert_allclose(abs(frame.rotation[1] @ start.lattice[1]), np.linalg.norm(start.lattice[1]), rtol=1e-9)
    assert "of the cell as given" in frame.axes
    assert "standard" not in frame.axes


def test_primitive_cell_says_that_the_axes_are_those_of_the_standard_cell():
    frame = crystal_frame("ieee", find_symmetry(Crystal.from_atoms(bulk("Si"))))
    assert "standard cell, which are -a+b+c, a-b+c, a+b-c of the cell as given" in frame.axes


def test_p21n_and_p21c_settings_give_their_own_axes():
    """Two cells of one crystal: a, b, c as given name the axes, so that X differs between them, as it should."""
    start = conventional("2/m")
    other = rewritten(start, np.eye(3), np.array([[1, 0, 1], [0, 1, 0], [0, 0, 1]]))
    first, second = (crystal_frame("ieee", find_symmetry(c)).rotation for c in (start, other))
    np.testing.assert_allclose(first[2], second[2], rtol=0, atol=1e-9)
    third = rewritten(start, np.eye(3), np.array([[1, 0, 0], [0, 1, 0], [1, 0, 1]]))
    assert abs(crystal_frame("ieee", find_symmetry(third)).rotation[2] @ first[2]) < 0.999


def test_named_constants_survive_a_slightly_broken_metric():
    """A cubic cell off by 1e-4 A still has exactly three constants with exact names."""
    atoms = bulk("Si", cubic=True)
    atoms.cell[0, 0] += 1e-4
    atoms.cell[1, 0] += 5e-5
    symmetry = find_symmetry(Crystal.from_atoms(atoms), 1e-3)
    assert symmetry.laue_class == "m-3m"
    basis = constant_basis(symmetry.invariants, crystal_frame("ieee", symmetry).rotation)
    assert basis.names == ("C11", "C12", "C44")


def test_ladder_warns_where_the_group_changes():
    atoms = bulk("Si", cubic=True)
    atoms.positions[0, 0] += 3e-3
    crystal = Crystal.from_atoms(atoms)
    _, rungs, findings = tolerance_ladder(crystal, 1e-3)
    assert len({group for _, group, _ in rungs}) == 2
    assert [f.code for f in findings] == ["symmetry-depends-on-tolerance"]
    assert tolerance_ladder(Crystal.from_atoms(bulk("Si")), 1e-3)[2] == []


def test_magnetic_moments_lower_the_symmetry():
    atoms = bulk("Fe", cubic=True)
    atoms.set_initial_magnetic_moments([2.0, -2.0])
    assert find_symmetry(Crystal.from_atoms(atoms)).laue_class == "m-3m"
    atoms = bulk("Fe", cubic=True) * (2, 1, 1)
    atoms.set_initial_magnetic_moments([2.0, 2.0, -2.0, -2.0])
    assert find_symmetry(Crystal.from_atoms(atoms)).laue_class == "4/mmm"


def test_atoms_on_top_of_each_other_are_refused():
    atoms = bulk("Si")
    atoms.positions[1] = atoms.positions[0]
    with pytest.raises(InputError, match="no symmetry found"):
        find_symmetry(Crystal.from_atoms(atoms))


def test_spglib_switch_is_put_back():
    import spglib

    before = spglib.error.OLD_ERROR_HANDLING
    find_symmetry(Crystal.from_atoms(bulk("Si")))
    assert before == spglib.error.OLD_ERROR_HANDLING


def test_unknown_frame():
    with pytest.raises(UsageError, match="unknown frame"):
        crystal_frame("lab", find_symmetry(Crystal.from_atoms(bulk("Si"))))


@pytest.mark.parametrize("laue", ["-1", "2/m", "4/m", "-3m", "m-3", "m-3m"])
def test_the_ladder_leaves_out_no_search_that_would_find_another_group(laue):
    """Against spglib at every rung, for a crystal whose atoms or lattice are off by little to much."""
    rng = np.random.default_rng(7)
    start = conventional(laue)
    changed = 0
    for size in (0.0, 1e-5, 1e-4, 5e-4, 1e-3, 3e-3, 5e-3, 1e-2):
        shift = rng.normal(size=start.positions.shape) * size @ np.linalg.inv(start.lattice)
        shear = np.eye(3) + rng.normal(size=(3, 3)) * 0.1 * size
        for crystal in (replace(start, positions=start.positions + shift), replace(start, lattice=start.lattice @ shear)):
            _, rungs, _ = tolerance_ladder(crystal, 1e-3)
            for tolerance, group, _ in rungs:
                assert group == space_group_data(crystal, tolerance)[0].international
            changed += len({group for _, group, _ in rungs}) > 1
    assert changed >= (0 if laue == "-1" else 2)


def test_a_tolerance_near_the_lattice_vectors():
    """Nearly every integer matrix maps such a lattice onto itself, thousands of them: that must not be tried."""
    crystal = Crystal.from_atoms(bulk("C", "diamond", a=3.567))
    _, rungs, _ = tolerance_ladder(crystal, 0.07)
    for tolerance, group, _ in rungs:
        assert group == space_group_data(crystal, tolerance)[0].international
