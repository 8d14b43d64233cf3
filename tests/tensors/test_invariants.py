"""Invariant subspaces against group theory and published tensors."""

from __future__ import annotations

import numpy as np
import pytest
from support.crystals import random_rotation
from support.groups import COUNTS, LAUE_CLASSES, rotations
from support.published import BY_LAUE_CLASS, mandel

from strainkit.tensors.constants import constant_basis
from strainkit.tensors.invariants import invariant_matrices, invariant_vectors, stabiliser
from strainkit.tensors.rotations import rotate_matrix, rotation6

#: names that tables of the Laue classes give as independent (IEEE 176-1987; Nye, Physical Properties of Crystals)
NAMES = {
    "-1": [f"C{i}{j}" for i in range(1, 7) for j in range(i, 7)],
    "2/m": ["C11", "C12", "C13", "C15", "C22", "C23", "C25", "C33", "C35", "C44", "C46", "C55", "C66"],
    "mmm": ["C11", "C12", "C13", "C22", "C23", "C33", "C44", "C55", "C66"],
    "4/m": ["C11", "C12", "C13", "C16", "C33", "C44", "C66"],
    "4/mmm": ["C11", "C12", "C13", "C33", "C44", "C66"],
    "-3": ["C11", "C12", "C13", "C14", "C15", "C33", "C44"],
    "-3m": ["C11", "C12", "C13", "C14", "C33", "C44"],
    "6/m": ["C11", "C12", "C13", "C33", "C44"],
    "6/mmm": ["C11", "C12", "C13", "C33", "C44"],
    "m-3": ["C11", "C12", "C44"],
    "m-3m": ["C11", "C12", "C44"],
}


@pytest.mark.parametrize("laue", LAUE_CLASSES)
def test_number_of_constants_by_the_character_formula(laue):
    """dim = mean over the group of the character of Sym^2 of the 6-vectors: (tr Q)^2 / 2 + tr(Q^2) / 2."""
    q = rotation6(rotations(laue))
    characters = 0.5 * (np.trace(q, axis1=1, axis2=2) ** 2 + np.trace(q @ q, axis1=1, axis2=2))
    assert round(characters.mean(), 6) == COUNTS[laue][0] == len(invariant_matrices(rotations(laue)))
    totally_symmetric = np.trace(q, axis1=1, axis2=2).mean()
    assert round(totally_symmetric, 6) == invariant_vectors(rotations(laue)).shape[1]


@pytest.mark.parametrize("laue", LAUE_CLASSES)
def test_invariants_do_not_move_in_any_orientation(laue):
    turn = random_rotation(np.random.default_rng(0))
    group = turn @ rotations(laue) @ turn.T
    basis = invariant_matrices(group)
    np.testing.assert_allclose(np.einsum("aij,bij->ab", basis, basis), np.eye(len(basis)), rtol=0, atol=1e-12)
    for g in group:
        np.testing.assert_allclose(rotate_matrix(g, basis), basis, rtol=0, atol=1e-12)


@pytest.mark.parametrize("laue", LAUE_CLASSES)
def test_names_are_those_of_the_tables(laue):
    assert list(constant_basis(invariant_matrices(rotations(laue)), np.eye(3)).names) == NAMES[laue]


@pytest.mark.parametrize("laue", LAUE_CLASSES)
def test_published_tensors_lie_in_the_subspace(laue):
    """Sources: tests/data/published_stiffness.json. Rounded constants leave a little outside for 6/m (C66 from C11, C12)."""
    published = mandel(BY_LAUE_CLASS[laue])
    turn = random_rotation(np.random.default_rng(1))
    basis = constant_basis(invariant_matrices(turn @ rotations(laue) @ turn.T), turn.T)
    values = basis.values(rotate_matrix(turn, published))
    np.testing.assert_allclose(basis.stiffness(values), rotate_matrix(turn, published), rtol=0, atol=1e-9)
    for name, value in zip(basis.names, values, strict=True):
        i, j = int(name[1]) - 1, int(name[2]) - 1
        factor = (2**0.5) ** ((i > 2) + (j > 2))
        assert value * factor == pytest.approx(published[i, j], rel=1e-9, abs=1e-9)


def test_two_fold_axis_along_y_shows_c15_instead_of_c14():
    """A trigonal crystal whose two-fold axis is not along X: the names follow the axes (and are never guessed)."""
    turn = np.array([[0.0, -1, 0], [1, 0, 0], [0, 0, 1]])
    names = constant_basis(invariant_matrices(turn @ rotations("-3m") @ turn.T), np.eye(3)).names
    assert "C15" in names
    assert "C14" not in names


def test_stabiliser_counts_signs():
    group = rotations("4/m")
    shear = np.array([1.0, -1, 0, 0, 0, 0])
    assert stabiliser(group, shear).sum() == 2
    assert stabiliser(group, shear, sign=-1).sum() == 2
    assert stabiliser(group, np.array([1.0, 1, 0, 0, 0, 0]), sign=-1).sum() == 0
