"""Answers of schedulers: Slurm's form as its squeue prints it, the others as their manuals show them."""

from __future__ import annotations

import os

import pytest

from strainkit.errors import InputError
from strainkit.run.queues import ask_queue

ANSWERS = {
    "slurm": (
        "squeue",
        "si-0a1b2c-1|2|RUNNING\nsi-0a1b2c-1|3|PENDING\nother|4|RUNNING\nsi-0a1b2c-1|N/A|PENDING\nsi-0a1b2c-1|1|COMPLETED\n"
        "si-0a1b2c-2|1|PENDING\n",
    ),
    "pbs": (
        "qstat",
        '{"Jobs": {"7[].s": {"Job_Name": "si-0a1b2c-1", "job_state": "B"},'
        '"7[1].s": {"Job_Name": "si-0a1b2c-1", "job_state": "X"},'
        '"7[2].s": {"Job_Name": "si-0a1b2c-1", "job_state": "R"}, "7[3].s": {"Job_Name": "si-0a1b2c-1", "job_state": "Q"},'
        '"9[1].s": {"Job_Name": "si-0a1b2c-2", "job_state": "H"}, "8.s": {"Job_Name": "x", "job_state": "R"}}}',
    ),
    "lsf": (
        "bjobs",
        "si-0a1b2c-1[1]|1|DONE\nsi-0a1b2c-1[2]|2|RUN\nsi-0a1b2c-1[3]|3|PEND\nother|0|RUN\nsi-0a1b2c-2[1]|1|PEND\n",
    ),
    "sge": (
        "qstat",
        "<?xml version='1.0'?><job_info><queue_info><job_list state='running'><JB_name>si-0a1b2c-1</JB_name><tasks>2</tasks>"
        "</job_list></queue_info><job_info><job_list state='pending'><JB_name>si-0a1b2c-1</JB_name><tasks>3</tasks></job_list>"
        "<job_list state='pending'><JB_name>si-0a1b2c-2</JB_name><tasks>1</tasks></job_list>"
        "<job_list state='pending'><JB_name>other</JB_name></job_list></job_info></job_info>",
    ),
}


@pytest.fixture
def run(tmp_path):
    (tmp_path / "joblist.txt").write_text("jobs/a\njobs/b\njobs/c\njobs/d\n")
    (tmp_path / "submit.sh").write_text("x\nbundle=1\n")
    (tmp_path / "joblist-2.txt").write_text("jobs/d\njobs/e\njobs/b\n")
    (tmp_path / "submit-2.sh").write_text("x\nbundle=3\n")
    return tmp_path


def answer(tmp_path, monkeypatch, program, text, code=0):
    folder = tmp_path / "bin"
    folder.mkdir()
    (folder / "text").write_text(text)
    (folder / program).write_text(f'#!/bin/sh\necho "$@" >{folder}/asked\ncat {folder}/text\nexit {code}\n')
    (folder / program).chmod(0o755)
    monkeypatch.setenv("PATH", f"{folder}:{os.environ['PATH']}")
    return folder / "asked"


@pytest.mark.parametrize("scheduler", ANSWERS)
def test_which_jobs_wait_and_run(run, tmp_path, monkeypatch, scheduler):
    """Task 2 of the first submission runs, task 3 waits; the only task of the second holds three jobs, one running already."""
    answer(tmp_path, monkeypatch, *ANSWERS[scheduler])
    assert ask_queue(run, scheduler, "si-0a1b2c-1") == {
        "jobs/b": "running",
        "jobs/c": "queued",
        "jobs/d": "queued",
        "jobs/e": "queued",
    }


@pytest.mark.parametrize(("text", "code"), [("", 1), ("not|what|we|expect", 0), ("a", 0)])
def test_an_answer_that_cannot_be_used(run, tmp_path, monkeypatch, text, code):
    answer(tmp_path, monkeypatch, "squeue", text, code)
    with pytest.raises(InputError, match="squeue cannot be asked"):
        ask_queue(run, "slurm", "si-0a1b2c-1")


def test_a_long_complaint_of_the_scheduler_ends_with_a_word(run, tmp_path, monkeypatch):
    words = [f"complaint{i}" for i in range(40)]  # invented
    script = tmp_path / "bin" / "squeue"
    script.parent.mkdir(exist_ok=True)
    script.write_text(f"#!/bin/sh\necho {' '.join(words)} >&2\nexit 1\n")
    script.chmod(0o755)
    monkeypatch.setenv("PATH", f"{script.parent}:/usr/bin:/bin")
    with pytest.raises(InputError, match=r"complaint0 .*complaint\d+ \.\.\.\)") as caught:
        ask_queue(run, "slurm", "si-0a1b2c-1")
    assert set(caught.value.what.partition("(")[2].removesuffix(" ...)").split()) <= set(words)


def test_no_scheduler_here(run, monkeypatch):
    monkeypatch.setenv("PATH", "/nowhere")
    with pytest.raises(InputError, match="bjobs cannot be asked"):
        ask_queue(run, "lsf", "si-0a1b2c-1")
    with pytest.raises(InputError, match="no queue to ask"):
        ask_queue(run, "bash", "si-0a1b2c-1")
