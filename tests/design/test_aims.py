"""Strain sets against brute force, group theory and the same crystal written down in other ways."""

from __future__ import annotations

from itertools import combinations_with_replacement

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.optimize import minimize
from support.crystals import conventional, random_rotation, random_unimodular, rewritten, supercell
from support.groups import COUNTS, LAUE_CLASSES, rotations

from strainkit.crystal.frames import crystal_frame
from strainkit.crystal.symmetry import find_symmetry, laue_class_of
from strainkit.design.aims import fewest, fewest_jobs, sharpest
from strainkit.design.criterion import a_criterion
from strainkit.design.exchange import SPARE
from strainkit.design.expect import expect
from strainkit.design.jobs import reference_job, strained_jobs
from strainkit.design.model import build_model
from strainkit.design.shapes import Shape, largest_principal_of, one_of_each
from strainkit.design.strainset import Wish, choose_strains
from strainkit.design.symmetric import most_symmetric, subgroups
from strainkit.errors import UsageError
from strainkit.tensors.constants import constant_basis
from strainkit.tensors.invariants import invariant_matrices, invariant_vectors
from strainkit.tensors.leastsquares import factorise
from strainkit.tensors.rotations import rotation6
from strainkit.tensors.sixvectors import from_mandel, to_mandel


def random_strains(rng, count):
    vectors = rng.normal(size=(count, 6))
    return vectors / largest_principal_of(vectors)[:, None]


def odd_rank(units, laue):
    """Rank of the map from constants to C:e for pairs, written out without the model."""
    basis = invariant_matrices(rotations(laue))
    return np.linalg.matrix_rank(np.vstack([(basis @ unit).T for unit in units]), tol=1e-9)


@pytest.mark.parametrize("laue", LAUE_CLASSES)
def test_fewest_is_what_brute_force_rank_says(laue):
    """That many generic pairs fix everything; one pair less never does, whatever the strains (200 random sets)."""
    constants, jobs = COUNTS[laue]
    assert fewest_jobs(rotations(laue)) == jobs
    rng = np.random.default_rng(0)
    assert odd_rank(random_strains(rng, jobs // 2), laue) == constants
    for _ in range(200):
        assert jobs == 2 or odd_rank(random_strains(rng, jobs // 2 - 1), laue) < constants


@pytest.mark.parametrize("laue", ["mmm", "4/m", "4/mmm", "-3m", "6/mmm", "m-3m"])
def test_one_job_less_leaves_a_constant_open_even_with_images(laue):
    """Any mix of pairs and of single jobs whose opposite is an image, one job fewer than claimed: rank always short."""
    group, (constants, jobs) = rotations(laue), COUNTS[laue]
    basis = invariant_matrices(group)
    rng = np.random.default_rng(1)
    q = rotation6(group)
    odd_spaces = []
    for members in subgroups(group):
        for half in subgroups(group):
            if half < members and 2 * len(half) == len(members):
                index = sorted(members)
                space = invariant_vectors(group[index], np.array([1.0 if g in half else -1.0 for g in index]))
                if space.shape[1]:
                    odd_spaces.append(space)
    assert odd_spaces
    assert len(q) == len(group)
    for pairs in range(jobs // 2):
        singles = jobs - 1 - 2 * pairs
        for choice in list(combinations_with_replacement(range(len(odd_spaces)), singles))[:150]:
            units = [*random_strains(rng, pairs), *(odd_spaces[i] @ rng.normal(size=odd_spaces[i].shape[1]) for i in choice)]
            assert np.linalg.matrix_rank(np.vstack([(basis @ u).T for u in units]), tol=1e-9) < constants


def brute_force_criterion(laue, count, starts):
    """Best A-criterion by a different optimiser on a different parametrisation: free symmetric matrices, scaled to size."""
    basis = invariant_matrices(rotations(laue))

    def criterion(flat):
        units = flat.reshape(count, 6)
        units = units / largest_principal_of(units)[:, None]
        a = np.concatenate([(basis @ unit) for unit in units], axis=1)
        values = np.linalg.eigvalsh(2.0 * a @ a.T)
        return np.inf if values[0] < 1e-9 else (1.0 / values).sum()

    rng = np.random.default_rng(2)
    best = np.inf
    for _ in range(starts):
        trials = [rng.normal(size=6 * count) for _ in range(60)]
        start = min(trials, key=criterion)
        options = {"maxfev": 250 * count * 6, "xatol": 1e-4, "fatol": 1e-6, "adaptive": True}
        best = min(best, minimize(criterion, start, method="Nelder-Mead", options=options).fun)
    return best


@pytest.mark.parametrize("laue", ["4/m", "4/mmm", "-3", "-3m", "6/m", "6/mmm", "m-3", "m-3m"])
def test_fewest_is_within_two_percent_of_brute_force(laue):
    group, count = rotations(laue), COUNTS[laue][1] // 2
    found = a_criterion(fewest(group), invariant_matrices(group))
    assert found <= 1.02 * brute_force_criterion(laue, count, 2)


@pytest.mark.slow
@pytest.mark.parametrize("laue", ["-1", "2/m", "mmm"])
def test_fewest_is_within_two_percent_of_brute_force_low_symmetry(laue):
    group, count = rotations(laue), COUNTS[laue][1] // 2
    found = a_criterion(fewest(group), invariant_matrices(group))
    assert found <= 1.02 * brute_force_criterion(laue, count, 4)


@pytest.mark.parametrize("laue", LAUE_CLASSES)
def test_fewest_keeps_its_size_and_spare_degrees_of_freedom(laue):
    group = rotations(laue)
    units = fewest(group)
    np.testing.assert_allclose(largest_principal_of(units), 1.0, rtol=0, atol=1e-9)
    jobs = [reference_job(), *strained_jobs(from_mandel(units), [0.01], group)]
    assert len(jobs) - 1 == COUNTS[laue][1]
    model = build_model(np.array([j.strain for j in jobs]), group, invariant_matrices(group))
    assert model.odd_degrees_of_freedom >= SPARE
    assert factorise(model.matrix).determined[model.constants].all()


def physical_set(crystal, wish):
    """The jobs of a crystal and its symmetry."""
    symmetry = find_symmetry(crystal)
    basis = constant_basis(symmetry.invariants, crystal_frame("ieee", symmetry).rotation)
    jobs, _ = choose_strains(crystal, symmetry, basis, wish)
    return jobs, symmetry


@pytest.mark.parametrize("aim", ["fewest", "symmetric"])
@pytest.mark.parametrize("laue", LAUE_CLASSES)
def test_the_same_crystal_gets_the_same_strains(laue, aim):
    """Turned, in another basis, in another order, as a supercell: the strains turn with the crystal."""
    start = conventional(laue)
    rng = np.random.default_rng(5)
    turn = random_rotation(rng)
    wish = Wish(aim, (0.01,))
    first, symmetry = physical_set(start, wish)
    others = [
        rewritten(start, turn, random_unimodular(rng), rng.permutation(len(start.numbers))),
        rewritten(supercell(start, (1, 2, 1)), turn, np.eye(3)),
    ]
    for other in others:
        second, _ = physical_set(other, wish)
        assert [job.label for job in second] == [job.label for job in first]
        for a, b in zip(first[1:], second[1:], strict=True):
            images = np.einsum("gij,jk,glk->gil", symmetry.rotations, a.strain, symmetry.rotations)
            back = turn.T @ b.strain @ turn
            assert np.abs(images - back).max(axis=(1, 2)).min() < 1e-8


@pytest.mark.parametrize("laue", LAUE_CLASSES)
def test_symmetric_set_costs_what_it_should(laue):
    """12 reference jobs in most classes (METHODS: m-3m 48 against 12, 2/m and mmm 16 and 12 against 12)."""
    group = rotations(laue)
    units = most_symmetric(group)
    shapes = [Shape.of(unit, group) for unit in units]
    cost = sum(shape.cost(len(group)) for shape in shapes)
    assert cost <= sum(Shape.of(unit, group).cost(len(group)) for unit in fewest(group)) + 1e-9
    if laue in ("m-3m", "m-3", "2/m", "mmm", "-1"):
        assert cost == pytest.approx(12)
    assert np.isfinite(a_criterion(units, invariant_matrices(group), [s.jobs for s in shapes]))


@pytest.mark.parametrize("laue", ["2/m", "4/mmm", "-3m", "m-3m"])
def test_symmetric_set_is_the_cheapest_of_random_sufficient_sets(laue):
    """Strains drawn from every fixed space of every subgroup, thrown together at random: none is cheaper."""
    group = rotations(laue)
    basis, constants = invariant_matrices(group), COUNTS[laue][0]
    claimed = sum(Shape.of(unit, group).cost(len(group)) for unit in most_symmetric(group))
    rng = np.random.default_rng(6)
    spaces = []
    for members in subgroups(group):
        index = sorted(members)
        halves = [h for h in subgroups(group) if h < members and 2 * len(h) == len(members)]
        for half in (members, *halves):
            space = invariant_vectors(group[index], np.array([1.0 if g in half else -1.0 for g in index]))
            if space.shape[1]:
                spaces.append(space)
    cheapest = np.inf
    for _ in range(500):
        units = []
        cost = 0.0
        while cost < claimed + 4:
            space = spaces[rng.integers(len(spaces))]
            unit = space @ rng.normal(size=space.shape[1])
            units.append(unit)
            cost += Shape.of(unit, group).cost(len(group))
            if np.linalg.matrix_rank(np.vstack([(basis @ u).T for u in units]), tol=1e-9) == constants:
                cheapest = min(cheapest, cost)
                break
    assert cheapest >= claimed - 1e-9
    assert np.isfinite(cheapest)


@pytest.mark.parametrize("laue", LAUE_CLASSES)
def test_more_jobs_are_sharper_and_never_more_than_asked(laue):
    group, least = rotations(laue), COUNTS[laue][1]
    basis = invariant_matrices(group)
    before = a_criterion(fewest(group), basis) * 1.03
    for jobs in (least, least + 1, 2 * least, 3 * least):
        units = sharpest(group, jobs)
        shapes = [Shape.of(unit, group) for unit in units]
        assert sum(shape.jobs for shape in shapes) <= jobs
        assert len(one_of_each(units, group)) == len(units), "a repeated strain brings nothing new"
        value = a_criterion(units, basis, [shape.jobs for shape in shapes])
        # in -1 and -3 no strain has its negative among its images, so an odd number of jobs gains nothing
        assert value < before or (jobs == least + 1 and laue in ("-1", "-3") and value <= before)
        before = value


def test_too_few_jobs_are_refused():
    with pytest.raises(UsageError, match="needs at least 12"):
        sharpest(rotations("-1"), 10)


@settings(max_examples=30, deadline=None)
@given(st.sampled_from(LAUE_CLASSES), st.integers(0, 10_000))
def test_shapes_obey_group_theory(laue, seed):
    """Orders divide, even and odd responses share the allowed space exactly, images exist only without a trivial part."""
    rng = np.random.default_rng(seed)
    group = rotations(laue)
    spaces = [np.eye(6), *(invariant_vectors(group[sorted(s)]) for s in subgroups(group))]
    space = spaces[rng.integers(len(spaces))]
    unit = space @ rng.normal(size=space.shape[1])
    shape = Shape.of(unit / largest_principal_of(unit), group)
    assert len(group) % len(shape.residual) == 0
    if shape.has_image:
        assert shape.even.shape[1] + shape.odd.shape[1] == shape.allowed.shape[1]
        assert np.abs(invariant_vectors(group).T @ shape.unit).max() < 1e-9
    laue_class_of(group[shape.residual])
    for g in rotation6(group[shape.residual]):
        np.testing.assert_allclose(g @ shape.allowed, shape.allowed, rtol=0, atol=1e-9)
    # an invariant stiffness answers a strain within the allowed space, oddly
    stiffness = np.tensordot(rng.normal(size=COUNTS[laue][0]), invariant_matrices(group), axes=1)
    answer = stiffness @ shape.unit
    np.testing.assert_allclose(shape.odd @ (shape.odd.T @ answer), answer, rtol=0, atol=1e-8 * (1 + np.abs(answer).max()))


@pytest.mark.parametrize("laue", LAUE_CLASSES)
def test_expected_errors_are_those_of_simulated_fits(laue):
    """Scatter of 2000 simulated fits against the promise made before anything is run."""
    from strainkit.fit.regression import Estimator

    group = rotations(laue)
    basis = constant_basis(invariant_matrices(group), np.eye(3))
    jobs = [reference_job(), *strained_jobs(from_mandel(fewest(group)), [0.01], group)]
    promise, findings = expect(jobs, group, basis, noise=0.05)
    assert not findings
    model = build_model(np.array([job.strain for job in jobs]), group, basis.matrices)
    rng = np.random.default_rng(7)
    truth = basis.stiffness(np.where([n[1] == n[2] for n in basis.names], 60.0, 10.0))
    exact = np.array([truth @ to_mandel(job.strain) for job in jobs])
    noisy = exact[:, :, None] + 0.05 * rng.normal(size=(*exact.shape, 2000))
    values = Estimator.of(model).estimate(model.rows(noisy))[model.constants].T
    np.testing.assert_allclose(np.std(values, axis=0), list(promise.standard_errors.values()), rtol=0.08, atol=0)
    bulk = (values @ np.einsum("aij->a", basis.matrices[:, :3, :3])) / 9
    assert np.std(bulk) == pytest.approx(promise.averages["bulk"], rel=0.08)


def test_target_error_raises_the_magnitude_then_adds_jobs():
    crystal = conventional("mmm")
    symmetry = find_symmetry(crystal)
    basis = constant_basis(symmetry.invariants, crystal_frame("ieee", symmetry).rotation)
    start = expect(choose_strains(crystal, symmetry, basis, Wish())[0], symmetry.rotations, basis)[0].largest
    jobs, notes = choose_strains(crystal, symmetry, basis, Wish(target_error=start / 1.5))
    assert len(jobs) - 1 == 6
    assert abs(jobs[1].magnitude) == pytest.approx(0.015)
    assert notes[0].code == "target-error"
    jobs, notes = choose_strains(crystal, symmetry, basis, Wish(target_error=start / 3))
    assert abs(jobs[1].magnitude) == pytest.approx(0.02)
    assert len(jobs) - 1 > 6
    assert "would exceed the ceiling of 2 %" in notes[0].message
    assert expect(jobs, symmetry.rotations, basis)[0].largest <= start / 3
    with pytest.raises(UsageError, match="needs more than 72 jobs"):
        choose_strains(crystal, symmetry, basis, Wish(target_error=start / 100))
    fixed, _ = choose_strains(crystal, symmetry, basis, Wish(magnitudes=(0.01,), target_error=start / 1.5))
    assert abs(fixed[1].magnitude) == pytest.approx(0.01)
    assert len(fixed) - 1 > 6


def test_a_set_that_cannot_estimate_its_noise_says_so():
    crystal = conventional("m-3m")
    symmetry = find_symmetry(crystal)
    basis = constant_basis(symmetry.invariants, crystal_frame("ieee", symmetry).rotation)
    jobs, _ = choose_strains(crystal, symmetry, basis, Wish("symmetric"))
    promise, findings = expect(jobs, symmetry.rotations, basis)
    assert promise.spare == 0
    assert [f.code for f in findings] == ["few-spare-degrees"]
    assert "cannot estimate its own noise" in findings[0].message


@pytest.mark.parametrize(
    "wish",
    [{"aim": "best"}, {"jobs": 3}, {"aim": "sharpest"}, {"target_error": -1.0}, {"noise": 0.0}],
)
def test_impossible_wishes(wish):
    with pytest.raises(UsageError):
        Wish(**wish)


@pytest.mark.parametrize("laue", LAUE_CLASSES)
def test_laue_class_of_a_group(laue):
    assert laue_class_of(rotations(laue)) == laue


def test_number_of_subgroups():
    """Subgroups of the cubic rotation group O (isomorphic to S4): 30; of D6: 16; of T (A4): 10 (textbook group theory)."""
    assert [len(subgroups(rotations(laue))) for laue in ("m-3m", "6/mmm", "m-3")] == [30, 16, 10]
