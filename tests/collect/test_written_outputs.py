"""Outputs written by hand as the manuals and memory have them: SIESTA, CASTEP's geometry files, marks of programs not at hand.

Nothing here proves that a program prints this; it holds the readers to what we believe it prints. VASP, CASTEP and FHI-aims
cases are real outputs (ASE's test data) with the lines of the other ending put in.
"""

from __future__ import annotations

from pathlib import Path

import ase.test
import numpy as np
import pytest

from strainkit.collect.readers import read_returned, recognise
from strainkit.errors import InputError
from strainkit.units import EV_PER_A3_IN_GPA

SHIPPED = Path(ase.test.__file__).parent / "testdata"

#: SIESTA 4.1, from its manual and from memory; invented numbers
SIESTA = """Siesta Version  : v4.1.5
Architecture    : unknown
Species number:   1 Atomic number:   14 Label: Si
Species number:   2 Atomic number:    6 Label: C
initatomlists: Number of atoms, orbitals, and projectors:      2    26    32
siesta: k-grid: Number of k-points =    32
outcoor: Atomic coordinates (Ang):
    0.00000000    0.00000000    0.00000000   1       1  Si
    1.09000000    1.09000000    1.09000000   2       2  C
outcell: Unit cell vectors (Ang):
        0.000000    2.180000    2.190000
        2.170000    0.020000    2.180000
        2.200000    2.170000    0.000000
        iscf     Eharris(eV)        E_KS(eV)     FreeEng(eV)     dDmax    Ef(eV) dHmax(eV)
   scf:    1     -260.000000     -260.100000     -260.100000  1.000000 -1.000000  1.000000
   scf:    2     -260.400000     -260.400000     -260.400000  0.000010 -1.000000  0.000100
SCF cycle converged after 2 iterations
{0}
siesta: Program's energy decomposition (eV):
siesta: Etot    =      -260.400000
siesta: FreeEng =      -260.412345
siesta: Final energy (eV):
siesta:         Total =    -260.400000
siesta: Atomic forces (eV/Ang):
siesta:      1    0.001000   -0.002000    0.003000
siesta:      2   -0.001000    0.002000   -0.003000
siesta: ----------------------------------------
siesta:    Tot    0.000000    0.000000    0.000000

siesta: Stress tensor (static) (eV/Ang**3):
siesta:    -0.012000    0.003000   -0.001000
siesta:     0.003000   -0.015000    0.002000
siesta:    -0.001000    0.002000   -0.018000

siesta: Cell volume =         20.750000 Ang**3

siesta: Pressure (static):
siesta:                Solid            Molecule  Units
siesta:           0.00016339          0.00016339  Ry/Bohr**3
siesta:           0.01500000          0.01500000  eV/Ang**3
siesta:          24.03264900         24.03264900  kBar
>> End of run:   1-DEC-2026  12:00:00
Job completed
"""


#: the geometry that ends a relaxation
MOVED = """     Begin CG opt. move =      1
outcoor: {0} atomic coordinates (Ang):
    0.00000000    0.00000000    0.00000000   1       1  Si
    1.09000000    1.09000000    1.08000000   2       2  C"""


def problems(text: str, folder: Path) -> list[tuple[str, str]]:
    path = folder / "file"
    path.write_text(text)
    return list(read_returned(path, recognise(path)).problems)


def test_siesta(tmp_path):
    path = tmp_path / "file"
    path.write_text(SIESTA.format(""))
    returned = read_returned(path, recognise(path))
    assert (returned.program, returned.version, returned.problems) == ("SIESTA", "v4.1.5", ())
    expected = [[-0.012, 0.003, -0.001], [0.003, -0.015, 0.002], [-0.001, 0.002, -0.018]]
    np.testing.assert_allclose(returned.stress, np.array(expected) * 160.2176634, rtol=1e-7)
    np.testing.assert_allclose(returned.lattice, [[0, 2.18, 2.19], [2.17, 0.02, 2.18], [2.2, 2.17, 0]])
    np.testing.assert_allclose(returned.positions @ returned.lattice, [[0, 0, 0], [1.09, 1.09, 1.09]], atol=1e-12)
    assert list(returned.numbers) == [14, 6]
    assert returned.energy == -260.412345
    np.testing.assert_allclose(returned.forces, [[0.001, -0.002, 0.003], [-0.001, 0.002, -0.003]])
    assert returned.settings["kpoint_count"] == "32"


@pytest.mark.parametrize(
    ("old", "new", "status"),
    [
        ("Job completed\n", "", None),
        (">> End of run:   1-DEC-2026  12:00:00\nJob completed\n", "", "unfinished"),
        ("SCF cycle converged after 2 iterations", "SCF_NOT_CONV: SCF did not converge", "unconverged"),
        ("SCF cycle converged after 2 iterations", "", "unconverged"),
        ("{0}", MOVED.format("Final (unrelaxed)"), "unconverged"),
        ("{0}", MOVED.format("Relaxed"), None),
        ("{0}", "     Begin CG opt. move =      1", "unconverged"),
        ("siesta: Stress tensor (static)", "siesta: Nothing", "unfinished"),
        ("-0.012000 ", "0.012000 ", "refused"),
        ("siesta:    -0.001000    0.002000   -0.018000\n", "", "refused"),
        ("   2       2  C", "   3       2  C", "refused"),
    ],
)
def test_marks_of_siesta(old, new, status, tmp_path):
    """The last but two: a stress whose trace is not minus three times the pressure has the wrong sign or unit."""
    assert old in SIESTA
    text = SIESTA.replace(old, new).replace("{0}", "")
    if status == "refused":
        with pytest.raises(InputError):
            problems(text, tmp_path)
    else:
        assert [found for found, _ in problems(text, tmp_path)][:1] == ([status] if status else [])


@pytest.mark.parametrize(
    ("name", "edits", "status"),
    [
        ("vasp/OUTCAR_example_1", [("because EDIFF is reached", "EDIFF was not reached (unconverged)")], "unconverged"),
        (
            "vasp/OUTCAR_example_1",
            [("NSW    =      0", "NSW    =     50"), ("IBRION =     -1", "IBRION =      2")],
            "unconverged",
        ),
        (
            "vasp/OUTCAR_example_1",
            [("NSW    =      0", "NSW    =     50"), ("IBRION =     -1", "IBRION =      0")],
            "unconverged",
        ),
        (
            "vasp/OUTCAR_example_1",
            [
                ("NSW    =      0", "NSW    =     50"),
                ("IBRION =     -1", "IBRION =      2"),
                (" General timing", " reached required accuracy - stopping structural energy minimisation\n General timing"),
            ],
            None,
        ),
        ("vasp/OUTCAR_example_1", [(" General timing", " -- Iteration      2(   1)  --\n General timing")], "unfinished"),
        ("vasp/OUTCAR_example_1", [("in kB      -4.29429", "in kB       4.29429")], "broken"),
        (
            "vasp/vasprun_pstress.xml",
            [('name="NELM">    60', 'name="NELM">     9'), ("-20.24695945", "-20.25695945")],
            "unconverged",
        ),
        ("vasp/vasprun_pstress.xml", [('name="NELM">    60', 'name="NELM">     9')], None),
        (
            "vasp/vasprun_pstress.xml",
            [('name="NSW">     0', 'name="NSW">    50'), ('name="IBRION">    -1', 'name="IBRION">     0')],
            "unconverged",
        ),
        (
            "vasp/vasprun_pstress.xml",
            [('name="NSW">     0', 'name="NSW">    50'), ('name="IBRION">    -1', 'name="IBRION">     2')],
            "unconverged",
        ),
        (
            "vasp/vasprun_pstress.xml",
            [
                ('name="NSW">     0', 'name="NSW">    50'),
                ('name="IBRION">    -1', 'name="IBRION">     2'),
                ('name="EDIFFG">      0.00100000', 'name="EDIFFG">     -0.00100000'),
            ],
            None,
        ),
        ("vasp/vasprun_pstress.xml", [("</calculation>", "</calculation><calculation><scstep></scstep>")], "unfinished"),
        ("castep/md.castep", [("Starting MD iteration", "Starting nothing")], None),
        ("castep/md.castep", [("Pressure:   -0.3882", "Pressure:    0.3882")], "refused"),
        ("aims/relax.out", [("  Present geometry is converged.", "")], "unconverged"),
        ("aims/relax.out", [("Have a nice day.", "")], "unfinished"),
        ("aims/relax.out", [("  Self-consistency cycle converged.", "  Self-consistency cycle not converged.")], "unconverged"),
    ],
)
def test_marks_put_into_real_outputs(name, edits, status, tmp_path):
    text = (SHIPPED / name).read_text()
    for old, new in edits:
        assert old in text, old
        text = text.replace(old, new)
    if status == "refused":
        with pytest.raises(InputError):
            problems(text, tmp_path)
    else:
        assert [found for found, _ in problems(text, tmp_path)][:1] == ([status] if status else [])


def test_vasprun_with_an_external_pressure_gives_the_energy(tmp_path):
    """PSTRESS 1 kbar: the energy of the step is an enthalpy, that of its last electronic cycle (typed from the file) is not."""
    path = SHIPPED / "vasp" / "vasprun_pstress.xml"
    assert read_returned(path, recognise(path)).energy == pytest.approx(-20.24695937, abs=2e-8)


def test_vasprun_relaxed_by_its_energy(tmp_path):
    """EDIFFG 1 meV: a second or third ionic step of nearly the energy of one of the two before it ends a relaxation."""
    text = (SHIPPED / "vasp" / "vasprun_pstress.xml").read_text()
    text = text.replace('name="NSW">     0', 'name="NSW">    50').replace('name="IBRION">    -1', 'name="IBRION">     2')
    start, end = text.index(" <calculation>"), text.index("</calculation>") + len("</calculation>\n")
    step, path = text[start:end], tmp_path / "file"

    def steps(*energies: str) -> str:
        return text[:start] + "".join(step.replace("-20.23985977", energy) for energy in energies) + text[end:]

    for energies, relaxed in (
        (("-20.2398", "-20.2399"), True),
        (("-20.2398", "-20.2500"), False),
        (("-20.2398", "-20.2300", "-20.2399"), True),
        (("-20.2398", "-20.2300", "-20.2200"), False),
    ):
        path.write_text(steps(*energies))
        assert bool(read_returned(path, recognise(path)).problems) != relaxed, energies


def test_castep_energy_with_dispersion(tmp_path):
    """The corrected free energy is printed below the plain one (words from memory)."""
    text = (SHIPPED / "castep" / "md.castep").read_text()
    old = "Final free energy (E-TS)    =  -1351.294716003     eV\n"
    assert old in text
    path = tmp_path / "file"
    path.write_text(text.replace(old, old + " Dispersion corrected final free energy* (Ecor-TS) =  -1352.500000000     eV\n"))
    assert read_returned(path, recognise(path)).energy == -1352.5


def test_vasprun_takes_the_last_complete_ionic_step(tmp_path):
    """A second step with other numbers; then the same, cut in its middle."""
    text = (SHIPPED / "vasp" / "vasprun_pstress.xml").read_text()
    start, end = text.index(" <calculation>"), text.index("</calculation>") + len("</calculation>\n")
    second = text[start:end].replace("-165.99562580", "-100.00000000")
    path = tmp_path / "file"
    path.write_text(text[:end] + second + text[end:])
    returned = read_returned(path, recognise(path))
    assert not returned.problems
    np.testing.assert_allclose(returned.stress, np.eye(3) * 10.0, atol=1e-9)
    path.write_text(text[:end] + second[: len(second) // 2])
    assert [status for status, _ in read_returned(path, recognise(path)).problems] == ["unfinished", "unfinished"]


def test_castep_geom(tmp_path):
    """One step in atomic units with the line marks of the CASTEP manual; 1 Ha/bohr^3 = 29421.02648 GPa (CODATA 2018)."""
    text = """ BEGIN header

 END header

                                      0                                                     T
             -1.0E+001  -1.0E+001                                                      <-- E
              5.0   0.0   0.1                                                          <-- h
              0.0   6.0   0.0                                                          <-- h
              0.0   0.0   7.0                                                          <-- h
              1.0E-004   2.0E-005   0.0E+000                                           <-- S
              2.0E-005   3.0E-004   0.0E+000                                           <-- S
              0.0E+000   0.0E+000   5.0E-004                                           <-- S
 Si              1    0.0   0.0   0.0                                                  <-- R
 Si              2    1.0   1.5   1.75                                                 <-- R
 Si              1    1.0E-003   0.0   0.0                                             <-- F
 Si              2   -1.0E-003   0.0   0.0                                             <-- F

"""
    path = tmp_path / "si.geom"
    path.write_text(text)
    returned = read_returned(path, recognise(path))
    assert returned.program == "CASTEP geom"
    expected = np.array([[1e-4, 2e-5, 0], [2e-5, 3e-4, 0], [0, 0, 5e-4]]) * 29421.02648
    np.testing.assert_allclose(returned.stress, expected, rtol=1e-6)
    np.testing.assert_allclose(returned.lattice, np.array([[5, 0, 0.1], [0, 6, 0], [0, 0, 7]]) * 0.529177211, rtol=1e-7)
    assert not returned.problems


def test_older_cp2k_heading(tmp_path):
    """CP2K before 8.1 printed STRESS TENSOR [GPa] with rows X, Y, Z (from memory); the sign is the same."""
    from support.outputs import content

    text = content("cp2k/single.out").decode()
    start = text.index(" STRESS| Analytical")
    end = text.index("\n\n", text.index("STRESS| Determinant"))
    older = """ STRESS TENSOR [GPa]

            X               Y               Z
  X       1.00000000      0.20000000      0.30000000
  Y       0.20000000      4.00000000      0.50000000
  Z       0.30000000      0.50000000      6.00000000
"""
    path = tmp_path / "file"
    path.write_text(text[:start] + older + text[end:])
    returned = read_returned(path, recognise(path))
    assert not returned.problems
    np.testing.assert_allclose(returned.stress, -np.array([[1, 0.2, 0.3], [0.2, 4, 0.5], [0.3, 0.5, 6]]))


def test_newer_cp2k_words(tmp_path):
    """Later versions give the stress in bar unless told otherwise, forces and energy under other words (from memory)."""
    from support.outputs import content

    text = content("cp2k/single.out").decode()
    path = tmp_path / "file"
    path.write_text(text)
    plain = read_returned(path, recognise(path))
    rows = [line for line in text.splitlines() if line.startswith((" STRESS|      x", " STRESS|      y", " STRESS|      z"))][
        :3
    ]
    for row in [*rows, *(line for line in text.splitlines() if "1/3 Trace" in line)]:
        words = row.split()
        first = next(i for i, word in enumerate(words) if "E+" in word or "E-" in word)
        inbar = words[:first] + [f"{1e4 * float(word):.11E}" for word in words[first:]]
        text = text.replace(row, " " + " ".join(inbar))
    text = text.replace("Analytical stress tensor [GPa]", "Analytical stress tensor [bar]").replace(
        "energy [a.u.]:", "energy [hartree]"
    )
    forces = text[text.index(" ATOMIC FORCES in") : text.index(" SUM OF ATOMIC FORCES")]
    newer = " FORCES| Atomic forces [hartree/bohr]\n FORCES| Atom x y z |f|\n"
    for number, (x, y, z) in enumerate((line.split()[3:] for line in forces.splitlines()[3:5]), 1):
        newer += f" FORCES| {number} {x} {y} {z} 1.0E-02\n"
    path.write_text(text.replace(forces, newer))
    returned = read_returned(path, recognise(path))
    assert not returned.problems
    np.testing.assert_allclose(returned.stress, plain.stress, rtol=1e-9)
    np.testing.assert_allclose(returned.forces, plain.forces)
    assert returned.energy == plain.energy
    path.write_text(text.replace("Analytical stress tensor [bar]", "Analytical stress tensor [furlong]"))
    with pytest.raises(InputError, match="furlong"):
        read_returned(path, recognise(path))


def test_electronvolt_unit():
    """CODATA: the elementary charge, exact since 2019, makes the unit of the readers that print eV/A^3."""
    assert pytest.approx(160.2176634, rel=1e-7) == EV_PER_A3_IN_GPA
