"""Pairs at finer settings: a known change comes back, and is marked where the pairs do not fix it."""

from __future__ import annotations

import numpy as np
import pytest
from support.crystals import conventional
from support.files import SILICON, write
from support.published import mandel
from support.returned import linear_law, write_return

from strainkit.collect.gather import collect_run
from strainkit.fit.result import fit_run
from strainkit.prepare.extend import at_finer_settings, write_extension
from strainkit.prepare.runfolder import plan_run, write_run
from strainkit.prepare.settings import Settings
from strainkit.run.plan import job_folder
from strainkit.tensors.strain import cauchy_from_pk2


def returns(run, plan, law_of, rng=None, noise=0.0):
    for job in plan.jobs:
        sigma = cauchy_from_pk2(law_of(job)(job.strain), job.gradient)
        if rng is not None:
            random = rng.normal(size=(3, 3)) * noise
            sigma = sigma + 0.5 * (random + random.T)
        write_return(run / job_folder(job.label), plan.crystal.deformed(job.gradient), sigma)


@pytest.mark.parametrize(("laue", "entry"), [("m-3m", "Si_CRC"), ("mmm", "aragonite_Liu2005")])
def test_a_uniform_softening_is_found(tmp_path, laue, entry):
    """Finer settings make every constant three percent smaller."""
    run = tmp_path / "run"
    old, _ = write_run(plan_run(conventional(laue)), run)
    plan = write_extension(run, old, at_finer_settings(old, Settings(engine={"accuracy": 0.1})))
    finer = [job for job in plan.jobs if job.kind == "finer"]
    assert len(finer) in (2, 4)
    truth = mandel(entry)
    returns(run, plan, lambda job: linear_law(truth * (0.97 if job.kind == "finer" else 1.0)))
    fit = fit_run(plan, collect_run(run, plan), noise=0.001)
    assert len(fit.jobs_used) == len(plan.strain_set)
    found = fit.finer
    np.testing.assert_allclose(found.change, -0.03 * fit.regression.values, rtol=0.35, atol=0.02)
    if laue == "m-3m":
        assert found.determined.all()
        np.testing.assert_allclose(found.change, -0.03 * fit.regression.values, rtol=1e-5)
    else:
        assert not found.determined.all()
    assert "finer-settings-matter" in [f.code for f in fit.findings]
    assert fit.to_dict()["finer_settings"]["jobs"] == [job.label for job in finer]


def test_no_change_no_alarm(tmp_path):
    run = tmp_path / "run"
    old, _ = write_run(plan_run(conventional("m-3m")), run)
    plan = write_extension(run, old, at_finer_settings(old, Settings(engine={"accuracy": 0.1})))
    returns(run, plan, lambda job: linear_law(mandel("Si_CRC")), np.random.default_rng(0), 0.005)
    fit = fit_run(plan, collect_run(run, plan), noise=0.005)
    assert (np.abs(fit.finer.change) < 4 * fit.finer.error).all()
    assert "finer-settings-matter" not in [f.code for f in fit.findings]


def test_through_the_command_line(cli, tmp_path):
    """Lennard-Jones in place of an expensive program: a longer cut-off is the finer setting."""
    cell = write(tmp_path, "POSCAR", SILICON.replace("2.716", "2.62").replace("Si\n2", "Ar\n1").replace("0.25 0.25 0.25\n", ""))
    run, finer = tmp_path / "run", write(tmp_path, "finer.toml", "[engine]\nrc = 20.0\n")
    engine = ["--engine", "lj", "--set", "sigma=3.4", "--set", "epsilon=0.0104", "--set", "rc=8.0", "--workers", 1]
    assert cli("prepare", cell, "--out", run, "--ions", "clamped").code == 0
    assert cli("evaluate", run, *engine).code == 0
    assert cli("fit", run).code == 3
    assert cli("collect", run).code == 0
    assert cli("fit", run, "--json").json["finer_settings"] is None
    slip = write(tmp_path, "slip.toml", "[engine]\nrcut = 20.0\n")
    refused = cli("prepare", "--extend", run, "--finer", slip)
    assert refused.code == 3
    assert f"{slip}: the engine lj has no setting 'rcut'" in refused.err
    made = cli("prepare", "--extend", run, "--finer", finer)
    assert made.code == 0
    assert "rc 20, in the jobs at finer settings" in made.out
    assert cli("prepare", "--extend", run, "--finer", finer).code == 3
    assert cli("evaluate", run, *engine).code == 0
    assert cli("collect", run).code == 0
    found = cli("fit", run, "--json").json["finer_settings"]
    # the truncated tail softens the solid: the longer cut-off must change the constants, by a few percent
    assert any(abs(c["change_GPa"]) > 0.01 for c in found["changes"])
    assert "finer settings" in cli("fit", run).out


PSEUDOPOTENTIALS = '[pseudopotentials]\nSi = "other.upf"\n[engine]\naccuracy = 0.1\n'


@pytest.mark.parametrize("text", ["[site]\nthreads = 1\n", "[deck]\necutwfc = 80.0\n", PSEUDOPOTENTIALS])
def test_settings_that_make_no_sense(cli, tmp_path, text):
    run = tmp_path / "run"
    cli("prepare", write(tmp_path, "POSCAR", SILICON), "--out", run)
    assert cli("prepare", "--extend", run, "--finer", write(tmp_path, "finer.toml", text)).code == 3
