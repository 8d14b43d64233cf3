"""What is said about a cell, and above all what is not: no false alarms on sound structures."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from ase import Atoms
from ase.build import bulk, molecule
from ase.collections import g2
from ase.spacegroup import crystal as spacegroup_crystal
from support.crystals import conventional, random_rotation, random_unimodular, rewritten, supercell
from support.molecular import ammonia, ammonium_chloride, boxed, dry_ice, side_by_side, urea

from strainkit.crystal.contacts import judge_contacts, refuse_coincident
from strainkit.crystal.crystal import Crystal
from strainkit.crystal.hydrogens import judge_hydrogens
from strainkit.crystal.judge import judge_cell, judge_setting
from strainkit.crystal.molecules import find_molecules
from strainkit.crystal.neighbours import find_neighbours
from strainkit.crystal.read import read_crystal
from strainkit.crystal.symmetry import find_symmetry, tolerance_ladder
from strainkit.crystal.voids import find_voids
from strainkit.errors import InputError
from strainkit.findings import CODES, Finding
from strainkit.prepare.runfolder import plan_run
from strainkit.shipped import shipped_folder


def built(symbols, basis, group, cell):
    return Crystal.from_atoms(spacegroup_crystal(symbols, basis, spacegroup=group, cellpar=cell))


HEXAGONAL = [90, 90, 120]
#: sound structures: cells and coordinates from memory of R. W. G. Wyckoff, Crystal Structures
SOUND = {
    "Al": Crystal.from_atoms(bulk("Al", cubic=True)),
    "W": Crystal.from_atoms(bulk("W", cubic=True)),
    "Mg": Crystal.from_atoms(bulk("Mg")),
    "Pb": Crystal.from_atoms(bulk("Pb", cubic=True)),
    "Cs": Crystal.from_atoms(bulk("Cs", cubic=True)),
    "Si": Crystal.from_atoms(bulk("Si", cubic=True)),
    "diamond": Crystal.from_atoms(bulk("C", cubic=True)),
    "Ar": Crystal.from_atoms(bulk("Ar", a=5.31, cubic=True)),
    "NaCl": Crystal.from_atoms(bulk("NaCl", "rocksalt", a=5.64, cubic=True)),
    "MgO": Crystal.from_atoms(bulk("MgO", "rocksalt", a=4.21, cubic=True)),
    "CsCl": Crystal.from_atoms(bulk("CsCl", "cesiumchloride", a=4.12)),
    "PbS": Crystal.from_atoms(bulk("PbS", "rocksalt", a=5.94, cubic=True)),
    "CaF2": Crystal.from_atoms(bulk("CaF2", "fluorite", a=5.46, cubic=True)),
    "GaAs": Crystal.from_atoms(bulk("GaAs", "zincblende", a=5.65, cubic=True)),
    "TiC": Crystal.from_atoms(bulk("TiC", "rocksalt", a=4.33, cubic=True)),
    "ZnO": Crystal.from_atoms(bulk("ZnO", "wurtzite", a=3.25, c=5.21)),
    "LiH": Crystal.from_atoms(bulk("LiH", "rocksalt", a=4.08, cubic=True)),
    "SrTiO3": built(["Sr", "Ti", "O"], [(0.5, 0.5, 0.5), (0, 0, 0), (0.5, 0, 0)], 221, [3.905] * 3 + [90] * 3),
    "ReO3": built(["Re", "O"], [(0, 0, 0), (0.5, 0, 0)], 221, [3.75] * 3 + [90] * 3),
    "rutile": built(["Ti", "O"], [(0, 0, 0), (0.305, 0.305, 0)], 136, [4.594, 4.594, 2.959, 90, 90, 90]),
    "corundum": built(["Al", "O"], [(0, 0, 0.3522), (0.3062, 0, 0.25)], 167, [4.76, 4.76, 12.99, *HEXAGONAL]),
    "quartz": built(["Si", "O"], [(0.4697, 0, 1 / 3), (0.4133, 0.2672, 0.4522)], 152, [4.916, 4.916, 5.405, *HEXAGONAL]),
    "calcite": built(["Ca", "C", "O"], [(0, 0, 0), (0, 0, 0.25), (0.2578, 0, 0.25)], 167, [4.99, 4.99, 17.06, *HEXAGONAL]),
    "graphite": built(["C", "C"], [(0, 0, 0.25), (1 / 3, 2 / 3, 0.25)], 194, [2.461, 2.461, 6.708, *HEXAGONAL]),
    "pyrite": built(["Fe", "S"], [(0, 0, 0), (0.385, 0.385, 0.385)], 205, [5.418] * 3 + [90] * 3),
    "brucite": built(
        ["Mg", "O", "H"], [(0, 0, 0), (1 / 3, 2 / 3, 0.22), (1 / 3, 2 / 3, 0.43)], 164, [3.142, 3.142, 4.766, *HEXAGONAL]
    ),
    "iodine": built(["I"], [(0, 0.1543, 0.1174)], 64, [7.136, 4.686, 9.784, 90, 90, 90]),
    "nitrogen": built(["N"], [(0.0564, 0.0564, 0.0564)], 205, [5.66] * 3 + [90] * 3),
    "CO": built(["C", "O"], [(0.0575, 0.0575, 0.0575), (0.943, 0.943, 0.943)], 198, [5.63] * 3 + [90] * 3),
    "dry ice": dry_ice(),
    "urea": urea(),
    "ammonia": ammonia(),
}


def codes(crystal: Crystal) -> list[str]:
    return [f.code for f in judge_cell(crystal)[1]]


def of(crystal: Crystal, code: str) -> list[Finding]:
    return [f for f in judge_cell(crystal)[1] if f.code == code]


def of_atoms(atoms: Atoms, code: str = "") -> list[Finding]:
    """What is said about hydrogens and contacts of a lone group of atoms (or with one code)."""
    crystal = boxed(atoms)
    found = find_neighbours(crystal)
    doubts = [*judge_hydrogens(crystal, found), *judge_contacts(crystal, found, find_molecules(crystal, found))]
    return [f for f in doubts if code in ("", f.code)]


@pytest.mark.parametrize("name", SOUND)
def test_nothing_is_said_about_sound_structures(name):
    assert judge_cell(SOUND[name])[1] == []


#: sample cell -> what its bonds make (kind, formula without the count)
SAMPLES = {
    "adamantane": {("molecule", "C10H16")},
    "aluminium_nitride": {("network", "Al2N2")},
    "ammonia": {("molecule", "H3N")},
    "ammonium_fluoride": {("molecule", "H4N"), ("molecule", "F")},
    "benzene": {("molecule", "C6H6")},
    "carbon_dioxide": {("molecule", "CO2")},
    "corundum": {("network", "Al12O18")},
    "dolomite": {("network", "C6Ca3Mg3O18")},
    "fluorapatite": {("network", "Ca10F2O24P6")},
    "glycine": {("molecule", "C2H5NO2")},
    "hexamethylenetetramine": {("molecule", "C6H12N4")},
    "hexane": {("molecule", "C6H14")},
    "magnesium_oxide": {("network", "Mg4O4")},
    "naphthalene": {("molecule", "C10H8")},
    "quartz": {("network", "O6Si3")},
    "rutile": {("network", "O4Ti2")},
    "scheelite": {("network", "Ca4O16W4")},
    "silicon": {("network", "Si8")},
    "triazine": {("molecule", "C3H3N3")},
    "urea": {("molecule", "CH4N2O")},
}


@pytest.mark.parametrize("path", sorted(shipped_folder("sample_cells").glob("*.cif")), ids=lambda path: path.stem)
def test_sample_cells_raise_no_alarm(path):
    crystal = read_crystal(path)
    molecules, doubts = judge_cell(crystal)
    assert {(kind, formula) for kind, formula, _ in molecules.counts} == SAMPLES[path.stem]
    said = [*crystal.remarks, *doubts, *judge_setting(crystal, find_symmetry(crystal))]
    assert {f.code for f in said} <= {"nonstandard-setting", "ions-or-radicals"}


@pytest.mark.parametrize("name", ["Al", "W", "Si", "NaCl", "diamond"])
def test_pressure_raises_no_alarm(name):
    """A quarter less volume: several tens to hundreds of GPa."""
    crystal = SOUND[name]
    assert codes(replace(crystal, lattice=crystal.lattice * 0.75 ** (1 / 3))) == []


def test_salt_of_molecular_ions_is_named_and_no_more():
    (found,) = judge_cell(ammonium_chloride())[1]
    assert (found.code, found.severity) == ("ions-or-radicals", "info")
    assert "1 H4N, 1 Cl" in found.message


# hydrogens -----------------------------------------------------------------------------------------------------------

#: members of the G2 collection that do lack hydrogens: radicals, carbenes and atoms of the elements C, N, O
FRAGMENTS = {"CH3CO", "HCO", "C2H3", "NH2", "CH", "C", "CH2_s1A1d", "CH2_s3B1d", "CH3O", "CH3CH2O", "NH", "O", "N", "CCH", "OH"}
ORGANIC = [name for name in g2.names if 6 in g2[name].numbers and 1 in g2[name].numbers and name not in FRAGMENTS]


@pytest.mark.parametrize("name", g2.names)
def test_complete_molecules_and_fragments_of_g2(name):
    """ASE's G2 collection of 162 molecules (MP2 geometries): only the fragments lack hydrogens."""
    assert {f.code for f in of_atoms(g2[name])} == ({"missing-hydrogens"} if name in FRAGMENTS else set())


@pytest.mark.parametrize("name", [n for n in ORGANIC if n != "HCN"])  # HCN leaves cyanide, which is an ion of its own
def test_organic_molecules_without_their_hydrogens_are_seen(name):
    atoms = g2[name]
    (found,) = of_atoms(atoms[atoms.numbers != 1], "missing-hydrogens")
    assert found.severity == "warning"


@pytest.mark.parametrize(
    ("name", "drop", "site"),
    [("C6H6", 6, "2 neighbours at 120 deg"), ("CH3CH2OH", 3, "O"), ("CH3COOH", -1, ""), ("H2O", 1, "one hydrogen only")],
)
def test_one_missing_hydrogen_is_seen(name, drop, site):
    atoms = g2[name]
    if name == "CH3COOH":  # the acid's own
        drop = int(
            np.argmin(
                [
                    np.linalg.norm(p - atoms.positions[2]) if z == 1 else 9
                    for z, p in zip(atoms.numbers, atoms.positions, strict=True)
                ]
            )
        )
    assert atoms.numbers[drop] == 1
    del atoms[drop]
    (found,) = of_atoms(atoms, "missing-hydrogens")
    assert found.message.startswith("1 atoms")
    assert site in found.message


def test_water_oxygens_alone_and_on_metals():
    assert "no neighbours" in of_atoms(Atoms("O"), "missing-hydrogens")[0].message
    aqua = Atoms("MgO6", positions=2.07 * np.array([(0, 0, 0), *np.eye(3), *-np.eye(3)]))
    assert of_atoms(aqua, "missing-hydrogens")[0].message.startswith("6 atoms")


def test_groups_that_carry_a_charge_lack_nothing():
    """Ions whose geometry is textbook knowledge: carbonate, nitrate, azide, cyanate, carboxylate, sulfate, imidazolate."""
    trigonal = np.array([(np.cos(a), np.sin(a), 0) for a in np.radians([0, 120, 240])])
    tetrahedral = np.array([(1, 1, 1), (1, -1, -1), (-1, 1, -1), (-1, -1, 1)]) / 3**0.5
    ring = 1.15 * np.array([(np.cos(a), np.sin(a), 0) for a in np.radians(72 * np.arange(5))])
    outward = 2.24 * np.array([(np.cos(a), np.sin(a), 0) for a in np.radians([0, 144, 216])])
    ions = {
        "carbonate": Atoms("CO3", positions=[(0, 0, 0), *1.28 * trigonal]),
        "nitrate": Atoms("NO3", positions=[(0, 0, 0), *1.25 * trigonal]),
        "azide": Atoms("N3", positions=[(0, 0, -1.17), (0, 0, 0), (0, 0, 1.17)]),
        "cyanate": Atoms("OCN", positions=[(0, 0, -1.23), (0, 0, 0), (0, 0, 1.18)]),
        "sulfate": Atoms("SO4", positions=[(0, 0, 0), *1.47 * tetrahedral]),
        "oxalate": Atoms(
            "C2O4",
            positions=[(0, 0, 0), (1.56, 0, 0), (-0.57, 1.12, 0), (-0.57, -1.12, 0), (2.13, 1.12, 0), (2.13, -1.12, 0)],
        ),
        "imidazolate": Atoms("CNCCN" + "H3", positions=[*ring, *outward]),
    }
    for name, ion in ions.items():
        assert of_atoms(ion) == [], name


def test_hydrogens_of_x_ray_structures_are_counted():
    """Benzene with C-H of 0.95 A, the riding value of X-ray refinements (Sheldrick, Acta Cryst. C 71, 3, 2015)."""
    atoms = g2["C6H6"]
    for carbon in range(6):
        atoms.set_distance(carbon, carbon + 6, 0.95, fix=0)
    (found,) = of_atoms(atoms, "x-ray-hydrogens")
    assert "6 of 6 C-H bonds are 0.95 A" in found.message
    assert of_atoms(g2["C6H6"], "x-ray-hydrogens") == []


# contacts ------------------------------------------------------------------------------------------------------------


def test_atoms_listed_on_both_faces_are_refused_by_name():
    atoms = bulk("Si", cubic=True)
    atoms += Atoms("Si", positions=[atoms.cell[0] + atoms.positions[0]])
    crystal = Crystal.from_atoms(atoms)
    with pytest.raises(InputError, match=r"on top of each other: Si \(atom 1\) and Si \(atom 9\)"):
        plan_run(crystal)
    refuse_coincident(Crystal.from_atoms(bulk("Si", cubic=True)))


def test_toy_crystals_are_computed_whatever_is_said_about_them():
    """Lennard-Jones units: nearest neighbours at 1.1 A."""
    for symbol in ("Ar", "H", "C"):
        plan = plan_run(Crystal.from_atoms(bulk(symbol, "fcc", a=1.1 * 2**0.5, cubic=True)))
        assert plan.atoms == "affine"
        assert len(plan.jobs) == 3


@pytest.mark.parametrize(
    ("atoms", "message"),
    [
        (Atoms("N2", positions=[(0, 0, 0), (0, 0, 0.8)]), "N (atom 1) to N (atom 2) 0.80 A: closer than any bond"),
        (Atoms("OH2H", positions=[(0, 0, 0), (0.96, 0, 0), (-0.24, 0.93, 0), (0.62, 0.73, 0)]), "0.81 A"),
        (Atoms("CF5", positions=1.35 * np.array([(0, 0, 0), *np.eye(3), (-1, 0, 0), (0, -1, 0)])), "C (atom 1) has 5 bonds"),
    ],
)
def test_impossible_neighbours(atoms, message):
    found = of_atoms(atoms, "atoms-too-close")
    assert any(message in f.message for f in found), found


def shifted(atoms: Atoms, by: tuple[float, float, float]) -> Atoms:
    atoms = atoms.copy()
    atoms.translate(by)
    return atoms


def test_molecules_pushed_into_each_other():
    """Two benzenes 2.1 A apart: no bond, and far inside the contact of 3.4 A."""
    pair = g2["C6H6"] + shifted(g2["C6H6"], (0.3, 0.2, 2.1))
    assert any("different molecules" in f.message for f in of_atoms(pair, "atoms-too-close"))
    far = g2["C6H6"] + shifted(g2["C6H6"], (0.3, 0.2, 3.3))
    assert of_atoms(far, "atoms-too-close") == []


def test_cell_in_the_wrong_unit():
    """Bohr taken for angstrom: MgO with ions 3.98 A apart."""
    (found,) = of(Crystal.from_atoms(bulk("MgO", "rocksalt", a=7.96)), "unbonded-atoms")
    assert "in angstrom?" in found.message


# electrons -----------------------------------------------------------------------------------------------------------


def test_odd_electrons():
    assert of(side_by_side(["NO"]), "odd-electrons")
    (found,) = of(
        boxed(Atoms("NH4", positions=[(0, 0, 0), *0.6 * np.array([(1, 1, 1), (1, -1, -1), (-1, 1, -1), (-1, -1, 1)])])),
        "odd-electrons",
    )
    assert "11 electrons in the cell, an odd count in 1 H4N" in found.message
    assert of(supercell(side_by_side(["NO"]), (2, 1, 1)), "odd-electrons")[0].message.startswith("30 electrons")
    assert of(side_by_side(["H2O", "CO2"]), "odd-electrons") == []
    assert of(Crystal.from_atoms(bulk("Al")), "odd-electrons") == []


# space ---------------------------------------------------------------------------------------------------------------


def test_void_between_lone_atoms_is_the_cell_less_the_spheres():
    """By hand: helium (Bondi 1.40 A) 6 A apart; a probe of 1.2 A passes everywhere outside the atoms."""
    voids = find_voids(Crystal.from_atoms(Atoms("He", cell=[6.0] * 3, pbc=True)))
    sphere = 4 / 3 * np.pi * 1.4**3
    assert voids.volume == pytest.approx(216 - sphere, rel=0.02)
    assert voids.largest == pytest.approx(voids.volume)
    assert voids.packing == pytest.approx(sphere / 216, abs=0.02)
    assert voids.width == pytest.approx(3**0.5 * 3 - 1.4, abs=0.2)


def test_void_agrees_with_a_slow_count_at_random_points():
    """Slow reference: random centres, each with the largest sphere free of atoms; random points inside any."""
    from ase.data.vdw import vdw_radii
    from scipy.spatial.distance import cdist

    crystal = holed_urea()
    voids = find_voids(crystal)
    rng = np.random.default_rng(5)
    shifts = np.stack(np.meshgrid(*[[-1, 0, 1]] * 3), axis=-1).reshape(-1, 3)
    atoms = (crystal.positions[None] % 1.0 + shifts[:, None]).reshape(-1, 3) @ crystal.lattice
    radii = np.tile(vdw_radii[crystal.numbers], 27)
    centres = rng.uniform(size=(20000, 3)) @ crystal.lattice
    free = np.concatenate([(cdist(some, atoms) - radii).min(axis=1) for some in np.split(centres, 10)])
    images = (centres[free >= 1.2][None] + (shifts @ crystal.lattice)[:, None]).reshape(-1, 3)
    spheres = np.tile(free[free >= 1.2], 27)
    points = rng.uniform(size=(8000, 3)) @ crystal.lattice
    inside = [(cdist(some, images) <= spheres).any(axis=1) for some in np.split(points, 8)]
    covered = np.concatenate(inside).mean() * crystal.volume
    assert voids.volume == pytest.approx(covered, rel=0.1)


def holed_urea() -> Crystal:
    """Urea, 2x2x1, with one of its eight molecules taken out."""
    crystal = supercell(urea(), (2, 2, 1))
    molecules, _ = judge_cell(crystal)
    keep = molecules.part != 0
    return Crystal(crystal.lattice, crystal.positions[keep], crystal.numbers[keep], name="holed")


def test_a_molecule_taken_out_leaves_a_void_where_it_was():
    """Urea has 72 A^3 a molecule; what a probe of 1.2 A finds of that is less, and it is there."""
    whole = supercell(urea(), (2, 2, 1))
    molecules, _ = judge_cell(whole)
    gone = (whole.positions + molecules.images)[molecules.part == 0].mean(axis=0)
    holed = holed_urea()
    voids = find_voids(holed)
    assert 40 < voids.largest < 75
    away = voids.centre - gone
    away -= np.round(away)
    assert np.linalg.norm(away @ whole.lattice) < 1.5
    (found,) = of(holed, "void")
    assert found.severity == "warning"
    assert f"{voids.largest:.0f} A^3 in one piece" in found.message
    assert of(whole, "void") == []


@pytest.mark.parametrize("seed", range(3))
def test_voids_do_not_depend_on_how_the_cell_is_written(seed):
    rng = np.random.default_rng(seed)
    start = holed_urea()
    moved = rewritten(start, random_rotation(rng), random_unimodular(rng))
    one, other = find_voids(start), find_voids(moved)
    assert other.largest == pytest.approx(one.largest, rel=0.05)
    assert other.packing == pytest.approx(one.packing, abs=0.02)


def test_fullerene_has_its_octahedral_hole_and_no_missing_hydrogens():
    """By hand: a/2 = 7.085 A from the hole to the cage centres, less the cage's 3.55 A (ASE's C60) and carbon's 1.70 A."""
    cage = molecule("C60")
    cage.set_cell(7.085 * (np.ones((3, 3)) - np.eye(3)))
    cage.pbc = True
    crystal = Crystal.from_atoms(cage)
    assert set(codes(crystal)) == {"void"}
    voids = find_voids(crystal)
    np.testing.assert_allclose(voids.centre, 0.5, rtol=0, atol=0.05)
    radius = np.linalg.norm(cage.positions - cage.positions.mean(axis=0), axis=1).mean()
    assert voids.width == pytest.approx(7.085 - radius - 1.70, abs=0.1)


def test_frameworks_may_have_voids():
    """Sodalite silica, cage of about 6 A."""
    frame = spacegroup_crystal(["Si", "O"], [(0.25, 0.5, 0), (0.35, 0.35, 0)], spacegroup=229, cellpar=[8.83] * 3 + [90] * 3)
    (found,) = judge_cell(Crystal.from_atoms(frame))[1]
    assert (found.code, found.severity) == ("open-framework", "info")


def test_loose_and_tight_packing():
    assert of(boxed(g2["C6H6"], 8.0), "implausible-density")
    tight = replace(dry_ice(), lattice=dry_ice().lattice * 0.8)
    molecules, _ = judge_cell(dry_ice())
    squeezed = molecules.deformed(dry_ice(), 0.8 * np.eye(3))
    assert tight.volume == pytest.approx(squeezed.volume)
    assert "packing coefficient" in of(squeezed, "implausible-density")[0].message


# setting -------------------------------------------------------------------------------------------------------------


def setting_codes(crystal: Crystal, symprec: float = 1e-3) -> list[str]:
    return [f.code for f in judge_setting(crystal, find_symmetry(crystal, symprec))]


def test_left_handed_cell_is_kept_and_named():
    start = conventional("mmm")
    mirrored = rewritten(start, np.eye(3), np.diag([1, 1, -1]))
    assert setting_codes(start) == []
    assert setting_codes(mirrored) == ["left-handed-cell"]
    plan = plan_run(mirrored)
    np.testing.assert_array_equal(plan.crystal.lattice, mirrored.lattice)


def test_settings_other_than_the_standard_one_are_kept_and_named():
    start = conventional("2/m")
    other = rewritten(start, np.eye(3), np.array([[1, 0, 1], [0, 1, 0], [0, 0, 1]]))
    assert setting_codes(start) == []
    (found,) = judge_setting(other, find_symmetry(other))
    assert found.code == "nonstandard-setting"
    assert "5.300 7.900 9.100" in found.message
    np.testing.assert_array_equal(plan_run(other).crystal.lattice, other.lattice)
    assert setting_codes(Crystal.from_atoms(bulk("Si"))) == ["nonstandard-setting"]


def test_rounded_coordinates_are_offered_their_symmetry():
    start = conventional("-3m")
    rounded = replace(start, positions=np.round(start.positions, 4))
    _, _, findings = tolerance_ladder(rounded, 1e-4)
    (found,) = findings
    assert "prepare --symmetrize --symprec 0.001" in found.message
    assert "off-symmetry" in setting_codes(rounded, 1e-2)
    assert setting_codes(start) == []


def test_every_code_said_here_is_documented():
    for code in ("missing-hydrogens", "void", "x-ray-hydrogens", "left-handed-cell", "formula-differs", "disorder-group"):
        assert code in CODES
