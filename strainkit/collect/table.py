"""The stress table: one record a job, what came back and whether it may be used."""

from __future__ import annotations

import csv
import io
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np

from strainkit.errors import InputError
from strainkit.findings import Finding
from strainkit.run.files import atomic_write, dump_json, load_json
from strainkit.tensors.arrays import FloatArray
from strainkit.tensors.sixvectors import COMPONENTS

__all__ = ["STATUSES", "TABLE", "StressRecord", "StressTable", "load_table"]

TABLE = "stresses.json"
_KIND = "strainkit/stresses"

#: status of a job -> meaning
STATUSES = {
    "done": "finished, converged, and of the planned cell",
    "missing": "no output found",
    "unfinished": "the output has no end-of-job mark or no stress",
    "unconverged": "electronic steps or ions not converged",
    "broken": "the output cannot be read or holds impossible numbers",
    "mismatch": "the output is of another cell or crystal than planned",
}


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
    program, file, file_sha256 : str
        Where it came from; the file relative to the run folder.
    findings : tuple of Finding
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

    def to_dict(self) -> dict[str, Any]:
        """JSON-ready record."""
        return {
            "label": self.label,
            "status": self.status,
            "stress_GPa": None if self.stress is None else self.stress.tolist(),
            "energy_eV": self.energy,
            "max_force_eV_per_A": self.max_force,
            "program": self.program,
            "file": self.file,
            "file_sha256": self.file_sha256,
            "findings": [f.to_dict() for f in self.findings],
        }


@dataclass(frozen=True)
class StressTable:
    """All records of a run, in the order of the plan."""

    records: tuple[StressRecord, ...]

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
        }

    def save(self, run: Path) -> None:
        """Write stresses.json and stresses.csv into the run folder."""
        buffer = io.StringIO()
        writer = csv.writer(buffer, lineterminator="\n")
        writer.writerow(["label", "status", *(f"{c}_GPa" for c in COMPONENTS), "energy_eV", "file"])
        for r in self.records:
            stress = [""] * 6 if r.stress is None else [repr(float(x)) for x in r.stress]
            writer.writerow([r.label, r.status, *stress, "" if r.energy is None else repr(r.energy), r.file])
        atomic_write(run / "stresses.csv", buffer.getvalue())
        atomic_write(run / TABLE, dump_json(self.to_dict()))


def load_table(run: Path) -> StressTable:
    """Read the stress table of a run folder."""
    path = run / TABLE
    if not path.is_file():
        raise InputError("no stress table yet", path, f"Make it with: strainkit collect {run}")
    data = load_json(path, _KIND)
    try:
        return StressTable(tuple(_record(item) for item in data["records"]))
    except (KeyError, TypeError, ValueError) as error:
        raise InputError(f"damaged ({type(error).__name__}: {error})", path, "Run strainkit collect again.") from None


def _record(item: dict[str, Any]) -> StressRecord:
    stress = item["stress_GPa"]
    return StressRecord(
        label=item["label"],
        status=item["status"],
        stress=None if stress is None else np.array(stress, dtype=float).reshape(6),
        energy=item["energy_eV"],
        max_force=item["max_force_eV_per_A"],
        program=item["program"],
        file=item["file"],
        file_sha256=item["file_sha256"],
        findings=tuple(Finding(**f) for f in item["findings"]),
    )
