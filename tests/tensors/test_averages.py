"""Averages against closed forms, rotation, bounds and published values (sources in tests/data/published_stiffness.json)."""

from __future__ import annotations

import numpy as np
import pytest
from support.crystals import random_rotation
from support.groups import LAUE_CLASSES
from support.published import BY_LAUE_CLASS, entries, mandel

from strainkit.tensors.averages import anisotropy_of, averages_of, pugh_of
from strainkit.tensors.rotations import rotate_matrix
from strainkit.tensors.sixvectors import full_tensor, stiffness_from_voigt, stiffness_to_voigt

VOIGT, REUSS, HILL = 0, 1, 2


def test_isotropic_solid():
    """K = lambda + 2 mu / 3, E = mu (3 lambda + 2 mu) / (lambda + mu), nu = lambda / (2 (lambda + mu))."""
    lam, mu = 7.0, 3.0
    voigt = np.diag([2 * mu] * 3 + [mu] * 3).astype(float)
    voigt[:3, :3] += lam
    values = averages_of(stiffness_from_voigt(voigt))
    expected = [lam + 2 * mu / 3, mu, mu * (3 * lam + 2 * mu) / (lam + mu), lam / (2 * (lam + mu))]
    for scheme in (VOIGT, REUSS, HILL):
        assert values[:, scheme] == pytest.approx(expected, rel=1e-12)
    assert anisotropy_of(stiffness_from_voigt(voigt)) == pytest.approx(0, rel=0, abs=1e-12)


@pytest.mark.parametrize("laue", LAUE_CLASSES)
def test_against_the_traces_that_define_them(laue):
    """9 K_V = C_iijj, 30 G_V = 3 C_ijij - C_iijj, 1/K_R = S_iijj, 15/G_R = 6 S_ijij - 2 S_iijj (Hill 1952), any axes."""
    c = mandel(BY_LAUE_CLASS[laue])
    full, compliance = full_tensor(c), full_tensor(np.linalg.inv(c))
    turned = averages_of(rotate_matrix(random_rotation(np.random.default_rng(0)), c))
    c_iijj, c_ijij = np.einsum("iijj", full), np.einsum("ijij", full)
    s_iijj, s_ijij = np.einsum("iijj", compliance), np.einsum("ijij", compliance)
    assert turned[0, VOIGT] == pytest.approx(c_iijj / 9, rel=1e-11)
    assert turned[1, VOIGT] == pytest.approx((3 * c_ijij - c_iijj) / 30, rel=1e-11)
    assert turned[0, REUSS] == pytest.approx(1 / s_iijj, rel=1e-11)
    assert turned[1, REUSS] == pytest.approx(15 / (6 * s_ijij - 2 * s_iijj), rel=1e-11)
    assert (turned[:2, VOIGT] >= turned[:2, REUSS] - 1e-9).all()
    assert anisotropy_of(c) >= 0


def test_cubic_anisotropy_index():
    """A_U = 6/5 (sqrt(A) - 1/sqrt(A))^2 with Zener's A (Ranganathan & Ostoja-Starzewski 2008)."""
    for entry in ("Si_CRC", "Cu_textbook", "W"):
        c = stiffness_to_voigt(mandel(entry))
        zener = 2 * c[3, 3] / (c[0, 0] - c[0, 1])
        assert anisotropy_of(mandel(entry)) == pytest.approx(1.2 * (zener**0.5 - zener**-0.5) ** 2, rel=1e-9)


#: entry -> (scheme, published bulk modulus, published shear modulus, half a unit of the last digit given)
PUBLISHED = {
    "diopside_Sang2011_1": (HILL, 114.6, 72.7, 0.05),
    "diopside_Sang2011_2": (HILL, 113.7, 72.2, 0.05),
    "aragonite_Liu2005": (HILL, 68.9, 35.8, 0.1),
    "sulphur_alpha": (HILL, 19.1, 6.7, 0.05),
    "pyrite_Bass": (HILL, 142.7, 125.7, 0.05),
    "CsSCN_1983": (REUSS, 13.2, None, 0.1),
    "MgO_1976": (HILL, 163.9, None, 0.05),
    "Kr_116K": (HILL, 2.036, None, 0.0005),
}


@pytest.mark.parametrize("entry", PUBLISHED)
def test_published_bulk_and_shear_moduli(entry):
    """Within the rounding of the published number; constants and moduli from the same source."""
    scheme, bulk, shear, rounding = PUBLISHED[entry]
    assert "published_derived" in entries()[entry]
    values = averages_of(mandel(entry))
    assert values[0, scheme] == pytest.approx(bulk, rel=0, abs=1.05 * rounding)
    if shear is not None:
        assert values[1, scheme] == pytest.approx(shear, rel=0, abs=1.05 * rounding)


def test_published_averages_of_calcite():
    """E_Voigt 97.0, E_Reuss 74.9, computed from Chen et al. 2001 by R. J. Angel (MSA talk 2017), seen."""
    values = averages_of(mandel("calcite_Chen2001"))
    assert values[2, [VOIGT, REUSS]] == pytest.approx([97.0, 74.9], rel=0, abs=0.06)


@pytest.mark.parametrize(
    ("entry", "bulk", "shear"), [("olivine_Abramson1997", 129.4, 78.0), ("forsterite_Isaak1989", 128.8, 81.6)]
)
def test_published_means_lie_between_voigt_and_reuss(entry, bulk, shear):
    """Olivine: Hashin-Shtrikman means of Abramson et al. 1997 (seen); forsterite: Isaak et al. 1989 (from memory)."""
    values = averages_of(mandel(entry))
    for row, value in ((0, bulk), (1, shear)):
        assert values[row, REUSS] - 0.05 < value < values[row, VOIGT] + 0.05


def test_pugh_ratio_is_the_quotient_of_hill_moduli():
    values = averages_of(mandel("aragonite_Liu2005"))
    assert pugh_of(mandel("aragonite_Liu2005")) == pytest.approx(values[0, HILL] / values[1, HILL], rel=1e-12)
    assert pugh_of(mandel("aragonite_Liu2005")) == pytest.approx(68.9 / 35.8, rel=3e-3)
