"""A returned structure in another frame, basis, origin and order of atoms: vectors and tensors come back as planned.

The oracle is the construction: a known rotation, unimodular matrix, shift and permutation are applied to a strained cell, and
what is put in (tensor, vectors) must come out. Niggli reduction is spglib's.
"""

from __future__ import annotations

import numpy as np
import pytest
from support.crystals import conventional, random_rotation, random_unimodular
from support.groups import LAUE_CLASSES

from strainkit.collect.match import MismatchError, match, strain_tolerance
from strainkit.collect.returned import Returned
from strainkit.crystal.crystal import Crystal
from strainkit.crystal.spacegroup import spglib_raises
from strainkit.crystal.symmetry import find_symmetry
from strainkit.tensors.strain import gradient_from_strain

#: I4_1/a and R-3 are given in centred cells
CENTRED = ("4/m", "-3")


def returned(lattice, positions, numbers, **more):
    return Returned("test", lattice, positions, numbers, None, None, None, **more)


def strained(laue, rng, size=0.01):
    e = rng.normal(size=(3, 3))
    e = size * (e + e.T) / np.linalg.norm(e + e.T)
    start = conventional(laue)
    return start, start.deformed(gradient_from_strain(e))


def disguise(cell, moved, rng, basis=None, shift=True, permute=True):
    """The cell with its atoms moved (n, 3), A, written down in another way; and what was done."""
    turn = random_rotation(rng)
    basis = random_unimodular(rng) if basis is None else basis
    order = rng.permutation(len(cell.numbers)) if permute else np.arange(len(cell.numbers))
    origin = rng.random(3) if shift else np.zeros(3)
    fractions = cell.positions + moved @ np.linalg.inv(cell.lattice) + origin
    fractions = fractions @ np.linalg.inv(basis) + rng.integers(-2, 3, (len(order), 3))
    out = returned(basis @ cell.lattice @ turn.T, fractions[order], cell.numbers[order])
    return out, turn, order


@pytest.mark.parametrize("laue", LAUE_CLASSES)
def test_any_basis_origin_order_and_frame(laue):
    rng = np.random.default_rng(LAUE_CLASSES.index(laue))
    for _ in range(3):
        _, cell = strained(laue, rng)
        moved = 0.02 * rng.normal(size=(len(cell.numbers), 3))
        out, turn, order = disguise(cell, moved, rng)
        found = match(cell, out)
        np.testing.assert_allclose(found.rotation, turn, rtol=0, atol=1e-9)
        if laue in CENTRED:  # lattice points inside the cell: which of them came back where cannot be known
            assert found.farthest <= np.linalg.norm(moved - moved.mean(axis=0), axis=1).max() + 1e-9
            continue
        np.testing.assert_array_equal(order[found.order], np.arange(len(order)))
        np.testing.assert_allclose(found.displacements, moved - moved.mean(axis=0), rtol=0, atol=1e-9)
        forces = rng.normal(size=moved.shape)
        np.testing.assert_allclose((forces @ turn.T)[order][found.order] @ found.rotation, forces, rtol=0, atol=1e-9)


def niggli(lattice):
    import spglib

    with spglib_raises():
        reduced = spglib.niggli_reduce(lattice, eps=1e-8)
    return np.rint(reduced @ np.linalg.inv(lattice)).astype(int)


@pytest.mark.parametrize("way", ["niggli", "permuted", "sheared", "left-handed"])
def test_a_monoclinic_return_in_equivalent_bases(way):
    rng = np.random.default_rng(7)
    start, cell = strained("2/m", rng)
    odd = Crystal(np.array([[1, 0, 2], [0, 1, 0], [0, 0, 1]]) @ start.lattice, start.positions, start.numbers)
    basis = {
        "niggli": niggli(odd.lattice) @ np.array([[1, 0, 2], [0, 1, 0], [0, 0, 1]]),
        "permuted": np.array([[0, 1, 0], [0, 0, 1], [1, 0, 0]]),
        "sheared": np.array([[1, 0, 0], [3, 1, 0], [-2, 5, 1]]),
        "left-handed": np.diag([-1, 1, 1]),
    }[way]
    moved = 0.01 * rng.normal(size=(len(cell.numbers), 3))
    out, turn, _ = disguise(cell, moved, rng, basis)
    found = match(cell, out)
    np.testing.assert_allclose(found.rotation, turn, rtol=0, atol=1e-9)
    np.testing.assert_allclose(found.displacements, moved - moved.mean(axis=0), rtol=0, atol=1e-9)


def test_the_unstrained_cell_of_a_cubic_crystal_is_placed_by_its_atoms():
    """Its lattice fits in 24 ways; only the rotations of the crystal itself may come out."""
    rng = np.random.default_rng(3)
    cell = conventional("m-3")
    group = find_symmetry(cell).rotations
    for _ in range(5):
        out, turn, _ = disguise(cell, np.zeros((len(cell.numbers), 3)), rng)
        found = match(cell, out)
        assert found.farthest < 1e-9
        assert min(np.abs(turn.T @ found.rotation - g).max() for g in group) < 1e-6


@pytest.mark.parametrize("size", [2e-4, 1e-3, 0.02])
def test_a_drifted_cell_is_refused_with_its_strain(size):
    rng = np.random.default_rng(4)
    _, cell = strained("mmm", rng)
    drifted = cell.deformed(np.diag([1 + size, 1, 1]))
    for basis in (np.eye(3, dtype=int), random_unimodular(rng)):
        out, _, _ = disguise(drifted, np.zeros((len(cell.numbers), 3)), rng, basis)
        with pytest.raises(MismatchError) as caught:
            match(cell, out)
        if (basis == np.eye(3)).all():
            assert caught.value.code == "cell-drifted"
            assert f"{100 * size:.3g} %" in caught.value.what


def test_rounding_of_the_output_is_allowed_for_and_no_more():
    rng = np.random.default_rng(5)
    _, cell = strained("mmm", rng)
    coarse = np.round(cell.lattice, 3)
    with pytest.raises(MismatchError):
        match(cell, returned(np.round(cell.lattice, 2), cell.positions, cell.numbers, lattice_precision=1e-4))
    assert match(cell, returned(coarse, cell.positions, cell.numbers, lattice_precision=1e-3)).drift < 1e-3
    assert strain_tolerance(np.eye(3) * 5.0, 1e-3) == pytest.approx(6e-4)


def test_the_mirror_image_of_a_chiral_crystal_is_another_crystal():
    """P3_121 has no improper operation: its mirror image is P3_221."""
    _, cell = strained("-3m", np.random.default_rng(6))
    mirrored = cell.lattice @ np.diag([1, 1, -1.0])
    with pytest.raises(MismatchError, match="other handedness"):
        match(cell, returned(mirrored, cell.positions, cell.numbers))


def test_the_mirror_image_of_a_centrosymmetric_crystal_is_itself():
    """A mirror is an inversion and a half turn, and the crystal has the inversion (Pnma)."""
    rng = np.random.default_rng(6)
    _, cell = strained("mmm", rng)
    mirror = np.diag([1, 1, -1.0])
    found = match(cell, returned(cell.lattice @ mirror, cell.positions, cell.numbers))
    np.testing.assert_allclose(found.rotation, -mirror, rtol=0, atol=1e-9)
    assert found.farthest < 1e-9


def test_other_crystals_are_refused():
    _, cell = strained("mmm", np.random.default_rng(8))
    n = len(cell.numbers)
    with pytest.raises(MismatchError, match="atoms instead of"):
        match(cell, returned(cell.lattice, cell.positions[:-1], cell.numbers[:-1]))
    with pytest.raises(MismatchError, match="another composition"):
        match(cell, returned(cell.lattice, cell.positions, np.where(cell.numbers == 8, 16, cell.numbers)))
    with pytest.raises(MismatchError, match="in any order"):
        match(cell, returned(cell.lattice, cell.positions, cell.numbers[::-1]))
    scattered = np.random.default_rng(1).random((n, 3))
    with pytest.raises(MismatchError):
        match(cell, returned(cell.lattice[::-1], scattered, cell.numbers))
    with pytest.raises(MismatchError, match="another cell"):
        match(cell, returned(1.3 * cell.lattice, cell.positions, cell.numbers))
