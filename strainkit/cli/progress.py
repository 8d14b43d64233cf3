"""strainkit progress RUN."""

from __future__ import annotations

import typer

from strainkit.cli.options import Json, Quiet, Run, deliver


def progress(run: Run, json: Json = False, quiet: Quiet = False) -> None:
    """Which jobs are done, missing or broken, and why; what to run again. Nothing is written."""
    from strainkit.collect.gather import collect_run
    from strainkit.present.terminal import table_text
    from strainkit.run.plan import load_plan

    table = collect_run(run, load_plan(run))
    deliver(lambda: table.to_dict() | {"schema": "strainkit/progress/1"}, lambda: table_text(table), json)
    if len(table.usable) < len(table.records):
        raise typer.Exit(4)
