"""Six-vectors against the definitions with four indices."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from hypothesis.extra.numpy import arrays
from support.crystals import random_rotation

from strainkit.errors import UsageError
from strainkit.tensors.rotations import polar, rotate_matrix, rotation6
from strainkit.tensors.sixvectors import (
    compliance_to_voigt,
    from_mandel,
    full_tensor,
    matrix_from_full,
    stiffness_from_voigt,
    stiffness_to_voigt,
    strain_from_voigt,
    strain_to_voigt,
    stress_from_voigt,
    stress_to_voigt,
    to_mandel,
)
from strainkit.tensors.stiffness import Stiffness
from strainkit.tensors.strain import (
    cauchy_from_pk2,
    gradient_between,
    gradient_from_strain,
    green_lagrange,
    pk2_from_cauchy,
)

NUMBERS = st.floats(-10, 10, allow_nan=False, width=64)
SIX = arrays(float, 6, elements=NUMBERS)


def symmetric(seed: int, n: int = 6) -> np.ndarray:
    matrix = np.random.default_rng(seed).normal(size=(n, n))
    return matrix + matrix.T


def test_order_and_factors_of_the_voigt_vectors():
    tensor = np.array([[1.0, 6.0, 5.0], [6.0, 2.0, 4.0], [5.0, 4.0, 3.0]])
    assert stress_to_voigt(tensor) == pytest.approx([1, 2, 3, 4, 5, 6], rel=0, abs=1e-15)
    assert strain_to_voigt(tensor) == pytest.approx([1, 2, 3, 8, 10, 12], rel=0, abs=1e-14)


@given(SIX)
def test_vectors_come_back(vector):
    for there, back in (
        (stress_from_voigt, stress_to_voigt),
        (strain_from_voigt, strain_to_voigt),
        (from_mandel, to_mandel),
    ):
        assert back(there(vector)) == pytest.approx(vector, rel=1e-14, abs=1e-14)


@given(SIX, SIX)
def test_mandel_keeps_scalar_products(first, second):
    double_contraction = np.einsum("ij,ij", from_mandel(first), from_mandel(second))
    assert first @ second == pytest.approx(double_contraction, rel=1e-12, abs=1e-10)


def test_full_tensor_has_the_symmetries_and_comes_back():
    matrix = symmetric(0)
    tensor = full_tensor(matrix)
    assert tensor[0, 0, 1, 2] * 2**0.5 == pytest.approx(matrix[0, 3], rel=1e-14)
    assert tensor[0, 1, 1, 2] * 2 == pytest.approx(matrix[5, 3], rel=1e-14)
    for axes in ((1, 0, 2, 3), (0, 1, 3, 2), (2, 3, 0, 1)):
        np.testing.assert_allclose(tensor, tensor.transpose(axes), rtol=0, atol=1e-14)
    np.testing.assert_allclose(matrix_from_full(tensor), matrix, rtol=0, atol=1e-13)


def test_stress_of_a_strain_is_the_same_with_four_indices_and_in_voigt_form():
    matrix, strain = symmetric(1), symmetric(2, 3)
    stress = np.einsum("ijkl,kl", full_tensor(matrix), strain)
    np.testing.assert_allclose(from_mandel(matrix @ to_mandel(strain)), stress, rtol=0, atol=1e-12)
    np.testing.assert_allclose(
        stiffness_to_voigt(matrix) @ strain_to_voigt(strain), stress_to_voigt(stress), rtol=0, atol=1e-12
    )


def test_voigt_compliance_is_the_inverse_of_the_voigt_stiffness():
    matrix = symmetric(3) + 20 * np.eye(6)
    np.testing.assert_allclose(
        compliance_to_voigt(np.linalg.inv(matrix)), np.linalg.inv(stiffness_to_voigt(matrix)), rtol=1e-10, atol=1e-14
    )
    np.testing.assert_allclose(stiffness_from_voigt(stiffness_to_voigt(matrix)), matrix, rtol=1e-14, atol=0)


@pytest.mark.parametrize("seed", range(5))
def test_rotation_of_matrices_is_the_rotation_of_tensors(seed):
    rng = np.random.default_rng(seed)
    r, matrix = random_rotation(rng), symmetric(seed)
    slow = np.einsum("ai,bj,ck,dl,ijkl", r, r, r, r, full_tensor(matrix))
    np.testing.assert_allclose(rotate_matrix(r, matrix), matrix_from_full(slow), rtol=0, atol=1e-12)
    q = rotation6(r)
    np.testing.assert_allclose(q @ q.T, np.eye(6), rtol=0, atol=1e-13)


@pytest.mark.parametrize("seed", range(5))
def test_polar_decomposition(seed):
    rng = np.random.default_rng(seed)
    f = random_rotation(rng) @ gradient_from_strain(0.1 * symmetric(seed, 3) / 5)
    rotation, stretch = polar(f)
    np.testing.assert_allclose(rotation @ stretch, f, rtol=0, atol=1e-13)
    np.testing.assert_allclose(rotation.T @ rotation, np.eye(3), rtol=0, atol=1e-13)
    np.testing.assert_allclose(stretch, stretch.T, rtol=0, atol=1e-13)
    np.testing.assert_allclose(green_lagrange(f), green_lagrange(stretch), rtol=0, atol=1e-13)


@settings(max_examples=50)
@given(arrays(float, (3, 3), elements=st.floats(-0.05, 0.05)))
def test_gradient_has_its_strain_and_no_rotation(matrix):
    strain = 0.5 * (matrix + matrix.T)
    f = gradient_from_strain(strain)
    np.testing.assert_allclose(green_lagrange(f), strain, rtol=0, atol=1e-14)
    np.testing.assert_allclose(f, f.T, rtol=0, atol=1e-15)


def test_impossible_strain_is_refused():
    with pytest.raises(UsageError, match="inside out"):
        gradient_from_strain(-0.6 * np.eye(3))


def test_rows_of_the_lattice_move_as_vectors_do():
    rng = np.random.default_rng(4)
    lattice, f = rng.normal(size=(3, 3)) + 4 * np.eye(3), np.eye(3) + 0.05 * rng.normal(size=(3, 3))
    moved = lattice @ f.T
    for old, new in zip(lattice, moved, strict=True):
        np.testing.assert_allclose(new, f @ old, rtol=0, atol=1e-13)
    np.testing.assert_allclose(gradient_between(lattice, moved), f, rtol=0, atol=1e-12)


def test_second_piola_kirchhoff_stress_does_the_same_work():
    """J sigma : d = S : d(eta)/dt for any velocity gradient (definition of the conjugate pair; Wallace 1972)."""
    rng = np.random.default_rng(5)
    f, rate = np.eye(3) + 0.05 * rng.normal(size=(3, 3)), rng.normal(size=(3, 3))
    sigma = symmetric(6, 3)
    second = pk2_from_cauchy(sigma, f)
    power = np.linalg.det(f) * np.einsum("ij,ij", sigma, 0.5 * (rate + rate.T))
    step = 1e-6
    eta_rate = (green_lagrange(f + step * rate @ f) - green_lagrange(f - step * rate @ f)) / (2 * step)
    assert np.einsum("ij,ij", second, eta_rate) == pytest.approx(power, rel=1e-8)
    np.testing.assert_allclose(cauchy_from_pk2(second, f), sigma, rtol=0, atol=1e-12)


def test_stiffness_object_rotates_its_errors_and_samples_them():
    rng = np.random.default_rng(7)
    root = rng.normal(size=(6, 6, 8))
    root = (root + root.transpose(1, 0, 2)).reshape(36, 8) * 0.01
    stiffness = Stiffness(symmetric(8) + 30 * np.eye(6), root @ root.T)
    turned = stiffness.rotated(random_rotation(rng), "turned")
    assert np.trace(turned.covariance) == pytest.approx(np.trace(stiffness.covariance), rel=1e-10)
    draws = stiffness.sample(40_000, seed=1)
    np.testing.assert_allclose(draws.mean(axis=0), stiffness.mandel, rtol=0, atol=5e-4)
    spread = draws.reshape(-1, 36).std(axis=0).reshape(6, 6)
    np.testing.assert_allclose(stiffness_to_voigt(spread), stiffness.standard_errors, rtol=0.03, atol=0)


def test_linear_propagation_agrees_with_sampling():
    root = np.random.default_rng(9).normal(size=(6, 6, 5))
    root = (root + root.transpose(1, 0, 2)).reshape(36, 5) * 0.02
    stiffness = Stiffness(symmetric(10) + 30 * np.eye(6), root @ root.T)

    def softest(matrices):
        return np.linalg.inv(matrices)[:, 0, 0]

    sampled = softest(stiffness.sample(50_000, seed=2)).std()
    assert float(stiffness.standard_error_of(softest)) == pytest.approx(sampled, rel=0.03)


@pytest.mark.parametrize("bad", [np.eye(5), np.full((6, 6), np.nan), np.triu(np.ones((6, 6)))])
def test_impossible_stiffness_is_refused(bad):
    with pytest.raises(UsageError):
        Stiffness(bad)
