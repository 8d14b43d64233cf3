"""strainkit progress RUN, or a campaign."""

from __future__ import annotations

from typing import Annotated

import typer

from strainkit.cli.options import Json, Quiet, RunOrCampaign, Workers, deliver


def progress(
    run: RunOrCampaign,
    queue: Annotated[bool, typer.Option("--queue", help="Ask the run's scheduler too which jobs wait or run.")] = False,
    resubmit: Annotated[
        bool, typer.Option("--resubmit", help="Write a new list and script for the jobs that are worth another run.")
    ] = False,
    workers: Workers = None,
    json: Json = False,
    quiet: Quiet = False,
) -> None:
    """Which jobs are done, running, missing or broken, and why; what to run again. Nothing is written or submitted unasked."""
    from strainkit.collect.progress import read_progress
    from strainkit.errors import InputError
    from strainkit.prepare.resubmit import write_resubmission
    from strainkit.present.progress import progress_text
    from strainkit.run.campaign import is_campaign
    from strainkit.run.plan import load_plan
    from strainkit.run.queues import ask_queue

    if is_campaign(run):
        from strainkit.cli.campaign import progress_campaign

        progress_campaign(run, queue, resubmit, workers, json, quiet)
        return
    plan = load_plan(run)
    queued = None
    if queue:
        if "scheduler" not in plan.calculation:
            raise InputError("this run has no job script, so no queue to ask", run, "Leave out --queue.")
        queued = ask_queue(run, plan.calculation["scheduler"], plan.calculation["job_name"])
    found = read_progress(run, plan, queued)
    written = None
    if resubmit and found.resubmit:
        name, command = write_resubmission(run, plan, found.resubmit)
        written = {"list": name, "submit": command}
    deliver(lambda: found.to_dict() | {"resubmission": written}, lambda: progress_text(found, run, plan, written), json)
    if len(found.table.usable) < len(found.jobs):
        raise typer.Exit(4)
