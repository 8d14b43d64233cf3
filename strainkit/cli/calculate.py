"""What prepare and relax share: the options that choose a deck, checked against each other."""

from __future__ import annotations

from pathlib import Path
from typing import TYPE_CHECKING

from strainkit.errors import UsageError

if TYPE_CHECKING:
    from strainkit.prepare.calculation import Calculation
    from strainkit.run.plan import Plan

__all__ = ["chosen_calculation"]


def chosen_calculation(
    deck: str | None,
    plan: Plan,
    settings: list[Path] | None,
    kspacing: float | None,
    scheduler: str | None,
    symprec: float,
) -> Calculation | None:
    """How the jobs of a plan are computed, from the options; None without a deck."""
    from strainkit.prepare.calculation import plan_calculation
    from strainkit.prepare.scripts import check_scheduler
    from strainkit.prepare.settings import read_settings

    if scheduler is not None:
        check_scheduler(scheduler)
    if deck is None:
        for option, given in (("--scheduler", scheduler), ("--settings", settings), ("--kspacing", kspacing)):
            if given is not None:
                raise UsageError("needs an input deck", option, "Name one with --deck.")
        return None
    return plan_calculation(
        deck,
        plan.crystal,
        "ions" if plan.ions == "relaxed" else "single",
        read_settings(settings or []),
        kspacing,
        [plan.crystal.lattice @ job.gradient.T for job in plan.jobs],
        symprec,
    )
