"""One quantity of several crystals: values, differences that can be told from noise, and the order with its probability."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass, field, replace
from itertools import combinations, pairwise
from typing import Any

import numpy as np

from strainkit.derive.member import Member
from strainkit.derive.quantities import Quantity
from strainkit.derive.significance import LEVEL, holm, letters, probability_larger, probability_of_order, two_sided
from strainkit.derive.spread import WithError

__all__ = ["Column", "Difference", "Ranking", "column_of", "lettered", "ranked", "tested"]

#: quantities whose relative change means nothing: they may be zero
_ABSOLUTE = ("poisson", "anisotropy_index")


@dataclass(frozen=True)
class Column:
    """One quantity of all members.

    Attributes
    ----------
    quantity : Quantity
    values : tuple of WithError or None
        One a member; None where it has no meaning.
    freedom : tuple of int or None
        Degrees of freedom behind each error; None for known errors.
    pushed : tuple of float
        How much too large (negative: too small) noise may have made each value; see `strainkit.derive.quantities`.
    letters : dict
        Member -> letters: two share one exactly when their values cannot be told apart at the 95 % level. Empty where only
        changes against a baseline were tested.
    """

    quantity: Quantity
    values: tuple[WithError | None, ...]
    freedom: tuple[int | None, ...]
    pushed: tuple[float, ...]
    letters: dict[int, str] = field(default_factory=dict)

    def value(self, i: int) -> float:
        """Value of one member; NaN where it has no meaning."""
        found = self.values[i]
        return float("nan") if found is None else found.value

    def error(self, i: int) -> float | None:
        """Standard error of one member's value, None when unknown."""
        found = self.values[i]
        return None if found is None else found.error

    def gap(self, i: int, j: int) -> float:
        """First less second value, less what noise may have pushed these apart: what tests and probabilities use."""
        plain = self.value(i) - self.value(j)
        high, low = (i, j) if plain > 0 else (j, i)
        left = abs(plain) - max(self.pushed[high], 0.0) - max(-self.pushed[low], 0.0)
        return math.copysign(left, plain) if left > 1e-9 * max(abs(self.value(i)), abs(self.value(j))) else 0.0

    def pair(self, i: int, j: int) -> tuple[tuple[float, float], tuple[int | None, int | None]] | None:
        """Errors and degrees of freedom of two members; None where one has no error."""
        first, second = self.error(i), self.error(j)
        return None if first is None or second is None else ((first, second), (self.freedom[i], self.freedom[j]))

    def to_dict(self, labels: Sequence[str]) -> dict[str, Any]:
        """JSON-ready."""
        return {
            "name": self.quantity.name,
            "unit": self.quantity.unit or None,
            "values": [
                {"crystal": label, "value": self.value(i), "standard_error": self.error(i), "letters": self.letters.get(i)}
                for i, label in enumerate(labels)
            ],
        }


@dataclass(frozen=True)
class Difference:
    """Second less first member in one quantity.

    Attributes
    ----------
    quantity : Quantity
    first, second : int
        Numbers of the members; the first is the baseline where there is one.
    value : WithError
    percent : WithError or None
        Of the first; None for quantities that may be zero.
    p_value, p_adjusted : float or None
        Of no difference, alone and after multiplicity (Holm); None where one of the two has no error.
    """

    quantity: Quantity
    first: int
    second: int
    value: WithError
    percent: WithError | None
    p_value: float | None = None
    p_adjusted: float | None = None

    @property
    def distinguishable(self) -> bool | None:
        """At the 95 % level after multiplicity; None where it cannot be tested."""
        return None if self.p_adjusted is None else self.p_adjusted < LEVEL

    def to_dict(self, labels: Sequence[str]) -> dict[str, Any]:
        """JSON-ready."""
        return {
            "quantity": self.quantity.name,
            "first": labels[self.first],
            "second": labels[self.second],
            "difference": self.value.to_dict(),
            "percent": None if self.percent is None else self.percent.to_dict(),
            "p_value": self.p_value,
            "p_adjusted": self.p_adjusted,
            "distinguishable": self.distinguishable,
        }


@dataclass(frozen=True)
class Ranking:
    """Members by one quantity, the largest first.

    Attributes
    ----------
    quantity : Quantity
    order : tuple of int
        Those that have it.
    above_next : tuple of float or None
        Probability that each but the last is truly larger than the next; None where one of the two has no error.
    probability : float or None
        That the whole order is right.
    left_out : dict
        Member -> why it has no place in the order.
    """

    quantity: Quantity
    order: tuple[int, ...]
    above_next: tuple[float | None, ...]
    probability: float | None
    left_out: dict[int, str] = field(default_factory=dict)

    def to_dict(self, labels: Sequence[str]) -> dict[str, Any]:
        """JSON-ready."""
        return {
            "by": self.quantity.name,
            "order": [labels[i] for i in self.order],
            "probability_above_next": list(self.above_next),
            "probability": self.probability,
            "left_out": [{"crystal": labels[i], "reason": reason} for i, reason in self.left_out.items()],
        }


def column_of(members: Sequence[Member], quantity: Quantity, values: Sequence[WithError | None]) -> Column:
    """A quantity of all members, without letters yet."""
    pushed = [0.0 if m.moduli is None else m.moduli.pushed.get(quantity.name, 0.0) for m in members]
    return Column(quantity, tuple(values), tuple(m.freedom for m in members), tuple(pushed))


def tested(columns: Sequence[Column], count: int, base: int | None) -> list[Difference]:
    """Differences of all pairs of `count` members, or against the baseline, with p-values adjusted over all of them."""
    pairs = list(combinations(range(count), 2)) if base is None else [(base, i) for i in range(count) if i != base]
    plain = [_difference(c, i, j) for c in columns for i, j in pairs if c.values[i] is not None and c.values[j] is not None]
    raw = [d.p_value for d in plain if d.p_value is not None]
    adjusted = iter(holm(np.array(raw)).tolist() if raw else [])
    return [d if d.p_value is None else replace(d, p_adjusted=next(adjusted)) for d in plain]


def _difference(column: Column, i: int, j: int) -> Difference:
    first, second = column.value(i), column.value(j)
    gap, pair = second - first, column.pair(i, j)
    ratio = second / first if first > 0 and column.quantity.name not in _ABSOLUTE else None
    if pair is None:
        percent = None if ratio is None else WithError(100.0 * (ratio - 1.0))
        return Difference(column.quantity, i, j, WithError(gap), percent)
    (one, other), freedom = pair
    return Difference(
        quantity=column.quantity,
        first=i,
        second=j,
        value=WithError(gap, float(np.hypot(one, other))),
        percent=None
        if ratio is None
        else WithError(100.0 * (ratio - 1.0), 100.0 * float(np.hypot(other, ratio * one)) / first),
        p_value=float(two_sided(column.gap(i, j), (one, other), freedom)),
    )


def lettered(column: Column, differences: Sequence[Difference]) -> Column:
    """The column with its letters, from the tests of all pairs."""
    known = {i for i, value in enumerate(column.values) if value is not None}  # a constant may have several columns
    own = [d for d in differences if d.quantity == column.quantity and d.p_value is not None and {d.first, d.second} <= known]
    order = sorted({i for d in own for i in (d.first, d.second)}, key=lambda i: -column.value(i))
    return replace(column, letters=letters(order, [(d.first, d.second) for d in own if d.distinguishable]))


def ranked(column: Column, left_out: dict[int, str]) -> Ranking:
    """The order by one column of the members that have it; `left_out` says why the others do not."""
    order = sorted((i for i, value in enumerate(column.values) if value is not None), key=lambda i: -column.value(i))
    above: list[float | None] = []
    for i, j in pairwise(order):
        pair = column.pair(i, j)
        above.append(None if pair is None else float(probability_larger(column.gap(i, j), *pair)))
    errors = [e for i in order if (e := column.error(i)) is not None]
    whole = None
    if len(errors) == len(order) > 1:
        gaps = [column.gap(i, j) for i, j in pairwise(order)]
        places = [-sum(gaps[:k]) for k in range(len(order))]
        whole = probability_of_order(places, errors, [column.freedom[i] for i in order])
    return Ranking(column.quantity, tuple(order), tuple(above), whole, left_out)
