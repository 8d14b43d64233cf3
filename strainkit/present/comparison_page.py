"""The page of `strainkit compare --html`, of the same parts as a report: one file that needs no other."""

from __future__ import annotations

from collections.abc import Sequence

from strainkit.derive.comparison import Comparison
from strainkit.derive.differences import Column, Difference
from strainkit.findings import worst
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
from strainkit.present.figures_comparison import beside, marks_of
from strainkit.present.report_page import Block, Cell, Facts, Figures, Page, Paragraph, Row, Section, Table, Tone
from strainkit.present.report_provenance import cautions_section

__all__ = ["comparison_page"]


def comparison_page(comparison: Comparison) -> Page:
    """The page as data: its tables and figures show themselves in a notebook, `report_page.render` makes HTML of it."""
    c = comparison
    names = [clean(label) for label in c.labels]
    sections = [_crystals(c, names), _moduli(c, names)]
    if c.constants or c.apart:
        sections.append(_constants(c, names))
    if c.baseline is not None:
        sections.append(_changes(c, c.baseline, names))
    sections.append(_ranking(c, names))
    if c.reactions:
        sections.append(_energies(c))
    order = ("error", "warning", "info")
    return Page(
        title=f"{', '.join(names[:-1])} and {names[-1]}",
        subtitle=f"Comparison of {len(names)} crystals",
        tone=_tone(c),
        verdict=_verdict(c, names),
        findings=tuple(cleaned(f) for f in sorted(all_findings(c), key=lambda f: order.index(f.severity))),
        sections=(*sections, cautions_section()),
    )


def _tone(c: Comparison) -> Tone:
    if any(m.moduli is None for m in c.members):
        return "bad"
    return "doubt" if worst(all_findings(c)) in ("warning", "error") else "good"


def _verdict(c: Comparison, names: list[str]) -> tuple[str, ...]:
    r = c.ranking
    sentences = [f"{names[i]} is not ranked: {clean(reason)}." for i, reason in r.left_out.items()]
    if len(r.order) > 1:
        first, second = names[r.order[0]], names[r.order[1]]
        chance = f"{second} comes next; probability that this order is right: {probability_text(r.above_next[0])}."
        sentences.insert(0, f"{first} has the largest {r.quantity.words}, {chance}")
    if len(r.order) > 2 and r.probability is not None:
        sentences.append(f"{order_text(r).capitalize()}.")
    if c.tests:
        told = sum(bool(d.distinguishable) for d in c.differences)
        sentences.append(f"{told} of {c.tests} tested differences can be told from the noise of the fits.")
        sentences.append(MEANING.format(tests=c.tests))
    return tuple(sentences)


def _crystals(c: Comparison, names: list[str]) -> Section:
    rows = []
    for name, m in zip(names, c.members, strict=True):
        softest = "no moduli" if m.moduli is None else f"shears most easily {softest_text(m)}"
        rows.append((name, clean(kind_text(m)), softest))
    return Section("crystals", "Crystals", (Facts(tuple(rows)),))


def _moduli(c: Comparison, names: list[str]) -> Section:
    members = range(len(names))
    caption = "Averages by Hill, extremes over all directions, standard errors of the last digits in brackets" + _letters(c)
    return Section("moduli", "Moduli", (_side_by_side("moduli", caption, c.moduli, members, names),))


def _letters(c: Comparison) -> str:
    told = c.baseline is None and c.tests > 0
    return "; values of a row that share a letter cannot be told apart" if told else ""


def _side_by_side(name: str, caption: str, rows: Sequence[Column], group: Sequence[int], names: list[str]) -> Table:
    cells: list[Row] = []
    for column in rows:
        values = [Cell(f"{value_cell(column, i)} {column.letters.get(i, '')}".rstrip(), _key(column.value(i))) for i in group]
        cells.append([column.quantity.title, *values])
    return Table.of(name, caption, ["", *(names[i] for i in group)], cells, sortable=False)


def _key(value: float) -> float | None:
    return value if value == value else None


def _constants(c: Comparison, names: list[str]) -> Section:
    blocks: list[Block] = []
    for k, (group, columns) in enumerate(c.constants):
        caption = f"Constants in IEEE axes, GPa{_letters(c)}"
        blocks.append(_side_by_side(f"constants-{k + 1}", caption, columns, group, names))
    blocks += [Paragraph(clean(f"Constants of {names[i]} are not compared: {reason}.")) for i, reason in c.apart.items()]
    return Section("constants", "Constants", tuple(blocks))


def _changes(c: Comparison, base: int, names: list[str]) -> Section:
    others = [i for i in range(len(names)) if i != base]
    found = {(d.quantity.name, d.second): d for d in c.differences}
    words = {d.quantity.name: d.quantity.words for d in c.differences}
    rows: list[Row] = [[title, *(_change(found.get((name, i))) for i in others)] for name, title in words.items()]
    table = Table.of("changes", "A star marks what can be told apart", ["", *(names[i] for i in others)], rows, sortable=False)
    return Section("changes", f"Change against {names[base]}", (table,))


def _change(difference: Difference | None) -> Cell:
    if difference is None:
        return Cell("-")
    value = difference.percent or difference.value
    return Cell(change_cell(difference) + (" *" if difference.distinguishable else ""), value.value)


def _ranking(c: Comparison, names: list[str]) -> Section:
    r = c.ranking
    column = next(x for x in c.columns if x.quantity == r.quantity)
    rows: list[Row] = []
    for place, i in enumerate(r.order):
        above = r.above_next[place] if place < len(r.above_next) else None
        chance = Cell("" if place == len(r.above_next) else probability_text(above), above)
        rows.append([names[i], Cell(value_cell(column, i), column.value(i)), chance])
    title = r.quantity.title
    blocks: list[Block] = []
    if rows:
        figure = beside("ranking", r.quantity.words, title, marks_of(column, names, r.order))
        heads = ["", title, "probability that it is larger than the next"]
        blocks = [Figures((figure,)), Table.of("ranking", "From the largest down", heads, rows)]
    blocks += [Paragraph(f"{clean(text[0].upper() + text[1:])}.") for text in unranked_texts(c)]
    if len(r.order) > 2 and r.probability is not None:
        blocks.append(Paragraph(f"{order_text(r).capitalize()}."))
    return Section("ranking", f"Ranked by {r.quantity.words}", tuple(blocks))


def _energies(c: Comparison) -> Section:
    lines: list[Block] = [Paragraph(clean(reaction_text(c, r)) + ".") for r in c.reactions]
    note = "Per formula unit of the first, of the reference cells: 0 K, without zero-point motion and entropy."
    return Section("energies", "Static energies", (*lines, Paragraph(note)))
