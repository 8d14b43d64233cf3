"""What lies in the job folders: files that may be outputs, and a fingerprint by which an unchanged folder is known again."""

from __future__ import annotations

import os
import re
import time
from collections.abc import Container
from dataclasses import dataclass
from pathlib import Path
from stat import S_ISREG

import numpy as np

from strainkit import __version__
from strainkit.design.jobs import StrainJob
from strainkit.run.files import checksum
from strainkit.run.plan import Plan, job_folder

__all__ = ["Folder", "foreign_folders", "natural", "plan_fingerprint", "scan"]

#: names of outputs, also of continuations and packed ones; what a scheduler writes is none
_OUTPUT_NAME = re.compile(
    r"(?!slurm-)(.*\.(out|abo|castep|xml)|OUTCAR[^.]*|returned\.extxyz)(\.\d+)?(\.(gz|xz|bz2))?", re.IGNORECASE
)
#: a file younger than this (s) may still change within one tick of its clock
_SETTLED = 2.0


@dataclass(frozen=True)
class Folder:
    """One job folder as it is now.

    Attributes
    ----------
    name : str
        Relative to the run folder.
    files : tuple of str
        Regular files that prepare did not write, hidden ones left out, the latest continuation first.
    links : tuple of str
        Symbolic links, which are not followed.
    state : str
        Fingerprint of names, sizes and times of the files.
    settled : bool
        False when a file is so young that it may have changed without a change of its time.
    named_outputs, empty_outputs : tuple of str
        Those of the files that are called what programs call their outputs, and hold something or nothing.
    """

    name: str
    files: tuple[str, ...]
    links: tuple[str, ...]
    state: str
    settled: bool
    named_outputs: tuple[str, ...] = ()
    empty_outputs: tuple[str, ...] = ()


def natural(name: str) -> list[tuple[int, str]]:
    """Sort key in which run.10 follows run.9."""
    return [(int(part), "") if part.isdecimal() else (-1, part) for part in re.split(r"(\d+)", name)]


def scan(run: Path, name: str, written: Container[str] = ()) -> Folder:
    """Look into one folder of a run; one that is missing, a link or unreadable is empty."""
    path = run / name
    if path.is_symlink() or path.parent.is_symlink():
        return Folder(name, (), (name,), "link", True)
    found: list[tuple[str, int, int]] = []
    links = []
    try:
        with os.scandir(path) as entries:
            for entry in entries:
                if entry.name.startswith(".") or f"{name}/{entry.name}" in written:
                    continue
                if entry.is_symlink():
                    links.append(entry.name)
                    continue
                status = entry.stat(follow_symlinks=False)
                if S_ISREG(status.st_mode):
                    found.append((entry.name, status.st_size, status.st_mtime_ns))
    except OSError:
        return Folder(name, (), (), "none", True)
    found.sort(key=lambda item: (natural(item[0]), item[0]), reverse=True)
    newest = max((changed for _, _, changed in found), default=0)
    return Folder(
        name=name,
        files=tuple(file for file, _, _ in found),
        links=tuple(sorted(links)),
        state=checksum(repr(found).encode("utf-8", "surrogatepass"))[:32],
        settled=newest < time.time_ns() - _SETTLED * 1e9,
        named_outputs=tuple(file for file, size, _ in found if size and _OUTPUT_NAME.fullmatch(file)),
        empty_outputs=tuple(file for file, size, _ in found if not size and _OUTPUT_NAME.fullmatch(file)),
    )


def foreign_folders(run: Path, plan: Plan) -> list[str]:
    """Folders beside the planned ones, relative to the run folder: renamed, or not ours."""
    planned = {job.label for job in plan.jobs}
    top = Path(job_folder("x")).parent
    if (run / top).is_symlink():
        return []
    try:
        with os.scandir(run / top) as entries:
            names = [
                e.name
                for e in entries
                if e.name not in planned and not e.name.startswith(".") and e.is_dir(follow_symlinks=False)
            ]
    except OSError:
        return []
    return [f"{top}/{name}" for name in sorted(names, key=lambda n: (natural(n), n))]


def plan_fingerprint(plan: Plan, job: StrainJob) -> str:
    """What of the plan the record of a job depends on, and the version that read it."""
    crystal = plan.crystal
    parts = [crystal.lattice, crystal.positions, crystal.numbers, job.gradient]
    parts += [plan.starts[job.label]] if job.label in plan.starts else []
    text = f"{__version__} {job.label} {job.kind} {plan.ions} {plan.atoms}".encode()
    return checksum(text + b"".join(np.ascontiguousarray(part).tobytes() for part in parts))[:32]
