"""Adding to a strain set: other magnitudes, the jobs that help most, and the job that restores what a failure took."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace

import numpy as np

from strainkit.crystal.crystal import Crystal
from strainkit.crystal.frames import physical_axes
from strainkit.crystal.symmetry import Symmetry
from strainkit.design.aims import sharpest
from strainkit.design.expect import expect, model_of
from strainkit.design.jobs import StrainJob, strained_jobs, units_of
from strainkit.design.model import build_model
from strainkit.errors import UsageError
from strainkit.tensors.constants import ConstantBasis
from strainkit.tensors.invariants import invariant_matrices
from strainkit.tensors.leastsquares import factorise
from strainkit.tensors.rotations import rotate_matrix, rotation6
from strainkit.tensors.sixvectors import from_mandel, to_mandel

__all__ = ["at_magnitudes", "finer_jobs", "lost_constants", "more_jobs", "restoring_jobs"]

#: shapes that are repeated at finer settings
_FINER_SHAPES = 2


def at_magnitudes(jobs: Sequence[StrainJob], magnitudes: Sequence[float], symmetry: Symmetry) -> list[StrainJob]:
    """New jobs: every shape of a set at further magnitudes (fractions), those that are there already left out."""
    there = {job.label for job in jobs}
    new = [
        job
        for number, unit in sorted(units_of(jobs).items())
        for job in strained_jobs(unit[None], magnitudes, symmetry.rotations, number)
        if job.label not in there
    ]
    if not new:
        raise UsageError("the set holds these magnitudes already", "--magnitude")
    return new


def more_jobs(jobs: Sequence[StrainJob], count: int, crystal: Crystal, symmetry: Symmetry) -> list[StrainJob]:
    """New jobs: at most `count` of new shapes, at the set's largest magnitude, that reduce the remaining error most."""
    axes = physical_axes(crystal, symmetry)
    group = axes @ symmetry.rotations @ axes.T
    size = max(abs(job.magnitude) for job in jobs)
    model = build_model(
        np.array([job.strain for job in jobs]), symmetry.rotations, rotate_matrix(axes.T, invariant_matrices(group))
    )
    odd = model.odd_part(model.matrix[:, model.constants])
    units = units_of(jobs)
    known = to_mandel(np.array(list(units.values()))) @ rotation6(axes).T
    rows = len(odd) - model.even_basis.shape[1]
    new = sharpest(group, count, odd.T @ odd / size**2, rows, known)
    return strained_jobs(axes.T @ from_mandel(new) @ axes, [size], symmetry.rotations, max(units) + 1)


def finer_jobs(jobs: Sequence[StrainJob]) -> list[StrainJob]:
    """One or two pairs of a set once more, for finer settings: the first shapes at the largest magnitude.

    A pair (or single job with an image) cancels errors that do not change with strain, so no reference is needed.
    """
    size = max(abs(job.magnitude) for job in jobs)
    numbers = sorted({job.shape for job in jobs if job.shape})[:_FINER_SHAPES]
    return [
        replace(job, label=f"{job.label}-finer", kind="finer")
        for job in jobs
        if job.shape in numbers and abs(abs(job.magnitude) - size) < 1e-9
    ]


def lost_constants(jobs: Sequence[StrainJob], symmetry: Symmetry, basis: ConstantBasis) -> list[str]:
    """Names of the constants that a list of jobs does not determine."""
    model = model_of(jobs, symmetry.rotations, basis)
    known = factorise(model.matrix).determined[model.constants]
    return [name for name, fixed in zip(basis.names, known, strict=True) if not fixed]


def restoring_jobs(
    present: Sequence[StrainJob], missing: Sequence[StrainJob], symmetry: Symmetry, basis: ConstantBasis
) -> list[StrainJob]:
    """The fewest of the missing jobs that determine every constant again, the best one where one is enough.

    Empty when nothing is lost or nothing helps.
    """
    if not lost_constants(present, symmetry, basis):
        return []
    chosen: list[StrainJob] = []
    left = [job for job in missing if job.shape]
    while left:

        def merit(job: StrainJob) -> tuple[int, float]:
            trial = [*present, *chosen, job]
            return len(lost_constants(trial, symmetry, basis)), expect(trial, symmetry.rotations, basis)[0].largest

        best = min(left, key=merit)
        chosen.append(best)
        left.remove(best)
        if not lost_constants([*present, *chosen], symmetry, basis):
            return chosen
    return []
