"""Relaxed cells out of program outputs, recognised by content; real outputs are those that ASE ships among its test data."""

from __future__ import annotations

from pathlib import Path

import ase.test
import numpy as np
import pytest
from support.files import write

from strainkit.crystal.outputs import abinit_cell, cp2k_cell, recognise_output
from strainkit.crystal.read import read_crystal
from strainkit.errors import InputError

SHIPPED = Path(ase.test.__file__).parent / "testdata"

#: the parts of an ABINIT 9.6.2 output that hold the cell, cut from a run of ours (silicon, one displaced step)
ABINIT = """
.Version 9.6.2 of ABINIT
            natom           2
           ntypat           1
            typat      1  1
             xred      0.0000000000E+00  0.0000000000E+00  0.0000000000E+00
                       2.5000000000E-01  2.5000000000E-01  2.5000000000E-01
            znucl       14.00000
 R(1)=  0.0000000  5.1023260  5.1023260  G(1)= -0.0979945  0.0979945  0.0979945
 Real space primitive translations (rprimd) [bohr]
  0.00000000000000E+00  5.10000000000000E+00  5.10000000000000E+00
  5.10000000000000E+00  0.00000000000000E+00  5.10000000000000E+00
  5.10000000000000E+00  5.10000000000000E+00  0.00000000000000E+00
 Cartesian coordinates (xcart) [bohr]
 Reduced coordinates (xred)
  0.00000000000000E+00  0.00000000000000E+00  0.00000000000000E+00
  2.50000000000000E-01  2.50000000000000E-01  2.50000000000000E-01
 Real space primitive translations (rprimd) [bohr]
  0.00000000000000E+00  5.10874519431649E+00  5.10874519431649E+00
  5.10874519431649E+00  0.00000000000000E+00  5.10874519431649E+00
  5.10874519431649E+00  5.10874519431649E+00  0.00000000000000E+00
 Reduced coordinates (xred)
 -1.00000000000000E-03  0.00000000000000E+00  0.00000000000000E+00
  2.51000000000000E-01  2.50000000000000E-01  2.50000000000000E-01
 Calculation completed.
"""


def test_abinit_takes_the_last_step_in_bohr(tmp_path):
    """1 bohr = 0.529177210903 A (CODATA 2018)."""
    crystal = read_crystal(write(tmp_path, "run.abo", ABINIT))
    np.testing.assert_allclose(crystal.lattice[0], 5.10874519431649 * 0.529177210903 * np.array([0, 1, 1]), rtol=1e-8)
    np.testing.assert_allclose(crystal.positions, [[-0.001, 0, 0], [0.251, 0.25, 0.25]], atol=1e-15)
    assert list(crystal.numbers) == [14, 14]
    assert crystal.remarks == ()


@pytest.mark.parametrize(
    "change",
    [
        lambda text: text.replace(" Calculation completed.", ""),
        lambda text: text + "scprqt:  WARNING - nstep=  5 was not enough SCF cycles to converge;",
        lambda text: text + " not enough Broyd/MD steps to converge",
    ],
)
def test_a_relaxation_that_did_not_end_well_is_said(tmp_path, change):
    crystal = read_crystal(write(tmp_path, "run.abo", change(ABINIT)))
    assert [f.code for f in crystal.remarks] == ["relaxation-unfinished"]


def test_an_abinit_output_without_a_cell(tmp_path):
    with pytest.raises(ValueError, match="no positions"):
        abinit_cell("nothing")
    with pytest.raises(InputError, match="not readable as abinit-out"):
        read_crystal(write(tmp_path, "run.abo", ABINIT.replace("xred", "xxxx")))


#: a restart file of CP2K 2023.1 from a variable-cell run of ours (nitrogen, two steps), shortened
CP2K = """ # Version information for this restart file
 &GLOBAL
   RUN_TYPE  CELL_OPT
 &END GLOBAL
 &MOTION
   &CELL_OPT
     STEP_START_VAL  2
   &END CELL_OPT
 &END MOTION
 &FORCE_EVAL
   &SUBSYS
     &CELL
       A     4.0092769933227919E+00    0.0000000000000000E+00    0.0000000000000000E+00
       B     9.9993075642531432E-02    4.2061915444662148E+00    0.0000000000000000E+00
       C     3.7039543359458995E-04    1.9918034719163030E-01    4.3840281690043170E+00
       PERIODIC  XYZ
       &CELL_REF
         A     4.0000000000000000E+00    0.0000000000000000E+00    0.0000000000000000E+00
       &END CELL_REF
     &END CELL
     &COORD
N1    4.0327843781663681E-04    3.9499635265129374E-04   -9.1407994432452996E-03
N2    1.7919368398126915E-02    1.4995042448582690E-02    2.6955338164290099E-01
       SCALED  T
     &END COORD
     &KIND N1
       BASIS_SET SZV-MOLOPT-SR-GTH
       ELEMENT N
     &END KIND
     &KIND N2
       BASIS_SET SZV-MOLOPT-SR-GTH
       ELEMENT N
     &END KIND
   &END SUBSYS
 &END FORCE_EVAL
"""


def test_cp2k_restart_file(tmp_path):
    crystal = read_crystal(write(tmp_path, "strainkit-1.restart", CP2K))
    np.testing.assert_allclose(crystal.lattice[1], [9.9993075642531432e-02, 4.2061915444662148, 0], rtol=1e-15)
    np.testing.assert_allclose(crystal.positions[1, 2], 0.26955338164290099, rtol=1e-15)
    assert crystal.symbols == ["N", "N"]
    cartesian = CP2K.replace("       SCALED  T\n", "")
    lattice, positions, _ = cp2k_cell(cartesian)
    np.testing.assert_allclose(positions @ lattice, crystal.positions, rtol=1e-12)
    with pytest.raises(InputError, match="no CELL and COORD"):
        read_crystal(write(tmp_path, "x.restart", CP2K.replace("&COORD", "&XXXXX")))


@pytest.mark.parametrize(
    ("file", "program"),
    [
        ("vasp/OUTCAR_example_1", "VASP"),
        ("vasp/vasprun_pstress.xml", "VASP"),
        ("castep/md.castep", "CASTEP"),
        ("aims/numerical_stress.out", "FHI-aims"),
    ],
)
def test_real_outputs_are_recognised(file, program):
    path = SHIPPED / file
    assert recognise_output(path.read_text(errors="replace")).program == program
    crystal = read_crystal(path)
    assert len(crystal.numbers) > 0
    assert crystal.volume > 1


@pytest.mark.parametrize("text", ["", "hello", "&CONTROL\n/\n", "&GLOBAL\n&END\n"])
def test_other_texts_are_no_outputs(text):
    assert recognise_output(text) is None


def test_names_come_from_the_folder_where_the_file_is_always_called_the_same(tmp_path):
    folder = tmp_path / "quartz-cell"
    folder.mkdir()
    assert read_crystal(write(folder, "abinit-12.abo", ABINIT)).name == "quartz-cell"
    assert read_crystal(write(folder, "mine.abo", ABINIT)).name == "mine"
