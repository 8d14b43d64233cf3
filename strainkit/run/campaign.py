"""The campaign folder: many ordinary run folders, one list of jobs, and the manifest campaign.json.

    OUT/campaign.json            which crystals, from which files, and the cells that were refused
    OUT/runs/001/NAME/           one run folder a crystal, at most 1,000 in each numbered folder
    OUT/joblist.txt, submit.sh   every job of every crystal; further numbers where an array would be too large

The results of a crystal are in its own run folder, each file written whole or not at all; nothing else keeps state.
"""

from __future__ import annotations

import os
import socket
import time
from collections.abc import Iterator, Mapping
from contextlib import contextmanager
from dataclasses import asdict, dataclass, field
from pathlib import Path
from typing import Any

from strainkit import __version__
from strainkit.errors import DiskError, InputError
from strainkit.run.files import atomic_write, dump_json, load_json

__all__ = ["CAMPAIGN", "SHARD", "Campaign", "Member", "Refusal", "at_work", "is_campaign", "load_campaign", "run_place"]

CAMPAIGN = "campaign.json"
_KIND = "strainkit/campaign"
#: most run folders in one folder
SHARD = 1000
#: a claim of another machine that was not touched for so long is that of a dead process, seconds
_SILENCE = 300.0


@dataclass(frozen=True)
class Member:
    """One crystal: its name, its run folder relative to the campaign, its cell's file with checksum, and its jobs."""

    name: str
    run: str
    source: str
    source_sha256: str
    laue_class: str
    jobs: int


@dataclass(frozen=True)
class Refusal:
    """A cell that cannot be computed, and why."""

    source: str
    reason: str


@dataclass(frozen=True)
class Campaign:
    """What campaign.json holds.

    Attributes
    ----------
    members : tuple of Member
    refused : tuple of Refusal
    recipe : str
        Checksum of all options that the run folders were prepared with.
    calculation : dict
        "scheduler", "job_name" and "site" where there are job scripts.
    """

    members: tuple[Member, ...]
    refused: tuple[Refusal, ...]
    recipe: str
    calculation: dict[str, Any] = field(default_factory=dict)

    @property
    def jobs(self) -> int:
        """Jobs of all crystals."""
        return sum(member.jobs for member in self.members)

    def to_dict(self) -> dict[str, Any]:
        """The manifest."""
        return {
            "schema": f"{_KIND}/1",
            "strainkit_version": __version__,
            "recipe_sha256": self.recipe,
            "jobs": self.jobs,
            "calculation": self.calculation or None,
            "refused_cells": [asdict(refusal) for refusal in self.refused],
            "crystals": [asdict(member) for member in self.members],
        }

    def save(self, folder: Path) -> None:
        """Write campaign.json."""
        atomic_write(folder / CAMPAIGN, dump_json(self.to_dict()))


def run_place(index: int, name: str) -> str:
    """Run folder of the crystal that comes as number `index` (from 0), relative to the campaign."""
    return f"runs/{index // SHARD + 1:03d}/{name}"


def is_campaign(folder: Path | None) -> bool:
    """Does this folder hold a campaign?"""
    return folder is not None and (folder / CAMPAIGN).is_file()


def load_campaign(folder: Path) -> Campaign:
    """Read campaign.json.

    Raises
    ------
    InputError
        A manifest that is damaged or newer than this strainkit.
    """
    path = folder / CAMPAIGN
    remedy = (
        f"The run folders are untouched: move {CAMPAIGN} away and give strainkit prepare the same cells and --out again, "
        "or use the run folders one by one."
    )
    try:
        data = load_json(path, _KIND)
    except InputError as error:
        if "newer" in error.what:
            raise
        raise InputError(error.what, path, remedy) from None
    try:
        members = tuple(_member(item) for item in data["crystals"])
        refused = tuple(Refusal(str(item["source"]), str(item["reason"])) for item in data["refused_cells"])
        return Campaign(members, refused, str(data["recipe_sha256"]), dict(data.get("calculation") or {}))
    except (KeyError, TypeError, ValueError) as error:
        raise InputError(f"damaged manifest ({type(error).__name__}: {error})", path, remedy) from None


def _member(item: Mapping[str, Any]) -> Member:
    member = Member(*(item[key] for key in ("name", "run", "source", "source_sha256", "laue_class", "jobs")))
    parts = Path(member.run).parts
    if len(parts) != 3 or parts[0] != "runs" or ".." in parts or type(member.jobs) is not int:
        raise ValueError(f"{member.run!r} is no run folder of a campaign")
    return member


@contextmanager
def at_work(folder: Path, command: str) -> Iterator[None]:
    """Keep a second process from doing the same work at the same time; a claim of a dead process is passed over.

    The claim is a courtesy: every result is written whole, so that two processes at once would cost time and nothing else.

    Raises
    ------
    InputError
        When another process is at work.
    """
    claim = folder / f".{command}-at-work"
    mine = f"{os.getpid()} {socket.gethostname()}"
    try:
        handle = os.open(claim, os.O_CREAT | os.O_EXCL | os.O_WRONLY, 0o644)
    except FileExistsError:
        owner = _alive(claim)
        if owner:
            remedy = f"Wait for it, or remove {claim} if that process is gone."
            raise InputError(f"another strainkit {command} is at work here ({owner})", folder, remedy) from None
        handle = os.open(claim, os.O_CREAT | os.O_TRUNC | os.O_WRONLY, 0o644)
    except OSError as error:
        raise DiskError(f"cannot be written ({error.strerror})", folder, "Check free space and permissions.") from None
    with os.fdopen(handle, "w") as file:
        file.write(mine)
    try:
        yield
    finally:
        claim.unlink(missing_ok=True)


def _alive(claim: Path) -> str:
    """Who holds a claim, in words; empty when that process is dead."""
    try:
        pid, _, host = claim.read_text().partition(" ")
        age = time.time() - claim.stat().st_mtime
    except OSError:
        return ""
    if not pid.isdigit():
        return "" if age > 10 else "a process that has just begun"
    if host == socket.gethostname():
        try:
            os.kill(int(pid), 0)
        except ProcessLookupError:
            return ""
        except PermissionError:
            pass
        return f"process {pid}"
    return f"process {pid} on {host}" if age < _SILENCE else ""
