"""What makes a comparison doubtful: temperatures, clamped ions, unlike methods, errors too large or not known."""

from __future__ import annotations

from collections.abc import Sequence

from strainkit.derive.differences import Column
from strainkit.derive.member import Member
from strainkit.findings import Finding, finding

__all__ = ["doubts_about"]

#: errors of moduli above this part of the value are too large for first-order propagation
_ROUGH = 0.2


def doubts_about(members: Sequence[Member], moduli: Sequence[Column]) -> list[Finding]:
    """Findings about members set side by side; `moduli` are their columns."""
    return [
        *_temperatures(members),
        *_clamped(members),
        *_methods(members),
        *_rough(members, moduli),
        *_untested(members),
    ]


def _temperatures(members: Sequence[Member]) -> list[Finding]:
    at = {m.label: m.temperature for m in members if m.temperature is not None}
    computed = [m.label for m in members if m.computed]
    if at and computed:
        given = ", ".join(f"{label} at {kelvin:g} K" for label, kelvin in at.items())
        text = (
            f"{given}; computed values are static, 0 K without zero-point motion. Warm crystals are softer, molecular ones by "
            "roughly 10 to 40 % at room temperature (from memory of the literature): such a difference is no error of a method"
        )
        return [finding("temperatures-differ", "comparison", text)]
    if at and max(at.values()) - min(at.values()) > 1.0:
        given = ", ".join(f"{label} at {kelvin:g} K" for label, kelvin in at.items())
        return [finding("temperatures-differ", "comparison", given)]
    return []


def _untested(members: Sequence[Member]) -> list[Finding]:
    bare = [m.label for m in members if m.elastic.moduli.covariance is None]
    text = "no errors: no test, no probability"
    return [finding("no-test", ", ".join(bare), text)] if bare else []


def _clamped(members: Sequence[Member]) -> list[Finding]:
    held = [m.label for m in members if m.clamped]
    if not held:
        return []
    others = "" if len(held) == len(members) else ", those of the others relax"
    text = f"clamped ions without their answer to strain{others}: molecular crystals are manifold too stiff so"
    return [finding("clamped-compared", ", ".join(held), text)]


def _methods(members: Sequence[Member]) -> list[Finding]:
    """Runs computed otherwise than the first one, those of one difference together."""
    known = [(m.label, m.method) for m in members if m.method is not None]
    unlike: dict[str, list[str]] = {}
    for label, method in known[1:]:
        if words := known[0][1].differences(method):
            unlike.setdefault("; ".join(words), []).append(label)
    return [
        finding("methods-differ", ", ".join(labels), f"computed otherwise than {known[0][0]}: {text}")
        for text, labels in unlike.items()
    ]


def _rough(members: Sequence[Member], columns: Sequence[Column]) -> list[Finding]:
    found = []
    for i, m in enumerate(members):
        parts = [(e / abs(c.value(i)), c.quantity.words) for c in columns if c.quantity.unit and (e := c.error(i))]
        part, words = max(parts, default=(0.0, ""))
        if part > _ROUGH:
            found.append(finding("rough-errors", m.label, f"{words} is uncertain by {100 * part:.0f} %: tests are rough"))
    return found
