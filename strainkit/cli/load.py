"""What several commands begin with: the fit options that were given, the usable jobs of a run folder, and their fit."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path
from typing import TYPE_CHECKING, Any

from strainkit.errors import NoTensorError, UsageError

if TYPE_CHECKING:
    from strainkit.design.jobs import StrainJob
    from strainkit.design.model import Order
    from strainkit.findings import Finding
    from strainkit.fit.residual import ReferenceStress
    from strainkit.fit.result import Fit
    from strainkit.run.plan import Plan
    from strainkit.tensors.arrays import FloatArray

__all__ = ["fitted", "given_options", "one_run_drops", "usable"]


def given_options(
    order: Order | None = None,
    noise: float | None = None,
    drop: list[str] | None = None,
    reading: ReferenceStress | None = None,
    frame: str = "ieee",
) -> dict[str, Any]:
    """The fit options on the command line, checked; those that were left out are not there."""
    from strainkit.crystal.frames import FRAMES

    if frame not in FRAMES:
        raise UsageError(f"unknown frame {frame!r}", "--frame", f"Use one of {', '.join(FRAMES)}.")
    if noise is not None and not noise > 0:
        raise UsageError(f"a noise of {noise:g} GPa is not possible", "--noise", "Give a positive number.")
    options = {"order": order, "noise": noise, "drop": tuple(drop) if drop else None, "reading": reading}
    return {name: value for name, value in options.items() if value is not None}


def one_run_drops(options: dict[str, Any]) -> None:
    """Refuse to drop jobs of a whole campaign."""
    if "drop" in options:
        raise UsageError("jobs are dropped in one run at a time", "--drop", "Give the run folder of that crystal.")


def fitted(run: Path, options: dict[str, Any], constants: Path | None = None, anew: bool = False) -> Fit:
    """Fit a run from its stress table as the last `strainkit fit` did, but for the options given; `anew`: with these alone."""
    from strainkit.collect.stale import outputs_changed
    from strainkit.collect.table import load_table
    from strainkit.fit.options import FitOptions, fit_with, last_options
    from strainkit.run.plan import load_plan

    plan = load_plan(run)
    chosen = replace(FitOptions() if anew else last_options(run, plan), **options)
    _check_labels(plan, chosen.drop)
    if constants is not None:
        chosen = replace(chosen, force_constants=str(constants.resolve()))
    changed = outputs_changed(run, plan, load_table(run))
    try:
        fit = fit_with(plan, run, chosen)
    except NoTensorError as error:
        if changed:
            raise NoTensorError(error.what, error.where, changed[0].message) from None
        raise
    return replace(fit, findings=(*changed, *fit.findings))


def usable(run: Path, options: dict[str, Any]) -> tuple[Plan, list[StrainJob], FloatArray, float | None, list[Finding]]:
    """Plan, usable jobs, their Cauchy stresses (jobs, 6), GPa, known noise and age of the table; options as for `fitted`."""
    from strainkit.collect.stale import outputs_changed
    from strainkit.collect.table import load_table
    from strainkit.fit.options import last_options
    from strainkit.fit.result import usable_jobs
    from strainkit.run.plan import load_plan

    plan = load_plan(run)
    chosen = replace(last_options(run, plan), **options)
    _check_labels(plan, chosen.drop)
    table = load_table(run)
    jobs, stresses = usable_jobs(plan, table, chosen.drop)
    return plan, jobs, stresses, chosen.noise, outputs_changed(run, plan, table)


def _check_labels(plan: Plan, drop: tuple[str, ...]) -> None:
    unknown = [label for label in drop if label not in {job.label for job in plan.jobs}]
    if unknown:
        raise UsageError(f"no job {unknown[0]!r} in this run", "--drop", "See the labels with strainkit progress RUN.")
