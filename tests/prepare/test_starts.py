"""Starting positions from force constants and from finished jobs."""

from __future__ import annotations

import numpy as np
import pytest
from ase.build import bulk
from support.crystals import random_rotation, random_unimodular, rewritten
from support.phonons import phonopy_file

from strainkit.crystal.crystal import Crystal
from strainkit.evaluate.engines import Engine
from strainkit.evaluate.single import evaluate_cell
from strainkit.prepare.runfolder import plan_run
from strainkit.prepare.starts import learned_starts
from strainkit.prepare.writers import FORMATS
from strainkit.run.plan import load_plan

TERSOFF = Engine("tersoff")


def first_force(plan, job):
    forces = evaluate_cell(plan.starting_cell(job), TERSOFF, relax=False).forces
    return np.linalg.norm(forces, axis=1).max()


def moved_in(plan, jobs):
    """Displacements from the affine places of relaxed jobs, in the deformed cells."""
    found = {}
    for job in jobs:
        cell = plan.crystal.deformed(job.gradient)
        shift = evaluate_cell(cell, TERSOFF, relax=True, fmax=1e-7).crystal.positions - cell.positions
        found[job.label] = (shift - shift.mean(axis=0)) @ cell.lattice
    return found


@pytest.mark.parametrize("seed", [0, 1])
def test_a_larger_strain_starts_where_a_smaller_one_points(seed):
    """Silicon's sublattices: the first force falls by an order of magnitude."""
    rng = np.random.default_rng(seed)
    crystal = rewritten(Crystal.from_atoms(bulk("Si", a=5.432)), random_rotation(rng), random_unimodular(rng))
    small, large = plan_run(crystal, [0.002]), plan_run(crystal, [0.006])
    known = moved_in(small, small.strain_set[1:])
    starts = learned_starts(small, large.strain_set[1:], known)
    for job in large.strain_set[1:]:
        plain = first_force(large, job)
        learned = evaluate_cell(
            Crystal(crystal.deformed(job.gradient).lattice, starts[job.label], crystal.numbers), TERSOFF, relax=False
        ).forces
        assert np.linalg.norm(learned, axis=1).max() < 0.1 * plain


def test_the_same_cell_starts_where_it_ended():
    plan = plan_run(Crystal.from_atoms(bulk("Si", a=5.432)), [0.01])
    known = moved_in(plan, plan.strain_set[1:2])
    starts = learned_starts(plan, plan.strain_set[1:2], known)
    cell = plan.crystal.deformed(plan.strain_set[1].gradient)
    forces = evaluate_cell(Crystal(cell.lattice, starts["s1-plus-1"], cell.numbers), TERSOFF, relax=False).forces
    assert np.abs(forces).max() < 1e-5


def test_nothing_is_learned_for_clamped_ions():
    plan = plan_run(Crystal.from_atoms(bulk("Si", a=5.432)), [0.01], "clamped")
    assert learned_starts(plan, plan.strain_set[1:], {"s1-plus-1": np.zeros((2, 3))}) == {}


def test_force_constants_on_the_command_line(cli, tmp_path):
    """prepare --force-constants: the first forces of the written cells fall by an order of magnitude."""
    atoms = bulk("Si", a=5.432)
    path = phonopy_file(tmp_path, atoms, TERSOFF, 3)
    cell = tmp_path / "si.extxyz"
    cell.write_text(FORMATS["extxyz"].write(Crystal.from_atoms(atoms), "silicon"))
    for name, options in (("plain", ()), ("predicted", ("--force-constants", path))):
        assert cli("prepare", cell, "--out", tmp_path / name, *options).code == 0
    plain, predicted = (load_plan(tmp_path / name) for name in ("plain", "predicted"))
    for job in plain.strain_set[1:]:
        assert first_force(predicted, job) < 0.15 * first_force(plain, job)
    refused = cli("prepare", cell, "--out", tmp_path / "c", "--ions", "clamped", "--force-constants", path)
    assert refused.code == 2
    assert "clamped ions do not move" in refused.err


def test_an_extension_starts_from_what_was_collected(cli, tmp_path):
    cell, run = tmp_path / "si.extxyz", tmp_path / "run"
    cell.write_text(FORMATS["extxyz"].write(Crystal.from_atoms(bulk("Si", a=5.432)), "silicon"))
    assert cli("prepare", cell, "--out", run, "--magnitude", 0.5).code == 0
    assert cli("evaluate", run, "--engine", "tersoff").code == 0
    assert cli("collect", run).code == 0
    done = cli("prepare", "--extend", run, "--magnitude", 1)
    assert "2 of them start from what the ions did in the 3 jobs collected" in done.err
    words = " ".join(done.out.split())
    assert "atoms moved with the lattice in 2 jobs, ions where they are expected to go in 2 jobs" in words
    plan = load_plan(run)
    for job in plan.jobs[-2:]:
        assert first_force(plan, job) < 0.1 * first_force(plan_run(plan.crystal, [0.01]), job)
