"""What CIFs say besides the sites: alternatives are refused, omissions are named."""

from __future__ import annotations

import pytest
from support.files import DRY_ICE, SILICON, write

from strainkit.crystal.read import read_crystal
from strainkit.errors import InputError


def with_column(name: str, carbon: str, oxygen: str, more: str = "") -> str:
    """The CIF of dry ice with one more column of the atom sites, and more sites."""
    text = DRY_ICE.replace("_atom_site_occupancy\n", f"_atom_site_occupancy\n_atom_site_{name}\n")
    return text.replace("C1 C 0 0 0 1", f"C1 C 0 0 0 1 {carbon}").replace("0.1185 1\n", f"0.1185 1 {oxygen}\n") + more


def said(tmp_path, text: str) -> dict[str, tuple[str, str]]:
    return {f.code: (f.where, f.message) for f in read_crystal(write(tmp_path, "cell.cif", text)).remarks}


def test_alternatives_with_full_occupancy_are_refused(tmp_path):
    text = with_column("disorder_group", ".", "1", "O2 O 0.13 0.13 0.10 1 2\n")
    with pytest.raises(InputError, match=r"disorder groups with full occupancy \(group 1: O1; group 2: O2\)"):
        read_crystal(write(tmp_path, "cell.cif", text))


def test_a_group_about_a_special_position_is_refused(tmp_path):
    """A negative group number is disorder about a symmetry element (SHELXL's PART -1)."""
    with pytest.raises(InputError, match="group -1: O1"):
        read_crystal(write(tmp_path, "cell.cif", with_column("disorder_group", ".", "-1")))


def test_a_single_group_is_an_ordered_model(tmp_path):
    assert said(tmp_path, with_column("disorder_group", ".", "2"))["disorder-group"][0] == "O1"
    assert "disorder-group" not in said(tmp_path, with_column("disorder_group", ".", "."))


def test_groups_of_different_assemblies_are_no_alternatives(tmp_path):
    text = with_column("disorder_group", "1", "2").replace("_group\n", "_group\n_atom_site_disorder_assembly\n")
    text = text.replace("0 0 0 1 1", "0 0 0 1 1 A").replace("0.1185 1 2", "0.1185 1 2 B")
    assert "disorder-group" in said(tmp_path, text)


def test_dummies_are_refused(tmp_path):
    with pytest.raises(InputError, match="dummy sites that are no atoms: O1"):
        read_crystal(write(tmp_path, "cell.cif", with_column("calc_flag", "d", "dum")))


def test_hydrogens_counted_but_not_listed(tmp_path):
    where, message = said(tmp_path, with_column("attached_hydrogens", "0", "2"))["attached-hydrogens"]
    assert where == "O1"
    assert message.endswith("O1 2")
    assert "attached-hydrogens" not in said(tmp_path, with_column("attached_hydrogens", "0", "0"))


@pytest.mark.parametrize("tag", ["_platon_squeeze_void", "_smtbx_masks_void"])
def test_masked_solvent_is_said(tmp_path, tag):
    """Tag names from memory of PLATON's and smtbx's output."""
    text = f"{DRY_ICE}loop_\n{tag}_nr\n{tag}_volume\n{tag}_count_electrons\n1 172 41\n2 90 '20'\n"
    message = said(tmp_path, text)["solvent-masked"][1]
    assert message.endswith("2 voids: 172 A^3 with 41 electrons, 90 A^3 with 20 electrons")


@pytest.mark.parametrize(
    ("claims", "message"),
    [
        ("_chemical_formula_sum 'C O2'\n_cell_formula_units_Z 4\n", None),
        ("_chemical_formula_sum 'C O2'\n", None),
        ("_chemical_formula_sum '?'\n", None),
        ("_chemical_formula_sum 'C6 H12 O6, H2 O'\n", None),
        (
            "_chemical_formula_sum 'C H2 O2'\n_cell_formula_units_Z 4\n",
            "the file states 4 x C1 H2 O2, the cell holds H 0 for 8",
        ),
        ("_chemical_formula_sum 'C D2 O2'\n", "H 0 for 8"),
        ("_chemical_formula_sum 'C O2'\n_cell_formula_units_Z 8\n", "C 4 for 8, O 8 for 16"),
        ("_chemical_formula_sum 'C N O2'\n", "N 0 for 4"),
    ],
)
def test_stated_formula(tmp_path, claims, message):
    found = said(tmp_path, DRY_ICE.replace("_cell_length_a", claims + "_cell_length_a"))
    assert ("formula-differs" in found) == (message is not None)
    if message:
        assert message in found["formula-differs"][1]


def test_sites_on_top_of_each_other_are_refused(tmp_path):
    path = write(tmp_path, "cell.cif", DRY_ICE + "O2 O 0.1190 0.1185 0.1185 1\n")
    with pytest.raises(InputError, match=r"atoms on top of each other: O1 and O2 \(0\.00\d+ A\)") as caught:
        read_crystal(path)
    assert caught.value.where == str(path)


DEUTERIUM = {
    "POSCAR": "ND3\n1.0\n5 0 0\n0 5 0\n0 0 5\nN D\n1 3\nDirect\n.1 .1 .1\n.3 .1 .1\n.1 .3 .1\n.1 .1 .3\n",
    "a.extxyz": '4\nLattice="5 0 0 0 5 0 0 0 5" Properties=species:S:1:pos:R:3 pbc="T T T"\n'
    "N .5 .5 .5\nD 1.5 .5 .5\nD .5 1.5 .5\nD .5 .5 1.5\n",
    "a.cif": DRY_ICE.replace("P a -3", "P 1").replace("O1 O ", "D1 D "),
}


@pytest.mark.parametrize("name", DEUTERIUM)
def test_deuterium_is_hydrogen_and_said(tmp_path, name):
    crystal = read_crystal(write(tmp_path, name, DEUTERIUM[name]))
    assert "H" in crystal.symbols
    assert "deuterium" in [f.code for f in crystal.remarks]


def test_other_unknown_elements_stay_unknown(tmp_path):
    with pytest.raises(InputError, match="not readable as vasp"):
        read_crystal(write(tmp_path, "POSCAR", SILICON.replace("Si\n2", "Q\n2")))
