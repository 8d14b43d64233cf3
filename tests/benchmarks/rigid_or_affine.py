"""Molecules moved as bodies against atoms moved with the lattice: first forces and optimiser steps of every strained job.

    python tests/benchmarks/rigid_or_affine.py [CELL ...] [--engine gfn1-xtb] [--magnitude 1.0]

A CELL is a structure file or the name of a sample cell; its reference is relaxed first. Steps are LBFGS steps to the force
tolerance that `strainkit evaluate` uses; "apart" is the largest difference of the energies that the two starts end in.
"""

from __future__ import annotations

import argparse
from dataclasses import replace
from pathlib import Path

import numpy as np

from strainkit.crystal.read import read_crystal
from strainkit.evaluate.engines import Engine
from strainkit.evaluate.reference import relax_reference
from strainkit.evaluate.single import DEFAULT_FMAX, evaluate_cell
from strainkit.prepare.runfolder import plan_run
from strainkit.shipped import shipped_folder

DEFAULT_CELLS = ("carbon_dioxide", "ammonia", "hexamethylenetetramine", "ammonium_fluoride", "urea")


def measure(name: str, engine: Engine, magnitude: float) -> None:
    """Print one line a strained job of a crystal, and a row of the table for them all."""
    path = Path(name) if Path(name).is_file() else shipped_folder("sample_cells") / f"{name}.cif"
    relaxed = relax_reference(read_crystal(path), engine)
    print(f"\n{path.stem}: reference at {relaxed.max_force:.1e} eV/A after {relaxed.steps} steps", flush=True)
    if not relaxed.converged or relaxed.findings:
        print("  left out: not at rest, or no longer the same molecules", *(f.message for f in relaxed.findings))
        return
    plan = plan_run(relaxed.crystal, [magnitude], atoms="rigid")
    rows = []
    for job in plan.jobs[1:]:
        row: list[float] = []
        energies = []
        for moves in ("rigid", "affine"):
            cell = replace(plan, atoms=moves).starting_cell(job)
            first = evaluate_cell(cell, engine, relax=False).forces
            end = evaluate_cell(cell, engine, relax=True, fmax=DEFAULT_FMAX)
            row += [float(np.linalg.norm(first, axis=1).max()), float(end.steps if end.converged else np.nan)]
            energies.append(end.energy)
        row.append(1000.0 * abs(energies[0] - energies[1]))
        rows.append(row)
        print(f"  {job.label:14s} rigid {row[0]:.3f} eV/A, {row[1]:.0f} steps; affine {row[2]:.3f} eV/A, {row[3]:.0f} steps; "
              f"apart {row[4]:.4f} meV", flush=True)  # fmt: skip
    table = np.array(rows)
    low, high, mean = table.min(axis=0), table.max(axis=0), table.mean(axis=0)
    print(
        f"| {path.stem} | {len(rows)} | {low[0]:.3f} to {high[0]:.3f} | {low[2]:.3f} to {high[2]:.3f} "
        f"| {mean[1]:.0f} | {mean[3]:.0f} | {high[4]:.3f} |",
        flush=True,
    )


if __name__ == "__main__":
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("cells", nargs="*", default=DEFAULT_CELLS)
    parser.add_argument("--engine", default="gfn1-xtb")
    parser.add_argument("--magnitude", type=float, default=1.0, help="percent")
    options = parser.parse_args()
    for cell in options.cells:
        measure(cell, Engine(options.engine), options.magnitude / 100.0)
