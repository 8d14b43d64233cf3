"""Curvature, outliers, energies and reference stress on crystals whose nonlinear response is known exactly."""

from __future__ import annotations

import numpy as np
import pytest
from support.crystals import conventional
from support.published import mandel
from support.returned import linear_law, write_return

from strainkit.collect.gather import collect_run
from strainkit.collect.table import StressRecord, StressTable
from strainkit.fit.magnitude import converge
from strainkit.fit.result import fit_run, usable_jobs
from strainkit.prepare.runfolder import plan_run, write_run
from strainkit.run.plan import job_folder
from strainkit.tensors.rotations import rotation6
from strainkit.tensors.sixvectors import from_mandel, stress_to_voigt, to_mandel
from strainkit.tensors.strain import cauchy_from_pk2
from strainkit.units import EV_PER_A3_IN_GPA

#: silicon at 298 K, GPa: H. J. McSkimin & P. Andreatch, J. Appl. Phys. 35, 3312 (1964), from memory
THIRD = {"111": -825.0, "112": -451.0, "123": -64.0, "144": 12.0, "155": -310.0, "456": -64.0}
SILICON = mandel("Si_CRC")
#: fourth-order response: invented, of the size that others found for silicon, isotropic in form
FOURTH = 3.0e3


def third_order() -> np.ndarray:
    """Cubic (m-3m) third-order constants as a Mandel tensor (6, 6, 6), filled by the cubic point group itself."""
    tensor = np.zeros((6, 6, 6))
    weight = np.array([1, 1, 1, 2**0.5, 2**0.5, 2**0.5])
    same = {
        "111": [(0, 0, 0), (1, 1, 1), (2, 2, 2)],
        "112": [(i, i, j) for i in range(3) for j in range(3) if i != j],
        "123": [(0, 1, 2)],
        "144": [(i, i + 3, i + 3) for i in range(3)],
        "155": [(i, j + 3, j + 3) for i in range(3) for j in range(3) if i != j],
        "456": [(3, 4, 5)],
    }
    for name, places in same.items():
        for place in places:
            for order in {
                tuple(np.array(place)[list(p)]) for p in [(0, 1, 2), (0, 2, 1), (1, 0, 2), (1, 2, 0), (2, 0, 1), (2, 1, 0)]
            }:
                tensor[order] = THIRD[name] * np.prod(weight[list(order)])
    return tensor


THIRD_TENSOR = third_order()


def energy_density(strain):
    """E/V0 in GPa of a Green-Lagrange strain (3, 3)."""
    e = to_mandel(strain)
    return 0.5 * e @ SILICON @ e + np.einsum("ijk,i,j,k", THIRD_TENSOR, e, e, e) / 6 + FOURTH * (e @ e) ** 2 / 4


def second_stress(strain):
    """Its derivative: second Piola-Kirchhoff stress (3, 3), GPa."""
    e = to_mandel(strain)
    return from_mandel(SILICON @ e + 0.5 * np.einsum("ijk,j,k", THIRD_TENSOR, e, e) + FOURTH * (e @ e) * e)


def made(folder, magnitudes, rng=None, noise=0.0, law=second_stress, energy=energy_density, alter=None):
    """A collected run of cubic silicon with exact nonlinear stresses, energies, and noise if asked for."""
    crystal = conventional("m-3m")
    plan, _ = write_run(plan_run(crystal, magnitudes), folder)
    axes = plan.frames["ieee"].rotation
    assert np.allclose(axes, np.eye(3))
    for job in plan.jobs:
        second = law(job.strain) + (from_mandel(noise * rng.normal(size=6)) if rng is not None else 0.0)
        sigma = cauchy_from_pk2(second, job.gradient)
        if alter is not None:
            sigma = alter(job, sigma)
        total = energy(job.strain) * crystal.volume / EV_PER_A3_IN_GPA - 100.0
        write_return(folder / job_folder(job.label), crystal.deformed(job.gradient), sigma, energy=total)
    return plan, collect_run(folder, plan)


def codes(fit):
    return [f.code for f in fit.findings]


def test_third_order_tensor_is_cubic():
    from support.groups import rotations

    q = rotation6(rotations("m-3m"))
    turned = np.einsum("gia,gjb,gkc,abc->gijk", q, q, q, THIRD_TENSOR, optimize=True)
    np.testing.assert_allclose(turned, np.broadcast_to(THIRD_TENSOR, turned.shape), rtol=0, atol=1e-9)


def test_even_response_is_half_the_third_order_constants(tmp_path):
    plan, table = made(tmp_path / "run", [0.01])
    fit = fit_run(plan, table, noise=0.001)
    found = next(r for r in fit.checks.responses if r.kind == "even")
    unit = plan.jobs[1].strain / 0.01
    e = to_mandel(unit)
    expected = 0.5 * np.einsum("ijk,j,k", THIRD_TENSOR, e, e) * 0.01**2
    np.testing.assert_allclose(found.stress, stress_to_voigt(from_mandel(expected)), rtol=1e-6, atol=1e-9)
    assert found.p_value < 1e-6
    assert "even-response" in codes(fit)
    assert fit.checks.verdict == "cannot be told from one magnitude"


def test_cubic_order_removes_the_fourth_order_response_and_says_so(tmp_path):
    rng = np.random.default_rng(0)
    plan, table = made(tmp_path / "run", [0.01, 0.02], rng, noise=0.002)
    linear, cubic = fit_run(plan, table), fit_run(plan, table, "cubic")
    expected = plan.basis.values(SILICON)
    assert np.abs(linear.regression.values - expected).max() > 1
    reach = 4 * 0.002 * np.sqrt(np.diag(cubic.regression.estimator.unit_covariance))
    assert (np.abs(cubic.regression.values - expected) < reach).all()
    assert "magnitude-matters" in codes(linear)
    assert linear.checks.verdict == "curved; --order cubic corrects it"
    assert cubic.checks.verdict == "curved and corrected"
    np.testing.assert_allclose(linear.checks.other_order.values, cubic.regression.values, rtol=1e-12)
    found = next(r for r in cubic.checks.responses if r.kind == "cubic")
    e = to_mandel(plan.jobs[1].strain / plan.jobs[1].magnitude)
    np.testing.assert_allclose(found.stress, stress_to_voigt(from_mandel(FOURTH * (e @ e) * e)) * 0.02**3, rtol=0, atol=0.02)


def test_linear_crystal_gets_no_alarm(tmp_path):
    rng = np.random.default_rng(1)

    def law(strain):
        return from_mandel(SILICON @ to_mandel(strain))

    def energy(strain):
        e = to_mandel(strain)
        return 0.5 * e @ SILICON @ e

    plan, table = made(tmp_path / "run", [0.005, 0.01], rng, 0.01, law, energy)
    fit = fit_run(plan, table)
    assert fit.checks.verdict == "linear within noise"
    assert fit.findings == ()


def test_strains_far_too_large_are_beyond_correction(tmp_path):
    def law(strain):
        e = to_mandel(strain)
        return second_stress(strain) - from_mandel(4e8 * (e @ e) ** 2 * e)

    plan, table = made(tmp_path / "run", [0.02, 0.04, 0.06], np.random.default_rng(2), 0.01, law)
    fit = fit_run(plan, table, "cubic")
    assert fit.checks.verdict == "curved beyond what this set can correct"
    assert "curved" in codes(fit)


def test_one_wrong_job_is_named(tmp_path):
    def alter(job, sigma):
        return sigma + (np.diag([0.3, -0.2, 0.1]) if job.label == "s1-plus-1" else 0.0)

    plan, table = made(tmp_path / "run", [0.005, 0.01, 0.015], np.random.default_rng(3), 0.005, alter=alter)
    fit = fit_run(plan, table)
    outlier = next(f for f in fit.findings if f.code == "outlier")
    assert outlier.where == "s1-plus-1"
    dropped = fit_run(plan, table, drop=("s1-plus-1",))
    assert "outlier" not in codes(dropped)
    assert dropped.dropped == ("s1-plus-1",)
    assert dropped.to_dict()["jobs_dropped"] == ["s1-plus-1"]


def test_outlier_level_holds_on_clean_sets():
    """2000 clean simulated sets (linear, Gaussian): at most a family-wise 1 %, within sampling error, ever alarm."""
    from support.groups import rotations

    from strainkit.design.aims import fewest
    from strainkit.design.jobs import reference_job, strained_jobs
    from strainkit.design.model import build_model
    from strainkit.fit.outliers import outlier_tests
    from strainkit.fit.regression import Estimator, solve
    from strainkit.tensors.constants import constant_basis
    from strainkit.tensors.invariants import invariant_matrices

    group = rotations("m-3m")
    basis = constant_basis(invariant_matrices(group), np.eye(3))
    jobs = [reference_job(), *strained_jobs(from_mandel(fewest(group)), [0.005, 0.01], group)]
    model = build_model(np.array([job.strain for job in jobs]), group, basis.matrices)
    estimator = Estimator.of(model)
    rng = np.random.default_rng(4)
    alarms = 0
    for _ in range(2000):
        second = np.array([SILICON @ to_mandel(job.strain) + 0.01 * rng.normal(size=6) for job in jobs])
        p, _ = outlier_tests(solve(estimator, second), model.rows(second))
        alarms += bool(np.nanmin(p) * np.isfinite(p).sum() < 0.05)
    assert alarms / 2000 < 0.05 + 3 * (0.05 * 0.95 / 2000) ** 0.5


def test_energies_agree_with_stresses(tmp_path):
    plan, table = made(tmp_path / "run", [0.005, 0.01])
    for order in ("linear", "cubic"):
        fit = fit_run(plan, table, order)
        assert fit.checks.energy.curvature_agrees
        assert fit.checks.energy.slope_agrees
    for pair in fit.checks.energy.pairs:
        assert pair.curvature_energy == pytest.approx(pair.curvature_stress, rel=1e-6)
        assert pair.slope_energy == pytest.approx(0.0, abs=1e-6)


@pytest.mark.parametrize("missing", [0.9, 1.15])
def test_a_stress_that_is_not_the_derivative_of_the_energy_is_noticed(tmp_path, missing):
    plan, table = made(tmp_path / "run", [0.01], alter=lambda job, sigma: missing * sigma)
    fit = fit_run(plan, table, noise=0.001)
    assert "energy-mismatch" in codes(fit)
    message = next(f.message for f in fit.findings if f.code == "energy-mismatch")
    for cause in ("Pulay", "ions not fully relaxed", "missing from the stress"):
        assert cause in message


def test_basis_set_offset_is_recognised_and_removed(tmp_path):
    """A constant Kirchhoff stress of 4 GPa on every job, absent from the energies."""
    offset = 4.0 * np.eye(3)
    plan, table = made(tmp_path / "run", [0.01], alter=lambda job, s: s + offset / np.linalg.det(job.gradient))
    expected = plan.basis.values(SILICON)
    exact = fit_run(*made(tmp_path / "exact", [0.01]), noise=0.001).regression.values
    real = fit_run(plan, table, noise=0.001)
    assert "energy-slope-mismatch" in codes(real)
    assert "disagree" in next(f.message for f in real.findings if f.code == "reference-stress-reading")
    cleared = fit_run(plan, table, noise=0.001, reading="offset")
    np.testing.assert_allclose(cleared.regression.values, exact, rtol=0, atol=1e-6)
    assert np.abs(real.regression.values - expected).max() > 1.5
    assert "offset-removed" in codes(cleared)
    assert cleared.to_dict()["reference_stress_reading"] == "offset"
    np.testing.assert_allclose(cleared.reference_stress, 0.0, rtol=0, atol=1e-9)


def test_real_pressure_is_recognised(tmp_path):
    """A crystal really under 3 GPa: its energies fall with its stress."""
    pressure = -3.0 * np.eye(3)
    plan, table = made(
        tmp_path / "run",
        [0.01],
        law=lambda strain: second_stress(strain) + pressure,
        energy=lambda strain: energy_density(strain) + np.einsum("ij,ij", pressure, strain),
    )
    fit = fit_run(plan, table, noise=0.001)
    assert "it is real" in next(f.message for f in fit.findings if f.code == "reference-stress-reading")
    assert fit.checks.energy.slope_agrees
    b = fit.to_dict()["stress_strain_GPa"]
    # B11 = C11 - P, B12 = C12 + P, B44 = C44 - P (Wallace 1967; Barron & Klein 1965)
    c = fit.stiffness.voigt
    assert b[0][0] == pytest.approx(c[0, 0] - 3.0, abs=1e-9)
    assert b[0][1] == pytest.approx(c[0, 1] + 3.0, abs=1e-9)
    assert b[3][3] == pytest.approx(c[3, 3] - 3.0, abs=1e-9)


def test_convergence_finds_the_zero_strain_constants_and_the_best_magnitude(tmp_path):
    rng = np.random.default_rng(5)
    noise = 0.004
    plan, table = made(tmp_path / "run", [0.005, 0.01, 0.02], rng, noise)
    jobs, stresses = usable_jobs(plan, table)
    found = converge(plan, jobs, stresses)
    expected = plan.basis.values(SILICON)
    errors = np.sqrt(np.diag(found.zero.covariance))
    assert (np.abs(found.zero.values - expected) < 4.5 * errors).all()
    assert found.p_value < 1e-3
    # bias of a linear fit at 2 %: exact, from a noise-free run of the same set
    exact, exact_table = made(tmp_path / "exact", [0.02])
    bias = fit_run(exact, exact_table).regression.values - expected
    np.testing.assert_allclose(found.bias, bias, rtol=0, atol=4.5 * found.bias_error.max())
    # the best magnitude by brute force over simulated truth: bias (exact, as m^2) against noise (as 1/m)
    ratios = np.linspace(0.05, 2, 400)
    total = [((bias * r**2) ** 2).sum() + ((found.noise_error * noise / found.zero.noise / r) ** 2).sum() for r in ratios]
    assert found.best == pytest.approx(0.02 * ratios[int(np.argmin(total))], rel=0.25)


def test_cubic_test_has_its_nominal_false_alarm_rate():
    """4000 linear simulated sets at two magnitudes: the F-test alarms in 5 % of them, within a fifth (METHODS)."""
    from scipy.stats import f as f_distribution
    from support.groups import rotations

    from strainkit.design.aims import fewest
    from strainkit.design.jobs import reference_job, strained_jobs
    from strainkit.design.model import build_model
    from strainkit.fit.regression import Estimator
    from strainkit.tensors.invariants import invariant_matrices

    for laue in ("m-3m", "mmm", "-3m", "-1"):
        group = rotations(laue)
        matrices = invariant_matrices(group)
        jobs = [reference_job(), *strained_jobs(from_mandel(fewest(group)), [0.005, 0.01], group)]
        strains = np.array([job.strain for job in jobs])
        small, large = (Estimator.of(build_model(strains, group, matrices, order)) for order in ("linear", "cubic"))
        second = np.random.default_rng(6).normal(size=(len(jobs), 6, 4000))
        without, _ = small.squares(small.model.rows(second))
        with_cubic, _ = large.squares(large.model.rows(second))
        extra = small.odd_freedom - large.odd_freedom
        value = ((without - with_cubic) / extra) / (with_cubic / large.odd_freedom)
        rate = (f_distribution.sf(value, extra, large.odd_freedom) < 0.05).mean()
        assert rate == pytest.approx(0.05, rel=0.2), laue


def test_one_magnitude_asks_for_another(tmp_path):
    plan, table = made(tmp_path / "run", [0.01])
    jobs, stresses = usable_jobs(plan, table)
    found = converge(plan, jobs, stresses)
    assert [f.code for f in found.findings] == ["one-magnitude"]
    assert found.best is None
    assert "--magnitude 0.5" in found.findings[0].message


def test_noise_of_the_stresses_is_no_mismatch_of_the_slope():
    """Exact energies, no stress at rest, and noise of a twelfth of the stress: soft crystals computed as usual."""
    plan = plan_run(conventional("-1"))
    soft = np.diag([6.0, 6.0, 6.0, 8.0, 8.0, 8.0])
    soft[:3, :3] += 6.0
    law = linear_law(soft)
    for seed in range(5):
        rng = np.random.default_rng(seed)
        records = []
        for job in plan.jobs:
            error = rng.normal(scale=0.01, size=(3, 3))
            stress = cauchy_from_pk2(law(job.strain) + (error + error.T) / 2**0.5, job.gradient)
            energy = 0.5 * plan.crystal.volume / EV_PER_A3_IN_GPA * float((law(job.strain) * job.strain).sum())
            records.append(StressRecord(job.label, "done", stress=stress_to_voigt(stress), energy=energy))
        assert "energy-slope-mismatch" not in codes(fit_run(plan, StressTable(tuple(records))))
