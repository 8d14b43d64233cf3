"""Where every job of a run stands: from its files, and from the scheduler's answer where there is one."""

from __future__ import annotations

from collections import Counter
from collections.abc import Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from strainkit.collect.gather import collect_run
from strainkit.collect.table import StressRecord, StressTable
from strainkit.design.cost import job_costs
from strainkit.findings import Finding
from strainkit.run.attempts import Attempts, read_attempts
from strainkit.run.plan import Plan, job_folder
from strainkit.run.queues import Queued

__all__ = ["STATES", "JobState", "Progress", "read_progress"]

#: state -> (meaning, whether running it again can help)
STATES: dict[str, tuple[str, bool]] = {
    "done": ("finished, converged, and of the planned cell", False),
    "running": ("under way", False),
    "queued": ("waits in the queue", False),
    "missing": ("not begun, or waiting in the queue", True),
    "stopped": ("ended before it finished: time limit, kill, node; goes on from its last ionic step", True),
    "failed": ("the program ended by itself without a result: look into its output first", True),
    "unfinished": ("the output has no end-of-job mark or no stress", True),
    "unconverged": ("electronic steps or ions not converged; goes on from its last ionic step", True),
    "broken": ("the output cannot be read or holds impossible numbers", True),
    "unread": ("finished by the program's own marks, but no output here that strainkit reads", False),
    "mismatch": ("the output is of another cell or crystal: not mended by running it again", False),
    "suspect": ("finished, but a check of the whole set refuses its numbers: see the findings", False),
}


@dataclass(frozen=True)
class JobState:
    """State of one job: a key of `STATES`, the record of what came back, and what the job script noted."""

    state: str
    record: StressRecord
    attempts: Attempts


@dataclass(frozen=True)
class Progress:
    """States of all jobs of a run, in the order of the plan.

    Attributes
    ----------
    jobs : tuple of JobState
    asked : bool
        Whether the scheduler was asked, so that a missing job is one that does not wait in the queue.
    findings : tuple of Finding
        About the set as a whole.
    core_hours_used, core_hours_left : float or None
        None where no job script kept the time. What is left is estimated from the finished jobs (the reference alone, if
        no other is finished) and the symmetry that each strained cell loses.
    """

    jobs: tuple[JobState, ...]
    asked: bool
    core_hours_used: float | None
    core_hours_left: float | None
    findings: tuple[Finding, ...] = ()

    @property
    def table(self) -> StressTable:
        """The stress table as it would be collected now."""
        return StressTable(tuple(job.record for job in self.jobs), self.findings)

    @property
    def counts(self) -> dict[str, int]:
        """Jobs a state, in the order of `STATES`, states without a job left out."""
        found = Counter(job.state for job in self.jobs)
        return {state: found[state] for state in STATES if found[state]}

    @property
    def resubmit(self) -> tuple[str, ...]:
        """Labels of the jobs that are neither done nor queued nor running and that another run can help."""
        return tuple(job.record.label for job in self.jobs if STATES[job.state][1])

    def to_dict(self) -> dict[str, Any]:
        """JSON-ready dictionary: the stress table with a state a job, counts, labels to resubmit, core hours."""
        data = self.table.to_dict()
        for record, job in zip(data["records"], self.jobs, strict=True):
            record |= {"state": job.state, "attempts": job.attempts.count, "core_hours": job.attempts.core_hours}
        return data | {
            "schema": "strainkit/progress/1",
            "states": self.counts,
            "resubmit": list(self.resubmit),
            "scheduler_asked": self.asked,
            "core_hours_used": self.core_hours_used,
            "core_hours_left": self.core_hours_left,
        }


def read_progress(run: Path, plan: Plan, queued: Mapping[str, Queued] | None = None) -> Progress:
    """Judge every job of a run.

    Parameters
    ----------
    run : path
        Run folder.
    plan : Plan
        Its plan.
    queued : mapping, optional
        Job folder -> "queued" or "running", when the scheduler was asked: what is not in it does not run.
    """
    jobs = []
    table = collect_run(run, plan)
    for record in table.records:
        attempts = read_attempts(run / job_folder(record.label))
        asked = None if queued is None else queued.get(job_folder(record.label), "")
        jobs.append(JobState(_state(record, attempts, asked), record, attempts))
    used, left = _core_hours(plan, jobs)
    return Progress(tuple(jobs), queued is not None, used, left, table.findings)


def _state(record: StressRecord, attempts: Attempts, asked: str | None) -> str:
    """State of a job; `asked` is the scheduler's word, empty when it does not know the job, None when not asked."""
    if record.status == "done":
        return "done"
    if asked in ("queued", "running"):
        return asked
    if attempts.alive and not attempts.ended and (asked is None or not attempts.scheduled):
        return "running"
    if record.status == "missing" and attempts.done_mark:
        return "unread"
    if record.status not in ("missing", "unfinished") and not (record.status == "broken" and attempts.ended != "done"):
        return record.status
    if attempts.count == 0:
        unknown = record.status == "missing" and any(f.code == "unreadable-output" for f in record.findings)
        return "broken" if unknown else record.status
    if attempts.ended == "failed":
        return "failed"
    return "unfinished" if attempts.ended == "done" else "stopped"


def _core_hours(plan: Plan, jobs: list[JobState]) -> tuple[float | None, float | None]:
    if not any(job.attempts.count for job in jobs):
        return None, None
    used = sum(job.attempts.core_hours for job in jobs)
    cost = [job.lost for job in job_costs(plan.jobs, plan.crystal, plan.symmetry)]
    finished = [i for i, job in enumerate(jobs) if job.state == "done" and job.attempts.last_core_hours > 0]
    strained = [i for i in finished if cost[i] != cost[0] or i > 0]
    base = strained or finished
    if not base:
        return used, None
    hour = sum(jobs[i].attempts.last_core_hours for i in base) / sum(cost[i] for i in base)
    return used, hour * sum(cost[i] for i, job in enumerate(jobs) if job.state not in ("done", "unread", "mismatch", "suspect"))
