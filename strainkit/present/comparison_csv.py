"""A comparison as CSV: one row a value, one a difference, one an energy."""

from __future__ import annotations

import csv
import io
from pathlib import Path

from strainkit.derive.comparison import Comparison
from strainkit.derive.spread import WithError
from strainkit.present.comparison_words import clean, share_text
from strainkit.run.files import atomic_write
from strainkit.run.outputs import check_output

__all__ = ["comparison_csv", "save_csv"]

_CSV = (
    *("kind", "quantity", "unit", "crystal", "against", "value", "standard_error"),
    *("percent", "p_value", "p_adjusted", "told_apart"),
)


def save_csv(comparison: Comparison, path: Path, force: bool = False) -> None:
    """Write the table, but never over a file that is not such a table.

    Raises
    ------
    InputError
        Such a file is there, and `force` is not given; or the place belongs to a run.
    """
    head = ",".join(_CSV)
    check_output(path, lambda old: old.read_bytes().startswith(head.encode()), "a comparison", force)
    atomic_write(path, comparison_csv(comparison))


def comparison_csv(comparison: Comparison) -> str:
    """One row a value, then one row a difference; numbers at full precision, empty where unknown."""
    c, buffer = comparison, io.StringIO()
    writer = csv.writer(buffer, lineterminator="\n")
    writer.writerow(
        [
            "kind",
            "quantity",
            "unit",
            "crystal",
            "against",
            "value",
            "standard_error",
            "percent",
            "p_value",
            "p_adjusted",
            "told_apart",
        ]
    )
    for column in (*c.moduli, *(x for _, xs in c.constants for x in xs)):
        q = column.quantity
        for i, value in enumerate(column.values):
            if value is not None:
                writer.writerow(["value", q.name, q.unit, _plain_cell(c.labels[i]), "", *_pair(value), "", "", "", ""])
    for d in c.differences:
        told = "" if d.distinguishable is None else ("yes" if d.distinguishable else "no")
        labels = (_plain_cell(c.labels[d.second]), _plain_cell(c.labels[d.first]))
        percent = "" if d.percent is None else repr(d.percent.value)
        row = ["difference", d.quantity.name, d.quantity.unit, *labels, *_pair(d.value), percent]
        writer.writerow([*row, _number(d.p_value), _number(d.p_adjusted), told])
    for r in c.reactions:
        parents = " + ".join(f"{share_text(share)}{c.labels[i]}" for i, share in r.parents)
        row = ["energy", "energy_per_formula_unit", "eV", _plain_cell(c.labels[r.product]), _plain_cell(parents)]
        writer.writerow([*row, _number(r.energy), "", "", "", "", ""])
    return buffer.getvalue()


def _plain_cell(text: str) -> str:
    """A name that a spreadsheet does not take for a formula."""
    text = clean(text)
    return "'" + text if text[:1] in ("=", "+", "-", "@") else text


def _pair(value: WithError) -> list[str]:
    return [_number(value.value), _number(value.error)]


def _number(value: float | None) -> str:
    return "" if value is None else repr(float(value))
