"""strainkit report RUN, or a campaign."""

from __future__ import annotations

from pathlib import Path
from typing import Annotated, Literal

import typer

from strainkit.cli.derive import Directions, ForceConstants, Indices, Planes
from strainkit.cli.fit import LastDrop, LastNoise, LastOrder, LastReading
from strainkit.cli.options import Again, Frame, Json, Quiet, RunOrCampaign, Workers, deliver, note

Out = Annotated[Path | None, typer.Option(help="File to write. [default: RUN/report.html]")]
FiguresFolder = Annotated[Path | None, typer.Option("--figures", help="Write every figure into this folder too.")]
FigureFormat = Annotated[Literal["png", "svg", "pdf"], typer.Option(help="Format of the files in --figures.")]


def report(
    run: RunOrCampaign,
    out: Out = None,
    figures: FiguresFolder = None,
    figure_format: FigureFormat = "svg",
    plane: Planes = None,
    direction: Directions = None,
    indices: Indices = "conventional",
    order: LastOrder = None,
    noise: LastNoise = None,
    drop: LastDrop = None,
    reference_stress: LastReading = None,
    force_constants: ForceConstants = None,
    frame: Frame = "ieee",
    force: Annotated[bool, typer.Option("--force", help="Replace files that strainkit did not write.")] = False,
    again: Again = False,
    workers: Workers = None,
    json: Json = False,
    quiet: Quiet = False,
) -> None:
    """One self-contained HTML file a crystal: verdict, tensor, figures, moduli, provenance (report.html)."""
    from dataclasses import replace

    from strainkit.cli.load import fitted, given_options, one_run_drops
    from strainkit.collect.stale import outputs_changed
    from strainkit.collect.table import load_table
    from strainkit.crystal.lattice import index_axes, parse_indices
    from strainkit.errors import NoTensorError, UsageError, counted
    from strainkit.present.report import REPORT, refuse_foreign, report_run, write_figures
    from strainkit.present.reported import report_text
    from strainkit.run.campaign import is_campaign
    from strainkit.run.plan import load_plan

    options = given_options(order, noise, drop, reference_stress, frame)
    if is_campaign(run):
        from strainkit.cli.campaign import report_campaign

        if out or figures or plane or direction or indices != "conventional" or force_constants:
            raise UsageError("of a campaign every crystal gets the standard report", "report", "Name one of its run folders.")
        one_run_drops(options)
        report_campaign(run, options, frame, force, again, workers, json, quiet)
        return
    plan = load_plan(run)
    axes = index_axes(plan.symmetry, indices == "given")
    planes = [parse_indices(text, "--plane", True, axes) for text in plane or []]
    directions = [parse_indices(text, "--direction", False, axes) for text in direction or []]
    path = out or run / REPORT
    refuse_foreign(path, force)
    fit, why, table = None, "", load_table(run)
    try:
        fit = fitted(run, options, force_constants)
    except NoTensorError as error:
        why = error.what
        table = replace(table, findings=(*outputs_changed(run, plan, table), *table.findings))
    study = None
    if force_constants is not None:
        from strainkit.dynamics.phonons import load_phonopy

        study = load_phonopy(force_constants)
    made = report_run(plan, table, fit, frame, planes, directions, indices == "given", study, run, why)
    made.save(path, force)
    note(f"wrote {path}", quiet)
    files = [] if figures is None else write_figures(made.figures.values(), figures, figure_format, force)
    if files:
        note(f"wrote {counted(len(files), 'figure')} into {figures}", quiet)
    written = {"report": str(path), "bytes": len(made.html.encode()), "figure_files": [str(file) for file in files]}
    deliver(lambda: made.to_dict() | written, lambda: report_text(made, path), json)
    if made.exit_code:
        raise typer.Exit(made.exit_code)
