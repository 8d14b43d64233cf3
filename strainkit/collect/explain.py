"""Which changes to the stresses of a set would make it fit, and which of them are needed."""

from __future__ import annotations

from collections.abc import Iterable, Iterator
from dataclasses import dataclass
from itertools import islice

import numpy as np

from strainkit.collect.consistency import Group, typical_change
from strainkit.collect.mends import Mend
from strainkit.tensors.arrays import FloatArray, IntArray

__all__ = ["MANY", "Attempt", "explain", "unchanged"]

#: a change must take the misfit (root of the sum of squares) down to this part of it, and to this part of the typical stress
PART, CLEAN = 0.35, 0.08
#: and to this part in GPa
LESS = 0.8
#: a single stress that is changed must be so many times larger than what is left per job
LOUD = 5.0
#: a changed stress must agree with what the others say to this part of the typical stress and so many times the misfit of those
AGREES, AS_OTHERS = 0.06, 3.0
#: how often a set of mere noise may be explained by chance
CHANCE = 0.02
#: misfit below this part of the typical stress is not looked into; below the second not for two faults at a time
NOTABLE, NOTABLE_TWICE = 0.003, 0.03
#: a stress below this part of the typical one, such as that of a relaxed reference, explains no misfit below the second of
#: those: made larger, it would only stand in for the even response of the crystal
SLIGHT = 0.03
#: jobs beyond which single jobs are not tried
MANY = 150
#: faults at one time, and partial explanations that are followed
DEEPEST, WIDTH = 3, 6


@dataclass(frozen=True)
class Attempt:
    """Some changes, each of one job or (None) of all, and the misfit that is left."""

    steps: tuple[tuple[int | None, Mend], ...]
    cauchy: FloatArray
    misfit: float

    @property
    def singles(self) -> int:
        """Changes of single jobs."""
        return sum(place is not None for place, _ in self.steps)


def unchanged(group: Group) -> Attempt:
    """The set as it is."""
    return Attempt((), group.cauchy, float(group.misfits(group.cauchy[None])[0]))


def explain(group: Group, start: Attempt, choices: list[Mend]) -> tuple[Attempt, list[Attempt]]:
    """The fewest changes that take the misfit away, and others that do it as well; the start when none does.

    Parameters
    ----------
    group : Group
    start : Attempt
        The set as it is.
    choices : list of Mend
    """
    if start.misfit <= NOTABLE * len(group.jobs) ** 0.5:
        return start, []
    matrices = np.array([mend.matrices for mend in choices])
    single = len(group.jobs) <= MANY
    frontier = [start]
    deepest = DEEPEST if start.misfit > NOTABLE_TWICE * len(group.jobs) ** 0.5 else 1
    most = max(1, sum(bool(job.shape) for job in group.jobs) // 3)  # of a few jobs, two wrong ones prove nothing
    for depth in range(1, deepest + 1):
        tries = _Tries.of(group, frontier, choices, matrices, most if single else 0)
        # in so many tries, a vector of so many random components becomes so short by chance
        lucky = (CHANCE / (1 + single * len(group.jobs)) / len(choices)) ** (depth / max(group.spare, 1))
        need = min(min(PART, lucky) * start.misfit, CLEAN * len(group.jobs) ** 0.5)
        good = (t for t in tries.in_order(below=need) if _tells(group, start, t))
        if (best := next(good, None)) is not None:
            return best, list(islice((t for t in good if t.misfit < 3 * best.misfit + 0.01 and _differs(t, best)), 3))
        # a change of all stresses may help only together with another one
        frontier = _distinct(tries.in_order(), WIDTH) + (list(tries.in_order(of_all=True)) if depth == 1 else [])
    return start, []


@dataclass(frozen=True)
class _Tries:
    """One more change to some attempts, each in each place; made an Attempt only when it is looked at.

    misfits (k,); bases, mends, places (k,) of each: the attempt it changes, the change, and the job, -1 for all.
    """

    frontier: list[Attempt]
    choices: list[Mend]
    matrices: FloatArray
    misfits: FloatArray
    bases: IntArray
    mends: IntArray
    places: IntArray

    @classmethod
    def of(cls, group: Group, frontier: list[Attempt], choices: list[Mend], matrices: FloatArray, most: int) -> _Tries:
        """All of them, with at most so many changes of single jobs."""
        # a factor common to all stresses leaves the misfit as it is
        common = np.array([n for n, mend in enumerate(choices) if mend.code != "stress-unit"], dtype=np.int64)
        count, jobs = len(choices), np.arange(len(group.jobs))
        misfits, bases, mends, places = [], [], [], []
        for number, base in enumerate(frontier):
            changed = np.einsum("mjab,jb->mja", matrices, base.cauchy)
            sets, which, where = [changed[common]], [common], [np.full(len(common), -1)]
            if base.singles < most:
                one = np.tile(base.cauchy, (count, len(jobs), 1, 1))
                one[:, jobs, jobs] = changed
                sets.append(one.reshape(-1, len(jobs), 6))
                which.append(np.repeat(np.arange(count), len(jobs)))
                where.append(np.tile(jobs, count))
            misfits.append(group.misfits(np.concatenate(sets)))
            mends += which
            places += where
            bases.append(np.full(len(misfits[-1]), number))
        return cls(frontier, choices, matrices, np.concatenate(misfits), *map(np.concatenate, (bases, mends, places)))

    def in_order(self, below: float = np.inf, of_all: bool = False) -> Iterator[Attempt]:
        """The best first, changes of all stresses before those of one; below a misfit, or of all stresses only."""
        for k in np.lexsort((self.places >= 0, self.misfits)):
            if self.misfits[k] >= below:
                return
            place, base = int(self.places[k]), self.frontier[self.bases[k]]
            matrices = self.matrices[self.mends[k]]
            mend = self.choices[self.mends[k]]
            if place < 0:
                cauchy = np.einsum("jab,jb->ja", matrices, base.cauchy)
                yield Attempt((*base.steps, (None, mend)), cauchy, float(self.misfits[k]))
            elif not of_all:
                cauchy = base.cauchy.copy()
                cauchy[place] = matrices[place] @ cauchy[place]
                yield Attempt((*base.steps, (place, mend)), cauchy, float(self.misfits[k]))


def _tells(group: Group, start: Attempt, found: Attempt) -> bool:
    """Are the changed stresses more than noise, before and after, and is less left in GPa too?

    Making a stress of noise smaller always helps, and beside a stress made larger every misfit is small.
    """
    before, typical = (
        float(typical_change(np.einsum("jab,jb->ja", group.to_second, a.cauchy), group.rest)) for a in (start, found)
    )
    if found.misfit * typical > LESS * start.misfit * before:
        return False
    size = len(group.jobs) ** 0.5
    places = [place for place, _ in found.steps if place is not None]
    slight = any(np.linalg.norm(group.cauchy[place]) < SLIGHT * typical for place in places)
    if slight and start.misfit <= NOTABLE_TWICE * size:
        return False
    gains, whole, _ = group.gains(found.cauchy)
    # a job with another fault would be explained better by leaving it out
    if any(gains[p] ** 0.5 > AGREES * typical + AS_OTHERS * max(whole - gains[p], 0.0) ** 0.5 for p in places):
        return False
    return all(np.linalg.norm(found.cauchy[place]) > LOUD * found.misfit * typical / size for place in places)


def _differs(one: Attempt, other: Attempt) -> bool:
    return bool((np.abs(one.cauchy - other.cauchy) > 1e-9 + 1e-6 * np.abs(other.cauchy)).any())


def _distinct(tried: Iterable[Attempt], most: int) -> list[Attempt]:
    kept: list[Attempt] = []
    for candidate in tried:
        if all(_differs(candidate, other) for other in kept):
            kept.append(candidate)
        if len(kept) == most:
            break
    return kept
