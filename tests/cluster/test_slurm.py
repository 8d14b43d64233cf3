"""Whole silicon sets from the shipped decks through a real Slurm: two programs, a hang, a time-out and a kill.

The measured constants are the entry Si_CRC of tests/data/published_stiffness.json (CRC Handbook). Both programs use the local
density approximation with norm-conserving pseudopotentials of different make: the same functional, so that their
constants differ by pseudopotential, cutoff and mesh alone.
"""

from __future__ import annotations

import os
import re
import signal
import subprocess
import time
from pathlib import Path

import numpy as np
import pytest
from support.files import SILICON, write
from support.published import entries

#: largest difference of one functional in two programs, percent: what pseudopotentials at coarse cutoffs may differ by (our
#: choice; well-converged programs differ by about one percent: from memory of Lejaeghere et al., Science 351, aad3000, 2016)
SPREAD = 3.0

QE = """
[deck]
ecutwfc = 20.0
ecutrho = 80.0
kmesh = [6, 6, 6]
[pseudopotentials]
folder = "/usr/share/espresso/pseudo"
Si = "Si.pz-vbc.UPF"
[site]
walltime = "00:03:00"
grace = 15
command = "{command}"
"""
ABINIT = """
[deck]
ecut = 12.0
kmesh = [6, 6, 6]
[pseudopotentials]
folder = "/usr/share/abinit/psp/Pseudodojo_nc_sr_04_pw_standard_psp8"
Si = "Si.psp8"
[site]
walltime = "00:30:00"
throttle = 2
"""
#: stands for a node that hangs: in the jobs named in the file HANG it stops for good after two ionic steps of the first attempt
HANGING_PW = """#!/bin/bash
job=$(basename "$PWD")
if [ "$2" = pw-1.in ] && grep -qx "$job" "{hang}"; then
  pw.x "$@" &
  until [ "$(grep -c '^ATOMIC_POSITIONS' pw-1.out)" -ge 2 ]; do sleep 0.1; done
  kill -KILL $!
  sleep 600
fi
exec pw.x "$@"
"""


@pytest.fixture
def slurm(need, start_slurm, monkeypatch):
    """A running Slurm with more CPUs than the machine has, so that nothing waits but what is throttled."""
    need("pw.x", "abinit")
    monkeypatch.setenv("STRAINKIT_BEAT", "5")  # a dead task is known as such sooner
    # the sandbox of MPI inside a scheduler it knows nothing of
    monkeypatch.setenv("OMPI_ALLOW_RUN_AS_ROOT", "1")
    monkeypatch.setenv("OMPI_ALLOW_RUN_AS_ROOT_CONFIRM", "1")
    return start_slurm(16)


def submit(folder: Path, command: str) -> str:
    """Type what strainkit told to type."""
    done = subprocess.run(["bash", "-c", command], cwd=folder, capture_output=True, text=True)
    assert done.returncode == 0, done.stderr
    return re.search(r"Submitted batch job (\d+)", done.stdout)[1]


def until(condition, seconds: float, what: str):
    deadline = time.monotonic() + seconds
    while time.monotonic() < deadline:
        found = condition()
        if found:
            return found
        time.sleep(0.5)
    raise AssertionError(f"waited {seconds:g} s in vain for {what}")


def queue() -> str:
    return subprocess.run(["squeue", "-h", "-r", "-o", "%A"], capture_output=True, text=True, check=True).stdout.strip()


def relaxed(cli, cell: Path, deck: str, settings: Path, folder: Path) -> Path:
    """The cell brought to zero stress by the program itself, through the queue."""
    written = cli("relax", cell, "--deck", deck, "--settings", settings, "--scheduler", "slurm", "--out", folder, "--json")
    assert written.code == 0, written.err
    submit(folder, written.json["submit"])
    until(lambda: (folder / "done").exists(), 600, f"the variable-cell run of {deck}")
    return next(folder.glob("*-1.out" if deck == "qe" else "*-1.abo"))


def constants(cli, run: Path) -> dict[str, tuple[float, float]]:
    collected = cli("collect", run, "--json")
    assert collected.code == 0, collected.out
    fit = cli("fit", run, "--json").json
    return {c["name"]: (c["value_GPa"], c["standard_error_GPa"]) for c in fit["constants"]}


def last_positions(path: Path) -> np.ndarray:
    rows = path.read_text().rsplit("ATOMIC_POSITIONS", 1)[1].splitlines()[1:3]
    return np.array([row.split()[1:4] for row in rows], dtype=float)


@pytest.mark.engine
@pytest.mark.slow
def test_two_programs_through_a_real_queue(cli, slurm, tmp_path):
    start = write(tmp_path, "POSCAR", SILICON.replace("2.716", "2.700"))
    hang = write(tmp_path, "hang", "s1-plus-1\ns1-minus-1\n")
    wrapper = write(tmp_path, "pw.sh", HANGING_PW.format(hang=hang))
    wrapper.chmod(0o755)
    settings = {
        "qe": write(tmp_path, "qe.toml", QE.format(command=wrapper)),
        "abinit": write(tmp_path, "abinit.toml", ABINIT),
    }
    runs = {deck: tmp_path / f"run-{deck}" for deck in settings}
    commands = {}
    for deck, run in runs.items():
        cell = relaxed(cli, start, deck, settings[deck], tmp_path / f"cell-{deck}")
        options = ["--deck", deck, "--settings", settings[deck], "--scheduler", "slurm"]
        made = cli("prepare", cell, "--out", run, *options, "--json")
        assert made.code == 0, made.err
        assert not [f for f in made.json["findings"] if f["severity"] != "info"]
        assert made.json["calculation"]["kmesh"] == [6, 6, 6]
        commands[deck] = made.json["calculation"]["submit"]
    submit(runs["qe"], commands["qe"])

    # both strained jobs of Quantum ESPRESSO hang after two ionic steps: one is killed without warning, one runs out of time
    run = runs["qe"]
    killed, timed_out = run / "jobs" / "s1-minus-1", run / "jobs" / "s1-plus-1"
    until(lambda: (run / "jobs/reference/done").exists(), 600, "the reference job")
    until(
        lambda: (killed / "pw-1.out").exists() and (killed / "pw-1.out").read_text().count("ATOMIC_POSITIONS (") >= 2,
        300,
        "steps",
    )
    time.sleep(1.0)
    state = cli("progress", run, "--queue", "--json").json
    assert state["states"] == {"done": 1, "running": 2}
    assert state["resubmit"] == []
    kill_hard(killed)
    submit(runs["abinit"], commands["abinit"])
    until(lambda: "stopped-by-TERM" in (timed_out / "attempts.txt").read_text(), 300, "the time limit")
    until(lambda: not re.search(r"^\d+$", names("qe", run)), 60, "the queue to forget the dead jobs")

    before = snapshot(run)
    state = cli("progress", run, "--queue", "--resubmit", "--json")
    assert state.code == 4
    assert state.json["states"] == {"done": 1, "stopped": 2}
    assert state.json["resubmit"] == ["s1-plus-1", "s1-minus-1"]
    listed = (run / state.json["resubmission"]["list"]).read_text().split()
    assert listed == ["jobs/s1-plus-1", "jobs/s1-minus-1"]
    assert {name: content for name, content in snapshot(run).items() if name in before} == before
    # what is typed overrides what the script says
    submit(run, state.json["resubmission"]["submit"].replace("sbatch ", "sbatch --time=30 "))
    until(lambda: all((job / "done").exists() for job in (killed, timed_out)), 600, "the resubmitted jobs")
    for job in (killed, timed_out):
        again = np.array(
            [row.split()[1:4] for row in (job / "pw-2.in").read_text().splitlines() if row.startswith("Si  ")][-2:]
        )
        assert np.allclose(again.astype(float), last_positions(job / "pw-1.out"), rtol=0, atol=1e-9)
        assert (job / "pw-1.out").read_bytes() == before[job.relative_to(run) / "pw-1.out"]
    done = cli("progress", run, "--queue", "--json")
    assert done.code == 0
    assert done.json["states"] == {"done": 3}
    assert done.json["core_hours_used"] > 0
    assert done.json["core_hours_left"] == 0

    until(lambda: all((job / "done").exists() for job in (runs["abinit"] / "jobs").iterdir()), 900, "ABINIT's jobs")
    found = {deck: constants(cli, run) for deck, run in runs.items()}
    measured = entries()["Si_CRC"]["stiffness_GPa"]
    for name in ("C11", "C12", "C44"):
        (one, one_error), (two, two_error) = found["qe"][name], found["abinit"][name]
        assert abs(one - two) < 3 * np.hypot(one_error, two_error) + SPREAD / 100 * measured[name], (name, one, two)
        for value in (one, two):
            assert value == pytest.approx(measured[name], rel=0.10)


def names(deck: str, run: Path) -> str:
    """Array job numbers of a run that are still in the queue."""
    stem = (run / "submit.sh").read_text().split("--job-name=")[1].split()[0]
    answer = subprocess.run(["squeue", "-h", "-r", "-n", stem, "-o", "%A"], capture_output=True, text=True, check=True)
    return answer.stdout.strip()


def kill_hard(job: Path) -> None:
    """End everything of a job at once, as a dying node does: no signal that could be caught, no last word."""
    for entry in Path("/proc").iterdir():
        try:
            if entry.name.isdigit() and (entry / "cwd").resolve() == job.resolve():
                os.kill(int(entry.name), signal.SIGKILL)
        except OSError:
            continue
    assert (job / "running").is_dir()
    assert "end" not in (job / "attempts.txt").read_text()


def snapshot(run: Path) -> dict[Path, bytes]:
    return {p.relative_to(run): p.read_bytes() for p in run.rglob("*") if p.is_file()}
