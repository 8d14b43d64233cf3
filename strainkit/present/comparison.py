"""The page of `strainkit compare`."""

from __future__ import annotations

from collections.abc import Callable, Sequence

from strainkit.derive.comparison import Comparison
from strainkit.derive.differences import Column, Difference
from strainkit.present.comparison_words import (
    MEANING,
    all_findings,
    change_cell,
    clean,
    cleaned,
    kind_text,
    order_text,
    probability_text,
    reaction_text,
    softest_text,
    unranked_texts,
    value_cell,
)
from strainkit.present.text import WIDTH, columns, findings_text, heading, paragraph

__all__ = ["comparison_text"]

#: members side by side -> characters of a name
_ROOM = {1: 40, 2: 22, 3: 14}


def comparison_text(comparison: Comparison) -> str:
    """The whole page, 80 columns."""
    c = comparison
    lines = [heading("Crystals"), *_crystals(c), ""]
    lines += [heading("Side by side"), *_table(c, c.moduli), *_planes(c)]
    for group, constants in c.constants:
        names = "" if len(group) == len(c.members) else f" of {', '.join(str(i + 1) for i in group)}"
        lines += ["", heading(f"Constants{names}, IEEE axes"), *_table(c, constants, group)]
    for i, reason in c.apart.items():
        lines.append(paragraph(clean(f"constants of {i + 1} are not compared: {reason}"), "  "))
    if c.baseline is None:
        if c.tests:
            lines += ["", paragraph("Values of a row that share a letter cannot be told apart. " + _meaning(c), "  ")]
    else:
        lines += _changes(c, c.baseline)
    lines += ["", *_ranked(c)]
    if c.reactions:
        lines += ["", heading("Static energies of the reference cells, per formula unit of the first")]
        lines += [paragraph(clean(reaction_text(c, reaction)), "  ") for reaction in c.reactions]
    return "\n".join([*lines, "", findings_text([cleaned(f) for f in all_findings(c)])])


def _meaning(c: Comparison) -> str:
    return MEANING.format(tests=c.tests)


def _crystals(c: Comparison) -> list[str]:
    return [paragraph(clean(f"{i + 1}  {m.label}: {kind_text(m)}"), "  ") for i, m in enumerate(c.members)]


def _short(c: Comparison, i: int, room: int) -> str:
    """Number and name of a member, cut to the room there is."""
    label = clean(c.members[i].label)
    number = f"{i + 1} "
    return number + (label if len(number + label) <= room else label[: room - len(number) - 1] + "~")


def _in_blocks(members: Sequence[int], table: Callable[[Sequence[int]], str]) -> list[str]:
    """Tables of as many members side by side as the page is wide, spread evenly."""
    tables: list[str] = []
    for most in (3, 2, 1):
        count = -(-len(members) // most)
        size = -(-len(members) // count)
        tables = [table(members[start : start + size]) for start in range(0, len(members), size)]
        if max(len(line) for text in tables for line in text.splitlines()) <= WIDTH:
            break
    return tables


def _table(c: Comparison, rows: Sequence[Column], group: Sequence[int] | None = None) -> list[str]:
    """Values with letters, members side by side."""
    most = max((len(letter) for column in rows for letter in column.letters.values()), default=0)

    def table(block: Sequence[int]) -> str:
        cells = [
            [column.quantity.title, *(f"{value_cell(column, i)} {column.letters.get(i, '').ljust(most)}" for i in block)]
            for column in rows
        ]
        return columns(cells, ["", *(_short(c, i, _ROOM[len(block)]) + " " * (most + 1) for i in block)])

    return _in_blocks(range(len(c.members)) if group is None else group, table)


def _planes(c: Comparison) -> list[str]:
    """Plane and direction of the smallest shear modulus."""
    lines = []
    for i, m in enumerate(c.members):
        if m.moduli is None:
            lines.append(f"  {i + 1} has no moduli")
        else:
            lines.append(paragraph(f"{i + 1} shears most easily {softest_text(m)}", "  "))
    return lines


def _changes(c: Comparison, base: int) -> list[str]:
    lines = ["", heading(clean(f"Change against {base + 1} {c.members[base].label}"))]
    others = [i for i in range(len(c.members)) if i != base]
    names = list(dict.fromkeys(d.quantity.name for d in c.differences))
    found = {(d.quantity.name, d.second): d for d in c.differences}

    def table(block: Sequence[int]) -> str:
        rows = []
        for name in names:
            changes = [found.get((name, i)) for i in block]
            title = next((d.quantity.words for d in changes if d is not None), None)
            if title is not None:
                rows.append([title, *(_starred(d) for d in changes)])
        return columns(rows, ["", *(_short(c, i, _ROOM[len(block)]) + "  " for i in block)])

    lines += _in_blocks(others, table)
    return [*lines, paragraph("A star marks what can be told apart. " + _meaning(c), "  ")]


def _starred(change: Difference | None) -> str:
    if change is None:
        return "-  "
    return change_cell(change) + (" *" if change.distinguishable else "  ")


def _ranked(c: Comparison) -> list[str]:
    r = c.ranking
    column = next(x for x in c.columns if x.quantity == r.quantity)
    rows = []
    for place, i in enumerate(r.order):
        above = f"above the next: {probability_text(r.above_next[place])}" if place < len(r.above_next) else ""
        rows.append([f"{place + 1}. {_short(c, i, 24)}", value_cell(column, i), above])
    width = max((len(row[2]) for row in rows), default=0)
    lines = [heading(f"Ranked by {r.quantity.title}")]
    if rows:
        lines.append(columns([[a, b, note.ljust(width)] for a, b, note in rows]))
    lines += [paragraph(clean(text), "  ") for text in unranked_texts(c)]
    if len(r.order) > 2 and r.probability is not None:
        lines.append(f"  {order_text(r)}")
    return lines
