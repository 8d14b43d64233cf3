"""Sound speeds from phonopy's force constants against Christoffel speeds of the tensor of the same potential."""

from __future__ import annotations

import numpy as np
import pytest
from ase.build import bulk
from support.crystals import random_rotation
from support.phonons import phonopy_file

from strainkit.crystal.crystal import Crystal
from strainkit.dynamics.gamma import frequencies
from strainkit.dynamics.phonons import crystal_of, gamma_constants, load_phonopy, sound_speeds, strain_response
from strainkit.errors import InputError
from strainkit.evaluate.engines import Engine
from strainkit.tensors.stiffness import Stiffness

DIRECTIONS = np.array([[1.0, 0, 0], [1, 1, 0], [1, 1, 1], [1, 2, 3]])
DIRECTIONS /= np.linalg.norm(DIRECTIONS, axis=1)[:, None]


def christoffel(constants, density):
    """Speeds (m, 3), km/s, of a cubic crystal, from the Christoffel matrix written out."""
    c11, c12, c44 = constants
    voigt = np.zeros((6, 6))
    voigt[:3, :3] = c12
    voigt[range(3), range(3)] = c11
    voigt[range(3, 6), range(3, 6)] = c44
    tensor = Stiffness.from_voigt(voigt).tensor
    return np.array(
        [np.sqrt(np.linalg.eigvalsh(np.einsum("ijkl,j,l->ik", tensor, n, n)) * 1e9 / density) / 1e3 for n in DIRECTIONS]
    )


def test_silicon(tmp_path):
    """Tersoff silicon: 142.54, 75.38, 69.03 GPa (measured with ASE's Tersoff; published 142.5, 75.4, 69.0): within 1 %."""
    atoms = bulk("Si", a=5.432)
    study = load_phonopy(phonopy_file(tmp_path, atoms, Engine("tersoff"), 3))
    crystal = crystal_of(study)
    np.testing.assert_allclose(
        sound_speeds(study, DIRECTIONS), christoffel((142.54, 75.38, 69.03), crystal.density), rtol=1e-2, atol=0
    )
    optical, _ = frequencies(gamma_constants(study, Crystal.from_atoms(atoms)), crystal.numbers)
    assert optical[3] == pytest.approx(16.07, rel=1e-2)


def test_lennard_jones_solid(tmp_path):
    """Argon-like fcc, pair potential cut between two shells: phonopy's slopes against constants from the stresses."""
    from strainkit.evaluate.reference import relax_reference
    from strainkit.evaluate.single import evaluate_cell
    from strainkit.fit.regression import regress
    from strainkit.prepare.runfolder import plan_run
    from strainkit.tensors.sixvectors import stress_to_voigt
    from strainkit.units import EV_PER_A3_IN_GPA

    engine = Engine("lj", {"sigma": 3.4, "epsilon": 0.0104, "rc": 8.4})
    crystal = relax_reference(Crystal.from_atoms(bulk("Ar", "fcc", a=5.3)), engine, fmax=1e-8).crystal
    plan = plan_run(crystal, [0.002], "clamped")
    results = [evaluate_cell(crystal.deformed(job.gradient), engine, relax=False) for job in plan.strain_set]
    stresses = np.array([stress_to_voigt(r.stress) * EV_PER_A3_IN_GPA for r in results])
    gradients = np.array([job.gradient for job in plan.strain_set])
    constants = regress(gradients, stresses, plan.symmetry.rotations, plan.basis.matrices).values
    study = load_phonopy(phonopy_file(tmp_path, crystal.to_atoms(), engine, 5))
    axes = plan.frames["ieee"].rotation
    speeds = sound_speeds(study, DIRECTIONS @ axes)
    np.testing.assert_allclose(speeds, christoffel(constants, crystal.density), rtol=1e-2, atol=0)


def test_another_cell_and_broken_files_are_refused(tmp_path):
    path = phonopy_file(tmp_path, bulk("Si", a=5.432), Engine("tersoff"), 2)
    study = load_phonopy(path)
    with pytest.raises(InputError, match="another than that of the run"):
        gamma_constants(study, Crystal.from_atoms(bulk("Si", a=5.6)))
    with pytest.raises(InputError, match="no such file"):
        load_phonopy(tmp_path / "nothing.yaml")
    path.write_text("not: [a phonopy file")
    with pytest.raises(InputError, match="not readable by phonopy"):
        load_phonopy(path)


@pytest.mark.parametrize("seed", [0, 1])
def test_force_response_from_force_constants_and_from_strained_cells(tmp_path, seed):
    """Tersoff silicon, phonopy's cell turned against the run's: first moments of force constants and clamped cells."""
    from strainkit.crystal.operations import crystal_operations
    from strainkit.dynamics.internal import force_response
    from strainkit.evaluate.single import evaluate_cell
    from strainkit.prepare.runfolder import plan_run
    from strainkit.tensors.sixvectors import to_mandel

    engine, atoms = Engine("tersoff"), bulk("Si", a=5.432)
    turned = atoms.copy()
    turned.set_cell(atoms.cell.array @ random_rotation(np.random.default_rng(seed)).T, scale_atoms=True)
    crystal = Crystal.from_atoms(turned)
    found = strain_response(load_phonopy(phonopy_file(tmp_path, atoms, engine, 3)), crystal)
    jobs = plan_run(crystal, [0.0005], "clamped").strain_set
    forces = np.array([evaluate_cell(crystal.deformed(job.gradient), engine, relax=False).forces for job in jobs])
    expected = force_response(to_mandel(np.array([job.strain for job in jobs])), forces, crystal_operations(crystal, 1e-4))
    np.testing.assert_allclose(found, expected.matrix, rtol=0, atol=2e-3 * np.abs(expected.matrix).max())
