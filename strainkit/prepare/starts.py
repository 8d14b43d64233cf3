"""Where the ions of a new job start from, when something is known of their answer to strain."""

from __future__ import annotations

from collections.abc import Mapping, Sequence

import numpy as np

from strainkit.crystal.operations import crystal_operations
from strainkit.design.jobs import StrainJob
from strainkit.dynamics.internal import force_response
from strainkit.errors import NoTensorError
from strainkit.run.plan import Plan
from strainkit.tensors.arrays import FloatArray
from strainkit.tensors.rotations import rotation6
from strainkit.tensors.sixvectors import to_mandel

__all__ = ["learned_starts", "predicted_starts"]


def predicted_starts(plan: Plan, jobs: Sequence[StrainJob], answer: FloatArray) -> dict[str, FloatArray]:
    """Fractional positions (n, 3) by label, from displacements `answer` (n, 3, 6), angstrom per unit Mandel strain."""
    inverse = np.linalg.inv(plan.crystal.lattice)
    return {job.label: plan.crystal.positions + (answer @ to_mandel(job.strain)) @ inverse for job in jobs if job.shape}


def learned_starts(plan: Plan, new: Sequence[StrainJob], displacements: Mapping[str, FloatArray]) -> dict[str, FloatArray]:
    """Fractional positions (n, 3) by label of new jobs, from what relaxed in the finished ones.

    A job of the same cell starts where that one ended, but for what breaks the symmetry of the strained cell. Others start
    where the ions go to first order, once the finished jobs and the crystal's symmetry determine that.

    Parameters
    ----------
    plan : Plan
        With the finished jobs.
    new : sequence of StrainJob
    displacements : mapping
        Label -> displacements (n, 3) from the affine places in the deformed cell, A, given frame, of the finished jobs.
    """
    done = [job for job in plan.strain_set if job.shape and job.label in displacements]
    if not done or plan.ions == "clamped":
        return {}
    operations = crystal_operations(plan.crystal, plan.symmetry.tolerance)
    strains = to_mandel(np.array([job.strain for job in done]))
    pulled = np.array([displacements[job.label] @ np.linalg.inv(job.gradient).T for job in done])
    starts: dict[str, FloatArray] = {}
    try:
        moved = force_response(strains, pulled, operations).matrix
        starts = predicted_starts(plan, new, moved.reshape(-1, 3, 6))
    except NoTensorError:
        pass
    for job in new:
        same = next((i for i, other in enumerate(done) if np.abs(job.gradient - other.gradient).max() < 1e-10), None)
        if same is not None:
            turned = rotation6(operations.cartesian) @ strains[same]
            keeps = np.abs(turned - strains[same]).max(axis=1) < 1e-6 * np.abs(strains[same]).max()
            shift = operations.project(pulled[same], keeps) @ np.linalg.inv(plan.crystal.lattice)
            starts[job.label] = plan.crystal.positions + shift
    return starts
