"""What the summaries of the crystals of a campaign add up to (see `strainkit.cli.each`), by name of the crystal."""

from __future__ import annotations

from collections import Counter
from typing import TYPE_CHECKING, Any

import typer

if TYPE_CHECKING:
    from strainkit.run.campaign import Campaign

__all__ = ["anew_of", "crystals_of", "doubts_of", "end", "kept_of", "problems_of", "sum_of"]


def problems_of(found: dict[str, dict[str, Any]]) -> dict[str, str]:
    """Why crystals have no full result, of those that have none."""
    return {name: str(summary["problem"]) for name, summary in found.items() if summary.get("problem")}


def crystals_of(campaign: Campaign, found: dict[str, dict[str, Any]]) -> list[dict[str, Any]]:
    """JSON-ready summaries, in the order of the campaign."""
    hidden = ("exit", "row")
    return [
        {"name": m.name, "run": m.run, **{k: v for k, v in found[m.name].items() if k not in hidden}} for m in campaign.members
    ]


def sum_of(found: dict[str, dict[str, Any]], key: str) -> Counter[str]:
    """Counts of all crystals added up."""
    total: Counter[str] = Counter()
    for summary in found.values():
        total.update(summary.get(key, {}))
    return total


def anew_of(found: dict[str, dict[str, Any]]) -> int:
    """Crystals on which the work was done now, and with a result."""
    return sum(summary.get("kept") is False for summary in found.values())


def doubts_of(found: dict[str, dict[str, Any]]) -> dict[str, list[str]]:
    """Codes of warnings and errors, with the crystals that have them."""
    from strainkit.present.campaign import who_has

    return who_has({name: summary.get("findings", ()) for name, summary in found.items()})


def end(problems: dict[str, str], results: int) -> None:
    """Exit code 4 where some crystals have no full result, 5 where none has any."""
    if problems:
        raise typer.Exit(4 if results else 5)


def kept_of(found: dict[str, dict[str, Any]]) -> int:
    """Crystals whose result was there already."""
    return sum(bool(summary.get("kept")) for summary in found.values())
