"""strainkit inspect CELL."""

from __future__ import annotations

from typing import Annotated

import typer

from strainkit.cli.options import Cell, Json, Quiet, ReadAs, Symprec, deliver
from strainkit.cli.prepare import Noise


def inspect(
    cell: Cell,
    magnitude: Annotated[float, typer.Option(help="Largest principal strain to expect errors for, percent.")] = 1.0,
    noise: Noise = 0.01,
    kspacing: Annotated[
        float | None, typer.Option(help="Count irreducible k-points of a mesh of this spacing, 1/A, 2 pi included.")
    ] = None,
    read_as: ReadAs = None,
    symprec: Symprec = 1e-3,
    json: Json = False,
    quiet: Quiet = False,
) -> None:
    """What is this cell: symmetry over tolerances, constants, jobs needed, problems."""
    from strainkit.crystal.judge import judge_cell
    from strainkit.crystal.kpoints import kpoint_mesh
    from strainkit.crystal.read import read_crystal
    from strainkit.crystal.symmetry import tolerance_ladder
    from strainkit.design.cost import job_costs
    from strainkit.design.strainset import Wish
    from strainkit.prepare.runfolder import plan_run
    from strainkit.present.terminal import inspection_text

    crystal = read_crystal(cell, read_as)
    mesh = None if kspacing is None else kpoint_mesh(crystal, kspacing)
    _, rungs, _ = tolerance_ladder(crystal, symprec)
    sizes = (magnitude / 100.0,)
    judged = judge_cell(crystal)
    first = plan_run(crystal, Wish(magnitudes=sizes, noise=noise), symprec=symprec, judged=judged)
    sharp = Wish("sharpest", sizes, 2 * (len(first.jobs) - 1), noise=noise)
    others = (Wish("symmetric", sizes, noise=noise), sharp)
    plans = [first, *(plan_run(crystal, wish, symprec=symprec, judged=judged) for wish in others)]
    costs = [job_costs(plan.jobs, crystal, plan.symmetry, mesh) for plan in plans]
    deliver(
        lambda: (
            first.to_dict()
            | {
                "schema": "strainkit/inspection/1",
                "tolerances": [{"tolerance_A": t, "space_group": g, "laue_class": laue} for t, g, laue in rungs],
                "kpoint_mesh": mesh,
                "aims": [
                    {
                        "aim": plan.aim,
                        "strained_jobs": len(plan.strain_set) - 1,
                        "spare_degrees_of_freedom": plan.expectation.spare,
                        "relative_cost": plan.expectation.relative_cost,
                        "expected_standard_error_GPa": plan.expectation.standard_errors,
                        "expected_standard_error_averages_GPa": plan.expectation.averages,
                        "jobs": [
                            {"label": c.label, "laue_class": c.laue_class, "lost": c.lost, "irreducible_kpoints": c.kpoints}
                            for c in cost
                        ],
                    }
                    for plan, cost in zip(plans, costs, strict=True)
                ],
            }
        ),
        lambda: inspection_text(plans, costs, rungs, mesh),
        json,
    )
