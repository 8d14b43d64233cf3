"""Campaigns on the command line: collect, fit, progress and derive for every run folder, and what came of them all."""

from __future__ import annotations

from functools import partial
from pathlib import Path
from typing import TYPE_CHECKING, Any

import typer

from strainkit.cli.each import collect_one, derive_one, fit_one, progress_one, report_one
from strainkit.cli.loop import loop
from strainkit.cli.options import deliver, note, progress
from strainkit.cli.summaries import anew_of, crystals_of, doubts_of, end, kept_of, problems_of, sum_of
from strainkit.errors import counted

if TYPE_CHECKING:
    from strainkit.fit.options import FitOptions

__all__ = ["collect_campaign", "derive_campaign", "fit_campaign", "progress_campaign", "report_campaign"]


def collect_campaign(folder: Path, export: Path | None, again: bool, workers: int | None, json: bool, quiet: bool) -> None:
    """Stress tables of all runs, and all structures in one file where that is asked for."""
    from strainkit.collect.table import STATUSES
    from strainkit.present.campaign import tally_text

    campaign, found = loop(folder, "collect", partial(collect_one, again), workers, quiet)
    statuses = sum_of(found, "statuses")
    usable = sum(summary.get("usable", 0) for summary in found.values())
    problems = problems_of(found)
    for name, summary in found.items():
        if name not in problems and summary["usable"] < summary["expected"]:
            bad = ", ".join(f"{n} {s}" for s, n in summary["statuses"].items() if s != "done")
            problems[name] = f"{summary['usable']} of {summary['expected']} jobs usable ({bad})"
    note(f"{counted(anew_of(found), 'crystal')} read, {kept_of(found)} unchanged since they were read last", quiet)
    if export is not None:
        _export([folder / m.run for m in campaign.members if "usable" in found[m.name]], export, quiet)
    deliver(
        lambda: {
            "schema": "strainkit/campaign-collection/1",
            "usable": usable,
            "expected": campaign.jobs,
            "statuses": dict(statuses),
            "findings_in": doubts_of(found),
            "kept": kept_of(found),
            "crystals": crystals_of(campaign, found),
        },
        lambda: tally_text(
            f"{usable} of {campaign.jobs} jobs of {counted(len(found), 'crystal')} usable",
            {status: (statuses[status], meaning) for status, meaning in STATUSES.items() if statuses[status]},
            problems,
            doubts=doubts_of(found),
        ),
        json,
    )
    if problems:
        raise typer.Exit(4)


def _export(runs: list[Path], export: Path, quiet: bool) -> None:
    from strainkit.present.structures import export_structures

    with progress("export", quiet) as report:
        done = iter(range(1, len(runs) + 1))
        count = export_structures(runs, export, lambda run: report(next(done), len(runs), run.name))
    note(f"wrote {counted(count, 'structure')} to {export}", quiet)


def fit_campaign(folder: Path, options: FitOptions, again: bool, workers: int | None, json: bool, quiet: bool) -> None:
    """Stiffness of all runs."""
    from strainkit.present.campaign import tally_text

    campaign, found = loop(folder, "fit", partial(fit_one, options, again), workers, quiet)
    problems = problems_of(found)
    fitted = len(found) - len(problems)
    problems |= {
        name: f"undetermined: {', '.join(summary['undetermined'])}"
        for name, summary in found.items()
        if summary.get("undetermined")
    }
    doubts = doubts_of(found)
    note(f"{counted(anew_of(found), 'crystal')} fitted, {kept_of(found)} unchanged since they were fitted last", quiet)
    deliver(
        lambda: {
            "schema": "strainkit/campaign-fit/1",
            "fitted": fitted,
            "complete": len(found) - len(problems),
            "kept": kept_of(found),
            "findings": {code: len(names) for code, names in doubts.items()},
            "findings_in": doubts,
            "crystals": crystals_of(campaign, found),
        },
        lambda: tally_text(
            f"{len(found) - len(problems)} of {len(found)} crystals have all their constants",
            {},
            problems,
            doubts=doubts,
        ),
        json,
    )
    end(problems, fitted)


def progress_campaign(folder: Path, queue: bool, resubmit: bool, workers: int | None, json: bool, quiet: bool) -> None:
    """States of all jobs, and what to run again."""
    from strainkit.collect.progress import STATES
    from strainkit.prepare.resubmit import resubmit as write_lists
    from strainkit.present.campaign import next_text, tally_text
    from strainkit.run.campaign import load_campaign

    record = load_campaign(folder).calculation
    queued = _queued(folder, record) if queue else None
    campaign, found = loop(folder, "progress", partial(progress_one, queued), workers, quiet, alone=False)
    states, problems = sum_of(found, "states"), problems_of(found)
    again = [f"{m.run}/{job}" for m in campaign.members for job in found[m.name].get("resubmit", ())]
    written = None
    if resubmit and again:
        names, command = write_lists(folder, record, again)
        written = {"lists": names, "submit": command}
    usable = sum(summary.get("usable", 0) for summary in found.values())
    used, left = ([s[key] for s in found.values() if s.get(key) is not None] for key in ("core_hours_used", "core_hours_left"))
    deliver(
        lambda: {
            "schema": "strainkit/campaign-progress/1",
            "usable": usable,
            "expected": campaign.jobs,
            "states": dict(states),
            "resubmit": again,
            "resubmission": written,
            "scheduler_asked": queue,
            "core_hours_used": sum(used) if used else None,
            "core_hours_left": sum(left) if left else None,
            "crystals": crystals_of(campaign, found),
        },
        lambda: "\n".join(
            [
                tally_text(
                    f"{usable} of {campaign.jobs} jobs of {counted(len(found), 'crystal')} usable",
                    {state: (states[state], meaning) for state, (meaning, _) in STATES.items() if states[state]},
                    problems,
                    [f"core hours used {sum(used):.3g}"] if used else [],
                ),
                *next_text(len(again), folder, bool(record), queue, written),
            ]
        ),
        json,
    )
    if usable < campaign.jobs or problems:
        raise typer.Exit(4)


def _queued(folder: Path, record: dict[str, Any]) -> dict[str, dict[str, Any]]:
    """What the scheduler says: run name -> job folder (relative to the run) -> state."""
    from strainkit.errors import InputError
    from strainkit.run.queues import ask_queue

    if "scheduler" not in record:
        raise InputError("this campaign has no job script, so no queue to ask", folder, "Leave out --queue.")
    found: dict[str, dict[str, Any]] = {}
    for place, state in ask_queue(folder, record["scheduler"], record["job_name"]).items():
        run, _, label = place.partition("/jobs/")
        found.setdefault(Path(run).name, {})[f"jobs/{label}"] = state
    return found


def derive_campaign(folder: Path, options: dict[str, Any], workers: int | None, json: bool, quiet: bool) -> None:
    """The screening table: screening.csv and screening.jsonl in the campaign folder."""
    from strainkit.derive.screen import COLUMNS
    from strainkit.present.campaign import screening_files, tally_text
    from strainkit.run.files import atomic_write

    campaign, found = loop(folder, "derive", partial(derive_one, options), workers, quiet)
    rows = [
        (summary.get("row") or dict.fromkeys(COLUMNS) | {"problem": summary["problem"]}) | {"name": m.name, "run": m.run}
        for m in campaign.members
        for summary in [found[m.name]]
    ]
    for name, text in screening_files(rows, COLUMNS).items():
        atomic_write(folder / name, text)
        note(f"wrote {folder / name}", quiet)
    problems = problems_of(found)
    deliver(
        lambda: {"schema": "strainkit/screening/1", "columns": list(COLUMNS), "rows": rows},
        lambda: tally_text(
            f"Screening table of {counted(len(rows), 'crystal')}, {len(rows) - len(problems)} with moduli",
            {},
            problems,
            doubts=doubts_of(found),
        ),
        json,
    )
    end(problems, len(found) - len(problems))


def report_campaign(
    folder: Path,
    options: dict[str, Any],
    frame: str,
    force: bool,
    again: bool,
    workers: int | None,
    json: bool,
    quiet: bool,
) -> None:
    """A report in every run folder."""
    from strainkit.present.campaign import tally_text

    campaign, found = loop(folder, "report", partial(report_one, options, frame, force, again), workers, quiet)
    problems = problems_of(found)
    written = anew_of(found)
    deliver(
        lambda: {
            "schema": "strainkit/campaign-reports/1",
            "written": written,
            "kept": kept_of(found),
            "crystals": crystals_of(campaign, found),
        },
        lambda: tally_text(
            f"{counted(written, 'report')} written, {kept_of(found)} unchanged: report.html of each run", {}, problems
        ),
        json,
    )
    end(problems, len(found) - len(problems))
