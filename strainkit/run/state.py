"""Is a result up to date? By checksums of what it was made from, kept beside it."""

from __future__ import annotations

import json
import os
from collections.abc import Mapping
from pathlib import Path
from typing import Any

from strainkit import __version__
from strainkit.run.files import atomic_write, checksum, dump_json, in_a_hurry
from strainkit.run.plan import MANIFEST

__all__ = ["COLLECTED", "INPUTS", "collected_before", "mark_collected", "output_signature"]

#: what the last collection saw; in the run folder
COLLECTED = "collected.json"
_KIND = "strainkit/collected"
#: key under which a result keeps the checksum of what it was made from
INPUTS = "inputs_sha256"


def output_signature(run: Path) -> str:
    """Checksum of names, sizes and times of everything in the job folders and of the manifest; nothing is read.

    A file that is written to, replaced, added or removed changes it. Signs of life of a running job do not.
    """
    seen: list[tuple[str, int, int]] = []
    for place in (run, run / "jobs"):
        with os.scandir(place) as entries:
            for entry in entries:
                if place is run:
                    if entry.name == MANIFEST:
                        seen.append(_seen(entry.name, entry))
                elif entry.is_dir():
                    with os.scandir(entry.path) as files:
                        seen += [_seen(f"{entry.name}/{f.name}", f) for f in files if f.is_file()]
    return checksum(json.dumps([__version__, *sorted(seen)]).encode())


def _seen(name: str, entry: os.DirEntry[str]) -> tuple[str, int, int]:
    try:
        status = entry.stat()
    except FileNotFoundError:  # a temporary file of a job that runs
        return name, -1, 0
    return name, status.st_size, status.st_mtime_ns


def collected_before(run: Path, signature: str, table: Path) -> dict[str, Any] | None:
    """What `mark_collected` kept, when job folders and table are as they were then; None otherwise."""
    try:
        data = json.loads((run / COLLECTED).read_text(encoding="utf-8"))
        same = (
            data["schema"] == f"{_KIND}/1"
            and data[INPUTS] == signature
            and data["table_sha256"] == checksum(table.read_bytes())
        )
        return dict(data["summary"]) if same else None
    except (OSError, ValueError, KeyError, TypeError):
        return None


def mark_collected(run: Path, signature: str, table: Path, summary: Mapping[str, Any]) -> None:
    """Keep the signature that was taken before the outputs were read, and checksum and summary of the table made of them."""
    data = {"schema": f"{_KIND}/1", INPUTS: signature, "table_sha256": checksum(table.read_bytes()), "summary": dict(summary)}
    with in_a_hurry():
        atomic_write(run / COLLECTED, dump_json(data))
