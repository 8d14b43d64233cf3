"""Output options do not destroy what a user has: files of others, the plan, the tables, the jobs."""

from __future__ import annotations

import shutil

import pytest
from support.files import SILICON, write


@pytest.fixture
def run(cli, tmp_path):
    folder = tmp_path / "run"
    assert cli("prepare", write(tmp_path, "POSCAR", SILICON), "--out", folder).code == 0
    assert cli("evaluate", folder, "--engine", "tersoff", "--workers", "1").code == 0
    assert cli("collect", folder).code == 0
    assert cli("fit", folder).code == 0
    return folder


OWN = ("strain-set.json", "stiffness.json", "stresses.json", "jobs/reference/POSCAR", "jobs/reference/returned.extxyz")


@pytest.mark.parametrize("command", [["report", "--force", "--out"], ["collect", "--export"], ["compare", "--force", "--html"]])
def test_nothing_of_a_run_is_replaced(cli, run, tmp_path, command):
    crystals = [run, shutil.copytree(run, tmp_path / "other")] if command[0] == "compare" else [run]
    kept = {path: path.read_bytes() for path in run.rglob("*") if path.is_file()}
    for name in (*OWN, "jobs/reference/new"):
        refused = cli(command[0], *crystals, *command[1:], run / name)
        assert refused.code == 3
        assert "belongs to the run" in refused.err
    assert kept == {path: path.read_bytes() for path in run.rglob("*") if path.is_file()}


def test_a_relaxed_cell_replaces_no_input_of_a_job(cli, run, tmp_path):
    place = run / "jobs/reference/POSCAR.vasp"
    place.write_text("mine")
    refused = cli("relax", tmp_path / "POSCAR", "--engine", "tersoff", "--force", "--out", place)
    assert refused.code == 3
    assert place.read_text() == "mine"


@pytest.mark.slow
def test_files_of_other_kinds_are_left_alone(cli, run, tmp_path):
    page, export, notes = tmp_path / "page.html", tmp_path / "all.extxyz", tmp_path / "notes.extxyz"
    notes.write_text("my strainkit notes\n")
    for _ in range(2):  # their own files they do replace
        assert cli("report", run, "--out", page).code == 0
        assert cli("collect", run, "--export", export).code == 0
    for command, foreign in (("collect", (notes, page, tmp_path / "POSCAR")), ("report", (notes, export))):
        for path in foreign:
            before = path.read_bytes()
            refused = cli(command, run, "--export" if command == "collect" else "--out", path)
            assert refused.code == 3
            assert "left as it is" in refused.err
            assert path.read_bytes() == before
    assert cli("report", run, "--out", notes, "--force").code == 0
    figures = tmp_path / "figures"
    assert cli("report", run, "--figures", figures).code == 0
    assert cli("report", run, "--figures", figures).code == 0
    page.replace(next(figures.iterdir()))
    assert cli("report", run, "--figures", figures).code == 3


def test_a_campaign_exports_onto_nothing_of_others(cli, tmp_path):
    out = tmp_path / "campaign"
    assert cli("prepare", write(tmp_path, "POSCAR", SILICON), "--campaign", "--out", out).code == 0
    run = next(out.glob("runs/*/*"))
    for place in (out / "campaign.json", run / "strain-set.json", run / "jobs/reference/POSCAR", tmp_path / "POSCAR"):
        before = place.read_bytes()
        refused = cli("collect", out, "--export", place)
        assert refused.code == 3
        assert "left as it is" in refused.err
        assert place.read_bytes() == before
