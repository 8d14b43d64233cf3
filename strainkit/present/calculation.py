"""How the jobs of a set are computed, and what to type to start them."""

from __future__ import annotations

import shlex
from collections.abc import Mapping
from pathlib import Path
from typing import Any

from strainkit.present.text import heading, paragraph

__all__ = ["calculation_lines", "finer_lines", "settings_text"]

_TASKS = {
    "cell": "cell and ions relaxed",
    "ions": "ions relaxed at fixed cell, one mesh and grid for all",
    "single": "ions held, one mesh and grid for all",
}


def calculation_lines(calculation: Mapping[str, Any], out: Path | None) -> list[str]:
    """Deck, mesh, grid and settings, and the submit command when there is a script; nothing without a deck."""
    if not calculation:
        return []
    mesh = "x".join(map(str, calculation["kmesh"]))
    spacing = calculation["kspacing_per_A"]
    source = "from the settings file" if spacing is None else f"spacing at most {spacing:g} 1/A, 2 pi included"
    lines = ["", heading(f"{calculation['program']}, {_TASKS[calculation['task']]}")]
    lines.append(f"  k-mesh    {mesh}, Gamma-centred ({source})")
    grids = ", ".join("x".join(map(str, points)) for points in calculation["grids"])
    if grids:
        lines.append(f"  grid      {grids} points")
    pseudopotentials = ", ".join(f"{symbol} = {name}" for symbol, name in calculation["pseudopotentials"].items())
    if pseudopotentials:
        lines.append(paragraph(f"pseudo    {pseudopotentials}", "  "))
    lines.append(paragraph(f"settings  {settings_text(calculation['settings'])}", "  "))
    if "submit" in calculation:
        place = f"cd {shlex.quote(str(out))} && " if out is not None else ""
        lines += ["  submit it yourself:", f"    {place}{calculation['submit']}"]
    return lines


def finer_lines(calculation: Mapping[str, Any], finer: Mapping[str, Any]) -> list[str]:
    """What differs in the jobs at finer settings; nothing when there are none."""
    settings, changed = calculation.get("settings", {}), finer.get("calculation", {})
    other = {key: value for key, value in changed.get("settings", {}).items() if value != settings.get(key)}
    if changed and changed["kmesh"] != calculation["kmesh"]:
        other["k-mesh"] = "x".join(map(str, changed["kmesh"]))
    other |= finer.get("engine") or {}
    return [paragraph(f"finer     {settings_text(other)}, in the jobs at finer settings", "  ")] if other else []


def settings_text(settings: Mapping[str, Any]) -> str:
    """Names and values of the settings that are not empty."""
    return ", ".join(f"{key} {_value(value)}" for key, value in settings.items() if value not in ({}, 0.0))


def _value(value: object) -> str:
    if isinstance(value, dict):
        return "{" + ", ".join(f"{key} {item}" for key, item in value.items()) + "}"
    return f"{value:g}" if isinstance(value, float) else str(value)
