"""Molecular crystals on a tight-binding engine, end to end through the command line (GFN1-xTB, one cell, Gamma point).

The engine knows the Gamma point only, which makes it a model of its own, not a good one of the real crystals; it serves because
it is deterministic, has soft and stiff constants, and runs here.
"""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest
from support.crystals import random_rotation, random_unimodular, rewritten

from strainkit.collect.table import load_table
from strainkit.crystal.operations import crystal_operations
from strainkit.crystal.read import read_crystal
from strainkit.evaluate.engines import Engine
from strainkit.evaluate.single import evaluate_cell
from strainkit.prepare.runfolder import plan_run
from strainkit.run.plan import load_plan
from strainkit.shipped import shipped_folder
from strainkit.tensors.sixvectors import stiffness_from_voigt, stress_from_voigt
from strainkit.units import EV_PER_A3_IN_GPA

#: naphthalene P2_1/c, 36 atoms a cell, as a 1x2x1 supercell (in one cell at Gamma its molecules join to chains):
#: sample_cells/naphthalene.cif relaxed with GFN1-xTB by strainkit relax
NAPHTHALENE = Path(__file__).parent.parent / "data" / "naphthalene_gfn1_gamma.extxyz"


def fitted(cli, cell, run, *options):
    assert cli("prepare", cell, "--out", run, *options).code == 0
    done = cli("evaluate", run, "--engine", "gfn1-xtb")
    assert done.code == 0, done.out + done.err
    assert cli("collect", run).code == 0
    result = cli("fit", run, "--frame", "given", "--json")
    assert result.code == 0
    return result.json


def test_dry_ice_and_its_noise(cli, need, tmp_path):
    """7.4, 4.8, 2.9 GPa at 2e-4 eV/A and 9.9 for C11 at 2e-3: measured by the project with tblite, no published value.

    The check outside the code is that the energies of the same jobs give the same curvature.
    """
    need("tblite")
    relaxed = tmp_path / "co2.extxyz"
    sample = shipped_folder("sample_cells") / "carbon_dioxide.cif"
    assert cli("relax", sample, "--engine", "gfn1-xtb", "--out", relaxed).code == 0
    fit = fitted(cli, relaxed, tmp_path / "run")
    values = {c["name"]: c["value_GPa"] for c in fit["constants"]}
    assert values["C11"] == pytest.approx(7.4, abs=0.25)
    assert values["C12"] == pytest.approx(4.8, abs=0.25)
    assert values["C44"] == pytest.approx(2.9, abs=0.2)
    assert fit["energy_check"]["curvature_agrees"]
    pair = fit["energy_check"]["pairs"][0]
    assert pair["curvature_energy_GPa"] == pytest.approx(pair["curvature_stress_GPa"], rel=0.05)


@pytest.mark.slow
def test_monoclinic_molecular_crystal_the_same_however_it_is_written(cli, need, tmp_path):
    """13 constants from 8 strained jobs, positive definite; turned, permuted, in another basis: the same jobs and stresses.

    One of the nine jobs is computed again, for time; all nine, fitted, agreed within the error bars when run by hand.
    """
    need("tblite")
    run = tmp_path / "first"
    first = fitted(cli, NAPHTHALENE, run, "--magnitude", 0.5)
    assert len(first["constants"]) == 13
    assert len(first["jobs_used"]) == 9
    assert np.linalg.eigvalsh(stiffness_from_voigt(np.array(first["stiffness_GPa"]))).min() > 0
    assert all(c["standard_error_GPa"] > 0 for c in first["constants"])
    assert first["energy_check"]["curvature_agrees"]

    rng = np.random.default_rng(0)
    crystal = read_crystal(NAPHTHALENE)
    turn = random_rotation(rng)
    other = rewritten(crystal, turn, random_unimodular(rng), rng.permutation(len(crystal.numbers)))
    plan = plan_run(other, [0.005])
    records = {r.label: r for r in load_table(run).records}
    before = {job.label: job for job in load_plan(run).jobs}
    assert [job.label for job in plan.jobs] == list(records)
    operations = turn @ crystal_operations(crystal, 1e-3).cartesian
    for job in plan.jobs[1:2]:
        mine = before[job.label]
        images = [r @ mine.gradient @ r.T for r in operations]
        image = np.argmin([np.abs(g - job.gradient).max() for g in images])
        np.testing.assert_allclose(images[image], job.gradient, rtol=0, atol=1e-7)
        operation = operations[image]
        found = evaluate_cell(plan.starting_cell(job), Engine("gfn1-xtb"), relax=True).stress * EV_PER_A3_IN_GPA
        expected = operation @ stress_from_voigt(records[job.label].stress) @ operation.T
        # the optimiser takes another path to 2e-4 eV/A: the noise of this set is a few MPa
        np.testing.assert_allclose(found, expected, rtol=0, atol=6 * first["noise_GPa"])
