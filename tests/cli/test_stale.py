"""Outputs that changed after they were collected are spoken of by whatever is made from the table."""

from __future__ import annotations

import os
import shutil

import pytest
from support.files import SILICON, write

LATER = 60


@pytest.fixture
def run(cli, tmp_path):
    folder = tmp_path / "run"
    assert cli("prepare", write(tmp_path, "POSCAR", SILICON), "--out", folder, "--magnitude", 0.5, "--magnitude", 1).code == 0
    assert cli("evaluate", folder, "--engine", "tersoff", "--workers", "1").code == 0
    assert cli("collect", folder).code == 0
    return folder


def codes(cli, *command) -> set[str]:
    return {f["code"] for f in cli(*command, "--json").json["findings"]}


def test_changed_outputs_are_named_until_they_are_collected(cli, run, tmp_path):
    other = shutil.copytree(run, tmp_path / "other")
    commands = (["fit", run], ["derive", run], ["converge", run], ["report", run])
    for command in commands:
        assert "outputs-changed" not in codes(cli, *command)
    returned = run / "jobs/s1-plus-1/returned.extxyz"
    text = returned.read_text()
    returned.write_text(text.replace("energy=-", "energy=-1"))
    for command in commands:
        assert "outputs-changed" in codes(cli, *command)
    assert "strainkit collect" in " ".join(cli("fit", run).out.split())
    compared = cli("compare", run, other, "--json").json["crystals"]
    assert [any(f["code"] == "outputs-changed" for f in c["findings"]) for c in compared] == [True, False]
    cli("collect", run)
    assert "outputs-changed" not in codes(cli, "fit", run)


def test_an_output_that_came_later_counts(cli, run):
    place = run / "jobs/s1-plus-1"
    later = shutil.copy(place / "returned.extxyz", place / "again.extxyz")
    table = (run / "stresses.json").stat().st_mtime
    os.utime(later, (table + LATER, table + LATER))
    assert "outputs-changed" in codes(cli, "fit", run)
    later = place / "again.extxyz"
    later.write_text("notes\n")  # no output of a program
    os.utime(later, (table + LATER, table + LATER))
    assert "outputs-changed" not in codes(cli, "fit", run)


def test_moved_folders_without_outputs_and_copies_with_new_times_say_nothing(cli, run, tmp_path):
    copy = shutil.copytree(run, tmp_path / "copy", copy_function=shutil.copyfile)
    assert "outputs-changed" not in codes(cli, "fit", copy)
    for file in copy.glob("jobs/*/returned.extxyz"):
        file.unlink()
    assert "outputs-changed" not in codes(cli, "fit", copy)
    shutil.rmtree(copy / "jobs")
    assert "outputs-changed" not in codes(cli, "fit", copy)
    for command in ("derive", "converge", "report"):
        assert "outputs-changed" not in codes(cli, command, copy)


def test_a_campaign_tallies_them(cli, tmp_path):
    out = tmp_path / "campaign"
    assert cli("prepare", write(tmp_path, "POSCAR", SILICON), "--campaign", "--out", out).code == 0
    run = next(out.glob("runs/*/*"))
    assert cli("evaluate", run, "--engine", "tersoff", "--workers", "1").code == 0
    assert cli("collect", out).code == 0
    assert cli("fit", out, "--json").json["findings"].get("outputs-changed") is None
    returned = run / "jobs/s1-plus-1/returned.extxyz"
    returned.write_text(returned.read_text().replace("energy=-", "energy=-1"))
    assert cli("fit", out, "--json").json["findings"]["outputs-changed"] == 1  # the fit itself is kept
    assert cli("collect", out).code in (0, 4)
    assert cli("fit", out, "--json").json["findings"].get("outputs-changed") is None
