"""strainkit prepare CELL --out RUN."""

from __future__ import annotations

from pathlib import Path
from typing import Annotated, Literal

import typer

from strainkit.cli.options import Cell, Json, Quiet, ReadAs, Symprec, deliver, note

Deck = Annotated[
    str | None, typer.Option(help="Input deck: qe, vasp, abinit, cp2k, castep, aims, gpaw, or your own folder or file.")
]
SettingsFiles = Annotated[
    list[Path] | None, typer.Option("--settings", help="TOML with [deck], [pseudopotentials], [site]; repeatable.")
]
KSpacing = Annotated[float | None, typer.Option(help="k-point spacing, 1/A, 2 pi included. [default: 0.25]")]
SchedulerName = Annotated[str | None, typer.Option(help="Job script for slurm, pbs, lsf, sge or bash; needs --deck.")]


def prepare(
    cell: Cell,
    out: Annotated[Path | None, typer.Option(help="Run folder to make.")] = None,
    magnitude: Annotated[
        list[float] | None, typer.Option(help="Largest principal strain, percent; repeatable. [default: 1.0]")
    ] = None,
    ions: Annotated[Literal["relaxed", "clamped"], typer.Option(help="Are the ions of the jobs relaxed?")] = "relaxed",
    format: Annotated[
        list[str] | None,
        typer.Option(
            help="Cell format; repeatable: poscar, cif, extxyz, qe, abinit, cp2k, castep, aims, siesta, gen, crystal, xsf, "
            "pwmat. [default: poscar, cif]"
        ),
    ] = None,
    deck: Deck = None,
    settings: SettingsFiles = None,
    kspacing: KSpacing = None,
    scheduler: SchedulerName = None,
    read_as: ReadAs = None,
    symprec: Symprec = 1e-3,
    dry_run: Annotated[bool, typer.Option("--dry-run", help="Print the plan and write nothing.")] = False,
    force: Annotated[bool, typer.Option("--force", help="Move an existing run folder of another set aside.")] = False,
    json: Json = False,
    quiet: Quiet = False,
) -> None:
    """Strained cells for one relaxed crystal: the fewest jobs that fix every constant."""
    from strainkit.cli.calculate import chosen_calculation
    from strainkit.crystal.read import read_crystal
    from strainkit.errors import UsageError
    from strainkit.prepare.runfolder import plan_run, plan_with_files, write_run
    from strainkit.prepare.writers import cell_formats
    from strainkit.present.terminal import plan_text

    if out is None and not dry_run:
        raise UsageError("no place to write to", "--out", "Name the run folder with --out RUN, or use --dry-run.")
    cell_formats(format or [])
    plan = plan_run(read_crystal(cell, read_as), [m / 100.0 for m in magnitude or [1.0]], ions, symprec)
    calculation = chosen_calculation(deck, plan, settings, kspacing, scheduler, symprec)
    if out is None or dry_run:
        plan, _ = plan_with_files(plan, format, calculation, scheduler)
    else:
        plan, what = write_run(plan, out, format, force, calculation, scheduler)
        note(f"{out}: {what}", quiet)
    deliver(plan.to_dict, lambda: plan_text(plan, out=out), json)
