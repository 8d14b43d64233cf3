"""What a job script left in a job folder: its attempts, whether one is under way, and the hours they took.

attempts.txt    start NUMBER TIME CORES HOST JOB-ID      one line when an attempt begins
                end NUMBER TIME RESULT EXIT-CODE         one line when it ends: done, failed, stopped-by-SIGNAL
running/        a claim: there while an attempt runs, touched every minute
done            there when the program ended and converged, by its own marks
"""

from __future__ import annotations

import contextlib
import time
from dataclasses import dataclass
from datetime import UTC, datetime
from pathlib import Path

__all__ = ["DONE_MARK", "Attempts", "read_attempts"]

DONE_MARK = "done"
_LOG, _CLAIM = "attempts.txt", "running"
#: a claim that was not touched for so long is that of a dead task, seconds
_SILENCE = 300.0


@dataclass(frozen=True)
class Attempts:
    """The attempts at one job.

    Attributes
    ----------
    count : int
        Attempts begun; 0 when no job script ever touched the folder.
    ended : str
        How the last attempt ended: "done", "failed", "stopped-by-TERM", ...; empty when no end was written.
    exit_code : int or None
        Of the program in the last attempt.
    scheduled : bool
        The last attempt was begun by a scheduler, not by hand.
    alive : bool
        A task claims the job and gave a sign of life in the last five minutes.
    silent_for : float or None
        Seconds since the last sign of life of a claim, None when nothing claims the job.
    core_hours : float
        Of all attempts; one that died without a word counts up to its last sign of life.
    last_core_hours : float
        Of the last attempt alone.
    done_mark : bool
    """

    count: int = 0
    ended: str = ""
    exit_code: int | None = None
    scheduled: bool = False
    alive: bool = False
    silent_for: float | None = None
    core_hours: float = 0.0
    last_core_hours: float = 0.0
    done_mark: bool = False


def read_attempts(folder: Path, now: float | None = None) -> Attempts:
    """Attempts at the job of a folder; lines that make no sense are passed over.

    Parameters
    ----------
    folder : path
    now : float, optional
        Seconds since the epoch; the clock when left out.
    """
    now = time.time() if now is None else now
    claimed = _touched(folder / _CLAIM)
    silent = None if claimed is None else max(0.0, now - claimed)
    count, ended, code, cores, begun, hours, last = 0, "", None, 1, 0.0, 0.0, 0.0
    open_attempt = scheduled = False
    for words in _lines(folder / _LOG):
        moment = _moment(words[2])
        if moment is None:
            continue
        if words[0] == "start":
            count, ended, code, begun, open_attempt, last = count + 1, "", None, moment, True, 0.0
            cores = int(words[3]) if words[3].isdigit() else 1
            scheduled = len(words) > 5 and words[5] != "-"
        elif open_attempt:
            ended = words[3]
            code = int(words[4]) if len(words) > 4 and words[4].isdigit() else None
            last = cores * max(0.0, moment - begun) / 3600.0
            hours, open_attempt = hours + last, False
    if open_attempt and claimed is not None:
        last = cores * max(0.0, claimed - begun) / 3600.0
        hours += last
    return Attempts(
        count=count,
        ended=ended,
        exit_code=code,
        scheduled=scheduled,
        alive=silent is not None and silent < _SILENCE,
        silent_for=silent,
        core_hours=hours,
        last_core_hours=last,
        done_mark=(folder / DONE_MARK).exists(),
    )


def _touched(path: Path) -> float | None:
    with contextlib.suppress(OSError):
        return path.stat().st_mtime
    return None


def _lines(path: Path) -> list[list[str]]:
    try:
        text = path.read_text(encoding="utf-8", errors="replace")
    except OSError:
        return []
    rows = [line.split() for line in text.splitlines()]
    return [words for words in rows if len(words) >= 4 and words[0] in ("start", "end")]


def _moment(text: str) -> float | None:
    try:
        return datetime.strptime(text, "%Y-%m-%dT%H:%M:%SZ").replace(tzinfo=UTC).timestamp()
    except ValueError:
        return None
