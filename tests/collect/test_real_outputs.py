"""Every reader on real outputs kept under tests/data/outputs: numbers against slow ways to read them, marks, settings."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest
from support.outputs import OUTPUTS, content, slow_abinit, slow_cp2k, slow_gpaw, slow_qe, unpack

from strainkit.collect.readers import READERS, read_returned, recognise
from strainkit.collect.readjob import read_outputs
from strainkit.collect.scan import scan
from strainkit.errors import InputError

#: kept output -> statuses of its problems in order; what each job was is in the README beside the files
EXPECTED = {
    "qe/relaxed.out": [],
    "qe/single.out": [],
    "qe/metal.out": [],
    "qe/dispersion.out": [],
    "qe/grimme-d2.out": [],
    "qe/ts-vdw.out": [],
    "qe/xdm.out": [],
    "qe/two-species.out": [],
    "qe/cell-relaxed.out": [],
    "qe/few-steps.out": ["unconverged", "unfinished"],
    "qe/forgiven.out": ["unconverged"],
    "qe/unconverged.out": ["unconverged", "unfinished"],
    "abinit/relaxed.abo": [],
    "abinit/single.abo": [],
    "abinit/metal.abo": [],
    "abinit/two-species.abo": [],
    "abinit/cell-relaxed.abo": [],
    "abinit/few-steps.abo": ["unconverged"],
    "abinit/unconverged.abo": ["unconverged"],
    "cp2k/relaxed.out": [],
    "cp2k/single.out": [],
    "cp2k/two-species.out": [],
    "cp2k/cell-relaxed.out": [],
    "cp2k/few-steps.out": ["unconverged"],
    "cp2k/unconverged.out": ["unconverged"],
    "gpaw/single.txt": [],
    "gpaw/relaxed.txt": [],
    "gpaw/earlier.txt": ["unfinished"],
    "gpaw/unconverged.txt": ["unconverged", "unfinished"],
    "gpaw/single.gpw": [],
    "gpaw26/single.txt": [],
    "gpaw26/relaxed.txt": [],
    "gpaw26/earlier.txt": ["unfinished"],
    "gpaw26/unconverged.txt": ["unconverged", "unfinished"],
    "gpaw26/single.gpw": [],
}
SLOW = {"qe": slow_qe, "abinit": slow_abinit, "cp2k": slow_cp2k, "gpaw": slow_gpaw, "gpaw26": slow_gpaw}
PROGRAMS = {"qe": "Quantum ESPRESSO", "abinit": "ABINIT", "cp2k": "CP2K", "gpaw": "GPAW text", "gpaw26": "GPAW text, new"}
#: half of the last digit that the slow way reads: GPa, eV, eV/A, fractions, A
DIGITS = {
    "qe": {"stress": 6e-4, "energy": 1e-7, "forces": 3e-7},
    "abinit": {"stress": 3e-6, "energy": 1e-6, "forces": 1e-7, "positions": 1e-12, "lattice": 3e-7},
    "cp2k": {"stress": 1e-9, "energy": 1e-7, "forces": 1e-6},
    "gpaw": {"stress": 1e-6, "energy": 1e-9, "forces": 1e-9, "lattice": 1e-9},
    "gpaw26": {"stress": 1e-6, "energy": 1e-9, "forces": 1e-9, "lattice": 1e-9},
}


def read(name, folder):
    path = unpack(name, folder)
    return read_returned(path, recognise(path))


def test_every_kept_output_is_tested():
    kept = {str(path.relative_to(OUTPUTS))[:-3] for path in OUTPUTS.glob("*/*.xz") if ".restart" not in path.name}
    assert kept == set(EXPECTED)


@pytest.mark.parametrize("name", EXPECTED)
def test_marks(name, tmp_path):
    returned = read(name, tmp_path)
    assert returned.program == ("GPAW gpw" if name.endswith("gpw") else PROGRAMS[name.split("/")[0]])
    assert [status for status, _ in returned.problems] == EXPECTED[name]


#: Quantum ESPRESSO and GPAW stop before the stress when the electronic steps do not converge
WITHOUT_STRESS = ("qe/unconverged.out", "gpaw/unconverged.txt", "gpaw26/unconverged.txt")


@pytest.mark.parametrize("name", [n for n in EXPECTED if "gpw" not in n and n not in WITHOUT_STRESS])
def test_numbers_against_a_slow_way(name, tmp_path):
    program = name.split("/")[0]
    returned = read(name, tmp_path)
    for what, value in SLOW[program](name).items():
        np.testing.assert_allclose(getattr(returned, what), value, rtol=1e-6, atol=DIGITS[program][what], err_msg=what)


#: the lattices of the inputs (kept in inputs.txt.xz); cells are printed to six, ten, three and six decimals
SHEARED = [[0.0, 2.7511875, 2.7511875], [2.7375, 0.0136875, 2.7375], [2.7375, 2.7375, 0.0136875]]
CP2K_CELL = [[0.0, 2.74767, 2.74767], [2.734, 0.01367, 2.734], [2.734, 2.734, 0.01367]]
TYPED = {
    "qe/relaxed.out": SHEARED,
    "qe/few-steps.out": SHEARED,
    "qe/metal.out": [[4.0, 0.02, 0.0], [0.0, 4.05, 0.01], [0.03, 0.0, 4.06]],
    "qe/two-species.out": [[0.0, 2.18, 2.19], [2.17, 0.02, 2.18], [2.20, 2.17, 0.0]],
    "abinit/single.abo": [[0.0, 2.73129, 2.73129], [2.715, 0.013575, 2.715], [2.7, 2.7, 0.0135]],
    "cp2k/relaxed.out": CP2K_CELL,
    "cp2k/single.out": CP2K_CELL,
    "gpaw/single.gpw": [[0, 2.7512, 2.7512], [2.7375, 0.0137, 2.7375], [2.7375, 2.7375, 0.0137]],
}


@pytest.mark.parametrize("name", TYPED)
def test_lattice_is_the_one_of_the_input_to_the_stated_precision(name, tmp_path):
    returned = read(name, tmp_path)
    assert np.abs(returned.lattice - TYPED[name]).max() <= 1.01 * returned.lattice_precision


@pytest.mark.parametrize(
    ("name", "numbers"),
    [("qe/two-species.out", [6, 14]), ("abinit/two-species.abo", [6, 14]), ("cp2k/two-species.out", [14, 6])],
)
def test_species_keep_their_order(name, numbers, tmp_path):
    returned = read(name, tmp_path)
    assert list(returned.numbers) == numbers
    # zincblende: a quarter of the diagonal apart, but for the displacement and strain of the input
    assert np.abs(np.ptp(returned.positions, axis=0) - 0.25).max() < 0.03


def test_relaxed_atoms_are_those_of_the_end(tmp_path):
    """Both programs move the second atom back to a quarter of the diagonal from its displaced start (0.23 apart)."""
    for name in ("qe/relaxed.out", "abinit/relaxed.abo"):
        positions = read(name, tmp_path).positions
        np.testing.assert_allclose(positions[1] - positions[0], [0.25108, 0.24892, 0.24892], atol=4e-4)


def test_cp2k_takes_digits_from_the_files_beside_it(tmp_path):
    """Restart (cell and final atoms), else input (cell), else lengths and angles turned as the rounded vectors stand."""
    alone = read("cp2k/relaxed.out", tmp_path)
    assert not alone.positions_known
    assert alone.lattice_precision == 0.5e-3
    # the shape is known to six decimals all the same: compare the metric
    np.testing.assert_allclose(alone.lattice @ alone.lattice.T, np.array(CP2K_CELL) @ np.transpose(CP2K_CELL), atol=4e-6)
    cell = "".join(f"      {axis} {x} {y} {z}\n" for axis, (x, y, z) in zip("ABC", CP2K_CELL, strict=True))
    (tmp_path / "relaxed.inp").write_text(f"    &CELL\n{cell}    &END CELL\n")
    with_input = read("cp2k/relaxed.out", tmp_path)
    assert not with_input.positions_known
    np.testing.assert_allclose(with_input.lattice, CP2K_CELL, atol=1e-12)
    (tmp_path / "relaxed.inp").unlink()
    unpack("cp2k/relaxed-1.restart", tmp_path)
    complete = read("cp2k/relaxed.out", tmp_path)
    assert complete.positions_known
    np.testing.assert_allclose(complete.lattice, CP2K_CELL, atol=1e-12)
    np.testing.assert_allclose(complete.positions[1] - complete.positions[0], [0.25136, 0.24864, 0.24864], atol=1e-4)


@pytest.mark.parametrize(
    "edit", [("STEP_START_VAL  7", "STEP_START_VAL  6"), ("2026-12-01", "2026-12-02"), ("2.747669", "2.767669")]
)
def test_cp2k_restart_of_another_moment_is_not_used(edit, tmp_path):
    old, new = edit
    path = unpack("cp2k/relaxed-1.restart", tmp_path)
    text = path.read_text()
    assert old in text
    path.write_text(text.replace(old, new))
    returned = read("cp2k/relaxed.out", tmp_path)
    assert returned.lattice_precision == 0.5e-3
    assert not returned.positions_known or old.startswith("2.7")


@pytest.mark.parametrize(
    ("name", "first", "version"),
    [
        (
            "qe/dispersion.out",
            {"cutoff_eV": 20 * 13.605693, "dispersion": "DFT-D3", "smearing": "Fermi-Dirac smearing, width (Ry)= 0.0100"},
            "6.7MaX",
        ),
        ("qe/grimme-d2.out", {"dispersion": "Grimme-D2", "kpoint_total": "1", "pseudopotentials": "Si d7f89eb6"}, "6.7MaX"),
        ("qe/ts-vdw.out", {"dispersion": "T-S"}, "6.7MaX"),
        ("qe/xdm.out", {"dispersion": "XDM"}, "6.7MaX"),
        ("qe/two-species.out", {"pseudopotentials": "C 53020fac, Si a974d1b8", "kpoint_total": "8"}, "6.7MaX"),
        ("abinit/two-species.abo", {"pseudopotentials": "06c.pspgth, 14si.pspgth"}, "9.6.2"),
        ("cp2k/relaxed.out", {"pseudopotentials": "GTH-PBE-q4, SZV-MOLOPT-SR-GTH"}, "2023.1"),
        ("gpaw26/relaxed.txt", {"pseudopotentials": "Si.PBE ee77bee4"}, "26.7.0"),
        (
            "qe/single.out",
            {"functional": "SLA PW PBE PBE", "dispersion": "none", "smearing": "none", "spin": "none", "kpoint_count": "8"},
            "6.7MaX",
        ),
        (
            "qe/metal.out",
            {"spin": "polarised", "cutoff_eV": 15 * 13.605693, "functional": "SLA PZ NOGX NOGC", "kpoint_count": "4"},
            "6.7MaX",
        ),
        (
            "abinit/metal.abo",
            {"smearing": "occopt 7, 0.5442 eV", "cutoff_eV": 12 * 27.211386, "kpoints": "2x2x2", "spin": "none"},
            "9.6.2",
        ),
        ("abinit/single.abo", {"smearing": "none", "dispersion": "none", "kpoint_count": "8"}, "9.6.2"),
        (
            "cp2k/single.out",
            {
                "dispersion": "DFT-D3",
                "smearing": "FERMI_DIRAC",
                "functional": "PBE",
                "kpoints": "3x3x3",
                "cutoff_eV": 60 * 27.211386,
            },
            "2023.1",
        ),
        ("cp2k/unconverged.out", {"dispersion": "none", "smearing": "none", "spin": "none"}, "2023.1"),
        (
            "gpaw/single.txt",
            {"functional": "PBE", "cutoff_eV": 200.0, "kpoints": "2x2x2", "smearing": "none", "spin": "none"},
            "22.8.0",
        ),
        ("gpaw26/single.txt", {"functional": "PBE", "cutoff_eV": 200.0, "kpoints": "2x2x2", "smearing": "none"}, "26.7.0"),
        ("gpaw26/relaxed.txt", {"smearing": "Fermi-Dirac: width: 0.1000", "spin": "none"}, "26.7.0"),
        ("gpaw/relaxed.txt", {"smearing": "Fermi-Dirac: width: 0.1000"}, "22.8.0"),
    ],
    ids=lambda value: value if isinstance(value, str) and "/" in value else "",
)
def test_settings_are_those_of_the_input(name, first, version, tmp_path):
    returned = read(name, tmp_path)
    assert returned.version == version
    for key, value in first.items():
        assert returned.settings[key] == (pytest.approx(value, rel=1e-6) if isinstance(value, float) else value), key


@pytest.mark.parametrize(
    ("name", "block", "old", "new"),
    [
        ("qe/single.out", "Computing stress", "0.00047949", "0.00057949"),
        ("qe/single.out", "Computing stress", "70.54", "71.54"),
        ("abinit/single.abo", "stress tensor (GPa)", "-1.06", "-1.07"),
        ("abinit/single.abo", "strten", "-3.62", "-3.52"),
    ],
)
def test_a_stress_printed_twice_must_agree(name, block, old, new, tmp_path):
    """One digit changed in the block that the reader takes, or in the other: both are seen."""
    intact = read(name, tmp_path)
    assert 0 < np.abs(intact.stress - intact.stress_repeat).max() < 1e-3
    text = content(name).decode()
    start = text.rindex(block)
    assert old in text[start : start + 400]
    path = tmp_path / "changed"
    path.write_text(text[:start] + text[start:].replace(old, new, 1))
    assert is_problem(path)


#: the words that end a relaxation
RELAXED = {"qe": "bfgs converged", "abinit": "gradients are converged", "cp2k": "OPTIMIZATION COMPLETED"}


@pytest.mark.parametrize("name", ["qe/relaxed.out", "abinit/relaxed.abo", "cp2k/relaxed.out", "qe/two-species.out"])
def test_a_relaxation_cut_anywhere_is_no_result(name, tmp_path):
    """A relaxation of several steps, cut at every eleventh line and given the words of a job that ended: still a problem."""
    program = name.split("/")[0]
    text = content(name).decode()
    end = next(reader for reader in READERS if reader.program == PROGRAMS[program]).end_mark
    tail = "\n" + text[end.search(text).start() :]
    lines = text[: text.index(RELAXED[program])].splitlines(keepends=True)
    path = tmp_path / "cut"
    for count in range(40, len(lines), 11):
        path.write_text("".join(lines[:count]) + tail)
        assert recognise(path) is None or is_problem(path), count


def is_problem(path: Path) -> bool:
    try:
        return bool(read_returned(path, recognise(path)).problems)
    except InputError:
        return True


def test_the_log_of_abinit_is_not_its_output(tmp_path):
    """The log repeats the main output below two lines of its own."""
    path = tmp_path / "log"
    path.write_bytes(
        b"  ABINIT 9.6.2\n  \n-instrng: 30 lines of input have been read from file single.abi\n\n"
        + content("abinit/single.abo")
    )
    assert recognise(path) is None


def test_an_appended_restart_counts_as_the_last_run(tmp_path):
    path = tmp_path / "both.out"
    path.write_bytes(content("qe/few-steps.out") + content("qe/relaxed.out"))
    returned = read_returned(path, recognise(path))
    assert not [status for status, _ in returned.problems]
    np.testing.assert_allclose(returned.stress, read("qe/relaxed.out", tmp_path).stress, atol=1e-12)
    path.write_bytes(content("qe/relaxed.out") + content("qe/relaxed.out")[:5000])
    assert is_problem(path)


def test_a_file_that_cannot_tell_does_not_overrule_one_that_can(tmp_path):
    """GPAW jobs leave returned.extxyz, which says whether the ions are relaxed, beside files that never do."""
    folder = tmp_path / "jobs" / "one"
    folder.mkdir(parents=True)
    line = 'Lattice="0 2.7 2.7 2.7 0 2.7 2.7 2.7 0" stress="1 0 0 0 1 0 0 0 1" converged={0} pbc="T T T"'
    unpack("gpaw/single.txt", folder)
    unpack("gpaw/single.gpw", folder)
    alone = read_outputs(tmp_path, scan(tmp_path, "jobs/one"))
    assert [output.program for output in alone] == ["GPAW gpw", "GPAW text"]
    for word, programs in (("F", ["extended XYZ"]), ("T", ["extended XYZ", "GPAW gpw"])):
        (folder / "returned.extxyz").write_text(f"1\n{line.format(word)}\nSi 0 0 0\n")
        outputs = read_outputs(tmp_path, scan(tmp_path, "jobs/one"))
        assert [output.program for output in outputs] == programs
        assert outputs[0].finished == (word == "T")
