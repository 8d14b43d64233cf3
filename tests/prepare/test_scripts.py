"""Job scripts: run here with stand-ins for pw.x and for the schedulers' variables, and read by shellcheck."""

from __future__ import annotations

import os
import re
import shutil
import signal
import subprocess
import time
from functools import cache
from pathlib import Path

import numpy as np
import pytest
from support.files import write

from strainkit.crystal.crystal import Crystal
from strainkit.errors import InputError, UsageError
from strainkit.prepare.calculation import plan_calculation
from strainkit.prepare.decks import DECK_NAMES
from strainkit.prepare.relaxation import write_relaxation
from strainkit.prepare.resubmit import write_resubmission
from strainkit.prepare.runfolder import plan_run, write_run
from strainkit.prepare.scripts import SCHEDULERS, job_name
from strainkit.prepare.settings import Settings
from strainkit.run.plan import Plan, load_plan

#: pretends to be pw.x: two ionic steps, then an end; hangs or fails in the jobs that the file named by its folder says
PROGRAM = r"""#!/bin/bash
input=$2
job=$(basename "$JOB_FOLDER")
echo "$job $input" >>"{log}"
move() {
  awk -v by="$1" '/^ATOMIC_POSITIONS/ {block = 1; print "ATOMIC_POSITIONS (crystal)"; next}
    block {print $1, $2 + by, $3, $4}' "$input"
}
echo "     Program PWSCF v.6.7"
move 0.001
move 0.002
case $(grep "^$job " "{behaviour}" | cut -d' ' -f2) in
  hang) if [ "$input" = pw-1.in ]; then sleep 300 & wait; fi ;;
  deaf) if [ "$input" = pw-1.in ]; then trap '' TERM; sleep 300 & wait; sleep 300; fi ;;
  fail) echo "Error in routine"; exit 3 ;;
  unconverged) echo "     convergence NOT achieved after 100 iterations" ;;
esac
echo "   JOB DONE."
"""


@cache
def silicon_plan() -> Plan:
    lattice = 2.716 * np.array([[0, 1, 1], [1, 0, 1], [1, 1, 0]])
    return plan_run(Crystal(lattice, [[0, 0, 0], [0.25, 0.25, 0.25]], [14, 14], name="silicon"), [0.01])


class Made:
    """A run folder whose pw.x is a stand-in, and ways to start its script."""

    def __init__(self, folder: Path, scheduler: str = "bash", **site):
        self.log = folder / "log.txt"
        self.behaviour = write(folder, "behaviour", "")
        program = write(folder, "pw.sh", PROGRAM.replace("{log}", str(self.log)).replace("{behaviour}", str(self.behaviour)))
        program.chmod(0o755)
        self.run = folder / "run"
        plan = silicon_plan()
        crystal = plan.crystal
        site = Settings().site | {"command": f'env JOB_FOLDER="$folder" {program}'} | site
        settings = Settings(pseudopotentials={"Si": "Si.upf"}, site=site)
        calculation = plan_calculation(
            "qe", crystal, "ions", settings, 0.5, [crystal.lattice @ j.gradient.T for j in plan.jobs]
        )
        self.plan, _ = write_run(plan, self.run, calculation=calculation, scheduler=scheduler)

    def start(self, *arguments: str, cwd: Path | None = None, script: str = "submit.sh", **environment: str):
        return subprocess.run(
            ["bash", str(self.run / script), *arguments],
            cwd=cwd or self.run.parent,
            env={**os.environ, "STRAINKIT_BEAT": "1", **environment},
            capture_output=True,
            text=True,
            timeout=120,
            stdin=subprocess.DEVNULL,
        )

    def begin(self, *arguments: str):
        return subprocess.Popen(
            ["bash", str(self.run / "submit.sh"), *arguments],
            env={**os.environ, "STRAINKIT_BEAT": "1"},
            stdout=subprocess.PIPE,
            stderr=subprocess.STDOUT,
            text=True,
            start_new_session=True,
        )

    def calls(self) -> list[str]:
        return self.log.read_text().splitlines() if self.log.exists() else []

    def job(self, label: str) -> Path:
        return self.run / "jobs" / label


@pytest.fixture
def made(tmp_path):
    return Made(tmp_path)


def settled(condition, seconds=20.0):
    deadline = time.monotonic() + seconds
    while not condition():
        assert time.monotonic() < deadline
        time.sleep(0.05)


def positions(path: Path) -> np.ndarray:
    rows = path.read_text().rsplit("ATOMIC_POSITIONS", 1)[1].splitlines()[1:3]
    return np.array([row.split()[1:4] for row in rows], dtype=float)


def test_by_hand_without_any_scheduler(made):
    done = made.start("all")
    assert done.returncode == 0, done.stderr
    assert made.calls() == ["reference pw-1.in", "s1-plus-1 pw-1.in", "s1-minus-1 pw-1.in"]
    for job in made.plan.jobs:
        assert (made.job(job.label) / "done").read_text() == "1\n"
        assert not (made.job(job.label) / "running").exists()
        assert re.fullmatch(r"start 1 \S+Z 1 \S+ -\nend 1 \S+Z done 0\n", (made.job(job.label) / "attempts.txt").read_text())


def test_finished_jobs_exit_zero_and_are_not_run_again(made):
    made.start("2")
    assert made.calls() == ["s1-plus-1 pw-1.in"]
    again = made.start("2")
    assert again.returncode == 0
    assert "done before" in again.stdout
    assert made.calls() == ["s1-plus-1 pw-1.in"]


def test_from_any_folder_and_beyond_the_list(made, tmp_path):
    elsewhere = tmp_path / "elsewhere"
    elsewhere.mkdir()
    assert made.start("1", cwd=elsewhere).returncode == 0
    assert made.start("99", cwd=elsewhere).returncode == 0
    assert made.start("09", cwd=elsewhere).returncode == 0
    assert made.calls() == ["reference pw-1.in"]


@pytest.mark.parametrize("argument", [[], ["two"], ["-1"]])
def test_usage(made, argument):
    done = made.start(*argument)
    assert done.returncode == 2
    assert "usage: bash submit.sh TASK" in done.stderr
    assert made.calls() == []


@pytest.mark.parametrize(
    ("scheduler", "variables"),
    [
        ("slurm", {"SLURM_ARRAY_TASK_ID": "2", "SLURM_ARRAY_JOB_ID": "7", "SLURM_SUBMIT_DIR": "RUN"}),
        ("pbs", {"PBS_ARRAY_INDEX": "2", "PBS_JOBID": "7[2].server", "PBS_O_WORKDIR": "RUN"}),
        ("lsf", {"LSB_JOBINDEX": "2", "LSB_JOBID": "7", "LS_SUBCWD": "RUN"}),
        ("sge", {"SGE_TASK_ID": "2", "JOB_ID": "7", "SGE_O_WORKDIR": "RUN"}),
    ],
)
def test_index_and_folder_from_the_scheduler(tmp_path, scheduler, variables):
    """The script runs from a spool folder under another name, as schedulers do it, with the variables of their manuals."""
    made = Made(tmp_path, scheduler)
    spool = tmp_path / "spool"
    spool.mkdir()
    shutil.copy(made.run / "submit.sh", spool / "script")
    environment = {key: value.replace("RUN", str(made.run)) for key, value in variables.items()}
    done = subprocess.run(
        ["bash", str(spool / "script")],
        cwd=spool,
        env={**os.environ, **environment},
        capture_output=True,
        text=True,
        timeout=60,
    )
    assert done.returncode == 0, done.stderr
    assert made.calls() == ["s1-plus-1 pw-1.in"]
    assert re.search(r"start 1 \S+ 1 \S+ 7\S*2", (made.job("s1-plus-1") / "attempts.txt").read_text())
    lost = subprocess.run(
        ["bash", str(spool / "script")],
        cwd=spool,
        env={**os.environ, **environment, next(k for k in variables if "DIR" in k or "CWD" in k): str(spool)},
        capture_output=True,
        text=True,
        timeout=60,
    )
    assert lost.returncode == 2
    assert "submit it from inside the run folder" in lost.stderr


def test_failed_and_unconverged_jobs_get_no_done_mark_and_stop_no_other(made):
    made.behaviour.write_text("reference fail\ns1-plus-1 unconverged\n")
    done = made.start("all")
    assert done.returncode == 1
    assert "end 1" in (made.job("reference") / "attempts.txt").read_text()
    assert (made.job("reference") / "attempts.txt").read_text().endswith("failed 3\n")
    assert not (made.job("s1-plus-1") / "done").exists()
    assert (made.job("s1-minus-1") / "done").exists()


@pytest.mark.parametrize("number", [signal.SIGTERM, signal.SIGINT, signal.SIGUSR1])
def test_a_signal_stops_the_job_and_the_next_attempt_goes_on_from_its_last_step(made, number):
    made.behaviour.write_text("reference hang\n")
    process = made.begin("all")
    output = made.job("reference") / "pw-1.out"
    settled(lambda: output.exists() and output.read_text().count("ATOMIC_POSITIONS") == 2)
    process.send_signal(number)
    text, _ = process.communicate(timeout=30)
    assert process.returncode == 1
    assert "jobs/reference: stopped, attempt 1" in text
    assert made.calls() == ["reference pw-1.in"]  # the rest of the list was not begun
    log = (made.job("reference") / "attempts.txt").read_text()
    assert re.search(rf"end 1 \S+ stopped-by-{number.name.removeprefix('SIG')} \d+\n$", log)
    assert not (made.job("reference") / "running").exists()
    before = output.read_bytes()
    assert made.start("1").returncode == 0
    assert output.read_bytes() == before
    np.testing.assert_allclose(positions(made.job("reference") / "pw-2.in"), positions(output), rtol=0, atol=1e-12)
    first, second = (made.job("reference") / f"pw-{n}.in" for n in (1, 2))
    assert first.read_text().split("ATOMIC_POSITIONS")[0] == second.read_text().split("ATOMIC_POSITIONS")[0]
    assert (made.job("reference") / "done").read_text() == "2\n"


def test_an_attempt_that_left_no_step_is_passed_over(made):
    """The second attempt died at once: the third goes on from the first."""
    job = made.job("reference")
    made.start("1")
    (job / "done").unlink()
    (job / "pw-2.out").write_text("     Program PWSCF\nATOMIC_POSITIONS (crystal)\nSi 0.1")
    with (job / "attempts.txt").open("a") as log:
        log.write("start 2 2025-01-01T00:00:00Z 1 node -\n")
    made.start("1")
    np.testing.assert_allclose(positions(job / "pw-3.in"), positions(job / "pw-1.out"), rtol=0, atol=1e-12)


def test_two_tasks_never_compute_one_job(made):
    made.behaviour.write_text("reference hang\n")
    first = made.begin("1")
    settled(lambda: made.calls())
    second = made.start("1")
    assert second.returncode == 1
    assert "another task computes it now" in second.stderr
    assert made.calls() == ["reference pw-1.in"]
    first.terminate()
    first.communicate(timeout=30)


def test_a_dead_task_leaves_a_claim_that_is_taken_over(made):
    job = made.job("reference")
    (job / "running").mkdir()
    old = time.time() - 3600
    os.utime(job / "running", (old, old))
    assert made.start("1").returncode == 0
    assert (job / "done").exists()


def test_bundles(tmp_path):
    made = Made(tmp_path, "slurm", bundle=2)
    assert "#SBATCH --array=1-2\n" in (made.run / "submit.sh").read_text()
    assert made.start("2").returncode == 0
    assert made.calls() == ["s1-minus-1 pw-1.in"]
    assert made.start("1").returncode == 0
    assert made.calls()[1:] == ["reference pw-1.in", "s1-plus-1 pw-1.in"]


def test_scratch_is_used_emptied_and_copied_back_even_when_stopped(tmp_path):
    scratch = tmp_path / "node local"
    scratch.mkdir()
    made = Made(tmp_path, scratch="$NODE_LOCAL")
    made.behaviour.write_text("s1-plus-1 hang\n")
    assert made.start("1", NODE_LOCAL=str(scratch)).returncode == 0
    assert "JOB DONE" in (made.job("reference") / "pw-1.out").read_text()
    os.environ["NODE_LOCAL"] = str(scratch)
    try:
        process = made.begin("2")
        settled(lambda: len(made.calls()) == 2)
        assert not (made.job("s1-plus-1") / "pw-1.out").exists()
        time.sleep(0.3)
        process.terminate()
        process.communicate(timeout=30)
    finally:
        del os.environ["NODE_LOCAL"]
    assert (made.job("s1-plus-1") / "pw-1.out").read_text().count("ATOMIC_POSITIONS") == 2
    assert list(scratch.iterdir()) == []
    assert not list(made.job("s1-plus-1").glob(".*"))


def test_resubmission_list_and_script(tmp_path):
    """A new pair of files for the named jobs, with what the user changed in submit.sh; the first pair untouched."""
    made = Made(tmp_path, "slurm", throttle=5, walltime="01:00:00")
    script = made.run / "submit.sh"
    script.write_text(script.read_text().replace("--time=01:00:00", "--time=05:00:00"))
    before = {p.name: p.read_bytes() for p in made.run.iterdir() if p.is_file()}
    (made.job("s1-plus-1") / "done").write_text("1\n")
    name, command = write_resubmission(made.run, made.plan, ["s1-plus-1"])
    assert (name, command) == ("joblist-2.txt", "sbatch submit-2.sh")
    assert (made.run / name).read_text() == "jobs/s1-plus-1\n"
    text = (made.run / "submit-2.sh").read_text()
    assert "#SBATCH --array=1-1%5\n" in text
    assert "#SBATCH --time=05:00:00\n" in text
    assert f"#SBATCH --job-name={made.plan.calculation['job_name'][:-1]}2\n" in text
    assert not (made.job("s1-plus-1") / "done").exists()
    assert {p.name: p.read_bytes() for p in made.run.iterdir() if p.name in before} == before
    assert made.start("1", script="submit-2.sh").returncode == 0
    assert made.calls() == ["s1-plus-1 pw-1.in"]
    assert write_resubmission(made.run, made.plan, ["reference"])[0] == "joblist-3.txt"


def test_no_resubmission_without_a_script(tmp_path):
    plan, _ = write_run(silicon_plan(), tmp_path / "run")
    with pytest.raises(InputError, match="has no job script"):
        write_resubmission(tmp_path / "run", plan, ["reference"])


FULL = {
    "account": "a1",
    "partition": "p1",
    "qos": "q1",
    "walltime": "1-02:03:04",
    "memory": "16GB",
    "nodes": 2,
    "tasks": 8,
    "threads": 2,
    "throttle": 10,
    "bundle": 3,
    "grace": 90,
    "modules": ["qe/7.2", "it's odd"],
    "setup": ["ulimit -s unlimited"],
    "launcher": "srun --mpi=pmix",
    "scratch": "/scratch/$USER",
    "parallel_environment": "mpi",
    "extra": ["--gres=gpu:1"],
}
EXPECTED = {
    "slurm": [
        "--account=a1", "--partition=p1", "--qos=q1", "--time=1-02:03:04", "--signal=B:TERM@90", "--mem=16G", "--nodes=2",
        "--ntasks=8", "--cpus-per-task=2", "--array=1-1%10", "--gres=gpu:1",
    ],
    "pbs": ["-A a1", "-q p1", "-l walltime=26:03:04", "-l select=2:ncpus=8:mpiprocs=4:ompthreads=2:mem=16gb", "-J 1-2%10"],
    "lsf": ["-P a1", "-q p1", "-W 26:04", "-M 16GB", "-n 16", '-R "span[ptile=8]"', "-wa TERM", "-wt 2"],
    "sge": ["-P a1", "-q p1", "-l h_rt=26:03:04", "-l h_vmem=16G", "-pe mpi 16", "-tc 10", "-t 1-1", "-notify"],
}  # fmt: skip
MARK = {"slurm": "#SBATCH ", "pbs": "#PBS ", "lsf": "#BSUB ", "sge": "#$ "}


def script(tmp_path: Path, scheduler: str, deck: str = "qe", **site) -> str:
    plan = silicon_plan()
    crystal = plan.crystal
    settings = Settings(
        pseudopotentials={"Si": "Si file.upf"}, folder="/opt/pseudo", site=Settings().site | site, deck={"kmesh": [2, 2, 2]}
    )
    calculation = plan_calculation(deck, crystal, "ions", settings)
    out = tmp_path / f"run-{scheduler}-{deck}-{len(site)}"
    write_run(plan, out, calculation=calculation, scheduler=scheduler)
    return (out / "submit.sh").read_text()


@pytest.mark.parametrize("scheduler", MARK)
def test_every_site_setting_has_its_line(tmp_path, scheduler):
    text = script(tmp_path, scheduler, **FULL)
    for line in EXPECTED[scheduler]:
        assert f"{MARK[scheduler]}{line}\n" in text
    for line in (
        "module load qe/7.2\n",
        "OMP_NUM_THREADS=2\n",
        "ulimit -s unlimited\n",
        "srun --mpi=pmix pw.x -in",
        "cores=16\n",
    ):
        assert line in text


@pytest.mark.parametrize("scheduler", MARK)
def test_a_setting_that_is_not_there_leaves_no_line(tmp_path, scheduler):
    text = script(tmp_path, scheduler)
    lines = [line for line in text.splitlines() if line.startswith(MARK[scheduler].strip())]
    words = {
        "slurm": {"job-name", "array", "output", "open-mode", "nodes", "ntasks", "cpus-per-task"},
        "pbs": {"N", "J", "j", "o", "l"},
        "lsf": {"J", "o", "n", "R"},
        "sge": {"N", "t", "S", "cwd", "j", "o", "notify"},
    }[scheduler]
    assert {re.search(r"--?([\w-]+)", line)[1] for line in lines} == words
    for word in ("module load", "None", "scratch", "{{", "{%"):
        assert word not in text


@pytest.mark.parametrize("scheduler", SCHEDULERS)
def test_shellcheck_has_nothing_to_say(need, tmp_path, scheduler):
    need("shellcheck")
    paths = []
    # what differs between decks does not differ between schedulers
    for deck in DECK_NAMES if scheduler == "bash" else ["qe"]:
        for site in ({}, FULL):
            paths.append(write(tmp_path, f"{deck}-{len(site)}.sh", script(tmp_path, scheduler, deck, **site)))
            assert subprocess.run(["bash", "-n", str(paths[-1])]).returncode == 0
    done = subprocess.run(["shellcheck", "--severity=style", *map(str, paths)], capture_output=True, text=True)
    assert done.returncode == 0, done.stdout


def test_more_than_one_process_is_started_by_mpirun_when_no_launcher_is_named(tmp_path):
    assert "mpirun -np 4 pw.x -in" in script(tmp_path, "pbs", tasks=4)


def test_unknown_scheduler(tmp_path):
    with pytest.raises(UsageError, match="unknown scheduler 'cron'"):
        script(tmp_path, "cron")


def test_queue_names():
    assert job_name("2-aminobenzoic acid", "0a1b2c", 1) == "job-0a1b2c-1"
    assert job_name("urea-III", "0a1b2c", 12) == "urea-0a1b2c-12"
    assert len(job_name("anything", "0a1b2c", 99)) <= 15


def test_variable_cell_folder(tmp_path):
    crystal = silicon_plan().crystal
    settings = Settings(pseudopotentials={"Si": "Si.upf"})
    out = tmp_path / "cell"
    record = write_relaxation(plan_calculation("qe", crystal, "cell", settings), out, "slurm")
    assert (out / "joblist.txt").read_text() == ".\n"
    assert (out / "logs").is_dir()
    assert "'vc-relax'" in (out / "pw.in").read_text()
    assert set(record["files"]) == {"pw.in", "joblist.txt", "submit.sh"}
    with pytest.raises(InputError, match="exists already"):
        write_relaxation(plan_calculation("qe", crystal, "cell", settings), out)


def test_the_manifest_keeps_how_the_jobs_are_computed(made):
    kept = load_plan(made.run).calculation
    assert kept == made.plan.calculation
    assert kept["deck"] == "qe"
    assert kept["settings"]["ecutwfc"] == 80.0
    assert kept["pseudopotentials"] == {"Si": "Si.upf"}
    assert kept["kspacing_per_A"] == 0.5
    assert kept["submit"] == "bash submit.sh all"
    assert (made.run / "logs").is_dir()
