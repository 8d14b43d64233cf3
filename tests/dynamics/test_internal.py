"""Relaxed-ion stiffness without relaxing, against published numbers and against explicit relaxation."""

from __future__ import annotations

import numpy as np
import pytest
from ase.build import bulk
from support.crystals import conventional, random_rotation, random_unimodular, rewritten

from strainkit.crystal.crystal import Crystal
from strainkit.crystal.operations import crystal_operations
from strainkit.dynamics.gamma import displacements, force_constants, frequencies
from strainkit.dynamics.internal import force_response, internal_strain
from strainkit.errors import NoTensorError
from strainkit.evaluate.engines import Engine
from strainkit.evaluate.reference import relax_reference
from strainkit.evaluate.single import evaluate_cell
from strainkit.fit.regression import regress
from strainkit.prepare.runfolder import plan_run
from strainkit.tensors.rotations import rotation6
from strainkit.tensors.sixvectors import stress_to_voigt, to_mandel
from strainkit.units import EV_PER_A3_IN_GPA

TERSOFF = Engine("tersoff")


def silicon(seed=None, repeats=(1, 1, 1)):
    """Diamond silicon at the Tersoff lattice constant, 5.4320 A, optionally turned and in another basis."""
    crystal = Crystal.from_atoms(bulk("Si", a=5.43200) * repeats, name="silicon")
    if seed is None:
        return crystal
    rng = np.random.default_rng(seed)
    return rewritten(crystal, random_rotation(rng), random_unimodular(rng))


def constants_of(crystal, engine, symprec=1e-4, distance=0.005):
    moved = displacements(crystal, symprec, distance)
    rest = evaluate_cell(crystal, engine, relax=False).forces
    forces = np.array([evaluate_cell(m.apply(crystal), engine, relax=False).forces - rest for m in moved])
    return force_constants(crystal, moved, forces, symprec)


def clamped(crystal, engine, magnitude=0.002):
    """Clamped-ion constants, basis, and response of the forces to strain."""
    plan = plan_run(crystal, [magnitude], "clamped")
    results = [evaluate_cell(crystal.deformed(job.gradient), engine, relax=False) for job in plan.strain_set]
    stresses = np.array([stress_to_voigt(r.stress) * EV_PER_A3_IN_GPA for r in results])
    gradients = np.array([job.gradient for job in plan.strain_set])
    fit = regress(gradients, stresses, plan.symmetry.rotations, plan.basis.matrices)
    strains = to_mandel(np.array([job.strain for job in plan.strain_set]))
    found = force_response(strains, np.array([r.forces for r in results]), crystal_operations(crystal, 1e-4))
    return fit.values, plan.basis, found.matrix, found.noise


def relaxed_by_formula(crystal, engine, magnitude=0.002):
    values, basis, response, _ = clamped(crystal, engine, magnitude)
    answer = internal_strain(crystal, constants_of(crystal, engine), response)
    return values, basis.values(basis.stiffness(values) - answer.correction), answer, basis


@pytest.mark.parametrize("seed", [None, 0])
def test_tersoff_silicon(seed):
    """C44 119 GPa clamped, 69 relaxed (Tersoff, Phys. Rev. B 39, 5566, 1989); 69.0 (npj Comput. Mater. 10, 218, 2024)."""
    before, after, _, _ = relaxed_by_formula(silicon(seed), TERSOFF)
    assert before[2] == pytest.approx(118.8, rel=2e-3)
    assert after == pytest.approx([142.5, 75.4, 69.0], rel=1e-3)


def test_a_supercell_gives_the_same():
    _, after, _, _ = relaxed_by_formula(silicon(repeats=(1, 1, 2)), TERSOFF)
    assert after == pytest.approx([142.5, 75.4, 69.0], rel=1e-3)


def test_explicit_relaxation_agrees_and_the_ions_go_where_predicted():
    """The two sublattices of strained silicon, relaxed with the same engine, against u = K^+ L eta."""
    crystal = silicon()
    _, _, answer, _ = relaxed_by_formula(crystal, TERSOFF)
    plan = plan_run(crystal, [0.002])
    job = plan.strain_set[1]
    relaxed = evaluate_cell(crystal.deformed(job.gradient), TERSOFF, relax=True, fmax=1e-7).crystal
    shift = (relaxed.positions - crystal.positions) @ crystal.lattice
    predicted = answer.displacements @ to_mandel(job.strain)
    np.testing.assert_allclose(shift[1] - shift[0], predicted[1] - predicted[0], rtol=0, atol=2e-2 * np.abs(predicted).max())


def test_frequencies_of_silicon():
    """Optical mode of Tersoff silicon at q = 0 against the curvature of the energy along the sublattice shift."""
    crystal = silicon()
    found, _ = frequencies(constants_of(crystal, TERSOFF), crystal.numbers)
    np.testing.assert_allclose(found[:3], 0.0, atol=1e-2)
    step = 0.01
    energies = []
    for side in (-1, 0, 1):
        moved = displacements(crystal, 1e-4)[0]
        vector = np.array([side * step, 0, 0])
        energies.append(evaluate_cell(type(moved)(0, vector).apply(crystal), TERSOFF, relax=False).energy)
    curvature = (energies[0] - 2 * energies[1] + energies[2]) / step**2
    # K = 2 mu omega^2 of the relative motion, mu = m/2: omega^2 = 2 curvature / m; in SI by CODATA constants
    mass = 28.085 * 1.66053907e-27
    expected = np.sqrt(2 * curvature * 1.602176634e-19 * 1e20 / mass) / (2 * np.pi) / 1e12
    assert found[3:] == pytest.approx([expected] * 3, rel=2e-3)


def test_force_response_turns_with_the_crystal_and_sums_to_zero():
    """No net force, and the response of the turned crystal is the turned response: indices written out with four loops."""
    crystal = silicon()
    _, _, response, noise = clamped(crystal, TERSOFF)
    assert noise < 1e-4
    np.testing.assert_allclose(response.reshape(2, 3, 6).sum(axis=0), 0.0, atol=1e-6)
    turn = random_rotation(np.random.default_rng(3))
    _, _, turned, _ = clamped(rewritten(crystal, turn, np.eye(3)), TERSOFF)
    from strainkit.tensors.sixvectors import from_mandel

    first = np.moveaxis(from_mandel(response.reshape(2, 3, 6)), 0, 0)
    second = from_mandel(turned.reshape(2, 3, 6))
    np.testing.assert_allclose(np.einsum("ia,jb,kc,nabc->nijk", turn, turn, turn, first), second, rtol=0, atol=2e-3)


def test_an_unstable_reference_is_refused():
    """Two atoms on a slope of their own: a negative force constant, invented."""
    constants = np.kron(np.array([[1.0, -1.0], [-1.0, 1.0]]), np.diag([2.0, 2.0, -0.5]))
    with pytest.raises(NoTensorError, match="1 unstable"):
        internal_strain(silicon(), constants, np.zeros((6, 6)))


@pytest.mark.parametrize("laue", ["-1", "2/m", "mmm", "4/m", "-3m", "6/mmm", "m-3", "m-3m"])
@pytest.mark.parametrize("symmetrised", [False, True])
def test_noise_of_the_forces_is_found_again(laue, symmetrised):
    """Simulated forces: the estimated variance is chi-squared with the stated degrees of freedom, mean 1, variance 2 / dof."""
    rng = np.random.default_rng(7)
    crystal = rewritten(conventional(laue), random_rotation(rng), np.eye(3))
    operations = crystal_operations(crystal, 1e-3)
    jobs = plan_run(crystal, [0.01]).strain_set
    strains = to_mandel(np.array([job.strain for job in jobs]))
    n = len(crystal.numbers)
    estimates = []
    for _ in range(150):
        forces = 3e-3 * rng.normal(size=(len(jobs), n, 3))
        if symmetrised:
            forces = np.array([symmetric_forces(f, eta, operations) for f, eta in zip(forces, strains, strict=True)])
        found = force_response(strains, forces, operations)
        estimates.append(np.nan if found.noise is None else (found.noise / 3e-3) ** 2)
    if found.degrees_of_freedom < 1:
        assert np.isnan(estimates).all()
        return
    dof = found.degrees_of_freedom
    assert np.mean(estimates) == pytest.approx(1.0, abs=4 * (2 / dof / 150) ** 0.5)
    assert np.var(estimates) == pytest.approx(2 / dof, rel=4 * ((2 + 12 / dof) / 150) ** 0.5)


def symmetric_forces(forces, strain, operations):
    """Forces averaged over the operations that the strained cell keeps, as a program that symmetrises prints them."""
    keeps = np.abs(rotation6(operations.cartesian) @ strain - strain).max(axis=1) < 1e-9
    return operations.project(forces, keeps)


def test_too_few_strains_are_refused():
    crystal = silicon()
    strain = to_mandel(np.diag([0.01, 0.01, 0.01]))
    with pytest.raises(NoTensorError, match="do not determine the force response"):
        force_response(np.array([strain, -strain]), np.zeros((2, 2, 3)), crystal_operations(crystal, 1e-4))


def relaxed_explicitly(crystal, engine, magnitude, fmax):
    """Constants (n,) from strained cells whose ions an optimiser relaxed."""
    plan = plan_run(crystal, [magnitude])
    results = [evaluate_cell(plan.starting_cell(job), engine, relax=True, fmax=fmax) for job in plan.strain_set]
    stresses = np.array([stress_to_voigt(r.stress) * EV_PER_A3_IN_GPA for r in results])
    gradients = np.array([job.gradient for job in plan.strain_set])
    return regress(gradients, stresses, plan.symmetry.rotations, plan.basis.matrices).values


def test_hexagonal_silicon_explicit_relaxation_against_the_formula():
    """Lonsdaleite (6/mmm, four atoms, one free coordinate) on Tersoff: within 0.5 %, both at the same strain."""
    a = 5.432 / np.sqrt(2)
    atoms = bulk("SiSi", "wurtzite", a=a, c=a * np.sqrt(8 / 3), u=0.375)
    crystal = relax_reference(Crystal.from_atoms(atoms, name="hexagonal silicon"), TERSOFF, fmax=1e-6).crystal
    _, after, _, _ = relaxed_by_formula(crystal, TERSOFF, 0.002)
    assert len(after) == 5
    assert after == pytest.approx(relaxed_explicitly(crystal, TERSOFF, 0.002, 1e-7), rel=5e-3)


@pytest.mark.slow
def test_molecular_crystal_explicit_relaxation_against_the_formula(need):
    """Solid ammonia on GFN1-xTB, within 0.5 %; both at one strain, whose noise moves C11 by 1 % between strains."""
    need("tblite")
    from strainkit.crystal.read import read_crystal
    from strainkit.shipped import shipped_folder

    engine = Engine("gfn1-xtb", {"accuracy": 0.01})
    crystal = relax_reference(read_crystal(shipped_folder("sample_cells") / "ammonia.cif"), engine, fmax=2e-5).crystal
    before, after, _, _ = relaxed_by_formula(crystal, engine, 0.005)
    assert before[0] > 5 * after[0]
    assert after == pytest.approx(relaxed_explicitly(crystal, engine, 0.005, 1e-5), rel=5e-3)
