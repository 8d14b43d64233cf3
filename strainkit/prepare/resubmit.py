"""A further submission for some jobs of a run: a new list and a new script; those submitted before stay as they are."""

from __future__ import annotations

import re
from collections.abc import Mapping, Sequence
from pathlib import Path
from typing import Any

from strainkit.errors import InputError
from strainkit.prepare.scripts import LOGS, arrays, list_name, script_name, submit_command
from strainkit.run.attempts import DONE_MARK
from strainkit.run.files import atomic_write
from strainkit.run.plan import Plan, job_folder

__all__ = ["next_submission", "resubmit", "write_resubmission"]

#: scheduler -> its line that sizes the array: (pattern, replacement)
_ARRAYS = {
    "slurm": (r"^(#SBATCH --array=1-)\d+", r"\g<1>{tasks}"),
    "pbs": (r"^(#PBS -J 1-)\d+", r"\g<1>{pbs_tasks}"),
    "lsf": (r'^(#BSUB -J ".*\[1-)\d+', r"\g<1>{tasks}"),
    "sge": (r"^(#\$ -t 1-)\d+", r"\g<1>{tasks}"),
    "bash": (r"^()$", ""),
}


def next_submission(run: Path) -> int:
    """Number of the next submission of a run, 2 being the first resubmission."""
    number = 2
    while (run / list_name(number)).exists() or (run / script_name(number)).exists():
        number += 1
    return number


def write_resubmission(run: Path, plan: Plan, labels: Sequence[str]) -> tuple[str, str]:
    """Write the list and the script of some jobs. The script is the run's submit.sh with what the user changed in it.

    Returns
    -------
    list_file : str
        Name of the new list, relative to the run folder.
    command : str
        What the user types inside the run folder.

    Raises
    ------
    InputError
        When the run has no job script, or it was changed beyond recognition.
    """
    names, command = resubmit(run, plan.calculation, [job_folder(label) for label in labels])
    return " ".join(names), command


def resubmit(place: Path, calculation: Mapping[str, Any], folders: Sequence[str]) -> tuple[list[str], str]:
    """The same for job folders relative to a run or campaign, one list and script for every array that the site allows.

    Parameters
    ----------
    place : path
        Run folder or campaign.
    calculation : mapping
        "scheduler", "job_name" and "site" of its first submission.
    folders : sequence of str
    """
    scheduler = str(calculation.get("scheduler", ""))
    if scheduler not in _ARRAYS:
        raise InputError("this run has no job script", place, "Prepare it with --deck and --scheduler.")
    first = place / script_name(1)
    try:
        text = first.read_text(encoding="utf-8")
    except (OSError, UnicodeDecodeError) as error:
        raise InputError(f"cannot be read ({error})", first) from None
    found = re.search(r"^bundle=(\d+)$", text, re.M)
    bundle = int(found[1]) if found else 1
    start = next_submission(place)
    parts = arrays(folders, scheduler, {**calculation.get("site", {}), "bundle": bundle})
    files: dict[str, str] = {}
    for number, part in enumerate(parts, start):
        tasks = -(-len(part) // bundle)
        files[list_name(number)] = "".join(f"{folder}\n" for folder in part)
        files[script_name(number)] = _renumbered(text, scheduler, str(calculation["job_name"]), tasks, number, first)
    for folder in folders:  # a job whose mark is wrong would be passed over
        (place / folder / DONE_MARK).unlink(missing_ok=True)
    numbers = range(start, start + len(parts))
    if f"{LOGS}/1/" in text:
        for number in numbers:
            (place / LOGS / str(number)).mkdir(parents=True, exist_ok=True)
    for name, content in files.items():
        atomic_write(place / name, content)
    return [list_name(number) for number in numbers], submit_command(scheduler, start, len(parts))


def _renumbered(text: str, scheduler: str, job_name: str, tasks: int, number: int, first: Path) -> str:
    """The first script for another list; raises an InputError when the user changed it beyond recognition."""
    pattern, size = _ARRAYS[scheduler]
    changes = [
        (pattern, size.format(tasks=tasks, pbs_tasks=max(2, tasks))),
        (r"^list=joblist\.txt$", f"list={list_name(number)}"),
        (r"(?<!/)\bsubmit\.sh\b", script_name(number)),  # not the runs' own scripts
        (rf"\b{re.escape(job_name)}(?=$|\[)", f"{job_name.rpartition('-')[0]}-{number}"),
        (rf"\b{LOGS}/1/", f"{LOGS}/{number}/"),
    ]
    for what, by in changes:
        text, count = re.subn(what, by, text, flags=re.M)
        optional = [changes[4][0], *((pattern, changes[3][0]) if scheduler == "bash" else ())]
        if not count and what not in optional:
            raise InputError(f"the line that matches {what} is gone", first, "Restore it, or write the next by hand.")
    return text
