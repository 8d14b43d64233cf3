"""One job's folder: the output that counts, turned into the planned frame and order of atoms."""

from __future__ import annotations

from dataclasses import dataclass, replace
from pathlib import Path

import numpy as np

from strainkit.collect.match import Match, MismatchError, match
from strainkit.collect.readers import READERS, Reader, Returned, read_returned, recognise
from strainkit.collect.scan import Folder, natural
from strainkit.collect.source import LARGEST, damaged_packing
from strainkit.collect.table import StressRecord
from strainkit.design.jobs import StrainJob
from strainkit.errors import InputError, printable
from strainkit.findings import Finding, finding
from strainkit.run.files import checksum
from strainkit.run.plan import Plan
from strainkit.tensors.sixvectors import stress_to_voigt

__all__ = ["Output", "read_outputs", "record_of"]

#: ions that had to stay moved farther than this (A)
_MOVED = 5e-3
#: two finished outputs of one job differ when their stresses do by more than this part of the larger one, and this many GPa
_DISAGREE, _DISAGREE_GPA = 0.002, 0.005


@dataclass(frozen=True)
class Output:
    """One recognised file: what it says, or why it cannot be read."""

    name: str
    program: str
    digest: str
    returned: Returned | None
    error: str = ""

    @property
    def finished(self) -> bool:
        """Did its job end and converge, by its own marks?"""
        return self.returned is not None and not self.returned.problems


def read_outputs(run: Path, folder: Folder) -> list[Output]:
    """Outputs of a folder, the one that counts first: the preferred kind, the latest continuation, finished ones.

    Reading stops at the second finished one, which is only there to be compared.
    """
    found = [(name, reader) for name in folder.files if (reader := recognise(run / folder.name / name)) is not None]
    found.sort(key=lambda pair: (natural(pair[0]), pair[0]), reverse=True)
    found.sort(key=lambda pair: READERS.index(pair[1]))
    outputs: list[Output] = []
    for name, reader in found:
        if not reader.tells_relaxed and any(output.returned is not None and output.returned.problems for output in outputs):
            continue  # a trajectory beside a job that says it is not relaxed
        outputs.append(_read(run, f"{folder.name}/{name}", reader))
        if sum(output.finished for output in outputs) == 2:
            break
    if not outputs:
        torn = ((name, damaged_packing(run / folder.name / name)) for name in folder.named_outputs)
        outputs = [Output(f"{folder.name}/{name}", "", "", None, why) for name, why in torn if why][:1]
    return sorted(outputs, key=lambda output: not output.finished)


def _read(run: Path, name: str, reader: Reader) -> Output:
    path = run / name
    try:
        # before it is parsed: a file that changes meanwhile is then known to have changed
        digest = checksum(path.read_bytes()) if path.stat().st_size <= LARGEST else ""
        return Output(name, reader.program, digest, read_returned(path, reader))
    except InputError as error:
        return Output(name, reader.program, "", None, error.what)
    except OSError as error:
        return Output(name, reader.program, "", None, error.strerror or "cannot be read")


def record_of(plan: Plan, job: StrainJob, folder: Folder, outputs: list[Output], seen: str = "") -> StressRecord:
    """What came back of a job from the outputs of a folder; `seen` is the fingerprint that the record keeps."""
    doubts = []
    if folder.links:
        text = f"{folder.name}: symbolic links are not followed: {', '.join(folder.links[:3])}; put the file itself there"
        doubts.append(finding("link-not-followed", job.label, text))
    if not outputs:
        for name in folder.named_outputs[:1]:
            text = f"{folder.name}/{name}: not recognised as the output of a program that strainkit reads"
            doubts.append(finding("unreadable-output", job.label, text))
        for name in () if folder.named_outputs else folder.empty_outputs[:1]:
            text = f"{folder.name}/{name}: is empty; the program wrote nothing, or the copy failed"
            doubts.append(finding("job-unfinished", job.label, text))
        return StressRecord(job.label, "missing", findings=tuple(doubts), seen=seen)
    record = _record(plan, job, outputs[0], seen)
    if len(outputs) > 1 and outputs[1].finished and record.status == "done":
        doubts += _second(record, _record(plan, job, outputs[1]))
    return replace(record, findings=(*record.findings, *doubts)) if doubts else record


def _record(plan: Plan, job: StrainJob, output: Output, seen: str = "") -> StressRecord:
    name, returned = printable(output.name), output.returned
    if returned is None:
        status = "unfinished" if "end-of-job" in output.error else "broken"
        doubt = finding("unreadable-output", job.label, f"{name}: {output.error}")
        return StressRecord(
            job.label, status, program=output.program, file=name, file_sha256=output.digest, findings=(doubt,), seen=seen
        )
    blank = StressRecord(
        label=job.label,
        status=returned.problems[0][0] if returned.problems else "done",
        energy=returned.energy,
        program=returned.program,
        version=returned.version,
        settings={key: value if isinstance(value, str | float) else str(value) for key, value in returned.settings.items()},
        file=name,
        file_sha256=output.digest,
        seen=seen,
        findings=tuple(finding(f"job-{status}", job.label, f"{name}: {text}") for status, text in returned.problems),
    )
    try:
        found = match(plan.crystal, returned, job.gradient)
    except MismatchError as error:
        doubt = finding(error.code, job.label, f"{name}: {error.what}")
        return replace(blank, status="mismatch", findings=(*blank.findings, doubt))
    except InputError as error:  # a cell without volume and the like
        doubt = finding("job-broken", job.label, f"{name}: {error.what}")
        return replace(blank, status="broken", findings=(*blank.findings, doubt))
    return _placed(plan, job, blank, returned, found)


def _placed(plan: Plan, job: StrainJob, blank: StressRecord, returned: Returned, found: Match) -> StressRecord:
    """The record with everything in the planned frame and order."""
    turn = found.rotation
    keep = returned.positions_known
    record = replace(
        blank,
        stress=None if returned.stress is None else stress_to_voigt(turn.T @ returned.stress @ turn),
        max_force=None if returned.forces is None else float(np.linalg.norm(returned.forces, axis=1).max(initial=0.0)),
        forces=None if returned.forces is None else returned.forces[found.order] @ turn,
        displacements=found.displacements if keep else None,
        rotation=turn,
    )
    if record.status == "done" and (plan.ions == "clamped" or job.kind == "displaced"):
        far = _from_start(plan, job, found)
        if far > _MOVED:
            text = f"{record.file}: ions that had to stay are up to {far:.3g} A from where the plan put them"
            return replace(record, status="mismatch", findings=(*record.findings, finding("ions-moved", job.label, text)))
    return record


def _from_start(plan: Plan, job: StrainJob, found: Match) -> float:
    """Largest distance (A) of an atom from its place in the starting cell."""
    start = plan.starting_cell(job)
    shift = start.positions - plan.crystal.positions
    planned = (shift - shift.mean(axis=0)) @ start.lattice
    return float(np.linalg.norm(found.displacements - planned, axis=1).max(initial=0.0))


def _second(record: StressRecord, other: StressRecord) -> list[Finding]:
    """Does another finished output of the same job say something else?"""
    if other.status != "done" or record.stress is None or other.stress is None:
        return []
    apart = float(np.abs(record.stress - other.stress).max())
    if apart <= max(_DISAGREE * float(np.abs(record.stress).max()), _DISAGREE_GPA):
        return []
    text = (
        f"{other.file} is finished too and differs by {apart:.3g} GPa from {record.file}, which counts; remove the wrong one, "
        "or the older one where the other goes on from it"
    )
    return [finding("outputs-disagree", record.label, text)]
