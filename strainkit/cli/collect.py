"""strainkit collect RUN."""

from __future__ import annotations

import typer

from strainkit.cli.options import Json, Quiet, Run, deliver, note


def collect(run: Run, json: Json = False, quiet: Quiet = False) -> None:
    """Read what came back into the stress table (stresses.json, stresses.csv)."""
    from strainkit.collect.gather import collect_run
    from strainkit.collect.table import TABLE
    from strainkit.present.terminal import table_text
    from strainkit.run.plan import load_plan

    table = collect_run(run, load_plan(run))
    table.save(run)
    note(f"wrote {run / TABLE} and stresses.csv", quiet)
    deliver(table.to_dict, lambda: table_text(table, every=True), json)
    if len(table.usable) < len(table.records):
        raise typer.Exit(4)
