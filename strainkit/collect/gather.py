"""From a run folder's job folders to its stress table; what did not change since the last time is not read again."""

from __future__ import annotations

import multiprocessing
import os
import threading
from collections.abc import Iterator, Mapping, Sequence
from concurrent.futures import ProcessPoolExecutor
from concurrent.futures.process import BrokenProcessPool
from dataclasses import dataclass, replace
from pathlib import Path

from strainkit.collect.csvtable import unit_doubts
from strainkit.collect.readjob import read_outputs, record_of
from strainkit.collect.scan import Folder, foreign_folders, plan_fingerprint, scan
from strainkit.collect.strays import place_strays
from strainkit.collect.table import TABLE, TABLE_PROGRAM, StressRecord, StressTable, load_table
from strainkit.collect.trust import judge_set, unjudged
from strainkit.design.jobs import StrainJob
from strainkit.errors import InputError
from strainkit.run.files import checksum
from strainkit.run.plan import Plan, job_folder

__all__ = ["collect_run"]

#: folders to read before a second process is worth its start
_MANY = 400


@dataclass(frozen=True)
class _Others:
    """Folders of no job: their names, fingerprint, and whether all are old enough to be sure of it."""

    names: frozenset[str]
    state: str
    settled: bool

    @classmethod
    def of(cls, folders: Sequence[Folder]) -> _Others:
        text = "".join(f"{folder.name}{folder.state}" for folder in folders)
        state = checksum(text.encode("utf-8", "surrogatepass"))[:16] if folders else ""
        return cls(frozenset(folder.name for folder in folders), state, all(folder.settled for folder in folders))


def collect_run(
    run: Path, plan: Plan, typed: Mapping[str, StressRecord] | None = None, workers: int | None = None
) -> StressTable:
    """Read every job folder of a run; a broken job never stops the others. Nothing is written.

    Folders that are as they were when the run's stress table was written are taken from it. Outputs in folders of another
    name are matched to the jobs by their cells.

    Parameters
    ----------
    run : path
        Run folder.
    plan : Plan
        Its plan.
    typed : mapping, optional
        Label -> record from a table, which counts before what the folders hold.
    workers : int, optional
        Processes; when left out, all cores for some hundred folders to read and more, one for less.
    """
    known = _known(run)
    foreign = [scan(run, name) for name in foreign_folders(run, plan)]
    others = _Others.of(foreign)
    kept: dict[str, StressRecord] = {}
    for job in plan.jobs:
        if (old := known.get(job.label)) is not None:
            seen = _look(run, plan, job, others)[1]
            if _unchanged(run, old, seen, others):
                kept[job.label] = replace(old, seen=seen)
    jobs = [job for job in plan.jobs if job.label not in kept]
    kept |= {record.label: record for record in _read_all(run, plan, jobs, others, workers)}
    records = [kept[job.label] for job in plan.jobs]
    placed = {record.file.rpartition("/")[0] for record in records}
    records, doubts = place_strays(run, plan, records, [f for f in foreign if f.name not in placed])
    records = [_with_typed(record, known.get(record.label), (typed or {}).get(record.label)) for record in records]
    records, found = judge_set(plan, records)
    return StressTable(tuple(records), (*doubts, *found, *unit_doubts(records)))


def _known(run: Path) -> dict[str, StressRecord]:
    """Records of the last collection, as they were before the set was judged; none when its table cannot be used."""
    if not (run / TABLE).is_file():
        return {}
    try:
        return {record.label: unjudged(record) for record in load_table(run, ions=True).records}
    except InputError:
        return {}


def _look(run: Path, plan: Plan, job: StrainJob, others: _Others) -> tuple[Folder, str]:
    """A job's folder as it is now, and the fingerprint of all that its record depends on."""
    folder = scan(run, job_folder(job.label), plan.files)
    mine = checksum(f"{plan_fingerprint(plan, job)}{folder.state}".encode())[:32]
    return folder, f"{mine}.{others.state}{'' if folder.settled and others.settled else '?'}"


def _unchanged(run: Path, old: StressRecord, seen: str, others: _Others) -> bool:
    """May the old record stand? Where files were too young to be sure, their content is compared."""
    if old.program == TABLE_PROGRAM or old.status == "mismatch" or (old.forces is None and old.max_force is not None):
        return False
    before, _, elsewhere = old.seen.removesuffix("?").partition(".")
    place = old.file.rpartition("/")[0]
    at_home = place in ("", job_folder(old.label)) or (place in others.names and elsewhere == others.state)
    if before != seen.partition(".")[0] or not at_home:
        return False
    if not old.seen.endswith("?"):
        return True
    try:
        return bool(old.file_sha256) and checksum((run / old.file).read_bytes()) == old.file_sha256
    except OSError:
        return False


def _with_typed(record: StressRecord, old: StressRecord | None, typed: StressRecord | None) -> StressRecord:
    """A typed record counts before a folder's; one typed earlier fills the place of a job without output."""
    if typed is not None:
        return typed
    if record.status == "missing" and old is not None and old.program == TABLE_PROGRAM:
        return old
    return record


def _read_one(run: Path, plan: Plan, others: _Others, job: StrainJob) -> StressRecord:
    folder, seen = _look(run, plan, job, others)
    return record_of(plan, job, folder, read_outputs(run, folder), seen)


def _read_all(run: Path, plan: Plan, jobs: Sequence[StrainJob], others: _Others, workers: int | None) -> Iterator[StressRecord]:
    count = workers or (os.cpu_count() or 1 if len(jobs) >= _MANY else 1)
    if count == 1 or len(jobs) < 2:
        for job in jobs:
            yield _read_one(run, plan, others, job)
        return
    # a fork is cheap but safe from a single thread only
    alone = threading.active_count() == 1 and "fork" in multiprocessing.get_all_start_methods()
    context = multiprocessing.get_context("fork" if alone else "spawn")
    size = max(1, min(50, len(jobs) // (4 * count)))
    chunks = [jobs[i : i + size] for i in range(0, len(jobs), size)]
    done = 0
    pool = ProcessPoolExecutor(count, mp_context=context, initializer=_begin, initargs=(run, plan, others))
    try:
        for records in pool.map(_read_chunk, chunks):
            done += len(records)
            yield from records
    except BrokenProcessPool:  # a worker died: go on alone
        for job in jobs[done:]:
            yield _read_one(run, plan, others, job)
    finally:
        pool.shutdown(cancel_futures=True)


_WORK: tuple[Path, Plan, _Others] | None = None


def _begin(run: Path, plan: Plan, others: _Others) -> None:
    global _WORK
    _WORK = (run, plan, others)


def _read_chunk(jobs: Sequence[StrainJob]) -> list[StressRecord]:
    assert _WORK is not None
    return [_read_one(*_WORK, job) for job in jobs]
