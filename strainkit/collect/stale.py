"""Is a stress table older than the outputs that it was made from? From names, sizes and times; read only where these differ."""

from __future__ import annotations

from pathlib import Path

from strainkit.collect.scan import plan_fingerprint, scan
from strainkit.collect.table import TABLE, TABLE_PROGRAM, StressRecord, StressTable
from strainkit.design.jobs import StrainJob
from strainkit.errors import counted
from strainkit.findings import Finding, finding
from strainkit.run.files import checksum
from strainkit.run.plan import Plan, job_folder

__all__ = ["outputs_changed"]


def outputs_changed(run: Path, plan: Plan, table: StressTable) -> list[Finding]:
    """A finding when outputs were changed or added since the table was made, otherwise nothing.

    Outputs that are gone say nothing, as in a run folder that was moved without them; nor does a copy with new times.
    """
    try:
        made = (run / TABLE).stat().st_mtime_ns
    except OSError:
        return []
    records = {record.label: record for record in table.records if record.program != TABLE_PROGRAM}
    jobs = [job for job in plan.jobs if job.label in records]
    changed = [job.label for job in jobs if _changed(run, plan, job, records[job.label], made)]
    if not changed:
        return []
    named = ", ".join(changed[:5]) + (f" and {len(changed) - 5} more" if len(changed) > 5 else "")
    text = f"outputs of {counted(len(changed), 'job')} changed since they were collected ({named}); strainkit collect {run}"
    return [finding("outputs-changed", TABLE, text)]


def _changed(run: Path, plan: Plan, job: StrainJob, record: StressRecord, made: int) -> bool:
    from strainkit.collect.readers import recognise

    folder = scan(run, job_folder(job.label), plan.files)
    before = record.seen.removesuffix("?").partition(".")[0]
    if checksum(f"{plan_fingerprint(plan, job)}{folder.state}".encode())[:32] == before:
        return False
    try:
        counted_file = run / record.file if record.file else None
        if counted_file is not None and counted_file.is_file():
            if record.file_sha256 and checksum(counted_file.read_bytes()) != record.file_sha256:
                return True
            if counted_file.stat().st_mtime_ns > made:  # a copy: its times tell nothing
                return False
        others = [path for name in folder.files if (path := run / folder.name / name) != counted_file]
        newer = [path for path in others if path.stat().st_mtime_ns > made]
        return any(recognise(path) is not None for path in newer)
    except OSError:
        return False
