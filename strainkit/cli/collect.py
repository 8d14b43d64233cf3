"""strainkit collect RUN."""

from __future__ import annotations

from pathlib import Path
from typing import Annotated

import typer

from strainkit.cli.options import Json, Quiet, Run, deliver, note


def collect(
    run: Run,
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
    json: Json = False,
    quiet: Quiet = False,
) -> None:
    """Read what came back into the stress table (stresses.json, stresses.csv). What did not change is not read again."""
    from strainkit.collect.csvtable import Convention, read_csv
    from strainkit.collect.gather import collect_run
    from strainkit.collect.table import TABLE
    from strainkit.errors import UsageError
    from strainkit.present.terminal import table_text
    from strainkit.run.plan import load_plan

    convention = Convention.of(stress_unit, stress_sign, stress_order)
    if table is None and (stress_unit or stress_sign or stress_order):
        raise UsageError(
            "unit, sign and order go with --table", "--table", "Programs' own outputs are read in their documented units."
        )
    plan = load_plan(run)
    typed = None if table is None else read_csv(table, plan, convention)
    found = collect_run(run, plan, typed)
    found.save(run)
    note(f"wrote {run / TABLE} and stresses.csv", quiet)
    deliver(found.to_dict, lambda: table_text(found, every=True), json)
    if len(found.usable) < len(found.records):
        raise typer.Exit(4)
