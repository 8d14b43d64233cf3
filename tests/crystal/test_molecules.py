"""Molecules from bonds under periodic boundaries, and molecules moved as bodies."""

from __future__ import annotations

from itertools import combinations

import numpy as np
import pytest
import spglib
from ase import Atoms
from ase.build import bulk, molecule
from ase.spacegroup import crystal as spacegroup_crystal
from hypothesis import given, settings
from hypothesis import strategies as st
from support.crystals import random_rotation, random_unimodular, rewritten, supercell
from support.molecular import ammonia, ammonium_chloride, boxed, dry_ice, side_by_side, urea

from strainkit.crystal.crystal import Crystal
from strainkit.crystal.molecules import Molecules, find_molecules
from strainkit.crystal.symmetry import find_symmetry
from strainkit.design.jobs import StrainJob
from strainkit.tensors.strain import gradient_from_strain

MOLECULAR = {"dry_ice": dry_ice, "urea": urea, "ammonia": ammonia, "ammonium_chloride": ammonium_chloride}


def built(symbols, basis, group, cell):
    return Crystal.from_atoms(spacegroup_crystal(symbols, basis, spacegroup=group, cellpar=cell))


#: name -> (crystal, kinds and formulas that a textbook of structural chemistry gives)
KNOWN = {
    "aluminium": (Crystal.from_atoms(bulk("Al")), [("network", "Al", 1)]),
    "lead": (Crystal.from_atoms(bulk("Pb")), [("network", "Pb", 1)]),
    "caesium": (Crystal.from_atoms(bulk("Cs")), [("network", "Cs", 1)]),
    "calcium": (Crystal.from_atoms(bulk("Ca")), [("network", "Ca", 1)]),
    "zinc": (Crystal.from_atoms(bulk("Zn")), [("network", "Zn2", 1)]),
    "mercury": (Crystal.from_atoms(bulk("Hg")), [("network", "Hg", 1)]),
    "silicon": (Crystal.from_atoms(bulk("Si")), [("network", "Si2", 1)]),
    "magnesium oxide": (Crystal.from_atoms(bulk("MgO", "rocksalt", a=4.21)), [("network", "MgO", 1)]),
    "rock salt": (Crystal.from_atoms(bulk("NaCl", "rocksalt", a=5.64)), [("network", "ClNa", 1)]),
    "caesium iodide": (Crystal.from_atoms(bulk("CsI", "cesiumchloride", a=4.56)), [("network", "CsI", 1)]),
    "lithium hydride": (Crystal.from_atoms(bulk("LiH", "rocksalt", a=4.08)), [("network", "HLi", 1)]),
    "galena": (Crystal.from_atoms(bulk("PbS", "rocksalt", a=5.94)), [("network", "PbS", 1)]),
    "fluorite": (Crystal.from_atoms(bulk("CaF2", "fluorite", a=5.46)), [("network", "CaF2", 1)]),
    "argon": (Crystal.from_atoms(bulk("Ar", a=5.31)), [("molecule", "Ar", 1)]),
    "graphite": (
        built(["C", "C"], [(0, 0, 0.25), (1 / 3, 2 / 3, 0.25)], 194, [2.46, 2.46, 6.71, 90, 90, 120]),
        [("layer", "C2", 2)],
    ),
    "selenium": (built(["Se"], [(0.2254, 0, 1 / 3)], 152, [4.366, 4.366, 4.954, 90, 90, 120]), [("chain", "Se3", 1)]),
    "iodine": (built(["I"], [(0, 0.1543, 0.1174)], 64, [7.136, 4.686, 9.784, 90, 90, 90]), [("molecule", "I2", 4)]),
    "brucite": (
        built(
            ["Mg", "O", "H"], [(0, 0, 0), (1 / 3, 2 / 3, 0.22), (1 / 3, 2 / 3, 0.43)], 164, [3.142, 3.142, 4.766, 90, 90, 120]
        ),
        [("layer", "H2MgO2", 1)],
    ),
    "calcite": (
        built(["Ca", "C", "O"], [(0, 0, 0), (0, 0, 0.25), (0.2578, 0, 0.25)], 167, [4.99, 4.99, 17.06, 90, 90, 120]),
        [("network", "C6Ca6O18", 1)],
    ),
    "dry ice": (dry_ice(), [("molecule", "CO2", 4)]),
    "urea": (urea(), [("molecule", "CH4N2O", 2)]),
    "ammonia": (ammonia(), [("molecule", "H3N", 4)]),
    "sal ammoniac": (ammonium_chloride(), [("molecule", "H4N", 1), ("molecule", "Cl", 1)]),
    "hydrate of a co-crystal": (
        side_by_side(["C6H6", "H2O", "CH3COOH", "H2O"]),
        [("molecule", "C6H6", 1), ("molecule", "H2O", 2), ("molecule", "C2H4O2", 1)],
    ),
    "fullerene": (boxed(molecule("C60")), [("molecule", "C60", 1)]),
}


@pytest.mark.parametrize("name", KNOWN)
def test_kinds_and_counts_of_known_crystals(name):
    crystal, expected = KNOWN[name]
    found = find_molecules(crystal)
    assert found.counts == expected
    finite = all(kind == "molecule" for kind, _, _ in expected)
    assert found.molecular == (finite and name != "argon")


def test_guest_in_a_framework():
    """Sodalite silica (Im-3m; Si-O 1.6 A by construction) with a nitrogen molecule in one of its two cages."""
    frame = spacegroup_crystal(["Si", "O"], [(0.25, 0.5, 0), (0.35, 0.35, 0)], spacegroup=229, cellpar=[8.83] * 3 + [90] * 3)
    assert len(frame) == 36
    frame += Atoms("N2", positions=[(0, 0, 0.55), (0, 0, -0.55)])
    found = find_molecules(Crystal.from_atoms(frame))
    assert found.counts == [("network", "O24Si12", 1), ("molecule", "N2", 1)]
    assert not found.molecular
    assert found.movable.tolist() == [False] * 36 + [True] * 2


def test_a_proton_in_the_middle_binds_both_and_a_hydrogen_bond_does_not():
    middle = boxed(Atoms("FHF", positions=[(0, 0, -1.14), (0, 0, 0), (0, 0, 1.14)]))
    assert find_molecules(middle).counts == [("molecule", "F2H", 1)]
    strong = boxed(Atoms("OHO", positions=[(0, 0, -1.05), (0, 0, 0), (0, 0, 1.35)]))
    assert find_molecules(strong).counts == [("molecule", "HO", 1), ("molecule", "O", 1)]


def test_lone_metal_atoms_and_hydrogens_are_no_molecules():
    lone = boxed(Atoms("MgH", positions=[(0, 0, 0), (0, 0, 4.5)]))
    assert find_molecules(lone).counts == [("unbonded", "Mg", 1), ("unbonded", "H", 1)]


@settings(max_examples=30, deadline=None)
@given(st.integers(0, 2**32 - 1), st.sampled_from(sorted(MOLECULAR)))
def test_molecules_do_not_depend_on_how_the_cell_is_written(seed, name):
    """Another basis, orientation, order, origin and choice of periodic images: the same molecules, whole."""
    rng = np.random.default_rng(seed)
    start = MOLECULAR[name]()
    written = rewritten(start, random_rotation(rng), random_unimodular(rng), rng.permutation(len(start.numbers)))
    shifted = written.positions + rng.uniform(size=3) + rng.integers(-2, 3, size=written.positions.shape)
    crystal = Crystal(written.lattice, shifted, written.numbers)
    before, after = find_molecules(start), find_molecules(crystal)
    assert sorted(before.counts) == sorted(after.counts)
    assert _fingerprint(start, before) == pytest.approx(_fingerprint(crystal, after), abs=1e-9)


def _whole(crystal: Crystal, molecules: Molecules) -> list[tuple[np.ndarray, np.ndarray]]:
    """Atomic numbers and unwrapped Cartesian positions of every molecule."""
    places = (crystal.positions + molecules.images) @ crystal.lattice
    return [(crystal.numbers[molecules.part == n], places[molecules.part == n]) for n in range(len(molecules.kinds))]


def _distances(places: np.ndarray) -> list[float]:
    return [float(np.linalg.norm(a - b)) for a, b in combinations(places, 2)]


def _fingerprint(crystal: Crystal, molecules: Molecules) -> list[float]:
    """All distances inside all molecules, sorted: plain minimum of nothing, no periodic images involved."""
    return sorted(d for _, places in _whole(crystal, molecules) for d in _distances(places))


def test_unwrapped_molecules_have_their_known_bond_lengths():
    """C-O 0.1185 sqrt(3) a, by hand; O-O twice that: the molecules are linear and whole."""
    crystal = dry_ice()
    bond = 0.1185 * 3**0.5 * 5.624
    assert _fingerprint(crystal, find_molecules(crystal)) == pytest.approx([bond] * 8 + [2 * bond] * 4, abs=1e-12)


def random_strain(rng: np.random.Generator, size: float = 0.02) -> np.ndarray:
    strain = rng.normal(size=(3, 3))
    strain = strain + strain.T
    return strain * size / np.abs(np.linalg.eigvalsh(strain)).max()


@pytest.mark.parametrize("name", MOLECULAR)
@pytest.mark.parametrize("seed", range(3))
def test_molecules_move_as_bodies(name, seed):
    """Every distance inside a molecule stays, no molecule turns, centres of mass go where the strain takes them."""
    from ase.data import atomic_masses

    rng = np.random.default_rng(seed)
    crystal = MOLECULAR[name]()
    crystal = Crystal(crystal.lattice, crystal.positions + rng.integers(-1, 2, size=crystal.positions.shape), crystal.numbers)
    molecules = find_molecules(crystal)
    gradient = gradient_from_strain(random_strain(rng))
    moved = molecules.deformed(crystal, gradient)
    np.testing.assert_allclose(moved.lattice, crystal.lattice @ gradient.T, rtol=0, atol=1e-12)
    for (numbers, before), (_, after) in zip(_whole(crystal, molecules), _whole(moved, molecules), strict=True):
        np.testing.assert_allclose(_distances(after), _distances(before), rtol=0, atol=1e-10)
        np.testing.assert_allclose(after - after[0], before - before[0], rtol=0, atol=1e-10)
        masses = atomic_masses[numbers]
        np.testing.assert_allclose(
            masses @ after / masses.sum(), gradient @ (masses @ before / masses.sum()), rtol=0, atol=1e-10
        )


def test_without_strain_nothing_moves_and_networks_always_move_affinely():
    crystal = urea()
    np.testing.assert_array_equal(find_molecules(crystal).deformed(crystal, np.eye(3)).positions, crystal.positions)
    salt = Crystal.from_atoms(bulk("NaCl", "rocksalt", a=5.64))
    moved = find_molecules(salt).deformed(salt, np.diag([1.01, 1.0, 0.99]))
    np.testing.assert_array_equal(moved.positions, salt.positions)


@pytest.mark.filterwarnings("ignore:Set OLD_ERROR_HANDLING:DeprecationWarning")
@pytest.mark.parametrize("name", MOLECULAR)
@pytest.mark.parametrize("seed", range(4))
def test_the_strained_cell_keeps_the_operations_that_keep_the_strain(name, seed):
    """Oracle: spglib on the strained cell. Strains are averaged over the rotations about a random axis of the crystal."""
    rng = np.random.default_rng(seed)
    crystal = MOLECULAR[name]()
    symmetry = find_symmetry(crystal, 1e-4)
    chosen = symmetry.rotations[rng.integers(len(symmetry.rotations))]
    strain, turned = random_strain(rng), chosen
    kept = [strain]
    while np.abs(turned - np.eye(3)).max() > 1e-9:
        kept.append(turned @ strain @ turned.T)
        turned = chosen @ turned
    gradient = gradient_from_strain(np.mean(kept, axis=0))
    before = spglib.get_symmetry((crystal.lattice, crystal.positions, crystal.numbers), symprec=1e-5)
    columns = crystal.lattice.T
    stays = [
        (w, t)
        for w, t in zip(before["rotations"], before["translations"], strict=True)
        if np.allclose(g := columns @ w @ np.linalg.inv(columns), gradient @ g @ np.linalg.inv(gradient), atol=1e-9)
    ]
    moved = find_molecules(crystal).deformed(crystal, gradient)
    after = spglib.get_symmetry((moved.lattice, moved.positions, moved.numbers), symprec=1e-5)
    affine = crystal.deformed(gradient)
    same = spglib.get_symmetry((affine.lattice, affine.positions, affine.numbers), symprec=1e-5)
    assert len(after["rotations"]) == len(stays) == len(same["rotations"])
    for w, t in stays:
        images = moved.positions @ w.T + t
        away = images[:, None] - moved.positions[None]
        away -= np.round(away)
        near = np.linalg.norm(away @ moved.lattice, axis=-1)
        near[moved.numbers[:, None] != moved.numbers[None]] = np.inf
        assert near.min(axis=1).max() < 1e-9


def test_supercell_has_as_many_molecules_as_it_should():
    assert find_molecules(supercell(urea(), (2, 1, 3))).counts == [("molecule", "CH4N2O", 12)]


def test_many_bonds_between_the_same_two_atoms():
    """A primitive metal cell repeats one bond hundreds of times; none may get lost."""
    assert find_molecules(Crystal.from_atoms(bulk("Cs"))).kinds == ("network",)


def test_json_and_back():
    found = find_molecules(urea())
    data = found.to_dict()
    again = Molecules.from_dict({key: getattr(value, "tolist", lambda v=value: v)() for key, value in data.items()})
    np.testing.assert_array_equal(again.part, found.part)
    np.testing.assert_array_equal(again.images, found.images)
    assert (again.kinds, again.formulas) == (found.kinds, found.formulas)
    for change in ({"kinds": ["molecule", "blob"]}, {"formulas": ["CO2"]}, {"part_of_atom": [0] * 16}):
        with pytest.raises(ValueError, match="part"):
            Molecules.from_dict(data | change)


def test_starting_cell_of_a_plan():
    from strainkit.prepare.runfolder import plan_run

    crystal = dry_ice()
    for atoms in ("rigid", "affine"):
        plan = plan_run(crystal, [0.01], atoms=atoms)
        job: StrainJob = plan.jobs[1]
        expected = (
            find_molecules(crystal).deformed(crystal, job.gradient) if atoms == "rigid" else crystal.deformed(job.gradient)
        )
        np.testing.assert_array_equal(plan.starting_cell(job).positions, expected.positions)
        np.testing.assert_array_equal(plan.starting_cell(job).lattice, expected.lattice)
