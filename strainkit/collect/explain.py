"""Which changes to the stresses of a set would make it fit, and which of them are needed."""

from __future__ import annotations

from collections.abc import Iterable, Iterator
from dataclasses import dataclass
from itertools import combinations, islice

import numpy as np

from strainkit.collect.consistency import Group, typical_change
from strainkit.collect.mends import EXCHANGED, Mend
from strainkit.collect.table import TABLE_PROGRAM
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
#: jobs beyond which single jobs are not tried
MANY = 150
#: jobs of a table beyond which exchanged lines are not sought
FEW = 40
#: faults at one time, and partial explanations that are followed
DEEPEST, WIDTH = 3, 6


@dataclass(frozen=True)
class Attempt:
    """Some changes, each of some jobs or (None) of all, and the misfit that is left."""

    steps: tuple[tuple[tuple[int, ...] | None, Mend], ...]
    cauchy: FloatArray
    misfit: float

    @property
    def touched(self) -> list[int]:
        """Jobs that are changed by themselves or with some others, not with all."""
        return [job for place, _ in self.steps if place is not None for job in place]


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
    places = _places(group) if len(group.jobs) <= MANY else []
    frontier = [start]
    deepest = DEEPEST if start.misfit > NOTABLE_TWICE * len(group.jobs) ** 0.5 else 1
    most = max(1, sum(bool(job.shape) for job in group.jobs) // 3)  # of a few jobs, two wrong ones prove nothing
    for depth in range(1, deepest + 1):
        tries = _Tries.of(group, frontier, choices, matrices, places, most)
        # in so many tries, a vector of so many random components becomes so short by chance
        lucky = (CHANCE / (1 + len(places)) / len(choices)) ** (depth / max(group.spare, 1))
        need = min(min(PART, lucky) * start.misfit, CLEAN * len(group.jobs) ** 0.5)
        good = (t for t in tries.in_order(below=need) if _tells(group, start, t))
        if (best := next(good, None)) is not None:
            return best, list(islice((t for t in good if t.misfit < 3 * best.misfit + 0.01 and _differs(t, best)), 3))
        # a change of all stresses may help only together with another one
        frontier = _distinct(tries.in_order(), WIDTH) + (list(tries.in_order(of_all=True)) if depth == 1 else [])
    return start, []


def _places(group: Group) -> list[tuple[int, ...]]:
    """Jobs that may be wrong together: each alone; those of one shape, of one size and of both, at most half of them."""
    strained = [(n, job.shape, round(abs(job.magnitude), 9)) for n, job in enumerate(group.jobs) if job.shape]
    sets: list[tuple[int, ...]] = [(n,) for n in range(len(group.jobs))]
    for key in ((1, 2), (1,), (2,)):
        groups: dict[tuple[float, ...], list[int]] = {}
        for job in strained:
            groups.setdefault(tuple(job[k] for k in key), []).append(job[0])
        sets += [tuple(members) for members in groups.values() if 2 * len(members) <= len(strained)]
    return list(dict.fromkeys(sets))


@dataclass(frozen=True)
class _Tries:
    """One more change to some attempts, each in each place; made an Attempt only when it is looked at.

    misfits (k,); bases, mends, where (k,) of each: the attempt it changes, the change (-1: two lines of a table exchanged), and
    the place (-1: all).
    """

    frontier: list[Attempt]
    choices: list[Mend]
    matrices: FloatArray
    places: list[tuple[int, ...]]
    misfits: FloatArray
    bases: IntArray
    mends: IntArray
    where: IntArray

    @classmethod
    def of(
        cls,
        group: Group,
        frontier: list[Attempt],
        choices: list[Mend],
        matrices: FloatArray,
        places: list[tuple[int, ...]],
        most: int,
    ) -> _Tries:
        """All of them; at most so many jobs by themselves, or one set of several and nothing else."""
        # a factor common to all stresses leaves the misfit as it is
        common = np.array([n for n, mend in enumerate(choices) if mend.code != "stress-unit"], dtype=np.int64)
        typed = all(record.program == TABLE_PROGRAM for record in group.records) and len(group.jobs) <= FEW
        swaps = list(combinations(range(len(group.jobs)), 2)) if typed else []
        inside = np.array([[job in place for job in range(len(group.jobs))] for place in places], dtype=bool)
        misfits, bases, mends, where = [], [], [], []
        for number, base in enumerate(frontier):
            changed = np.einsum("mjab,jb->mja", matrices, base.cauchy)
            sets, which, at = [changed[common]], [common], [np.full(len(common), -1)]
            free = len(base.touched) < most
            kept = [n for n, place in enumerate(places) if (free if len(place) == 1 else not base.steps)]
            if kept:
                some = np.where(inside[kept][None, :, :, None], changed[:, None], base.cauchy)
                sets.append(some.reshape(-1, *base.cauchy.shape))
                which.append(np.repeat(np.arange(len(choices)), len(kept)))
                at.append(np.tile(kept, len(choices)))
            if swaps and not base.steps:
                first, second = np.array(swaps).T
                rows = np.arange(len(swaps))
                some = np.tile(base.cauchy, (len(swaps), 1, 1))
                some[rows, first], some[rows, second] = base.cauchy[second], base.cauchy[first]
                sets.append(some)
                which.append(np.full(len(swaps), -1))
                at.append(len(places) + rows)
            misfits.append(group.misfits(np.concatenate(sets)))
            mends += which
            where += at
            bases.append(np.full(len(misfits[-1]), number))
        return cls(
            frontier, choices, matrices, [*places, *swaps], np.concatenate(misfits), *map(np.concatenate, (bases, mends, where))
        )

    def in_order(self, below: float = np.inf, of_all: bool = False) -> Iterator[Attempt]:
        """The best first, of equal ones those of all stresses; below a misfit, or of all stresses only."""
        for k in np.lexsort((self.where >= 0, self.misfits)):
            if self.misfits[k] >= below:
                return
            base, mend = self.frontier[self.bases[k]], EXCHANGED if self.mends[k] < 0 else self.choices[self.mends[k]]
            place = None if self.where[k] < 0 else self.places[self.where[k]]
            if of_all and place is not None:
                continue
            jobs = list(range(len(base.cauchy)) if place is None else place)
            cauchy = base.cauchy.copy()
            if mend is EXCHANGED:
                cauchy[jobs] = cauchy[jobs[::-1]]
            else:
                cauchy[jobs] = np.einsum("jab,jb->ja", self.matrices[self.mends[k]][jobs], cauchy[jobs])
            yield Attempt((*base.steps, (place, mend)), cauchy, float(self.misfits[k]))


def _tells(group: Group, start: Attempt, found: Attempt) -> bool:
    """Are the changed stresses more than noise, before and after, and is less left in GPa too?

    Making a stress of noise smaller always helps, and beside a stress made larger every misfit is small.
    """
    before, typical = (float(typical_change(group.second(a.cauchy), group.rest)) for a in (start, found))
    if found.misfit * typical > LESS * start.misfit * before:
        return False
    size = len(group.jobs) ** 0.5
    places = found.touched
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
