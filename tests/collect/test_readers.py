"""Readers on real outputs: those that ASE ships among its own test data, and copies of them that are cut short."""

from __future__ import annotations

import re
import warnings
from pathlib import Path

import ase.test
import numpy as np
import pytest
from ase.build import bulk
from ase.calculators.singlepoint import SinglePointCalculator
from ase.io import read as ase_read
from ase.io import write as ase_write
from support.outputs import unpack

from strainkit.collect.readers import read_returned, recognise
from strainkit.errors import InputError
from strainkit.units import EV_PER_A3_IN_GPA

SHIPPED = Path(ase.test.__file__).parent / "testdata"


def read(path):
    return read_returned(path, recognise(path))


def test_vasp_outcar_against_its_own_text():
    """The stress line is in kbar, compression positive, xx yy zz xy yz zx (VASP manual)."""
    path = SHIPPED / "vasp" / "OUTCAR_example_1"
    xx, yy, zz, xy, yz, zx = map(float, re.findall(r"in kB\s+(.*)", path.read_text())[-1].split())
    returned = read(path)
    assert returned.program == "VASP OUTCAR"
    expected = -0.1 * np.array([[xx, xy, zx], [xy, yy, yz], [zx, yz, zz]])
    np.testing.assert_allclose(returned.stress, expected, rtol=1e-6, atol=1e-6)
    assert returned.energy == pytest.approx(-68.22868532)


def test_vasprun_against_its_own_text():
    path = SHIPPED / "vasp" / "vasprun_pstress.xml"
    block = re.findall(r'<varray name="stress" >(.*?)</varray>', path.read_text(), re.S)[-1]
    expected = -0.1 * np.array([list(map(float, row.split())) for row in re.findall(r"<v>(.*?)</v>", block)])
    np.testing.assert_allclose(read(path).stress, expected, rtol=1e-9, atol=1e-9)


def test_castep_against_its_own_text():
    """CASTEP prints the stress in GPa, positive in tension, beside a pressure of the other sign (CASTEP manual)."""
    path = SHIPPED / "castep" / "md.castep"
    rows = re.findall(r"\*\s+[xyz]\s+(-?\d+\.\d+)\s+(-?\d+\.\d+)\s+(-?\d+\.\d+)\s+\*", path.read_text())[-3:]
    np.testing.assert_allclose(read(path).stress, np.array(rows, dtype=float), rtol=1e-6, atol=1e-6)


def test_aims_against_its_own_text():
    """FHI-aims prints the stress in eV/A^3, positive in tension, with a pressure of the other sign below."""
    path = SHIPPED / "aims" / "relax.out"
    returned = read(path)
    text = path.read_text().rsplit("Analytical stress tensor - Symmetrized", 1)[1]
    rows = re.findall(r"\|\s+[xyz]\s+(-?\d+\.\d+)\s+(-?\d+\.\d+)\s+(-?\d+\.\d+)\s+\|", text)[:3]
    pressure = float(re.search(r"Pressure:\s+(-?\d+\.\d+)", text)[1])
    stress = np.array(rows, dtype=float)
    assert np.trace(stress) / 3 == pytest.approx(-pressure, abs=1e-6)
    np.testing.assert_allclose(returned.stress, stress * EV_PER_A3_IN_GPA, rtol=1e-6, atol=1e-6)


@pytest.mark.parametrize(
    "name", ["vasp/OUTCAR_example_1", "vasp/vasprun_pstress.xml", "castep/md.castep", "aims/relax.out"], ids=lambda n: n
)
@pytest.mark.parametrize("share", [0.3, 0.6, 0.9, 0.97])
def test_a_cut_output_is_never_believed(tmp_path, name, share):
    content = (SHIPPED / name).read_bytes()
    path = tmp_path / Path(name).name
    path.write_bytes(content[: int(share * len(content))])
    try:
        returned = read(path)
    except InputError:
        return
    assert returned.problems


@pytest.mark.parametrize("format", ["extxyz", "traj", "json", "db"])
def test_formats_of_ase(tmp_path, format):
    atoms = bulk("Si")
    stress = np.array([0.01, 0.02, 0.03, 0.004, 0.005, 0.006])
    atoms.calc = SinglePointCalculator(
        atoms, energy=-10.0, free_energy=-10.1, stress=stress, forces=np.array([[0.3, 0, 0], [0, 0.4, 0]])
    )
    path = tmp_path / f"out.{format}"
    ase_write(path, atoms, format=format)
    returned = read(path)
    xx, yy, zz, yz, xz, xy = stress * EV_PER_A3_IN_GPA
    np.testing.assert_allclose(returned.stress, [[xx, xy, xz], [xy, yy, yz], [xz, yz, zz]], rtol=1e-6)
    assert returned.energy == pytest.approx(-10.1)
    assert np.linalg.norm(returned.forces, axis=1).max() == pytest.approx(0.4)
    assert not returned.problems


def test_virial_is_understood(tmp_path):
    path = tmp_path / "out.extxyz"
    path.write_text('1\nLattice="2 0 0 0 2 0 0 0 2" virial="8 0 0 0 16 0 0 0 24" energy=-1 pbc="T T T"\nSi 0 0 0\n')
    np.testing.assert_allclose(read(path).stress, -np.diag([1, 2, 3]) * EV_PER_A3_IN_GPA, rtol=1e-12)


@pytest.mark.parametrize(
    ("text", "status"),
    [
        ('1\nLattice="2 0 0 0 2 0 0 0 2" energy=-1 pbc="T T T"\nSi 0 0 0\n', "unfinished"),
        ('1\nLattice="2 0 0 0 2 0 0 0 2" stress="nan 0 0 0 0 0 0 0 0" pbc="T T T"\nSi 0 0 0\n', "broken"),
        ('1\nLattice="2 0 0 0 2 0 0 0 2" stress="1 0 0 0 0 0 0 0 0" converged=F pbc="T T T"\nSi 0 0 0\n', "unconverged"),
    ],
)
def test_unusable_extended_xyz(tmp_path, text, status):
    path = tmp_path / "out.extxyz"
    path.write_text(text)
    assert read(path).problems[0][0] == status


def test_the_last_configuration_of_an_extended_xyz_counts(tmp_path):
    frame = '1\nLattice="2 0 0 0 2 0 0 0 2" stress="{0} 0 0 0 0 0 0 0 0" converged={1} pbc="T T T"\nSi 0 0 0\n'
    path = tmp_path / "out.extxyz"
    path.write_text(frame.format(1, "F") + frame.format(2, "T"))
    returned = read(path)
    assert not returned.problems
    assert returned.stress[0, 0] == pytest.approx(2 * EV_PER_A3_IN_GPA)
    path.write_text(frame.format(1, "T") + frame.format(2, "F"))
    assert [status for status, _ in read(path).problems] == ["unconverged"]


@pytest.mark.parametrize(
    "text",
    [
        "",
        "hello\n",
        "#  FHI-aims code project\n#  VB, Fritz-Haber Institut, 2009\n",
        "\0\1\2",
        '{"a": 1}',
        "5\nno lattice here\n",
    ],
)
def test_other_files_are_not_outputs(tmp_path, text):
    path = tmp_path / "file"
    path.write_text(text)
    assert recognise(path) is None


@pytest.mark.parametrize(
    ("name", "format"),
    [
        ("vasp/OUTCAR_example_1", "vasp-out"),
        ("vasp/vasprun_dfpt.xml", "vasp-xml"),
        ("vasp/vasprun_pstress.xml", "vasp-xml"),
        ("castep/md.castep", "castep-castep"),
        ("aims/relax.out", "aims-output"),
        ("qe/relaxed.out", "espresso-out"),
        ("qe/two-species.out", "espresso-out"),
        ("qe/metal.out", "espresso-out"),
    ],
)
def test_against_another_implementation(name, format, tmp_path):
    """ASE's readers, which are right on undamaged outputs of these programs (they were compared with the programs' numbers)."""
    path = SHIPPED / name if (SHIPPED / name).is_file() else unpack(name, tmp_path)
    returned = read(path)
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")
        atoms = ase_read(path, format=format, index=-1)
    np.testing.assert_allclose(returned.lattice, atoms.cell.array, atol=1e-6)
    np.testing.assert_allclose(returned.positions, atoms.get_scaled_positions(wrap=False), atol=1e-6)
    assert list(returned.numbers) == list(atoms.numbers)
    results = atoms.calc.results
    xx, yy, zz, yz, xz, xy = results["stress"] * EV_PER_A3_IN_GPA
    np.testing.assert_allclose(returned.stress, [[xx, xy, xz], [xy, yy, yz], [xz, yz, zz]], rtol=1e-5, atol=1e-5)
    free = results.get("free_energy", results["energy"])
    assert returned.energy == pytest.approx(free, rel=2e-7)
    np.testing.assert_allclose(returned.forces, atoms.get_forces(apply_constraint=False), rtol=1e-5, atol=1e-6)
