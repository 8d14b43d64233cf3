"""prepare --adopt: calculations that exist already, with strains of another making, become a run."""

from __future__ import annotations

import numpy as np
import pytest
from support.crystals import conventional, random_rotation
from support.published import mandel
from support.returned import write_return

from strainkit.prepare.runfolder import plan_run
from strainkit.prepare.writers import FORMATS
from strainkit.run.plan import load_plan
from strainkit.tensors.sixvectors import stiffness_to_voigt, to_mandel
from strainkit.tensors.strain import cauchy_from_pk2, green_lagrange

STIFFNESS = mandel("aragonite_Liu2005")
#: small-strain matrices of a set that somebody made by hand: each component up and down by the same amount (invented)
BY_HAND = [
    (side * size, component) for component in ("xx", "yy", "zz", "yz", "xz", "xy") for size in (0.005, 0.01) for side in (1, -1)
]


def matrix(size, component):
    i, j = ("xyz".index(c) for c in component)
    e = np.zeros((3, 3))
    e[i, j] = e[j, i] = size if i == j else size / 2
    return np.eye(3) + e


def returned(folder, crystal, gradient, turn, curvature=0.0):
    """An output of the strained crystal whose second Piola-Kirchhoff stress is C eta, and a quadratic term on request."""
    strain = green_lagrange(gradient)
    second = STIFFNESS @ to_mandel(strain) + curvature * STIFFNESS.max() * to_mandel(strain) ** 2
    shear = np.array([1, 1, 1, 0.5**0.5, 0.5**0.5, 0.5**0.5]) * second
    xx, yy, zz, yz, xz, xy = shear
    stress = cauchy_from_pk2(np.array([[xx, xy, xz], [xy, yy, yz], [xz, yz, zz]]), gradient)
    folder.mkdir(parents=True, exist_ok=True)
    write_return(folder, crystal.deformed(turn @ gradient), turn @ stress @ turn.T)


@pytest.fixture
def cell(tmp_path):
    crystal = conventional("mmm")
    path = tmp_path / "cell.extxyz"
    path.write_text(FORMATS["extxyz"].write(crystal, "aragonite-like"))
    return crystal, path


def check_fit(cli, run):
    """Collected and fitted, the run gives the tensor that the outputs were made from."""
    assert cli("collect", run).code == 0
    fit = cli("fit", run, "--frame", "given", "--json").json
    np.testing.assert_allclose(fit["stiffness_GPa"], stiffness_to_voigt(STIFFNESS), rtol=0, atol=1e-6 * STIFFNESS.max())


def test_a_set_made_by_hand_needs_nothing_more(cli, cell, tmp_path):
    """Nine constants of aragonite (Liu et al. 2005) come back; the originals stay where they are."""
    crystal, path = cell
    old = tmp_path / "old"
    turn = random_rotation(np.random.default_rng(0))
    returned(old / "zero", crystal, np.eye(3), turn)
    for i, (size, component) in enumerate(BY_HAND):
        returned(old / f"case{i}", crystal, matrix(size, component), turn)
    run = tmp_path / "run"
    made = cli("prepare", path, "--out", run, "--adopt", old)
    assert made.code == 0, made.err
    assert "adopted 25 calculations; 0 jobs left" in made.err
    assert (old / "case0" / "returned.extxyz").is_file()
    assert cli("collect", run).code == 0
    fit = cli("fit", run, "--frame", "given", "--json").json
    assert fit["undetermined"] == []
    # C xx only ever meets eta = e + e^2/2: a pair to second order
    np.testing.assert_allclose(fit["stiffness_GPa"], stiffness_to_voigt(STIFFNESS), rtol=0, atol=1e-6 * STIFFNESS.max())
    assert not [f for f in fit["findings"] if f["code"] == "lone-partner"]


def test_even_responses_cancel_in_pairs_of_another_making(cli, cell, tmp_path):
    """A quadratic response as large as 3 % of the linear one at 1 % moves no constant by more than 0.1 % of the largest."""
    crystal, path = cell
    old, run = tmp_path / "old", tmp_path / "run"
    for i, (size, component) in enumerate(BY_HAND):
        returned(old / f"case{i}", crystal, matrix(size, component), np.eye(3), curvature=3.0)
    assert cli("prepare", path, "--out", run, "--adopt", old).code == 0
    cli("collect", run)
    fit = cli("fit", run, "--frame", "given", "--json").json
    assert np.abs(np.array(fit["stiffness_GPa"]) - stiffness_to_voigt(STIFFNESS)).max() < 1e-3 * STIFFNESS.max()


def test_only_what_is_missing_is_planned(cli, cell, tmp_path):
    """Strains along x and in yz are there: the jobs that remain fix the rest, and fewer than the whole set are left."""
    crystal, path = cell
    old, run = tmp_path / "old", tmp_path / "run"
    for i, (size, component) in enumerate(c for c in BY_HAND if c[1] in ("xx", "yz", "xz", "xy")):
        returned(old / f"case{i}", crystal, matrix(size, component), np.eye(3))
    made = cli("prepare", path, "--out", run, "--adopt", old)
    assert "adopted 16 calculations" in made.err
    plan = load_plan(run)
    left = [job for job in plan.jobs if not job.label.startswith("a")]
    assert left[0].label == "reference"
    assert 1 < len(left) < 7
    for job in left:
        (run / "jobs" / job.label / "returned.extxyz").unlink(missing_ok=True)
        returned(run / "jobs" / job.label, crystal, job.gradient, np.eye(3))
    check_fit(cli, run)


def test_what_cannot_be_adopted_is_named(cli, cell, tmp_path):
    crystal, path = cell
    old = tmp_path / "old"
    returned(old / "far", crystal, np.diag([1.2, 1, 1]), np.eye(3))
    (old / "half.out").write_text("     Program PWSCF v.6.7 starts on\n")
    refused = cli("prepare", path, "--out", tmp_path / "run", "--adopt", old)
    assert refused.code == 3
    assert "far/returned.extxyz: a cell strained by 20 %" in refused.err
    assert "half.out" in refused.err
    assert "no finished calculation of this cell" in refused.err
    assert not (tmp_path / "run").exists()
    assert cli("prepare", path, "--out", tmp_path / "run", "--adopt", tmp_path / "nowhere").code == 3


def test_of_a_pair_only_the_missing_side_is_planned(cli, cell, tmp_path):
    """One side of one of the set's own pairs is there already: it is not planned again."""
    crystal, path = cell
    plan = plan_run(crystal, [0.01])
    old, run = tmp_path / "old", tmp_path / "run"
    returned(old / "one", crystal, plan.strain_set[1].gradient, np.eye(3))
    assert cli("prepare", path, "--out", run, "--adopt", old).code == 0
    strains = np.array([job.strain for job in load_plan(run).strain_set])
    apart = np.abs(strains[:, None] - strains[None]).max(axis=(2, 3)) + np.eye(len(strains))
    assert apart.min() > 1e-3
    for job in load_plan(run).jobs:
        returned(run / "jobs" / job.label, crystal, job.gradient, np.eye(3))
    check_fit(cli, run)


def test_a_run_folder_is_no_cell(cli, cell, tmp_path):
    _, path = cell
    assert cli("prepare", path, "--out", tmp_path / "run").code == 0
    refused = cli("prepare", tmp_path / "run", "--out", tmp_path / "other")
    assert refused.code == 3
    assert "a folder that strainkit prepared" in refused.err
    assert cli("prepare", path, "--more", 4, "--out", tmp_path / "third").code == 2


def test_displaced_cells_stay_beside_adopted_ones(cli, cell, tmp_path):
    crystal, path = cell
    returned(tmp_path / "old", crystal, np.eye(3), np.eye(3))
    plain = cli("prepare", path, "--ions", "clamped", "--dry-run", "--json").json["jobs"]
    wanted = [job["label"] for job in plain if job["kind"] == "displaced"]
    assert wanted
    made = cli("prepare", path, "--ions", "clamped", "--adopt", tmp_path / "old", "--out", tmp_path / "run", "--json")
    assert made.code == 0, made.err
    assert [job["label"] for job in made.json["jobs"] if job["kind"] == "displaced"] == wanted
    assert cli("collect", tmp_path / "run", "--json").json["expected"] == len(made.json["jobs"])
