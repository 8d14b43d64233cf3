"""strainkit converge RUN."""

from __future__ import annotations

import typer

from strainkit.cli.fit import LastDrop, LastNoise
from strainkit.cli.options import Json, Quiet, Run, deliver


def converge(run: Run, noise: LastNoise = None, drop: LastDrop = None, json: Json = False, quiet: Quiet = False) -> None:
    """Is the strain magnitude right: constants per magnitude, extrapolation, best magnitude."""
    from dataclasses import replace

    from strainkit.cli.load import given_options, usable
    from strainkit.fit.magnitude import converge as study
    from strainkit.present.convergence import convergence_text

    plan, jobs, stresses, known, changed = usable(run, given_options(noise=noise, drop=drop))
    found = study(plan, jobs, stresses, known)
    found = replace(found, findings=(*changed, *found.findings))
    deliver(found.to_dict, lambda: convergence_text(plan.crystal.name, found), json)
    if not found.common.determined.all():
        raise typer.Exit(4 if found.common.determined.any() else 5)
