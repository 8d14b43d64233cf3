"""What several commands begin with: the usable jobs of a run folder, and their fit."""

from __future__ import annotations

from pathlib import Path
from typing import TYPE_CHECKING

from strainkit.errors import UsageError

if TYPE_CHECKING:
    from strainkit.design.jobs import StrainJob
    from strainkit.design.model import Order
    from strainkit.fit.residual import ReferenceStress
    from strainkit.fit.result import Fit
    from strainkit.run.plan import Plan
    from strainkit.tensors.arrays import FloatArray

__all__ = ["fitted", "usable"]


def fitted(
    run: Path,
    order: Order,
    noise: float | None,
    drop: list[str] | None,
    frame: str,
    reading: ReferenceStress = "real",
    constants: Path | None = None,
) -> Fit:
    """Fit a run from its stress table, with the options checked."""
    from strainkit.collect.table import load_table
    from strainkit.crystal.frames import FRAMES
    from strainkit.fit.result import fit_run
    from strainkit.run.plan import load_plan

    if frame not in FRAMES:
        raise UsageError(f"unknown frame {frame!r}", "--frame", f"Use one of {', '.join(FRAMES)}.")
    if noise is not None and not noise > 0:
        raise UsageError(f"a noise of {noise:g} GPa is not possible", "--noise", "Give a positive number.")
    plan = load_plan(run)
    _check_labels(plan, drop)
    matrix = None
    if constants is not None and plan.ions == "clamped":
        from strainkit.dynamics.phonons import gamma_constants, load_phonopy

        matrix = gamma_constants(load_phonopy(constants), plan.crystal)
    table = load_table(run, ions=plan.ions == "clamped")
    return fit_run(plan, table, order, noise, tuple(drop or ()), reading, matrix)


def usable(run: Path, drop: list[str] | None) -> tuple[Plan, list[StrainJob], FloatArray]:
    """Plan, usable jobs and their Cauchy stresses (jobs, 6), GPa, of a run that has been collected."""
    from strainkit.collect.table import load_table
    from strainkit.fit.result import usable_jobs
    from strainkit.run.plan import load_plan

    plan = load_plan(run)
    _check_labels(plan, drop)
    jobs, stresses = usable_jobs(plan, load_table(run), tuple(drop or ()))
    return plan, jobs, stresses


def _check_labels(plan: Plan, drop: list[str] | None) -> None:
    unknown = [label for label in drop or [] if label not in {job.label for job in plan.jobs}]
    if unknown:
        raise UsageError(f"no job {unknown[0]!r} in this run", "--drop", "See the labels with strainkit progress RUN.")
