"""What did not change is not read again; two collections at once, renamed folders, links and hostile names."""

from __future__ import annotations

import bz2
import gzip
import json
import lzma
import os
import re
import shutil
import subprocess
import sys
import time

import numpy as np
import pytest
from support.crystals import conventional
from support.published import mandel
from support.returned import linear_law, write_return, write_returns

from strainkit.collect import gather, readjob
from strainkit.collect.gather import collect_run
from strainkit.prepare.runfolder import plan_run, write_run
from strainkit.run.plan import job_folder


@pytest.fixture
def made(tmp_path):
    run = tmp_path / "run"
    plan, _ = write_run(plan_run(conventional("mmm")), run)
    write_returns(run, plan, linear_law(mandel("aragonite_Liu2005")))
    return run, plan


@pytest.fixture
def reads(monkeypatch):
    """Names of the files that were parsed."""
    names = []
    real = readjob.read_returned

    def spy(path, reader, within=None):
        names.append(path.parent.name)
        return real(path, reader, within)

    monkeypatch.setattr(readjob, "read_returned", spy)
    return names


def age(run, seconds=60):
    """Files as if written a minute ago."""
    for path in run.rglob("*"):
        moment = time.time() - seconds
        os.utime(path, (moment, moment))


def same(one, other):
    assert json.dumps(one.to_dict()["records"]) == json.dumps(other.to_dict()["records"])


@pytest.mark.parametrize("young", [False, True])
def test_only_new_and_changed_files_are_read(made, reads, young):
    run, plan = made
    if not young:
        age(run)
    first = collect_run(run, plan)
    first.save(run)
    assert len(reads) == len(plan.jobs)
    reads.clear()
    same(collect_run(run, plan), first)
    assert reads == []
    path = run / job_folder(plan.jobs[2].label) / "returned.extxyz"
    text = path.read_text()
    before = path.stat()
    printed = re.search(r"energy=(\S+)", text)[1]
    other = f"{-2.0:.{len(printed) - 3}f}"  # as many characters
    path.write_text(text.replace(f"energy={printed}", f"energy={other}"))
    os.utime(path, ns=(before.st_atime_ns, before.st_mtime_ns + (0 if young else 1)))  # same size, and the same time if young
    assert collect_run(run, plan).records[2].energy == -2.0
    assert reads == [plan.jobs[2].label]


def test_another_plan_is_not_taken_for_the_old_one(made, reads):
    run, plan = made
    age(run)
    collect_run(run, plan).save(run)
    other = plan_run(conventional("mmm").deformed(np.diag([1.001, 1, 1])))
    assert {r.status for r in collect_run(run, other).records} == {"mismatch"}


def test_a_damaged_table_costs_time_only(made):
    run, plan = made
    first = collect_run(run, plan)
    first.save(run)
    (run / "stresses.json").write_text((run / "stresses.json").read_text()[:500])
    same(collect_run(run, plan), first)


def test_processes_and_order_make_no_difference(made):
    run, plan = made
    first = collect_run(run, plan)
    same(collect_run(run, plan, workers=2), first)


def test_two_collections_at_once_do_no_harm(made):
    run, plan = made
    code = (
        f"import sys; sys.argv = ['strainkit', 'collect', {str(run)!r}, '--quiet']; from strainkit.cli.main import main; main()"
    )
    both = [subprocess.Popen([sys.executable, "-c", code], stdout=subprocess.DEVNULL, env=os.environ) for _ in range(3)]
    assert [process.wait() for process in both] == [0, 0, 0]
    stored = json.loads((run / "stresses.json").read_text())
    assert stored["usable"] == len(plan.jobs)
    assert not [p.name for p in run.iterdir() if p.name.startswith(".")]


def test_renamed_folders_are_matched_by_their_cells(made, reads):
    run, plan = made
    before = collect_run(run, plan)
    reads.clear()
    for number, job in enumerate(reversed(plan.jobs)):
        (run / job_folder(job.label)).rename(run / "jobs" / f"{number:03d}")
    after = collect_run(run, plan)
    for first, second in zip(before.records, after.records, strict=True):
        np.testing.assert_allclose(second.stress, first.stress, rtol=0, atol=1e-12)
        assert [f.code for f in second.findings] == ["matched-by-cell"]
    age(run)
    collect_run(run, plan).save(run)
    reads.clear()
    assert len(collect_run(run, plan).usable) == len(plan.jobs)
    assert reads == []


def test_swapped_folders_are_sorted_out(made):
    run, plan = made
    before = collect_run(run, plan)
    one, two = (run / job_folder(plan.jobs[i].label) for i in (1, 4))
    one.rename(run / "jobs" / "x")
    two.rename(one)
    (run / "jobs" / "x").rename(two)
    for first, second in zip(before.records, collect_run(run, plan).records, strict=True):
        assert second.status == "done"
        np.testing.assert_allclose(second.stress, first.stress, rtol=0, atol=1e-12)


def test_a_copy_of_another_job_is_named(made):
    run, plan = made
    for source, target in ((1, 2), (3, 4)):
        a, b = (run / job_folder(plan.jobs[i].label) for i in (source, target))
        shutil.copy(a / "returned.extxyz", b / "returned.extxyz")
        record = collect_run(run, plan).records[target]
        assert record.status == "mismatch"
        found = next(f for f in record.findings if f.code == "output-of-other-job")
        assert plan.jobs[source].label in found.message


def test_a_foreign_output_is_reported(made):
    run, plan = made
    write_return(run / "jobs" / "else\x1b[2Jwhere\n", plan.crystal.deformed(np.diag([1.05, 1, 1])), np.eye(3))
    found = collect_run(run, plan).findings
    assert [f.code for f in found] == ["unmatched-output"]
    assert "\x1b" not in str(found[0])
    assert "\n" not in found[0].where


def test_names_cannot_steer_a_terminal(made, cli):
    run, plan = made
    folder = run / job_folder(plan.jobs[1].label)
    bad = os.fsencode(folder) + b"/\x1b]0;x\x07 \xff\xc2\x9b2J.extxyz"
    os.rename(folder / "returned.extxyz", bad)
    with open(bad, "a") as file:
        file.write("\x1b[2J")
    out = cli("collect", run)
    assert not any(c in out.out + out.err for c in "\x1b\x07\x9b")
    assert not any(c in cli("progress", run).out for c in "\x1b\x07\x9b")
    assert not any(c in (run / "stresses.json").read_text() for c in "\x1b\x07\x9b")


def test_a_linked_folder_is_not_followed_and_said(made, tmp_path):
    run, plan = made
    folder = run / job_folder(plan.jobs[1].label)
    folder.rename(tmp_path / "elsewhere")
    folder.symlink_to(tmp_path / "elsewhere")
    record = collect_run(run, plan).records[1]
    assert record.status == "missing"
    assert [f.code for f in record.findings] == ["link-not-followed"]


@pytest.mark.parametrize("left", [10, 60, 0.5, -1])
@pytest.mark.parametrize("packer", [gzip, lzma, bz2])
def test_a_packed_output_that_was_cut_is_to_be_copied_again(made, packer, left):
    run, plan = made
    folder = run / job_folder(plan.jobs[1].label)
    packed = packer.compress((folder / "returned.extxyz").read_bytes())
    (folder / "returned.extxyz").unlink()
    (folder / "returned.extxyz.xz").write_bytes(packed[: int(left * len(packed)) if isinstance(left, float) else left])
    record = collect_run(run, plan).records[1]
    assert record.status == "broken"
    assert [f.code for f in record.findings] == ["unreadable-output"]
    assert "copy it again" in record.findings[0].message
    (folder / "returned.extxyz.xz").write_bytes(packed)
    assert collect_run(run, plan).records[1].status == "done"


def test_an_empty_output_is_spoken_of(made):
    run, plan = made
    folder = run / job_folder(plan.jobs[1].label)
    (folder / "pw-2.out").touch()
    assert not collect_run(run, plan).records[1].findings  # beside one that counts
    (folder / "returned.extxyz").unlink()
    record = collect_run(run, plan).records[1]
    assert record.status == "missing"
    assert [f.code for f in record.findings] == ["job-unfinished"]
    assert "pw-2.out: is empty" in record.findings[0].message


def test_a_dead_worker_is_survived(made, monkeypatch):
    run, plan = made
    first = collect_run(run, plan)
    parent = os.getpid()
    real = gather._read_one

    def dies(*arguments):
        if os.getpid() != parent:
            os._exit(1)
        return real(*arguments)

    monkeypatch.setattr(gather, "_read_one", dies)
    same(collect_run(run, plan, workers=2), first)
