"""What the text and the HTML page of a comparison have in common: its sentences and cells."""

from __future__ import annotations

from dataclasses import replace
from fractions import Fraction

from strainkit.derive.comparison import Comparison
from strainkit.derive.differences import Column, Difference, Ranking
from strainkit.derive.formation import Reaction
from strainkit.derive.member import Member
from strainkit.findings import Finding
from strainkit.present.numbers import plain, uncertain
from strainkit.present.rows import near_text
from strainkit.units import EV_IN_KJ_PER_MOL

__all__ = [
    "MEANING",
    "all_findings",
    "change_cell",
    "clean",
    "cleaned",
    "kind_text",
    "order_text",
    "probability_text",
    "reaction_text",
    "share_text",
    "softest_text",
    "unranked_texts",
    "value_cell",
]

#: what distinguishable means, and what it does not
MEANING = (
    "Told apart means beyond the precision of the fits, at most 5 % false alarms among all {tests} tests together (Holm). It "
    "cannot see errors that are smooth in strain: cutoff, k-mesh, functional, ions that are not fully relaxed. Between runs of "
    "different settings these do not cancel."
)
_DIGITS = {"poisson": 3}


def clean(text: str) -> str:
    """Text of a file without what could steer a terminal: control and invisible characters become question marks."""
    return "".join(c if c.isprintable() else "?" for c in text)


def cleaned(found: Finding) -> Finding:
    """The same finding with nothing in it that could steer a terminal."""
    return replace(found, where=clean(found.where), message=clean(found.message))


def all_findings(comparison: Comparison) -> list[Finding]:
    """Findings of the comparison, and those of its members that are more than information."""
    own = [
        replace(f, where=f"{m.label}: {f.where}")
        for m in comparison.members
        for f in m.elastic.findings
        if f.severity != "info"
    ]
    return [*comparison.findings, *own]


def kind_text(member: Member) -> str:
    """What a member is, on one line."""
    e = member.elastic
    words = [member.crystal.formula] if member.crystal is not None else []
    words.append(f"Laue class {e.laue_class or 'not named'}" if member.symmetry is None else member.symmetry.space_group)
    words.append(e.origin)
    if member.temperature is not None:
        words.append(f"at {member.temperature:g} K")
    elif member.computed:
        words.append("static")
    if member.method is not None and member.method.words:
        words.append(f"by {member.method.words}")
    if member.source:
        words.append(member.source)
    if member.place.rstrip("/") != member.label and member.computed:
        words.append(f"in {member.place}")
    return ", ".join(words)


def value_cell(column: Column, i: int) -> str:
    """One value with its error."""
    value = column.values[i]
    return "-" if value is None else uncertain(value.value, value.error, _DIGITS.get(column.quantity.name, 2))


def softest_text(member: Member) -> str:
    """Where the smallest shear modulus lies."""
    assert member.moduli is not None
    least, r = member.moduli.ends["shear_GPa"][0], member.elastic.frame.rotation
    assert least.side is not None
    return f"on {near_text(least.along, r, as_plane=True)} along {near_text(least.side, r)}"


def change_cell(change: Difference) -> str:
    """A change in percent, or in its own unit where the quantity may be zero."""
    value = change.percent or change.value
    text = uncertain(value.value, value.error, 3 if change.percent is None else 1)
    sign = "" if text.startswith("-") else "+"
    return f"{sign}{text}{' %' if change.percent is not None else ''}"


def probability_text(probability: float | None) -> str:
    """A probability in percent; never quite certain."""
    if probability is None:
        return "unknown"
    return "above 99.9 %" if probability > 0.999 else f"{100 * probability:.1f} %"


def order_text(ranking: Ranking) -> str:
    """Is the whole ranking right?"""
    chance = probability_text(ranking.probability)
    return f"the whole order is right with a probability {chance if chance.startswith('above') else f'of {chance}'}"


def unranked_texts(c: Comparison) -> list[str]:
    """Members that the ranking leaves out, each with its reason."""
    return [f"not ranked: {c.members[i].label}, {reason}" for i, reason in c.ranking.left_out.items()]


def reaction_text(c: Comparison, reaction: Reaction) -> str:
    """One reaction and its energy in words."""
    product, formula = c.members[reaction.product].label, reaction.formula
    sides = " + ".join(f"{share_text(share)}{c.members[i].label}" for i, share in reaction.parents)
    if len(reaction.parents) == 1 and reaction.parents[0][1] == 1:
        head = f"{product} ({formula}) less {sides}"
    elif len(reaction.parents) == 1:
        head = f"{product} ({formula}) from {sides}"
    else:
        head = f"{product} ({formula}) formed from {sides or 'the others'}"
    if reaction.energy is None:
        return f"{head}: none, {reaction.reason}"
    return f"{head}: {plain(reaction.energy * EV_IN_KJ_PER_MOL, 2)} kJ/mol, {plain(reaction.energy, 4)} eV"


def share_text(share: Fraction) -> str:
    return "" if share == 1 else f"{share} "
