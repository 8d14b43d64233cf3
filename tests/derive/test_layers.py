"""Bonds that planes cut: counted by hand on textbook structures."""

from __future__ import annotations

import numpy as np
import pytest
from ase import Atoms
from ase.build import bulk, graphene
from support.crystals import random_rotation, random_unimodular, rewritten
from support.files import DRY_ICE, write

from strainkit.crystal.crystal import Crystal
from strainkit.crystal.lattice import index_axes
from strainkit.crystal.read import read_crystal
from strainkit.crystal.symmetry import find_symmetry
from strainkit.derive.layers import bonds_and_molecules, easiest_cut


def cut(crystal: Crystal, plane: tuple[int, int, int]):
    axes = index_axes(find_symmetry(crystal))
    return easiest_cut(crystal, *bonds_and_molecules(crystal), axes.lattice_planes(np.array(plane))[0])


def molecules_of(crystal: Crystal) -> int | None:
    """Number of molecules in the cell; None for a network."""
    found = bonds_and_molecules(crystal)[1]
    return None if found is None else len(found.kinds)


@pytest.mark.parametrize("seed", [None, 0, 1])
def test_diamond(seed):
    """Bonds a unit area of the diamond lattice: 4 / (sqrt(3) a^2) between the double layers of (111), 2 sqrt(2) / a^2 across
    (110), 4 / a^2 across (100), counted by hand; the gap across (111) is the bond, sqrt(3)/4 a."""
    a = 5.0
    crystal = Crystal.from_atoms(bulk("Si", "diamond", a=a))
    if seed is not None:
        rng = np.random.default_rng(seed)
        crystal = rewritten(crystal, random_rotation(rng), random_unimodular(rng))
    assert len(bonds_and_molecules(crystal)[0].first) == 4
    area = (a / 10) ** 2
    for plane, bonds in (((1, 1, 1), 4 / 3**0.5), ((1, 1, 0), 8**0.5), ((1, 0, 0), 4.0)):
        assert cut(crystal, plane).bonds_per_nm2 == pytest.approx(bonds / area, rel=1e-6)
        assert cut(crystal, plane).layers == 0
    assert cut(crystal, (1, 1, 1)).gap == pytest.approx(3**0.5 / 4 * a, rel=1e-6)
    assert molecules_of(crystal) is None


def test_graphite_cuts_no_bonds_between_its_layers():
    sheet = graphene(vacuum=1.675)
    lower = Atoms(sheet.symbols, sheet.get_scaled_positions(), cell=sheet.cell)
    lower = Atoms("C2", scaled_positions=[[0, 0, 0.25], [1 / 3, 2 / 3, 0.25]], cell=[*sheet.cell[:2], [0, 0, 6.7]], pbc=True)
    lower += Atoms("C2", scaled_positions=[[0, 0, 0.75], [2 / 3, 1 / 3, 0.75]], cell=lower.cell, pbc=True)
    crystal = Crystal.from_atoms(lower)
    found = cut(crystal, (0, 0, 1))
    assert found.bonds_per_nm2 == 0
    assert found.gap == pytest.approx(3.35, rel=0, abs=0.01)
    assert found.layers == 2
    assert cut(crystal, (1, 0, 0)).bonds_per_nm2 > 0
    assert molecules_of(crystal) is None


def test_molecules_are_counted_across_cell_faces(tmp_path):
    crystal = read_crystal(write(tmp_path, "co2.cif", DRY_ICE))
    assert molecules_of(crystal) == 4
    assert len(bonds_and_molecules(crystal)[0].first) == 8
    moved = rewritten(crystal, random_rotation(np.random.default_rng(0)), np.eye(3, dtype=int))
    moved = Crystal(moved.lattice, (moved.positions + 0.11) % 1.0, moved.numbers)
    assert molecules_of(moved) == 4


def test_dry_ice_layers(tmp_path):
    """Each molecule spans 2 x 0.1185 a along every cube axis about a centre at 0 or 1/2: flat gaps of (1/2 - 0.237) a."""
    crystal = read_crystal(write(tmp_path, "co2.cif", DRY_ICE))
    found = cut(crystal, (1, 0, 0))
    assert found.bonds_per_nm2 == 0
    assert found.layers == 2
    assert found.gap == pytest.approx((0.5 - 0.237) * 5.624, rel=1e-6)


def test_interlocked_molecules_by_hand():
    """Rods along x, 3.4 A from centre to centre and 3.6 A long: interlocked by 0.2 A along x, 4 A apart along z."""
    rod = [[0.0, 0, 0], [1.2, 0, 0], [2.4, 0, 0], [3.6, 0, 0]]
    other = [[x + 3.4, y + 3.5, z + 4.0] for x, y, z in rod]
    crystal = Crystal.from_atoms(Atoms("N8", rod + other, cell=[6.8, 7.0, 8.0], pbc=True))
    bonds, found = bonds_and_molecules(crystal)
    assert len(found.kinds) == 2
    across = easiest_cut(crystal, bonds, found, np.array([1 / 6.8, 0, 0]))
    assert across.gap == pytest.approx(3.4 - 3.6, rel=0, abs=1e-9)
    assert across.layers == 0
    assert across.bonds_per_nm2 == pytest.approx(1 / 0.56, rel=1e-9)
    assert easiest_cut(crystal, bonds, found, np.array([0, 0, 1 / 8.0])).gap == pytest.approx(4.0, rel=1e-9)


def test_a_chain_is_no_molecule_and_single_atoms_are():
    chain = Atoms("C2H4", [[0, 0, 0], [0, 0.87, 1.27], [0.9, -0.6, 0], [-0.9, -0.6, 0], [0.9, 1.5, 1.27], [-0.9, 1.5, 1.27]])
    chain.set_cell([8.0, 8.0, 2.54])
    chain.pbc = True
    crystal = Crystal.from_atoms(chain)
    assert molecules_of(crystal) is None
    argon = Crystal.from_atoms(bulk("Ar", "fcc", a=5.3, cubic=True))
    assert molecules_of(argon) == 4
    assert cut(argon, (1, 1, 1)).bonds_per_nm2 == 0


def test_bonds_to_images_of_the_same_atom_are_found_once():
    """A simple cubic metal with one atom: three bonds an atom."""
    bonds, _ = bonds_and_molecules(Crystal.from_atoms(bulk("Po", "sc", a=3.0)))
    assert len(bonds.first) == 3
    assert cut(Crystal.from_atoms(bulk("Po", "sc", a=3.0)), (1, 0, 0)).bonds_per_nm2 == pytest.approx(1 / 0.09, rel=1e-9)
