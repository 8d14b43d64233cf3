"""Planning a run and writing its folder."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace
from pathlib import Path
from typing import Any, Literal

from strainkit.crystal.crystal import Crystal
from strainkit.crystal.frames import FRAMES, crystal_frame
from strainkit.crystal.judge import judge_cell, judge_setting
from strainkit.crystal.molecules import Molecules
from strainkit.crystal.symmetrize import symmetrize as symmetrized
from strainkit.crystal.symmetry import DEFAULT_SYMPREC, tolerance_ladder
from strainkit.design.expect import expect
from strainkit.design.jobs import StrainJob
from strainkit.design.strainset import Wish, choose_strains
from strainkit.errors import InputError, UsageError
from strainkit.findings import Finding
from strainkit.prepare.calculation import Calculation
from strainkit.prepare.displaced import cost_finding, displaced_jobs
from strainkit.prepare.folders import write_folder
from strainkit.prepare.scripts import LOGS, first_submission
from strainkit.prepare.writers import FORMATS, cell_formats, default_formats, format_findings, write_cell
from strainkit.run.campaign import is_campaign
from strainkit.run.files import checksum, dump_json
from strainkit.run.plan import MANIFEST, AtomMoves, Ions, Plan, job_folder, load_plan
from strainkit.tensors.constants import basis_of_group
from strainkit.tensors.stiffness import Stiffness

__all__ = ["files_of", "plan_run", "plan_with_files", "write_run"]


def plan_run(
    crystal: Crystal,
    wish: Wish | Sequence[float] = (),
    ions: Ions = "relaxed",
    symprec: float = DEFAULT_SYMPREC,
    atoms: AtomMoves | Literal["auto"] = "auto",
    symmetrize: bool = False,
    judged: tuple[Molecules, list[Finding]] | None = None,
    displaced: bool = False,
    guess: Stiffness | None = None,
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
    atoms : "auto", "rigid" or "affine"
        How the atoms of the starting cells move: molecules as bodies, their centres of mass following the strain, or every
        atom with the lattice. "auto" is rigid when every atom belongs to a molecule and the ions are relaxed.
    symmetrize : bool
        Move atoms and cell onto the space group found at the tolerance first.
    judged : pair of Molecules and list of Finding, optional
        What `judge_cell` says of this crystal, when it is known already.
    displaced : bool
        With clamped ions: add the displaced cells from which the relaxed-ion stiffness follows.
    guess : Stiffness, optional
        In the given frame; expected errors of K and G are those of the Hill averages at it.

    Raises
    ------
    InputError
        A cell that cannot be computed (atoms on top of each other), no symmetry, rigid without molecules.
    UsageError
        Rigid molecules with clamped ions, strain magnitudes out of range.
    """
    molecules, problems = judged or judge_cell(crystal)
    if symmetrize:
        moved = symmetrized(crystal, symprec)
        crystal, problems = moved.crystal, [*problems, moved.finding]
    moves = _atom_moves(atoms, ions, molecules, crystal)
    symmetry, _, changes = tolerance_ladder(crystal, symprec)
    frames = {name: crystal_frame(name, symmetry) for name in FRAMES}
    if not isinstance(wish, Wish):
        wish = Wish(magnitudes=tuple(wish))
    basis = basis_of_group(symmetry.rotations, frames["ieee"].rotation)
    jobs, remarks = choose_strains(crystal, symmetry, basis, wish)
    expectation, doubts = expect(jobs, symmetry.rotations, basis, wish.noise, guess, naming=frames["ieee"].rotation)
    if displaced:
        if ions != "clamped":
            raise UsageError("displaced cells belong to clamped ions", "--displaced", "Relaxed ions need none.")
        moved_jobs = displaced_jobs(crystal, symprec)
        doubts.append(cost_finding(crystal, len(jobs) - 1, len(moved_jobs), molecules.molecular))
        jobs = [*jobs, *moved_jobs]
    return Plan(
        crystal=crystal,
        symmetry=symmetry,
        frames=frames,
        jobs=tuple(jobs),
        ions=ions,
        aim=wish.aim,
        expectation=expectation,
        findings=(*crystal.remarks, *problems, *judge_setting(crystal, symmetry), *changes, *remarks, *doubts),
        atoms=moves,
        molecules=molecules,
    )


def _atom_moves(atoms: AtomMoves | Literal["auto"], ions: Ions, molecules: Molecules, crystal: Crystal) -> AtomMoves:
    """The choice between rigid molecules and affine atoms."""
    if atoms == "auto":
        return "rigid" if molecules.molecular and ions == "relaxed" else "affine"
    if atoms == "rigid" and ions == "clamped":
        raise UsageError(
            "rigid molecules with clamped ions", "--atoms", "Clamped ions move with the lattice: use --atoms affine or auto."
        )
    if atoms == "rigid" and not molecules.movable.any():
        raise InputError(
            "there are no molecules to move as bodies", crystal.source or crystal.name, "Use --atoms affine or auto."
        )
    return atoms


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
        if is_campaign(out):
            remedy = "Choose another --out, or add the cell with --campaign and the options of the campaign."
            raise InputError("exists already and is a campaign, not a run folder", out, remedy)
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
        cell = plan.starting_cell(job)
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
