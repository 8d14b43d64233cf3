"""Crystals beside each other on one axis: a value and its 95 % interval each."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

from strainkit.derive.differences import Column
from strainkit.present.figures import MUTED, SERIES, Drawing, drawing, new_figure, style
from strainkit.present.numbers import uncertain

__all__ = ["Mark", "beside", "marks_of"]


@dataclass(frozen=True)
class Mark:
    """One crystal: its label, its value, its standard error and half its 95 % interval (None when unknown)."""

    label: str
    value: float
    error: float | None
    reach: float | None


def marks_of(column: Column, labels: Sequence[str], order: Sequence[int]) -> list[Mark]:
    """Values of one quantity in an order of the members, with Student's 95 % intervals."""
    from scipy.special import stdtrit

    marks = []
    for i in order:
        error, nu = column.error(i), column.freedom[i]
        reach = None if error is None else error * float(stdtrit(1e9 if nu is None else nu, 0.975))
        marks.append(Mark(labels[i], column.value(i), error, reach))
    return marks


def beside(name: str, title: str, axis: str, marks: Sequence[Mark], note: str = "") -> Drawing:
    """Marks below each other, the first on top; labels that the font may lack are replaced by their place."""
    rows = list(range(len(marks)))[::-1]
    names = [f"{k + 1}  {m.label}" if m.label.isascii() else f"{k + 1}" for k, m in enumerate(marks)]
    names = [text if len(text) <= 24 else f"{text[:22]}..." for text in names]
    with style():
        left = 0.35 + 0.072 * max(map(len, names))
        figure = new_figure(left + 3.3, 0.75 + 0.26 * len(marks), left=left, right=0.2)
        axes = figure.add_subplot()
        for row, mark in zip(rows, marks, strict=True):
            reach = None if mark.reach is None else [[mark.reach], [mark.reach]]
            axes.errorbar(
                [mark.value], [row], xerr=reach, fmt="o", color=SERIES[0], markersize=4.5, elinewidth=1.6, capsize=2.5
            )
        axes.set_yticks(rows, names, parse_math=False)
        axes.tick_params(axis="y", length=0)
        axes.set_ylim(-0.6, len(marks) - 0.4)
        axes.grid(axis="x")
        axes.spines["left"].set_color(MUTED)
        axes.set_xlabel(axis)
    said = "; ".join(f"{m.label} {uncertain(m.value, m.error)}" for m in marks)
    caption = "Bars: 95 % intervals of the fits (Student); they do not hold what all jobs of a run have in common." + note
    return drawing(name, title, [f"{title}: {said}."], caption, figure)
