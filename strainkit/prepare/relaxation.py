"""The folder of a variable-cell run: the same deck and settings as the strain set, cell and ions free."""

from __future__ import annotations

from pathlib import Path
from typing import Any

from strainkit.errors import InputError
from strainkit.prepare.calculation import Calculation
from strainkit.prepare.folders import write_folder
from strainkit.prepare.scripts import LOGS, first_submission
from strainkit.run.files import checksum, dump_json

__all__ = ["RELAXATION", "write_relaxation"]

RELAXATION = "relaxation.json"


def write_relaxation(calculation: Calculation, out: Path, scheduler: str | None = None) -> dict[str, Any]:
    """Write input files, and a job script when a scheduler is named, into a new folder.

    Returns
    -------
    dict
        What relaxation.json in that folder keeps: deck, settings, mesh, files.

    Raises
    ------
    InputError
        When the place is taken: nothing is overwritten.
    """
    if out.exists() or out.is_symlink():
        raise InputError("exists already; nothing was written", out, "Choose another --out.")
    crystal = calculation.reference
    files = calculation.files(crystal, f"{crystal.name} variable cell")
    record = {"schema": "strainkit/relaxation-deck/1", "name": crystal.name, "source": crystal.source, **calculation.record()}
    if scheduler is not None:
        tag = checksum("".join(files.values()).encode())[:6]
        scripts, more = first_submission(scheduler, calculation, crystal, ["."], tag)
        files |= scripts
        record |= more
    record["files"] = {name: checksum(text.encode()) for name, text in files.items()}
    write_folder(out, {**files, RELAXATION: dump_json(record)}, [LOGS] if scheduler else [])
    return record
