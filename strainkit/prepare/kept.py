"""What lies in a campaign folder already: whether it was one, and what the plans of its crystals say."""

from __future__ import annotations

from collections.abc import Callable
from pathlib import Path
from typing import Any, TypeVar

from strainkit.errors import InputError
from strainkit.prepare.scripts import LOGS
from strainkit.run.campaign import Member
from strainkit.run.files import load_json
from strainkit.run.plan import MANIFEST

__all__ = ["job_folders", "plan_doubts", "was_campaign"]

#: what lies in a campaign folder whose manifest was lost before its first run folder was written
_OURS = ("runs", LOGS, "joblist", "submit", ".")

T = TypeVar("T")


def was_campaign(out: Path) -> bool:
    """Run folders where a campaign has them, whatever exports, tables and notes lie beside; or nothing of others."""
    if next(out.glob(f"runs/[0-9][0-9][0-9]*/*/{MANIFEST}"), None) is not None:
        return True
    return all(entry.name.startswith(_OURS) for entry in out.iterdir())


def job_folders(out: Path, member: Member) -> list[str]:
    """Job folders of a member relative to the campaign, in the order of its plan; InputError where the plan is damaged."""
    return _of_plan(out, member, lambda plan: [f"{member.run}/{job['folder']}" for job in plan["jobs"]])


def plan_doubts(out: Path, member: Member) -> tuple[str, ...]:
    """Codes of the warnings and errors in a member's plan; InputError where it is damaged."""
    return _of_plan(
        out, member, lambda plan: tuple(dict.fromkeys(f["code"] for f in plan["findings"] if f["severity"] != "info"))
    )


def _of_plan(out: Path, member: Member, look: Callable[[dict[str, Any]], T]) -> T:
    path = out / member.run / MANIFEST
    try:
        return look(load_json(path, "strainkit/strain-set"))
    except (InputError, KeyError, TypeError) as error:
        what = error.what if isinstance(error, InputError) else f"damaged manifest ({type(error).__name__}: {error})"
        remedy = f"Restore it, or move {out / member.run} away and give the same command again."
        raise InputError(what, path, remedy) from None
