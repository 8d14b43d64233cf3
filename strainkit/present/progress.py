"""Where the jobs of a run stand, and what to do next."""

from __future__ import annotations

import shlex
from collections import Counter
from collections.abc import Mapping
from pathlib import Path

from strainkit.collect.progress import STATES, JobState, Progress
from strainkit.present.text import columns, findings_text, heading, paragraph
from strainkit.run.plan import Plan

__all__ = ["progress_text"]


def progress_text(progress: Progress, run: Path, plan: Plan, written: Mapping[str, str] | None) -> str:
    """Counts a state, jobs that need attention, core hours, and what to resubmit and how."""
    total = len(progress.jobs)
    lines = [heading(f"{len(progress.table.usable)} of {total} jobs usable")]
    found = Counter((job.state, _meaning(job, progress.asked)) for job in progress.jobs)
    for (state, meaning), count in sorted(found.items(), key=lambda item: list(STATES).index(item[0][0])):
        lines.append(paragraph(f"{state:12s}{count:4d}  {meaning}", "  "))
    rows = [
        [job.record.label, job.state, str(job.attempts.count), f"{job.attempts.core_hours:.2f}", _last(job.attempts.ended)]
        for job in progress.jobs
        if job.attempts.count and job.state != "done"
    ]
    if rows:
        lines += ["", columns(rows, ["job", "state", "attempts", "core hours", "last ended"], 2)]
    if progress.core_hours_used is not None:
        left = "unknown until a job is done"
        if progress.core_hours_left is not None:
            left = f"about {progress.core_hours_left:.3g}"
        lines += ["", f"  core hours used {progress.core_hours_used:.3g}, left {left}"]
    lines += _next_steps(progress, run, plan, written)
    return "\n".join(
        [*lines, "", findings_text([*progress.findings, *(f for job in progress.jobs for f in job.record.findings)])]
    )


def _meaning(job: JobState, asked: bool) -> str:
    """What its state means."""
    if job.state == "missing" and asked:
        return "neither begun nor in the queue"
    return job.record.meaning if job.state == "done" else STATES[job.state][0]


def _last(ended: str) -> str:
    return ended or "no word"


def _next_steps(progress: Progress, run: Path, plan: Plan, written: Mapping[str, str] | None) -> list[str]:
    again = progress.resubmit
    if not again:
        return []
    lines = ["", paragraph(f"to run again: {' '.join(again)}", "  ")]
    place = shlex.quote(str(run))
    if written:
        lines += [f"  wrote {written['list']}; submit it yourself:", f"    cd {place} && {written['submit']}"]
        lines.append("    (options on that command line override those inside the script)")
    elif "scheduler" in plan.calculation:
        ask = "" if progress.asked or plan.calculation["scheduler"] == "bash" else " --queue"
        lines += ["  to write a list and a script for these jobs:", f"    strainkit progress {place}{ask} --resubmit"]
    return lines
