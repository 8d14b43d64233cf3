"""Work for worker processes, some of which it kills. In a module of its own, so that a fresh process finds it."""

from __future__ import annotations

import os
import signal
from pathlib import Path


def square(number: int) -> int:
    """Its square; a negative number kills the process, as a crash or the out-of-memory killer does."""
    if number < 0:
        os.kill(os.getpid(), signal.SIGKILL)
    return number * number


def killed_once(task: tuple[Path, int]) -> int:
    """The square of the number; the first time that the number 3 is met the process dies."""
    mark, number = task
    if number == 3 and not mark.exists():
        mark.write_text("")
        os.kill(os.getpid(), signal.SIGKILL)
    return number * number


def fails(number: int) -> int:
    """An exception of the work itself."""
    raise RuntimeError(f"no {number}")
