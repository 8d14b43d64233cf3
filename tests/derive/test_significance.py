"""Can estimates be told apart: against closed forms, published tables and simulated fits."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.stats import multivariate_normal, norm, t
from support.crystals import conventional
from support.published import BY_LAUE_CLASS, mandel

from strainkit.derive.significance import LEVEL, holm, letters, probability_larger, probability_of_order, two_sided
from strainkit.design.model import build_model
from strainkit.fit.regression import Estimator
from strainkit.prepare.runfolder import plan_run
from strainkit.tensors.averages import averages_of
from strainkit.tensors.stiffness import Stiffness
from strainkit.tensors.strain import green_lagrange


def test_gaussian_and_student_limits():
    gaps = np.array([0.0, 1.0, 3.0, 6.0, 15.0])
    known = two_sided(gaps, (1.0, 2.5), (None, None))
    np.testing.assert_allclose(known, 2 * norm.sf(gaps / np.hypot(1.0, 2.5)), rtol=1e-8)
    np.testing.assert_allclose(two_sided(gaps, (0.0, 2.5), (4, 7)), 2 * t.sf(gaps / 2.5, 7), rtol=1e-8)
    assert two_sided(1e-9, (0.0, 0.0), (3, 3)) == 0.0
    assert two_sided(0.0, (0.0, 0.0), (3, 3)) == 1.0


def test_one_degree_of_freedom_has_a_closed_form():
    """The sum of two Cauchy variables is a Cauchy variable whose width is the sum of theirs."""
    gaps = np.array([0.0, 1.0, 3.0, 30.0, 300.0])
    exact = 1.0 - 2.0 / np.pi * np.arctan(gaps / 3.5)
    np.testing.assert_allclose(
        two_sided(gaps, (1.0, 2.5), (1, 1)), exact, rtol=5e-3
    )  # quadrature of the heaviest tails there are


@pytest.mark.parametrize(("freedom", "angle", "bound"), [((6, 6), 45.0, 2.435), ((6, 6), 15.0, 2.440), ((12, 12), 45.0, 2.167)])
def test_against_the_tables_of_behrens_and_fisher(freedom, angle, bound):
    """Five per cent points of (x1 - x2)/sqrt(s1^2 + s2^2), tan(angle) = s1/s2: R. A. Fisher & F. Yates, Statistical Tables
    for Biological, Agricultural and Medical Research, table of P. V. Sukhatme (from memory; three decimals)."""
    errors = (np.sin(np.radians(angle)), np.cos(np.radians(angle)))
    assert two_sided(bound, errors, freedom) == pytest.approx(0.05, rel=0, abs=2e-4)


def test_holm_by_hand():
    """0.005 x 4, 0.01 x 3, 0.03 x 2 and 0.04 x 1, the last raised to what came before it."""
    np.testing.assert_allclose(holm(np.array([0.01, 0.04, 0.03, 0.005])), [0.03, 0.06, 0.06, 0.02], rtol=1e-12)
    np.testing.assert_allclose(holm(np.array([[0.5, 0.9], [0.2, 0.03]])), [[1.0, 1.0], [0.2, 0.06]], rtol=1e-12)


def test_letters_say_exactly_which_pairs_differ():
    rng = np.random.default_rng(3)
    for _ in range(200):
        count = int(rng.integers(2, 8))
        every = [(i, j) for i in range(count) for j in range(i)]
        different = [pair for pair in every if rng.random() < 0.5]
        given = letters(list(rng.permutation(count)), different)
        for i, j in every:
            assert ((i, j) in different) == (not set(given[i]) & set(given[j]))
    assert letters([2, 0, 1], [(0, 2), (1, 2)]) == {2: "a", 0: "b", 1: "b"}


def test_probability_of_a_ranking():
    two = probability_of_order([12.0, 11.0], [0.6, 0.8], [None, None])
    assert two == pytest.approx(norm.cdf(1.0), rel=1e-9)  # closed form for two Gaussians
    assert probability_larger(-1.0, (0.6, 0.8), (None, None)) == pytest.approx(norm.cdf(-1.0), rel=1e-9)
    # three Gaussians: x1 - x2 and x2 - x3 are jointly normal
    values, errors = [12.0, 11.5, 10.8], [0.5, 0.9, 0.4]
    spread = np.array([[0.25 + 0.81, -0.81], [-0.81, 0.81 + 0.16]])
    exact = multivariate_normal([0.0, 0.0], spread).cdf([0.5, 0.7])
    assert probability_of_order(values, errors, [None] * 3) == pytest.approx(exact, rel=0, abs=4e-3)  # 200 000 draws
    assert probability_of_order(values, errors, [3] * 3) < exact  # fewer degrees of freedom, less certain


@pytest.mark.parametrize(("laue", "noises", "known"), [("m-3", (0.001, 0.001), False), ("m-3", (0.001, 0.0003), True)])
def test_false_alarms_stay_within_the_level(laue, noises, known):
    """Two fits of one true crystal, thousands of times: seldom does anything seem to differ."""
    truth, rng, draws = Stiffness(mandel(BY_LAUE_CLASS[laue])), np.random.default_rng(5), 2000
    plan = plan_run(conventional(laue), [0.01])
    strains = green_lagrange(np.array([job.gradient for job in plan.jobs]))
    estimator = Estimator.of(build_model(strains, plan.symmetry.rotations, plan.basis.matrices))
    unit, true = estimator.unit_covariance, plan.basis.values(truth.mandel)
    # first-order errors of constants and Hill averages for unit noise
    flat = plan.basis.matrices.reshape(len(true), 36)
    one = Stiffness(truth.mandel, flat.T @ unit @ flat)
    per_noise = np.concatenate([np.sqrt(np.diag(unit)), one.standard_error_of(averages_of)[:, 2]])
    freedom = [estimator.odd_freedom, None if known else estimator.odd_freedom]
    values, errors = [], []
    for noise, nu in zip(noises, freedom, strict=True):
        constants = true + noise * rng.multivariate_normal(np.zeros(len(true)), unit, draws)
        hill = averages_of(plan.basis.stiffness(constants))[..., 2]
        seen = np.full(draws, noise) if nu is None else noise * np.sqrt(rng.chisquare(nu, draws) / nu)
        values.append(np.hstack([constants, hill]))
        errors.append(seen[:, None] * per_noise)
    p = two_sided(values[0] - values[1], tuple(errors), tuple(freedom))
    alarms = (holm(p) < LEVEL).any(axis=1).mean()
    assert alarms < LEVEL + 3.0 * (LEVEL * (1 - LEVEL) / draws) ** 0.5
    alone = (p < LEVEL).mean(axis=0)
    assert (alone < LEVEL + 3.0 * (LEVEL * (1 - LEVEL) / draws) ** 0.5).all()
    assert alone.max() > 0.2 * LEVEL  # and it is not simply blind
