"""strainkit relax CELL --out CELL."""

from __future__ import annotations

from pathlib import Path
from typing import Annotated

import typer

from strainkit.cli.evaluate import EngineName, Fmax, Settings
from strainkit.cli.options import Cell, Json, Quiet, ReadAs, Symprec, deliver, note


def relax(
    cell: Cell,
    engine: EngineName,
    out: Annotated[Path, typer.Option(help="Relaxed cell to write: .extxyz, .vasp or .cif.")],
    settings: Settings = None,
    fmax: Fmax = 2e-4,
    read_as: ReadAs = None,
    symprec: Symprec = 1e-3,
    force: Annotated[bool, typer.Option("--force", help="Overwrite the file named by --out.")] = False,
    json: Json = False,
    quiet: Quiet = False,
) -> None:
    """Bring a reference cell to zero stress with a local engine, its symmetry kept."""
    from strainkit.crystal.read import read_crystal
    from strainkit.errors import InputError, UsageError
    from strainkit.evaluate.engines import Engine, parse_settings
    from strainkit.evaluate.reference import relax_reference
    from strainkit.prepare.writers import FORMATS
    from strainkit.present.numbers import plain
    from strainkit.present.text import findings_text
    from strainkit.run.files import atomic_write
    from strainkit.tensors.sixvectors import strain_to_voigt

    format = {".extxyz": "extxyz", ".xyz": "extxyz", ".vasp": "poscar", ".cif": "cif"}.get(out.suffix.lower())
    if format is None:
        raise UsageError(f"cannot tell the format from {out.name!r}", "--out", "Use .extxyz, .vasp or .cif.")
    if out.exists() and not force:
        raise InputError("exists already; nothing was written", out, "Choose another --out, or --force to replace it.")
    crystal = read_crystal(cell, read_as)
    found = relax_reference(crystal, Engine(engine, parse_settings(settings or [])), fmax, symprec)
    atomic_write(out, FORMATS[format].write(found.crystal, f"{crystal.name} relaxed with {engine}"))
    note(f"wrote {out}", quiet)
    strain, stress = 100 * strain_to_voigt(found.strain), found.stress

    def text() -> str:
        state = "at rest" if found.converged else "NOT at rest: run again from the file written"
        return "\n".join(
            [
                f"{crystal.name}: {state} after {found.steps} steps",
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
