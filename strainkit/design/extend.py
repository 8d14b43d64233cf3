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
from strainkit.design.jobs import REFERENCE, JobKind, StrainJob, percent, strained_jobs, units_of
from strainkit.design.model import Order, build_model
from strainkit.design.shapes import largest_principal_of
from strainkit.errors import UsageError
from strainkit.tensors.arrays import FloatArray
from strainkit.tensors.constants import ConstantBasis
from strainkit.tensors.invariants import invariant_matrices
from strainkit.tensors.leastsquares import factorise
from strainkit.tensors.rotations import rotate_matrix, rotation6
from strainkit.tensors.sixvectors import from_mandel, to_mandel
from strainkit.tensors.strain import green_lagrange

__all__ = ["adopted_jobs", "at_magnitudes", "finer_jobs", "lost_constants", "more_jobs", "restoring_jobs"]

#: shapes that are repeated at finer settings
_FINER_SHAPES = 2


def adopted_jobs(gradients: FloatArray, symmetry: Symmetry) -> list[StrainJob]:
    """Jobs of calculations that exist already, in their order, with symmetric deformation gradients (jobs, 3, 3).

    Strains that are opposite or the same to second order share a shape; labels are a1-plus-1.005 and the like.
    """
    vectors = to_mandel(green_lagrange(gradients))
    model = build_model(from_mandel(vectors), symmetry.rotations, symmetry.invariants)
    jobs: list[StrainJob] = []
    for gradient, index, t, size in zip(
        gradients, model.shape_of_job, model.signed_magnitudes, largest_principal_of(vectors), strict=True
    ):
        label = REFERENCE if index < 0 else f"a{index + 1}-{'plus' if t > 0 else 'minus'}-{percent(round(float(size), 6))}"
        again = sum(job.label.split("_")[0] == label for job in jobs)
        label += f"_{again + 1}" * (again > 0)
        kind: JobKind = "reference" if index < 0 else "strained"
        jobs.append(StrainJob(label, int(index) + 1, float(np.copysign(size, t)) if index >= 0 else 0.0, gradient, kind))
    return jobs


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


def lost_constants(
    jobs: Sequence[StrainJob], symmetry: Symmetry, basis: ConstantBasis, by_pairs: bool = False, order: Order = "linear"
) -> list[str]:
    """Names of the constants that jobs do not determine; `by_pairs`: not to second order, by central differences."""
    model = model_of(jobs, symmetry.rotations, basis, order)
    if by_pairs:
        known = factorise(model.odd_matrix).determined[: len(basis.names)]
    else:
        known = factorise(model.matrix).determined[model.constants]
    return [name for name, fixed in zip(basis.names, known, strict=True) if not fixed]


def restoring_jobs(
    present: Sequence[StrainJob],
    missing: Sequence[StrainJob],
    symmetry: Symmetry,
    basis: ConstantBasis,
    by_pairs: bool = False,
    order: Order = "linear",
) -> list[StrainJob]:
    """The fewest of the missing jobs that determine every constant again, the best one where one is enough.

    Empty when nothing is lost or nothing helps. `by_pairs` and `order` are those of `lost_constants`; with pairs, jobs come
    with their opposites.
    """
    if not lost_constants(present, symmetry, basis, by_pairs, order):
        return []
    chosen: list[StrainJob] = []
    left = [job for job in missing if job.shape]

    def steps() -> list[list[StrainJob]]:
        if not by_pairs:
            return [[job] for job in left]
        return [[j for j in left if j.shape == job.shape and abs(j.magnitude) == abs(job.magnitude)] for job in left]

    def merit(step: list[StrainJob]) -> tuple[int, float]:
        trial = [*present, *chosen, *step]
        return len(lost_constants(trial, symmetry, basis, by_pairs, order)), expect(trial, symmetry.rotations, basis)[0].largest

    while left:
        best = min(steps(), key=merit)
        chosen += best
        left = [job for job in left if all(job is not other for other in best)]
        if not lost_constants([*present, *chosen], symmetry, basis, by_pairs, order):
            return chosen
    return []
