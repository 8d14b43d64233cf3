"""From a run folder's job folders to its stress table."""

from __future__ import annotations

import re
from pathlib import Path

import numpy as np

from strainkit.collect.readers import READERS, Reader, Returned, read_returned, recognise
from strainkit.collect.table import StressRecord, StressTable
from strainkit.crystal.crystal import Crystal
from strainkit.design.jobs import StrainJob
from strainkit.errors import InputError
from strainkit.findings import Finding, finding
from strainkit.run.files import checksum
from strainkit.run.plan import Plan, job_folder
from strainkit.tensors.arrays import FloatArray
from strainkit.tensors.rotations import polar
from strainkit.tensors.sixvectors import stress_to_voigt
from strainkit.tensors.strain import gradient_between

__all__ = ["collect_run", "remove_rotation"]

#: largest stretch between planned and returned lattice that rounding in an output can explain
CELL_TOLERANCE = 1e-4


def collect_run(run: Path, plan: Plan) -> StressTable:
    """Read every job folder of a run; a broken job never stops the others.

    Parameters
    ----------
    run : path
        Run folder.
    plan : Plan
        Its plan.
    """
    return StressTable(tuple(_collect_job(run, plan, job) for job in plan.jobs))


def _natural(path: Path) -> list[tuple[int, str]]:
    """Sort key in which run.10 follows run.9."""
    return [(int(part), "") if part.isdigit() else (-1, part) for part in re.split(r"(\d+)", path.name)]


def _outputs(run: Path, plan: Plan, job: StrainJob) -> list[tuple[Path, Reader]]:
    """Recognised outputs of a job, the preferred kind and the latest continuation first."""
    folder = run / job_folder(job.label)
    if not folder.is_dir():
        return []
    written = {run / name for name in plan.files}
    files = [p for p in folder.iterdir() if p.is_file() and not p.is_symlink() and p not in written and p.name[0] != "."]
    found = [(path, reader) for path in files if (reader := recognise(path)) is not None]
    found.sort(key=lambda pair: _natural(pair[0]), reverse=True)
    return sorted(found, key=lambda pair: READERS.index(pair[1]))


def _collect_job(run: Path, plan: Plan, job: StrainJob) -> StressRecord:
    outputs = _outputs(run, plan, job)
    if not outputs:
        return StressRecord(job.label, "missing")
    attempts = []
    for path, reader in outputs:
        record = _read_job(run, plan, job, path, reader)
        if record.status == "done":
            return record
        attempts.append(record)
    return attempts[0]


def _read_job(run: Path, plan: Plan, job: StrainJob, path: Path, reader: Reader) -> StressRecord:
    name = str(path.relative_to(run))
    try:
        returned = read_returned(path, reader)
        digest = checksum(path.read_bytes())
    except InputError as error:
        status = "unfinished" if "end-of-job" in error.what else "broken"
        doubt = finding("unreadable-output", job.label, f"{name}: {error.what}")
        return StressRecord(job.label, status, program=reader.program, file=name, findings=(doubt,))
    findings: list[Finding] = [finding(f"job-{status}", job.label, f"{name}: {text}") for status, text in returned.problems]
    status = returned.problems[0][0] if returned.problems else "done"
    stress = forces = moved = None
    planned = plan.crystal.deformed(job.gradient)
    try:
        rotation = remove_rotation(planned, returned)
    except InputError as error:
        findings.append(finding("cell-mismatch", job.label, f"{name}: {error.what}"))
        status = "mismatch"
    else:
        if returned.stress is not None:
            stress = stress_to_voigt(rotation.T @ returned.stress @ rotation)
        forces = None if returned.forces is None else returned.forces @ rotation
        moved = _displacements(planned, returned)
    return StressRecord(
        label=job.label,
        status=status,
        stress=stress,
        energy=returned.energy,
        max_force=None if returned.forces is None else float(np.linalg.norm(returned.forces, axis=1).max(initial=0.0)),
        program=returned.program,
        file=name,
        file_sha256=digest,
        findings=tuple(findings),
        forces=forces,
        displacements=moved,
    )


def _displacements(planned: Crystal, returned: Returned) -> FloatArray:
    """Way of each atom (n, 3) from its affinely strained position to where it came back, A, planned frame, mean removed."""
    shift = returned.positions - planned.positions
    shift -= np.round(shift)
    # a whole cell shifted near half a lattice vector wraps differently for different atoms: centre on the first atom
    shift -= np.round(shift - shift[0])
    return np.asarray((shift - shift.mean(axis=0)) @ planned.lattice)


def remove_rotation(planned: Crystal, returned: Returned) -> FloatArray:
    """Rotation R (3, 3) by which the output's frame is turned against the planned one: x_returned = R x_planned.

    Raises
    ------
    InputError
        When the returned cell is not the planned one apart from a rotation, or holds other atoms.
    """
    if len(returned.numbers) != len(planned.numbers):
        raise InputError(f"{len(returned.numbers)} atoms instead of {len(planned.numbers)}")
    if sorted(returned.numbers) != sorted(planned.numbers):
        raise InputError("another composition than planned")
    if not np.array_equal(returned.numbers, planned.numbers):
        raise InputError("the atoms are in another order than planned")
    gradient = gradient_between(planned.lattice, returned.lattice)
    if np.linalg.det(gradient) <= 0:
        raise InputError("the returned cell has the other handedness")
    rotation, stretch = polar(gradient)
    drift = float(np.abs(stretch - np.eye(3)).max())
    if drift > CELL_TOLERANCE:
        raise InputError(f"the returned cell differs from the planned one by a strain of {100 * drift:.3g} %")
    return rotation
