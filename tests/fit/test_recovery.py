"""A known tensor comes back: every Laue class, any orientation and setting, outputs in frames of their own."""

from __future__ import annotations

import numpy as np
import pytest
from support.crystals import conventional, random_rotation, random_unimodular, rewritten, supercell
from support.groups import COUNTS, LAUE_CLASSES
from support.published import BY_LAUE_CLASS, mandel
from support.returned import linear_law, write_returns

from strainkit.collect.gather import collect_run
from strainkit.crystal.frames import crystal_frame
from strainkit.crystal.symmetry import find_symmetry
from strainkit.fit.result import fit_run
from strainkit.prepare.runfolder import plan_run, write_run
from strainkit.run.plan import load_plan
from strainkit.tensors.rotations import rotate_matrix


def truth_in(crystal, laue):
    """The published tensor of the class, seen in the frame of this crystal (through the IEEE axes of its own cell)."""
    axes = crystal_frame("ieee", find_symmetry(crystal)).rotation
    return rotate_matrix(axes.T, mandel(BY_LAUE_CLASS[laue]))


def round_trip(crystal, tensor, folder, rng=None, law=None, magnitudes=(0.01,)):
    plan, _ = write_run(plan_run(crystal, magnitudes), folder)
    write_returns(folder, plan, law or linear_law(tensor), rng)
    plan = load_plan(folder)
    return fit_run(plan, collect_run(folder, plan))


@pytest.mark.parametrize("laue", LAUE_CLASSES)
def test_recovered_in_random_orientation_and_setting(laue, tmp_path):
    rng = np.random.default_rng(sum(map(ord, laue)))
    start = conventional(laue)
    turn, basis = random_rotation(rng), random_unimodular(rng)
    crystal = rewritten(start, turn, basis, rng.permutation(len(start.numbers)))
    expected = rotate_matrix(turn, truth_in(start, laue))
    fit = round_trip(crystal, expected, tmp_path / "run", rng)
    assert not fit.undetermined
    assert len(fit.plan.jobs) - 1 == COUNTS[laue][1]
    assert len(fit.plan.basis.names) == COUNTS[laue][0]
    scale = np.abs(expected).max()
    np.testing.assert_allclose(fit.stiffness.mandel, expected, rtol=0, atol=1e-6 * scale)
    assert fit.regression.noise < 1e-6 * scale


@pytest.mark.parametrize("laue", LAUE_CLASSES)
def test_constants_in_ieee_axes_are_the_published_ones(laue, tmp_path):
    start = conventional(laue)
    fit = round_trip(start, truth_in(start, laue), tmp_path / "run")
    published = mandel(BY_LAUE_CLASS[laue])
    for name, value in zip(fit.plan.basis.names, fit.regression.values, strict=True):
        i, j = int(name[1]) - 1, int(name[2]) - 1
        factor = (2**0.5) ** ((i > 2) + (j > 2))
        assert value * factor == pytest.approx(published[i, j], rel=1e-6, abs=1e-5)


@pytest.mark.parametrize("laue", ["2/m", "-3m", "m-3m"])
def test_a_supercell_gives_the_same_tensor(laue, tmp_path):
    start = supercell(conventional(laue), (1, 1, 2))
    expected = truth_in(start, laue)
    fit = round_trip(start, expected, tmp_path / "run")
    assert len(fit.plan.jobs) - 1 == COUNTS[laue][1]
    np.testing.assert_allclose(fit.stiffness.mandel, expected, rtol=0, atol=1e-6 * np.abs(expected).max())


def test_reference_stress_is_found_and_does_not_spoil_the_constants(tmp_path):
    start = conventional("mmm")
    expected = truth_in(start, "mmm")
    residual = np.diag([0.3, -0.2, 0.5])
    fit = round_trip(start, expected, tmp_path / "run", law=linear_law(expected, residual))
    np.testing.assert_allclose(fit.reference_stress, residual, rtol=0, atol=1e-9)
    np.testing.assert_allclose(fit.stiffness.mandel, expected, rtol=0, atol=1e-6 * np.abs(expected).max())


@pytest.mark.parametrize("laue", LAUE_CLASSES)
def test_even_response_does_not_touch_the_constants(laue, tmp_path):
    """Third-order constants (random, averaged over the group) add a quadratic stress that pairs cancel exactly."""
    start = conventional(laue)
    expected = truth_in(start, laue)
    symmetry = find_symmetry(start)
    from strainkit.tensors.rotations import rotation6
    from strainkit.tensors.sixvectors import from_mandel, to_mandel

    third = np.random.default_rng(1).normal(size=(6, 6, 6)) * 2000
    third = sum(third.transpose(p) for p in [(0, 1, 2), (0, 2, 1), (1, 0, 2), (1, 2, 0), (2, 0, 1), (2, 1, 0)]) / 6
    q = rotation6(symmetry.rotations)
    third = np.einsum("gia,gjb,gkc,abc->ijk", q, q, q, third, optimize=True) / len(q)

    def law(strain):
        e = to_mandel(strain)
        return from_mandel(expected @ e + 0.5 * np.einsum("ijk,j,k", third, e, e))

    fit = round_trip(start, expected, tmp_path / "run", law=law)
    np.testing.assert_allclose(fit.stiffness.mandel, expected, rtol=0, atol=1e-6 * np.abs(expected).max())
    assert fit.regression.noise < 1e-6 * np.abs(expected).max()
