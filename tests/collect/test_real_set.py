"""A real strain set of Quantum ESPRESSO (tests/data/sets/silicon_qe): silent as it is, and each fault in it named."""

from __future__ import annotations

import lzma
import re
from dataclasses import replace

import numpy as np
import pytest
from support.faultbench import FAULTS, CleanSet, inject, verdict
from support.realsets import NAMES, SETS, unpack

from strainkit.collect.gather import collect_run
from strainkit.collect.readjob import read_outputs
from strainkit.collect.scan import scan
from strainkit.fit.result import fit_run
from strainkit.run.plan import job_folder, load_plan
from strainkit.tensors.sixvectors import stress_from_voigt

NAME = "silicon_qe"
#: of the ions' own making, or too faint to be asked for here
LEFT_OUT = (
    "ions not converged",
    "stress of an earlier step",
    "another minimum",
    "another crystal",
    "frame, one job",
    "frame, all",
)


@pytest.fixture
def run(tmp_path):
    """The run folder as it came back, outputs packed."""
    unpack(NAME, tmp_path)
    return tmp_path


def printed_stress(label):
    """The last stress block as it stands in the file, GPa, positive in tension: kbar and the other sign (pw.x manual)."""
    text = lzma.decompress((SETS / NAME / f"{label}.out.xz").read_bytes()).decode()
    block = re.split(r"total\s+stress .*\n", text)[-1].splitlines()[:3]
    return -0.1 * np.array([[float(word) for word in line.split()[3:6]] for line in block])


def test_it_is_silent_and_right(run):
    plan = load_plan(run)
    table = collect_run(run, plan)
    assert not table.findings
    assert [(r.status, r.findings) for r in table.records] == [("done", ())] * 5
    assert {r.version for r in table.records} == {"6.7MaX"}
    for record in table.records:
        np.testing.assert_allclose(stress_from_voigt(record.stress), printed_stress(record.label), rtol=0, atol=6e-3)
    fit = fit_run(plan, table)
    assert not [f for f in fit.findings if f.code in ("outlier", "energy-mismatch", "set-inconsistent")]


@pytest.mark.parametrize("name", NAMES)
def test_no_real_set_raises_an_alarm(name, tmp_path):
    """Four programs, and cutoffs down to where the stress is off by gigapascals: a wrong number for all is no wrong job."""
    plan = unpack(name, tmp_path)
    table = collect_run(tmp_path, plan)
    assert not table.findings
    assert [(r.status, r.findings) for r in table.records] == [("done", ())] * len(plan.jobs)


def test_renamed_and_exchanged_folders_make_no_difference(run):
    plan = load_plan(run)
    before = collect_run(run, plan)
    for number, job in enumerate(reversed(plan.jobs)):
        (run / job_folder(job.label)).rename(run / "jobs" / f"task-{number}")
    after = collect_run(run, plan)
    for first, second in zip(before.records, after.records, strict=True):
        assert second.status == "done"
        np.testing.assert_allclose(second.stress, first.stress, rtol=0, atol=1e-6)


@pytest.fixture(scope="module")
def clean(tmp_path_factory):
    run = tmp_path_factory.mktemp("set")
    plan = unpack(NAME, run)
    outputs = {job.label: read_outputs(run, scan(run, job_folder(job.label)))[0].returned for job in plan.jobs}
    # pw.x prints no mesh: said here for the fault of another one
    outputs = {k: replace(v, settings={**v.settings, "kpoints": "4x4x4"}) for k, v in outputs.items()}
    return CleanSet(plan, outputs, {})


@pytest.mark.parametrize("name", [name for name in FAULTS if name not in LEFT_OUT])
def test_each_fault_is_named(clean, name):
    rng = np.random.default_rng(list(FAULTS).index(name))
    for _ in range(3):
        assert verdict(clean, inject(clean, [name], rng)) == ["named"]
