"""strainkit prepare CELL --out RUN."""

from __future__ import annotations

from pathlib import Path
from typing import Annotated, Literal

import typer

from strainkit.cli.options import Json, Quiet, ReadAs, Symprec, Workers, deliver, note, spelt, typed
from strainkit.errors import UsageError, counted

Aim = Annotated[
    Literal["fewest", "symmetric", "sharpest"],
    typer.Option(help="Fewest jobs, most symmetric (cheapest) jobs, or smallest errors for --jobs N."),
]
Noise = Annotated[float, typer.Option(help="Stress noise to expect, GPa (standard deviation of one component).")]

Cells = Annotated[
    list[str] | None,
    typer.Argument(
        metavar="CELL...",
        help="Structure file of the relaxed cell; none with --extend. Several files, a folder, a pattern in quotes or @FILE "
        "(a list, one path a line) make a campaign: one run folder each, one job list.",
    ),
]
Deck = Annotated[
    str | None, typer.Option(help="Input deck: qe, vasp, abinit, cp2k, castep, aims, gpaw, or your own folder or file.")
]
SettingsFiles = Annotated[
    list[Path] | None, typer.Option("--settings", help="TOML with [deck], [pseudopotentials], [site]; repeatable.")
]
KSpacing = Annotated[float | None, typer.Option(help="k-point spacing, 1/A, 2 pi included. [default: 0.25]")]
SchedulerName = Annotated[str | None, typer.Option(help="Job script for slurm, pbs, lsf, sge or bash; needs --deck.")]


#: what --extend goes with; all else is the run's own
_WITH_EXTEND = ("extend", "magnitude", "more", "finer", "format", "dry_run", "json", "quiet")


def prepare(
    context: typer.Context,
    cell: Cells = None,
    out: Annotated[Path | None, typer.Option(help="Run folder to make, or campaign folder for several cells.")] = None,
    campaign: Annotated[bool, typer.Option("--campaign", help="Make a campaign also of a single cell.")] = False,
    magnitude: Annotated[
        list[float] | None, typer.Option(help="Largest principal strain, percent; repeatable. [default: 1.0]")
    ] = None,
    aim: Aim = "fewest",
    jobs: Annotated[int | None, typer.Option(help="Most strained jobs, with --aim sharpest.", min=1)] = None,
    target_error: Annotated[
        float | None, typer.Option(help="Standard error wanted for the worst constant, GPa: sets magnitude or jobs.")
    ] = None,
    ceiling: Annotated[float, typer.Option(help="Largest strain that --target-error may choose, percent.")] = 2.0,
    noise: Noise = 0.01,
    guess: Annotated[
        Path | None, typer.Option(help="Tensor file as for derive --tensor: expected errors of K and G are Hill's at it.")
    ] = None,
    extend: Annotated[
        Path | None, typer.Option(help="Add jobs to this run folder: with --magnitude, or with --more N.")
    ] = None,
    more: Annotated[int | None, typer.Option(help="With --extend: at most N jobs that help most.", min=1)] = None,
    finer: Annotated[
        Path | None, typer.Option(help="With --extend: one or two pairs again at the finer settings of this TOML file.")
    ] = None,
    adopt: Annotated[
        Path | None, typer.Option(help="Folder of finished strained calculations of this cell: only what they lack is planned.")
    ] = None,
    ions: Annotated[Literal["relaxed", "clamped"], typer.Option(help="Are the ions of the jobs relaxed?")] = "relaxed",
    atoms: Annotated[
        Literal["auto", "rigid", "affine"],
        typer.Option(help="Molecules moved as bodies, atoms moved with the lattice, or as the crystal asks."),
    ] = "auto",
    symmetrize: Annotated[
        bool, typer.Option("--symmetrize", help="Move atoms and cell onto the group found at --symprec first.")
    ] = False,
    force_constants: Annotated[
        Path | None, typer.Option(help="phonopy.yaml of the same cell: jobs start where its force constants move the ions.")
    ] = None,
    displaced: Annotated[
        bool, typer.Option(help="With clamped ions: displaced cells too, for the relaxed-ion stiffness.")
    ] = True,
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
    yes: Annotated[bool, typer.Option("--yes", help="Write a large campaign without asking.")] = False,
    workers: Workers = None,
    json: Json = False,
    quiet: Quiet = False,
) -> None:
    """Strained cells for relaxed crystals: the fewest jobs that fix every constant."""
    from strainkit.cli.calculate import check_calculation, chosen_calculation
    from strainkit.cli.known import adopted, guessed, keep, predicted
    from strainkit.crystal.kpoints import kpoint_mesh
    from strainkit.crystal.read import read_crystal
    from strainkit.design.cost import job_costs, with_costs
    from strainkit.design.strainset import Wish
    from strainkit.prepare.cells import is_one_cell
    from strainkit.prepare.runfolder import plan_run, plan_with_files, write_run
    from strainkit.prepare.writers import cell_formats
    from strainkit.present.terminal import plan_text
    from strainkit.run.plan import job_folder

    cell_formats(format or [])
    magnitudes = tuple(m / 100.0 for m in magnitude or ())
    if extend is not None:
        idle = [spelt(name) for name in typed(context) if name not in _WITH_EXTEND]
        if idle:
            raise UsageError(f"{', '.join(idle)} would change nothing: a run keeps its own", "--extend", "Leave that out.")
        if [more is not None, bool(magnitudes), finer is not None].count(True) != 1:
            raise UsageError("--extend goes with one of --magnitude, --more and --finer", "--extend", "Give one of them.")
        _extend(extend, magnitudes, more, finer, format, dry_run, json, quiet)
        return
    for option, given in (("--more", more), ("--finer", finer)):
        if given is not None:
            raise UsageError("this adds to a run", option, "It goes with --extend RUN.")
    if not cell:
        raise UsageError("no cell given", "CELL", "Name the structure file, or a run folder with --extend.")
    if out is None and not dry_run:
        raise UsageError("no place to write to", "--out", "Name the run folder with --out RUN, or use --dry-run.")
    _refuse_idle(typed(context), ions)
    wish = Wish(aim, magnitudes, jobs, target_error, noise, ceiling / 100.0)
    with_displaced = displaced and ions == "clamped"
    if campaign or not is_one_cell(cell):
        for option, given in (("--force-constants", force_constants), ("--adopt", adopt), ("--guess", guess)):
            if given is not None:
                raise UsageError("this belongs to one crystal", option, "Prepare that crystal alone.")
        if kspacing is not None and deck is None:
            raise UsageError("a campaign without an input deck counts no k-points", "--kspacing", "Name one with --deck.")
        from strainkit.cli.prepare_campaign import prepare_campaign
        from strainkit.prepare.campaign import Recipe
        from strainkit.prepare.settings import read_settings

        check_calculation(deck, settings, kspacing, scheduler)
        chosen = read_settings(settings or [])
        formats = None if format is None else tuple(format)
        recipe = Recipe(
            wish, ions, symprec, atoms, symmetrize, with_displaced, formats, deck, chosen, kspacing, scheduler, read_as
        )
        prepare_campaign(cell, out, recipe, workers, dry_run, force, yes, json, quiet)
        return
    crystal = read_crystal(cell[0], read_as)
    known = None if guess is None else guessed(guess, crystal, symprec)
    plan = plan_run(crystal, wish, ions, symprec, atoms, symmetrize, displaced=with_displaced, guess=known)
    if force_constants is not None:
        if ions == "clamped":
            raise UsageError("clamped ions do not move", "--force-constants", "Give the file to strainkit fit afterwards.")
        plan = predicted(plan, force_constants)
    found: list[tuple[str, Path]] = []
    if adopt is not None:
        plan, found = adopted(plan, adopt, quiet)
    calculation = chosen_calculation(deck, plan, settings, kspacing, scheduler, symprec)
    if out is None or dry_run:
        plan, _ = plan_with_files(plan, format, calculation, scheduler)
    else:
        plan, what = write_run(plan, out, format, force, calculation, scheduler)
        note(f"{out}: {what}", quiet)
        for label, path in found:
            keep(path, out / job_folder(label))
    mesh = (
        tuple(plan.calculation["kmesh"]) if plan.calculation else None if kspacing is None else kpoint_mesh(crystal, kspacing)
    )
    costs = job_costs(plan.jobs, plan.crystal, plan.symmetry, mesh)
    deliver(lambda: with_costs(plan.to_dict(), costs), lambda: plan_text(plan, out, costs), json)


def _refuse_idle(given: list[str], ions: str) -> None:
    """Refuse options that would change nothing beside the others."""
    bound = "target_error" in given and "magnitude" not in given
    for name, idle, why in (
        ("ceiling", not bound, "it bounds the magnitude that --target-error chooses where --magnitude does not"),
        ("displaced", ions == "relaxed", "displaced cells are for --ions clamped"),
        ("atoms", "force_constants" in given, "with --force-constants jobs start where these move the ions"),
        ("target_error", "adopt" in given, "with --adopt only what the calculations there leave undetermined is planned"),
    ):
        if idle and name in given:
            raise UsageError(f"this would change nothing: {why}", spelt(name), "Leave it out, or give what it goes with.")


def _extend(
    run: Path,
    magnitudes: tuple[float, ...],
    more: int | None,
    finer: Path | None,
    formats: list[str] | None,
    dry_run: bool,
    json: bool,
    quiet: bool,
) -> None:
    from dataclasses import replace

    from strainkit.cli.known import check_engine, moved
    from strainkit.design.extend import at_magnitudes, more_jobs
    from strainkit.prepare.extend import at_finer_settings, extend_plan, write_extension
    from strainkit.prepare.settings import read_settings
    from strainkit.present.terminal import plan_text
    from strainkit.run.plan import load_plan

    old = load_plan(run)
    taught = moved(run)
    if finer is not None:
        settings = read_settings([finer])
        check_engine(run, old, settings)
        plan = at_finer_settings(old, settings, taught)
    elif more is None:
        plan = extend_plan(old, at_magnitudes(old.strain_set, magnitudes, old.symmetry), taught)
    else:
        plan = extend_plan(old, more_jobs(old.strain_set, more, old.crystal, old.symmetry), taught)
    if not dry_run:
        plan = write_extension(run, old, plan, formats)
        note(f"{run}: {counted(len(plan.jobs) - len(old.jobs), 'more job folder')}", quiet)
        if learned := len(plan.starts) - len(old.starts):
            note(f"{learned} of them start from what the ions did in the {counted(len(taught), 'job')} collected", quiet)
        if "scheduler" in plan.calculation:
            note(f"for their list and script: strainkit progress {run} --resubmit", quiet)
    # the list and the script of the first jobs do not hold the new ones
    shown = replace(plan, calculation={k: v for k, v in plan.calculation.items() if k != "submit"})
    deliver(plan.to_dict, lambda: plan_text(shown), json)
