"""strainkit relax CELL --out CELL."""

from __future__ import annotations

from pathlib import Path
from typing import Annotated

import typer

from strainkit.cli.evaluate import ENGINE_HELP, Settings
from strainkit.cli.options import Cell, Json, Quiet, ReadAs, Symprec, deliver, note
from strainkit.cli.prepare import Deck, KSpacing, SchedulerName, SettingsFiles


def relax(
    cell: Cell,
    out: Annotated[Path, typer.Option(help="Relaxed cell to write (.extxyz, .vasp or .cif); with --deck the folder to make.")],
    engine: Annotated[str | None, typer.Option(help=f"Relax it here with {ENGINE_HELP}")] = None,
    deck: Deck = None,
    settings: Settings = None,
    fmax: Annotated[float | None, typer.Option(help="Largest force left, eV/A. [default: 2e-4]", min=1e-12)] = None,
    settings_files: SettingsFiles = None,
    kspacing: KSpacing = None,
    scheduler: SchedulerName = None,
    read_as: ReadAs = None,
    symprec: Symprec = 1e-3,
    force: Annotated[bool, typer.Option("--force", help="Overwrite the file named by --out.")] = False,
    json: Json = False,
    quiet: Quiet = False,
) -> None:
    """Bring a reference cell to zero stress: here with --engine, or write a variable-cell --deck for the cluster."""
    from strainkit.errors import UsageError

    if (engine is None) == (deck is None):
        raise UsageError("one of --engine and --deck is needed", "relax", "--engine relaxes here, --deck writes input files.")
    if deck is not None:
        if fmax is not None or settings:
            raise UsageError("belong to --engine", "--fmax and --set", "Put fmax under [deck] in the --settings file.")
        write_deck(cell, out, deck, settings_files, kspacing, scheduler, read_as, symprec, json, quiet)
        return
    for option, given in (("--settings", settings_files), ("--kspacing", kspacing), ("--scheduler", scheduler)):
        if given is not None:
            raise UsageError("belongs to --deck", option)
    relax_here(cell, out, str(engine), settings, fmax or 2e-4, read_as, symprec, force, json, quiet)


def write_deck(
    cell: Path,
    out: Path,
    deck: str,
    settings: list[Path] | None,
    kspacing: float | None,
    scheduler: str | None,
    read_as: str | None,
    symprec: float,
    json: bool,
    quiet: bool,
) -> None:
    """Write the variable-cell input files of a cell into a new folder."""
    from strainkit.crystal.read import read_crystal
    from strainkit.prepare.calculation import plan_calculation
    from strainkit.prepare.relaxation import write_relaxation
    from strainkit.prepare.scripts import check_scheduler
    from strainkit.prepare.settings import read_settings
    from strainkit.present.calculation import calculation_lines
    from strainkit.present.text import findings_text, paragraph

    if scheduler is not None:
        check_scheduler(scheduler)
    crystal = read_crystal(cell, read_as)
    calculation = plan_calculation(deck, crystal, "cell", read_settings(settings or []), kspacing, symprec=symprec)
    record = write_relaxation(calculation, out, scheduler)
    note(f"wrote {out}", quiet)
    doubts = [*crystal.remarks, *calculation.findings()]

    def text() -> str:
        lines = [*calculation_lines(record, out)[1:], ""]
        lines.append(
            paragraph(
                "When it has ended, give its last output to strainkit prepare as CELL, with the same deck and settings; "
                "cell changes above 1 % call for a second round, since the basis was chosen for the first cell.",
                "  ",
            )
        )
        return "\n".join([*lines, "", findings_text(doubts)])

    deliver(lambda: {**record, "out": str(out), "findings": [f.to_dict() for f in doubts]}, text, json)


def relax_here(
    cell: Path,
    out: Path,
    engine: str,
    settings: list[str] | None,
    fmax: float,
    read_as: str | None,
    symprec: float,
    force: bool,
    json: bool,
    quiet: bool,
) -> None:
    """Relax a cell with a local engine and write it."""
    from strainkit.crystal.read import read_crystal
    from strainkit.errors import UsageError, counted
    from strainkit.evaluate.engines import Engine, parse_settings
    from strainkit.evaluate.reference import relax_reference
    from strainkit.prepare.writers import write_cell
    from strainkit.present.numbers import plain
    from strainkit.present.text import findings_text
    from strainkit.run.files import atomic_write
    from strainkit.run.outputs import check_output
    from strainkit.tensors.sixvectors import strain_to_voigt

    format = {".extxyz": "extxyz", ".xyz": "extxyz", ".vasp": "poscar", ".cif": "cif"}.get(out.suffix.lower())
    if format is None:
        raise UsageError(f"cannot tell the format from {out.name!r}", "--out", "Use .extxyz, .vasp or .cif.")
    check_output(out, None, "a cell", force)
    crystal = read_crystal(cell, read_as)
    found = relax_reference(crystal, Engine(engine, parse_settings(settings or [])), fmax, symprec)
    atomic_write(out, write_cell(format, found.crystal, f"{crystal.name} relaxed with {engine}"))
    note(f"wrote {out}", quiet)
    strain, stress = 100 * strain_to_voigt(found.strain), found.stress

    def text() -> str:
        state = "at rest" if found.converged else "NOT at rest: run again from the file written"
        return "\n".join(
            [
                f"{crystal.name}: {state} after {counted(found.steps, 'step')}",
                f"  cell strained by {' '.join(plain(x, 2) for x in strain)} % (xx yy zz yz xz xy, engineering shear)",
                f"  volume {crystal.volume:.2f} -> {found.crystal.volume:.2f} A^3",
                f"  atoms moved by up to {found.largest_shift:.4f} A against the cell",
                f"  stress left {' '.join(plain(x, 4) for x in stress)} GPa, largest force {found.max_force:.2g} eV/A",
                *([findings_text(found.findings)] if found.findings else []),
            ]
        )

    deliver(
        lambda: {
            "schema": "strainkit/relaxation/1",
            "out": str(out),
            "converged": found.converged,
            "steps": found.steps,
            "cell_strain_voigt": strain / 100,
            "largest_shift_A": found.largest_shift,
            "stress_GPa": stress,
            "max_force_eV_per_A": found.max_force,
            "findings": [f.to_dict() for f in found.findings],
        },
        text,
        json,
    )
    if not found.converged:
        raise typer.Exit(4)
