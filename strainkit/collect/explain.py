"""Which changes to the stresses of a set would make it fit, and which of them are needed."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from strainkit.collect.consistency import Group, typical_change
from strainkit.collect.mends import Mend
from strainkit.tensors.arrays import FloatArray

__all__ = ["MANY", "Attempt", "explain", "unchanged"]

#: a change must take the misfit (root of the sum of squares) down to this part of it, and to this part of the typical stress
PART, CLEAN = 0.35, 0.15
#: a single stress that is changed must be so many times larger than what is left per job
LOUD = 5.0
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
    places: list[int | None] = [None, *(range(len(group.jobs)) if len(group.jobs) <= MANY else ())]
    frontier = [start]
    deepest = DEEPEST if start.misfit > NOTABLE_TWICE * len(group.jobs) ** 0.5 else 1
    most = max(1, sum(bool(job.shape) for job in group.jobs) // 3)  # of a few jobs, two wrong ones prove nothing
    for depth in range(1, deepest + 1):
        tried = [new for base in frontier for new in _changed(group, base, places, choices) if new.singles <= most]
        tried.sort(key=lambda t: (t.misfit, t.steps[-1][0] is not None))
        # in so many tries, a vector of so many random components becomes so short by chance
        lucky = (CHANCE / len(places) / len(choices)) ** (depth / max(group.spare, 1))
        need = min(PART, lucky) * start.misfit
        good = [t for t in tried if t.misfit < need and t.misfit < CLEAN * len(group.jobs) ** 0.5 and _tells(group, start, t)]
        if good:
            best = good[0]
            rivals = [t for t in good[1:] if t.misfit < 3 * best.misfit + 0.01 and _differs(t, best)]
            return best, rivals[:3]
        # a change of all stresses may help only together with another one
        frontier = _distinct(tried, WIDTH) + [t for t in tried if depth == 1 and not t.singles]
    return start, []


def _tells(group: Group, start: Attempt, found: Attempt) -> bool:
    """Are the changed stresses more than noise, before and after? Making a stress of noise smaller always helps."""
    second = np.einsum("jab,jb->ja", group.to_second, found.cauchy)
    typical = float(typical_change(second, group.rest))
    size = len(group.jobs) ** 0.5
    places = [place for place, _ in found.steps if place is not None]
    slight = any(np.linalg.norm(group.cauchy[place]) < SLIGHT * typical for place in places)
    if slight and start.misfit <= NOTABLE_TWICE * size:
        return False
    return all(np.linalg.norm(found.cauchy[place]) > LOUD * found.misfit * typical / size for place in places)


def _differs(one: Attempt, other: Attempt) -> bool:
    return not np.allclose(one.cauchy, other.cauchy, rtol=1e-6, atol=1e-9)


def _distinct(tried: list[Attempt], most: int) -> list[Attempt]:
    kept: list[Attempt] = []
    for candidate in tried:
        if all(_differs(candidate, other) for other in kept):
            kept.append(candidate)
        if len(kept) == most:
            break
    return kept


def _changed(group: Group, base: Attempt, places: list[int | None], choices: list[Mend]) -> list[Attempt]:
    """One more change to a set, each in each place."""
    steps, sets = [], []
    for mend in choices:
        # a factor common to all stresses leaves the misfit as it is
        for place in places[1:] if mend.code == "stress-unit" else places:
            if place is None:
                cauchy = np.einsum("jab,jb->ja", mend.matrices, base.cauchy)
            else:
                cauchy = base.cauchy.copy()
                cauchy[place] = mend.matrices[place] @ cauchy[place]
            steps.append((place, mend))
            sets.append(cauchy)
    if not sets:
        return []
    misfits = group.misfits(np.array(sets))
    return [Attempt((*base.steps, step), cauchy, float(m)) for step, cauchy, m in zip(steps, sets, misfits, strict=True)]
