"""Adding to a set, and restoring what a failed job took."""

from __future__ import annotations

import numpy as np
import pytest
from support.crystals import conventional, random_rotation, rewritten
from support.groups import LAUE_CLASSES

from strainkit.crystal.frames import crystal_frame
from strainkit.crystal.symmetry import find_symmetry
from strainkit.design.expect import expect
from strainkit.design.extend import at_magnitudes, lost_constants, more_jobs, restoring_jobs
from strainkit.design.shapes import one_of_each
from strainkit.design.strainset import Wish, choose_strains
from strainkit.errors import UsageError
from strainkit.tensors.constants import constant_basis
from strainkit.tensors.sixvectors import to_mandel


def chosen(laue, wish=None):
    rng = np.random.default_rng(0)
    crystal = rewritten(conventional(laue), random_rotation(rng), np.eye(3))
    symmetry = find_symmetry(crystal)
    basis = constant_basis(symmetry.invariants, crystal_frame("ieee", symmetry).rotation)
    return crystal, symmetry, basis, choose_strains(crystal, symmetry, basis, wish or Wish())[0]


@pytest.mark.parametrize("laue", LAUE_CLASSES)
def test_another_magnitude_repeats_the_shapes(laue):
    _, symmetry, _, jobs = chosen(laue)
    new = at_magnitudes(jobs, [0.005], symmetry)
    assert len(new) == len(jobs) - 1
    for old, added in zip(jobs[1:], new, strict=True):
        np.testing.assert_allclose(added.strain, old.strain / 2, rtol=0, atol=1e-12)
        assert added.label == old.label.removesuffix("-1") + "-0.5"
    with pytest.raises(UsageError, match="holds these magnitudes already"):
        at_magnitudes(jobs, [0.01], symmetry)


@pytest.mark.parametrize("laue", LAUE_CLASSES)
def test_more_jobs_help_more_than_random_ones_and_repeat_nothing(laue):
    crystal, symmetry, basis, jobs = chosen(laue)
    new = more_jobs(jobs, 4, crystal, symmetry)
    assert 1 <= len(new) <= 4
    assert not {job.label for job in new} & {job.label for job in jobs}
    units = np.array([to_mandel(j.strain / j.magnitude) for j in [*jobs[1:], *new] if j.magnitude > 0])
    assert len(one_of_each(units, symmetry.rotations)) == len(units)

    def criterion(extra):
        spread = basis.matrices.reshape(len(basis.names), 36)
        from strainkit.design.expect import model_of
        from strainkit.tensors.leastsquares import factorise

        model = model_of([*jobs, *extra], symmetry.rotations, basis)
        return np.trace(spread.T @ factorise(model.matrix).inverse[model.constants, model.constants] @ spread)

    mine = criterion(new)
    rng = np.random.default_rng(1)
    from strainkit.design.jobs import strained_jobs
    from strainkit.design.shapes import largest_principal_of
    from strainkit.tensors.sixvectors import from_mandel

    for _ in range(15):
        vectors = rng.normal(size=(2, 6))
        vectors /= largest_principal_of(vectors)[:, None]
        assert mine <= criterion(strained_jobs(from_mandel(vectors), [0.01], symmetry.rotations, 90)) * 1.001


@pytest.mark.parametrize("laue", LAUE_CLASSES)
def test_the_failed_job_itself_restores_what_it_took(laue):
    _, symmetry, basis, jobs = chosen(laue)
    assert lost_constants(jobs, symmetry, basis) == []
    assert restoring_jobs(jobs, [], symmetry, basis) == []
    failed = jobs[-1]
    present = jobs[:-1]
    assert lost_constants(present, symmetry, basis)
    assert [job.label for job in restoring_jobs(present, [failed], symmetry, basis)] == [failed.label]
    assert restoring_jobs(present, [], symmetry, basis) == []


def test_of_two_failed_jobs_the_one_that_matters_is_named():
    """Two magnitudes, one shape gone altogether: two jobs must come back, and those at the larger strain are the better."""
    _, symmetry, basis, jobs = chosen("mmm", Wish(magnitudes=(0.005, 0.01)))
    present = [job for job in jobs if job.shape != 1]
    missing = [job for job in jobs if job.shape == 1]
    assert lost_constants(present, symmetry, basis)
    named = restoring_jobs(present, missing, symmetry, basis)
    assert len(named) == 2
    assert lost_constants([*present, *named], symmetry, basis) == []
    # of the possible two, the ones at the larger strain leave the smaller errors
    others = expect([*present, *[j for j in missing if abs(j.magnitude) < 0.006]], symmetry.rotations, basis)[0].largest
    assert expect([*present, *named], symmetry.rotations, basis)[0].largest <= others + 1e-12
