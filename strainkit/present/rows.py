"""Lines of the page of `strainkit derive`: a label, a number, and where it belongs in the crystal."""

from __future__ import annotations

import re
import textwrap
from collections.abc import Sequence

from strainkit.derive.extremes import Near
from strainkit.derive.spread import WithError
from strainkit.present.numbers import plain, uncertain
from strainkit.present.text import WIDTH
from strainkit.tensors.arrays import FloatArray

__all__ = ["indices_text", "near_text", "row", "value_text"]


def row(label: str, value: str, note: str = "") -> str:
    """Label, number and a note, which goes on below itself where the line is full."""
    together = re.sub(r"[(\[][^)\]]*[)\]]", lambda found: found[0].replace(" ", "_"), note)  # indices stay on one line
    notes = [line.replace("_", " ") for line in textwrap.wrap(together, WIDTH - 45, break_on_hyphens=False)] or [""]
    first = f"  {label:<30}{value:>11}  {notes[0]}".rstrip()
    return "\n".join([first, *(" " * 45 + more for more in notes[1:])])


def value_text(value: WithError, digits: int = 2) -> str:
    """A number with its standard error in brackets."""
    return uncertain(value.value, value.error, digits)


def indices_text(indices: Sequence[int], plane: bool) -> str:
    """(1 0 -2) or [1 0 -2]."""
    inside = " ".join(map(str, indices))
    return f"({inside})" if plane else f"[{inside}]"


def near_text(near: Near, frame: FloatArray, as_plane: bool = False) -> str:
    """A direction by the low-index plane or direction next to it, or by its components without a cell."""
    if near.direction is None or near.plane is None:
        return "(" + " ".join(plain(x) for x in frame @ near.vector) + ")"
    gain = near.direction[1] - near.plane[1]
    plane = as_plane or gain > 0.05
    indices, angle = near.plane if plane else near.direction
    name = ("normal of " if plane and not as_plane else "") + indices_text(indices, plane)
    return name if angle < 0.05 else f"{angle:.1f} deg from {name}"
