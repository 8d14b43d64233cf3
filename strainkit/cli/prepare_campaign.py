"""strainkit prepare CELL CELL ...: a campaign."""

from __future__ import annotations

import sys
from dataclasses import asdict
from pathlib import Path
from typing import TYPE_CHECKING

import typer

from strainkit.cli.loop import processes
from strainkit.cli.options import deliver, note, progress

if TYPE_CHECKING:
    from strainkit.prepare.assemble import Estimate
    from strainkit.prepare.campaign import Recipe

__all__ = ["prepare_campaign"]

#: files, and bytes of disk, above which a campaign is written only when that is confirmed
_MANY_FILES, _MANY_BYTES = 20_000, 2e9


def prepare_campaign(
    cells: list[str],
    out: Path | None,
    recipe: Recipe,
    workers: int | None,
    dry_run: bool,
    force: bool,
    yes: bool,
    json: bool,
    quiet: bool,
) -> None:
    """Make or complete a campaign."""
    from strainkit.prepare.assemble import make_campaign
    from strainkit.prepare.cells import find_cells, not_taken
    from strainkit.present.campaign import estimate_text, made_text, not_taken_text, who_has

    def agree(estimate: Estimate) -> None:
        note(estimate_text(estimate), quiet)
        if not (dry_run or yes) and (estimate.files > _MANY_FILES or estimate.bytes > _MANY_BYTES):
            _confirm(estimate_text(estimate))

    count = processes(workers, len(find_cells(cells)[0]))
    others = not_taken(cells)
    if others:
        note(not_taken_text(others), quiet)
    place = None if dry_run else out
    made = make_campaign(cells, place, recipe, count, agree, lambda title: progress(title, quiet), force)
    estimate = made.estimate
    deliver(
        lambda: {
            "schema": "strainkit/campaign-preparation/1",
            "written": made.campaign is not None,
            "crystals": estimate.crystals,
            "kept": estimate.kept,
            "crystals_in_all": None if made.campaign is None else len(made.campaign.members),
            "jobs": estimate.jobs,
            "files": estimate.files,
            "bytes": estimate.bytes,
            "laue_classes": estimate.laue_classes,
            "findings_in": who_has(estimate.findings),
            "same_files": [list(names) for names in estimate.same_files],
            "files_not_taken": [str(path) for path in others],
            "refused_cells": [asdict(refusal) for refusal in made.refused],
            "submit": made.submit or None,
        },
        lambda: made_text(made, place),
        json,
    )
    if made.refused:
        raise typer.Exit(4)


def _confirm(what: str) -> None:
    """Ask, where there is somebody to ask."""
    from strainkit.errors import UsageError

    if not (sys.stdin.isatty() and sys.stderr.isatty()):
        raise UsageError(f"not written unasked: {what}", "prepare", "Repeat with --yes, or look first with --dry-run.")
    if not typer.confirm("Write them?", err=True):
        raise UsageError("nothing was written", "prepare")
