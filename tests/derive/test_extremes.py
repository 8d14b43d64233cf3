"""Extremes over all directions against brute force: dense random directions and scipy's simplex search."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.optimize import minimize
from support.crystals import random_rotation
from support.groups import LAUE_CLASSES
from support.published import BY_LAUE_CLASS, mandel

from strainkit.derive.directional import poisson, poisson_range, shear, shear_range, young
from strainkit.derive.search import search
from strainkit.derive.spread import half_width
from strainkit.tensors.rotations import rotate_matrix
from strainkit.tensors.sixvectors import stiffness_to_voigt

NO_DRAWS = np.zeros((0, 6, 6))


def axes_of(angles: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Unit vectors n and m at right angles (..., 3) of Euler angles (..., 3)."""
    theta, phi, psi = np.moveaxis(np.asarray(angles), -1, 0)
    n = np.stack([np.sin(theta) * np.cos(phi), np.sin(theta) * np.sin(phi), np.cos(theta)], axis=-1)
    first = np.stack([np.cos(theta) * np.cos(phi), np.cos(theta) * np.sin(phi), -np.sin(theta)], axis=-1)
    return n, np.cos(psi)[..., None] * first + np.sin(psi)[..., None] * np.cross(n, first)


#: every combination of Euler angles in steps of 7.5 degrees; n and m are axes, so half a turn of each is enough
GRID = np.stack(np.meshgrid(*[np.radians(np.arange(3.75, 180, 7.5))] * 3, indexing="ij"), axis=-1).reshape(-1, 3)


def brute(function, largest: bool) -> float:
    """Global optimum over n and m together: a full grid, then scipy's simplex from its two best points."""
    sign = -1.0 if largest else 1.0
    every = sign * function(*axes_of(GRID))
    starts = GRID[np.argsort(every)[:2]]
    return sign * min(
        minimize(lambda angles: float(sign * function(*axes_of(angles[None]))[0]), start, method="Nelder-Mead", tol=1e-10).fun
        for start in starts
    )


@pytest.mark.parametrize("laue", LAUE_CLASSES)
@pytest.mark.parametrize("largest", [False, True])
def test_against_a_full_grid_and_a_simplex_search(laue, largest):
    """Brute force over n and m together: m is not eliminated here."""
    s = np.linalg.inv(rotate_matrix(random_rotation(np.random.default_rng(8)), mandel(BY_LAUE_CLASS[laue])))
    index = int(largest)
    cases = (
        (young, lambda n, m: young(s, n)),
        (lambda m, n: shear_range(m, n)[index], lambda n, m: shear(s, n, m)),
        (lambda m, n: poisson_range(m, n)[index], lambda n, m: poisson(s, n, m)),
    )
    for quantity, plain in cases:
        found = search(quantity, s, NO_DRAWS, largest)
        expected = brute(plain, largest)
        assert found.value.value == pytest.approx(expected, rel=1e-6, abs=1e-9)
        assert quantity(s[None], found.direction[None, None])[0, 0] == pytest.approx(found.value.value, rel=1e-12)


@pytest.mark.parametrize("entry", [*BY_LAUE_CLASS.values(), "urea_FZ1970", "Zn_Alers1958", "CsSCN_1983", "CCl4_Ia"])
def test_no_random_direction_beats_an_extreme(entry):
    """A published tensor of every class and the most uneven ones of the collection, 5,000 random directions."""
    s = np.linalg.inv(mandel(entry))
    n = np.random.default_rng(0).normal(size=(5_000, 3))
    n /= np.linalg.norm(n, axis=1, keepdims=True)
    for quantity, largest in (
        (young, True),
        (young, False),
        (lambda m, n: shear_range(m, n)[0], False),
        (lambda m, n: shear_range(m, n)[1], True),
        (lambda m, n: poisson_range(m, n)[0], False),
        (lambda m, n: poisson_range(m, n)[1], True),
    ):
        found = search(quantity, s, NO_DRAWS, largest).value.value
        sampled = quantity(s, n)
        spread = np.ptp(sampled)
        best = sampled.max() if largest else sampled.min()
        assert found >= best - 1e-9 * spread if largest else found <= best + 1e-9 * spread
        assert found == pytest.approx(best, rel=0, abs=0.02 * spread + 1e-12)


def test_cubic_extremes_of_the_shear_modulus_are_its_two_constants():
    """For a cubic crystal the extremes are C44 and (C11 - C12)/2; their ratio is Zener's. Published, seen: krypton A 2.704(13),
    periclase (C11 - C12)/2 100.4(1) GPa."""
    for entry in ("Kr_116K", "MgO_1976", "NaCl", "Si_CRC"):
        voigt = stiffness_to_voigt(mandel(entry))
        s = np.linalg.inv(mandel(entry))
        low = search(lambda m, n: shear_range(m, n)[0], s, NO_DRAWS, False).value.value
        high = search(lambda m, n: shear_range(m, n)[1], s, NO_DRAWS, True).value.value
        expected = sorted([voigt[3, 3], 0.5 * (voigt[0, 0] - voigt[0, 1])])
        assert (low, high) == pytest.approx(tuple(expected), rel=1e-9)
        if entry == "Kr_116K":
            assert high / low == pytest.approx(2.704, rel=0, abs=0.013)
        if entry == "MgO_1976":
            assert low == pytest.approx(100.4, rel=0, abs=0.1)


def test_auxetic_cubic_metal():
    """Copper stretched along [110] grows along [1-10] and thins along [001]: -0.135 and 0.82 (closed forms in S11, S12, S44;
    the effect: Milstein & Huang, Phys. Rev. B 19, 2030, 1979)."""
    s11, s12, s44 = (np.linalg.inv(stiffness_to_voigt(mandel("Cu_textbook")))[i] for i in ((0, 0), (0, 1), (3, 3)))
    common = 2 * s11 + 2 * s12 + s44
    s = np.linalg.inv(mandel("Cu_textbook"))
    low = search(lambda m, n: poisson_range(m, n)[0], s, NO_DRAWS, False).value.value
    high = search(lambda m, n: poisson_range(m, n)[1], s, NO_DRAWS, True).value.value
    assert low == pytest.approx(-(2 * s11 + 2 * s12 - s44) / common, rel=1e-9)
    assert high == pytest.approx(-4 * s12 / common, rel=1e-9)


def test_preferred_directions_name_shared_extremes():
    """In a hexagonal crystal every direction at one angle to c is as good; on a cube, the face normals."""
    s = np.linalg.inv(mandel("Si_CRC"))
    preferred = np.array([[1.0, 0, 0], [0, 1, 0]])
    assert search(young, s, NO_DRAWS, False, preferred).direction == pytest.approx([1, 0, 0], abs=0)
    assert np.abs(search(young, s, NO_DRAWS, True, preferred).direction) == pytest.approx(np.ones(3) / 3**0.5, abs=1e-6)


@pytest.mark.parametrize("laue", ["-1", "2/m", "6/mmm"])
def test_sampled_errors_against_a_search_for_every_draw(laue):
    """The quick refinement of every draw against the full search for each of them."""
    rng = np.random.default_rng(4)
    center = mandel(BY_LAUE_CLASS[laue])
    noise = rng.normal(size=(6, 6, 6))
    draws = np.linalg.inv(center + 0.02 * np.abs(center).max() / 6 * (noise + noise.transpose(0, 2, 1)))
    for quantity, largest in ((young, True), (lambda m, n: poisson_range(m, n)[0], False)):
        found = search(quantity, np.linalg.inv(center), draws, largest)
        full = np.array([search(quantity, draw, NO_DRAWS, largest).value.value for draw in draws])
        np.testing.assert_allclose(found.drawn, full, rtol=2e-3, atol=0)
        assert found.value.error == pytest.approx(float(half_width(full)), rel=0.02)
