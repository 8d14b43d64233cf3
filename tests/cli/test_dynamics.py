"""Clamped ions, displaced cells and force constants through the command line: Tersoff silicon, 118.8 -> 69.0 GPa."""

from __future__ import annotations

import pytest
from ase.build import bulk
from support.phonons import phonopy_file

from strainkit.evaluate.engines import Engine


@pytest.fixture
def clamped(cli, tmp_path):
    """A run of clamped and displaced cells, computed and collected, and its cell file."""
    cell, run = tmp_path / "si.extxyz", tmp_path / "run"
    bulk("Si", a=5.432).write(cell)
    assert cli("prepare", cell, "--out", run, "--ions", "clamped", "--magnitude", 0.3).code == 0
    assert cli("evaluate", run, "--engine", "tersoff").code == 0
    assert cli("collect", run).code == 0
    return run


def named(constants):
    return {c["name"]: c["value_GPa"] for c in constants}


def test_both_stiffnesses_and_what_follows(cli, clamped):
    """Published: clamped C44 119 GPa (Tersoff 1989), relaxed 69.0 GPa (npj Comput. Mater. 10, 218, 2024)."""
    fit = cli("fit", clamped, "--json").json
    assert named(fit["constants"])["C44"] == pytest.approx(118.8, rel=5e-3)
    relaxed = fit["relaxed_ion"]
    assert named(relaxed["constants"]) == pytest.approx({"C11": 142.5, "C12": 75.4, "C44": 69.0}, rel=3e-3)
    assert all(c["standard_error_GPa"] > 0 for c in relaxed["constants"])
    assert relaxed["frequencies_THz"][3] == pytest.approx(16.07, rel=1e-2)
    text = cli("fit", clamped).out
    assert "with the answer of the ions, from 1 displaced cell" in text
    derived = cli("derive", clamped, "--json").json
    assert derived["stiffness_GPa"][3][3] == pytest.approx(69.0, rel=3e-3)
    assert "clamped ions and their answer" in derived["origin"]


def test_force_constants_in_place_of_displaced_cells_and_as_a_check(cli, clamped, tmp_path):
    path = phonopy_file(tmp_path, bulk("Si", a=5.432), Engine("tersoff"), 3)
    fit = cli("fit", clamped, "--force-constants", path, "--json").json
    assert fit["relaxed_ion"]["force_constants"] == "from a phonopy file"
    assert named(fit["relaxed_ion"]["constants"])["C44"] == pytest.approx(69.0, rel=3e-3)
    page = cli("derive", clamped, "--force-constants", path)
    assert page.code == 0
    assert "they agree" in page.out
    missing = cli("derive", clamped, "--force-constants", tmp_path / "nothing.yaml")
    assert missing.code == 3
    assert "no such file" in missing.err


def test_a_displaced_cell_that_is_missing_is_named(cli, clamped):
    (clamped / "jobs" / "d1" / "returned.extxyz").unlink()
    assert cli("collect", clamped).code == 4
    fit = cli("fit", clamped, "--json")
    assert fit.code == 0
    assert fit.json["relaxed_ion"] is None
    (found,) = [f for f in fit.json["findings"] if f["code"] == "ions-unanswered"]
    assert "(d1)" in found["message"]
