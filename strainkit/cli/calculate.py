"""What prepare and relax share: the options that choose a deck, checked against each other."""

from __future__ import annotations

from pathlib import Path
from typing import TYPE_CHECKING

from strainkit.errors import UsageError

if TYPE_CHECKING:
    from strainkit.prepare.calculation import Calculation
    from strainkit.run.plan import Plan

__all__ = ["check_calculation", "chosen_calculation"]


def chosen_calculation(
    deck: str | None,
    plan: Plan,
    settings: list[Path] | None,
    kspacing: float | None,
    scheduler: str | None,
    symprec: float,
) -> Calculation | None:
    """How the jobs of a plan are computed, from the options; None without a deck."""
    from strainkit.prepare.calculation import jobs_calculation
    from strainkit.prepare.settings import read_settings

    check_calculation(deck, settings, kspacing, scheduler)
    return None if deck is None else jobs_calculation(deck, plan, read_settings(settings or []), kspacing, symprec)


def check_calculation(deck: str | None, settings: list[Path] | None, kspacing: float | None, scheduler: str | None) -> None:
    """Refuse options of a deck without a deck, and an unknown scheduler."""
    from strainkit.prepare.scripts import check_scheduler

    if scheduler is not None:
        check_scheduler(scheduler)
    if deck is None:
        for option, given in (("--scheduler", scheduler), ("--settings", settings)):
            if given is not None:
                raise UsageError("needs an input deck", option, "Name one with --deck.")
