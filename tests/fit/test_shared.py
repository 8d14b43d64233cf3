"""Fits that share a factorisation against fits with one of their own: all Laue classes, random orientations and settings."""

from __future__ import annotations

import numpy as np
import pytest
from support.crystals import SPACE_GROUPS, conventional, random_rotation, random_unimodular, rewritten
from support.published import BY_LAUE_CLASS, mandel

from strainkit.collect.table import StressRecord, StressTable
from strainkit.fit import estimator as store
from strainkit.fit.regression import regress
from strainkit.fit.result import fit_run
from strainkit.prepare.runfolder import plan_run
from strainkit.tensors.constants import constant_basis
from strainkit.tensors.rotations import rotate_matrix
from strainkit.tensors.sixvectors import from_mandel, stress_to_voigt, to_mandel
from strainkit.tensors.strain import cauchy_from_pk2

#: what two ways to the same numbers may differ by
SAME = {"rtol": 1e-10, "atol": 1e-10}


def own_matrices(plan):
    """Constants of this crystal, worked out for it alone."""
    return constant_basis(plan.symmetry.invariants, plan.frames["ieee"].rotation).matrices


def returned(plan, rng, drop=()):
    """Stress table of a crystal with the published tensor of its class, curvature, a reference stress and noise."""
    stiffness = rotate_matrix(plan.frames["ieee"].rotation.T, mandel(BY_LAUE_CLASS[plan.symmetry.laue_class]))
    records = []
    for job in plan.jobs:
        strain = to_mandel(job.strain)
        second = from_mandel(stiffness @ strain * (1 - 4 * np.linalg.norm(strain) ** 2) + rng.normal(scale=0.01, size=6))
        stress = stress_to_voigt(cauchy_from_pk2(second - 0.3 * np.eye(3), job.gradient))
        energy = plan.crystal.volume * float(strain @ stiffness @ strain) / 2 / 160.2176634
        records.append(StressRecord(job.label, "missing" if job.label in drop else "done", stress, energy))
    return StressTable(tuple(records))


@pytest.mark.parametrize("laue", SPACE_GROUPS)
def test_shared_and_own_factorisation_give_the_same_numbers(laue):
    rng = np.random.default_rng(list(SPACE_GROUPS).index(laue))
    given = [conventional(laue)] * 2
    crystals = [rewritten(c, random_rotation(rng), np.eye(3, dtype=int)) for c in given]
    crystals.append(rewritten(given[0], random_rotation(rng), random_unimodular(rng)))
    store._KEPT.clear()
    for number, crystal in enumerate(crystals):
        plan = plan_run(crystal, [0.005, 0.01])
        table = returned(plan, rng)
        for order in ("linear", "cubic"):
            fit = fit_run(plan, table, order)
            gradients = np.array([job.gradient for job in plan.jobs])
            stresses = np.array([record.stress for record in table.records])
            own = regress(gradients, stresses, plan.symmetry.rotations, own_matrices(plan), order)
            shared = fit.regression
            for name in ("values", "covariance", "noise", "reference_stress", "residuals", "even_noise", "odd_squares"):
                np.testing.assert_allclose(getattr(shared, name), getattr(own, name), err_msg=name, **SAME)
            assert shared.degrees_of_freedom == own.degrees_of_freedom
            assert shared.forbidden_noise == pytest.approx(own.forbidden_noise, abs=1e-10)
        if number < 2:
            assert len(store._KEPT) == 2  # linear and cubic, whatever the orientation
    # another cell of a lattice with more rotations than the crystal may come in another of few equivalent axes
    assert len(store._KEPT) <= 4


@pytest.mark.parametrize("laue", ["2/m", "-3", "4/mmm"])
def test_findings_do_not_depend_on_who_came_first(laue):
    """The whole fit of one crystal: after others of its class, and alone."""
    rng = np.random.default_rng(4)
    crystals = [rewritten(conventional(laue), random_rotation(rng), random_unimodular(rng)) for _ in range(2)]
    plans = [plan_run(crystal, [0.005, 0.01]) for crystal in crystals]
    tables = [returned(plan, np.random.default_rng(7)) for plan in plans]
    store._KEPT.clear()
    fit_run(plans[0], tables[0])
    after = fit_run(plans[1], tables[1]).to_dict()
    store._KEPT.clear()
    alone = fit_run(plans[1], tables[1]).to_dict()
    compare(after, alone)


def test_missing_jobs_leave_the_same_constants_undetermined():
    rng = np.random.default_rng(3)
    plan = plan_run(rewritten(conventional("mmm"), random_rotation(rng), np.eye(3, dtype=int)), [0.01])
    gone = {job.label for job in plan.jobs[-2:]}
    table = returned(plan, rng, gone)
    fit = fit_run(plan, table)
    used = [i for i, job in enumerate(plan.jobs) if job.label not in gone]
    own = regress(
        np.array([plan.jobs[i].gradient for i in used]),
        np.array([table.records[i].stress for i in used]),
        plan.symmetry.rotations,
        own_matrices(plan),
    )
    assert fit.undetermined
    np.testing.assert_array_equal(fit.regression.determined, own.determined)
    np.testing.assert_allclose(fit.regression.values, own.values, **SAME)


def compare(one, other):
    assert type(one) is type(other)
    if isinstance(one, dict):
        assert one.keys() == other.keys()
        for key in one:
            compare(one[key], other[key])
    elif isinstance(one, list | tuple):
        assert len(one) == len(other)
        for a, b in zip(one, other, strict=True):
            compare(a, b)
    elif isinstance(one, float | np.ndarray):
        np.testing.assert_allclose(one, other, rtol=1e-8, atol=1e-10)
    else:
        assert one == other
