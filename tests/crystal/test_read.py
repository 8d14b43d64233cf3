"""Cells in: what is read, in which frame, and what is refused."""

from __future__ import annotations

import re

import numpy as np
import pytest
from ase.build import bulk
from ase.constraints import FixAtoms
from ase.io import write as ase_write
from support.files import DRY_ICE, SILICON, write

from strainkit.crystal.read import read_crystal
from strainkit.crystal.symmetry import find_symmetry
from strainkit.errors import InputError


def test_cif_is_expanded_and_keeps_labels(tmp_path):
    crystal = read_crystal(write(tmp_path, "dry_ice.cif", DRY_ICE))
    assert crystal.formula == "C4O8"
    assert crystal.name == "dry_ice"
    assert crystal.labels.count("O1") == 8
    assert find_symmetry(crystal, 1e-5).space_group == "Pa-3"
    lengths = np.linalg.norm(crystal.to_atoms().get_all_distances(mic=True)[0, 4:], axis=0)
    assert lengths > 1
    bond = crystal.to_atoms().get_all_distances(mic=True)[0, 4:].min()
    assert bond == pytest.approx(0.1185 * 3**0.5 * 5.624, rel=1e-9)


def test_cif_agrees_with_ases_own_reader(tmp_path):
    """Reference: ASE's independent CIF reader, compared through the set of interatomic distances."""
    from ase.io import read

    path = write(tmp_path, "dry_ice.cif", DRY_ICE)
    mine, theirs = read_crystal(path).to_atoms(), read(path, format="cif")
    for atoms in (mine, theirs):
        atoms.set_pbc(True)
    np.testing.assert_allclose(
        np.sort(mine.get_all_distances(mic=True).ravel()), np.sort(theirs.get_all_distances(mic=True).ravel()), atol=1e-6
    )


def test_rounded_special_positions_are_moved_onto_them(tmp_path):
    """0.3333 in the file means 1/3; without that the group would be lost at a tight tolerance."""
    text = DRY_ICE.replace("P a -3", "P 63/m m c").replace("90\n_space", "120\n_space").replace("5.624", "3.209", 2)
    text = text.replace("_cell_length_c 3.209", "_cell_length_c 5.211")
    text = re.sub(r"C1 .*\nO1 .*\n", "Mg1 Mg 0.3333 0.6667 0.25 1\n", text)
    crystal = read_crystal(write(tmp_path, "mg.cif", text))
    assert len(crystal.numbers) == 2
    assert find_symmetry(crystal, 1e-6).space_group == "P6_3/mmc"


@pytest.mark.parametrize(
    ("change", "message"),
    [
        (("0.1185 0.1185 0.1185 1", "0.1185 0.1185 0.1185 0.97"), r"partly occupied sites: O1 \(0.97\)"),
        (("0.1185 0.1185 0.1185 1", "0.1185 0.1185 0.1185 1.3"), r"occupancies above 1: O1 \(1.3\)"),
        (("O1 O", "Q1 Xx"), "sites without a known element: Q1"),
        (("0.1185 0.1185 0.1185 1", "? ? ? 1"), "sites without coordinates: O1"),
        (("P a -3", "P nonsense"), "unknown space group"),
        (("_cell_length_a 5.624\n", ""), "no unit cell"),
        (("loop_\n_atom", "loop_\n_other"), "no atom sites|not a readable CIF"),
        (("C1 C 0 0 0 1", "C1 C 0 0 0"), "not a readable CIF"),
    ],
)
def test_bad_cif_names_the_place(tmp_path, change, message):
    path = write(tmp_path, "bad.cif", DRY_ICE.replace(*change))
    with pytest.raises(InputError, match=message) as caught:
        read_crystal(path)
    assert caught.value.where == str(path)
    assert caught.value.exit_code == 3


@pytest.mark.parametrize("occupancy", ["?", ".", "1.0(2)"])
def test_an_occupancy_that_is_not_given_is_one(tmp_path, occupancy):
    """The default of the core CIF dictionary (from memory), and common practice."""
    crystal = read_crystal(write(tmp_path, "cell.cif", DRY_ICE.replace("0.1185 1", f"0.1185 {occupancy}")))
    assert len(crystal.numbers) == 12
    assert not crystal.remarks


def test_two_structures_in_one_cif_are_refused(tmp_path):
    text = DRY_ICE + DRY_ICE.replace("data_dry_ice", "data_again")
    with pytest.raises(InputError, match=r"2 structures in one CIF \(dry_ice, again\)"):
        read_crystal(write(tmp_path, "two.cif", text))


def test_cif_without_symmetry_is_p1_and_says_so(tmp_path):
    crystal = read_crystal(write(tmp_path, "p1.cif", DRY_ICE.replace("_space_group_name_H-M_alt 'P a -3'\n", "")))
    assert len(crystal.numbers) == 2
    assert [f.code for f in crystal.remarks] == ["no-symmetry-in-file"]


def test_poscar_keeps_orientation_and_order(tmp_path):
    crystal = read_crystal(write(tmp_path, "POSCAR", SILICON))
    np.testing.assert_array_equal(crystal.lattice, [[0, 2.716, 2.716], [2.716, 0, 2.716], [2.716, 2.716, 0]])
    assert crystal.symbols == ["Si", "Si"]


@pytest.mark.filterwarnings("ignore:FHI-aims IO:FutureWarning")
@pytest.mark.parametrize("format", ["extxyz", "vasp", "xsf", "aims", "espresso-in", "abinit-in", "json"])
def test_formats_of_ase_by_name(tmp_path, format):
    atoms = bulk("MgO", "rocksalt", a=4.2)
    path = tmp_path / "cell.dat"
    extra = {"pseudopotentials": {"Mg": "a", "O": "b"}} if format == "espresso-in" else {}
    ase_write(path, atoms, format=format, **extra)
    crystal = read_crystal(path, format)
    assert sorted(crystal.symbols) == ["Mg", "O"]
    np.testing.assert_allclose(crystal.lattice, atoms.cell.array, rtol=0, atol=1e-6)


@pytest.mark.parametrize("text", ["", "   \n"])
def test_empty_file(tmp_path, text):
    with pytest.raises(InputError, match="the file is empty"):
        read_crystal(write(tmp_path, "empty.cif", text))


def test_folder_missing_file_and_unknown_kind(tmp_path):
    with pytest.raises(InputError, match="a folder, not a structure file"):
        read_crystal(tmp_path)
    with pytest.raises(InputError, match="No such file"):
        read_crystal(tmp_path / "nothing.cif")
    with pytest.raises(InputError, match="cannot tell what kind"):
        read_crystal(write(tmp_path, "notes.txt", "hello"))
    with pytest.raises(InputError, match="unknown format"):
        read_crystal(write(tmp_path, "notes.txt", "hello"), "nonsense")
    with pytest.raises(InputError, match="not readable as vasp"):
        read_crystal(write(tmp_path, "POSCAR", "one\ntwo\n"))


def test_flat_cell_molecule_and_constraints_are_refused(tmp_path):
    with pytest.raises(InputError, match="volume"):
        read_crystal(write(tmp_path, "POSCAR", SILICON.replace("2.716 2.716 0.000", "2.716 2.716 5.432")))
    ase_write(tmp_path / "molecule.xyz", bulk("Si")[:1], format="xyz")
    with pytest.raises(InputError, match="not periodic"):
        read_crystal(tmp_path / "molecule.xyz", "xyz")
    fixed = bulk("Si")
    fixed.set_constraint(FixAtoms([0]))
    ase_write(tmp_path / "fixed.traj", fixed, format="traj")
    with pytest.raises(InputError, match="carry constraints"):
        read_crystal(tmp_path / "fixed.traj")
