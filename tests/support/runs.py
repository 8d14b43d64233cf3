"""Run folders whose jobs have come back from a pretended program with a known stiffness."""

from __future__ import annotations

from collections.abc import Callable
from pathlib import Path

import numpy as np

from strainkit.collect.gather import collect_run
from strainkit.collect.table import StressTable
from strainkit.crystal.crystal import Crystal
from strainkit.prepare.runfolder import plan_run, write_run
from strainkit.run.plan import Plan, job_folder
from strainkit.tensors.rotations import rotate_matrix
from strainkit.tensors.sixvectors import from_mandel, to_mandel
from strainkit.tensors.strain import cauchy_from_pk2
from strainkit.units import EV_PER_A3_IN_GPA
from support.crystals import conventional
from support.published import BY_LAUE_CLASS, mandel
from support.returned import write_return


def returned_run(
    folder: Path,
    laue: str = "m-3m",
    magnitudes: tuple[float, ...] = (0.01,),
    noise: float = 0.01,
    crystal: Crystal | None = None,
    stiffness: np.ndarray | None = None,
    keep: Callable[[str], bool] = lambda label: True,
) -> tuple[Plan, StressTable]:
    """Prepare, pretend to compute, and collect: a published tensor in IEEE axes, invented noise (GPa) of a fixed seed."""
    rng = np.random.default_rng(7)
    plan, _ = write_run(plan_run(crystal or conventional(laue), list(magnitudes)), folder)
    tensor = mandel(BY_LAUE_CLASS[laue]) if stiffness is None else stiffness
    tensor = rotate_matrix(plan.frames["ieee"].rotation.T, tensor)
    for job in plan.jobs:
        strain = to_mandel(job.strain)
        sigma = cauchy_from_pk2(from_mandel(tensor @ strain), job.gradient)
        jitter = rng.normal(0.0, noise, (3, 3))
        energy = -10.0 + 0.5 * strain @ tensor @ strain * plan.crystal.volume / EV_PER_A3_IN_GPA
        if keep(job.label):
            cell = plan.crystal.deformed(job.gradient)
            write_return(folder / job_folder(job.label), cell, sigma + (jitter + jitter.T) / 2, energy=energy)
    table = collect_run(folder, plan)
    table.save(folder)
    return plan, table
