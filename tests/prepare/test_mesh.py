"""k-mesh and real-space grid: against the definition, counted by brute force."""

from __future__ import annotations

import numpy as np
import pytest
from ase.spacegroup import crystal as ase_crystal
from support.crystals import conventional, random_rotation

from strainkit.crystal.crystal import Crystal
from strainkit.crystal.symmetry import translation_denominators
from strainkit.errors import UsageError
from strainkit.prepare.mesh import fixed_grid, k_mesh


def test_mesh_of_a_box():
    """2 pi / 10 A = 0.628 1/A: 3 divisions at 0.25, 2 at 0.4, 1 at 0.7; VASP's KSPACING follows the same rule (its manual)."""
    box = Crystal(np.diag([10.0, 5.0, 20.0]), [[0, 0, 0]], [2])
    assert k_mesh(box, 0.25) == (3, 6, 2)
    assert k_mesh(box, 0.4) == (2, 4, 1)
    assert k_mesh(box, 0.7) == (1, 2, 1)
    assert k_mesh(box, 0.4, odd=True) == (3, 5, 1)


def test_mesh_is_no_matter_of_orientation():
    crystal = conventional("2/m")
    turn = random_rotation(np.random.default_rng(3))
    assert k_mesh(crystal.deformed(turn), 0.2) == k_mesh(crystal, 0.2)


@pytest.mark.parametrize("spacing", [0.0, -1.0, 1e-4, 20.0, float("nan")])
def test_impossible_spacing(spacing):
    with pytest.raises(UsageError, match="out of range"):
        k_mesh(conventional("mmm"), spacing)


@pytest.mark.parametrize("laue", ["-1", "-3m", "m-3m"])
def test_grid_holds_every_wave_vector_of_every_cell(laue):
    """All reciprocal vectors up to the limit, listed one by one, fit on the grid without wrapping round."""
    base = conventional(laue).lattice
    rng = np.random.default_rng(1)
    cells = [base] + [base @ (np.eye(3) + 0.02 * rng.standard_normal((3, 3))) for _ in range(5)]
    largest = 5.0
    points = fixed_grid(cells, largest)
    reach = 15
    steps = np.array(np.meshgrid(*[np.arange(-reach, reach + 1)] * 3)).reshape(3, -1).T
    highest = np.zeros(3, dtype=int)
    for cell in cells:
        vectors = steps @ (2 * np.pi * np.linalg.inv(cell).T)
        inside = steps[np.linalg.norm(vectors, axis=1) <= largest]
        highest = np.maximum(highest, np.abs(inside).max(axis=0))
    assert (highest < reach).all()
    assert (np.array(points) >= 2 * highest + 1).all()
    assert all(set(_factors(n)) <= {2, 3, 5} for n in points)


def _factors(number: int) -> list[int]:
    found, divisor = [], 2
    while number > 1:
        while number % divisor == 0:
            found.append(divisor)
            number //= divisor
        divisor += 1
    return found


def test_grid_multiples():
    assert fixed_grid([np.diag([4.0, 4.0, 4.0])], 5.0, (4, 6, 1)) == (8, 12, 8)


@pytest.mark.parametrize(
    ("group", "parameters", "expected"),
    [
        (19, (5.1, 6.2, 7.3, 90, 90, 90), (2, 2, 2)),  # P212121: screws of one half along every axis
        (14, (5.1, 6.2, 7.3, 90, 100, 90), (1, 2, 2)),  # P21/c: screw along b, glide along c
        (144, (6.1, 6.1, 9.3, 90, 90, 120), (1, 1, 3)),  # P31
        (169, (6.1, 6.1, 9.3, 90, 90, 120), (1, 1, 6)),  # P61
        (2, (5.1, 6.2, 7.3, 80, 95, 100), (1, 1, 1)),  # P-1
    ],
)
def test_fractions_of_screws_and_glides(group, parameters, expected):
    """Translations of the general positions (International Tables A); mirror-free settings at their usual origin."""
    atoms = ase_crystal(["Mg", "O"], basis=[(0.13, 0.21, 0.07), (0.37, 0.09, 0.31)], spacegroup=group, cellpar=parameters)
    assert translation_denominators(Crystal.from_atoms(atoms)) == expected


def test_silicon_needs_quarters():
    lattice = 2.7 * np.array([[0, 1, 1], [1, 0, 1], [1, 1, 0]])
    assert translation_denominators(Crystal(lattice, [[0, 0, 0], [0.25, 0.25, 0.25]], [14, 14])) == (4, 4, 4)
