"""States of jobs from their files, what to resubmit, and core hours against sums done by hand."""

from __future__ import annotations

import os
import time
from datetime import UTC, datetime

import numpy as np
import pytest
from support.crystals import conventional
from support.returned import write_return

from strainkit.collect.progress import read_progress
from strainkit.prepare.runfolder import plan_run, write_run
from strainkit.run.plan import job_folder

UNFINISHED = '1\nLattice="2 0 0 0 2 0 0 0 2" energy=-1 pbc="T T T"\nMg 0 0 0\n'


@pytest.fixture
def made(tmp_path):
    """mmm: the reference and six strained jobs."""
    run = tmp_path / "run"
    plan, _ = write_run(plan_run(conventional("mmm")), run)
    return run, plan


def finish(run, plan, index, **info):
    job = plan.jobs[index]
    write_return(run / job_folder(job.label), plan.crystal.deformed(job.gradient), (1.0 + index) * np.eye(3), **info)


def log(run, plan, index, seconds, ended="done 0", cores=4, running=None, scheduled="7_1"):
    begin = 1.7e9

    def moment(t):
        return datetime.fromtimestamp(t, UTC).strftime("%Y-%m-%dT%H:%M:%SZ")

    folder = run / job_folder(plan.jobs[index].label)
    text = f"start 1 {moment(begin)} {cores} node {scheduled}\n"
    if ended:
        text += f"end 1 {moment(begin + seconds)} {ended}\n"
    (folder / "attempts.txt").write_text(text)
    if running is not None:
        (folder / "running").mkdir()
        os.utime(folder / "running", (running, running))
    if ended.startswith("done"):
        (folder / "done").write_text("1\n")


def states(run, plan, queued=None):
    return [job.state for job in read_progress(run, plan, queued).jobs]


def test_states_from_files_alone(made):
    run, plan = made
    finish(run, plan, 0)
    log(run, plan, 0, 100)
    log(run, plan, 1, 0, ended="", running=time.time())
    log(run, plan, 2, 0, ended="", running=time.time() - 3600)
    log(run, plan, 3, 50, ended="stopped-by-TERM 143")
    log(run, plan, 4, 50, ended="failed 1")
    finish(run, plan, 5, converged=False)
    log(run, plan, 5, 50, ended="failed 0")
    assert states(run, plan) == ["done", "running", "stopped", "stopped", "failed", "unconverged", "missing"]
    found = read_progress(run, plan)
    assert found.resubmit == tuple(job.label for job in plan.jobs[2:])
    assert found.counts == {"done": 1, "running": 1, "missing": 1, "stopped": 2, "failed": 1, "unconverged": 1}
    assert not found.asked


def test_the_scheduler_knows_more(made):
    """What it lists is never resubmitted; what it does not list and began under it is dead, whatever its last sign of life."""
    run, plan = made
    folders = [job_folder(job.label) for job in plan.jobs]
    log(run, plan, 1, 0, ended="", running=time.time())
    log(run, plan, 2, 0, ended="", running=time.time())
    log(run, plan, 3, 50, ended="stopped-by-TERM 143")
    log(run, plan, 4, 0, ended="", running=time.time(), scheduled="-")
    queued = {folders[0]: "queued", folders[1]: "running", folders[3]: "queued"}
    assert states(run, plan, queued) == ["queued", "running", "stopped", "queued", "running", "missing", "missing"]
    found = read_progress(run, plan, queued)
    assert found.resubmit == tuple(plan.jobs[i].label for i in (2, 5, 6))


def test_outputs_without_any_job_script(made):
    run, plan = made
    finish(run, plan, 1)
    (run / job_folder(plan.jobs[2].label) / "out.extxyz").write_text(UNFINISHED)
    write_return(run / job_folder(plan.jobs[3].label), plan.crystal.deformed(np.diag([1.1, 1, 1])), np.eye(3))
    found = read_progress(run, plan)
    assert [job.state for job in found.jobs][1:4] == ["done", "mismatch", "mismatch"]
    assert found.core_hours_used is None
    assert found.core_hours_left is None
    assert plan.jobs[3].label not in found.resubmit


def test_a_done_mark_is_not_believed_against_the_output(made):
    run, plan = made
    finish(run, plan, 1, converged=False)
    log(run, plan, 1, 50)
    log(run, plan, 2, 50)  # done, says the script, but there is nothing that a reader knows
    assert states(run, plan)[1:3] == ["unconverged", "unread"]
    assert plan.jobs[1].label in read_progress(run, plan).resubmit
    assert plan.jobs[2].label not in read_progress(run, plan).resubmit


def test_core_hours_from_the_reference_job(made):
    """Four cores for half an hour: 2 core hours; each strained job costs |G|/|H| times as much."""
    run, plan = made
    finish(run, plan, 0)
    log(run, plan, 0, 1800)
    found = read_progress(run, plan)
    assert found.core_hours_used == pytest.approx(2.0)
    assert found.core_hours_left == pytest.approx(2.0 * plan.expectation.relative_cost)


def test_core_hours_from_strained_jobs_where_there_are_some(made):
    """One strained job took 3 core hours: the other five, if they lose the same symmetry, take 15."""
    run, plan = made
    finish(run, plan, 0)
    log(run, plan, 0, 1800)
    finish(run, plan, 1)
    log(run, plan, 1, 2700)
    found = read_progress(run, plan)
    assert found.core_hours_used == pytest.approx(5.0)
    assert found.core_hours_left == pytest.approx(3.0 * 5, rel=1e-9)
    log(run, plan, 2, 3600, ended="stopped-by-TERM 143")
    assert read_progress(run, plan).core_hours_used == pytest.approx(9.0)


@pytest.mark.parametrize(
    "name", ["pw-1.out", "abinit-2.abo", "si.castep", "vasprun.xml", "OUTCAR", "returned.extxyz", "x.out.gz"]
)
def test_a_file_called_an_output_that_is_none_is_not_passed_over(made, name):
    run, plan = made
    (run / job_folder(plan.jobs[1].label) / name).write_text("srun: error: invented\n")
    found = read_progress(run, plan)
    assert found.jobs[1].state == "broken"
    (doubt,) = found.jobs[1].record.findings
    assert doubt.code == "unreadable-output"
    assert name in doubt.message
    assert [job.state for job in found.jobs].count("missing") == len(plan.jobs) - 1


def test_what_is_no_output_raises_no_doubt(made):
    """Inputs, cells, notes and logs of schedulers: common names of each, no source."""
    run, plan = made
    folder = run / job_folder(plan.jobs[1].label)
    for name in ("pw.in", "INCAR", "KPOINTS", "README", "slurm-1234.out", "job.o1234", "geometry.in", "notes.txt", "run.log"):
        (folder / name).write_text("invented\n")
    finish(run, plan, 2)
    (run / job_folder(plan.jobs[2].label) / "other.out").write_text("invented\n")
    log(run, plan, 3, 100)
    found = read_progress(run, plan)
    assert [job.state for job in found.jobs[1:4]] == ["missing", "done", "unread"]
    assert not any(job.record.findings for job in found.jobs)
