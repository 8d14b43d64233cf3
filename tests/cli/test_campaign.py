"""Campaigns through the command line. The oracle is the single-crystal path: every run is what it would be alone."""

from __future__ import annotations

import json
import os
import shutil
import signal
import subprocess
import sys
import time
from pathlib import Path

import ase.io
import numpy as np
import pytest
from support.campaigns import write_all_returns, write_cells, write_deck
from support.files import SILICON

from strainkit.collect.gather import collect_run
from strainkit.crystal.crystal import Crystal
from strainkit.crystal.read import read_crystal
from strainkit.fit.result import fit_run
from strainkit.prepare.runfolder import plan_run, write_run
from strainkit.run import campaign as campaign_module
from strainkit.run.campaign import load_campaign
from strainkit.run.extxyz import extxyz_text
from strainkit.run.plan import load_plan

SAMPLE_CELLS = Path(__file__).parents[2] / "sample_cells"
CLASSES = ("2/m", "4/mmm", "6/m", "m-3", "m-3m")


def snapshot(folder: Path) -> dict[str, tuple[bytes, int]]:
    return {
        str(p.relative_to(folder)): (p.read_bytes(), p.stat().st_mtime_ns) for p in sorted(folder.rglob("*")) if p.is_file()
    }


def start(*arguments: object) -> subprocess.Popen:
    code = "from strainkit.cli.main import main; main()"
    return subprocess.Popen(
        [sys.executable, "-c", code, *map(str, arguments)], stdout=subprocess.PIPE, stderr=subprocess.PIPE, text=True
    )


@pytest.fixture(scope="module")
def made(tmp_path_factory):
    """Cells, and a campaign of them with outputs; copied by each test that changes it."""
    from strainkit.cli.main import app

    base = tmp_path_factory.mktemp("made")
    rng = np.random.default_rng(5)
    write_cells(base / "cells", rng, classes=CLASSES)
    with pytest.raises(SystemExit) as stop:
        app(["prepare", str(base / "cells"), "--out", str(base / "out"), "--magnitude", "0.5", "--magnitude", "1", "--quiet"])
    assert stop.value.code in (0, None)
    write_all_returns(base / "out", rng)
    return base


@pytest.fixture
def out(made, tmp_path):
    shutil.copytree(made / "out", tmp_path / "out")
    return tmp_path / "out"


def test_every_run_is_what_prepare_writes_alone(made, tmp_path):
    campaign = load_campaign(made / "out")
    assert [m.laue_class for m in campaign.members] == ["2/m", "4/mmm", "6/m", "m-3", "m-3m"]  # order of the files' names
    for member in campaign.members:
        alone = tmp_path / member.name
        write_run(plan_run(read_crystal(member.source), [0.005, 0.01]), alone)
        mine = {n: c for n, (c, _) in snapshot(made / "out" / member.run).items() if not n.endswith("returned.extxyz")}
        assert mine == {n: c for n, (c, _) in snapshot(alone).items()}
    jobs = (made / "out/joblist.txt").read_text().split()
    assert len(set(jobs)) == len(jobs) == campaign.jobs
    assert sorted(jobs) == sorted(str(p.relative_to(made / "out")) for p in (made / "out").glob("runs/*/*/jobs/*"))


def test_bad_cells_are_listed_and_do_not_stop_the_others(cli, tmp_path):
    cells = tmp_path / "cells"
    write_cells(cells, np.random.default_rng(1), classes=("m-3m", "4/mmm"))
    (cells / "empty.cif").write_text("")
    (cells / "noise.cif").write_bytes(bytes(range(256)))
    (cells / "mp-1").mkdir()
    (cells / "mp-1" / "POSCAR").write_text(SILICON)
    (cells / "mp-2").mkdir()
    (cells / "mp-2" / "POSCAR").write_text(SILICON.replace("0.25 0.25 0.25", "0.0 0.0 0.01"))
    (cells / "notes.txt").write_text("not a cell, and not asked for")
    result = cli("prepare", cells, tmp_path / "nowhere.cif", "--out", tmp_path / "out", "--json")
    assert result.code == 4
    assert result.json["crystals"] == 3
    reasons = {Path(r["source"]).name: r["reason"] for r in result.json["refused_cells"]}
    assert set(reasons) == {"empty.cif", "noise.cif", "POSCAR", "nowhere.cif"}
    assert "empty" in reasons["empty.cif"]
    assert "on top of each other" in reasons["POSCAR"]
    assert reasons["nowhere.cif"] == "no such file"
    campaign = load_campaign(tmp_path / "out")
    assert {m.name for m in campaign.members} == {"barm-3m-0".replace("barm-3m", "mbar3m"), "4_over_mmm-0", "mp-1"}
    assert [r.source for r in campaign.refused] == [r["source"] for r in result.json["refused_cells"]]
    assert result.json["files"] == sum(p.is_file() for p in (tmp_path / "out/runs").rglob("*"))


def test_names_that_say_structure_are_taken_from_a_folder_and_others_are_named(cli, tmp_path):
    """POSCAR_NAME and CONTCAR-NAME are what people call such files (common practice, no source)."""
    cells = tmp_path / "cells"
    cells.mkdir()
    for name in ("POSCAR_Si", "CONTCAR-x", "POSCAR.new", "POSCAR_Si~", "Si.txt", "notes"):
        (cells / name).write_text(SILICON)
    result = cli("prepare", cells, "--out", tmp_path / "out", "--json")
    assert result.code == 0
    assert [m.name for m in load_campaign(tmp_path / "out").members] == ["CONTCAR-x", "POSCAR.new", "POSCAR_Si"]
    assert [Path(p).name for p in result.json["files_not_taken"]] == ["POSCAR_Si~", "Si.txt", "notes"]
    assert "3 files (POSCAR_Si~, Si.txt, notes)" in result.err
    for name in ("POSCAR_Si", "CONTCAR-x", "POSCAR.new"):
        (cells / name).unlink()
    nothing = cli("prepare", cells, "--out", tmp_path / "none")
    assert nothing.code == 3
    assert "no structure files in it" in nothing.err
    assert "Si.txt" in nothing.err


def test_doubts_about_cells_are_told_with_the_names_of_the_crystals(cli, tmp_path):
    """Glycine as it is shipped, and four copies that lost a hydrogen: `inspect` warns of each of these."""
    cells = tmp_path / "cells"
    cells.mkdir()
    text = (SAMPLE_CELLS / "glycine.cif").read_text()
    (cells / "whole.cif").write_text(text)
    hydrogen = next(line for line in text.splitlines() if line.split()[1:2] == ["H"])
    names = [f"lost{i}" for i in range(4)]
    for name in names:
        (cells / f"{name}.cif").write_text(text.replace(hydrogen + "\n", ""))
    alone = {f["code"] for f in cli("inspect", cells / "lost0.cif", "--json").json["findings"] if f["severity"] != "info"}
    assert "odd-electrons" in alone
    first = cli("prepare", cells, "--out", tmp_path / "out", "--json")
    assert first.json["findings_in"] == dict.fromkeys(first.json["findings_in"], names)
    assert set(first.json["findings_in"]) == alone
    again = cli("prepare", cells, "--out", tmp_path / "out")
    assert "warning odd-electrons: 4 crystals (lost0, lost1, lost2 and 1 more)" in again.out
    run = tmp_path / "out" / load_campaign(tmp_path / "out").members[0].run
    write_all_returns(tmp_path / "out", np.random.default_rng(4), noise=1e-4)
    (run / "jobs" / "s1-plus-1" / "returned.extxyz").unlink()
    assert cli("collect", tmp_path / "out").code == 4
    assert f"warning jobs-not-used: 1 crystal ({run.name})" in cli("fit", tmp_path / "out").out
    assert f"warning jobs-not-used: 1 crystal ({run.name})" in cli("derive", tmp_path / "out").out
    assert cli("fit", tmp_path / "out", "--json").json["findings_in"]["jobs-not-used"] == [run.name]


def test_files_of_the_same_content_are_told(cli, tmp_path):
    cells = tmp_path / "cells"
    cells.mkdir()
    other = SILICON.replace("0.25", "0.2501")
    for name, text in (("a", SILICON), ("b", other), ("copy of a", SILICON)):
        (cells / f"{name}.vasp").write_text(text)
    first = cli("prepare", cells, "--out", tmp_path / "out", "--json")
    assert first.code == 0
    assert first.json["same_files"] == [["a", "copy_of_a"]]
    (tmp_path / "again.vasp").write_text(other)
    added = cli("prepare", tmp_path / "again.vasp", "--campaign", "--out", tmp_path / "out")
    assert "files of the same content, computed more than once: a = copy_of_a, b = again" in " ".join(added.out.split())


def test_no_usable_cell_at_all(cli, tmp_path):
    (tmp_path / "bad.cif").write_text("nothing")
    result = cli("prepare", tmp_path / "bad.cif", "--campaign", "--out", tmp_path / "out")
    assert result.code == 3
    assert "no usable cell" in result.err
    assert not (tmp_path / "out").exists()


def test_patterns_lists_and_equal_names(cli, tmp_path, monkeypatch):
    monkeypatch.chdir(tmp_path)
    for place in ("a", "b"):
        write_cells(tmp_path / place, np.random.default_rng(2), classes=("m-3m",))
    (tmp_path / "list.txt").write_text("# what was relaxed\na/mbar3m-0.extxyz\n\nb/*.extxyz\nc/gone.cif\n")
    result = cli("prepare", "@list.txt", "a/*.extxyz", "--out", "out", "--json")
    assert result.code == 4
    assert [r["source"] for r in result.json["refused_cells"]] == ["c/gone.cif"]
    assert [m.name for m in load_campaign(Path("out")).members] == ["mbar3m-0", "mbar3m-0-2"]


def test_no_folder_holds_more_than_a_thousand_entries(cli, made, tmp_path, monkeypatch):
    """With a thousand made two."""
    monkeypatch.setattr(campaign_module, "SHARD", 2)
    assert cli("prepare", made / "cells", "--out", tmp_path / "out", "--workers", 1).code == 0
    assert [m.run.split("/")[1] for m in load_campaign(tmp_path / "out").members] == ["001", "001", "002", "002", "003"]
    assert all(len(list(p.iterdir())) <= 2 for p in (tmp_path / "out/runs").iterdir())


def test_running_it_again_keeps_what_is_there_and_adds_what_is_new(cli, made, out, tmp_path):
    options = ("--out", out, "--magnitude", "0.5", "--magnitude", "1", "--json")
    before = snapshot(out)
    result = cli("prepare", made / "cells", *options)
    assert (result.code, result.json["crystals"], result.json["kept"]) == (0, 0, 5)
    after = snapshot(out)
    assert {n for n in before if before[n] != after[n]} <= {"campaign.json"}
    assert {n: c for n, (c, _) in before.items()} == {n: c for n, (c, _) in after.items()}

    write_cells(tmp_path / "more", np.random.default_rng(3), classes=("4/m",))
    result = cli("prepare", made / "cells", tmp_path / "more", *options)
    assert (result.code, result.json["crystals"], result.json["kept"]) == (0, 1, 5)
    campaign = load_campaign(out)
    assert len(campaign.members) == 6
    assert result.json["crystals_in_all"] == 6
    write_cells(tmp_path / "two", np.random.default_rng(5), copies=2, classes=("m-3m",))
    for name in ("mbar3m-0", "mbar3m-1"):
        (tmp_path / "two" / f"{name}.extxyz").rename(tmp_path / "two" / f"late-{name}.extxyz")
    told = cli("prepare", tmp_path / "two", *options[:-1])
    assert "2 crystals added, 8 in all" in " ".join(told.out.split())
    assert cli("prepare", tmp_path / "two", *options[:-1]).out.startswith("Campaign of 8 crystals in")
    campaign = load_campaign(out)
    assert len(set((out / "joblist.txt").read_text().split())) == campaign.jobs
    assert {n: v for n, v in snapshot(out).items() if n.startswith("runs") and n in before} == {
        n: v for n, v in before.items() if n.startswith("runs")
    }

    changed = tmp_path / "cells"
    shutil.copytree(made / "cells", changed)
    path = Path(campaign.members[0].source)
    (changed / path.name).write_text(path.read_text().replace("Mg", "Ca"))
    result = cli("prepare", changed, *options)
    assert result.code == 0  # same name, other content, from another place: a crystal of its own
    assert load_campaign(out).members[-1].name == f"{path.stem}-2"
    original = path.read_text()
    path.write_text(original.replace("Mg", "Sr"))
    result = cli("prepare", path, "--campaign", *options)
    path.write_text(original)
    assert result.code == 3
    assert "changed since" in result.err


def test_a_single_cell_is_told_how_to_get_into_a_campaign(cli, out, tmp_path):
    (tmp_path / "POSCAR").write_text(SILICON)
    result = cli("prepare", tmp_path / "POSCAR", "--out", out)
    assert result.code == 3
    assert "is a campaign" in result.err
    assert "--campaign" in result.err


def test_other_options_are_another_campaign(cli, made, out):
    before = snapshot(out)
    result = cli("prepare", made / "cells", "--out", out, "--magnitude", "2")
    assert result.code == 3
    assert "other options" in result.err
    assert snapshot(out) == before
    assert cli("prepare", made / "cells", "--out", out, "--magnitude", "2", "--force").code == 0
    assert snapshot(out.with_name("out.old-1")) == before
    assert load_plan(out / load_campaign(out).members[0].run).jobs[1].magnitude == pytest.approx(0.02)


def test_a_large_campaign_is_confirmed_and_a_dry_run_writes_nothing(cli, made, tmp_path, monkeypatch):
    monkeypatch.setattr("strainkit.cli.prepare_campaign._MANY_FILES", 50)
    arguments = ("prepare", made / "cells", "--out", tmp_path / "out")
    dry = cli(*arguments, "--dry-run", "--json")
    assert dry.code == 0
    assert not (tmp_path / "out").exists()
    refused = cli(*arguments)
    assert refused.code == 2
    assert f"{dry.json['jobs']} jobs: {dry.json['files']} files" in refused.err
    assert "--yes" in refused.err
    assert not (tmp_path / "out").exists()
    assert cli(*arguments, "--yes").code == 0
    written = list((tmp_path / "out/runs").rglob("*"))
    assert sum(p.is_file() for p in written) == dry.json["files"]
    blocks = sum(-(-p.stat().st_size // 4096) if p.is_file() else 1 for p in written)
    assert dry.json["bytes"] == pytest.approx(4096 * blocks, rel=0.1)


def test_collect_and_fit_give_what_they_give_alone(cli, out):
    first = cli("collect", out, "--json")
    assert first.code == 0
    assert first.json["usable"] == first.json["expected"] == load_campaign(out).jobs
    assert first.json["kept"] == 0
    assert cli("fit", out, "--json").json["complete"] == 5
    for member in load_campaign(out).members:
        run = out / member.run
        plan = load_plan(run)
        table = collect_run(run, plan)
        assert json.loads((run / "stresses.json").read_text()) == json.loads(json.dumps(table.to_dict()))
        alone = fit_run(plan, table).to_dict()
        together = json.loads((run / "stiffness.json").read_text())
        for name in ("stiffness_GPa", "standard_error_GPa"):
            np.testing.assert_allclose(together[name], alone[name], rtol=1e-10, atol=1e-10)


def test_only_what_changed_is_done_again(cli, out):
    cli("collect", out)
    cli("fit", out)
    before = snapshot(out)
    again = cli("collect", out, "--json").json, cli("fit", out, "--json").json
    assert [a["kept"] for a in again] == [5, 5]
    assert snapshot(out) == before

    member = load_campaign(out).members[2]
    job = out / member.run / "jobs" / "s1-plus-1"
    (job / "returned.extxyz").unlink()
    os.utime(job, (1, 1))  # a clock that is wrong does not matter
    result = cli("collect", out, "--json")
    assert result.code == 4
    assert result.json["kept"] == 4
    assert result.json["statuses"]["missing"] == 1
    entry = next(c for c in result.json["crystals"] if c["name"] == member.name)
    assert (entry["usable"], entry["expected"]) == (member.jobs - 1, member.jobs)
    assert cli("fit", out, "--json").json["kept"] == 4
    assert cli("fit", out, "--order", "cubic", "--json").json["kept"] == 0
    assert cli("fit", out, "--order", "cubic", "--again", "--json").json["kept"] == 0


def test_jobs_dropped_by_hand_stay_dropped(cli, out):
    cli("collect", out)
    cli("fit", out)
    run = out / load_campaign(out).members[0].run
    by_hand = cli("fit", run, "--drop", "s1-plus-0.5", "--json").json
    assert cli("fit", out, "--json").json["kept"] == 4
    together = json.loads((run / "stiffness.json").read_text())
    assert together["jobs_dropped"] == ["s1-plus-0.5"]
    np.testing.assert_allclose(together["stiffness_GPa"], by_hand["stiffness_GPa"], rtol=1e-10, atol=1e-10)
    assert cli("fit", out, "--json").json["kept"] == 5


def test_reports_and_comparison(cli, out):
    cli("collect", out)
    first = load_campaign(out).members[0]
    for member in load_campaign(out).members[1:]:  # reports take their time
        shutil.rmtree(out / member.run)
    result = cli("report", out, "--json")
    assert result.code == 4
    assert result.json["written"] == 1
    assert sum("problem" in c for c in result.json["crystals"]) == 4
    assert b"<html" in (out / first.run / "report.html").read_bytes()
    assert cli("report", out, "--json").json["kept"] == 1
    assert cli("fit", out / first.run, "--noise", 0.5).code == 0
    assert cli("report", out, "--json").json["written"] == 1  # a report older than the fit is not kept


@pytest.mark.slow
def test_a_killed_prepare_is_completed(made, out, tmp_path, cli):
    fresh = tmp_path / "fresh"
    arguments = ("prepare", made / "cells", "--out", fresh, "--magnitude", "0.5", "--magnitude", "1")
    process = start(*arguments, "--workers", 1)
    place = fresh / "runs/001"
    while process.poll() is None and not (place.is_dir() and any(not p.name.startswith(".") for p in place.iterdir())):
        time.sleep(0.002)
    process.kill()
    process.communicate()
    left = place / ".2_over_m-0.abcdefgh"  # half a folder of the process that died
    left.mkdir()
    result = cli(*arguments, "--json")
    assert result.code == 0
    assert result.json["kept"] >= 1
    without_time = ({n: c for n, (c, _) in snapshot(folder).items() if "returned" not in n} for folder in (fresh, out))
    one, other = without_time
    assert sorted(one) == sorted(other)
    assert [name for name in one if one[name] != other[name]] == []
    assert not left.exists()


@pytest.mark.slow
def test_a_killed_collect_and_fit_go_on(cli, out):
    names = [m.run for m in load_campaign(out).members]
    for command, result in (("collect", "collected.json"), ("fit", "stiffness.json")):
        process = start(command, out, "--workers", 2)
        while process.poll() is None and not any((out / run / result).exists() for run in names):
            time.sleep(0.002)
        process.send_signal(signal.SIGKILL)
        process.communicate()
        time.sleep(1.5)  # its workers end by themselves
        done = sum((out / run / result).exists() for run in names)
        again = cli(command, out, "--json")
        assert again.code == 0
        assert again.json["kept"] == done >= 1
        assert all((out / run / result).exists() for run in names)


@pytest.mark.slow
def test_an_interrupted_collect_says_how_far_it_came(out):
    process = start("collect", out, "--workers", 1)
    while process.poll() is None and not list(out.glob("runs/*/*/stresses.json")):
        time.sleep(0.002)
    process.send_signal(signal.SIGINT)
    _, err = process.communicate()
    if process.returncode != 0:  # it may have been faster than the signal
        assert process.returncode == 130
        assert "of 5 crystals are done" in err
        assert "Traceback" not in err
    assert not (out / ".collect-at-work").exists()


def test_screening_table_says_what_derive_says(cli, out):
    cli("collect", out)
    result = cli("derive", out, "--json")
    assert result.code == 0
    rows = [json.loads(line) for line in (out / "screening.jsonl").read_text().splitlines()]
    assert rows == result.json["rows"]
    header = (out / "screening.csv").read_text().splitlines()[0].split(",")
    assert header == result.json["columns"]
    for row in rows[1:2]:
        alone = cli("derive", out / row["run"], "--json").json
        assert row["K_reuss_GPa"] == pytest.approx(alone["bulk_GPa"]["reuss"], rel=1e-9)
        assert row["G_hill_GPa_error"] == pytest.approx(alone["shear_GPa"]["standard_error"]["hill"], rel=1e-9)
        assert row["C12_GPa"] == pytest.approx(alone["stiffness_GPa"][0][1], rel=1e-6)
        assert row["density_kg_per_m3"] == pytest.approx(alone["density_kg_per_m3"])


def test_the_screening_table_follows_the_last_fit_of_each_crystal(cli, out):
    cli("collect", out)
    assert cli("fit", out / load_campaign(out).members[0].run, "--noise", 0.5).code == 0
    first, second = cli("derive", out, "--json").json["rows"][:2]
    assert first["noise_GPa"] == 0.5
    assert second["noise_GPa"] < 0.1  # the noise of the invented outputs is a hundredth of that
    assert cli("derive", out, "--noise", 0.25, "--json").json["rows"][0]["noise_GPa"] == 0.25


def test_a_crystal_without_a_tensor_stays_in_the_table(cli, out):
    cli("collect", out)
    member = load_campaign(out).members[0]
    for path in (out / member.run).glob("jobs/s*/returned.extxyz"):
        path.unlink()
    (out / load_campaign(out).members[1].run / "strain-set.json").write_text("{}")
    assert cli("collect", out).code == 4
    fitted = cli("fit", out, "--json")
    assert fitted.code == 4
    assert fitted.json["fitted"] == 3
    again = cli("fit", out)
    assert again.err.startswith("0 crystals fitted, 3 unchanged")
    assert f"({member.name})" not in again.out  # its name stands before the reason already
    assert f"{member.name}: none of the" in " ".join(again.out.split())
    result = cli("derive", out, "--json")
    assert result.code == 4
    first, second = result.json["rows"][:2]
    assert "none of the" in first["problem"]
    assert first["density_kg_per_m3"] > 0
    assert first["C11_GPa"] is None
    assert "not a strainkit/strain-set file" in second["problem"]


def test_exported_structures_are_those_that_came_back(cli, out, tmp_path):
    """ASE reads both; distances, energies, lengths of forces and stress invariants do not depend on the frame."""
    path = tmp_path / "all.extxyz"
    rng = np.random.default_rng(6)
    for file in out.glob("runs/*/*/jobs/*/returned.extxyz"):
        atoms = ase.io.read(file, format="extxyz")
        info = {"energy": float(rng.normal()), "stress": atoms.get_stress(voigt=False)}
        atoms.rattle(0.02, rng=rng)
        file.write_text(extxyz_text(Crystal.from_atoms(atoms), info, rng.normal(scale=1e-4, size=(len(atoms), 3))))
    assert cli("collect", out, "--export", path).code == 0
    frames = ase.io.read(path, index=":", format="extxyz")
    assert len(frames) == load_campaign(out).jobs
    place = {f"{load_plan(out / m.run).crystal.name}": out / m.run for m in load_campaign(out).members}
    for frame in frames:
        back = ase.io.read(place[frame.info["name"]] / "jobs" / frame.info["job"] / "returned.extxyz", format="extxyz")
        np.testing.assert_allclose(frame.get_all_distances(mic=True), back.get_all_distances(mic=True), atol=1e-7)
        assert frame.get_potential_energy() == pytest.approx(back.get_potential_energy())
        lengths = (np.linalg.norm(a.get_forces(), axis=1) for a in (frame, back))
        np.testing.assert_allclose(*lengths, atol=1e-10)
        mine, theirs = (np.linalg.eigvalsh(a.get_stress(voigt=False)) for a in (frame, back))
        np.testing.assert_allclose(mine, theirs, atol=1e-9)


def test_progress_and_resubmission_across_the_campaign(cli, made, tmp_path):
    settings = tmp_path / "site.toml"
    settings.write_text("[site]\narray_limit = 4\nbundle = 2\n")
    deck = write_deck(tmp_path / "deck")
    out = tmp_path / "out"
    options = ("--deck", deck, "--settings", settings, "--scheduler", "slurm", "--format", "extxyz", "--json")
    made_now = cli("prepare", made / "cells", "--out", out, *options)
    assert made_now.code == 0
    campaign = load_campaign(out)
    count = -(-campaign.jobs // 8)
    lists = [out / ("joblist.txt" if n == 1 else f"joblist-{n}.txt") for n in range(1, count + 1)]
    listed = [line for path in lists for line in path.read_text().split()]
    assert len(listed) == len(set(listed)) == campaign.jobs
    assert max(len(path.read_text().split()) for path in lists) == 8
    assert not (out / f"joblist-{count + 1}.txt").exists()
    assert "#SBATCH --array=1-4\n" in (out / "submit.sh").read_text()
    assert made_now.json["submit"] == f'for script in submit.sh submit-{{2..{count}}}.sh; do sbatch "$script"; done'

    done = subprocess.run(["bash", "submit.sh", "3"], cwd=out, capture_output=True, text=True)
    assert done.returncode == 0, done.stderr
    whole = subprocess.run(["bash", f"submit-{count}.sh", "all"], cwd=out, capture_output=True, text=True)
    assert whole.returncode == 0, whole.stderr
    state = cli("progress", out, "--resubmit", "--json")
    assert state.code == 4
    finished = {*listed[4:6], *lists[-1].read_text().split()}
    assert sum_of_done(state) == len(finished)
    assert state.json["states"]["missing"] == campaign.jobs - len(finished)
    assert state.json["resubmit"] == [job for job in listed if job not in finished]
    new = state.json["resubmission"]["lists"]
    assert [line for name in new for line in (out / name).read_text().split()] == state.json["resubmit"]
    script = (out / new[0].replace("joblist", "submit").replace(".txt", ".sh")).read_text()
    assert f"list={new[0]}\n" in script
    assert f"--output=logs/{count + 1}/" in script
    assert (out / "logs" / str(count + 1)).is_dir()
    typed = state.json["resubmission"]["submit"].replace('sbatch "$script"', 'bash "$script" all')
    assert subprocess.run(["bash", "-c", typed], cwd=out).returncode == 0
    assert sum_of_done(cli("progress", out, "--json")) == campaign.jobs


@pytest.mark.parametrize(
    ("scheduler", "task", "place"),
    [
        ("slurm", "SLURM_ARRAY_TASK_ID", "SLURM_SUBMIT_DIR"),
        ("pbs", "PBS_ARRAY_INDEX", "PBS_O_WORKDIR"),
        ("lsf", "LSB_JOBINDEX", "LS_SUBCWD"),
        ("sge", "SGE_TASK_ID", "SGE_O_WORKDIR"),
    ],
)
def test_the_script_of_the_campaign_runs_those_of_the_runs(cli, need, tmp_path, scheduler, task, place):
    """From a copy elsewhere, as schedulers keep it, with stand-ins for their variables; and read by shellcheck."""
    need("shellcheck")
    write_cells(tmp_path / "cells", np.random.default_rng(1), classes=("m-3m", "m-3"))
    deck, out = write_deck(tmp_path / "deck"), tmp_path / "out"
    settings = tmp_path / "site.toml"
    settings.write_text('[site]\nbundle = 2\nwalltime = "00:10:00"\n')
    options = ("--deck", deck, "--settings", settings, "--scheduler", scheduler, "--format", "extxyz")
    assert cli("prepare", tmp_path / "cells", "--out", out, *options).code == 0
    checked = subprocess.run(["shellcheck", "--severity=style", out / "submit.sh"], capture_output=True, text=True)
    assert checked.returncode == 0, checked.stdout
    spool = tmp_path / "spool"
    spool.mkdir()
    shutil.copy(out / "submit.sh", spool / "script")
    environment = {**os.environ, task: "2", place: str(out)}
    done = subprocess.run(["bash", spool / "script"], cwd=spool, env=environment, capture_output=True, text=True)
    assert done.returncode == 0, done.stderr
    listed = (out / "joblist.txt").read_text().split()
    assert [job for job in listed if (out / job / "done").exists()] == listed[2:4]


def sum_of_done(result) -> int:
    """Jobs that ended well; the checks of a whole set may suspect the one stress that this program knows."""
    return result.json["states"].get("done", 0) + result.json["states"].get("suspect", 0)
