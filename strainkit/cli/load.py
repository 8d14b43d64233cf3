"""What several commands begin with: the fit of a run folder."""

from __future__ import annotations

from pathlib import Path
from typing import TYPE_CHECKING

from strainkit.errors import UsageError

if TYPE_CHECKING:
    from strainkit.design.model import Order
    from strainkit.fit.result import Fit

__all__ = ["fitted"]


def fitted(run: Path, order: Order, noise: float | None, drop: list[str] | None, frame: str) -> Fit:
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
    unknown = [label for label in drop or [] if label not in {job.label for job in plan.jobs}]
    if unknown:
        raise UsageError(f"no job {unknown[0]!r} in this run", "--drop", "See the labels with strainkit progress RUN.")
    return fit_run(plan, load_table(run), order, noise, tuple(drop or ()))
