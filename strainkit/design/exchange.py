"""Coordinate exchange: the best choice of candidate strains, one slot at a time until nothing improves."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from strainkit.design.criterion import information, trace_of_inverse
from strainkit.design.shapes import Shape, firsts
from strainkit.tensors.arrays import FloatArray

__all__ = ["SPARE", "Candidates", "exchange"]

#: spare degrees of freedom that a set should keep to estimate its own noise
SPARE = 3
_STARTS = 6


@dataclass(frozen=True)
class Candidates:
    """Strains that one slot of a set may hold.

    Attributes
    ----------
    units : (m, 6)
        Unit strains, Mandel.
    information : (m, n, n)
        What all jobs of each shape add, at unit noise and magnitude.
    rows : (m,)
        Components of odd stress that each shape returns.
    """

    units: FloatArray
    information: FloatArray
    rows: FloatArray

    @classmethod
    def of(cls, units: FloatArray, rotations: FloatArray, invariants: FloatArray) -> Candidates:
        """Candidates of unit strains (m, 6) in a crystal with the given rotations and invariant matrices."""
        shapes = [Shape.of(unit, rotations) for unit in units]
        jobs = np.array([shape.jobs for shape in shapes], dtype=float)
        return cls(
            units=units,
            information=jobs[:, None, None] * information(units, invariants),
            rows=np.array([shape.odd.shape[1] for shape in shapes]),
        )

    def without(self, taken: FloatArray | None, rotations: FloatArray) -> Candidates:
        """The candidates that no rotation (g, 3, 3) maps to plus or minus one of the strains taken (k, 6)."""
        if taken is None or not len(taken):
            return self
        first = firsts(np.concatenate([taken, self.units]), rotations)
        keep = np.array([i - len(taken) for i in first if i >= len(taken)], dtype=int)
        return Candidates(self.units[keep], self.information[keep], self.rows[keep])


def exchange(
    slots: Sequence[Candidates], start: FloatArray, spare: int = SPARE, found_rows: int = 0, starts: int = _STARTS
) -> tuple[float, FloatArray]:
    """Fill every slot with one of its candidates so that the trace of the inverse information is smallest.

    Parameters
    ----------
    slots : sequence of Candidates
        One entry a shape to choose; slots that share an object never hold the same candidate twice.
    start : (n, n)
        Information that is there already, at unit noise and magnitude.
    spare : int
        Least number of spare degrees of freedom.
    found_rows : int
        Rows behind the information that is there already.

    Returns
    -------
    criterion : float
        Infinite when no filling determines every constant with enough spare degrees of freedom.
    units : (k, 6)
        The chosen strains, slot by slot.
    """
    need = len(start) + spare - found_rows
    rng = np.random.default_rng(0)
    best, winner = np.inf, [0] * len(slots)
    for _ in range(starts):
        chosen = _first(slots, rng)
        value = np.inf
        while True:
            last = np.inf
            for slot, candidates in enumerate(slots):
                last = _fill(slots, chosen, slot, candidates, start, need)
            if not last < value:
                break
            value = last
        if value < best:
            best, winner = value, list(chosen)
    units = [candidates.units[i] for candidates, i in zip(slots, winner, strict=True)]
    return best if best < 1e6 else np.inf, np.array(units)


def _first(slots: Sequence[Candidates], rng: np.random.Generator) -> list[int]:
    """A random filling without repeats among slots of one kind."""
    chosen: list[int] = [0] * len(slots)
    for kind in {id(candidates): candidates for candidates in slots}.values():
        mine = [i for i, candidates in enumerate(slots) if candidates is kind]
        picks = rng.choice(len(kind.units), len(mine), replace=len(kind.units) < len(mine))
        for slot, pick in zip(mine, picks, strict=True):
            chosen[slot] = int(pick)
    return chosen


def _fill(
    slots: Sequence[Candidates], chosen: list[int], slot: int, candidates: Candidates, start: FloatArray, need: int
) -> float:
    """Put the best candidate into one slot, the others being as they are; returns the criterion."""
    others = [(s, c, i) for s, (c, i) in enumerate(zip(slots, chosen, strict=True)) if s != slot]
    base = start + sum((c.information[i] for _, c, i in others), np.zeros_like(start))
    rows = sum(int(c.rows[i]) for _, c, i in others)
    # rounding makes ties exact, so that every machine takes the first of equals
    scores = np.round(trace_of_inverse(base + candidates.information), 8)
    scores = np.where(np.isfinite(scores), scores, 1e9) + np.where(rows + candidates.rows < need, 1e6, 0.0)
    taken = [i for _, c, i in others if c is candidates]
    scores[taken] = 1e12
    chosen[slot] = int(scores.argmin())
    return float(scores.min())
