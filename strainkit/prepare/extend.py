"""Adding jobs to a run folder that may already hold results: what is there stays as it is."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace
from pathlib import Path

from strainkit.design.expect import expect
from strainkit.design.jobs import StrainJob
from strainkit.errors import InputError
from strainkit.prepare.calculation import recorded_calculation
from strainkit.prepare.runfolder import files_of
from strainkit.prepare.writers import default_formats
from strainkit.run.files import atomic_write, checksum
from strainkit.run.plan import Plan, job_folder

__all__ = ["extend_plan", "write_extension"]


def extend_plan(plan: Plan, new: Sequence[StrainJob]) -> Plan:
    """The plan with further jobs behind the old ones, and what the whole promises."""
    jobs = (*plan.jobs, *new)
    promise, doubts = expect(jobs, plan.symmetry.rotations, plan.basis, plan.expectation.noise)
    kept = tuple(f for f in plan.findings if f.code not in ("few-spare-degrees", "target-error"))
    return replace(plan, jobs=jobs, expectation=promise, findings=(*kept, *doubts))


def write_extension(run: Path, old: Plan, plan: Plan, formats: Sequence[str] | None = None) -> Plan:
    """Write the folders of the jobs that `plan` has beyond `old`, then the manifest; nothing else is touched.

    A run with an input deck gets the same deck, settings, mesh and grid for the new jobs.

    Raises
    ------
    InputError
        When the folder of a new job exists and holds something that strainkit would not write there, or when its
        cell needs a larger real-space grid than the run has.
    """
    known = {job.label for job in old.jobs}
    new = [job for job in plan.jobs if job.label not in known]
    calculation = None
    if old.calculation:
        lattices = [plan.crystal.lattice @ job.gradient.T for job in plan.jobs]
        calculation = recorded_calculation(old.calculation, plan.crystal, plan.ions, lattices, plan.symmetry.tolerance)
    files = files_of(plan, new, default_formats(plan.crystal) if formats is None else formats, calculation)
    if calculation is not None and [list(points) for points in calculation.grids] != old.calculation["grids"]:
        raise InputError(
            "the new cells need a larger real-space grid than this run has", run, "Prepare a new run with all magnitudes."
        )
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
