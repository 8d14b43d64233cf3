"""Decks, job scripts and progress through the command line, and a user's mistakes with them."""

from __future__ import annotations

import json
import re
import subprocess

import pytest
from support.files import SILICON, write
from support.returned import write_return

from strainkit.run.plan import job_folder, load_plan

SETTINGS = """
[pseudopotentials]
Si = "Si.upf"
[site]
account = "a1"
"""


@pytest.fixture
def cell(tmp_path):
    return write(tmp_path, "POSCAR", SILICON)


@pytest.fixture
def settings(tmp_path):
    return write(tmp_path, "settings.toml", SETTINGS)


@pytest.fixture
def run(cli, cell, settings, tmp_path):
    folder = tmp_path / "run"
    made = cli("prepare", cell, "--out", folder, "--deck", "qe", "--settings", settings, "--scheduler", "slurm")
    assert made.code == 0, made.err
    return folder


def test_what_prepare_prints(cli, cell, settings, tmp_path):
    folder = tmp_path / "run"
    made = cli("prepare", cell, "--out", folder, "--deck", "QE", "--settings", settings, "--scheduler", "slurm", "--quiet")
    assert made.code == 0
    assert made.err == ""
    assert "k-mesh    9x9x9, Gamma-centred (spacing at most 0.25 1/A, 2 pi included)" in made.out
    assert f"cd {folder} && sbatch submit.sh" in made.out
    assert max(map(len, made.out.replace(str(folder), "run").splitlines())) <= 80
    assert sorted(p.name for p in folder.iterdir()) == ["joblist.txt", "jobs", "logs", "strain-set.json", "submit.sh"]
    assert (folder / "joblist.txt").read_text() == "jobs/reference\njobs/s1-plus-1\njobs/s1-minus-1\n"


def test_json_and_dry_run_say_the_same(cli, cell, settings, tmp_path):
    arguments = ["prepare", cell, "--deck", "qe", "--settings", settings, "--kspacing", 0.3, "--scheduler", "pbs", "--json"]
    dry = cli(*arguments, "--dry-run")
    assert dry.code == 0, dry.err
    assert dry.json["calculation"]["kmesh"] == [7, 7, 7]
    wet = cli(*arguments, "--out", tmp_path / "run")
    assert dry.json == wet.json
    manifest = json.loads((tmp_path / "run" / "strain-set.json").read_text())
    for job, printed in zip(manifest["jobs"], wet.json["jobs"], strict=True):
        assert printed == {**job, **{key: printed[key] for key in ("laue_class", "irreducible_kpoints")}}
    assert {**wet.json, "jobs": []} == {**manifest, "jobs": []}


@pytest.mark.parametrize(
    ("options", "code", "message"),
    [
        (["--scheduler", "slurm"], 2, "needs an input deck"),
        (["--settings", "SETTINGS"], 2, "needs an input deck"),
        (["--deck", "nonsense"], 2, "no such deck"),
        (["--deck", "qe", "--scheduler", "cron"], 2, "unknown scheduler"),
        (["--deck", "qe"], 3, "needs a pseudopotential for Si"),
        (["--deck", "qe", "--settings", "SETTINGS", "--kspacing", "0"], 2, "out of range"),
        (["--deck", "qe", "--settings", "nowhere.toml"], 3, "No such file"),
    ],
)
def test_mistakes(cli, cell, settings, tmp_path, options, code, message):
    words = [str(settings) if option == "SETTINGS" else option for option in options]
    result = cli("prepare", cell, "--out", tmp_path / "run", *words)
    assert result.code == code
    assert message in result.err
    assert not (tmp_path / "run").exists()


def test_same_strains_with_other_files_are_another_run(cli, cell, run, settings):
    before = {p: p.read_bytes() for p in run.rglob("*") if p.is_file()}
    again = cli("prepare", cell, "--out", run, "--deck", "qe", "--settings", settings, "--scheduler", "slurm")
    assert again.code == 0
    assert "this very set already" in again.err
    other = cli("prepare", cell, "--out", run, "--deck", "qe", "--settings", settings, "--kspacing", 0.2)
    assert other.code == 3
    assert "the same set with other files" in other.err
    assert {p: p.read_bytes() for p in run.rglob("*") if p.is_file()} == before


def test_extension_gets_the_same_mesh_and_grid(cli, run):
    old = load_plan(run)
    text = (run / "jobs" / "s1-plus-1" / "pw.in").read_text()
    assert cli("prepare", "--extend", run, "--magnitude", 0.5).code == 0
    plan = load_plan(run)
    assert plan.calculation == old.calculation
    new = (run / "jobs" / "s1-plus-0.5" / "pw.in").read_text()
    assert new.split("! ")[0] == text.split("! ")[0]
    found = cli("progress", run, "--resubmit", "--json").json
    assert "s1-plus-0.5" in found["resubmit"]
    too_large = cli("prepare", "--extend", run, "--magnitude", 8)
    assert too_large.code == 3
    assert "larger real-space grid" in too_large.err
    assert not (run / "jobs" / "s1-plus-8").exists()
    assert cli("prepare", "--extend", run, "--magnitude", 0.2, "--deck", "vasp").code == 2


def test_progress_tells_and_writes_only_when_told(cli, run):
    plan = load_plan(run)
    job = plan.jobs[0]
    write_return(run / job_folder(job.label), plan.crystal, 0.0 * plan.crystal.lattice)
    before = {p: p.read_bytes() for p in run.rglob("*") if p.is_file()}
    told = cli("progress", run)
    assert told.code == 4
    assert "missing        2  not begun, or waiting in the queue" in told.out
    assert f"strainkit progress {run} --queue --resubmit" in told.out
    assert {p: p.read_bytes() for p in run.rglob("*") if p.is_file()} == before
    written = cli("progress", run, "--resubmit")
    assert f"cd {run} && sbatch submit-2.sh" in written.out
    assert (run / "joblist-2.txt").read_text() == "jobs/s1-plus-1\njobs/s1-minus-1\n"
    assert {
        p: content for p, content in {p: p.read_bytes() for p in run.rglob("*") if p.is_file()}.items() if p in before
    } == before


def test_progress_of_a_run_without_a_script(cli, cell, tmp_path):
    folder = tmp_path / "run"
    assert cli("prepare", cell, "--out", folder).code == 0
    assert cli("progress", folder, "--queue").code == 3
    result = cli("progress", folder, "--resubmit")
    assert result.code == 3
    assert "no job script" in result.err


def test_a_script_that_was_changed_beyond_recognition(cli, run):
    (run / "submit.sh").write_text("#!/bin/bash\n")
    result = cli("progress", run, "--resubmit")
    assert result.code == 3
    assert "submit.sh" in result.err
    assert not (run / "joblist-2.txt").exists()


def test_relax_writes_a_variable_cell_folder(cli, cell, settings, tmp_path):
    out = tmp_path / "cell"
    made = cli("relax", cell, "--deck", "vasp", "--settings", settings, "--scheduler", "bash", "--out", out)
    assert made.code == 0, made.err
    assert f"cd {out} && bash submit.sh all" in made.out
    assert "ISIF = 3" in (out / "INCAR").read_text()
    assert sorted(p.name for p in out.iterdir()) == sorted(
        ["INCAR", "KPOINTS", "POSCAR", "joblist.txt", "logs", "relaxation.json", "submit.sh"]
    )
    before = {p: p.read_bytes() for p in out.rglob("*") if p.is_file()}
    again = cli("relax", cell, "--deck", "vasp", "--settings", settings, "--out", out)
    assert again.code == 3
    assert {p: p.read_bytes() for p in out.rglob("*") if p.is_file()} == before


@pytest.mark.parametrize(
    ("options", "message"),
    [
        ([], "one of --engine and --deck"),
        (["--engine", "tersoff", "--deck", "qe"], "one of --engine and --deck"),
        (["--deck", "qe", "--fmax", "0.1"], "--fmax and --set"),
        (["--engine", "tersoff", "--kspacing", "0.3"], "--kspacing"),
        (["--engine", "tersoff", "--scheduler", "bash"], "--scheduler"),
    ],
)
def test_options_of_relax_that_do_not_go_together(cli, cell, tmp_path, options, message):
    result = cli("relax", cell, "--out", tmp_path / "x.cif", *options)
    assert result.code == 2
    assert message in result.err
    assert not (tmp_path / "x.cif").exists()


def test_vasp_script_keeps_every_attempt(cli, cell, tmp_path):
    """A stand-in for VASP: the first attempt stops without an end, the second begins from its CONTCAR."""
    potentials = tmp_path / "potpaw"
    (potentials / "Si").mkdir(parents=True)
    write(potentials / "Si", "POTCAR", "PAW Si\n")
    program = write(
        tmp_path,
        "vasp.sh",
        "#!/bin/bash\ncp POSCAR seen\ncat POTCAR >>seen\nsed 's/0.25000/0.26000/' POSCAR >CONTCAR\necho partial >OUTCAR\n"
        "[ -f OUTCAR-1 ] && echo 'reached required accuracy\nGeneral timing and accounting informations' >>OUTCAR\nexit 0\n",
    )
    program.chmod(0o755)
    text = f'[pseudopotentials]\nfolder = "{potentials}"\nSi = "Si"\n[site]\ncommand = "{program}"\n'
    run = tmp_path / "run"
    made = cli(
        "prepare", cell, "--out", run, "--deck", "vasp", "--scheduler", "bash", "--settings", write(tmp_path, "s.toml", text)
    )
    assert made.code == 0, made.err
    job = run / "jobs" / "s1-plus-1"
    start = (job / "POSCAR").read_text()
    for code in (1, 0):
        done = subprocess.run(["bash", run / "submit.sh", "2"], capture_output=True, text=True, timeout=60)
        assert done.returncode == code, done.stderr
    assert (job / "OUTCAR-1").read_text() == "partial\n"
    assert (job / "POSCAR-1").read_text() == start
    assert (job / "POSCAR").read_text() == (job / "CONTCAR-1").read_text() != start
    assert re.search(r"0\.26000.*\nPAW Si\n$", (job / "seen").read_text())
    assert (job / "done").read_text() == "2\n"
    assert not (job / "POTCAR").exists()
