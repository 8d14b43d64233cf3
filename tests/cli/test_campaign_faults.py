"""What can go wrong with a campaign's disk, manifest and processes: one clear message, nothing lost."""

from __future__ import annotations

import errno
import json
import os
import socket
import subprocess
import sys
from pathlib import Path

import numpy as np
import pytest
from support.campaigns import write_all_returns, write_cells

from strainkit.run.campaign import load_campaign


@pytest.fixture
def cells(tmp_path):
    write_cells(tmp_path / "cells", np.random.default_rng(8), copies=2, classes=("m-3m", "m-3"))
    return tmp_path / "cells"


@pytest.fixture
def out(cli, cells, tmp_path):
    assert cli("prepare", cells, "--out", tmp_path / "out").code == 0
    write_all_returns(tmp_path / "out", np.random.default_rng(9))
    return tmp_path / "out"


def full_after(monkeypatch, writes: int) -> None:
    """A disk that takes so many more files: os.rename and os.replace, which end every write, then find no space."""
    left = [writes]

    def limited(original):
        def rename(source, target, *more, **named):
            if left[0] == 0:
                raise OSError(errno.ENOSPC, os.strerror(errno.ENOSPC), str(target))
            left[0] -= 1
            return original(source, target, *more, **named)

        return rename

    monkeypatch.setattr(os, "rename", limited(os.rename))
    monkeypatch.setattr(os, "replace", limited(os.replace))


def test_full_disk_while_preparing(cli, cells, tmp_path, monkeypatch):
    out = tmp_path / "out"
    with monkeypatch.context() as patch:
        full_after(patch, 3)  # the manifest and two run folders
        result = cli("prepare", cells, "--out", out)
    assert result.code == 3
    assert "(No space left on device); 2 of 4 run folders are written" in result.err
    assert "same command again" in result.err
    assert not (out / "joblist.txt").exists()
    again = cli("prepare", cells, "--out", out, "--json")
    assert (again.code, again.json["kept"], again.json["crystals"]) == (0, 2, 2)
    assert len((out / "joblist.txt").read_text().split()) == load_campaign(out).jobs


def test_no_room_is_said_before_anything_is_written(cli, cells, tmp_path, monkeypatch):
    import shutil

    usage = shutil.disk_usage(tmp_path)
    monkeypatch.setattr(shutil, "disk_usage", lambda path: usage._replace(free=10_000))
    result = cli("prepare", cells, "--out", tmp_path / "out")
    assert result.code == 3
    assert "MB are free" in result.err
    assert list((tmp_path / "out").iterdir()) == []


@pytest.mark.parametrize("command", ["collect", "fit"])
def test_full_disk_while_collecting_and_fitting(cli, out, monkeypatch, command):
    if command == "fit":
        cli("collect", out)
    with monkeypatch.context() as patch:
        full_after(patch, 5 if command == "collect" else 2)
        result = cli(command, out)
    assert result.code == 3
    assert "No space left on device" in result.err
    assert f"{command} again" in result.err
    assert [p for p in out.rglob(".*") if p.is_file()] == []  # neither halves of files nor the claim
    done = len(list(out.glob("runs/*/*/collected.json" if command == "collect" else "runs/*/*/stiffness.json")))
    assert 1 <= done < 4
    again = cli(command, out, "--json")
    assert (again.code, again.json["kept"]) == (0, done)


def test_a_place_that_cannot_be_written(cli, cells, tmp_path):
    """Below a file, so that it holds for root too."""
    (tmp_path / "file").write_text("")
    result = cli("prepare", cells, "--out", tmp_path / "file" / "out")
    assert result.code == 3
    assert "cannot be written (Not a directory)" in result.err


def test_a_read_only_folder(cli, out, monkeypatch):
    def refuse(*arguments, **named):
        raise OSError(errno.EROFS, os.strerror(errno.EROFS), "x")

    monkeypatch.setattr("tempfile.mkstemp", refuse)
    before = {p: p.read_bytes() for p in out.rglob("*") if p.is_file()}
    result = cli("collect", out)
    assert result.code == 3
    assert "cannot be written (Read-only file system); 0 of 4 crystals are done" in result.err
    assert {p: p.read_bytes() for p in out.rglob("*") if p.is_file()} == before


@pytest.mark.parametrize(
    "text",
    ["", "{", '{"schema": "strainkit/campaign/1"}', '{"schema": "other/1"}', "PATH"],
    ids=["empty", "cut", "bare", "other", "path"],
)
def test_a_corrupt_manifest(cli, cells, out, text):
    manifest = out / "campaign.json"
    good = manifest.read_text()
    if text == "PATH":  # somebody's idea of a run folder
        text = good.replace('"runs/001/', '"../runs/001/')
    manifest.write_text(text)
    for arguments in (("collect", out), ("fit", out), ("progress", out), ("derive", out), ("prepare", cells, "--out", out)):
        result = cli(*arguments)
        assert result.code == 3
        assert "campaign.json" in result.err
        assert "run folders are untouched" in result.err
    manifest.unlink()
    before = {p: p.stat().st_mtime_ns for p in out.glob("runs/**/*")}
    assert cli("prepare", cells, "--out", out).code == 0
    rebuilt = json.loads(manifest.read_text())
    assert rebuilt["crystals"] == json.loads(good)["crystals"]
    assert {p: p.stat().st_mtime_ns for p in before if p.is_file()} == {p: t for p, t in before.items() if p.is_file()}
    assert cli("collect", out).code == 0


def test_a_manifest_of_a_newer_strainkit(cli, out):
    path = out / "campaign.json"
    path.write_text(path.read_text().replace("strainkit/campaign/1", "strainkit/campaign/2"))
    result = cli("collect", out)
    assert result.code == 3
    assert "newer strainkit" in result.err


def test_commands_for_one_crystal_say_so(cli, out):
    for arguments in (("converge", out), ("evaluate", out, "--engine", "lj"), ("prepare", "--extend", out, "--more", 1)):
        result = cli(*arguments)
        assert result.code == 3
        assert "for one crystal" in result.err


def test_a_lost_run_folder_costs_itself_only(cli, out):
    lost = load_campaign(out).members[1]
    (out / lost.run).rename(out / "elsewhere")
    result = cli("collect", out, "--json")
    assert result.code == 4
    problems = {c["name"]: c["problem"] for c in result.json["crystals"] if "problem" in c}
    assert set(problems) == {lost.name}
    assert result.json["usable"] == load_campaign(out).jobs - lost.jobs


def test_a_second_collect_at_the_same_time_is_refused(cli, out):
    sleeper = subprocess.Popen([sys.executable, "-c", "input()"], stdin=subprocess.PIPE)
    claim = out / ".collect-at-work"
    claim.write_text(f"{sleeper.pid} {socket.gethostname()}")
    try:
        result = cli("collect", out)
        assert result.code == 3
        assert f"another strainkit collect is at work here (process {sleeper.pid})" in result.err
        assert str(claim) in result.err
    finally:
        sleeper.communicate(b"\n")
    assert cli("collect", out).code == 0  # a claim of a dead process is passed over
    assert not claim.exists()


def test_a_claim_of_another_machine_holds_while_it_is_fresh(cli, out):
    claim = out / ".collect-at-work"
    claim.write_text("17 node-of-somebody")
    assert "process 17 on node-of-somebody" in cli("collect", out).err
    os.utime(claim, (1, 1))
    assert cli("collect", out).code == 0


@pytest.mark.slow
def test_two_collects_at_once_leave_whole_tables(out):
    code = "from strainkit.cli.main import main; main()"
    both = [
        subprocess.Popen(
            [sys.executable, "-c", code, "collect", str(out)], stdout=subprocess.PIPE, stderr=subprocess.PIPE, text=True
        )
        for _ in range(2)
    ]
    ended = [(p.communicate()[1], p.returncode) for p in both]
    assert 0 in [code for _, code in ended]
    for err, code in ended:
        assert code == 0 or "another strainkit collect is at work" in err
    for member in load_campaign(out).members:
        table = json.loads((out / member.run / "stresses.json").read_text())
        assert table["usable"] == table["expected"] == member.jobs
    assert not Path(out / ".collect-at-work").exists()


def test_a_broken_plan_of_a_crystal_is_named_and_can_be_made_again(cli, cells, out):
    run = out / load_campaign(out).members[0].run
    for broken in ("{broken", "{}", '{"schema": "strainkit/strain-set/1", "jobs": 5}'):
        (run / "strain-set.json").write_text(broken)
        result = cli("prepare", cells, "--out", out)
        assert result.code == 3
        assert str(run / "strain-set.json") in result.err
        assert "move" in result.err
    run.rename(out.parent / "aside")
    assert cli("prepare", cells, "--out", out).code == 0
    assert (run / "strain-set.json").is_file()


def test_a_broken_campaign_is_made_again_beside_what_later_commands_wrote(cli, cells, out):
    cli("collect", out, "--export", out / "all.extxyz")
    cli("fit", out)
    assert cli("derive", out).code == 0
    kept = {path: path.read_bytes() for path in out.glob("*.*") if path.name != "campaign.json"}
    assert {path.name for path in kept} >= {"screening.csv", "screening.jsonl", "all.extxyz"}
    (out / "campaign.json").write_text("{broken")
    refused = cli("prepare", cells, "--out", out)
    assert refused.code == 3
    assert "move campaign.json away" in refused.err
    (out / "campaign.json").rename(out / "campaign.json.bad")
    assert cli("prepare", cells, "--out", out).code == 0
    assert len(load_campaign(out).members) == 4
    assert all(path.read_bytes() == content for path, content in kept.items() if path.name != "joblist.txt")
    assert cli("derive", out).code == 0


def test_a_folder_of_others_is_no_campaign(cli, cells, tmp_path):
    mine = tmp_path / "mine"
    mine.mkdir()
    (mine / "thesis.txt").write_text("mine")
    result = cli("prepare", cells, "--out", mine)
    assert result.code == 3
    assert "is not a campaign" in result.err
    assert [p.name for p in mine.iterdir()] == ["thesis.txt"]
