"""Cell writers: read back by other programs' readers, the strain in the file is the planned one to 1e-10."""

from __future__ import annotations

import gc
import io
import re
import warnings

import numpy as np
import pytest
from ase import Atoms
from ase.io import read as ase_read
from phonopy.interface.calculator import read_crystal_structure
from support.crystals import conventional, random_rotation, random_unimodular, rewritten

from strainkit.crystal.crystal import Crystal
from strainkit.errors import InputError, UsageError
from strainkit.prepare.runfolder import plan_run
from strainkit.prepare.writers import FORMATS, cell_formats, default_formats, format_findings, write_cell
from strainkit.tensors.strain import gradient_between, green_lagrange

#: format -> format of ase.io.read, which reads these files with code that is not ours
BY_ASE = {
    "poscar": "vasp",
    "cif": "cif",
    "extxyz": "extxyz",
    "abinit": "abinit-in",
    "gen": "gen",
    "crystal": "crystal",
    "xsf": "xsf",
    "aims": "aims",
}
#: format -> interface of phonopy
BY_PHONOPY = {"castep": "castep", "pwmat": "pwmat"}


def rows_after(text: str, word: str, count: int, first: int = 0) -> np.ndarray:
    """Numbers in the lines after a word; our own reading of QE, CP2K and SIESTA input, from their manuals."""
    lines = text.split(word, 1)[1].splitlines()[1 : 1 + count]
    return np.array([line.split()[first : first + 3] for line in lines], dtype=float)


def read_back(name: str, text: str, path) -> tuple[np.ndarray, np.ndarray, list[str]]:
    """Lattice, fractional positions and symbols that a reader finds in a file."""
    path.write_text(text)
    if name in BY_ASE:
        with warnings.catch_warnings():
            warnings.simplefilter("ignore", FutureWarning)  # ASE moves its FHI-aims reader
            atoms = ase_read(path, format=BY_ASE[name])
        assert isinstance(atoms, Atoms)
        return atoms.cell.array, atoms.get_scaled_positions(wrap=False), list(atoms.symbols)
    if name in BY_PHONOPY:
        with warnings.catch_warnings():
            warnings.simplefilter("ignore", ResourceWarning)  # phonopy leaves files open
            cell, _ = read_crystal_structure(str(path), interface_mode=BY_PHONOPY[name])
            gc.collect()
        return cell.cell, cell.scaled_positions, list(map(str, cell.symbols))
    if name == "siesta":
        count = int(re.search(r"NumberOfAtoms (\d+)", text)[1])
        assert "LatticeConstant 1.0 Ang" in text
        species = {i: symbol for i, _, symbol in re.findall(r"^(\d+) (\d+) ([A-Z][a-z]?)$", text, re.M)}
        block = "%block AtomicCoordinatesAndAtomicSpecies"
        kinds = [line.split()[3] for line in text.split(block)[1].splitlines()[1 : 1 + count]]
        return rows_after(text, "%block LatticeVectors", 3), rows_after(text, block, count), [species[k] for k in kinds]
    if name == "qe":
        count = len(text.split("ATOMIC_POSITIONS", 1)[1].strip().splitlines()) - 1
        symbols = [line.split()[0] for line in text.split("ATOMIC_POSITIONS", 1)[1].splitlines()[1 : 1 + count]]
        return rows_after(text, "CELL_PARAMETERS", 3), rows_after(text, "ATOMIC_POSITIONS", count, 1), symbols
    lines = text.split("SCALED", 1)[1].split("&END", 1)[0].strip().splitlines()
    positions = np.array([line.split()[1:] for line in lines], dtype=float)
    return rows_after(text, "&CELL", 3, 1), positions, [line.split()[0] for line in lines]


@pytest.fixture(scope="module")
def strained() -> list[Crystal]:
    """Strained cells of a triclinic and a rotated, re-based monoclinic crystal with its atoms in mixed order."""
    rng = np.random.default_rng(4)
    cells = []
    for laue in ("-1", "2/m"):
        crystal = conventional(laue)
        order = rng.permutation(len(crystal.numbers))
        basis = random_unimodular(rng)
        crystal = rewritten(crystal, random_rotation(rng), basis, order)
        plan = plan_run(crystal, [0.003])
        cells += [(crystal, crystal.deformed(job.gradient), job.strain) for job in plan.jobs[1:5]]
    return cells


@pytest.mark.parametrize("name", FORMATS)
def test_strain_in_the_file_is_the_planned_one(name, strained, tmp_path):
    for reference, cell, strain in strained:
        start, _, _ = read_back(name, write_cell(name, reference, "reference"), tmp_path / "file")
        lattice, positions, symbols = read_back(name, write_cell(name, cell, "a title"), tmp_path / "file")
        assert symbols == cell.symbols
        away = positions - cell.positions
        np.testing.assert_allclose(away - np.round(away), 0.0, rtol=0, atol=1e-10)
        if not FORMATS[name].keeps_orientation:
            # only the metric is in the file: compare it, as turned by the reader
            np.testing.assert_allclose(lattice @ lattice.T, cell.lattice @ cell.lattice.T, rtol=1e-12, atol=1e-10)
            continue
        np.testing.assert_allclose(green_lagrange(gradient_between(start, lattice)), strain, rtol=0, atol=1e-10)
        np.testing.assert_allclose(lattice, cell.lattice, rtol=0, atol=1e-12)


@pytest.mark.parametrize("name", FORMATS)
def test_magnetic_moments_are_kept_or_refused(name, tmp_path):
    crystal = Crystal(3.0 * np.eye(3), [[0, 0, 0], [0.5, 0.5, 0.5]], [26, 26], magnetic_moments=np.array([2.5, -2.5]))
    if not FORMATS[name].keeps_moments:
        with pytest.raises(InputError, match="cannot hold the magnetic moments"):
            write_cell(name, crystal, "iron")
        return
    text = write_cell(name, crystal, "iron")
    if name == "extxyz":
        path = tmp_path / "file"
        path.write_text(text)
        np.testing.assert_allclose(ase_read(path, format="extxyz").get_initial_magnetic_moments(), [2.5, -2.5])
    pattern = {
        "abinit": r"spinat\n0\.0 0\.0 2\.5\d*\n0\.0 0\.0 -2\.5",
        "castep": r"SPIN=2\.5\d*\nFe.* SPIN=-2\.5",
        "siesta": r"%block DM.InitSpin\n1 2\.5\d*\n2 -2\.5",
        "aims": r"initial_moment 2\.5\d*\natom_frac.*\ninitial_moment -2\.5",
        "extxyz": r"initial_magmoms",
    }[name]
    assert re.search(pattern, text)


def test_formats_of_a_magnetic_crystal_when_none_is_named():
    crystal = Crystal(3.0 * np.eye(3), [[0, 0, 0]], [26], magnetic_moments=np.array([2.5]))
    assert default_formats(crystal) == ("extxyz",)
    assert default_formats(conventional("mmm")) == ("poscar", "cif")


def test_left_handed_cells():
    """ABINIT stops at a negative triple product; POSCAR and the others keep the cell as it is."""
    crystal = conventional("mmm").deformed(np.diag([1.0, 1.0, -1.0]))
    with pytest.raises(InputError, match="left-handed"):
        write_cell("abinit", crystal, "x")
    atoms = ase_read(io.StringIO(write_cell("poscar", crystal, "x")), format="vasp")
    np.testing.assert_allclose(atoms.cell.array, crystal.lattice, rtol=0, atol=1e-12)


def test_orientation_that_a_format_cannot_hold_is_said():
    (found,) = format_findings(["poscar", "cif"])
    assert found.code == "orientation-not-in-format"
    assert found.message.startswith("CIF holds cell lengths and angles only")
    assert format_findings([name for name in FORMATS if name != "cif"]) == []


def test_unknown_format():
    with pytest.raises(UsageError, match="unknown cell format 'nonsense'"):
        cell_formats(["poscar", "nonsense"])


def test_titles_stay_on_their_line():
    text = write_cell("poscar", conventional("mmm"), "two\nlines")
    assert text.splitlines()[:2] == ["two lines", "1.0"]
