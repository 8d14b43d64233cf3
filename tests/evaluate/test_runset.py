"""Running a set: nothing finished is lost or repeated, whatever interrupts it."""

from __future__ import annotations

import os
import signal
import subprocess
import sys
import time

import pytest
from support.files import SILICON, write

from strainkit.crystal.read import read_crystal
from strainkit.errors import InputError, UsageError
from strainkit.evaluate.engines import Engine, parse_settings
from strainkit.evaluate.runset import evaluate_run
from strainkit.prepare.runfolder import plan_run, write_run
from strainkit.run.extxyz import RETURNED
from strainkit.run.plan import load_plan


@pytest.fixture
def run(tmp_path):
    crystal = read_crystal(write(tmp_path, "POSCAR", SILICON))
    write_run(plan_run(crystal, [0.005, 0.01]), tmp_path / "run")
    return tmp_path / "run"


def stamps(run):
    return {p.parent.name: (p.stat().st_mtime_ns, p.read_bytes()) for p in run.glob(f"jobs/*/{RETURNED}")}


def test_several_processes_give_what_one_gives(run):
    plan, engine = load_plan(run), Engine("tersoff")
    outcome = evaluate_run(run, plan, engine, workers=2)
    assert sorted(outcome.done) == sorted(job.label for job in plan.jobs)
    many = {label: content for label, (_, content) in stamps(run).items()}
    for path in run.glob(f"jobs/*/{RETURNED}"):
        path.unlink()
    evaluate_run(run, plan, engine, workers=1)
    assert many == {label: content for label, (_, content) in stamps(run).items()}


def test_rerun_repeats_nothing(run):
    plan, engine = load_plan(run), Engine("tersoff")
    first = evaluate_run(run, plan, engine, workers=1)
    before = stamps(run)
    again = evaluate_run(run, plan, engine, workers=1)
    assert again.kept == first.done
    assert again.done == ()
    assert stamps(run) == before


def test_a_deleted_result_alone_is_made_again(run):
    plan, engine = load_plan(run), Engine("tersoff")
    evaluate_run(run, plan, engine, workers=1)
    before = stamps(run)
    (run / "jobs" / "s1-plus-1" / RETURNED).unlink()
    outcome = evaluate_run(run, plan, engine, workers=1)
    assert outcome.done == ("s1-plus-1",)
    after = stamps(run)
    assert {k: v for k, v in after.items() if k != "s1-plus-1"} == {k: v for k, v in before.items() if k != "s1-plus-1"}


def test_other_engine_or_settings_are_refused_and_nothing_changes(run):
    plan = load_plan(run)
    evaluate_run(run, plan, Engine("tersoff"), workers=1)
    before = stamps(run)
    with pytest.raises(InputError, match="result of another engine or setting"):
        evaluate_run(run, plan, Engine("tersoff"), fmax=1e-3, workers=1)
    with pytest.raises(InputError, match="result of another engine or setting"):
        evaluate_run(run, plan, Engine("lj"), workers=1)
    assert stamps(run) == before


def test_a_failing_job_does_not_stop_the_others(run):
    """Silicon is no element of EMT: every job fails with the reason, none with a traceback."""
    outcome = evaluate_run(run, load_plan(run), Engine("emt"), workers=2)
    assert len(outcome.failed) == 5
    assert all("Si" in reason for reason in outcome.failed.values())


def test_unconverged_job_is_marked_and_goes_on_from_where_it_stopped(run, monkeypatch):
    from strainkit.evaluate import single

    monkeypatch.setattr(single, "MAX_STEPS", 2)
    plan, engine = load_plan(run), Engine("tersoff")
    first = evaluate_run(run, plan, engine, fmax=1e-6, workers=1)
    assert first.unconverged
    monkeypatch.setattr(single, "MAX_STEPS", 2000)
    second = evaluate_run(run, plan, engine, fmax=1e-6, workers=1)
    assert set(second.done) == set(first.unconverged)
    assert set(second.kept) == set(first.done)


@pytest.mark.parametrize("stop", [pytest.param(signal.SIGINT, marks=pytest.mark.slow), signal.SIGKILL])
def test_interrupting_loses_nothing_finished(tmp_path, stop):
    """A real process, a slow engine: stopped after the first results, then run again to the end."""
    crystal = read_crystal(write(tmp_path, "POSCAR", SILICON))
    run = tmp_path / "run"
    plan, _ = write_run(plan_run(crystal, [0.002, 0.004, 0.006, 0.008, 0.01], "clamped"), run)
    (tmp_path / "slow_engine.py").write_text(
        "import time\n"
        "from strainkit.evaluate.tersoff import tersoff_silicon\n"
        "class Slow:\n"
        "    def __new__(cls):\n"
        "        time.sleep(0.4)\n"
        "        return tersoff_silicon()\n"
    )
    command = [sys.executable, "-c", "from strainkit.cli.main import main; main()", "evaluate", str(run)]
    command += ["--engine", "slow_engine:Slow", "--workers", "2", "--json"]
    environment = {**os.environ, "PYTHONPATH": str(tmp_path)}
    process = subprocess.Popen(command, env=environment, stdout=subprocess.PIPE, stderr=subprocess.PIPE, start_new_session=True)
    deadline = time.monotonic() + 60
    while len(stamps(run)) < 2 and time.monotonic() < deadline:
        time.sleep(0.02)
    os.killpg(process.pid, stop)
    _, errors = process.communicate(timeout=60)
    assert b"Traceback" not in errors
    if stop == signal.SIGINT:
        assert process.returncode == 130
    kept = stamps(run)
    assert 2 <= len(kept) < len(plan.jobs)
    again = subprocess.run(command, env=environment, capture_output=True, check=True)
    after = stamps(run)
    assert len(after) == len(plan.jobs)
    assert {label: after[label] for label in kept} == kept
    assert again.stdout.count(b"s1-") == len(plan.jobs) - 1


def test_engine_names_and_settings():
    assert parse_settings(["a=1", "b=2.5", "c=text", "d=[1, 2]", "e=True"]) == {
        "a": 1,
        "b": 2.5,
        "c": "text",
        "d": [1, 2],
        "e": True,
    }
    with pytest.raises(UsageError, match="not key=value"):
        parse_settings(["a"])
    with pytest.raises(UsageError, match="unknown engine"):
        Engine("nonsense")
    with pytest.raises(InputError, match="no module no_such_module"):
        Engine("no_such_module:Thing").calculator()
    with pytest.raises(InputError, match="cannot be loaded"):
        Engine("ase.calculators.emt:Nothing").calculator()
    with pytest.raises(InputError, match="no setting 'sigm'"):
        Engine("lj", {"sigm": 1}).calculator()
    with pytest.raises(InputError, match="refuses its settings"):
        Engine("tersoff", {"parameters": {"Si": {"m": 3}}}).calculator()
    with pytest.raises(InputError, match="gives no forces, stress"):
        Engine("ase.calculators.test:FreeElectrons").calculator()


def test_relaxing_into_other_molecules_is_said(cli, tmp_path):
    """A dimer of argon squeezed to a bond length flies apart on the Lennard-Jones potential: one molecule becomes two."""
    from ase import Atoms
    from ase.io import write as ase_write

    pair = Atoms("Ar2", positions=[(0, 0, 0), (0, 0, 2.4)], cell=[9.0, 9.0, 9.0], pbc=True)
    ase_write(tmp_path / "pair.extxyz", pair)
    lj = ["--engine", "lj", "--set", "sigma=3.4", "--set", "epsilon=0.01", "--set", "rc=8.0", "--fmax", "0.1"]
    result = cli("relax", tmp_path / "pair.extxyz", *lj, "--out", tmp_path / "out.extxyz", "--json")
    (said,) = result.json["findings"]
    assert said["code"] == "bonds-changed"
    assert said["message"].startswith("before: 1 Ar2 (molecule); now: 2 Ar (molecule)")
