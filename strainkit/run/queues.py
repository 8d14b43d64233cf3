"""Asking a scheduler which tasks of a run wait and which run. Nothing is changed by asking."""

from __future__ import annotations

import json
import re
import subprocess
from collections.abc import Callable, Iterable
from dataclasses import dataclass
from getpass import getuser
from pathlib import Path
from textwrap import shorten
from typing import Literal
from xml.etree import ElementTree

from strainkit.errors import InputError

__all__ = ["QUEUES", "Queued", "ask_queue"]

Queued = Literal["queued", "running"]
#: (name in the queue, index in the array, state)
_Task = tuple[str, int, Queued]


@dataclass(frozen=True)
class Queue:
    """The command that lists a user's tasks, and what its answer means."""

    command: tuple[str, ...]
    tasks: Callable[[str], Iterable[_Task]]


_SLURM_STATES: dict[str, Queued] = {
    **dict.fromkeys(("PENDING", "CONFIGURING", "REQUEUED", "REQUEUE_FED", "REQUEUE_HOLD", "SPECIAL_EXIT"), "queued"),
    **dict.fromkeys(("RUNNING", "COMPLETING", "SUSPENDED", "STOPPED", "SIGNALING", "STAGE_OUT", "RESIZING"), "running"),
}


def _slurm(answer: str) -> Iterable[_Task]:
    """`squeue -h -r -o %j|%K|%T`: name, array index, state in words."""
    for line in answer.splitlines():
        name, index, state = line.split("|")
        if index.isdigit() and state in _SLURM_STATES:
            yield name, int(index), _SLURM_STATES[state]


def _pbs(answer: str) -> Iterable[_Task]:
    """`qstat -t -f -F json` of OpenPBS: sub-jobs are named 123[4].server; F and X are over."""
    for identifier, job in dict(json.loads(answer or "{}").get("Jobs", {})).items():
        index = re.search(r"\[(\d+)\]", identifier)
        state = str(job.get("job_state", ""))
        if index and state not in ("F", "X", "E"):
            yield str(job.get("Job_Name", "")), int(index[1]), "running" if state in ("R", "S", "U") else "queued"


def _lsf(answer: str) -> Iterable[_Task]:
    """`bjobs -noheader -o "job_name jobindex stat delimiter='|'"`."""
    for line in answer.splitlines():
        name, index, state = (part.strip() for part in line.split("|"))
        if index.isdigit() and state in ("PEND", "RUN", "PSUSP", "USUSP", "SSUSP", "WAIT", "PROV"):
            yield name.split("[")[0], int(index), "queued" if state in ("PEND", "PSUSP", "WAIT") else "running"


def _sge(answer: str) -> Iterable[_Task]:
    """`qstat -xml -g d`: one job_list element a task."""
    for job in ElementTree.fromstring(answer).iter("job_list"):
        name, index = job.findtext("JB_name", ""), job.findtext("tasks", "")
        if index.isdigit():
            yield name, int(index), "running" if job.get("state") == "running" else "queued"


#: scheduler -> how it is asked; {user} is filled in
QUEUES: dict[str, Queue] = {
    "slurm": Queue(("squeue", "-h", "-r", "-u", "{user}", "-o", "%j|%K|%T"), _slurm),
    "pbs": Queue(("qstat", "-t", "-f", "-F", "json"), _pbs),
    "lsf": Queue(("bjobs", "-noheader", "-o", "job_name jobindex stat delimiter='|'"), _lsf),
    "sge": Queue(("qstat", "-xml", "-g", "d", "-u", "{user}"), _sge),
}


def ask_queue(run: Path, scheduler: str, job_name: str) -> dict[str, Queued]:
    """Job folders of a run that wait or run: folder (relative to the run folder) -> state.

    Parameters
    ----------
    run : path
        Run folder.
    scheduler : str
        A key of `QUEUES`.
    job_name : str
        Name of the first submission in the queue; those of resubmissions end in their number instead of 1.

    Raises
    ------
    InputError
        When the scheduler cannot be asked here.
    """
    if scheduler not in QUEUES:
        raise InputError(f"there is no queue to ask for a script of kind {scheduler!r}", run)
    queue = QUEUES[scheduler]
    command = [part.format(user=getuser()) for part in queue.command]
    try:
        done = subprocess.run(command, capture_output=True, text=True, timeout=60, check=False)
        if done.returncode != 0:
            raise OSError(shorten(done.stderr, 200, placeholder=" ...") or f"exit code {done.returncode}")
        tasks = list(queue.tasks(done.stdout))
    except (OSError, subprocess.TimeoutExpired, ValueError, ElementTree.ParseError) as error:
        raise InputError(
            f"{command[0]} cannot be asked ({error})", "--queue", "Run this where the scheduler's commands work."
        ) from None
    stem = job_name.rpartition("-")[0]
    found: dict[str, Queued] = {}
    for name, index, state in tasks:
        head, _, number = name.rpartition("-")
        if head == stem and number.isdigit():
            for folder in _folders(run, int(number), index):
                # a job that runs in one submission and waits in another runs
                found[folder] = "running" if "running" in (state, found.get(folder)) else "queued"
    return found


def _folders(run: Path, number: int, index: int) -> list[str]:
    """Job folders of one task of a submission."""
    suffix = "" if number == 1 else f"-{number}"
    try:
        lines = (run / f"joblist{suffix}.txt").read_text(encoding="utf-8").split()
        script = (run / f"submit{suffix}.sh").read_text(encoding="utf-8")
    except OSError:
        return []
    bundle = re.search(r"^bundle=(\d+)$", script, re.M)
    size = int(bundle[1]) if bundle else 1
    return lines[(index - 1) * size : index * size]
