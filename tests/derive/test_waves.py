"""Waves against closed forms, the energy of a plane wave under stress, and published Debye temperatures."""

from __future__ import annotations

import numpy as np
import pytest
from support.crystals import random_rotation
from support.groups import LAUE_CLASSES
from support.published import BY_LAUE_CLASS, mandel

from strainkit.derive.waves import (
    christoffel,
    debye_speed,
    debye_temperature,
    quadrature_order,
    shortcut_speed,
    sound_speeds,
)
from strainkit.tensors.prestress import stress_strain_coefficients
from strainkit.tensors.rotations import rotate_matrix
from strainkit.tensors.sixvectors import full_tensor, stiffness_to_voigt, to_mandel
from strainkit.tensors.strain import green_lagrange

REST = np.zeros((3, 3))


def exact_speed(stiffness: np.ndarray, density: float) -> float:
    return float(debye_speed(stiffness, REST, density, quadrature_order(stiffness, REST)))


@pytest.mark.parametrize("laue", LAUE_CLASSES)
def test_christoffel_matrix_with_four_indices(laue):
    rng = np.random.default_rng(0)
    n = random_rotation(rng)
    stress = rng.normal(size=(3, 3))
    stress = stress + stress.T
    full = full_tensor(mandel(BY_LAUE_CLASS[laue]))
    slow = np.einsum("ijkl,aj,al->aik", full, n, n) + np.einsum("ik,aj,jl,al->aik", np.eye(3), n, stress, n)
    np.testing.assert_allclose(christoffel(mandel(BY_LAUE_CLASS[laue]), stress, n), slow, rtol=0, atol=1e-10)


@pytest.mark.parametrize("seed", range(4))
def test_stiffness_of_a_plane_wave_is_the_curvature_of_the_energy(seed):
    """A wave of amplitude a along n deforms as F = 1 + e a n^T. For the energy W = t:E + E:C:E/2 of a crystal under Cauchy
    stress t, d2W/de2 at e = 0 must be a . Gamma . a (definition of the acoustic tensor; Wallace 1967)."""
    rng = np.random.default_rng(seed)
    c = mandel("diopside_Sang2011_1")
    stress = 20 * rng.normal(size=(3, 3))
    stress = stress + stress.T
    n, a, _ = random_rotation(rng) @ np.array([[1, 0, 0], [0.3, 0.9, 0.1], [0, 0, 1]])

    def energy(e: float) -> float:
        strain = to_mandel(green_lagrange(np.eye(3) + e * np.outer(a, n)))
        return float(to_mandel(stress) @ strain + 0.5 * strain @ c @ strain)

    step = 1e-4
    curvature = (energy(step) + energy(-step) - 2 * energy(0.0)) / step**2
    assert a @ christoffel(c, stress, n[None])[0] @ a == pytest.approx(curvature, rel=1e-5)


def test_under_pressure_the_stress_strain_coefficients_carry_the_waves():
    """For an isotropic stress C n n + t is B n n, so B typed in by a user gives the same speeds (Barron & Klein 1965)."""
    c, stress = mandel("Si_CRC"), -15.0 * np.eye(3)
    b = stress_strain_coefficients(c, stress)
    n = random_rotation(np.random.default_rng(1))
    np.testing.assert_allclose(christoffel(c, stress, n), christoffel(b, REST, n), rtol=0, atol=1e-9)


@pytest.mark.parametrize("entry", ["Si_CRC", "Cu_textbook", "MgO_1976"])
def test_cubic_speeds(entry):
    """rho v^2: C11, C44, C44 along [100]; (C11+C12+2C44)/2, C44, (C11-C12)/2 along [110] (C. Kittel, Introduction to Solid
    State Physics, chapter 3)."""
    v = stiffness_to_voigt(mandel(entry))
    c11, c12, c44 = v[0, 0], v[0, 1], v[3, 3]
    density = 3000.0
    n = np.array([[1.0, 0, 0], [0.5**0.5, 0.5**0.5, 0]])
    speeds, polarisations = sound_speeds(mandel(entry), REST, density, n)
    expected = [[c11, c44, c44], [0.5 * (c11 + c12 + 2 * c44), c44, 0.5 * (c11 - c12)]]
    for found, moduli in zip(speeds, expected, strict=True):
        assert found == pytest.approx(np.sqrt(np.sort(moduli) * 1e9 / density), rel=1e-10)
    assert abs(polarisations[1, 2] @ n[1]) == pytest.approx(1, rel=1e-10)
    slow = np.array([1, -1, 0]) / 2**0.5 if 0.5 * (c11 - c12) < c44 else np.array([0, 0, 1.0])
    assert abs(polarisations[1, 0] @ slow) == pytest.approx(1, rel=1e-10)


def test_hexagonal_speeds_in_the_basal_plane():
    """C11 (longitudinal), (C11 - C12)/2 and C44 (transverse), whatever the direction in the plane (Musgrave, Crystal
    Acoustics, from memory)."""
    v = stiffness_to_voigt(mandel("iceIh_Gammon_257K"))
    moduli = np.sort([v[0, 0], 0.5 * (v[0, 0] - v[0, 1]), v[3, 3]])
    angle = np.array([0.1, 0.7, 1.3])
    n = np.column_stack([np.cos(angle), np.sin(angle), 0 * angle])
    speeds, _ = sound_speeds(mandel("iceIh_Gammon_257K"), REST, 919.0, n)
    for row in speeds:
        assert row == pytest.approx(np.sqrt(moduli * 1e9 / 919.0), rel=1e-10)


def test_debye_speed_of_an_isotropic_solid():
    """3 / v_D^3 = 2 / v_t^3 + 1 / v_l^3, where the shortcut is exact."""
    mu, lam, density = 30.0, 40.0, 2500.0
    c = 2 * mu * np.eye(6)
    c[:3, :3] += lam
    vt, vl = np.sqrt(mu * 1e9 / density), np.sqrt((lam + 2 * mu) * 1e9 / density)
    expected = (3 / (2 / vt**3 + 1 / vl**3)) ** (1 / 3)
    assert exact_speed(c, density) == pytest.approx(expected, rel=1e-9)
    assert shortcut_speed(c, density) == pytest.approx(expected, rel=1e-9)


@pytest.mark.parametrize("entry", ["albite_An0_Brown2016", "CsSCN_1983", "urea_FZ1970", "CCl4_Ia"])
def test_angular_average_against_a_brute_one(entry):
    """200,000 random directions; three of their own standard errors."""
    c = mandel(entry)
    n = np.random.default_rng(2).normal(size=(200_000, 3))
    n /= np.linalg.norm(n, axis=1, keepdims=True)
    slowness = (np.linalg.eigvalsh(christoffel(c, REST, n)) ** -1.5).sum(axis=1) / 3.0
    mean, error = slowness.mean(), slowness.std() / len(n) ** 0.5
    found = (exact_speed(c, 1e9) ** 2) ** -1.5  # at 1e9 kg/m^3, v^2 in m^2/s^2 is the modulus in GPa
    assert found == pytest.approx(mean, rel=0, abs=3 * error)
    turned = random_rotation(np.random.default_rng(3))
    assert exact_speed(rotate_matrix(turned, c), 1.0) == pytest.approx(exact_speed(c, 1.0), rel=1e-6)


#: entry -> density kg/m^3, atoms a formula, mass of a formula in u, published Debye temperature K, tolerance K
DEBYE = {
    # Hallberg & Hanson 1970, 181 K from these constants (seen); density from memory
    "Cu2O_lowT": (6140, 3, 143.09, 181.0, 1.0),
    # Aust. J. Phys. 36, 85 (1983): low limit 132 K (seen); density 2900 assumed
    "CsSCN_1983": (2900, 4, 190.99, 132.0, 0.6),
    # the elastic limit of silicon that tables give, 645 K (Kittel, Introduction to Solid State Physics, from memory)
    "Si_CRC": (2329, 1, 28.0855, 645.0, 3.0),
}


@pytest.mark.parametrize("entry", DEBYE)
def test_published_debye_temperatures(entry):
    density, atoms, mass, kelvin, tolerance = DEBYE[entry]
    per_cubic_angstrom = density * 6.02214076e23 / (1e-3 * mass) * atoms * 1e-30
    found = float(debye_temperature(exact_speed(mandel(entry), density), per_cubic_angstrom))
    assert found == pytest.approx(kelvin, rel=0, abs=tolerance)


def test_published_debye_temperature_of_copper_at_zero_kelvin():
    """345 K from C11 176.2, C12 124.9, C44 81.8 GPa and 9018 kg/m^3 at 0 K (Overton & Gaffney, Phys. Rev. 98, 969, 1955; from
    memory)."""
    c = np.diag([176.2] * 3 + [2 * 81.8] * 3)
    c[:3, :3] += 124.9 * (1 - np.eye(3))
    number = 9018 * 6.02214076e23 / 63.546e-3 * 1e-30
    assert float(debye_temperature(exact_speed(c, 9018.0), number)) == pytest.approx(345.0, rel=0, abs=1.5)


def test_oxyapatite_debye_temperature_in_the_published_range():
    """Between 400 and 500 K (the paper of the constants); density 5120 kg/m^3 from memory, 42 atoms, 1923 u a cell."""
    number = 5120 * 6.02214076e23 / 1.9238 * 42 * 1e-30
    assert 400 < float(debye_temperature(exact_speed(mandel("oxyapatite_6m"), 5120), number)) < 500


@pytest.mark.parametrize("entry", ["Cu_textbook", "CsSCN_1983", "urea_FZ1970"])
def test_the_shortcut_is_higher_than_the_exact_average(entry):
    c = mandel(entry)
    assert shortcut_speed(c, 1000.0) / exact_speed(c, 1000.0) > 1.01


def test_a_wave_without_a_real_speed_gives_no_debye_speed():
    c = mandel("Si_CRC")
    assert np.isnan(debye_speed(c, -200.0 * np.eye(3), 2329.0, 8))
    assert quadrature_order(c, -200.0 * np.eye(3)) == 8
