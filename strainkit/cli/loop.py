"""The same command on every run folder of a campaign, in parallel; it can be stopped at any point and goes on from there."""

from __future__ import annotations

from collections.abc import Callable
from contextlib import nullcontext
from pathlib import Path
from typing import TYPE_CHECKING, Any

from strainkit.cli.options import note, progress

if TYPE_CHECKING:
    from strainkit.run.campaign import Campaign

__all__ = ["loop", "processes"]


def processes(wanted: int | None, things: int) -> int:
    """Worker processes for a number of crystals: a few are done faster in this process."""
    from strainkit.run.pool import usable_cores

    return wanted or max(1, min(usable_cores(), things // 8))


def loop(
    folder: Path, command: str, work: Callable[[Path], dict[str, Any]], workers: int | None, quiet: bool, alone: bool = True
) -> tuple[Campaign, dict[str, dict[str, Any]]]:
    """Summaries by name, in the order of the campaign, of some work on every run folder.

    Whatever ends this, finished crystals stay finished, and the same command goes on from there.
    """
    from strainkit.errors import DiskError
    from strainkit.run.campaign import at_work, load_campaign
    from strainkit.run.pool import Died, over_processes

    campaign = load_campaign(folder)
    places = [folder / member.run for member in campaign.members]
    total = len(places)
    found: dict[str, dict[str, Any]] = {}
    try:
        with at_work(folder, command) if alone else nullcontext(), progress(command, quiet) as report:
            for place, summary in over_processes(work, places, processes(workers, total)):
                if isinstance(summary, Died):
                    summary = {
                        "problem": "the process that worked on it ended unexpectedly (killed, or out of memory)",
                        "exit": 1,
                    }
                if "disk" in summary:
                    error = summary["disk"]
                    what = f"{error.what}; {len(found)} of {total} crystals are done"
                    raise DiskError(
                        what, error.where, f"Make room or mend permissions, then {command} again: it goes on from there."
                    )
                found[place.name] = summary
                report(len(found), total, place.name)
    except KeyboardInterrupt:
        note(f"interrupted: {len(found)} of {total} crystals are done; {command} again goes on from there", False)
        raise
    return campaign, {member.name: found[member.name] for member in campaign.members}
