"""prepare --extend: what is there stays as it is, byte for byte."""

from __future__ import annotations

import pytest
from support.files import SILICON, write


@pytest.fixture
def run(cli, tmp_path):
    folder = tmp_path / "run"
    assert cli("prepare", write(tmp_path, "POSCAR", SILICON), "--out", folder).code == 0
    assert cli("evaluate", folder, "--engine", "tersoff", "--workers", 1).code == 0
    return folder


def snapshot(folder):
    return {p.relative_to(folder): (p.stat().st_mtime_ns, p.read_bytes()) for p in folder.rglob("*") if p.is_file()}


def fitted(cli, run):
    assert cli("evaluate", run, "--engine", "tersoff", "--workers", 1).code == 0
    assert cli("collect", run).code == 0
    return cli("fit", run, "--json").json


@pytest.mark.parametrize("how", [["--magnitude", 0.5], ["--magnitude", 0.5, "--magnitude", 2], ["--more", 4]])
def test_old_jobs_are_untouched_and_all_are_fitted(cli, run, how):
    before = snapshot(run / "jobs")
    result = cli("prepare", "--extend", run, *how, "--json")
    assert result.code == 0, result.err
    after = snapshot(run / "jobs")
    assert {path: after[path] for path in before} == before
    assert len(after) > len(before)
    fit = fitted(cli, run)
    assert len(fit["jobs_used"]) == result.json["strained_jobs"] + 1
    assert fit["constants"][0]["value_GPa"] == pytest.approx(142.5, rel=3e-3)


def test_dry_run_changes_nothing(cli, run):
    before = snapshot(run)
    assert cli("prepare", "--extend", run, "--more", 2, "--dry-run").code == 0
    assert snapshot(run) == before


def test_a_folder_in_the_way_is_refused(cli, run):
    (run / "jobs" / "s1-plus-0.5").mkdir()
    (run / "jobs" / "s1-plus-0.5" / "mine.txt").write_text("mine")
    before = snapshot(run)
    result = cli("prepare", "--extend", run, "--magnitude", 0.5)
    assert result.code == 3
    assert "mine.txt" in result.err
    assert snapshot(run) == before


@pytest.mark.parametrize(
    "arguments",
    [
        ["--extend", "RUN"],
        ["--extend", "RUN", "--more", 2, "--magnitude", 1],
        ["CELL", "--extend", "RUN", "--more", 2],
        ["--extend", "RUN", "--more", 2, "--out", "elsewhere"],
        ["--extend", "RUN", "--magnitude", 1],
        [],
    ],
)
def test_contradictions_are_usage_errors(cli, run, tmp_path, arguments):
    words = {"RUN": run, "CELL": tmp_path / "POSCAR"}
    result = cli("prepare", *(words.get(a, a) for a in arguments))
    assert result.code == 2


@pytest.mark.parametrize(
    ("arguments", "named"),
    [
        (["--extend", "RUN", "--magnitude", 0.5, "--aim", "symmetric"], "--aim"),
        (["--extend", "RUN", "--more", 2, "--symprec", 0.01, "--noise", 0.1], "--symprec, --noise"),
        (["CELL", "--dry-run", "--no-displaced"], "--displaced"),
        (["CELL", "--dry-run", "--ceiling", 4], "--ceiling"),
        (["CELL", "--dry-run", "--ceiling", 4, "--target-error", 1, "--magnitude", 1], "--ceiling"),
        (["CELL", "--dry-run", "--adopt", "RUN", "--target-error", 1], "--target-error"),
        (["CELL", "--campaign", "--dry-run", "--kspacing", 0.3], "--kspacing"),
        (["CELL", "--dry-run", "--atoms", "affine", "--force-constants", "phonopy.yaml"], "--atoms"),
    ],
)
def test_options_that_would_change_nothing_are_refused(cli, run, tmp_path, arguments, named):
    words = {"RUN": run, "CELL": tmp_path / "POSCAR"}
    result = cli("prepare", *(words.get(a, a) for a in arguments))
    assert result.code == 2
    assert named in result.err
    assert result.out == ""
