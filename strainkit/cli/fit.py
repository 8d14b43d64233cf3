"""strainkit fit RUN, or a campaign."""

from __future__ import annotations

from pathlib import Path
from typing import Annotated, Literal

import typer

from strainkit.cli.options import Again, Frame, Json, Quiet, RunOrCampaign, Workers, deliver, note

Order = Annotated[Literal["linear", "cubic"], typer.Option(help="Fit cubic terms for every shape too?")]
KnownNoise = Annotated[float | None, typer.Option(help="Known stress noise, GPa; estimated from the residuals if not given.")]
Drop = Annotated[list[str] | None, typer.Option(help="Leave this job out; repeatable; recorded in the result.")]
Reading = Annotated[
    Literal["real", "offset"],
    typer.Option(help="Is a stress on the reference real, or an offset of the basis set to be removed?"),
]
#: the same for commands that come after the fit
LastOrder = Annotated[
    Literal["linear", "cubic"] | None,
    typer.Option("--order", help="Fit cubic terms for every shape too? [default: as the last fit]"),
]
LastNoise = Annotated[float | None, typer.Option("--noise", help="Known stress noise, GPa. [default: as the last fit]")]
LastDrop = Annotated[
    list[str] | None, typer.Option("--drop", help="Leave this job out; repeatable. [default: as the last fit]")
]
LastReading = Annotated[
    Literal["real", "offset"] | None,
    typer.Option(
        "--reference-stress", help="Is a stress on the reference real, or an offset to be removed? [default: as the last fit]"
    ),
]
ForceConstants = Annotated[
    Path | None, typer.Option(help="phonopy.yaml with force constants, for clamped ions in place of displaced cells.")
]


def fit(
    run: RunOrCampaign,
    order: Order = "linear",
    noise: KnownNoise = None,
    drop: Drop = None,
    reference_stress: Reading = "real",
    force_constants: ForceConstants = None,
    frame: Frame = "ieee",
    again: Again = False,
    workers: Workers = None,
    json: Json = False,
    quiet: Quiet = False,
) -> None:
    """Stiffness with error bars and findings (stiffness.json)."""
    from strainkit.cli.load import fitted, given_options, one_run_drops
    from strainkit.errors import UsageError
    from strainkit.fit.result import FITTED
    from strainkit.present.terminal import fit_text
    from strainkit.run.campaign import is_campaign

    options = given_options(order, noise, drop, reference_stress, frame)
    if is_campaign(run):
        if force_constants is not None:
            raise UsageError("force constants belong to one crystal", "--force-constants", "Fit its run folder.")
        from strainkit.cli.campaign import fit_campaign
        from strainkit.fit.options import FitOptions

        one_run_drops(options)
        fit_campaign(run, FitOptions(**options, frame=frame), again, workers, json, quiet)
        return
    result = fitted(run, options, force_constants, anew=True)
    if force_constants is not None and result.plan.ions != "clamped":
        raise UsageError("force constants are for runs with clamped ions", "--force-constants", "See derive --force-constants.")
    result.save(run, frame)
    note(f"wrote {run / FITTED}", quiet)
    deliver(lambda: result.to_dict(frame), lambda: fit_text(result, frame), json)
    if result.undetermined:
        raise typer.Exit(4)
