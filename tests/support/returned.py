"""Returned files of a pretended program: any stress law, any rotation of the output's frame."""

from __future__ import annotations

from collections.abc import Callable
from pathlib import Path

import numpy as np

from strainkit.crystal.crystal import Crystal
from strainkit.run.extxyz import RETURNED, extxyz_text
from strainkit.run.plan import Plan, job_folder
from strainkit.tensors.sixvectors import from_mandel, to_mandel
from strainkit.tensors.strain import cauchy_from_pk2
from strainkit.units import EV_PER_A3_IN_GPA
from support.crystals import random_rotation


def linear_law(mandel: np.ndarray, reference: np.ndarray | None = None) -> Callable[[np.ndarray], np.ndarray]:
    """Second Piola-Kirchhoff stress (3, 3), GPa, of a Green-Lagrange strain (3, 3): S0 + C:eta."""
    start = np.zeros((3, 3)) if reference is None else reference
    return lambda strain: start + from_mandel(mandel @ to_mandel(strain))


def write_returns(
    run: Path,
    plan: Plan,
    law: Callable[[np.ndarray], np.ndarray],
    rng: np.random.Generator | None = None,
    only: set[str] | None = None,
    energy: float = -1.0,
) -> None:
    """Write returned.extxyz for every job; with a generator, each output in its own randomly turned frame.

    Energies, eV, are those of the law: `energy` at rest and V0 eta:(S0 + S)/2 more under strain, exact for linear laws.
    """
    start = law(np.zeros((3, 3)))
    for job in plan.jobs:
        if only is not None and job.label not in only:
            continue
        second = law(job.strain)
        sigma = cauchy_from_pk2(second, job.gradient)
        work = plan.crystal.volume * float((job.strain * (start + second)).sum()) / 2 / EV_PER_A3_IN_GPA
        turn = np.eye(3) if rng is None else random_rotation(rng)
        cell = plan.crystal.deformed(turn @ job.gradient)
        write_return(run / job_folder(job.label), cell, turn @ sigma @ turn.T, energy=energy + work)


def write_return(folder: Path, cell: Crystal, sigma_gpa: np.ndarray, **info: object) -> None:
    """One returned.extxyz with a Cauchy stress (3, 3) in GPa."""
    pairs = {"energy": -1.0, "stress": sigma_gpa / EV_PER_A3_IN_GPA, **info}
    folder.mkdir(parents=True, exist_ok=True)
    (folder / RETURNED).write_text(extxyz_text(cell, pairs))
