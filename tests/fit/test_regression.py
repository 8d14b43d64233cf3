"""The regression against generalised least squares written out in a few lines, and its bookkeeping."""

from __future__ import annotations

import numpy as np
import pytest
from support.crystals import conventional
from support.groups import LAUE_CLASSES, rotations
from support.published import BY_LAUE_CLASS, mandel

from strainkit.crystal.symmetry import find_symmetry
from strainkit.design.aims import fewest
from strainkit.design.jobs import reference_job, strained_jobs
from strainkit.design.model import build_model
from strainkit.fit.regression import Estimator, regress
from strainkit.tensors.constants import constant_basis
from strainkit.tensors.invariants import invariant_matrices
from strainkit.tensors.rotations import rotation6
from strainkit.tensors.sixvectors import from_mandel, stress_to_voigt, to_mandel
from strainkit.tensors.strain import cauchy_from_pk2

#: spare degrees of freedom of generic sets at one magnitude: rows of the pairs' odd parts less constants
GENERIC_SPARE = {"-1": 15, "2/m": 11, "mmm": 9, "-3": 5, "m-3m": 3}


def simulated(laue, magnitudes, rng, noise=0.0):
    group = rotations(laue)
    basis = constant_basis(invariant_matrices(group), np.eye(3))
    jobs = [reference_job(), *strained_jobs(from_mandel(fewest(group)), magnitudes, group)]
    truth = mandel(BY_LAUE_CLASS[laue])
    stresses = []
    for job in jobs:
        second = from_mandel(truth @ to_mandel(job.strain) + noise * rng.normal(size=6))
        stresses.append(stress_to_voigt(cauchy_from_pk2(second, job.gradient)))
    return group, basis, jobs, truth, np.array([job.gradient for job in jobs]), np.array(stresses)


@pytest.mark.parametrize("laue", LAUE_CLASSES)
def test_pairs_at_one_magnitude_equal_ordinary_least_squares_on_half_differences(laue):
    """Independent route: central differences of the (symmetrised) stresses, then lstsq on C:e alone."""
    rng = np.random.default_rng(0)
    group, basis, jobs, _, gradients, stresses = simulated(laue, (0.01,), rng, noise=0.02)
    found = regress(gradients, stresses, group, basis.matrices)
    from strainkit.tensors.sixvectors import stress_from_voigt
    from strainkit.tensors.strain import pk2_from_cauchy

    second = to_mandel(pk2_from_cauchy(stress_from_voigt(stresses), gradients))
    rows, data, weights = [], [], []
    for plus, minus in zip(range(1, len(jobs), 2), range(2, len(jobs), 2), strict=True):
        e = to_mandel(jobs[plus].strain)
        kept = [q for q in rotation6(group) if np.allclose(q @ e, e, atol=1e-9)]
        projector = np.mean(kept, axis=0)
        values, vectors = np.linalg.eigh(projector)
        allowed = vectors[:, values > 0.5].T
        rows.append(allowed @ (basis.matrices @ e).T)
        data.append(allowed @ (second[plus] - second[minus]) / 2)
        weights.append(len(allowed))
    x, y = np.vstack(rows), np.concatenate(data)
    values, squares, rank, _ = np.linalg.lstsq(x, y, rcond=None)
    assert rank == len(basis.names)
    np.testing.assert_allclose(found.values, values, rtol=1e-9, atol=1e-9)
    dof = len(y) - rank
    assert found.degrees_of_freedom == dof
    if laue in GENERIC_SPARE and sum(weights) == 6 * len(weights):
        assert dof == GENERIC_SPARE[laue]
    # a half difference has half the variance of one job's stress
    assert found.noise == pytest.approx((2 * squares[0] / dof) ** 0.5, rel=1e-9)
    covariance = found.noise**2 / 2 * np.linalg.inv(x.T @ x)
    np.testing.assert_allclose(found.covariance, covariance, rtol=1e-7, atol=1e-12)


@pytest.mark.parametrize("laue", ["-1", "mmm", "-3m", "m-3m"])
def test_a_missing_job_names_what_is_lost_and_keeps_the_rest(laue):
    rng = np.random.default_rng(1)
    group, basis, jobs, truth, gradients, stresses = simulated(laue, (0.01,), rng)
    keep = [i for i, job in enumerate(jobs) if job.label != "s1-minus-1"]
    found = regress(gradients[keep], stresses[keep], group, basis.matrices)
    lost = [n for n, known in zip(basis.names, found.determined, strict=True) if not known]
    # with the fewest jobs every pair is needed
    assert lost
    for value, known, expected in zip(found.values, found.determined, basis.values(truth), strict=True):
        if known:
            assert value == pytest.approx(expected, rel=1e-8, abs=1e-6)
        else:
            assert np.isnan(value)


def test_lone_job_at_one_of_two_magnitudes_still_serves():
    rng = np.random.default_rng(2)
    group, basis, jobs, truth, gradients, stresses = simulated("mmm", (0.005, 0.01), rng)
    keep = [i for i, job in enumerate(jobs) if job.label != "s1-minus-1"]
    found = regress(gradients[keep], stresses[keep], group, basis.matrices)
    assert found.determined.all()
    np.testing.assert_allclose(found.values, basis.values(truth), rtol=1e-7, atol=1e-7)


def test_image_of_a_shape_replaces_its_opposite():
    """The shear xx - yy in 4/mmm: a quarter turn maps it to its negative, so one job does what a pair does."""
    group = rotations("4/mmm")
    unit = np.diag([1.0, -1.0, 0.0])
    jobs = [reference_job(), *strained_jobs(unit[None], (0.01,), group)]
    assert [job.label for job in jobs] == ["reference", "s1-plus-1"]
    basis = constant_basis(invariant_matrices(group), np.eye(3))
    truth = mandel(BY_LAUE_CLASS["4/mmm"])
    quadratic = np.array([5.0, 5.0, -3.0, 0, 0, 0])  # even under the quarter turn
    stresses = []
    for job in jobs:
        e = to_mandel(job.strain)
        second = from_mandel(truth @ e + quadratic * (e @ e) * 100)
        stresses.append(stress_to_voigt(cauchy_from_pk2(second, job.gradient)))
    found = regress(np.array([j.gradient for j in jobs]), np.array(stresses), group, basis.matrices)
    # this one job fixes C11 - C12 although neither alone
    combination = np.zeros(len(basis.names))
    combination[[0, 1]] = 1, -1
    whole = found.estimator.model.matrix
    solution = np.linalg.lstsq(whole, found.estimator.model.rows(to_second(jobs, stresses)), rcond=None)[0][
        found.estimator.model.constants
    ]
    assert solution @ combination == pytest.approx(basis.values(truth) @ combination, rel=1e-9)


def to_second(jobs, stresses):
    from strainkit.tensors.sixvectors import stress_from_voigt
    from strainkit.tensors.strain import pk2_from_cauchy

    gradients = np.array([job.gradient for job in jobs])
    return to_mandel(pk2_from_cauchy(stress_from_voigt(np.array(stresses)), gradients))


@pytest.mark.parametrize("laue", LAUE_CLASSES)
def test_reported_errors_are_the_scatter_of_repeated_sets(laue):
    """4000 simulated sets: scatter of each constant against its mean reported variance, within 8 % of an error bar."""
    rng = np.random.default_rng(3)
    group, basis, jobs, truth, _, _ = simulated(laue, (0.01,), rng)
    model = build_model(np.array([job.strain for job in jobs]), group, basis.matrices)
    exact = np.array([truth @ to_mandel(job.strain) for job in jobs])
    estimator = Estimator.of(model)
    rows = model.rows(exact[:, :, None] + 0.02 * rng.normal(size=(*exact.shape, 4000)))
    values = estimator.estimate(rows)[model.constants]
    variance, _ = estimator.noise_variance(rows)
    reported = np.sqrt(variance.mean() * np.diag(estimator.unit_covariance))
    np.testing.assert_allclose(reported, values.std(axis=1), rtol=0.08, atol=0)
    assert variance.mean() == pytest.approx(0.02**2, rel=0.08)


def test_cubic_order_removes_a_cubic_response():
    rng = np.random.default_rng(4)
    group, basis, jobs, truth, gradients, _ = simulated("mmm", (0.01, 0.02), rng)
    stresses = []
    for job in jobs:
        e = to_mandel(job.strain)
        second = from_mandel(truth @ e + 3e5 * (e @ e) * e)
        stresses.append(stress_to_voigt(cauchy_from_pk2(second, job.gradient)))
    linear = regress(gradients, np.array(stresses), group, basis.matrices)
    cubic = regress(gradients, np.array(stresses), group, basis.matrices, order="cubic")
    expected = basis.values(truth)
    assert np.abs(linear.values - expected).max() > 1
    np.testing.assert_allclose(cubic.values, expected, rtol=1e-7, atol=1e-6)


def test_repeats_and_weights_count():
    """Doubling every job halves the variance; so does weight two."""
    rng = np.random.default_rng(5)
    group, basis, _, _, gradients, stresses = simulated("4/m", (0.01,), rng, noise=0.01)
    once = regress(gradients, stresses, group, basis.matrices, noise=0.01)
    twice = regress(np.tile(gradients, (2, 1, 1)), np.tile(stresses, (2, 1)), group, basis.matrices, noise=0.01)
    heavy = regress(gradients, stresses, group, basis.matrices, noise=0.01, weights=np.full(len(gradients), 2.0))
    np.testing.assert_allclose(twice.covariance, once.covariance / 2, rtol=1e-9, atol=1e-12)
    np.testing.assert_allclose(heavy.covariance, once.covariance / 2, rtol=1e-9, atol=1e-12)
    np.testing.assert_allclose(twice.values, once.values, rtol=1e-9)


def test_no_noise_estimate_without_spare_degrees_of_freedom():
    """One shape with a cubic crystal's own symmetry kept: rows equal constants it can reach, nothing left over."""
    group = rotations("m-3m")
    basis = constant_basis(invariant_matrices(group), np.eye(3))
    jobs = [reference_job(), *strained_jobs(np.array([np.diag([1.0, 1.0, 1.0])]), (0.01,), group)]
    stresses = np.array([[0, 0, 0, 0, 0, 0], [3, 3, 3, 0, 0, 0], [-3.0, -3, -3, 0, 0, 0]])
    found = regress(np.array([j.gradient for j in jobs]), stresses, group, basis.matrices)
    assert found.noise is None
    assert found.covariance is None


def test_synthetic_crystals_have_the_class_they_claim():
    for laue in LAUE_CLASSES:
        assert find_symmetry(conventional(laue)).laue_class == laue
