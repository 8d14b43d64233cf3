"""What is known already when a run is prepared: finished calculations, force constants, a guess of the tensor."""

from __future__ import annotations

from pathlib import Path
from typing import TYPE_CHECKING

from strainkit.cli.options import note

if TYPE_CHECKING:
    from strainkit.crystal.crystal import Crystal
    from strainkit.prepare.settings import Settings
    from strainkit.run.plan import Plan
    from strainkit.tensors.arrays import FloatArray
    from strainkit.tensors.stiffness import Stiffness

__all__ = ["adopted", "check_engine", "guessed", "keep", "moved", "predicted"]


def guessed(path: Path, crystal: Crystal, symprec: float) -> Stiffness:
    """A typed tensor in the frame of the cell.

    Raises
    ------
    InputError
        When it has an eigenvalue that is not positive: it has no moduli to expect errors of.
    """
    import numpy as np

    from strainkit.crystal.symmetry import find_symmetry
    from strainkit.derive.elastic import from_tensor_file
    from strainkit.errors import InputError
    from strainkit.tensors.textfile import read_tensor

    guess = from_tensor_file(read_tensor(path), crystal, find_symmetry(crystal, symprec)).waves
    smallest = float(np.linalg.eigvalsh(guess.mandel)[0])
    if smallest <= 0:
        what = f"no stable crystal has this tensor: its smallest eigenvalue, {smallest:.3g} GPa, is not positive"
        raise InputError(what, path, "Check the constants, the axes and the unit.")
    return guess


def adopted(plan: Plan, folder: Path, quiet: bool) -> tuple[Plan, list[tuple[str, Path]]]:
    """The plan around finished calculations, and label and file of each."""
    import numpy as np

    from strainkit.collect.adopt import find_strained
    from strainkit.design.extend import adopted_jobs
    from strainkit.errors import InputError, counted
    from strainkit.prepare.extend import adopt_jobs

    found, refused = find_strained(plan.crystal, folder)
    for line in refused:
        note(f"not adopted: {line}", quiet)
    if not found:
        raise InputError("no finished calculation of this cell in it", folder, "Their lattice must be strained by under 10 %.")
    jobs = adopted_jobs(np.array([one.gradient for one in found]), plan.symmetry)
    longer = adopt_jobs(plan, jobs)
    used = {job.label for job in longer.jobs}
    files = [(job.label, one.path) for job, one in zip(jobs, found, strict=True) if job.label in used]
    note(
        f"adopted {counted(len(files), 'calculation')}; {counted(len(longer.jobs) - len(files), 'job')} left to compute", quiet
    )
    return longer, files


def check_engine(run: Path, plan: Plan, settings: Settings) -> None:
    """Refuse finer settings that the engine does not know which computed the reference, where it is one of strainkit's own.

    Raises
    ------
    InputError
    """
    from strainkit.errors import InputError
    from strainkit.evaluate.engines import ENGINES, Engine
    from strainkit.run.extxyz import RETURNED, recorded_engine
    from strainkit.run.plan import job_folder

    returned = run / job_folder(plan.jobs[0].label) / RETURNED
    name = (recorded_engine(returned) or "").partition(" ")[0]
    if not settings.engine or name not in ENGINES:
        return
    try:
        Engine(name, settings.engine).calculator()
    except InputError as error:
        raise InputError(error.what, settings.source, error.remedy) from None


def keep(path: Path, folder: Path) -> None:
    """Copy a finished output into its job folder; the original stays where it is."""
    from strainkit.run.files import atomic_write

    if not (folder / path.name).exists():
        atomic_write(folder / path.name, path.read_bytes())


def moved(run: Path) -> dict[str, FloatArray]:
    """Displacements of the ions in the jobs that have been collected, by label."""
    from strainkit.collect.table import TABLE, load_table

    if not (run / TABLE).is_file():
        return {}
    return {r.label: r.displacements for r in load_table(run, ions=True).usable if r.displacements is not None}


def predicted(plan: Plan, path: Path) -> Plan:
    """The plan with starting positions from force constants."""
    from dataclasses import replace

    from strainkit.dynamics.internal import internal_strain
    from strainkit.dynamics.phonons import gamma_constants, load_phonopy, strain_response
    from strainkit.prepare.starts import predicted_starts

    study = load_phonopy(path)
    answer = internal_strain(plan.crystal, gamma_constants(study, plan.crystal), strain_response(study, plan.crystal))
    return replace(plan, starts=predicted_starts(plan, plan.strain_set, answer.displacements))
