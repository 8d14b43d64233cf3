"""Run the whole strain set on this machine: several processes, safe to interrupt, finished jobs are kept."""

from __future__ import annotations

import os
from collections.abc import Callable, Iterator
from concurrent.futures import FIRST_COMPLETED, Future, ProcessPoolExecutor, wait
from contextlib import contextmanager
from dataclasses import dataclass, replace
from multiprocessing import get_context
from pathlib import Path

import numpy as np

from strainkit.crystal.crystal import Crystal
from strainkit.crystal.read import read_crystal
from strainkit.design.jobs import StrainJob
from strainkit.errors import InputError, StrainkitError
from strainkit.evaluate.engines import Engine
from strainkit.evaluate.single import DEFAULT_FMAX, evaluate_cell
from strainkit.run.extxyz import RETURNED, extxyz_text
from strainkit.run.files import atomic_write
from strainkit.run.plan import Plan, job_folder

__all__ = ["RunOutcome", "evaluate_run"]


@dataclass(frozen=True)
class RunOutcome:
    """What happened to each job: labels done now, kept from before, not converged, and failed with the reason."""

    done: tuple[str, ...]
    kept: tuple[str, ...]
    unconverged: tuple[str, ...]
    failed: dict[str, str]


def evaluate_run(
    run: Path,
    plan: Plan,
    engine: Engine,
    fmax: float = DEFAULT_FMAX,
    workers: int | None = None,
    report: Callable[[int, int, str], None] | None = None,
) -> RunOutcome:
    """Compute every job that has no finished result yet.

    Parameters
    ----------
    run : path
        Run folder.
    plan : Plan
        Its plan.
    engine : Engine
    fmax : float
        Force tolerance of the relaxation, eV/A (not used with clamped ions).
    workers : int, optional
        Processes; all cores when left out.
    report : callable, optional
        Called with (finished, total, label) after each job.

    Raises
    ------
    InputError
        When finished jobs come from another engine or other settings: one set must be computed in one way.
    """
    engine.calculator()  # fails here, once, rather than in every process
    relax = plan.ions == "relaxed"
    engines = {job.label: _engine_of(job, plan, engine) for job in plan.jobs}
    stamps = {label: _stamp(chosen, relax, fmax) for label, chosen in engines.items()}
    kept = tuple(job.label for job in plan.jobs if _finished(run, job.label, stamps[job.label]))
    todo = {
        job.label: (_start(run, plan, job), engines[job.label], relax and job.kind != "displaced", fmax, stamps[job.label])
        for job in plan.jobs
        if job.label not in kept
    }
    count = max(1, min(workers or os.cpu_count() or 1, len(todo) or 1))
    done: list[str] = []
    unconverged: list[str] = []
    failed: dict[str, str] = {}

    def settle(label: str, converged: bool | None, reason: str = "") -> None:
        if converged is None:
            failed[label] = reason
        else:
            (done if converged else unconverged).append(label)
        if report:
            report(len(kept) + len(done) + len(unconverged) + len(failed), len(plan.jobs), label)

    if count == 1:
        for label, work in todo.items():
            settle(label, *_guarded(run, label, *work))
    elif todo:
        with _one_thread():
            _in_processes(run, todo, count, settle)
    return RunOutcome(tuple(done), kept, tuple(unconverged), failed)


def _engine_of(job: StrainJob, plan: Plan, engine: Engine) -> Engine:
    """The engine, with its finer settings for the jobs that ask for them."""
    if job.kind != "finer":
        return engine
    finer = plan.finer.get("engine")
    if not finer:
        raise InputError(
            "the finer settings of this run are those of a deck, not of a local engine", job.label, "Run it on the cluster."
        )
    return Engine(engine.name, {**engine.settings, **finer})


def _stamp(engine: Engine, relax: bool, fmax: float) -> str:
    """What a result says about how it was made."""
    return (engine.description + (f" fmax={fmax:g}" if relax else " clamped")).replace('"', "'").replace("\n", " ")


def _in_processes(
    run: Path,
    todo: dict[str, tuple[Crystal, Engine, bool, float, str]],
    count: int,
    settle: Callable[..., None],
) -> None:
    """Workers write their own results; an interruption drops what has not begun and stops what has."""
    pool = ProcessPoolExecutor(count, mp_context=get_context("spawn"), initializer=_leave_interrupts_to_parent)
    try:
        waiting: dict[Future[tuple[bool | None, str]], str] = {
            pool.submit(_guarded, run, label, *work): label for label, work in todo.items()
        }
        while waiting:
            for future in wait(waiting, return_when=FIRST_COMPLETED).done:
                label = waiting.pop(future)
                try:
                    settle(label, *future.result())
                except Exception as error:  # the worker process died
                    settle(label, None, f"the process ended unexpectedly ({type(error).__name__})")
    except BaseException:
        for process in list((pool._processes or {}).values()):
            process.terminate()
        pool.shutdown(wait=False, cancel_futures=True)
        raise
    pool.shutdown()


def _leave_interrupts_to_parent() -> None:
    import signal

    signal.signal(signal.SIGINT, signal.SIG_IGN)


@contextmanager
def _one_thread() -> Iterator[None]:
    """Children started inside use one thread each, so that they do not fight for the cores."""
    names = ("OMP_NUM_THREADS", "OPENBLAS_NUM_THREADS", "MKL_NUM_THREADS")
    before = {name: os.environ.get(name) for name in names}
    os.environ.update(dict.fromkeys(names, "1"))
    try:
        yield
    finally:
        for name, value in before.items():
            if value is None:
                del os.environ[name]
            else:
                os.environ[name] = value


def _start(run: Path, plan: Plan, job: StrainJob) -> Crystal:
    """The cell to begin with: the plan's, or the last positions of an attempt that did not converge."""
    path = run / job_folder(job.label) / RETURNED
    cell = plan.starting_cell(job)
    if not path.is_file():
        return cell
    left = read_crystal(path, "extxyz")
    return replace(cell, positions=left.positions) if np.array_equal(left.numbers, cell.numbers) else cell


def _guarded(
    run: Path, label: str, cell: Crystal, engine: Engine, relax: bool, fmax: float, stamp: str
) -> tuple[bool | None, str]:
    """Compute one job and write its result: whether it converged, or None and the reason."""
    try:
        outcome = evaluate_cell(cell, engine, relax, fmax)
    except StrainkitError as error:
        return None, error.what
    info = {
        "energy": outcome.energy,
        "stress": outcome.stress,
        "engine": stamp,
        "converged": outcome.converged,
        "steps": outcome.steps,
        "max_force": float(np.linalg.norm(outcome.forces, axis=1).max()),
    }
    atomic_write(run / job_folder(label) / RETURNED, extxyz_text(outcome.crystal, info, outcome.forces))
    return outcome.converged, ""


def _finished(run: Path, label: str, stamp: str) -> bool:
    """Has this job a converged result of ours? Refuses one that came from another engine."""
    path = run / job_folder(label) / RETURNED
    if not path.is_file():
        return False
    with path.open(encoding="utf-8", errors="replace") as file:
        head = [next(file, "") for _ in range(2)][1]
    if f'engine="{stamp}"' not in head:
        raise InputError(
            f"holds a result of another engine or setting than {stamp!r}",
            path,
            "Use the same engine and settings, or prepare a new run folder for this one.",
        )
    return "converged=T" in head
