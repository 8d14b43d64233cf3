"""All structures that came back, with energies, forces and stresses, in one extended XYZ file: data for fitted potentials."""

from __future__ import annotations

import os
import tempfile
from collections.abc import Callable, Iterable, Iterator
from dataclasses import replace
from pathlib import Path

import numpy as np

from strainkit.collect.table import load_table
from strainkit.errors import DiskError
from strainkit.run.extxyz import extxyz_text
from strainkit.run.outputs import check_output
from strainkit.run.plan import load_plan
from strainkit.tensors.sixvectors import stress_from_voigt
from strainkit.units import EV_PER_A3_IN_GPA

__all__ = ["check_export", "export_structures", "frames_of"]


def frames_of(run: Path) -> Iterator[str]:
    """Extended XYZ frames of the usable jobs of a run, in the given frame.

    Lattices are the planned ones; positions those that came back, up to a common shift; `energy` is the free energy of the
    cell in eV, `stress` nine numbers in eV/A^3, positive in tension, `forces` eV/A where the program printed them. Jobs whose
    ions were relaxed but whose output kept neither forces nor moved positions (an imported table) are left out.
    """
    plan = load_plan(run)
    jobs = {job.label: job for job in plan.jobs}
    for record in load_table(run, ions=True).usable:
        job = jobs.get(record.label)
        if job is None or record.stress is None or (record.displacements is None and plan.ions != "clamped"):
            continue
        planned = plan.crystal.deformed(job.gradient)
        positions = planned.positions
        if record.displacements is not None:
            positions = positions + np.linalg.solve(planned.lattice.T, record.displacements.T).T
        info: dict[str, object] = {"name": plan.crystal.name, "job": job.label, "kind": job.kind, "program": record.program}
        if record.energy is not None:
            info["energy"] = record.energy
        info["stress"] = stress_from_voigt(record.stress) / EV_PER_A3_IN_GPA
        yield extxyz_text(replace(planned, positions=positions), info, record.forces)


def check_export(path: Path) -> None:
    """Raise InputError where an export must not be written: only another export is replaced."""
    check_output(path, _is_export, "an export")


def _is_export(path: Path) -> bool:
    """Does its first frame name a job of a set? An export without frames is empty."""
    with path.open(encoding="utf-8", errors="replace") as file:
        count, head = file.readline(200), file.readline(20_000)
    named = all(f' {key}="' in head for key in ("name", "job", "kind", "program"))
    return not (count + head) or (head.startswith("Lattice=") and named)


def export_structures(runs: Iterable[Path], path: Path, finished: Callable[[Path], None] = lambda run: None) -> int:
    """Write the frames of many runs to one file, whole or not at all; their number.

    Raises
    ------
    DiskError
        When the file cannot be written.
    InputError
        A run that has not been collected, or a place that `check_export` refuses.
    """
    check_export(path)
    count, temporary = 0, ""
    try:
        handle, temporary = tempfile.mkstemp(prefix=f".{path.name}.", dir=path.parent)
        with os.fdopen(handle, "w", encoding="utf-8") as file:
            for run in runs:
                for frame in frames_of(run):
                    file.write(frame)
                    count += 1
                finished(run)
        os.chmod(temporary, 0o644)
        os.replace(temporary, path)
    except OSError as error:
        raise DiskError(f"cannot be written ({error.strerror})", path, "Check free space and permissions.") from None
    finally:
        if temporary:
            Path(temporary).unlink(missing_ok=True)
    return count
