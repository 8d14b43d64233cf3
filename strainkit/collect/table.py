"""The stress table: one record a job, what came back and whether it may be used."""

from __future__ import annotations

import csv
import io
import json
from collections.abc import Mapping
from dataclasses import dataclass, field, replace
from pathlib import Path
from typing import Any

import numpy as np

from strainkit.errors import InputError
from strainkit.findings import Finding
from strainkit.run.files import atomic_write, dump_json, load_json
from strainkit.tensors.arrays import FloatArray
from strainkit.tensors.sixvectors import COMPONENTS

__all__ = ["IONS", "STATUSES", "TABLE", "TABLE_PROGRAM", "StressRecord", "StressTable", "load_table"]

TABLE = "stresses.json"
IONS = "ions.json"
_KIND = "strainkit/stresses"
_IONS_KIND = "strainkit/ions"

#: status of a job -> meaning
STATUSES = {
    "done": "finished, converged, and of the planned cell",
    "missing": "no output that strainkit reads",
    "unfinished": "the output has no end-of-job mark or no stress",
    "unconverged": "electronic steps or ions not converged",
    "broken": "the output cannot be read or holds impossible numbers",
    "mismatch": "the output is of another cell or crystal than planned",
    "suspect": "finished, but a check of the whole set refuses its numbers",
}
_AGAIN = "Make it again with: strainkit collect RUN"
#: "program" of a record that was typed into a table, and what its being done means
TABLE_PROGRAM = "table"
_TYPED = "from a table: its end, convergence and cell were not seen"


@dataclass(frozen=True)
class StressRecord:
    """What came back of one job.

    Attributes
    ----------
    label : str
    status : str
        A key of `STATUSES`; only "done" is used by the fit.
    stress : (6,) or None
        Cauchy, GPa, xx yy zz yz xz xy, positive in tension, given frame, rotation removed, no offset removed.
    energy : float or None
        Free energy of the run cell, eV.
    max_force : float or None
        eV/A.
    program, version, file, file_sha256 : str
        Where it came from; the file relative to the run folder.
    settings : mapping
        What the output says about how it was computed: cutoff_eV, kpoints, functional, ...
    rotation : (3, 3) or None
        R with x_output = R x_given, which was taken out of stress, forces and displacements.
    seen : str
        Fingerprint of the job's folder and plan when it was read; "?" at its end: the files were too young to be sure.
    findings : tuple of Finding
    forces : (n, 3) or None
        eV/A, given frame, rotation removed, planned order of atoms. Kept in ions.json, not in the table.
    displacements : (n, 3) or None
        From the affinely strained positions to the returned ones, A, given frame, mean removed. Kept in ions.json.
    """

    label: str
    status: str
    stress: FloatArray | None = None
    energy: float | None = None
    max_force: float | None = None
    program: str = ""
    file: str = ""
    file_sha256: str = ""
    findings: tuple[Finding, ...] = ()
    forces: FloatArray | None = None
    displacements: FloatArray | None = None
    version: str = ""
    settings: Mapping[str, str | float] = field(default_factory=dict)
    rotation: FloatArray | None = None
    seen: str = ""

    @property
    def meaning(self) -> str:
        """What its status means."""
        return _TYPED if (self.status, self.program) == ("done", TABLE_PROGRAM) else STATUSES[self.status]

    def to_dict(self) -> dict[str, Any]:
        """JSON-ready record."""
        return {
            "label": self.label,
            "status": self.status,
            "stress_GPa": None if self.stress is None else self.stress.tolist(),
            "energy_eV": self.energy,
            "max_force_eV_per_A": self.max_force,
            "program": self.program,
            "version": self.version,
            "settings": dict(self.settings),
            "rotation": None if self.rotation is None else self.rotation.tolist(),
            "file": self.file,
            "file_sha256": self.file_sha256,
            "seen": self.seen,
            "findings": [f.to_dict() for f in self.findings],
        }


@dataclass(frozen=True)
class StressTable:
    """All records of a run, in the order of the plan, and what was found when they were looked at together."""

    records: tuple[StressRecord, ...]
    findings: tuple[Finding, ...] = ()

    @property
    def usable(self) -> tuple[StressRecord, ...]:
        """Records that the fit may use."""
        return tuple(record for record in self.records if record.status == "done")

    def to_dict(self) -> dict[str, Any]:
        """JSON-ready table."""
        return {
            "schema": f"{_KIND}/1",
            "records": [record.to_dict() for record in self.records],
            "usable": len(self.usable),
            "expected": len(self.records),
            "findings": [f.to_dict() for f in self.findings],
        }

    def ions_text(self) -> str:
        """JSON of forces and displacements of the jobs, each with the checksum of the file they came from, a job a line."""
        lines = []
        for r in self.records:
            if r.displacements is None and r.forces is None:
                continue
            arrays = (("forces_eV_per_A", r.forces), ("displacements_A", r.displacements))
            item = {"file_sha256": r.file_sha256} | {key: None if x is None else x.tolist() for key, x in arrays}
            lines.append(f"{json.dumps(r.label)}: {json.dumps(item, allow_nan=False)}")
        return f'{{"schema": "{_IONS_KIND}/1", "jobs": {{\n' + ",\n".join(lines) + "\n}}\n"

    def save(self, run: Path) -> None:
        """Write stresses.json, stresses.csv and ions.json into the run folder."""
        buffer = io.StringIO()
        writer = csv.writer(buffer, lineterminator="\n")
        writer.writerow(["label", "status", *(f"{c}_GPa" for c in COMPONENTS), "energy_eV", "file"])
        for r in self.records:
            stress = [""] * 6 if r.stress is None else [repr(float(x)) for x in r.stress]
            writer.writerow([r.label, r.status, *stress, "" if r.energy is None else repr(r.energy), r.file])
        atomic_write(run / "stresses.csv", buffer.getvalue())
        if any(r.displacements is not None or r.forces is not None for r in self.records):
            atomic_write(run / IONS, self.ions_text())
        atomic_write(run / TABLE, dump_json(self.to_dict()))


def load_table(run: Path, ions: bool = False) -> StressTable:
    """Read the stress table of a run folder; with `ions`, also what ions.json holds of each job.

    Raises
    ------
    InputError
        No table, or a damaged one.
    """
    path = run / TABLE
    if not path.is_file():
        raise InputError("no stress table yet", path, f"Make it with: strainkit collect {run}")
    data = _load(path, _KIND)
    try:
        doubts = tuple(Finding(**f) for f in data.get("findings", ()))
        table = StressTable(tuple(_record(item) for item in data["records"]), doubts)
        return _with_ions(run, table) if ions else table
    except InputError:
        raise
    except (KeyError, TypeError, ValueError, AttributeError) as error:
        raise InputError(f"damaged ({type(error).__name__}: {error})", path, _AGAIN) from None


def _load(path: Path, kind: str) -> dict[str, Any]:
    """As `load_json`; whatever is wrong with what collect wrote, collect makes it anew."""
    try:
        return load_json(path, kind)
    except InputError as error:
        raise InputError(error.what, path, error.remedy if "newer" in error.what else _AGAIN) from None


def _with_ions(run: Path, table: StressTable) -> StressTable:
    """The table with forces and displacements, where they come from the same file as the stress."""
    path = run / IONS
    if not path.is_file():
        return table
    jobs = _load(path, _IONS_KIND)["jobs"]
    return replace(table, records=tuple(_with_own_ions(record, jobs.get(record.label)) for record in table.records))


def _with_own_ions(record: StressRecord, item: dict[str, Any] | None) -> StressRecord:
    if item is None or item["file_sha256"] != record.file_sha256:
        return record
    forces, moved = (
        None if (x := item[key]) is None else np.array(x, dtype=float) for key in ("forces_eV_per_A", "displacements_A")
    )
    return replace(record, forces=forces, displacements=moved)


def _record(item: dict[str, Any]) -> StressRecord:
    stress, energy = item["stress_GPa"], item["energy_eV"]
    if item["status"] not in STATUSES:
        raise ValueError(f"status {item['status']!r} of {item['label']}")
    numbers = [x for x in (stress, energy) if x is not None]
    if item["status"] == "done" and not all(np.isfinite(np.array(x, dtype=float)).all() for x in numbers):
        raise ValueError(f"numbers of {item['label']} that are not finite")
    return StressRecord(
        label=item["label"],
        status=item["status"],
        stress=None if stress is None else np.array(stress, dtype=float).reshape(6),
        energy=energy,
        max_force=item["max_force_eV_per_A"],
        program=item["program"],
        file=item["file"],
        file_sha256=item["file_sha256"],
        findings=tuple(Finding(**f) for f in item["findings"]),
        version=item.get("version", ""),
        settings=item.get("settings") or {},
        rotation=None if item.get("rotation") is None else np.array(item["rotation"], dtype=float).reshape(3, 3),
        seen=item.get("seen", ""),
    )
