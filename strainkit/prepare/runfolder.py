"""Planning a run and writing its folder."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace
from pathlib import Path
from typing import Any

from strainkit.crystal.crystal import Crystal
from strainkit.crystal.frames import FRAMES, crystal_frame
from strainkit.crystal.symmetry import DEFAULT_SYMPREC, find_symmetry, tolerance_ladder
from strainkit.design.expect import expect
from strainkit.design.jobs import StrainJob
from strainkit.design.strainset import Wish, choose_strains
from strainkit.errors import InputError
from strainkit.prepare.calculation import Calculation
from strainkit.prepare.folders import write_folder
from strainkit.prepare.scripts import LOGS, first_submission
from strainkit.prepare.writers import FORMATS, cell_formats, default_formats, format_findings, write_cell
from strainkit.run.files import checksum, dump_json
from strainkit.run.plan import MANIFEST, Ions, Plan, job_folder, load_plan
from strainkit.tensors.constants import constant_basis

__all__ = ["files_of", "plan_run", "plan_with_files", "write_run"]


def plan_run(
    crystal: Crystal,
    wish: Wish | Sequence[float] = (),
    ions: Ions = "relaxed",
    symprec: float = DEFAULT_SYMPREC,
) -> Plan:
    """Choose the strained jobs of a crystal; nothing is written.

    Parameters
    ----------
    crystal : Crystal
        The relaxed reference cell.
    wish : Wish or sequence of float
        What the set should be, or just the strain magnitudes (fractions) of the set of fewest jobs.
    ions : "relaxed" or "clamped"
    symprec : float
        Distance tolerance of the symmetry search, angstrom.
    """
    symmetry = find_symmetry(crystal, symprec)
    frames = {name: crystal_frame(name, symmetry) for name in FRAMES}
    if not isinstance(wish, Wish):
        wish = Wish(magnitudes=tuple(wish))
    basis = constant_basis(symmetry.invariants, frames["ieee"].rotation)
    jobs, remarks = choose_strains(crystal, symmetry, basis, wish)
    expectation, doubts = expect(jobs, symmetry.rotations, basis, wish.noise)
    _, changes = tolerance_ladder(crystal, symprec)
    return Plan(
        crystal=crystal,
        symmetry=symmetry,
        frames=frames,
        jobs=tuple(jobs),
        ions=ions,
        aim=wish.aim,
        expectation=expectation,
        findings=(*crystal.remarks, *changes, *remarks, *doubts),
    )


def write_run(
    plan: Plan,
    out: Path,
    formats: Sequence[str] | None = None,
    force: bool = False,
    calculation: Calculation | None = None,
    scheduler: str | None = None,
) -> tuple[Plan, str]:
    """Write the run folder of a plan.

    The folder appears whole or not at all. An existing run folder of the same set and files is left as it is; any other
    is refused, or moved aside with `force`, never deleted.

    Parameters
    ----------
    plan : Plan
    out : path
        Run folder to make.
    formats : sequence of str, optional
        Cell formats; `default_formats` when left out.
    force : bool
    calculation : Calculation, optional
        Writes input files too.
    scheduler : str, optional
        Writes a job script too.

    Returns
    -------
    plan : Plan
        With the checksums of what is on disk.
    what : str
        What happened, in words.

    Raises
    ------
    InputError
        When `out` is something else than a run folder, or holds another set.
    """
    plan, files = plan_with_files(plan, formats, calculation, scheduler)
    moved = ""
    if out.exists() or out.is_symlink():
        kept, what = _existing(plan, out)
        if kept is not None:
            return kept, "holds this very set already; nothing was written"
        if not force:
            raise InputError(what, out, "Choose another --out, or --force to move the old folder aside.")
        aside = _aside(out)
        out.rename(aside)
        moved = f"; the old folder is now {aside.name}"
    folders = [job_folder(job.label) for job in plan.jobs] + ([LOGS] if "scheduler" in plan.calculation else [])
    write_folder(out, {**files, MANIFEST: dump_json(plan.to_dict())}, folders)
    return plan, f"{len(plan.jobs)} job folders{moved}"


def _existing(plan: Plan, out: Path) -> tuple[Plan | None, str]:
    """The plan of an existing folder when it is the same set, otherwise why it is not; refuses anything else."""
    if not out.is_dir() or not (out / MANIFEST).is_file():
        if out.is_dir() and not any(out.iterdir()):
            raise InputError("exists already (an empty folder)", out, "Remove it or choose another --out.")
        raise InputError("exists already and is not a run folder", out, "Choose another --out; nothing was touched.")
    old = load_plan(out)
    if not old.same_set(plan):
        return None, "this run folder holds another set"
    differing = sorted(name for name in {*old.files, *plan.files} if old.files.get(name) != plan.files.get(name))
    if differing:
        return None, f"this run folder holds the same set with other files ({differing[0]} and {len(differing) - 1} more)"
    return old, ""


def _aside(out: Path) -> Path:
    number = 1
    while (place := out.with_name(f"{out.name}.old-{number}")).exists():
        number += 1
    return place


def files_of(
    plan: Plan, jobs: Sequence[StrainJob], formats: Sequence[str], calculation: Calculation | None = None
) -> dict[str, str]:
    """Relative path -> text of every file of some jobs."""
    cell_formats(formats)
    files: dict[str, str] = {}
    for job in jobs:
        cell = plan.crystal.deformed(job.gradient)
        title, folder = _title(plan, job), job_folder(job.label)
        for name in formats:
            files[f"{folder}/{FORMATS[name].file_name}"] = write_cell(name, cell, title)
        if calculation is not None:
            files |= {f"{folder}/{name}": text for name, text in calculation.files(cell, title).items()}
    return files


def plan_with_files(
    plan: Plan, formats: Sequence[str] | None, calculation: Calculation | None, scheduler: str | None
) -> tuple[Plan, dict[str, str]]:
    """The plan with checksums and findings of its files, and relative path -> text of every file but the manifest."""
    formats = default_formats(plan.crystal) if formats is None else formats
    files = files_of(plan, plan.jobs, formats, calculation)
    record: dict[str, Any] = {}
    doubts = format_findings(formats)
    if calculation is not None:
        record = calculation.record()
        doubts += calculation.findings()
        if scheduler is not None:
            tag = checksum("".join(files.values()).encode())[:6]
            scripts, more = first_submission(
                scheduler, calculation, plan.crystal, [job_folder(job.label) for job in plan.jobs], tag
            )
            files |= scripts
            record |= more
    checksums = {name: checksum(text.encode()) for name, text in files.items()}
    return replace(plan, files=checksums, calculation=record, findings=(*plan.findings, *doubts)), files


def _title(plan: Plan, job: StrainJob) -> str:
    return f"{plan.crystal.name[:40]} {job.label}".replace("\n", " ")
