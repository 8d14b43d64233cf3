"""Is there any trace of a fault in the numbers? An independent look at a synthetic or real set, without strainkit's own fit.

Least squares of S = S0 + C eta + quadratic answers of each shape under the crystal's rotations, with the images of
single-sided shapes; its misfit, the energies and the smallest eigenvalue are looked at. Coarse on purpose: it only separates
faults that no one could see in the numbers from those that leave a trace.
"""

from __future__ import annotations

import numpy as np

from strainkit.tensors.sixvectors import to_mandel
from strainkit.tensors.strain import pk2_from_cauchy
from strainkit.units import EV_PER_A3_IN_GPA
from support.blind.sets import StrainSet
from support.blind.text import editor

#: misfit, as a part of the typical stress change, above which the numbers are said to show something
PART = 0.05
#: energies that miss the work of the stresses by more than this part of it
ENERGY_PART = 0.25


def trace(work: StrainSet, used: set[str]) -> str:
    """What the numbers of the used jobs show, in words; empty when nothing."""
    jobs, stresses, energies = [], [], []
    for job in work.plan.strain_set:
        if job.label not in used:
            continue
        if work.real:
            turned = editor(work, job.label).stress()
            if not np.isfinite(turned).all():
                continue
            energies.append(editor(work, job.label).energy())
        else:
            output = work.outputs.get(job.label)
            if output is None or output.stress is None:
                continue
            planned = work.plan.crystal.deformed(job.gradient).lattice
            left, _, right = np.linalg.svd(output.cell.lattice.T @ np.linalg.inv(planned).T)
            back = np.eye(3) if work.kind == "table" else (left @ right).T
            turned = back @ output.stress @ back.T
            silent = output.energy is None or (work.kind == "table" and not work.table_energies)
            energies.append(np.nan if silent else output.energy)
        jobs.append(job)
        stresses.append(pk2_from_cauchy(turned, job.gradient))
    if len(jobs) < 2:
        return ""
    said = []
    misfit, stiffness = _least_squares(work, jobs, stresses)
    if misfit > PART:
        said.append(f"one stiffness missed by {100 * misfit:.2g} % of the typical change")
    smallest = float(np.linalg.eigvalsh(stiffness)[0])
    if smallest < -0.02 * float(np.abs(stiffness).max()):
        said.append(f"smallest eigenvalue {smallest:.3g} GPa")
    if np.isfinite(energies).all():
        said += _energies(work, jobs, stresses, np.array(energies))
    return "; ".join(said)


def _energies(work: StrainSet, jobs: list, stresses: list[np.ndarray], energies: np.ndarray) -> list[str]:
    """Energy differences of neighbouring jobs against the work of the mean stress on the way from one to the other."""
    volume = work.plan.crystal.volume / EV_PER_A3_IN_GPA
    near = [(i, j) for i in range(len(jobs)) for j in range(i)]
    pairs = [(i, j) for i, j in near if 0 in (jobs[i].shape, jobs[j].shape) or jobs[i].shape == jobs[j].shape]
    done = [volume * float(((stresses[i] + stresses[j]) * (jobs[i].strain - jobs[j].strain)).sum()) / 2 for i, j in pairs]
    miss = [energies[i] - energies[j] - work_done for (i, j), work_done in zip(pairs, done, strict=True)]
    if not pairs or np.abs(miss).max() <= ENERGY_PART * np.abs(done).max():
        return []
    return [f"energies miss the work of the stresses by {100 * np.abs(miss).max() / np.abs(done).max():.2g} %"]


def _least_squares(work: StrainSet, jobs: list, stresses: list[np.ndarray]) -> tuple[float, np.ndarray]:
    """Misfit as a part of the typical stress change, and the stiffness (6, 6), Mandel."""
    rows, values, invariants = [], [], work.plan.symmetry.invariants
    shapes = sorted({j.shape for j in jobs if j.shape})
    sides = {s: {np.sign(j.magnitude) for j in jobs if j.shape == s} for s in shapes}
    for job, stress in zip(jobs, stresses, strict=True):
        images = [(job.strain, stress)]
        if job.shape and len(sides[job.shape]) == 1:
            images += [(r @ job.strain @ r.T, r @ stress @ r.T) for r in work.plan.symmetry.rotations
                       if np.allclose(r @ job.strain @ r.T, -job.strain, atol=5e-2 * abs(job.magnitude))][:1]  # fmt: skip
        for strain, value in images:
            row = np.zeros((6, 6 + len(invariants) + 6 * len(shapes)))
            row[:, :6] = np.eye(6)
            row[:, 6 : 6 + len(invariants)] = np.array([m @ to_mandel(strain) for m in invariants]).T
            if job.shape:
                start = 6 + len(invariants) + 6 * shapes.index(job.shape)
                row[:, start : start + 6] = np.eye(6) * (job.magnitude / 0.01) ** 2
            rows.append(row)
            values.append(to_mandel(value))
    matrix, target = np.concatenate(rows), np.concatenate(values)
    solution, _, rank, _ = np.linalg.lstsq(matrix, target, rcond=1e-10)
    stiffness = np.einsum("n,nij->ij", solution[6 : 6 + len(invariants)], invariants)
    spare = max(len(target) - rank, 1)
    changes = np.array([to_mandel(s - stresses[0]) for s in stresses[1:]])
    typical = float(np.sqrt(np.mean(changes**2))) or 1.0
    return float(np.sqrt(((matrix @ solution - target) ** 2).sum() / spare)) / typical, stiffness
