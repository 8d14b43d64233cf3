"""Optimiser steps of strained jobs from four kinds of starting positions, with GFN1-xTB.

    python tests/benchmarks/starting_positions.py

Force constants come from displaced cells, the force response from clamped cells at 0.5 %; "learned" starts come from relaxed
jobs at 0.5 %, as prepare --extend takes them. Jobs at 1 %, LBFGS to 2e-4 eV/A.
"""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path

import numpy as np

from strainkit.crystal.operations import crystal_operations
from strainkit.crystal.read import read_crystal
from strainkit.dynamics.gamma import displacements, force_constants
from strainkit.dynamics.internal import force_response, internal_strain
from strainkit.evaluate.engines import Engine
from strainkit.evaluate.reference import relax_reference
from strainkit.evaluate.single import evaluate_cell
from strainkit.prepare.runfolder import plan_run
from strainkit.prepare.starts import learned_starts, predicted_starts
from strainkit.tensors.sixvectors import to_mandel

SAMPLES = Path(__file__).parents[2] / "sample_cells"
ENGINE = Engine("gfn1-xtb")


def answer_of(crystal):
    """Displacements (n, 3, 6) per unit Mandel strain, from single points alone."""
    jobs = plan_run(crystal, [0.005], "clamped").strain_set
    forces = np.array([evaluate_cell(crystal.deformed(j.gradient), ENGINE, relax=False).forces @ j.gradient for j in jobs])
    response = force_response(to_mandel(np.array([j.strain for j in jobs])), forces, crystal_operations(crystal, 1e-3))
    moved = displacements(crystal, 1e-3)
    rest = evaluate_cell(crystal, ENGINE, relax=False).forces
    pulls = np.array([evaluate_cell(m.apply(crystal), ENGINE, relax=False).forces - rest for m in moved])
    return internal_strain(crystal, force_constants(crystal, moved, pulls, 1e-3), response.matrix).displacements


def relaxed(plan, jobs):
    """Outcomes of the jobs by label."""
    return {job.label: evaluate_cell(plan.starting_cell(job), ENGINE, relax=True) for job in jobs}


def first_and_steps(plan):
    """Largest first force, eV/A, and mean steps, of the strained jobs."""
    jobs = plan.strain_set[1:]
    first = [np.linalg.norm(evaluate_cell(plan.starting_cell(j), ENGINE, relax=False).forces, axis=1).max() for j in jobs]
    steps = [outcome.steps for outcome in relaxed(plan, jobs).values()]
    return f"{max(first):.3f} | {np.mean(steps):.0f}"


def main():
    print(
        "| crystal | "
        + " | ".join(f"{n}: first force | steps" for n in ("affine", "rigid", "force constants", "learned"))
        + " |"
    )
    for name in ("carbon_dioxide", "ammonia", "hexamethylenetetramine"):
        crystal = relax_reference(read_crystal(SAMPLES / f"{name}.cif"), ENGINE).crystal
        affine = plan_run(crystal, [0.01], atoms="affine")
        rigid = plan_run(crystal, [0.01], atoms="rigid")
        known = replace(affine, starts=predicted_starts(affine, affine.strain_set, answer_of(crystal)))
        half = plan_run(crystal, [0.005])
        moved = {}
        for job in half.strain_set[1:]:
            apart = relaxed(half, [job])[job.label].crystal.positions - crystal.positions
            apart -= np.round(apart)
            moved[job.label] = (apart - apart.mean(axis=0)) @ half.crystal.deformed(job.gradient).lattice
        learned = replace(affine, starts=learned_starts(half, affine.strain_set, moved))
        print(f"| {name} | " + " | ".join(map(first_and_steps, (affine, rigid, known, learned))) + " |", flush=True)


if __name__ == "__main__":
    main()
