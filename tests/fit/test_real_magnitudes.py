"""Magnitudes from 0.1 to 4 % on a real engine: a P2_1/c molecular crystal, where noise floor and curvature can both be seen.

Stresses and energies of naphthalene, GFN1-xTB, clamped ions (tests/data/naphthalene_gfn1_clamped.json says how they were made).
What is true is not published; the checks are that small and large strains tell the same constants once curvature is fitted,
that error bars are as wide as the differences, and that the energies, another output of the engine, have the same curvature.
"""

from __future__ import annotations

import json
from pathlib import Path

import numpy as np
import pytest

from strainkit.crystal.read import read_crystal
from strainkit.fit.energy import check_energies
from strainkit.fit.magnitude import converge
from strainkit.fit.regression import regress
from strainkit.prepare.runfolder import plan_run

DATA = Path(__file__).parent.parent / "data"
MAGNITUDES = [0.001, 0.0025, 0.005, 0.01, 0.02, 0.04]


@pytest.fixture(scope="module")
def naphthalene():
    data = json.loads((DATA / "naphthalene_gfn1_clamped.json").read_text())
    plan = plan_run(read_crystal(DATA / "naphthalene_gfn1_gamma.extxyz"), MAGNITUDES, "clamped")
    gradients = np.array(data["deformation_gradients"]).reshape(-1, 3, 3)
    order = [int(np.abs(gradients - job.gradient).max(axis=(1, 2)).argmin()) for job in plan.strain_set]
    np.testing.assert_allclose(gradients[order], [job.gradient for job in plan.strain_set], rtol=0, atol=1e-9)
    return plan, np.array(data["stresses"])[order], np.array(data["energies_eV"])[order]


def at(plan, sizes):
    return [
        i for i, job in enumerate(plan.strain_set) if not job.shape or min(abs(abs(job.magnitude) - s) for s in sizes) < 1e-9
    ]


def fitted(plan, stresses, sizes, order="linear"):
    keep = at(plan, sizes)
    gradients = np.array([plan.strain_set[i].gradient for i in keep])
    return regress(gradients, stresses[keep], plan.symmetry.rotations, plan.basis.matrices, order)


def test_verdicts(naphthalene):
    """Curvature is found, its bias is as large as seen, and the recommended magnitude lies where neither it nor noise rules."""
    plan, stresses, _ = naphthalene
    found = converge(plan, plan.strain_set, stresses)
    assert len(plan.basis.names) == 13
    assert found.p_value < 1e-6
    assert [f.code for f in found.findings] == ["magnitude-matters"]
    assert 0.002 < found.best < 0.01
    alone = fitted(plan, stresses, [0.04]).values - fitted(plan, stresses, [0.001, 0.0025]).values
    assert found.bias == pytest.approx(alone, rel=0.15, abs=0.15)


@pytest.mark.parametrize("size", MAGNITUDES[:3])
def test_small_strains_agree_with_the_extrapolation_within_their_errors(naphthalene, size):
    """Chi-squared of the differences, less the curvature that the other magnitudes tell; the one compared is not among them."""
    plan, stresses, _ = naphthalene
    keep = at(plan, [s for s in MAGNITUDES if s not in (size, 0.04)])
    found = converge(plan, [plan.strain_set[i] for i in keep], stresses[keep])
    one = fitted(plan, stresses, [size])
    away = one.values - found.zero.values - found.bias * (size / 0.02) ** 2
    # 0.1 % point of F with 13 and 11 degrees of freedom, times 13 (scipy.stats.f.isf(0.001, 13, 11))
    assert away @ np.linalg.solve(one.covariance + found.zero.covariance, away) < 13 * 7.51


def test_noise_floor_and_curvature_are_told_apart(naphthalene):
    """Residuals of one magnitude stay at the floor of the engine up to 0.5 % and grow as a power of the strain beyond."""
    plan, stresses, _ = naphthalene
    noise = [fitted(plan, stresses, [size]).noise for size in MAGNITUDES]
    assert max(noise[:3]) < 3e-4
    assert noise[5] > 100 * noise[0]
    assert fitted(plan, stresses, MAGNITUDES[:5], "cubic").noise < 4e-4


def test_energies_have_the_same_curvature(naphthalene):
    plan, stresses, energies = naphthalene
    keep = at(plan, [0.01])
    jobs = [plan.strain_set[i] for i in keep]
    check = check_energies(jobs, energies[keep], plan.crystal.volume, fitted(plan, stresses, [0.01]), plan.basis.matrices)
    assert check.curvature_agrees
    for pair in check.pairs:
        assert pair.curvature_energy == pytest.approx(pair.curvature_stress, rel=3e-3)
