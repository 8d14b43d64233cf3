"""The page of `strainkit compare --html`: one file that needs no other, every name in it escaped."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

from strainkit import __version__
from strainkit.derive.comparison import Comparison
from strainkit.derive.differences import Column
from strainkit.present.comparison_words import (
    MEANING,
    all_findings,
    change_cell,
    clean,
    kind_text,
    order_text,
    probability_text,
    reaction_text,
    softest_text,
    value_cell,
)
from strainkit.shipped import shipped_folder

__all__ = ["comparison_page"]


def comparison_page(comparison: Comparison) -> str:
    """HTML of a whole comparison."""
    from jinja2 import Environment, FileSystemLoader, StrictUndefined

    loader = FileSystemLoader(shipped_folder("templates") / "comparison")
    pages = Environment(loader=loader, autoescape=True, undefined=StrictUndefined, trim_blocks=True, lstrip_blocks=True)
    return pages.get_template("page.html.j2").render(_fields(comparison))


def _fields(c: Comparison) -> dict[str, Any]:
    return {
        "title": clean(f"{', '.join(c.labels[:-1])} and {c.labels[-1]}"),
        "members": [
            {
                "label": clean(m.label),
                "kind": clean(kind_text(m)),
                "softest": "" if m.moduli is None else softest_text(m),
            }
            for m in c.members
        ],
        "verdict": _verdict(c),
        "tables": _tables(c),
        "apart": [clean(f"Constants of {c.labels[i]} are not compared: {reason}.") for i, reason in c.apart.items()],
        "energies": [clean(reaction_text(c, r)) for r in c.reactions],
        "findings": [
            {"severity": f.severity, "code": f.code, "message": clean(f.message), "where": clean(f.where)}
            for f in sorted(all_findings(c), key=lambda f: ("error", "warning", "info").index(f.severity))
        ],
        "version": __version__,
    }


def _verdict(c: Comparison) -> str:
    first, words = c.labels[c.ranking.order[0]], c.ranking.quantity.words
    chance = probability_text(c.ranking.above_next[0])
    told = sum(bool(d.distinguishable) for d in c.differences)
    return clean(
        f"{first} has the largest {words} (probability that it is larger than the next: {chance}). Of {c.tests} tested "
        f"differences {told} can be told from the noise of the fits."
    )


def _tables(c: Comparison) -> list[dict[str, Any]]:
    names = [clean(label) for label in c.labels]
    meaning = MEANING.format(tests=c.tests)
    note = f"Values of a row that share a letter cannot be told apart. {meaning}" if c.baseline is None and c.tests else ""
    tables = [_side_by_side("Side by side", c.moduli, range(len(names)), names, note)]
    for group, columns in c.constants:
        tables.append(_side_by_side("Constants in IEEE axes", columns, group, names, ""))
    if c.baseline is not None:
        tables.append(_changes(c, c.baseline, names, meaning))
    tables.append(_ranking(c, names))
    return tables


def _side_by_side(title: str, rows: Sequence[Column], group: Sequence[int], names: list[str], note: str) -> dict[str, Any]:
    return {
        "title": title,
        "head": ["", *(names[i] for i in group)],
        "rows": [
            [column.quantity.title, *({"text": value_cell(column, i), "mark": column.letters.get(i, "")} for i in group)]
            for column in rows
        ],
        "note": note,
    }


def _changes(c: Comparison, base: int, names: list[str], meaning: str) -> dict[str, Any]:
    others = [i for i in range(len(names)) if i != base]
    found = {(d.quantity.name, d.second): d for d in c.differences}
    words = {d.quantity.name: d.quantity.words for d in c.differences}
    rows = []
    for name, title in words.items():
        changes = [found.get((name, i)) for i in others]
        cells = [
            {"text": "-", "mark": ""} if d is None else {"text": change_cell(d), "mark": "*" if d.distinguishable else ""}
            for d in changes
        ]
        rows.append([title, *cells])
    return {
        "title": f"Change against {names[base]}",
        "head": ["", *(names[i] for i in others)],
        "rows": rows,
        "note": f"A star marks what can be told apart. {meaning}",
    }


def _ranking(c: Comparison, names: list[str]) -> dict[str, Any]:
    r = c.ranking
    column = next(x for x in c.columns if x.quantity == r.quantity)
    rows = []
    for place, i in enumerate(r.order):
        above = probability_text(r.above_next[place]) if place < len(r.above_next) else ""
        cells = [{"text": value_cell(column, i), "mark": ""}, {"text": above, "mark": ""}]
        rows.append([f"{place + 1}. {names[i]}", *cells])
    note = f"Probability that {order_text(r)}." if len(r.order) > 2 else ""
    return {
        "title": f"Ranked by {r.quantity.title}",
        "head": ["", r.quantity.words, "larger than the next"],
        "rows": rows,
        "note": note,
    }
