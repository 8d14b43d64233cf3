"""From a run folder's job folders to its stress table; what did not change since the last time is not read again."""

from __future__ import annotations

import multiprocessing
import os
import threading
from collections.abc import Iterator, Mapping, Sequence, Set
from concurrent.futures import ProcessPoolExecutor
from concurrent.futures.process import BrokenProcessPool
from dataclasses import dataclass, replace
from pathlib import Path

from strainkit.collect.readjob import read_outputs, record_of
from strainkit.collect.scan import Folder, foreign_folders, plan_fingerprint, scan
from strainkit.collect.strays import place_strays
from strainkit.collect.table import TABLE, StressRecord, StressTable, load_table
from strainkit.collect.trust import judge_set, unjudged
from strainkit.design.jobs import StrainJob
from strainkit.errors import InputError
from strainkit.run.files import checksum
from strainkit.run.plan import Plan, job_folder

__all__ = ["TABLE_PROGRAM", "collect_run"]

#: "program" of a record that was typed into a table
TABLE_PROGRAM = "table"
#: folders to read before a second process is worth its start
_MANY = 400


@dataclass(frozen=True)
class _Task:
    """A folder to read for a job."""

    job: StrainJob
    folder: Folder
    seen: str


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
    folders = {job.label: scan(run, job_folder(job.label), plan.files) for job in plan.jobs}
    foreign = [scan(run, name) for name in foreign_folders(run, plan)]
    elsewhere = (
        checksum("".join(f"{f.name}{f.state}" for f in foreign).encode("utf-8", "surrogatepass"))[:16] if foreign else ""
    )
    kept: dict[str, StressRecord] = {}
    tasks: list[_Task] = []
    for job in plan.jobs:
        folder = folders[job.label]
        seen = checksum(f"{plan_fingerprint(plan, job)}{folder.state}".encode())[:32]
        if (old := _unchanged(run, known.get(job.label), seen, elsewhere, {f.name for f in foreign})) is not None:
            kept[job.label] = replace(old, seen=_stamp(seen, elsewhere, folder, foreign))
        else:
            tasks.append(_Task(job, folder, _stamp(seen, elsewhere, folder, foreign)))
    for record in _read_all(run, plan, tasks, workers):
        kept[record.label] = record
    records = [kept[job.label] for job in plan.jobs]
    placed = {record.file.rpartition("/")[0] for record in records}
    records, doubts = place_strays(run, plan, records, folders, [f for f in foreign if f.name not in placed])
    records = [_with_typed(record, known.get(record.label), (typed or {}).get(record.label)) for record in records]
    records, found = judge_set(plan, records)
    return StressTable(tuple(records), (*doubts, *found))


def _known(run: Path) -> dict[str, StressRecord]:
    """Records of the last collection, as they were before the set was judged; none when its table cannot be used."""
    if not (run / TABLE).is_file():
        return {}
    try:
        return {record.label: unjudged(record) for record in load_table(run, ions=True).records}
    except InputError:
        return {}


def _stamp(seen: str, elsewhere: str, folder: Folder, foreign: Sequence[Folder]) -> str:
    settled = folder.settled and all(other.settled for other in foreign)
    return f"{seen}.{elsewhere}{'' if settled else '?'}"


def _unchanged(run: Path, old: StressRecord | None, seen: str, elsewhere: str, foreign: Set[str]) -> StressRecord | None:
    """The old record if its folder is as it was; files that were too young then are compared by their content."""
    if old is None or old.program == TABLE_PROGRAM or old.status == "mismatch":
        return None
    mine, _, others = old.seen.removesuffix("?").partition(".")
    place = old.file.rpartition("/")[0]
    at_home = place in ("", job_folder(old.label)) or (place in foreign and others == elsewhere)
    if mine != seen or not at_home or (old.forces is None and old.max_force is not None):
        return None
    if old.seen.endswith("?"):
        try:
            same = bool(old.file_sha256) and checksum((run / old.file).read_bytes()) == old.file_sha256
        except OSError:
            return None
        return old if same else None
    return old


def _with_typed(record: StressRecord, old: StressRecord | None, typed: StressRecord | None) -> StressRecord:
    """A typed record counts before a folder's; one typed earlier fills the place of a job without output."""
    if typed is not None:
        return typed
    if record.status == "missing" and old is not None and old.program == TABLE_PROGRAM:
        return old
    return record


def _read_one(run: Path, plan: Plan, task: _Task) -> StressRecord:
    return replace(record_of(plan, task.job, task.folder, read_outputs(run, task.folder)), seen=task.seen)


def _read_all(run: Path, plan: Plan, tasks: Sequence[_Task], workers: int | None) -> Iterator[StressRecord]:
    count = workers or (os.cpu_count() or 1 if len(tasks) >= _MANY else 1)
    if count == 1 or len(tasks) < 2:
        for task in tasks:
            yield _read_one(run, plan, task)
        return
    # a fork is cheap but safe from a single thread only
    alone = threading.active_count() == 1 and "fork" in multiprocessing.get_all_start_methods()
    context = multiprocessing.get_context("fork" if alone else "spawn")
    size = max(1, min(50, len(tasks) // (4 * count)))
    chunks = [tasks[i : i + size] for i in range(0, len(tasks), size)]
    done = 0
    pool = ProcessPoolExecutor(count, mp_context=context, initializer=_begin, initargs=(run, plan))
    try:
        for records in pool.map(_read_chunk, chunks):
            done += len(records)
            yield from records
    except BrokenProcessPool:  # a worker died: go on alone
        for task in tasks[done:]:
            yield _read_one(run, plan, task)
    finally:
        pool.shutdown(cancel_futures=True)


_WORK: tuple[Path, Plan] | None = None


def _begin(run: Path, plan: Plan) -> None:
    global _WORK
    _WORK = (run, plan)


def _read_chunk(tasks: Sequence[_Task]) -> list[StressRecord]:
    assert _WORK is not None
    return [_read_one(*_WORK, task) for task in tasks]
