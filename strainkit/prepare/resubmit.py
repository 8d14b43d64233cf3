"""A further submission for some jobs of a run: a new list and a new script; those submitted before stay as they are."""

from __future__ import annotations

import re
from collections.abc import Sequence
from pathlib import Path

from strainkit.errors import InputError
from strainkit.prepare.scripts import list_name, script_name, submit_command
from strainkit.run.attempts import DONE_MARK
from strainkit.run.files import atomic_write
from strainkit.run.plan import Plan, job_folder

__all__ = ["next_submission", "write_resubmission"]

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
    scheduler = str(plan.calculation.get("scheduler", ""))
    if scheduler not in _ARRAYS:
        raise InputError("this run has no job script", run, "Prepare it with --deck and --scheduler.")
    first = run / script_name(1)
    try:
        text = first.read_text(encoding="utf-8")
    except (OSError, UnicodeDecodeError) as error:
        raise InputError(f"cannot be read ({error})", first) from None
    number = next_submission(run)
    bundle = re.search(r"^bundle=(\d+)$", text, re.M)
    tasks = -(-len(labels) // (int(bundle[1]) if bundle else 1))
    pattern, size = _ARRAYS[scheduler]
    old_name = str(plan.calculation["job_name"])
    changes = [
        (pattern, size.format(tasks=tasks, pbs_tasks=max(2, tasks))),
        (r"^list=joblist\.txt$", f"list={list_name(number)}"),
        (r"\bsubmit\.sh\b", script_name(number)),
        (rf"\b{re.escape(old_name)}(?=$|\[)", f"{old_name.rpartition('-')[0]}-{number}"),
    ]
    for what, by in changes:
        text, count = re.subn(what, by, text, flags=re.M)
        if not count and not (scheduler == "bash" and what in (pattern, changes[3][0])):
            raise InputError(f"the line that matches {what} is gone", first, "Restore it, or write the next by hand.")
    for label in labels:  # a job whose mark is wrong would be passed over
        (run / job_folder(label) / DONE_MARK).unlink(missing_ok=True)
    atomic_write(run / list_name(number), "".join(f"{job_folder(label)}\n" for label in labels))
    atomic_write(run / script_name(number), text)
    return list_name(number), submit_command(scheduler, number)
