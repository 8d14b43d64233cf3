"""Sign, unit, order and frame of the stresses, proved from the stresses and energies themselves.

The stresses of a set must follow one stiffness with the symmetry of the crystal, small even responses, and positive work in
every strain. The misfit of the set to this is compared with what it would be if one stress, or all, were changed in one of the
ways in which stresses go wrong. A change that takes away nearly all of a large misfit, and is needed for that, is a proof.
A factor common to all stresses leaves no misfit; energies of the same jobs show it: E - E0 = V0 eta:(S + S0)/2 + O(eta^3).
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace
from functools import cached_property

import numpy as np

from strainkit.collect.mends import FACTORS, Mend, mends, order_words, unit_words
from strainkit.collect.paths import energy_ratios
from strainkit.collect.table import StressRecord
from strainkit.design.jobs import StrainJob
from strainkit.design.model import LinearModel, build_model
from strainkit.findings import Finding, finding
from strainkit.run.plan import Plan
from strainkit.tensors.arrays import FloatArray
from strainkit.tensors.leastsquares import factorise
from strainkit.tensors.sixvectors import from_mandel, stress_from_voigt, stress_to_voigt, to_mandel
from strainkit.tensors.strain import pk2_from_cauchy

__all__ = ["prove"]

#: misfit that the set is weighed in, as a part of its typical stress
WEIGHT = 0.01
#: even response at the largest strain: this part of the typical stress, or this many times the strain
EVEN, EVEN_PER_STRAIN = 0.2, 20.0
#: a change must take the misfit (root of the sum of squares) down to this part of it, and to this part of the typical stress
PART, CLEAN = 0.35, 0.15
#: a single stress that is changed must be so many times larger than what is left per job
LOUD = 5.0
#: how often a set of mere noise may be explained by chance
CHANCE = 0.02
#: misfit below this part of the typical stress is not looked into; below the second not for two faults at a time
NOTABLE, NOTABLE_TWICE = 0.003, 0.03
#: jobs beyond which single jobs are not tried, and beyond which nothing is
MANY, TOO_MANY = 150, 600
#: faults at one time, and partial explanations that are followed
DEEPEST, WIDTH = 3, 6

Refused = tuple[Finding, tuple[str, ...]]


@dataclass(frozen=True)
class _Set:
    """The stresses of a strain set and the model they must follow."""

    records: list[StressRecord]
    jobs: list[StrainJob]
    cauchy: FloatArray
    to_second: FloatArray
    model: LinearModel
    basis: FloatArray
    signal: float
    rest: int | None
    spare: int

    @classmethod
    def of(cls, plan: Plan, pairs: list[tuple[StrainJob, StressRecord]]) -> _Set:
        jobs, records = [job for job, _ in pairs], [record for _, record in pairs]
        gradients = np.array([job.gradient for job in jobs])
        cauchy = to_mandel(stress_from_voigt(np.array([record.stress for record in records])))
        to_second = _to_second(gradients)
        model = build_model(np.array([job.strain for job in jobs]), plan.symmetry.rotations, plan.basis.matrices)
        second = np.einsum("jab,jb->ja", to_second, cauchy)
        signal = float(_typical(second))
        largest = float(np.abs(model.signed_magnitudes).max())
        width = model.matrix.shape[1]
        even = np.arange(width)[model.even]
        prior = np.zeros((len(even), width))
        prior[np.arange(len(even)), even] = WEIGHT / max(EVEN, EVEN_PER_STRAIN * largest)
        stacked = np.vstack([model.matrix, prior])
        u, s, _ = np.linalg.svd(stacked / np.maximum(np.linalg.norm(stacked, axis=0), 1e-300), full_matrices=False)
        basis = u[: len(model.matrix), s > 1e-9 * s[0]]
        rest = next((i for i, job in enumerate(jobs) if not job.shape), None)
        spare = 6 * len(jobs) - factorise(model.matrix).rank
        return cls(records, jobs, cauchy, to_second, model, basis, signal, rest, spare)

    def misfits(self, cauchy: FloatArray) -> FloatArray:
        """Roots (k,) of the sums of squares of all that does not fit in sets (k, jobs, 6), in units of the typical stress."""
        second = np.einsum("jab,kjb->kja", self.to_second, cauchy)
        rows = np.concatenate([second[:, j] @ p for j, p in enumerate(self.model.projections)], axis=1)
        allowed = (rows**2).sum(axis=1)
        left = allowed - ((rows @ self.basis) ** 2).sum(axis=1)
        outside = (second**2).sum(axis=(1, 2)) - allowed  # components that symmetry forbids
        at_rest = second[:, self.rest] if self.rest is not None else second.mean(axis=1)
        work = np.einsum("ja,kja->kj", self.directions, second - at_rest[:, None])
        negative = (np.minimum(work, 0.0) ** 2).sum(axis=1)
        # stresses made small do not fit better, and large ones do not make the others small
        typical = np.minimum(self.signal, _typical(second))
        return np.asarray(np.sqrt(np.maximum(left, 0.0) + np.maximum(outside, 0.0) + negative) / typical)

    @cached_property
    def directions(self) -> FloatArray:
        """Strains (jobs, 6), Mandel, of length one; zero at rest."""
        strains = to_mandel(np.array([job.strain for job in self.jobs]))
        sizes = np.linalg.norm(strains, axis=1, keepdims=True)
        return np.asarray(strains / np.where(sizes > 0, sizes, 1.0))


def _to_second(gradients: FloatArray) -> FloatArray:
    """Matrices (jobs, 6, 6) from Cauchy to second Piola-Kirchhoff stress, both Mandel."""
    units = from_mandel(np.eye(6))
    return np.array([to_mandel(pk2_from_cauchy(units, np.broadcast_to(f, (6, 3, 3)))).T for f in gradients])


def _typical(second: FloatArray) -> FloatArray:
    """Typical change of stress (norm, GPa) of sets (..., jobs, 6), whatever single jobs do; the unstrained job counts not."""
    apart = np.linalg.norm(second - np.median(second, axis=-2, keepdims=True), axis=-1)
    middle = np.nanmedian(np.where(apart > 0, apart, np.nan), axis=-1)
    return np.asarray(np.maximum(np.nan_to_num(middle), 1e-9))


@dataclass(frozen=True)
class _Try:
    """Some changes, each of one job or (None) of all, and the misfit that is left."""

    steps: tuple[tuple[int | None, Mend], ...]
    cauchy: FloatArray
    misfit: float


def prove(plan: Plan, done: Sequence[tuple[StrainJob, StressRecord]]) -> list[Refused]:
    """Findings about sign, unit, order and frame, each with the jobs that it refuses."""
    pairs = [(job, record) for job, record in done if job.kind in ("reference", "strained")]
    strained = sum(bool(job.shape) for job, _ in pairs)
    if strained < 2 or len(pairs) > TOO_MANY:
        return []
    group = _Set.of(plan, pairs)
    start = _Try((), group.cauchy, float(group.misfits(group.cauchy[None])[0]))
    best = start
    found: list[Refused] = []
    if start.misfit > NOTABLE * len(pairs) ** 0.5:
        best, rivals = _search(
            group, start, mends(group.records, np.array([plan.crystal.lattice @ j.gradient.T for j in group.jobs]))
        )
        found = _report(group, start, best, rivals)
    return found + _by_energy(plan, group, best.cauchy)


def _search(group: _Set, start: _Try, choices: list[Mend]) -> tuple[_Try, list[_Try]]:
    """The fewest changes that take the misfit away, and others that do it as well; the start when none does."""
    places: list[int | None] = [None, *(range(len(group.jobs)) if len(group.jobs) <= MANY else ())]
    frontier = [start]
    deepest = DEEPEST if start.misfit > NOTABLE_TWICE * len(group.jobs) ** 0.5 else 1
    for depth in range(1, deepest + 1):
        tried = [new for base in frontier for new in _changed(group, base, places, choices)]
        tried.sort(key=lambda t: (t.misfit, t.steps[-1][0] is not None))
        # in so many tries, a vector of so many random components becomes so short by chance
        lucky = (CHANCE / len(places) / len(choices)) ** (depth / max(group.spare, 1))
        need = min(PART, lucky) * start.misfit
        good = [t for t in tried if t.misfit < need and t.misfit < CLEAN * len(group.jobs) ** 0.5 and _tells(group, t)]
        if good:
            best = good[0]
            rivals = [t for t in good[1:] if t.misfit < 3 * best.misfit + 0.01 and _differs(t, best)]
            return best, rivals[:3]
        frontier = _distinct(tried, WIDTH)
    return start, []


def _tells(group: _Set, found: _Try) -> bool:
    """Are the changed stresses more than noise? Making a stress of noise smaller always helps."""
    noise = found.misfit * group.signal / len(group.jobs) ** 0.5
    return all(np.linalg.norm(found.cauchy[place]) > LOUD * noise for place, _ in found.steps if place is not None)


def _differs(one: _Try, other: _Try) -> bool:
    return not np.allclose(one.cauchy, other.cauchy, rtol=1e-6, atol=1e-9)


def _distinct(tried: list[_Try], most: int) -> list[_Try]:
    kept: list[_Try] = []
    for candidate in tried:
        if all(_differs(candidate, other) for other in kept):
            kept.append(candidate)
        if len(kept) == most:
            break
    return kept


def _changed(group: _Set, base: _Try, places: list[int | None], choices: list[Mend]) -> list[_Try]:
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
    return [_Try((*base.steps, step), cauchy, float(m)) for step, cauchy, m in zip(steps, sets, misfits, strict=True)]


def _report(group: _Set, start: _Try, best: _Try, rivals: list[_Try]) -> list[Refused]:
    """One finding a change that is needed."""
    found: list[Refused] = []
    labels = tuple(job.label for job in group.jobs)
    for index, (place, mend) in enumerate(best.steps):
        others = [step for i, step in enumerate(best.steps) if i != index]
        text = (
            f"{mend.name}: changed, the set fits one stiffness with positive work in every strain to "
            f"{100 * best.misfit:.2g} % of its typical stress, as it is to {100 * start.misfit:.2g} %"
        )
        if others:
            text += " (with another change, see the other findings)"
        same = sorted(
            {_words(group, rival.steps[index]) for rival in rivals if len(rival.steps) > index} - {_words(group, (place, mend))}
        )
        if same:
            text += f"; as good: {'; '.join(same)}"
        refused = labels if place is None else (labels[place],)
        refused += tuple(labels[r.steps[index][0]] for r in rivals if r.steps[index][0] is not None)  # type: ignore[index]
        where = "strain set" if place is None else labels[place]
        found.append((finding(mend.code, where, text + _remedy(group, place, mend)), tuple(dict.fromkeys(refused))))
    return found


def _words(group: _Set, step: tuple[int | None, Mend]) -> str:
    place, mend = step
    return f"{'all' if place is None else group.jobs[place].label}: {mend.name}"


def _remedy(group: _Set, place: int | None, mend: Mend) -> str:
    record = group.records[0 if place is None else place]
    if place is not None:
        return f"; mend {'this line of the table' if record.program == 'table' else record.file}, not the others"
    if mend.code == "stress-sign":
        now = str(record.settings.get("stress_sign", "tension"))
        return f"; give --stress-sign {'tension' if now == 'compression' else 'compression'}"
    if mend.code == "stress-unit":
        option = unit_words(record, mend.factor)
        return f"; give {option}" if option else ""
    if mend.code == "stress-order":
        return f'; give --stress-order "{order_words(record, mend.order)}"'
    return "; the stress must be in the axes of the cell beside it, in a table in those of the reference cell"


def _by_energy(plan: Plan, group: _Set, cauchy: FloatArray) -> list[Refused]:
    """A factor common to all stresses (jobs, 6), Mandel, from the energies of the same jobs."""
    voigt = stress_to_voigt(from_mandel(cauchy))
    records = [replace(record, stress=stress) for record, stress in zip(group.records, voigt, strict=True)]
    ratios = energy_ratios(plan, list(zip(group.jobs, records, strict=True)))
    values = np.array([ratio for ratio in ratios.values() if ratio > 0])
    if len(values) < 0.75 * len(ratios) or not len(values):
        return []
    logs = np.log10(values)
    middle = float(np.median(logs))
    if np.median(np.abs(logs - middle)) > 0.06 or (len(values) > 2 and (np.abs(logs - middle) > 0.15).mean() > 0.25):
        return []
    sizes = [sign * float(np.log10(f)) for f in FACTORS for sign in (1, -1)]
    nearest = min(sizes, key=lambda s: abs(s - middle))
    if abs(nearest - middle) > 0.06:
        return []
    option = unit_words(group.records[0], 10**nearest)
    word = f"{10**-middle:.4g} times what" if middle < 0 else f"1/{10**middle:.4g} of what"
    text = f"the stresses are {word} the energies of the same jobs ask for ({len(values)} comparisons agree)"
    text += f": give {option}" if option else ""
    text += _other_reading(plan, middle)
    return [(finding("stress-unit", "strain set", text), tuple(job.label for job in group.jobs))]


def _other_reading(plan: Plan, middle: float) -> str:
    """Could the energies be those of one atom, or in another unit?"""
    atoms = len(plan.crystal.numbers)
    readings = {
        "energies of one atom": -np.log10(atoms),
        "energies in hartree": -np.log10(27.2114),
        "energies in Ry": -np.log10(13.6057),
    }
    close = [name for name, size in readings.items() if abs(size - middle) < 0.06]
    return f"; or {' or '.join(close)}, where those of the cell in eV belong" if close else ""
