"""strainkit prepare CELL --out RUN."""

from __future__ import annotations

from pathlib import Path
from typing import TYPE_CHECKING, Annotated, Literal

import typer

from strainkit.cli.options import Json, Quiet, ReadAs, Symprec, Workers, deliver, note

if TYPE_CHECKING:
    from strainkit.run.plan import Plan
    from strainkit.tensors.arrays import FloatArray

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


def prepare(
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
    from strainkit.crystal.read import read_crystal
    from strainkit.design.strainset import Wish
    from strainkit.errors import UsageError
    from strainkit.prepare.cells import is_one_cell
    from strainkit.prepare.runfolder import plan_run, plan_with_files, write_run
    from strainkit.prepare.writers import cell_formats
    from strainkit.present.terminal import plan_text
    from strainkit.run.plan import job_folder

    cell_formats(format or [])
    magnitudes = tuple(m / 100.0 for m in magnitude or ())
    if extend is not None:
        if cell or campaign or out is not None or [more is not None, bool(magnitudes), finer is not None].count(True) != 1:
            raise UsageError(
                "--extend goes with one of --magnitude, --more and --finer",
                "--extend",
                "It takes neither a CELL nor --out: they are the run's.",
            )
        if deck or settings or scheduler or kspacing is not None:
            raise UsageError("--deck and its options are the run's own", "--extend", "Leave them out.")
        _extend(extend, magnitudes, more, finer, format, dry_run, json, quiet)
        return
    if not cell:
        raise UsageError("no cell given", "CELL", "Name the structure file, or a run folder with --extend.")
    if out is None and not dry_run:
        raise UsageError("no place to write to", "--out", "Name the run folder with --out RUN, or use --dry-run.")
    wish = Wish(aim, magnitudes, jobs, target_error, noise, ceiling / 100.0)
    moved = displaced and ions == "clamped"
    if campaign or not is_one_cell(cell):
        if force_constants is not None:
            raise UsageError("force constants belong to one crystal", "--force-constants", "Prepare that crystal alone.")
        from strainkit.cli.prepare_campaign import prepare_campaign
        from strainkit.prepare.campaign import Recipe
        from strainkit.prepare.settings import read_settings

        check_calculation(deck, settings, kspacing, scheduler)
        chosen = read_settings(settings or [])
        formats = None if format is None else tuple(format)
        recipe = Recipe(wish, ions, symprec, atoms, symmetrize, moved, formats, deck, chosen, kspacing, scheduler, read_as)
        prepare_campaign(cell, out, recipe, workers, dry_run, force, yes, json, quiet)
        return
    plan = plan_run(read_crystal(cell[0], read_as), wish, ions, symprec, atoms, symmetrize, displaced=moved)
    if force_constants is not None:
        if ions == "clamped":
            raise UsageError("clamped ions do not move", "--force-constants", "Give the file to strainkit fit afterwards.")
        plan = _predicted(plan, force_constants)
    found: list[tuple[str, Path]] = []
    if adopt is not None:
        plan, found = _adopted(plan, adopt, quiet)
    calculation = chosen_calculation(deck, plan, settings, kspacing, scheduler, symprec)
    if out is None or dry_run:
        plan, _ = plan_with_files(plan, format, calculation, scheduler)
    else:
        plan, what = write_run(plan, out, format, force, calculation, scheduler)
        note(f"{out}: {what}", quiet)
        for label, path in found:
            _keep(path, out / job_folder(label))
    deliver(plan.to_dict, lambda: plan_text(plan, out), json)


def _adopted(plan: Plan, folder: Path, quiet: bool) -> tuple[Plan, list[tuple[str, Path]]]:
    """The plan around finished calculations, and label and file of each."""
    import numpy as np

    from strainkit.collect.adopt import find_strained
    from strainkit.design.extend import adopted_jobs
    from strainkit.errors import InputError
    from strainkit.prepare.extend import adopt_jobs

    found, refused = find_strained(plan.crystal, folder)
    for line in refused:
        note(f"not adopted: {line}", quiet)
    if not found:
        raise InputError("no finished calculation of this cell in it", folder, "Their lattice must be strained by under 10 %.")
    jobs = adopted_jobs(np.array([one.gradient for one in found]), plan.symmetry)
    longer = adopt_jobs(plan, jobs)
    used = {job.label for job in longer.jobs}
    files = [(job.label, one.path) for job, one in zip(jobs, found, strict=True) if job.label in used]
    note(f"adopted {len(files)} calculations; {len(longer.jobs) - len(files)} jobs are left to compute", quiet)
    return longer, files


def _keep(path: Path, folder: Path) -> None:
    """Copy a finished output into its job folder; the original stays where it is."""
    from strainkit.run.files import atomic_write

    if not (folder / path.name).exists():
        atomic_write(folder / path.name, path.read_bytes())


def _moved(run: Path) -> dict[str, FloatArray]:
    """Displacements of the ions in the jobs that have been collected, by label."""
    from strainkit.collect.table import TABLE, load_table

    if not (run / TABLE).is_file():
        return {}
    return {r.label: r.displacements for r in load_table(run, ions=True).usable if r.displacements is not None}


def _predicted(plan: Plan, path: Path) -> Plan:
    """The plan with starting positions from force constants."""
    from dataclasses import replace

    from strainkit.dynamics.internal import internal_strain
    from strainkit.dynamics.phonons import gamma_constants, load_phonopy, strain_response
    from strainkit.prepare.starts import predicted_starts

    study = load_phonopy(path)
    answer = internal_strain(plan.crystal, gamma_constants(study, plan.crystal), strain_response(study, plan.crystal))
    return replace(plan, starts=predicted_starts(plan, plan.strain_set, answer.displacements))


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
    from strainkit.design.extend import at_magnitudes, more_jobs
    from strainkit.prepare.extend import at_finer_settings, extend_plan, write_extension
    from strainkit.prepare.settings import read_settings
    from strainkit.present.terminal import plan_text
    from strainkit.run.plan import load_plan

    old = load_plan(run)
    moved = _moved(run)
    if finer is not None:
        plan = at_finer_settings(old, read_settings([finer]), moved)
    elif more is None:
        plan = extend_plan(old, at_magnitudes(old.strain_set, magnitudes, old.symmetry), moved)
    else:
        plan = extend_plan(old, more_jobs(old.strain_set, more, old.crystal, old.symmetry), moved)
    if not dry_run:
        plan = write_extension(run, old, plan, formats)
        note(f"{run}: {len(plan.jobs) - len(old.jobs)} more job folders", quiet)
        if learned := len(plan.starts) - len(old.starts):
            note(f"{learned} of them start from what the ions did in the {len(moved)} jobs collected", quiet)
        if "scheduler" in plan.calculation:
            note(f"for their list and script: strainkit progress {run} --resubmit", quiet)
    deliver(plan.to_dict, lambda: plan_text(plan), json)
