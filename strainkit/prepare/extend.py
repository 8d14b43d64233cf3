"""Adding jobs to a run folder that may already hold results: what is there stays as it is."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import replace
from pathlib import Path
from typing import Any

import numpy as np

from strainkit.design.expect import expect
from strainkit.design.extend import finer_jobs, restoring_jobs
from strainkit.design.jobs import StrainJob
from strainkit.errors import InputError
from strainkit.prepare.calculation import recorded_calculation
from strainkit.prepare.runfolder import files_of
from strainkit.prepare.settings import Settings
from strainkit.prepare.starts import learned_starts
from strainkit.prepare.writers import default_formats
from strainkit.run.files import atomic_write, checksum
from strainkit.run.plan import Plan, job_folder
from strainkit.tensors.arrays import FloatArray

__all__ = ["adopt_jobs", "at_finer_settings", "extend_plan", "write_extension"]


def extend_plan(plan: Plan, new: Sequence[StrainJob], displacements: Mapping[str, FloatArray] | None = None) -> Plan:
    """The plan with further jobs behind the old ones, and what the whole strain set promises.

    Parameters
    ----------
    plan : Plan
    new : sequence of StrainJob
    displacements : mapping, optional
        What relaxed in the finished jobs, as `learned_starts` takes it.
    """
    starts = learned_starts(plan, new, displacements or {})
    longer = replace(plan, jobs=(*plan.jobs, *new), starts={**plan.starts, **starts})
    promise, doubts = expect(longer.strain_set, plan.symmetry.rotations, plan.basis, plan.expectation.noise)
    kept = tuple(f for f in plan.findings if f.code not in ("few-spare-degrees", "target-error"))
    return replace(longer, expectation=promise, findings=(*kept, *doubts))


def adopt_jobs(plan: Plan, adopted: Sequence[StrainJob]) -> Plan:
    """The plan with jobs that are finished already, and of its own strained jobs only those that are needed beside them.

    These are the fewest that determine every constant; none when the adopted ones do. A reference job stays in any case, and
    so do displaced cells.
    """
    reference = [job for job in adopted if not job.shape][:1] or [plan.jobs[0]]
    others = [job for job in adopted if job.shape]
    first = max((job.shape for job in others), default=0)
    own = [replace(job, shape=job.shape + first) for job in plan.strain_set if job.shape]
    needed = restoring_jobs([*reference, *others], own, plan.symmetry, plan.basis, by_pairs=True)
    # of a pair whose one side is there already, only the other
    needed = [job for job in needed if not any(_same_strain(job, other) for other in others)]
    strained = (*reference, *others, *needed)
    jobs = (*strained, *(job for job in plan.jobs if job.kind == "displaced"))
    promise, doubts = expect(strained, plan.symmetry.rotations, plan.basis, plan.expectation.noise)
    kept = tuple(f for f in plan.findings if f.code not in ("few-spare-degrees", "target-error"))
    return replace(plan, jobs=jobs, expectation=promise, findings=(*kept, *doubts))


def _same_strain(one: StrainJob, other: StrainJob) -> bool:
    return float(np.abs(one.strain - other.strain).max()) < 1e-3 * abs(one.magnitude)


def at_finer_settings(plan: Plan, settings: Settings, displacements: Mapping[str, FloatArray] | None = None) -> Plan:
    """The plan with one or two pairs once more, at finer settings of the deck or of the local engine.

    `displacements` are those of the finished jobs, as `extend_plan` takes them.

    Raises
    ------
    InputError
        Settings that change nothing, or those of a deck for a run without one.
    """
    if plan.finer:
        raise InputError("this run has jobs at finer settings already", "--finer", "Prepare a new run for still finer ones.")
    if settings.deck and not plan.calculation:
        raise InputError(
            "[deck] settings for a run without a deck", settings.source, "Name those of your engine under [engine]."
        )
    if not settings.deck and not settings.engine:
        raise InputError("neither [deck] nor [engine] settings", settings.source, "Say what is finer: cutoff, kmesh, grid.")
    if settings.pseudopotentials or settings.folder:
        raise InputError("finer jobs keep the pseudopotentials of the run", settings.source, "Leave [pseudopotentials] out.")
    finer: dict[str, Any] = {"engine": settings.engine}
    if settings.deck:
        record = dict(plan.calculation)
        kmesh = settings.deck.get("kmesh", record["kmesh"])
        changed = {key: value for key, value in settings.deck.items() if key != "kmesh"}
        finer["calculation"] = {**record, "settings": {**record["settings"], **changed}, "kmesh": kmesh}
        if finer["calculation"] == record:
            raise InputError("these are the settings that the run has", settings.source, "Give finer ones.")
    return replace(extend_plan(plan, finer_jobs(plan.strain_set), displacements), finer=finer)


def write_extension(run: Path, old: Plan, plan: Plan, formats: Sequence[str] | None = None) -> Plan:
    """Write the folders of the jobs that `plan` has beyond `old`, then the manifest; nothing else is touched.

    A run with an input deck gets the same deck, settings, mesh and grid for the new jobs, or the finer ones.

    Raises
    ------
    InputError
        When the folder of a new job exists and holds something that strainkit would not write there, or when its
        cell needs a larger real-space grid than the run has.
    """
    known = {job.label for job in old.jobs}
    new = [job for job in plan.jobs if job.label not in known]
    record = old.calculation
    if not old.finer and plan.finer:
        record = plan.finer.get("calculation", record)
    calculation = None
    if record:
        lattices = [plan.crystal.lattice @ job.gradient.T for job in plan.jobs]
        calculation = recorded_calculation(record, plan.crystal, plan.ions, lattices, plan.symmetry.tolerance)
    files = files_of(plan, new, default_formats(plan.crystal) if formats is None else formats, calculation)
    if calculation is not None and record is old.calculation and calculation.record()["grids"] != record["grids"]:
        raise InputError(
            "the new cells need a larger real-space grid than this run has", run, "Prepare a new run with all magnitudes."
        )
    if calculation is not None and record is not old.calculation:
        plan = replace(plan, finer={**plan.finer, "calculation": {**record, **calculation.record()}})
    for job in new:
        folder = run / job_folder(job.label)
        if folder.exists():
            strange = [p.name for p in folder.iterdir() if f"{job_folder(job.label)}/{p.name}" not in files]
            if strange:
                raise InputError(f"exists already and holds {strange[0]}", folder, "Move it away; nothing was written.")
    for name, text in files.items():
        atomic_write(run / name, text)
    plan = replace(plan, files={**old.files, **{name: checksum(text.encode()) for name, text in files.items()}})
    plan.save(run)
    return plan
