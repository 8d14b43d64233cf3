"""strainkit collect RUN, or a campaign."""

from __future__ import annotations

from pathlib import Path
from typing import Annotated

import typer

from strainkit.cli.options import Again, Json, Quiet, RunOrCampaign, Workers, deliver, note


def collect(
    run: RunOrCampaign,
    export: Annotated[
        Path | None, typer.Option(help="Write the structures with energies, forces and stresses to this extended XYZ file.")
    ] = None,
    again: Again = False,
    workers: Workers = None,
    json: Json = False,
    quiet: Quiet = False,
) -> None:
    """Read what came back into the stress table (stresses.json, stresses.csv)."""
    from strainkit.collect.gather import collect_run
    from strainkit.collect.table import TABLE
    from strainkit.present.terminal import table_text
    from strainkit.run.campaign import is_campaign
    from strainkit.run.plan import load_plan

    if is_campaign(run):
        from strainkit.cli.campaign import collect_campaign

        collect_campaign(run, export, again, workers, json, quiet)
        return
    plan = load_plan(run)
    table = collect_run(run, plan)
    table.save(run)
    note(f"wrote {run / TABLE} and stresses.csv", quiet)
    if export is not None:
        from strainkit.present.structures import export_structures

        note(f"wrote {export_structures([run], export)} structures to {export}", quiet)
    deliver(table.to_dict, lambda: table_text(table, every=True), json)
    if len(table.usable) < len(table.records):
        raise typer.Exit(4)
