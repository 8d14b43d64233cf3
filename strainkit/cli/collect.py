"""strainkit collect RUN, or a campaign."""

from __future__ import annotations

from pathlib import Path
from typing import Annotated

import typer

from strainkit.cli.options import Again, Json, Quiet, RunOrCampaign, Workers, deliver, note


def collect(
    run: RunOrCampaign,
    table: Annotated[
        Path | None, typer.Option(help="Read stresses from this CSV table: label, xx, yy, zz, yz, xz, xy.")
    ] = None,
    stress_unit: Annotated[
        str | None, typer.Option(help="Unit in the table: GPa, kbar, MPa, bar, eV/A^3, Ha/bohr^3, Ry/bohr^3. [default: GPa]")
    ] = None,
    stress_sign: Annotated[
        str | None, typer.Option(help="What is positive in the table: tension or compression. [default: tension]")
    ] = None,
    stress_order: Annotated[
        str | None, typer.Option(help='Order of the columns in the table, such as "xx yy zz xy yz xz". [default: the header]')
    ] = None,
    export: Annotated[
        Path | None, typer.Option(help="Write the structures with energies, forces and stresses to this extended XYZ file.")
    ] = None,
    again: Again = False,
    workers: Workers = None,
    json: Json = False,
    quiet: Quiet = False,
) -> None:
    """Read what came back into the stress table (stresses.json, stresses.csv). What did not change is not read again."""
    from strainkit.collect.csvtable import Convention, read_csv
    from strainkit.collect.gather import collect_run
    from strainkit.collect.table import TABLE
    from strainkit.errors import UsageError, counted
    from strainkit.present.terminal import table_text
    from strainkit.run.campaign import is_campaign
    from strainkit.run.plan import load_plan

    convention = Convention.of(stress_unit, stress_sign, stress_order)
    if table is None and (stress_unit or stress_sign or stress_order):
        raise UsageError(
            "unit, sign and order go with --table", "--table", "Programs' own outputs are read in their documented units."
        )
    if export is not None:
        from strainkit.present.structures import check_export, export_structures

        check_export(export)
    if is_campaign(run):
        from strainkit.cli.campaign import collect_campaign

        if table is not None:
            raise UsageError("a table is of one crystal", "--table", "Give the run folder of that crystal.")
        collect_campaign(run, export, again, workers, json, quiet)
        return
    plan = load_plan(run)
    typed = None if table is None else read_csv(table, plan, convention)
    found = collect_run(run, plan, typed)
    found.save(run)
    note(f"wrote {run / TABLE} and stresses.csv", quiet)
    if export is not None:
        note(f"wrote {counted(export_structures([run], export), 'structure')} to {export}", quiet)
    deliver(found.to_dict, lambda: table_text(found, every=True), json)
    if len(found.usable) < len(found.records):
        raise typer.Exit(4)
