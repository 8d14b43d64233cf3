"""Energies of crystals against each other: stoichiometry and sums worked by hand; the energies are invented."""

from __future__ import annotations

from fractions import Fraction

import numpy as np
import pytest
from ase.units import kJ, mol
from support.molecular import dry_ice, side_by_side, urea

from strainkit.crystal.crystal import Crystal
from strainkit.crystal.frames import chosen_frame
from strainkit.derive.doubts import doubts_about
from strainkit.derive.elastic import ElasticCrystal
from strainkit.derive.formation import composition_of, energies_of, solve_exactly
from strainkit.derive.member import Member
from strainkit.derive.method import Method
from strainkit.tensors.stiffness import Stiffness

QE = Method("Quantum ESPRESSO", settings={"ecutwfc": 80.0, "nstep": 100}, pseudopotentials={"C": "C.upf"}, kspacing=0.3)


def member(label: str, crystal: Crystal, energy: float | None, method: Method = QE) -> Member:
    stiffness = Stiffness(10.0 * np.eye(6))
    elastic = ElasticCrystal(
        label, "test", stiffness, stiffness, np.zeros((3, 3)), chosen_frame("given", None), crystal=crystal
    )
    return Member(label, label, elastic, computed=True, method=method, energy=energy)


WATER, CARBONIC = side_by_side(["H2O", "H2O"]), side_by_side(["H2O", "CO2", "CO2"])


def test_formula_units():
    assert (composition_of(dry_ice()).formula, composition_of(dry_ice()).units) == ("CO2", 4)
    assert (composition_of(urea()).formula, composition_of(urea()).units) == ("CH4N2O", 2)
    assert (composition_of(CARBONIC).formula, composition_of(CARBONIC).units) == ("(CO2)2(H2O)", 1)
    two = side_by_side(["C2H6", "C2H6"])  # its formula unit is the molecule, not CH3
    assert (composition_of(two).formula, composition_of(two).units) == ("C2H6", 2)


def test_stoichiometry_is_exact():
    """H2 + O2/2 = H2O, and other sums that can be done in the head."""
    assert solve_exactly({"H": 2, "O": 1}, [{"H": 2}, {"O": 2}]) == [1, Fraction(1, 2)]
    assert solve_exactly({"A": 1, "B": 1}, [{"A": 3}, {"B": 3}]) == [Fraction(1, 3)] * 2
    assert solve_exactly({"Al": 2, "O": 3}, [{"Fe": 1, "O": 1}]) is None
    assert solve_exactly({"A": 2, "B": 1}, [{"A": 1}, {"B": 1}, {"A": 1, "B": 1}]) is None  # not one way only
    assert solve_exactly({"A": 1}, [{"A": 1, "B": 1}, {"B": 1}]) == [1, -1]


def test_formation_by_hand():
    """One water and two CO2: -30.0 - (-20.4/2) - 2 (-39.0/4) = -0.3 eV."""
    parents = [member("ice", WATER, -20.4), member("dry ice", dry_ice(), -39.0)]
    made, reactions, doubts = energies_of([*parents, member("clathrate", CARBONIC, -30.0)])
    (reaction,) = reactions
    assert (reaction.product, reaction.parents) == (2, ((0, Fraction(1)), (1, Fraction(2))))
    assert reaction.energy == pytest.approx(-0.3, rel=1e-12)
    data = reaction.to_dict(["ice", "dry ice", "clathrate"])
    assert data["energy_kJ_per_mol"] == pytest.approx(-0.3 * mol / kJ, rel=1e-12)
    assert data["energy_kJ_per_mol"] == pytest.approx(-0.3 * 96.485, rel=1e-5)  # 1 eV = 96.485 kJ/mol (CODATA)
    assert data["formula_unit"] == "(CO2)2(H2O)"
    assert made[0] is not None
    assert not doubts


def test_forms_of_one_composition_against_the_lowest():
    doubled = Crystal.from_atoms(dry_ice().to_atoms() * (2, 1, 1))
    _, reactions, _ = energies_of([member("a", dry_ice(), -39.0), member("b", doubled, -78.4), member("c", dry_ice(), -38.8)])
    found = {r.product: (r.parents, r.energy) for r in reactions}
    assert set(found) == {0, 2}
    assert found[0] == (((1, Fraction(1)),), pytest.approx(0.05, abs=1e-12))  # -39/4 + 78.4/8
    assert found[2] == (((1, Fraction(1)),), pytest.approx(0.10, abs=1e-12))


def refused(*members: Member) -> str:
    _, reactions, _ = energies_of(list(members))
    (reaction,) = [r for r in reactions if len(r.parents) != 1]
    assert reaction.energy is None
    return reaction.reason


def test_refusals_name_their_reason():
    ice, both = member("ice", WATER, -20.4), member("both", CARBONIC, -30.0)
    coarse = Method("Quantum ESPRESSO", settings={"ecutwfc": 60.0, "nstep": 100}, kspacing=0.3)
    assert "no energy of the reference of dry" in refused(ice, member("dry", dry_ice(), None), both)
    assert "ecutwfc" in refused(ice, member("dry", dry_ice(), -39.0, coarse), both)
    assert "program" in refused(ice, member("dry", dry_ice(), -39.0, Method("VASP", settings=QE.settings)), both)
    assert "k-point spacing" in refused(ice, member("dry", dry_ice(), -39.0, Method(QE.program, kspacing=0.2)), both)
    other = Method(QE.program, None, QE.settings, {"C": "other.upf"}, 0.3)
    assert "pseudopotential of C" in refused(ice, member("dry", dry_ice(), -39.0, other), both)
    # steering settings do not matter, nor do pseudopotentials of elements that the other has not
    fine = Method(QE.program, None, {"ecutwfc": 80.0, "nstep": 500}, {"C": "C.upf", "N": "N.upf"}, 0.3)
    _, reactions, _ = energies_of([ice, member("dry", dry_ice(), -39.0, fine), both])
    assert reactions[0].energy is not None


def test_parents_are_what_is_not_made_of_the_others():
    mixed = member("mixed", side_by_side(["H2O", "CO2"]), -20.0)
    ice, dry, both = member("ice", WATER, -20.4), member("dry", dry_ice(), -39.0), member("both", CARBONIC, -30.0)
    _, reactions, _ = energies_of([ice, dry, mixed, both])
    found = {r.product: r.energy for r in reactions}
    assert found == {2: pytest.approx(-20.0 + 10.2 + 9.75, abs=1e-12), 3: pytest.approx(-0.3, abs=1e-12)}


def test_several_ways_are_refused():
    """With W, C and A for the molecules: WCA = WC + A = (W2A + C2A)/2."""
    cells = [["H2O", "H2O", "NH3"], ["CO2", "CO2", "NH3"], ["H2O", "CO2"], ["NH3"], ["H2O", "CO2", "NH3"]]
    (reaction,) = energies_of([member(str(i), side_by_side(names), -1.0) for i, names in enumerate(cells)])[1]
    assert reaction.product == 4
    assert reaction.energy is None
    assert "several combinations" in reaction.reason


def test_what_outputs_say_counts_where_no_deck_is_recorded():
    said = {"functional": "PBE", "cutoff_eV": 600.0, "kpoints": "4x4x4", "spin": "none", "dispersion": "none"}
    one = Method("VASP", printed=said)
    assert one.recorded
    assert one.words == "VASP PBE 600 eV 4x4x4"
    assert one.differences(Method("VASP", printed={**said, "kpoints": "2x2x8", "spin": "polarised"})) == []
    assert one.differences(Method("VASP", printed={**said, "cutoff_eV": 520.0})) == ["cutoff_eV 600 and 520"]
    assert one.differences(Method("VASP", printed={**said, "dispersion": "IVDW 12"})) == ["dispersion none and IVDW 12"]
    assert "4x4x4 and 2x2x8" in one.doubts(Method("VASP", printed={**said, "kpoints": "2x2x8"}))[0]


def test_what_the_folders_do_not_say_is_a_finding():
    ice, dry, both = (("ice", WATER, -20.4), ("dry", dry_ice(), -39.0), ("both", CARBONIC, -30.0))
    for method, word in (
        (Method("VASP"), "not recorded"),
        (Method(engine="gfn1-xtb"), "one k-point"),
        (Method("VASP", settings={"encut": 600.0}, kmesh=(4, 4, 4)), "4x4x4"),
    ):
        _, reactions, doubts = energies_of([member(*m, method) for m in (ice, dry, both)])
        assert reactions[0].energy is not None
        assert [d.code for d in doubts] == ["settings-unverified"]
        assert word in doubts[0].message


@pytest.mark.parametrize(
    ("one", "other", "words"),
    [
        (QE, Method(engine="tersoff"), "program Quantum ESPRESSO and engine tersoff"),
        (QE, Method(), "program Quantum ESPRESSO and an unknown program"),
        (Method(engine="tersoff"), Method(engine="emt"), "engine tersoff and engine emt"),
        (Method(engine="tersoff"), Method(), "engine tersoff and an unknown program"),
    ],
)
def test_energies_of_different_programs_are_never_subtracted(one, other, words):
    """Their zeros differ by thousands of eV; what made them must be known of both, or of neither."""
    ice, both = member("ice", WATER, -20.4, one), member("both", CARBONIC, -30.0, one)
    reason = refused(ice, member("dry", dry_ice(), -39.0, other), both)
    assert reason == f"computed differently from dry: {words}"
    pair = [member("a", dry_ice(), -39.0, one), member("b", dry_ice(), -4000.0, other)]
    _, (reaction,), _ = energies_of(pair)
    assert reaction.energy is None
    (doubt,) = [f for f in doubts_about(pair, []) if f.code == "methods-differ"]
    assert doubt.where == "b"
    assert words in doubt.message
