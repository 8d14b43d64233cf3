"""Eigenvalues against the closed conditions of Mouhat & Coudert, and probabilities against normal distributions."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.stats import norm, t
from support.groups import LAUE_CLASSES, rotations

from strainkit.derive.stability import stability
from strainkit.tensors.invariants import invariant_matrices
from strainkit.tensors.sixvectors import stiffness_from_voigt, stiffness_to_voigt
from strainkit.tensors.stiffness import Stiffness


def closed_conditions(laue: str, voigt: np.ndarray) -> bool:
    """Necessary and sufficient conditions of F. Mouhat & F.-X. Coudert, Phys. Rev. B 90, 224104 (2014), by crystal class."""
    c = {f"{i + 1}{j + 1}": voigt[i, j] for i in range(6) for j in range(6)}
    if laue.startswith("m-3"):
        return c["11"] - c["12"] > 0 and c["11"] + 2 * c["12"] > 0 and c["44"] > 0
    if laue in ("6/m", "6/mmm", "4/mmm"):
        plane = c["11"] > abs(c["12"]) and 2 * c["13"] ** 2 < c["33"] * (c["11"] + c["12"]) and c["44"] > 0
        return plane and c["66"] > 0
    if laue == "4/m":
        plane = c["11"] > abs(c["12"]) and 2 * c["13"] ** 2 < c["33"] * (c["11"] + c["12"]) and c["44"] > 0
        return plane and 2 * c["16"] ** 2 < c["66"] * (c["11"] - c["12"])
    if laue in ("-3", "-3m"):
        plane = c["11"] > abs(c["12"]) and c["44"] > 0 and c["13"] ** 2 < 0.5 * c["33"] * (c["11"] + c["12"])
        return plane and c["14"] ** 2 + c["15"] ** 2 < 0.5 * c["44"] * (c["11"] - c["12"])
    if laue == "mmm":
        third = (
            c["11"] * c["22"] * c["33"]
            + 2 * c["12"] * c["13"] * c["23"]
            - c["11"] * c["23"] ** 2
            - c["22"] * c["13"] ** 2
            - c["33"] * c["12"] ** 2
        )
        return c["11"] > 0 and c["11"] * c["22"] > c["12"] ** 2 and third > 0 and min(c["44"], c["55"], c["66"]) > 0
    # monoclinic and triclinic: all leading principal minors positive (Sylvester), as the paper says
    return all(np.linalg.det(voigt[:k, :k]) > 0 for k in range(1, 7))


@pytest.mark.parametrize("laue", LAUE_CLASSES)
def test_eigenvalues_and_closed_conditions_agree_on_random_tensors(laue):
    basis = invariant_matrices(rotations(laue))
    rng = np.random.default_rng(5)
    verdicts = []
    for _ in range(400):
        mandel = np.tensordot(rng.normal(size=len(basis)), basis, axes=1) + rng.uniform(0.3, 2.5) * np.eye(6)
        expected = closed_conditions(laue, stiffness_to_voigt(mandel))
        assert stability(Stiffness(mandel)).stable == expected
        verdicts.append(expected)
    assert 0.1 < np.mean(verdicts) < 0.9  # both answers are tested


def one_uncertain_constant(value: float, error: float, dof: int | None) -> Stiffness:
    """A tensor whose only uncertain number, C44, decides the stability."""
    mandel = np.diag([30.0, 30, 30, 2 * value, 40, 40])
    covariance = np.zeros((36, 36))
    covariance[21, 21] = (2 * error) ** 2
    return Stiffness(mandel, covariance, dof)


@pytest.mark.parametrize(("value", "dof"), [(1.0, None), (0.5, None), (1.0, 4), (-0.5, 4)])
def test_probability_is_that_of_the_error_distribution(value, dof):
    """Share of a normal (known noise) or Student's (estimated noise) distribution above zero; 10,000 draws, four errors."""
    found = stability(one_uncertain_constant(value, 1.0, dof))
    expected = (norm if dof is None else t(dof)).cdf(value)
    assert found.probability == pytest.approx(expected, rel=0, abs=4 * (expected * (1 - expected) / 10_000) ** 0.5)
    assert found.stable == (value > 0)
    assert found.errors[0] == pytest.approx(2.0, rel=0.12)  # the standard error is normal in both cases


def test_same_seed_same_probability():
    uncertain = one_uncertain_constant(0.5, 1.0, None)
    assert stability(uncertain).probability == stability(uncertain).probability
    assert stability(uncertain, seed=1).probability != stability(uncertain).probability


def test_without_errors_there_is_no_probability():
    found = stability(Stiffness(np.eye(6)))
    assert found.stable
    assert found.probability is None
    assert found.errors is None


def test_softest_strain_belongs_to_the_smallest_eigenvalue():
    voigt = np.diag([10.0, 10, 10, 3, 1, 3])
    found = stability(Stiffness(stiffness_from_voigt(voigt)))
    expected = np.zeros((3, 3))
    expected[0, 2] = expected[2, 0] = 0.5**0.5
    assert np.abs(found.softest) == pytest.approx(expected, rel=0, abs=1e-12)
    assert found.eigenvalues[0] == pytest.approx(2.0, rel=1e-12)
