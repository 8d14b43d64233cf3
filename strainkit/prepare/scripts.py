"""Job scripts: one array over a list file, for Slurm, PBS, LSF, Grid Engine, or plain bash. Nothing is ever submitted."""

from __future__ import annotations

import re
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any

from strainkit.crystal.crystal import Crystal
from strainkit.errors import UsageError
from strainkit.prepare.calculation import Calculation
from strainkit.prepare.decks import Deck, render
from strainkit.prepare.settings import seconds
from strainkit.shipped import shipped_folder

__all__ = [
    "LOGS",
    "SCHEDULERS",
    "arrays",
    "check_scheduler",
    "first_submission",
    "job_name",
    "list_name",
    "many_files",
    "script_name",
    "submit_command",
]

#: folder of the schedulers' own logs, beside the script
LOGS = "logs"
#: tasks of one array where the site says nothing: what Slurm and LSF allow unless they are told otherwise
_ARRAY_LIMIT = 1000


@dataclass(frozen=True)
class Scheduler:
    """How a script is handed over, and whether it has to watch the time limit by itself."""

    name: str
    submit: str
    own_timer: bool = False


#: name -> how; each has a template jobs/NAME.sh
SCHEDULERS: dict[str, Scheduler] = {
    "slurm": Scheduler("Slurm", "sbatch {script}"),
    "pbs": Scheduler("PBS (OpenPBS, PBS Professional)", "qsub {script}", own_timer=True),
    "lsf": Scheduler("LSF", "bsub < {script}"),
    "sge": Scheduler("Grid Engine", "qsub {script}", own_timer=True),
    "bash": Scheduler("no scheduler", "bash {script} all"),
}


def check_scheduler(name: str) -> None:
    """Refuse a scheduler that has no template."""
    if name not in SCHEDULERS:
        raise UsageError(f"unknown scheduler {name!r}", "--scheduler", f"Choose from {', '.join(SCHEDULERS)}.")


def script_name(number: int) -> str:
    """Name of the script of a submission, the first being 1."""
    return "submit.sh" if number == 1 else f"submit-{number}.sh"


def list_name(number: int) -> str:
    """Name of the list of job folders of a submission."""
    return "joblist.txt" if number == 1 else f"joblist-{number}.txt"


def submit_command(scheduler: str, number: int = 1, count: int = 1) -> str:
    """What the user types inside the run folder for `count` submissions from a number on."""
    if count == 1:
        return SCHEDULERS[scheduler].submit.format(script=script_name(number))
    names = [script_name(n) for n in range(number, number + count)]
    if count > 3:
        first = names[:1] if number == 1 else []
        names = [*first, f"submit-{{{number + len(first)}..{number + count - 1}}}.sh"]
    every = SCHEDULERS[scheduler].submit.format(script='"$script"')
    return f"for script in {' '.join(names)}; do {every}; done"


def arrays(folders: Sequence[str], scheduler: str, site: Mapping[str, Any]) -> list[Sequence[str]]:
    """Job folders of each array: as many as the site's limit allows. Without a scheduler there is one list."""
    size = (site.get("array_limit") or _ARRAY_LIMIT) * (site.get("bundle") or 1)
    if scheduler == "bash":
        size = max(1, len(folders))
    return [folders[start : start + size] for start in range(0, len(folders), size)]


def job_name(crystal: str, tag: str, number: int) -> str:
    """Name in the queue, 15 characters at most (some PBS allow no more), a letter first; tag and number tell the set."""
    word = re.sub(r"[^A-Za-z0-9]", "", crystal)[:4]
    return f"{word if word[:1].isalpha() else 'job'}-{tag}-{number}"


def first_submission(
    scheduler: str, calculation: Calculation, crystal: Crystal, folders: Sequence[str], tag: str
) -> tuple[dict[str, str], dict[str, Any]]:
    """Script and list file of a set (name -> text), and what the manifest keeps of them.

    Parameters
    ----------
    scheduler : str
    calculation : Calculation
    crystal : Crystal
        The reference.
    folders : sequence of str
        Job folders in the order in which they run.
    tag : str
        Six characters that tell this set from others in a queue.
    """
    check_scheduler(scheduler)
    site = calculation.settings.site
    fields = calculation.fields(crystal, crystal.name)
    parts = arrays(folders, scheduler, site)
    files: dict[str, str] = {}
    for number, part in enumerate(parts, 1):
        name = job_name(crystal.name, tag, number)
        files |= script_files(scheduler, calculation.deck, fields, site, part, name, number)
    return files, {
        "scheduler": scheduler,
        "site": kept_site(site),
        "job_name": job_name(crystal.name, tag, 1),
        "submit": submit_command(scheduler, 1, len(parts)),
    }


def kept_site(site: Mapping[str, Any]) -> dict[str, Any]:
    """The [site] table without the keys that say nothing."""
    return {key: value for key, value in site.items() if value not in (None, [], ())}


def many_files(
    scheduler: str, site: Mapping[str, Any], title: str, folders: Sequence[str], name: str, number: int
) -> dict[str, str]:
    """The list file and the script of one submission for jobs of many runs, each of which has its own script.

    Parameters are those of `script_files`; folders are relative to the campaign.
    """
    everything = {
        **_common(scheduler, site, len(folders), name, number),
        "title": title,
        "body": "many.sh",
        "logs": f"{LOGS}/{number}",
    }
    return _with_list(scheduler, everything, folders, number)


def script_files(
    scheduler: str,
    deck: Deck,
    fields: Mapping[str, Any],
    site: Mapping[str, Any],
    folders: Sequence[str],
    name: str,
    number: int = 1,
) -> dict[str, str]:
    """The list file and the script of one submission: name -> text.

    Parameters
    ----------
    scheduler : str
        A key of `SCHEDULERS`.
    deck : Deck
        Whose steps the script follows.
    fields : mapping
        Template fields of the reference job.
    site : mapping
        The [site] table, every key present.
    folders : sequence of str
        Job folders, relative to the run folder, in the order in which they run.
    name : str
        Name in the queue.
    number : int
        1 for the first submission, more for resubmissions.
    """
    check_scheduler(scheduler)
    if deck.steps is None:
        raise UsageError(f"the deck {deck.name} has no steps.sh", "--scheduler", "Copy one from a shipped deck.")
    launcher = site["launcher"] or (f"mpirun -np {site['tasks']}" if site["tasks"] > 1 else "")
    launch = f"{launcher} {site['command'] or deck.program['command']}".strip()
    inside = {**fields, "launch": launch, "site": site}
    everything = {
        **inside,
        **_common(scheduler, site, len(folders), name, number),
        "body": "job.sh",
        "logs": LOGS,
        "steps": render(deck.steps, inside).strip(),
        "keep": deck.program.get("keep", "*"),
    }
    return _with_list(scheduler, everything, folders, number)


def _common(scheduler: str, site: Mapping[str, Any], jobs: int, name: str, number: int) -> dict[str, Any]:
    """Fields of every script."""
    walltime = seconds(site["walltime"]) if site["walltime"] else 0
    minutes = -(-walltime // 60)
    tasks_a_node = -(-site["tasks"] // site["nodes"])
    return {
        "site": site,
        "joblist": list_name(number),
        "script": script_name(number),
        "submit": submit_command(scheduler, number),
        "job_name": name,
        "tasks": -(-jobs // site["bundle"]),
        "cores": site["tasks"] * site["threads"],
        "tasks_a_node": tasks_a_node,
        "cores_a_node": tasks_a_node * site["threads"],
        "walltime_hms": f"{walltime // 3600:02d}:{walltime // 60 % 60:02d}:{walltime % 60:02d}",
        "walltime_hm": f"{minutes // 60:02d}:{minutes % 60:02d}",
        "grace_minutes": max(1, -(-site["grace"] // 60)),
        "timer": max(1, walltime - site["grace"]) if walltime and SCHEDULERS[scheduler].own_timer else 0,
    }


def _with_list(scheduler: str, fields: Mapping[str, Any], folders: Sequence[str], number: int) -> dict[str, str]:
    text = render(shipped_folder("templates") / "jobs" / f"{scheduler}.sh", fields)
    return {list_name(number): "".join(f"{folder}\n" for folder in folders), script_name(number): text}
