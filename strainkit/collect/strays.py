"""Outputs in folders that are not theirs: matched to the plan by their cells, never by name or order."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace
from functools import cached_property
from pathlib import Path

import numpy as np

from strainkit.collect.match import LEAST_TOLERANCE, MismatchError, match
from strainkit.collect.readjob import Output, read_outputs, record_of
from strainkit.collect.returned import Returned
from strainkit.collect.scan import Folder, scan
from strainkit.collect.table import StressRecord
from strainkit.crystal.crystal import Crystal
from strainkit.design.jobs import StrainJob
from strainkit.errors import InputError
from strainkit.findings import Finding, finding
from strainkit.run.plan import Plan, job_folder
from strainkit.tensors.arrays import FloatArray

__all__ = ["place_strays"]

#: displaced cells are told apart when the best fits so many times better than the next, and by this much (A)
_BETTER, _BETTER_A = 3.0, 2e-3


@dataclass(frozen=True)
class _Keys:
    """Reduced lengths of the cell of every job, by which a cell is found among many."""

    plan: Plan

    @cached_property
    def lengths(self) -> FloatArray:
        return np.array([_key(self.plan.crystal.lattice @ job.gradient.T) for job in self.plan.jobs])

    def alike(self, returned: Returned) -> list[StrainJob]:
        """Jobs whose cells have the reduced lengths of a returned one."""
        key = _key(returned.lattice)
        slack = 4 * LEAST_TOLERANCE * key + 4 * returned.lattice_precision
        return [job for job, row in zip(self.plan.jobs, self.lengths, strict=True) if (np.abs(row - key) <= slack).all()]


def _key(lattice: FloatArray) -> FloatArray:
    from ase.geometry import minkowski_reduce

    lengths = np.sort(np.linalg.norm(minkowski_reduce(lattice)[0], axis=1))
    return np.append(lengths, abs(np.linalg.det(lattice)) ** (1 / 3))


def place_strays(
    run: Path, plan: Plan, records: Sequence[StressRecord], foreign: Sequence[Folder]
) -> tuple[list[StressRecord], list[Finding]]:
    """Give outputs that lie in another job's folder, or in a folder of no job, to the job whose cell they have.

    Parameters
    ----------
    run : path
    plan : Plan
    records : sequence of StressRecord
        From the jobs' own folders.
    foreign : sequence of Folder
        Folders of no job.

    Returns
    -------
    records : list of StressRecord
    findings : list of Finding
        About outputs that belong to no job.
    """
    lost = [scan(run, job_folder(r.label), plan.files) for r in records if _may_be_elsewhere(r)]
    keys = _Keys(plan)
    by_label = {record.label: record for record in records}
    doubts: list[Finding] = []
    for folder in [*lost, *foreign]:
        outputs = [output for output in read_outputs(run, folder) if output.finished]
        if not outputs or outputs[0].returned is None:
            continue
        own = by_label.get(folder.name.removeprefix(job_folder("")))
        jobs = _jobs_of(plan, keys, outputs[0].returned)
        if not jobs:
            if own is None:
                doubts.append(finding("unmatched-output", outputs[0].name, "its cell is that of no job of the plan"))
            continue
        free = [job for job in jobs if by_label[job.label].status != "done"]
        names = " or ".join(job.label for job in jobs)
        if len(jobs) == 1 and free:
            by_label[free[0].label] = _given(plan, free[0], folder, outputs, by_label[free[0].label])
            continue
        text = f"{outputs[0].name}: this is the cell of {names}"
        text += ", which settings alone could tell apart" if len(jobs) > 1 else ", which has an output of its own"
        if own is None:
            doubts.append(finding("unmatched-output", outputs[0].name, text.removeprefix(f"{outputs[0].name}: ")))
        else:
            found = finding("output-of-other-job", own.label, text)
            by_label[own.label] = replace(own, findings=(*own.findings, found))
    return [by_label[record.label] for record in records], doubts


def _may_be_elsewhere(record: StressRecord) -> bool:
    return record.status == "mismatch" and any(
        f.code in ("cell-mismatch", "cell-drifted", "ions-moved") for f in record.findings
    )


def _given(plan: Plan, job: StrainJob, folder: Folder, outputs: list[Output], before: StressRecord) -> StressRecord:
    """The record of a job from another folder than its own."""
    record = record_of(plan, job, replace(folder, links=()), outputs[:1])
    note = finding("matched-by-cell", job.label, f"{record.file}: in another folder, but of this job's cell")
    kept = tuple(f for f in before.findings if f.code == "link-not-followed")
    return replace(record, findings=(*record.findings, note, *kept), seen=before.seen)


def _jobs_of(plan: Plan, keys: _Keys, returned: Returned) -> list[StrainJob]:
    """Jobs that a returned structure can be of: one, or several with the same cell."""
    fits = []
    for job in keys.alike(returned):
        try:
            cell: Crystal = plan.starting_cell(job) if _at_start(plan, job) else plan.crystal.deformed(job.gradient)
            found = match(cell, returned)
        except (MismatchError, InputError):
            continue
        turned = float(np.abs(found.rotation - np.eye(3)).max())
        fits.append((round(found.farthest, 4), round(turned, 6), job))
    if len(fits) < 2:
        return [job for _, _, job in fits]
    fits.sort(key=lambda item: item[:2])
    least = fits[0][0]
    fits = [item for item in fits if item[0] <= max(_BETTER * least, least + _BETTER_A)]
    # other jobs are images of the same strain under the crystal's symmetry: the first will do
    return [job for _, _, job in fits if np.allclose(job.gradient, fits[0][2].gradient, rtol=0, atol=1e-12)]


def _at_start(plan: Plan, job: StrainJob) -> bool:
    return plan.ions == "clamped" or job.kind == "displaced"
