"""Clean sets in disguise: what honest users do to honest outputs, none of which is a fault (common practice, no source)."""

from __future__ import annotations

import bz2
import gzip
import lzma
import re
from collections.abc import Callable

import numpy as np

from support.blind.sets import StrainSet
from support.blind.text import editor


def _packed(work: StrainSet, rng: np.random.Generator) -> None:
    """Main outputs packed with gzip, xz or bzip2."""
    for label in work.labels:
        job, (suffix, pack) = editor(work, label), _PACKERS[int(rng.integers(3))]
        work.packed[job.main + suffix] = pack(job.text.encode())
        work.files[job.main] = ""


_PACKERS: tuple[tuple[str, Callable[[bytes], bytes]], ...] = (
    (".gz", gzip.compress),
    (".xz", lzma.compress),
    (".bz2", bz2.compress),
)


def _line_ends(work: StrainSet, rng: np.random.Generator) -> None:
    """Outputs that went through Windows, or through an editor that strips blanks at line ends."""
    for label in work.labels:
        job = editor(work, label)
        if rng.random() < 0.5:
            job.text = job.text.replace("\n", "\r\n")
        else:
            job.text = re.sub(r"[ \t]+\n", "\n", job.text)


def _unfinished(work: StrainSet, rng: np.random.Generator) -> None:
    """An older attempt that was stopped lies beside the finished output."""
    for label in work.labels:
        job = editor(work, label)
        stem, dot, suffix = job.main.rpartition(".")
        cut = job.text[: int(rng.uniform(0.1, 0.9) * len(job.text))]
        work.files[f"{stem[:-1]}0{dot}{suffix}" if stem.endswith("1") else f"{stem}0{dot}{suffix}"] = cut


def _renamed(work: StrainSet, rng: np.random.Generator) -> None:
    """Outputs under names of the user's own."""
    for label in work.labels:
        job = editor(work, label)
        main, text = job.main, job.text
        work.files[job.folder + str(rng.choice(("out", "result.txt", "run.log", "calc.output")))] = text
        work.files[main] = ""


def _exchanged(work: StrainSet, rng: np.random.Generator) -> None:
    """Two jobs' folders exchanged: every output still has the cell of one job."""
    first, second = (str(x) for x in rng.choice(work.labels[1:], 2, replace=False))
    one, two = editor(work, first), editor(work, second)
    names = {one: one.names, two: two.names}
    texts = {job: {n.removeprefix(job.folder): work.files[n] for n in names[job]} for job in (one, two)}
    for job, other in ((one, two), (two, one)):
        for name in names[job]:
            work.files[name] = ""
        work.files.update({job.folder + n: t for n, t in texts[other].items()})


def _elsewhere(work: StrainSet, rng: np.random.Generator) -> None:
    """Computed on other machines at other times by other users."""
    for label in work.labels:
        job, hour = editor(work, label), f"{rng.integers(10, 24)}:{rng.integers(10, 60)}:{rng.integers(10, 60)}"
        job.text = re.sub(r"\b\d\d:\d\d:\d\d\b", hour, job.text)
        job.text = re.sub(r"1Dec2026|1 Dec 2026|2026-12-01", lambda m: m[0].replace("1", "2", 1), job.text)
        job.text = re.sub(r"running on     1 processors", f"running on {rng.integers(2, 64):5d} processors", job.text)
        job.text = re.sub(r"(Arch|User|Pid):.*", r"\g<1>: other", job.text)


#: name -> what is done to the set
DISGUISES: dict[str, Callable[[StrainSet, np.random.Generator], None]] = {
    "packed": _packed,
    "line ends": _line_ends,
    "older unfinished attempt beside": _unfinished,
    "other file names": _renamed,
    "two folders exchanged": _exchanged,
    "other machines": _elsewhere,
}


def disguised(work: StrainSet, name: str, rng: np.random.Generator) -> StrainSet:
    """A copy of a real set in a disguise."""
    copy = work.copy()
    DISGUISES[name](copy, rng)
    return copy
