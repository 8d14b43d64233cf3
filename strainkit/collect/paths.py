"""Energies, ions and forces along a shape: has a job fallen into another minimum, and are its ions relaxed?"""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np

from strainkit.collect.table import StressRecord
from strainkit.design.jobs import StrainJob
from strainkit.findings import Finding, finding
from strainkit.run.plan import Plan
from strainkit.tensors.arrays import FloatArray
from strainkit.tensors.sixvectors import stress_from_voigt
from strainkit.tensors.strain import green_lagrange, pk2_from_cauchy
from strainkit.units import EV_PER_A3_IN_GPA

__all__ = ["energy_jumps", "energy_ratios", "ions_elsewhere", "left_over_forces"]

Done = Sequence[tuple[StrainJob, StressRecord]]

#: an energy is off when it misses by this part of the strain energy, so many times the spread of the others, and this (eV)
JUMP, JUMP_SPREAD, JUMP_EV = 0.5, 6.0, 1e-4
#: ions are elsewhere when they move this far (A), and so many times farther per strain than in the other jobs
ELSEWHERE_A, ELSEWHERE = 0.15, 4.0
#: left-over forces matter when they put the stress off by this part of its change under strain
FORCES_MATTER = 0.03
#: force constant (eV/A^2) of an ion that has not moved at all: common practice, no source
_SPRING = 10.0


def _set(done: Done) -> list[tuple[StrainJob, StressRecord]]:
    return [(job, record) for job, record in done if job.kind in ("reference", "strained")]


def _second(pairs: Done) -> FloatArray:
    """Second Piola-Kirchhoff stresses (n, 3, 3), GPa."""
    stresses = stress_from_voigt(np.array([record.stress for _, record in pairs]))
    return pk2_from_cauchy(stresses, np.array([job.gradient for job, _ in pairs]))


def _by_energy(plan: Plan, done: Done) -> dict[str, tuple[float, float, StrainJob]]:
    """Label -> E - E0 and V0 eta:(S + S0)/2, eV, of every strained job with an energy; none without the reference."""
    rest = next(((j, r) for j, r in done if j.kind == "reference" and r.energy is not None), None)
    if rest is None or rest[1].energy is None:
        return {}
    strained = [(job, record) for job, record in done if job.kind == "strained" and record.energy is not None]
    second = _second([rest, *strained])
    strains = green_lagrange(np.array([job.gradient for job, _ in (rest, *strained)]))
    work = 0.5 * plan.crystal.volume / EV_PER_A3_IN_GPA * (strains * (second + second[0])).sum(axis=(1, 2))
    return {
        job.label: (record.energy - rest[1].energy, energy, job)
        for (job, record), energy in zip(strained, work[1:].tolist(), strict=True)
        if record.energy is not None
    }


def _partners(found: dict[str, tuple[float, float, StrainJob]]) -> list[tuple[str, ...]]:
    """Labels of pairs of opposite strain, and of jobs alone."""
    places = {(job.shape, round(job.magnitude, 9)): label for label, (_, _, job) in found.items()}
    groups: list[tuple[str, ...]] = []
    for (shape, size), label in places.items():
        other = places.get((shape, -size))
        if other is None or size > 0:
            groups.append((label,) if other is None else (label, other))
    return groups


def energy_ratios(plan: Plan, done: Done) -> dict[str, float]:
    """Strain energy by energies over that by stresses, of every pair (where a reference stress cancels) or lone job."""
    found = _by_energy(plan, _set(done))
    ratios = {}
    for labels in _partners(found):
        energy, work = (sum(found[label][i] for label in labels) for i in (0, 1))  # type: ignore[misc]
        if work != 0.0 and abs(energy) > 1e-7:
            ratios[labels[0]] = energy / work
    return ratios


def energy_jumps(plan: Plan, done: Done) -> list[Finding]:
    """Jobs whose energy is not the one that the stresses lead to while that of the others is."""
    found = _by_energy(plan, _set(done))
    groups = _partners(found)
    if len(groups) < 2:
        return []
    off = np.array([sum(found[x][0] - found[x][1] for x in labels) for labels in groups])
    size = np.array([sum(abs(found[x][1]) for x in labels) for labels in groups])
    # a small work may be the noise of its stress: weigh by what is usual at that strain
    strain = np.array([len(labels) * found[labels[0]][2].magnitude ** 2 for labels in groups])
    size = np.maximum(size, strain * np.median(size / strain))
    part = off / np.maximum(size, 1e-12)
    middle = float(np.median(part))
    spread = float(np.median(np.abs(part - middle)))
    # an energy of the reference that is off shifts every pair by the same amount and more, relatively, the smaller strain
    shift = off / np.array([len(labels) for labels in groups])
    constant = float(np.median(shift))
    if len(groups) > 2 and abs(constant) > JUMP_EV and np.all(np.abs(shift - constant) < 0.1 * abs(constant)):
        if np.abs(part).min() > JUMP and np.ptp(size) > 0.3 * size.max():
            text = f"its energy is off by {-1000 * constant:+.3g} meV from what every strained job says: another minimum?"
            return [finding("energy-jump", next(j.label for j, _ in done if j.kind == "reference"), text)]
        return []
    findings = []
    for labels, miss, whole, ratio in zip(groups, off, size, part, strict=True):
        if abs(ratio - middle) <= max(JUMP, JUMP_SPREAD * spread) or abs(miss - middle * whole) < JUMP_EV:
            continue
        label = max(labels, key=lambda x: abs(found[x][0] - found[x][1] * (1 + middle)))
        text = (
            f"its energy misses by {1000 * (miss - middle * whole):+.3g} meV what the stresses lead to "
            f"({1000 * whole / len(labels):.3g} meV): another minimum, or another calculation"
        )
        findings.append(finding("energy-jump", label, text))
    return findings


def ions_elsewhere(plan: Plan, done: Done) -> list[Finding]:
    """Jobs whose ions left the line that the others of the set follow."""
    moved = {job.label: (job, record.displacements) for job, record in _set(done) if record.displacements is not None}
    findings = []
    rest = next((d for job, d in moved.values() if not job.shape), None)
    if rest is not None and _largest(rest) > ELSEWHERE_A:
        label = next(job.label for job, _ in moved.values() if not job.shape)
        text = f"the ions of the unstrained job moved by up to {_largest(rest):.2g} A: the cell of the plan was not relaxed"
        findings.append(finding("ions-elsewhere", label, text))
    start = np.zeros_like(next(iter(moved.values()))[1]) if moved and rest is None else rest
    if start is None:
        return findings
    rates = {label: _largest(d - start) / abs(job.magnitude) for label, (job, d) in moved.items() if job.shape}
    if len(rates) < 3:
        return findings
    usual = float(np.median(list(rates.values())))
    for label, rate in rates.items():
        job, d = moved[label]
        far = _largest(d - start)
        if far > ELSEWHERE_A and rate > ELSEWHERE * usual:
            text = (
                f"an ion moved by {far:.2g} A, where the other jobs of the set let {usual * abs(job.magnitude):.2g} A "
                "expect: another minimum"
            )
            findings.append(finding("ions-elsewhere", label, text))
    return findings


def _largest(moves: FloatArray) -> float:
    return float(np.linalg.norm(moves, axis=1).max(initial=0.0))


def left_over_forces(plan: Plan, done: Done) -> list[Finding]:
    """Jobs whose ions are not relaxed enough: forces f leave the stress off by f.du/d(eta) / V.

    du/d(eta) is the way of the ions by the strain of the job, or by that of the set, whichever is larger. Of two directions
    among those of n atoms the product is |f| |du/d(eta)| / sqrt(3 n) typically; three times that is taken, at most all.
    """
    if plan.ions != "relaxed":
        return []
    pairs = [(job, record) for job, record in _set(done) if record.forces is not None and record.displacements is not None]
    if not pairs:
        return []
    rates = [np.linalg.norm(r.displacements) / abs(j.magnitude) for j, r in pairs if j.shape]  # type: ignore[arg-type]
    usual = float(np.median(rates)) if rates else 0.0
    size = float(np.median([abs(j.magnitude) for j, _ in pairs if j.shape] or [0.01]))
    second, strained = _second(pairs), np.array([bool(job.shape) for job, _ in pairs])
    rest = 0.0 if strained.all() else second[~strained][0]
    changes = np.linalg.norm(second - rest, axis=(1, 2))[strained]
    signal = float(np.median(changes)) if len(changes) else 0.0
    if signal == 0.0:
        return []
    findings = []
    for job, record in pairs:
        force = float(np.linalg.norm(record.forces))  # type: ignore[arg-type]
        rate = float(np.linalg.norm(record.displacements)) / abs(job.magnitude) if job.shape else usual  # type: ignore[arg-type]
        reach = max(rate, usual, force / _SPRING / size)
        doubt = force * reach * min(1.0, (3.0 / len(record.forces)) ** 0.5) / plan.crystal.volume * EV_PER_A3_IN_GPA  # type: ignore[arg-type]
        if doubt > FORCES_MATTER * signal:
            text = (
                f"largest force {record.max_force:.2g} eV/A: may put its stress off by {doubt:.2g} GPa "
                f"(a strain changes it by {signal:.2g}), {100 * doubt / signal:.2g} % of the constants; relax it harder"
            )
            findings.append(finding("forces-left", job.label, text))
    return findings
