"""The same work for many things in several processes: results as they come, a dead worker costs its own piece only."""

from __future__ import annotations

import os
import signal
import threading
import time
from collections.abc import Callable, Iterable, Iterator
from concurrent.futures import FIRST_COMPLETED, Future, ProcessPoolExecutor, wait
from concurrent.futures.process import BrokenProcessPool
from itertools import islice
from multiprocessing import get_context
from typing import TypeVar

__all__ = ["Died", "over_processes", "usable_cores"]

Item = TypeVar("Item")
Result = TypeVar("Result")

#: pieces handed over at once: large enough to hide the hand-over, small enough that little is lost
_CHUNK = 4


class Died:
    """Stands for the result of a piece whose worker process ended without a word, twice."""


def usable_cores() -> int:
    """Cores that this process may use."""
    return len(os.sched_getaffinity(0)) if hasattr(os, "sched_getaffinity") else os.cpu_count() or 1


def over_processes(
    function: Callable[[Item], Result], items: Iterable[Item], workers: int
) -> Iterator[tuple[Item, Result | Died]]:
    """(item, function(item)) for every item, in the order in which they are ready.

    Items are taken as they are needed, so that memory does not grow with their number. An exception of the function ends
    everything; leaving the loop early stops the workers.

    Parameters
    ----------
    function : callable
        Of a module, so that another process finds it.
    items : iterable
    workers : int
        Processes; with one the work is done in this process.
    """
    if workers == 1:
        for item in items:
            yield item, function(item)
        return
    source = iter(items)
    while True:
        suspects: list[Item] = []
        yield from _with_pool(function, source, workers, _CHUNK, suspects)
        if not suspects:
            return
        # one of these killed its worker: each gets a process of its own
        for item in suspects:
            lost: list[Item] = []
            yield from _with_pool(function, iter([item]), 1, 1, lost)
            if lost:
                yield item, Died()


def _with_pool(
    function: Callable[[Item], Result], source: Iterator[Item], workers: int, chunk: int, suspects: list[Item]
) -> Iterator[tuple[Item, Result | Died]]:
    """Results until the source is empty or the pool breaks; what was under way then is left in `suspects`."""
    pool = ProcessPoolExecutor(workers, mp_context=get_context("spawn"), initializer=_begin, initargs=(os.getpid(),))
    waiting: dict[Future[list[Result]], list[Item]] = {}
    broken = False
    try:
        while True:
            while not broken and len(waiting) < 2 * workers and (batch := list(islice(source, chunk))):
                try:
                    waiting[pool.submit(_each, function, batch)] = batch
                except BrokenProcessPool:
                    broken = True
                    suspects += batch
            if not waiting:
                break
            for future in wait(waiting, return_when=FIRST_COMPLETED).done:
                batch = waiting.pop(future)
                try:
                    results = future.result()
                except BrokenProcessPool:
                    broken = True
                    suspects += batch
                else:
                    yield from zip(batch, results, strict=True)
    except BaseException:
        for process in list((pool._processes or {}).values()):
            process.terminate()
        pool.shutdown(wait=False, cancel_futures=True)
        raise
    pool.shutdown()


def _each(function: Callable[[Item], Result], batch: list[Item]) -> list[Result]:
    return [function(item) for item in batch]


def _begin(parent: int) -> None:
    """A worker leaves interruptions to its parent, and ends when the parent is gone, also when that was killed."""
    signal.signal(signal.SIGINT, signal.SIG_IGN)

    def watch() -> None:
        while os.getppid() == parent:
            time.sleep(1.0)
        os._exit(1)

    threading.Thread(target=watch, daemon=True).start()
