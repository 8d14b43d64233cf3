"""From job folders to the stress table: frames, other cells, continuations, what is not looked at."""

from __future__ import annotations

import os

import numpy as np
import pytest
from support.crystals import conventional, random_rotation
from support.published import mandel
from support.returned import linear_law, write_return, write_returns

from strainkit.collect.gather import collect_run
from strainkit.collect.table import load_table
from strainkit.crystal.crystal import Crystal
from strainkit.errors import InputError
from strainkit.prepare.runfolder import plan_run, write_run
from strainkit.run.plan import job_folder
from strainkit.tensors.sixvectors import stress_from_voigt


@pytest.fixture
def made(tmp_path):
    run = tmp_path / "run"
    plan, _ = write_run(plan_run(conventional("mmm")), run)
    write_returns(run, plan, linear_law(mandel("aragonite_Liu2005")))
    return run, plan


def test_rotated_outputs_give_the_same_table(made):
    run, plan = made
    before = collect_run(run, plan)
    write_returns(run, plan, linear_law(mandel("aragonite_Liu2005")), np.random.default_rng(0))
    after = collect_run(run, plan)
    for first, second in zip(before.records, after.records, strict=True):
        np.testing.assert_allclose(second.stress, first.stress, rtol=0, atol=1e-10)


def test_table_round_trip(made):
    run, plan = made
    table = collect_run(run, plan)
    table.save(run)
    again = load_table(run)
    for first, second in zip(table.records, again.records, strict=True):
        np.testing.assert_array_equal(first.stress, second.stress)
        assert first.label == second.label
    lines = (run / "stresses.csv").read_text().splitlines()
    assert lines[0].startswith("label,status,xx_GPa,yy_GPa,zz_GPa,yz_GPa,xz_GPa,xy_GPa,energy_eV")
    assert len(lines) == 1 + len(plan.jobs)


def test_forces_and_displacements_come_back_in_the_planned_frame(made):
    """An atom moved by a known vector and a known force, in an output turned at random."""
    run, plan = made
    job = plan.jobs[1]
    cell = plan.crystal.deformed(job.gradient)
    n = len(cell.numbers)
    moved = np.random.default_rng(1).normal(size=(n, 3)) * 0.05
    forces = np.random.default_rng(2).normal(size=(n, 3))
    turn = random_rotation(np.random.default_rng(3))
    fractions = cell.positions + moved @ np.linalg.inv(cell.lattice) + np.random.default_rng(4).integers(-2, 3, (n, 3))
    atoms = Crystal(cell.lattice @ turn.T, fractions, cell.numbers).to_atoms()
    from ase.calculators.singlepoint import SinglePointCalculator
    from ase.io import write

    atoms.calc = SinglePointCalculator(atoms, energy=0.0, forces=forces @ turn.T, stress=np.zeros(6))
    write(run / job_folder(job.label) / "returned.extxyz", atoms)
    collect_run(run, plan).save(run)
    record = load_table(run, ions=True).records[1]
    np.testing.assert_allclose(record.displacements, moved - moved.mean(axis=0), rtol=0, atol=1e-6)
    np.testing.assert_allclose(record.forces, forces, rtol=0, atol=1e-6)
    assert load_table(run).records[1].forces is None
    (run / job_folder(job.label) / "returned.extxyz").write_text("")
    collect_run(run, plan).save(run)
    assert load_table(run, ions=True).records[1].forces is None


@pytest.mark.parametrize(
    ("change", "message"),
    [
        (lambda c: c.deformed(np.diag([1.003, 1, 1])), "differs from the planned one by a strain of 0.3 %"),
        (lambda c: Crystal(c.lattice, c.positions[:-1], c.numbers[:-1]), "atoms instead of"),
        (lambda c: Crystal(c.lattice, c.positions, np.where(c.numbers == 8, 16, c.numbers)), "another composition"),
        (lambda c: Crystal(c.lattice, c.positions, c.numbers[::-1]), "not on the planned sites in any order"),
    ],
)
def test_output_of_another_cell_is_not_used(made, change, message):
    run, plan = made
    job = plan.jobs[1]
    write_return(run / job_folder(job.label), change(plan.crystal.deformed(job.gradient)), np.eye(3))
    record = collect_run(run, plan).records[1]
    assert record.status == "mismatch"
    assert message in record.findings[0].message


def test_latest_finished_continuation_counts(made):
    run, plan = made
    job = plan.jobs[1]
    folder = run / job_folder(job.label)
    (folder / "returned.extxyz").unlink()
    cell = plan.crystal.deformed(job.gradient)
    for number, pressure in ((2, 2.0), (10, 10.0), (9, 9.0)):
        write_return(folder, cell, pressure * np.eye(3))
        (folder / "returned.extxyz").rename(folder / f"part-{number}.extxyz")
    assert collect_run(run, plan).records[1].stress[0] == pytest.approx(10.0)
    text = (folder / "part-10.extxyz").read_text()
    (folder / "part-10.extxyz").write_text(text.replace("energy=-1.0", "energy=-1.0 converged=F"))
    assert collect_run(run, plan).records[1].stress[0] == pytest.approx(9.0)


def test_a_broken_job_does_not_stop_the_others(made):
    run, plan = made
    folder = run / job_folder(plan.jobs[2].label)
    text = (folder / "returned.extxyz").read_text()
    (folder / "returned.extxyz").write_text(text[: len(text) // 2])
    table = collect_run(run, plan)
    assert [r.status for r in table.records].count("done") == len(plan.jobs) - 1
    assert table.records[2].findings[0].code == "unreadable-output"


def test_links_out_of_the_run_folder_and_hidden_files_are_not_followed(made, tmp_path):
    run, plan = made
    folder = run / job_folder(plan.jobs[1].label)
    (folder / "returned.extxyz").rename(tmp_path / "elsewhere.extxyz")
    os.symlink(tmp_path / "elsewhere.extxyz", folder / "returned.extxyz")
    assert collect_run(run, plan).records[1].status == "missing"


def test_written_cells_are_not_taken_for_outputs(tmp_path):
    run = tmp_path / "run"
    plan, _ = write_run(plan_run(conventional("m-3m")), run, ["extxyz", "poscar", "cif"])
    assert {r.status for r in collect_run(run, plan).records} == {"missing"}


def test_no_table_and_damaged_table(made):
    run, _ = made
    with pytest.raises(InputError, match="no stress table yet"):
        load_table(run)
    (run / "stresses.json").write_text('{"schema": "strainkit/stresses/1", "records": [{}]}')
    with pytest.raises(InputError, match="damaged"):
        load_table(run)


def test_frame_and_sign_of_the_table(made):
    """The record is Cauchy stress in the planned frame: recomputed here with four indices for one turned output."""
    run, plan = made
    job = plan.jobs[3]
    sigma = np.array([[1.0, 0.2, 0.3], [0.2, 2.0, 0.4], [0.3, 0.4, -3.0]])
    turn = random_rotation(np.random.default_rng(5))
    write_return(run / job_folder(job.label), plan.crystal.deformed(turn @ job.gradient), turn @ sigma @ turn.T)
    record = collect_run(run, plan).records[3]
    np.testing.assert_allclose(stress_from_voigt(record.stress), sigma, rtol=0, atol=1e-10)
