"""A user's mistakes: one clear message, the documented exit code, nothing overwritten, never a traceback."""

from __future__ import annotations

import json

import pytest
from support.files import DRY_ICE, SILICON, write
from support.runs import returned_run


@pytest.fixture
def cell(tmp_path):
    return write(tmp_path, "POSCAR", SILICON)


@pytest.fixture
def run(cli, cell, tmp_path):
    folder = tmp_path / "run"
    assert cli("prepare", cell, "--out", folder).code == 0
    return folder


def snapshot(folder):
    return {p.relative_to(folder): p.read_bytes() for p in sorted(folder.rglob("*")) if p.is_file()}


@pytest.mark.parametrize(
    ("content", "code", "message"),
    [
        (None, 3, "No such file"),
        ("", 3, "the file is empty"),
        ("data_x\n_cell_length_a", 3, "not a readable CIF"),
        (DRY_ICE.replace("0.1185 1", "0.1185 0.5"), 3, "partly occupied sites: O1 (0.5)"),
    ],
)
@pytest.mark.parametrize("command", ["inspect", "prepare", "relax"])
def test_unusable_cell(cli, tmp_path, content, code, message, command):
    path = tmp_path / "cell.cif"
    if content is not None:
        path.write_text(content)
    extra = {"inspect": [], "prepare": ["--out", tmp_path / "run"], "relax": ["--engine", "lj", "--out", tmp_path / "r.cif"]}
    result = cli(command, path, *extra[command])
    assert result.code == code
    assert message in result.err
    assert str(path) in result.err
    assert result.out == ""
    assert not (tmp_path / "run").exists()


def test_a_folder_in_place_of_a_file(cli, tmp_path):
    result = cli("inspect", tmp_path)
    assert result.code == 3
    assert "a folder, not a structure file" in result.err


def test_a_folder_without_cells(cli, tmp_path):
    result = cli("prepare", tmp_path, "--out", tmp_path / "run")
    assert result.code == 3
    assert "no structure files in it" in result.err
    assert not (tmp_path / "run").exists()


def test_prepare_without_a_place(cli, cell):
    result = cli("prepare", cell)
    assert result.code == 2
    assert "--out" in result.err


def test_dry_run_writes_nothing(cli, cell, tmp_path):
    result = cli("prepare", cell, "--out", tmp_path / "run", "--dry-run", "--json")
    assert result.code == 0
    assert result.json["strained_jobs"] == 2
    assert not (tmp_path / "run").exists()


def test_same_set_again_changes_nothing(cli, cell, run):
    before = snapshot(run)
    result = cli("prepare", cell, "--out", run)
    assert result.code == 0
    assert "this very set already" in result.err
    assert snapshot(run) == before


def test_another_set_is_refused_and_with_force_moved_aside(cli, cell, run):
    before = snapshot(run)
    result = cli("prepare", cell, "--out", run, "--magnitude", 0.5)
    assert result.code == 3
    assert "another set" in result.err
    assert snapshot(run) == before
    result = cli("prepare", cell, "--out", run, "--magnitude", 0.5, "--force")
    assert result.code == 0
    assert snapshot(run.with_name("run.old-1")) == before
    assert (run / "jobs" / "s1-plus-0.5").is_dir()


@pytest.mark.parametrize("force", [[], ["--force"]])
def test_a_place_that_is_something_else_is_never_touched(cli, cell, tmp_path, force):
    mine = tmp_path / "mine"
    mine.mkdir()
    (mine / "thesis.txt").write_text("years of work")
    assert cli("prepare", cell, "--out", mine, *force).code == 3
    assert snapshot(mine) == {(mine / "thesis.txt").relative_to(mine): b"years of work"}
    target = write(tmp_path, "file", "a file")
    assert cli("prepare", cell, "--out", target, *force).code == 3
    assert target.read_text() == "a file"


@pytest.mark.parametrize("magnitude", ["0", "-1", "50", "nan"])
def test_impossible_magnitude(cli, cell, tmp_path, magnitude):
    result = cli("prepare", cell, "--out", tmp_path / "run", "--magnitude", magnitude)
    assert result.code == 2
    assert "out of range" in result.err
    assert not (tmp_path / "run").exists()


def test_unknown_words(cli, cell, run, tmp_path):
    assert cli("prepare", cell, "--out", tmp_path / "x", "--format", "nonsense").code == 2
    assert cli("evaluate", run, "--engine", "nonsense").code == 2
    assert cli("evaluate", run, "--engine", "no_module:Thing").code == 3
    assert cli("relax", cell, "--engine", "tersoff", "--out", tmp_path / "x.unknown").code == 2
    assert cli("nonsense").code == 2
    assert cli("fit", run, "--frame", "lab").code == 2
    assert cli("fit", run, "--drop", "nothing").code == 2
    assert cli("fit", run, "--noise", "-1").code == 2


def test_relax_does_not_overwrite(cli, cell, tmp_path):
    out = write(tmp_path, "out.cif", "precious")
    assert cli("relax", cell, "--engine", "tersoff", "--out", out).code == 3
    assert out.read_text() == "precious"
    assert cli("relax", cell, "--engine", "tersoff", "--out", out, "--force").code == 0
    assert "data_" in out.read_text()


@pytest.mark.parametrize("command", ["progress", "collect", "fit", "derive"])
def test_not_a_run_folder(cli, tmp_path, command):
    result = cli(command, tmp_path)
    assert result.code == 3
    assert "not a run folder" in result.err


@pytest.mark.parametrize(
    "damage",
    ["", "{", '{"schema": "other/1"}', '{"schema": "strainkit/strain-set/9"}', '{"schema": "strainkit/strain-set/1"}', "[]"],
)
def test_damaged_manifest(cli, run, damage):
    (run / "strain-set.json").write_text(damage)
    result = cli("collect", run)
    assert result.code == 3
    assert "strain-set.json" in result.err


def test_a_label_that_leaves_the_run_folder_is_refused(cli, run):
    data = json.loads((run / "strain-set.json").read_text())
    data["jobs"][1]["label"] = "../../elsewhere"
    (run / "strain-set.json").write_text(json.dumps(data))
    result = cli("collect", run)
    assert result.code == 3
    assert "not a plain file name" in result.err


def test_before_anything_came_back(cli, run):
    assert cli("progress", run).code == 4
    assert cli("fit", run).code == 3
    result = cli("collect", run, "--json")
    assert result.code == 4
    assert result.json["usable"] == 0
    assert {r["status"] for r in result.json["records"]} == {"missing"}
    result = cli("fit", run)
    assert result.code == 5
    assert "none of the 2 strained jobs is usable" in result.err


def test_partial_set_is_fitted_as_far_as_it_goes(cli, run):
    assert cli("evaluate", run, "--engine", "tersoff", "--workers", 1).code == 0
    (run / "jobs" / "s1-minus-1" / "returned.extxyz").unlink()
    assert cli("collect", run).code == 4
    result = cli("fit", run, "--json")
    assert result.code == 5
    assert "with s1-minus-1 they would" in result.err  # the two jobs of the set stand alone: both are needed
    assert not (run / "stiffness.json").exists()


def test_cubic_terms_of_one_magnitude_ask_for_another_that_suffices(cli, run):
    assert cli("evaluate", run, "--engine", "tersoff", "--workers", 1).code == 0
    cli("collect", run)
    result = cli("fit", run, "--order", "cubic")
    assert result.code == 5
    assert "second magnitude" in result.err
    command = result.err.partition("strainkit prepare --extend RUN ")[2].split()[:2]
    assert command == ["--magnitude", "0.5"]
    assert cli("prepare", "--extend", run, *command).code == 0
    assert cli("evaluate", run, "--engine", "tersoff", "--workers", 1).code == 0
    cli("collect", run)
    assert cli("fit", run, "--order", "cubic").code == 0
    for label in ("s1-minus-0.5", "s1-minus-1"):
        (run / "jobs" / label / "returned.extxyz").unlink()
    cli("collect", run)
    result = cli("fit", run, "--order", "cubic")
    assert result.code == 5
    assert "with s1-minus-" in result.err
    assert "second magnitude" not in result.err


def test_results_go_to_stdout_and_chatter_to_stderr(cli, cell, run):
    for arguments in (
        ["inspect", cell],
        ["evaluate", run, "--engine", "tersoff", "--workers", 1],
        ["progress", run],
        ["collect", run],
        ["fit", run],
        ["derive", run],
    ):
        result = cli(*arguments, "--json")
        assert result.code == 0, result.err
        assert result.json["schema"].startswith("strainkit/")
        quiet = cli(*arguments, "--quiet")
        assert quiet.code == 0
        assert quiet.err == ""
        assert quiet.out.strip()
        assert max(map(len, quiet.out.splitlines())) <= 80


def test_json_never_holds_nan(cli, run):
    cli("evaluate", run, "--engine", "tersoff", "--workers", 1)
    (run / "jobs" / "reference" / "returned.extxyz").unlink()
    cli("collect", run)
    result = cli("fit", run, "--json")
    assert "NaN" not in result.out
    assert result.json["residual_stress_GPa"] == [None] * 6
    assert "reference-stress-unknown" in [f["code"] for f in result.json["findings"]]


def test_one_exit_code_for_one_state(cli, tmp_path):
    """Invented stresses of an orthorhombic crystal: some constants undetermined is 4, none determined is 5, everywhere."""
    run = tmp_path / "run"
    returned_run(run, "mmm", keep=lambda label: label.startswith(("reference", "s1")))
    codes = {command: cli(command, run).code for command in ("collect", "fit", "converge", "derive", "report")}
    assert codes == dict.fromkeys(codes, 4)
    lost = next(f for f in cli("converge", run, "--json").json["findings"] if f["code"] == "undetermined-constants")
    assert "with s" in lost["message"]
    returned_run(tmp_path / "other", "m-3m", keep=lambda label: label in ("reference", "s1-plus-1"))
    codes = {command: cli(command, tmp_path / "other").code for command in ("fit", "converge", "derive", "report")}
    assert codes == dict.fromkeys(codes, 5)


def test_things_are_counted_in_words(cli, cell, tmp_path):
    made = cli("prepare", cell, "--campaign", "--out", tmp_path / "one")
    assert made.out.startswith("Campaign of 1 crystal in")
    found = cli("collect", tmp_path / "one")
    assert "of 1 crystal usable" in found.out
    assert "1 crystal to look at" in found.out
    plan = cli("prepare", cell, "--dry-run").out
    assert not any(line.endswith(" k") for line in plan.splitlines())  # no k-points, no column for them
    assert any(line.endswith(" k") for line in cli("prepare", cell, "--dry-run", "--kspacing", 0.4).out.splitlines())


def test_what_comes_after_the_fit_follows_it(cli, tmp_path):
    """Invented stresses at two magnitudes: order, noise, dropped jobs of the last fit hold unless an option says otherwise."""
    run = tmp_path / "run"
    returned_run(run, "m-3m", magnitudes=(0.01, 0.005))

    def seen():
        data = cli("derive", run, "--json").json
        cli("report", run)
        page = (run / "report.html").read_text()
        dropped = "without s1-plus-0.5" in data["origin"]
        return "order cubic" in data["origin"], dropped, "order cubic" in page

    assert seen() == (False, False, False)
    plain = cli("derive", run, "--json").json["stress_strain_GPa"]
    assert cli("fit", run, "--order", "cubic", "--noise", 0.02, "--drop", "s1-plus-0.5").code == 0
    assert seen() == (True, True, True)
    cubic = cli("derive", run, "--json").json
    assert cubic["stress_strain_GPa"] != plain
    other = cli("derive", run, "--order", "linear", "--json").json
    assert "order linear" in other["origin"]
    assert "without s1-plus-0.5" in other["origin"]
    whole = cli("converge", run, "--drop", "s1-minus-1", "--json").json
    assert cli("converge", run, "--json").json["common"] != whole["common"]
    assert "s1-plus-0.5" not in cli("derive", run, "--drop", "s1-minus-1", "--json").json["origin"]
    assert cli("fit", run).code == 0  # a fit begins anew
    assert seen() == (False, False, False)
    assert cli("derive", run, "--json").json["stress_strain_GPa"] == plain
    saved = json.loads((run / "stiffness.json").read_text())
    damage = [{"order": ["x"]}, {"order": "quartic"}, {"noise_GPa": -1, "degrees_of_freedom": None}, {"jobs_dropped": 3}]
    for text in ("{", *(json.dumps(saved | change) for change in damage), json.dumps(saved | {"relaxed_ion": [1]})):
        (run / "stiffness.json").write_text(text)
        for command in ("derive", "report", "converge"):
            result = cli(command, run)
            assert result.code == 3
            assert "stiffness.json" in result.err
    assert cli("fit", run).code == 0


def _label_twice(plan):
    plan["jobs"].append(plan["jobs"][1])


@pytest.mark.parametrize(
    ("damage", "message"),
    [
        (_label_twice, "more than one job is called 's1-plus-1'"),
        (lambda plan: plan.update(name=5), "the name 5 is not text"),
        (lambda plan: plan.update(jobs=[1]), "damaged manifest"),
        (lambda plan: plan.update(findings=5), "damaged manifest"),
        (lambda plan: plan.update(ions="frozen"), "damaged manifest"),
        (lambda plan: plan.update(molecules=[1]), "damaged manifest"),
        (lambda plan: plan["jobs"][1]["deformation_gradient"].pop(), "3x3 finite numbers"),
    ],
)
def test_damaged_plan(cli, run, damage, message):
    path = run / "strain-set.json"
    plan = json.loads(path.read_text())
    damage(plan)
    path.write_text(json.dumps(plan))
    result = cli("collect", run)
    assert result.code == 3
    assert message in result.err
    assert str(path) in result.err
    assert "Restore it" in result.err


@pytest.mark.parametrize("damage", [{"stress_GPa": [float("nan")] + [0.0] * 5}, {"stress_GPa": [None] * 6}, {"status": "x"}])
def test_damaged_stress_table(cli, tmp_path, damage):
    run = tmp_path / "run"
    returned_run(run)
    cli("collect", run)
    path = run / "stresses.json"
    table = json.loads(path.read_text())
    table["records"][1] |= damage
    path.write_text(json.dumps(table))
    result = cli("fit", run)
    assert result.code == 3
    assert str(path) in result.err
    assert "strainkit collect" in result.err
    assert cli("collect", run).code == 0
    assert cli("fit", run).code == 0
