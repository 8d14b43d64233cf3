"""Checks of a set beyond the fault bench: files of one program, what the messages advise, status and exit codes."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from support.crystals import conventional, random_rotation
from support.faultbench import Faulty, clean_set, collected
from support.published import mandel
from support.returned import linear_law, write_returns

from strainkit.collect.gather import collect_run
from strainkit.collect.trust import judge_set
from strainkit.design.extend import finer_jobs
from strainkit.design.strainset import Wish
from strainkit.prepare.runfolder import plan_run, write_run
from strainkit.run.plan import job_folder
from strainkit.tensors.sixvectors import COMPONENTS, stress_from_voigt, stress_to_voigt


@pytest.fixture(scope="module")
def plan():
    return plan_run(conventional("mmm"))


def judged(plan, change, rng=0):
    clean = clean_set("mmm", np.random.default_rng(rng), noise=0.003, plan=plan)
    return collected(Faulty(plan, {k: change(i, v) for i, (k, v) in enumerate(clean.outputs.items())}, clean.clamped))


def codes(table):
    return [f.code for f in (*table.findings, *(f for r in table.records for f in r.findings))]


def test_two_kinds_of_file_of_one_program_are_one_program(plan):
    """A job whose vasprun.xml is cut falls back on its OUTCAR, where words for the same setting differ."""

    def change(i, v):
        kind = "VASP OUTCAR" if i == 2 else "VASP vasprun.xml"
        return replace(v, program=kind, settings={**v.settings, "dispersion": "IVDW 12" if i == 2 else "12"})

    assert codes(judged(plan, change)) == []


def test_formats_of_any_program_say_nothing_about_the_program(plan):
    assert codes(judged(plan, lambda i, v: replace(v, program="extended XYZ" if i % 2 else "GPAW gpw"))) == []


def test_without_a_majority_what_the_reference_has_counts(plan):
    table = judged(plan, lambda i, v: replace(v, settings={**v.settings, "cutoff_eV": 500.0 + 10 * (i % 2)}))
    (found,) = [f for f in table.findings if f.code == "mixed-settings"]
    assert "run again" in found.message
    assert [r.label for r in table.usable] == [job.label for job in plan.jobs[::2]]


def test_the_number_of_kpoints_is_compared_within_a_shape_only(plan):
    """Strain lowers symmetry, so that the reference needs fewer k-points with the same mesh."""

    def count(i, v):
        return replace(v, settings={**v.settings, "kpoint_count": str(20 if i == 0 else 100)})

    assert codes(judged(plan, count)) == []
    other = judged(
        plan, lambda i, v: replace(v, settings={**v.settings, "kpoint_count": str(20 if i == 0 else 100 + (i == 1))})
    )
    assert "mixed-settings" in codes(other)


@pytest.mark.parametrize("shuffled", [[0, 1, 2, 5, 3, 4], [0, 1, 2, 4, 3, 5], [0, 5, 4, 1, 3, 2]])
@pytest.mark.parametrize("sign", [1, -1])
def test_the_advice_mends_a_table(cli, tmp_path, plan, shuffled, sign):
    """Columns in another order, signs reversed: the finding names the options, and with them the right numbers come out."""
    run = tmp_path / "run"
    write_run(plan, run)
    write_returns(run, plan, linear_law(mandel("aragonite_Liu2005")))
    truth = collect_run(run, plan)
    rows = [f"{r.label}," + ",".join(repr(sign * float(r.stress[i])) for i in shuffled) for r in truth.records]
    path = tmp_path / "table.csv"
    path.write_text("label," + ",".join(COMPONENTS) + "\n" + "\n".join(rows) + "\n")
    out = cli("collect", run, "--table", path, "--json")
    assert out.code == 4
    assert {r["status"] for r in out.json["records"]} == {"suspect"}
    assert cli("fit", run).code == 5
    advice = " ".join(f["message"] for f in out.json["findings"])
    options = ["--stress-order", " ".join(COMPONENTS[i] for i in shuffled)]
    assert f'--stress-order "{options[1]}"' in advice
    if sign < 0:
        assert "--stress-sign compression" in advice
        options += ["--stress-sign", "compression"]
    mended = cli("collect", run, "--table", path, "--json", *options)
    assert mended.code == 0
    for record, expected in zip(mended.json["records"], truth.records, strict=True):
        np.testing.assert_allclose(record["stress_GPa"], expected.stress, rtol=1e-12, atol=1e-12)


@pytest.mark.parametrize(("unit", "factor"), [("kbar", 10.0), ("MPa", 1000.0), ("eV/A^3", 1 / 160.2176634)])
def test_the_unit_is_advised_from_the_energies(cli, tmp_path, plan, unit, factor):
    clean = clean_set("mmm", np.random.default_rng(5), noise=0.003, plan=plan)
    run = tmp_path / "run"
    write_run(plan, run)
    truth = collected(Faulty(plan, dict(clean.outputs), clean.clamped))
    rows = [
        f"{r.label}," + ",".join(repr(factor * float(x)) for x in r.stress) + f",{float(r.energy)!r}" for r in truth.records
    ]
    path = tmp_path / "table.csv"
    path.write_text("label," + ",".join(COMPONENTS) + ",energy_eV\n" + "\n".join(rows) + "\n")
    out = cli("collect", run, "--table", path, "--json")
    assert out.code == 4, out.err
    found = out.json["findings"]
    assert [f["code"] for f in found] == ["stress-unit", "unit-assumed"]
    assert f"--stress-unit {unit}" in found[0]["message"]
    assert cli("collect", run, "--table", path, "--stress-unit", unit).code == 0


def test_clamped_ions_that_moved_are_refused(tmp_path):
    run = tmp_path / "run"
    plan, _ = write_run(plan_run(conventional("mmm"), ions="clamped"), run)
    write_returns(run, plan, linear_law(mandel("aragonite_Liu2005")))
    assert len(collect_run(run, plan).usable) == len(plan.jobs)
    path = run / job_folder(plan.jobs[1].label) / "returned.extxyz"
    lines = path.read_text().splitlines()
    words = lines[2].split()
    lines[2] = " ".join([words[0], str(float(words[1]) + 0.02), *words[2:]])
    path.write_text("\n".join(lines) + "\n")
    record = collect_run(run, plan).records[1]
    assert record.status == "mismatch"
    assert record.findings[0].code == "ions-moved"


def test_two_finished_outputs_that_differ_are_named(tmp_path, plan):
    run = tmp_path / "run"
    write_run(plan, run)
    write_returns(run, plan, linear_law(mandel("aragonite_Liu2005")))
    folder = run / job_folder(plan.jobs[1].label)
    text = (folder / "returned.extxyz").read_text()
    (folder / "older.extxyz").write_text(text)
    assert codes(collect_run(run, plan)) == []
    write_returns(run, plan, linear_law(0.5 * mandel("aragonite_Liu2005")), only={plan.jobs[1].label})
    assert "outputs-disagree" in codes(collect_run(run, plan))


@pytest.mark.parametrize("laue", ["2/m", "4/m", "m-3m"])
def test_a_common_unit_shows_without_the_reference_too(laue):
    clean = clean_set(laue, np.random.default_rng(2), (0.005, 0.01), 0.003, 1.0)
    table = collected(Faulty(clean.plan, dict(clean.outputs), clean.clamped))
    for factor, wanted in ((1.0, set()), (10.0, {"stress-unit"})):
        records = [
            replace(r, status="missing", stress=None, energy=None)
            if r.label == "reference"
            else replace(r, stress=factor * r.stress)
            for r in table.records
        ]
        _, found = judge_set(clean.plan, records)
        assert {f.code for f in found} - {"reference-missing"} == wanted


@pytest.mark.parametrize("seed", range(6))
def test_no_healthy_job_is_blamed_for_a_stress_in_other_axes(seed):
    """s1 alone fixes a constant: a larger stress in its place leaves as much in GPa, and makes it look small."""
    rng = np.random.default_rng(seed)
    plan = plan_run(conventional("m-3m"), Wish("symmetric", (0.005,)))
    clean = clean_set("m-3m", rng, (0.005,), 0.003, 0.0, plan=plan)
    table = collected(Faulty(plan, dict(clean.outputs), clean.clamped))
    turn = random_rotation(rng)
    for label in ("s2-plus-0.5", "s2-minus-0.5"):
        records = [
            replace(r, stress=stress_to_voigt(turn @ stress_from_voigt(r.stress) @ turn.T)) if r.label == label else r
            for r in table.records
        ]
        after, _ = judge_set(plan, records)
        assert {r.label for r in after if r.status == "suspect"} <= {label}


def test_one_stress_a_thousand_times_too_small_is_found_without_energies():
    """In the class with most constants, where the model can follow most of a missing stress."""
    plan = plan_run(conventional("-1"), (0.01,))
    clean = clean_set("-1", np.random.default_rng(100), (0.01,), noise=0.003, energies=False, plan=plan)
    for label in ("s2-plus-1", "s4-plus-1", "s6-minus-1"):
        outputs = clean.outputs | {label: replace(clean.outputs[label], stress=1e-3 * clean.outputs[label].stress)}
        table = collected(Faulty(plan, outputs, clean.clamped))
        assert [r.label for r in table.records if r.status == "suspect"] == [label]


def test_a_finer_job_that_is_a_copy_of_its_normal_one_is_refused():
    plan = plan_run(conventional("mmm"), (0.01,))
    finer = finer_jobs(plan.jobs)
    plan = replace(plan, jobs=(*plan.jobs, *finer))
    clean = clean_set("mmm", np.random.default_rng(3), (0.01,), plan=plan)
    base = {job.label: next(j.label for j in plan.jobs if np.allclose(j.gradient, job.gradient)) for job in finer}
    outputs = clean.outputs | {label: clean.outputs[other] for label, other in base.items()}
    for copies in (base, {}):  # the file, and its numbers alone
        table = collected(Faulty(plan, outputs, clean.clamped, copies))
        assert {r.label for r in table.records if r.status == "suspect"} == set(base)
        assert "identical-outputs" in codes(table)


@pytest.mark.parametrize("energies", [True, False])
@pytest.mark.parametrize("change", [lambda s: 10.0 * s, lambda s: -s], ids=["unit", "sign"])
@pytest.mark.parametrize("laue", ["m-3m", "4/mmm", "-1"])
def test_both_jobs_of_one_size_are_named_together(laue, change, energies):
    """Who evaluated the jobs of 1 % read them in another unit: one change explains both, and no partner is accused."""
    plan = plan_run(conventional(laue), (0.005, 0.01))
    clean = clean_set(laue, np.random.default_rng(1), (0.005, 0.01), 0.003, 1.0, energies=energies, plan=plan)
    table = collected(Faulty(plan, dict(clean.outputs), clean.clamped))
    wrong = {"s1-plus-1", "s1-minus-1"}
    records = [replace(r, stress=change(r.stress)) if r.label in wrong else r for r in table.records]
    after, found = judge_set(plan, records)
    assert {r.label for r in after if r.status == "suspect"} == wrong
    assert all(label in found[0].message for label in wrong)


@pytest.mark.parametrize("laue", ["m-3m", "2/m", "-3"])
def test_exchanged_lines_of_a_table_are_named(laue):
    plan = plan_run(conventional(laue), (0.005, 0.01))
    clean = clean_set(laue, np.random.default_rng(1), (0.005, 0.01), 0.003, 1.0, energies=False, plan=plan)
    table = collected(Faulty(plan, dict(clean.outputs), clean.clamped))
    records = {r.label: replace(r, program="table", file="t.csv", rotation=None, forces=None) for r in table.records}
    one, other = records["s1-plus-0.5"], records["s1-plus-1"]
    records |= {"s1-plus-0.5": replace(one, stress=other.stress), "s1-plus-1": replace(other, stress=one.stress)}
    after, found = judge_set(plan, list(records.values()))
    assert "stress-exchanged" in {f.code for f in found}
    assert {r.label for r in after if r.status == "suspect"} == {"s1-plus-0.5", "s1-plus-1"}
