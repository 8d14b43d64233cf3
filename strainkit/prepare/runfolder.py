"""Planning a run and writing its folder."""

from __future__ import annotations

import os
import shutil
import tempfile
from collections.abc import Sequence
from dataclasses import replace
from pathlib import Path

from strainkit.crystal.crystal import Crystal
from strainkit.crystal.frames import FRAMES, crystal_frame
from strainkit.crystal.symmetry import DEFAULT_SYMPREC, find_symmetry, tolerance_ladder
from strainkit.design.expect import expect
from strainkit.design.jobs import StrainJob
from strainkit.design.strainset import Wish, choose_strains
from strainkit.errors import InputError
from strainkit.prepare.writers import CellFormat, cell_formats
from strainkit.run.files import checksum
from strainkit.run.plan import MANIFEST, Ions, Plan, job_folder, load_plan
from strainkit.tensors.constants import constant_basis

__all__ = ["DEFAULT_FORMATS", "files_of", "plan_run", "write_run"]

DEFAULT_FORMATS = ("poscar", "cif")


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


def write_run(plan: Plan, out: Path, formats: Sequence[str] = DEFAULT_FORMATS, force: bool = False) -> tuple[Plan, str]:
    """Write the run folder of a plan.

    The folder appears whole or not at all. An existing run folder of the same set is left as it is; one of another set
    is refused, or moved aside with `force`, never deleted.

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
    chosen = cell_formats(list(formats))
    moved = ""
    if out.exists() or out.is_symlink():
        kept = _existing(plan, out)
        if kept is not None:
            return kept, "holds this very set already; nothing was written"
        if not force:
            raise InputError(
                "this run folder holds another set", out, "Choose another --out, or --force to move the old folder aside."
            )
        aside = _aside(out)
        out.rename(aside)
        moved = f"; the old folder is now {aside.name}"
    files = files_of(plan, plan.jobs, chosen)
    plan = replace(plan, files={name: checksum(text.encode()) for name, text in files.items()})
    try:
        _write_whole(plan, files, out)
    except OSError as error:
        raise InputError(f"cannot be written ({error.strerror})", out, "Check free space and permissions.") from None
    return plan, f"{len(plan.jobs)} job folders{moved}"


def _existing(plan: Plan, out: Path) -> Plan | None:
    """The plan of an existing folder when it is the same set, None when it is another one; refuses anything else."""
    if not out.is_dir() or not (out / MANIFEST).is_file():
        if out.is_dir() and not any(out.iterdir()):
            raise InputError("exists already (an empty folder)", out, "Remove it or choose another --out.")
        raise InputError("exists already and is not a run folder", out, "Choose another --out; nothing was touched.")
    old = load_plan(out)
    return old if old.same_set(plan) else None


def _aside(out: Path) -> Path:
    number = 1
    while (place := out.with_name(f"{out.name}.old-{number}")).exists():
        number += 1
    return place


def files_of(plan: Plan, jobs: Sequence[StrainJob], formats: dict[str, CellFormat]) -> dict[str, str]:
    """Relative path -> text of every file of some jobs."""
    files: dict[str, str] = {}
    for job in jobs:
        cell = plan.crystal.deformed(job.gradient)
        title = _title(plan, job)
        for written in formats.values():
            files[f"{job_folder(job.label)}/{written.file_name}"] = written.write(cell, title)
    return files


def _title(plan: Plan, job: StrainJob) -> str:
    return f"{plan.crystal.name[:40]} {job.label}".replace("\n", " ")


def _write_whole(plan: Plan, files: dict[str, str], out: Path) -> None:
    out.parent.mkdir(parents=True, exist_ok=True)
    building = Path(tempfile.mkdtemp(prefix=f".{out.name}.", dir=out.parent))
    try:
        for job in plan.jobs:
            (building / job_folder(job.label)).mkdir(parents=True)
        for name, text in files.items():
            (building / name).write_text(text, encoding="utf-8")
        plan.save(building)
        building.chmod(0o755)
        os.rename(building, out)
    except BaseException:
        shutil.rmtree(building, ignore_errors=True)
        raise
