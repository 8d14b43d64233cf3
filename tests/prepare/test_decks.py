"""Shipped decks and the user's own: one mesh, one grid and one cutoff for all jobs, and every mistake with line and field."""

from __future__ import annotations

import io
import re
import warnings

import numpy as np
import pytest
from ase.io import read as ase_read
from support.crystals import conventional, random_rotation, rewritten
from support.files import DRY_ICE, write

from strainkit.crystal.crystal import Crystal
from strainkit.crystal.read import read_crystal
from strainkit.errors import InputError, UsageError
from strainkit.prepare.calculation import plan_calculation
from strainkit.prepare.decks import DECK_NAMES, load_deck
from strainkit.prepare.runfolder import plan_run
from strainkit.prepare.settings import Settings
from strainkit.run.plan import Plan
from strainkit.tensors.strain import gradient_between, green_lagrange

PSEUDOPOTENTIALS = {"Mg": "Mg.psp", "O": "O.psp", "Fe": "Fe.psp", "C": "C.psp", "Si": "Si.psp"}


def settings(**deck) -> Settings:
    return Settings(deck=deck, pseudopotentials=dict(PSEUDOPOTENTIALS), folder="/pseudo")


_PLANS: dict[int, Plan] = {}


def planned(crystal: Crystal) -> Plan:
    """The one-percent set of a crystal, chosen once."""
    if id(crystal) not in _PLANS:
        _PLANS[id(crystal)] = plan_run(crystal, [0.01])
    return _PLANS[id(crystal)]


def rendered(deck: str, crystal: Crystal, task: str = "ions", **values) -> dict[str, dict[str, str]]:
    """Label -> files of every job of a one-percent set."""
    plan = planned(crystal)
    lattices = [crystal.lattice @ job.gradient.T for job in plan.jobs]
    calculation = plan_calculation(deck, crystal, task, settings(**values), None, lattices)
    return {job.label: calculation.files(crystal.deformed(job.gradient), job.label) for job in plan.jobs}


@pytest.fixture(scope="module")
def crystal() -> Crystal:
    rng = np.random.default_rng(2)
    start = conventional("2/m")
    return rewritten(start, random_rotation(rng), np.eye(3), rng.permutation(len(start.numbers)))


def lattice_in(deck: str, files: dict[str, str]) -> np.ndarray:
    """Lattice that a reader outside strainkit, or a regular expression on the manual's keywords, finds in a deck."""
    if deck in ("qe", "vasp", "abinit", "gpaw"):
        name, format = {
            "qe": ("pw.in", "espresso-in"),
            "vasp": ("POSCAR", "vasp"),
            "abinit": ("abinit.abi", "abinit-in"),
            "gpaw": ("start.extxyz", "extxyz"),
        }[deck]
        with warnings.catch_warnings():
            warnings.simplefilter("ignore")
            return ase_read(io.StringIO(files[name]), format=format).cell.array
    text, word = {
        "cp2k": (files.get("cp2k.inp", ""), r"&CELL\n"),
        "castep": (files.get("castep.cell", ""), r"%BLOCK LATTICE_CART\nang\n"),
        "aims": (files.get("geometry.in", ""), r"# .*\n(?=lattice_vector)"),
    }[deck]
    rows = re.split(word, text)[1].splitlines()[:3]
    return np.array([row.split()[-3:] for row in rows], dtype=float)


@pytest.mark.parametrize("deck", DECK_NAMES)
def test_strain_in_every_deck_is_the_planned_one(deck, crystal):
    plan = planned(crystal)
    files = rendered(deck, crystal)
    start = lattice_in(deck, files["reference"])
    for job in plan.jobs:
        strain = green_lagrange(gradient_between(start, lattice_in(deck, files[job.label])))
        np.testing.assert_allclose(strain, job.strain, rtol=0, atol=1e-10)


@pytest.mark.parametrize("deck", DECK_NAMES)
def test_nothing_but_the_geometry_differs_between_jobs(deck, crystal):
    """Cutoffs, meshes, grids, thresholds: the same text in every job, once labels and long numbers are taken out."""
    jobs = rendered(deck, crystal)

    def skeleton(label: str) -> dict[str, str]:
        return {name: re.sub(r"-?\d+\.\d{9,}(e-\d+)?", "#", text).replace(label, "LABEL") for name, text in jobs[label].items()}

    for label in jobs:
        if deck == "gpaw":
            assert skeleton(label)["gpaw_job.py"] == skeleton("reference")["gpaw_job.py"]
            compile(jobs[label]["gpaw_job.py"], "gpaw_job.py", "exec")
        else:
            assert skeleton(label) == skeleton("reference")


@pytest.mark.parametrize(
    ("deck", "file", "cell", "ions", "single"),
    [
        ("qe", "pw.in", "'vc-relax'", "'relax'", "'scf'"),
        ("vasp", "INCAR", "ISIF = 3", "ISIF = 2", "NSW = 0"),
        ("abinit", "abinit.abi", "optcell 2", "optcell 0", "optstress 1"),
        ("cp2k", "cp2k.inp", "RUN_TYPE CELL_OPT", "RUN_TYPE GEO_OPT", "RUN_TYPE ENERGY_FORCE"),
        ("castep", "castep.cell", "fix_all_cell : false", "fix_all_cell : true", "fix_all_cell : true"),
        ("aims", "control.head", "relax_unit_cell full", "relax_unit_cell none", "compute_forces .true."),
        ("gpaw", "gpaw_job.py", "FrechetCellFilter(atoms)", "moving = atoms", "atoms.get_stress"),
    ],
)
def test_three_tasks_share_their_settings(deck, file, cell, ions, single, crystal):
    texts = {task: rendered(deck, crystal, task)["reference"][file] for task in ("cell", "ions", "single")}
    assert cell in texts["cell"]
    assert cell not in texts["ions"] or cell == ions
    assert ions in texts["ions"]
    assert single in texts["single"]
    assert "optcell" not in texts["single"]


def test_stress_is_asked_for_everywhere(crystal):
    wanted = {
        "qe": "tstress = .true.",
        "vasp": "ISIF = 2",
        "abinit": "optstress 1",
        "cp2k": "STRESS_TENSOR ANALYTICAL",
        "castep": "calculate_stress : true",
        "aims": "compute_analytical_stress .true.",
        "gpaw": "get_stress",
    }
    for deck, words in wanted.items():
        assert words in "".join(rendered(deck, crystal)["reference"].values())


def test_mesh_and_grid_of_silicon():
    """Si, a = 5.4 A: |b| = 2 pi sqrt(3) / 5.4 = 2.0153 1/A, hence 9 divisions at 0.25 and 11 made odd from 10.08 at 0.2."""
    silicon = Crystal(2.7 * np.array([[0, 1, 1], [1, 0, 1], [1, 1, 0]]), [[0, 0, 0], [0.25, 0.25, 0.25]], [14, 14])
    assert plan_calculation("qe", silicon, "ions", settings()).kmesh == (9, 9, 9)
    assert plan_calculation("cp2k", silicon, "ions", settings(), 0.2).kmesh == (11, 11, 11)
    assert plan_calculation("qe", silicon, "ions", settings(kmesh=[2, 3, 4])).kmesh == (2, 3, 4)
    assert plan_calculation("qe", silicon, "ions", settings(kmesh=[2, 3, 4]), 0.25).kmesh == (9, 9, 9)
    text = plan_calculation("qe", silicon, "ions", settings(ecutwfc=20, ecutrho=80)).files(silicon, "x")["pw.in"]
    # sqrt(80 Ry) = 8.944/bohr = 16.90/A; times |a| = 3.818 A over 2 pi: 10.27, so 21 points, made a multiple of 4: 24
    assert "nr1 = 24, nr2 = 24, nr3 = 24" in text


def test_even_castep_meshes_are_moved_onto_gamma(crystal):
    text = rendered("castep", crystal, kmesh=[4, 3, 2])["reference"]["castep.cell"]
    assert re.search(r"kpoint_mp_offset 0\.125 0\.0 0\.25", text)


MAGNETIC = Crystal(
    np.diag([3.0, 3.1, 6.2]),
    [[0, 0, 0], [0.5, 0.5, 0.5], [0.2, 0.2, 0.2]],
    [26, 26, 8],
    magnetic_moments=np.array([3.0, -3.0, 0]),
)


@pytest.mark.parametrize(
    ("deck", "file", "pattern"),
    [
        ("qe", "pw.in", r"nspin = 2\n  starting_magnetization\(1\) = 0\.1875\d*\n  starting_magnetization\(2\) = -0\.1875"),
        ("qe", "pw.in", r"Fe1 [\d.]+ Fe.psp\nFe2 [\d.]+ Fe.psp\nO "),
        ("vasp", "INCAR", r"ISPIN = 2\nMAGMOM = 3\.0000 -3\.0000 0\.0000"),
        ("abinit", "abinit.abi", r"spinat\n0\.0 0\.0 3\.0\d*\n0\.0 0\.0 -3\.0\d*\n0\.0 0\.0 0\.0\d*\n(?s:.*)nsppol 2"),
        ("cp2k", "cp2k.inp", r"&KIND Fe2\n +ELEMENT Fe\n(?s:.*)MAGNETIZATION -3\.0"),
        ("castep", "castep.cell", r"SPIN=3\.0\d*\n"),
        ("aims", "geometry.in", r"initial_moment -3\.0"),
        ("gpaw", "start.extxyz", r"initial_magmoms"),
    ],
)
def test_magnetic_moments_in_decks(deck, file, pattern):
    values = {"valence": {"Fe": 16, "O": 6}} if deck == "qe" else {}
    files = plan_calculation(deck, MAGNETIC, "ions", settings(**values)).files(MAGNETIC, "x")
    assert re.search(pattern, files[file]), files[file]


def test_magnetic_moments_that_a_deck_would_drop(tmp_path):
    path = write(tmp_path, "own.in", "{{ geometry }}\n")
    with pytest.raises(InputError, match="says nothing about magnetic moments"):
        plan_calculation(str(path), MAGNETIC, "ions", settings(program="qe"))
    with pytest.raises(InputError, match=r"line \d+: no field 'Fe'"):
        plan_calculation("qe", MAGNETIC, "ions", settings()).files(MAGNETIC, "x")


@pytest.mark.parametrize("deck", ["vasp", "abinit"])
def test_programs_that_refuse_left_handed_cells(deck, crystal):
    with pytest.raises(InputError, match="left-handed"):
        plan_calculation(deck, crystal.deformed(np.diag([1, 1, -1.0])), "ions", settings())


def test_own_deck_of_one_file(tmp_path, crystal):
    """Same fields as the shipped decks, defaults of its program, settings of its own."""
    path = write(
        tmp_path, "mine.in", "{{ title }} {{ deck.ecutwfc }} {{ deck.hubbard_u }} {{ kmesh | join('x') }}\n{{ geometry }}\n"
    )
    calculation = plan_calculation(str(path), crystal, "ions", settings(program="qe", hubbard_u=4.5, kmesh=[1, 2, 3]))
    files = calculation.files(crystal, "job")
    assert list(files) == ["pw.in"]
    assert files["pw.in"].startswith("job 80.0 4.5 1x2x3\n! job\nCELL_PARAMETERS angstrom\n")


def test_own_file_takes_the_place_of_its_namesake(tmp_path, crystal):
    path = write(tmp_path, "KPOINTS", "mine {{ kmesh[0] }}\n")
    files = plan_calculation(str(path), crystal, "ions", settings(program="vasp", kmesh=[5, 5, 5])).files(crystal, "job")
    assert files["KPOINTS"] == "mine 5\n"
    assert "ENCUT = 600.0" in files["INCAR"]


def test_names_cannot_smuggle_lines_into_scripts(crystal):
    files = plan_calculation("gpaw", crystal, "ions", settings()).files(crystal, 'x\n"""\nimport os #')
    assert files["gpaw_job.py"].splitlines()[0] == '"""x ___ import os _"""'


def test_own_deck_folder(tmp_path, crystal):
    folder = tmp_path / "siesta"
    folder.mkdir()
    write(
        folder, "deck.toml", '[program]\nname = "SIESTA"\ncommand = "siesta"\ngeometry = "siesta"\n[deck]\nmeshcutoff = 300.0\n'
    )
    write(folder, "run.fdf.j2", "MeshCutoff {{ deck.meshcutoff }} Ry\n{{ geometry }}\n")
    files = plan_calculation(str(folder), crystal, "ions", settings(meshcutoff=400)).files(crystal, "job")
    assert list(files) == ["run.fdf"]
    assert files["run.fdf"].startswith("MeshCutoff 400.0 Ry\n# job\nNumberOfAtoms 8")


@pytest.mark.parametrize(
    ("text", "line", "message", "remedy"),
    [
        ("a\n{{ deck.ecutwcf }}\n", 2, "no field 'ecutwcf'", "Did you mean 'deck.ecutwfc'?"),
        ("a\nb\n{{ kmsh }}\n", 3, "no field 'kmsh'", "Did you mean 'kmesh'?"),
        ("{{ kinds[0].pseudo }}\n", 1, "no field 'pseudo'", "pseudopotential"),
        ("a\n\n{% if task %}\n", 3, "Unexpected end of template", ""),
        ("{{ 1 / 0 }}\n", 1, "ZeroDivisionError", ""),
        ("\n{{ kmesh.__class__.__mro__ }}\n", 2, "access to attribute '__class__'", ""),
        ("{% include '/etc/passwd' %}", 1, "TemplateNotFound", ""),
    ],
)
def test_mistakes_in_a_deck_are_named_with_line_and_field(tmp_path, crystal, text, line, message, remedy):
    path = write(tmp_path, "mine.in", text)
    with pytest.raises(InputError) as caught:
        plan_calculation(str(path), crystal, "ions", settings(program="qe")).files(crystal, "x")
    assert caught.value.where == str(path)
    assert f"line {line}: " in caught.value.what
    assert message in caught.value.what
    assert remedy in caught.value.remedy


@pytest.mark.parametrize(
    ("values", "message"),
    [
        ({"ecutwcf": 3}, "unknown key 'ecutwcf' in [deck] for the deck qe"),
        ({"ecutwfc": "high"}, "must be like 80.0"),
        ({"ecutwfc": True}, "must be like 80.0"),
        ({"nstep": 1.5}, "must be like 100"),
        ({"dispersion": "none\nevil"}, "must be like 'none'"),
        ({"kmesh": [1, 2]}, "must be three whole numbers"),
        ({"kmesh": [0, 1, 2]}, "must be three whole numbers"),
    ],
)
def test_mistakes_in_settings(crystal, values, message):
    with pytest.raises(InputError) as caught:
        plan_calculation("qe", crystal, "ions", settings(**values))
    assert message in caught.value.what


def test_decks_that_are_none(tmp_path):
    with pytest.raises(UsageError, match="no such deck: 'nonsense'"):
        load_deck("nonsense", {})
    with pytest.raises(InputError, match="no deck"):
        load_deck(str(tmp_path), {})
    with pytest.raises(InputError, match="a deck of one file needs to know its program"):
        load_deck(str(write(tmp_path, "x.in", "")), {})
    write(tmp_path, "deck.toml", "[program]\nname = 1")
    with pytest.raises(InputError, match="needs the tables"):
        load_deck(str(tmp_path), {})


def test_pseudopotentials_are_checked_against_elements_and_files(tmp_path, crystal):
    def choose(**names):
        return plan_calculation("qe", crystal, "ions", Settings(pseudopotentials=names, folder=str(tmp_path)))

    write(tmp_path, "O.upf", '<UPF version="2.0.1">\n<PP_HEADER\n element="O "\n/>')
    write(tmp_path, "old.upf", "<PP_HEADER>\n   0  Version Number\n  Mg   Element\n")
    write(tmp_path, "Si.psp8", "Si    ONCVPSP\n     14.0000      4.0000      171101    zatom,zion,pspd\n   8  11\n")
    with pytest.raises(InputError, match=r"needs a pseudopotential for Mg"):
        choose(O="O.upf")
    with pytest.raises(InputError, match=r"no such pseudopotential for Mg"):
        choose(O="O.upf", Mg="Mg.upf")
    with pytest.raises(InputError, match=r"a pseudopotential of O, named for Mg"):
        choose(O="O.upf", Mg="O.upf")
    with pytest.raises(InputError, match=r"a pseudopotential of Si, named for Mg"):
        choose(O="O.upf", Mg="Si.psp8")
    assert choose(O="O.upf", Mg="old.upf", H="not-needed.upf").pseudopotentials == {"Mg": "old.upf", "O": "O.upf"}


def test_vasp_species_follow_the_order_of_the_atoms():
    """Repeated blocks in POSCAR need repeated POTCARs, in the same order."""
    cell = Crystal(5 * np.eye(3), [[0, 0, 0], [0.5, 0, 0], [0, 0.5, 0]], [8, 12, 8])
    fields = plan_calculation("vasp", cell, "ions", settings()).fields(cell, "x")
    assert [run["symbol"] for run in fields["species_runs"]] == ["O", "Mg", "O"]


def test_an_organic_crystal_without_dispersion_is_doubted(tmp_path, crystal):
    organic = Crystal(5 * np.eye(3), [[0, 0, 0], [0.2, 0, 0]], [6, 1])
    choice = Settings(pseudopotentials={"C": "C", "H": "H"})
    assert [f.code for f in plan_calculation("qe", organic, "ions", choice).findings()] == ["no-dispersion"]
    corrected = Settings(deck={"dispersion": "grimme-d3"}, pseudopotentials={"C": "C", "H": "H"})
    assert plan_calculation("qe", organic, "ions", corrected).findings() == []
    assert plan_calculation("qe", crystal, "ions", settings()).findings() == []


def test_every_setting_of_a_shipped_deck_is_used(tmp_path):
    """A number that no template looks at would be a lie in the manifest."""
    dry_ice = read_crystal(write(tmp_path, "dry-ice.cif", DRY_ICE))
    for deck in DECK_NAMES:
        loaded = load_deck(deck, {})
        text = "".join(path.read_text() for path in loaded.templates.values())
        unused = [key for key in loaded.values if not re.search(rf"\bdeck\.{key}\b", text)]
        assert unused == [], deck
        plan_calculation(deck, dry_ice, "single", settings()).files(dry_ice, "x")
