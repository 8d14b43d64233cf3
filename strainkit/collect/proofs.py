"""Sign, unit, order and frame of the stresses, proved from the stresses and energies themselves.

The stresses of a set must follow one stiffness with the symmetry of the crystal, small even responses, and positive work in
every strain. The misfit of the set to this is compared with what it would be if one stress, or all, were changed in one of the
ways in which stresses go wrong. A change that takes away nearly all of a large misfit, and is needed for that, is a proof.
A factor common to all stresses leaves no misfit; energies of the same jobs show it: E - E0 = V0 eta:(S + S0)/2 + O(eta^3).
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace

import numpy as np

from strainkit.collect.consistency import Group
from strainkit.collect.explain import Attempt, explain, unchanged
from strainkit.collect.mends import FACTORS, Mend, mends, order_words, unit_words
from strainkit.collect.paths import energy_ratios
from strainkit.collect.table import TABLE_PROGRAM, StressRecord
from strainkit.design.jobs import StrainJob
from strainkit.findings import Finding, finding
from strainkit.run.plan import Plan
from strainkit.tensors.arrays import FloatArray
from strainkit.tensors.sixvectors import from_mandel, stress_to_voigt, to_mandel
from strainkit.units import EV_PER_A3_IN_GPA

__all__ = ["prove"]

#: jobs beyond which nothing is proved
TOO_MANY = 600
#: misfit a job, in parts of the typical change of stress, that is too large to say nothing
INCONSISTENT = 0.10
#: decades by which a factor may miss a known one, and by which single comparisons may miss the usual one
NEAR, SCATTER = 0.06, 0.15
#: part of the scatter of energies that may be left about a straight line
STRAIGHT = 0.02

Refused = tuple[Finding, tuple[str, ...]]


def prove(plan: Plan, done: Sequence[tuple[StrainJob, StressRecord]]) -> list[Refused]:
    """Findings about sign, unit, order and frame, each with the jobs that it refuses."""
    pairs = [(job, record) for job, record in done if job.kind in ("reference", "strained")]
    if sum(bool(job.shape) for job, _ in pairs) < 2 or len(pairs) > TOO_MANY:
        return []
    group = Group.of(plan, pairs)
    start = unchanged(group)
    lattices = np.array([plan.crystal.lattice @ job.gradient.T for job in group.jobs])
    best, rivals = _by_their_energies(plan, group, *explain(group, start, mends(group.records, lattices)))
    found = _report(group, start, best, rivals) or _unexplained(group, start)
    return found + _common_factor(plan, group, best.cauchy)


def _report(group: Group, start: Attempt, best: Attempt, rivals: list[Attempt]) -> list[Refused]:
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
        refused = labels if place is None else tuple(labels[job] for job in place)
        refused += tuple(labels[job] for r in rivals if len(r.steps) > index for job in r.steps[index][0] or ())
        where = labels[place[0]] if place is not None and len(place) == 1 else "strain set"
        if place is not None and len(place) > 1:
            text = f"{_names(group, place)}: {text}"
        found.append((finding(mend.code, where, text + _remedy(group, place, mend)), tuple(dict.fromkeys(refused))))
    return found


def _unexplained(group: Group, start: Attempt) -> list[Refused]:
    """A misfit that none of the known changes takes away: large noise, or a fault of another kind."""
    size = len(group.jobs) ** 0.5
    if start.misfit < INCONSISTENT * size:
        return []
    text = f"the stresses miss one stiffness by {100 * start.misfit / size:.2g} % of their typical change a job"
    worst, left = group.without_one()
    labels = [group.jobs[index].label for index in worst]
    if left < 0.5 * start.misfit and group.spare > 6 and len(labels) < len(group.jobs):
        text += f", without {' or '.join(labels)} by {100 * left / size:.2g} %: look there"
        return [(finding("set-inconsistent", labels[0] if len(labels) == 1 else "strain set", text), ())]
    text += ": large noise (a low cutoff, loose tolerances), or more than one fault"
    return [(finding("set-inconsistent", "strain set", text), ())]


def _names(group: Group, place: tuple[int, ...] | None) -> str:
    labels = ["all"] if place is None else [group.jobs[job].label for job in place]
    return ", ".join(labels[:4]) + (f" and {len(labels) - 4} more" if len(labels) > 4 else "")


def _words(group: Group, step: tuple[tuple[int, ...] | None, Mend]) -> str:
    place, mend = step
    return f"{_names(group, place)}: {mend.name}"


def _remedy(group: Group, place: tuple[int, ...] | None, mend: Mend) -> str:
    record = group.records[0 if place is None else place[0]]
    typed = record.program == TABLE_PROGRAM
    if place is not None and len(place) > 1:
        return f"; mend {'these lines of the table' if typed else 'these outputs'}, not the others"
    if place is not None:
        return f"; mend {'this line of the table' if typed else record.file}, not the others"
    if mend.code == "stress-sign":
        now = str(record.settings.get("stress_sign", "tension"))
        return _give(typed, f"--stress-sign {'tension' if now == 'compression' else 'compression'}")
    if mend.code == "stress-unit":
        return _give(typed, unit_words(record, mend.factor))
    if mend.code == "stress-order":
        return _give(typed, f'--stress-order "{order_words(record, mend.order)}"')
    return "; the stress must be in the axes of the cell beside it, in a table in those of the reference cell"


def _give(typed: bool, option: str) -> str:
    if typed:
        return f"; give {option}" if option else ""
    return f"; mend the files, or give their numbers with --table and {option}" if option else "; mend the files"


def _ratios(plan: Plan, group: Group, cauchy: FloatArray) -> FloatArray:
    """Strain energies by energies over those by stresses (jobs, 6), Mandel."""
    voigt = stress_to_voigt(from_mandel(cauchy))
    records = [replace(record, stress=stress) for record, stress in zip(group.records, voigt, strict=True)]
    return np.array(list(energy_ratios(plan, list(zip(group.jobs, records, strict=True))).values()))


def _slope(plan: Plan, group: Group, cauchy: FloatArray) -> FloatArray:
    """The same without a reference: one ratio, the slope of the energies against V0 eta:(S + S0)/2, S0 a mean; or none.

    Only where a straight line holds for nearly all of the scatter of the energies.
    """
    known = [index for index, record in enumerate(group.records) if record.energy is not None]
    if len(known) < 4:
        return np.zeros(0)
    second = group.second(cauchy)
    strains = to_mandel(np.array([job.strain for job in group.jobs]))
    work = plan.crystal.volume / EV_PER_A3_IN_GPA * 0.5 * (strains * (second + second.mean(axis=0))).sum(axis=1)[known]
    energies = np.array([group.records[index].energy for index in known], dtype=float)
    work, energies = work - work.mean(), energies - energies.mean()
    slope = float(work @ energies / max(float(work @ work), 1e-300))
    off = float(((energies - slope * work) ** 2).sum())
    return np.array([slope]) if off < STRAIGHT * float(energies @ energies) else np.zeros(0)


def _by_their_energies(plan: Plan, group: Group, best: Attempt, rivals: list[Attempt]) -> tuple[Attempt, list[Attempt]]:
    """Of explanations that are equally good for the stresses, those that are best for the energies."""
    tries = [best, *rivals]
    ratios = [_ratios(plan, group, t.cauchy) for t in tries]
    if not rivals or not all(len(r) and (r > 0).all() for r in ratios):
        return best, rivals
    off = [abs(float(np.median(np.log10(r)))) for r in ratios]
    order = sorted(range(len(tries)), key=off.__getitem__)
    return tries[order[0]], [tries[i] for i in order[1:] if off[i] < off[order[0]] + 0.3]


def _common_factor(plan: Plan, group: Group, cauchy: FloatArray) -> list[Refused]:
    """A factor common to all stresses (jobs, 6), Mandel, from the energies of the same jobs."""
    ratios = _ratios(plan, group, cauchy)
    if not len(ratios) and group.rest is None:
        ratios = _slope(plan, group, cauchy)
    values = np.array([ratio for ratio in ratios if ratio > 0])
    if len(values) < 0.75 * len(ratios) or not len(values):
        return []
    logs = np.log10(values)
    middle = float(np.median(logs))
    if np.median(np.abs(logs - middle)) > NEAR or (len(values) > 2 and (np.abs(logs - middle) > SCATTER).mean() > 0.25):
        return []
    sizes = [sign * float(np.log10(f)) for f in FACTORS for sign in (1, -1)]
    nearest = min(sizes, key=lambda s: abs(s - middle))
    if abs(nearest - middle) > NEAR:
        return []
    word = f"{10**-middle:.4g} times what" if middle < 0 else f"1/{10**middle:.4g} of what"
    text = f"the stresses are {word} the energies of the same jobs ask for (comparisons: {len(values)})"
    first = group.records[0]
    text += _give(first.program == TABLE_PROGRAM, unit_words(first, 10**nearest))
    if len(values) == 1:
        text += "; or the energy of the reference or of the strained jobs is of another minimum"
    atoms = len(plan.crystal.numbers)
    if abs(middle + np.log10(atoms)) < NEAR:
        text += f"; or the energies are those of one of the {atoms} atoms, where that of the cell belongs"
    return [(finding("stress-unit", "strain set", text), tuple(job.label for job in group.jobs))]
