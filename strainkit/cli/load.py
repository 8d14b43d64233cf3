"""What several commands begin with: the usable jobs of a run folder, and their fit."""

from __future__ import annotations

from pathlib import Path
from typing import TYPE_CHECKING

from strainkit.errors import UsageError

if TYPE_CHECKING:
    from strainkit.cli.each import FitOptions
    from strainkit.design.jobs import StrainJob
    from strainkit.design.model import Order
    from strainkit.fit.residual import ReferenceStress
    from strainkit.fit.result import Fit
    from strainkit.run.plan import Plan
    from strainkit.tensors.arrays import FloatArray

__all__ = ["fit_options", "fitted", "fitted_as_saved", "usable"]


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
    from strainkit.fit.result import fit_run
    from strainkit.run.plan import load_plan

    _check(noise, frame)
    plan = load_plan(run)
    _check_labels(plan, drop)
    matrix, file = None, ""
    if constants is not None and plan.ions == "clamped":
        from strainkit.dynamics.phonons import gamma_constants, load_phonopy

        matrix, file = gamma_constants(load_phonopy(constants), plan.crystal), str(constants.resolve())
    table = load_table(run, ions=plan.ions == "clamped")
    return fit_run(plan, table, order, noise, tuple(drop or ()), reading, matrix, file)


def fitted_as_saved(run: Path) -> Fit:
    """Fit a run as `strainkit fit` last did: order, dropped jobs, noise, reading of the reference stress, force constants."""
    from strainkit.fit.result import FITTED
    from strainkit.run.files import load_json

    if not (run / FITTED).is_file():
        return fitted(run, "linear", None, None, "ieee")
    saved = load_json(run / FITTED, "strainkit/stiffness")
    known = saved.get("noise_GPa") if saved.get("degrees_of_freedom") is None else None
    reading = saved.get("reference_stress_reading", "real")
    file = (saved.get("relaxed_ion") or {}).get("force_constants_file")
    constants = None if file is None else Path(file)
    return fitted(run, saved.get("order", "linear"), known, list(saved.get("jobs_dropped") or []), "ieee", reading, constants)


def fit_options(
    order: Order, noise: float | None, drop: list[str] | None, frame: str, reading: ReferenceStress = "real"
) -> FitOptions:
    """How every crystal of a campaign is fitted, with the options checked."""
    from strainkit.cli.each import FitOptions

    _check(noise, frame)
    if drop:
        raise UsageError("jobs are dropped in one run at a time", "--drop", "Give the run folder of that crystal.")
    return FitOptions(order, noise, reading, frame)


def _check(noise: float | None, frame: str) -> None:
    from strainkit.crystal.frames import FRAMES

    if frame not in FRAMES:
        raise UsageError(f"unknown frame {frame!r}", "--frame", f"Use one of {', '.join(FRAMES)}.")
    if noise is not None and not noise > 0:
        raise UsageError(f"a noise of {noise:g} GPa is not possible", "--noise", "Give a positive number.")


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
