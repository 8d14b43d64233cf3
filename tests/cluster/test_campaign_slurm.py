"""A campaign of two thousand tasks through a real Slurm: arrays within its limit, one task a crystal that fails at first."""

from __future__ import annotations

import re
import subprocess
import time
from pathlib import Path

import numpy as np
import pytest
from support.campaigns import DECK, write_cells

from strainkit.run.campaign import load_campaign

CRYSTALS, JOBS = 33, 60
#: the first attempt at one job of every crystal ends without a result
FAILING = DECK["steps.sh"].replace(
    "  sleep {{ deck.pause }}\n", '  if [ "$n" = 1 ] && [ "$(basename "$PWD")" = s2-plus-1 ]; then return 1; fi\n'
)


def typed(folder: Path, command: str) -> list[str]:
    """Numbers of the arrays that a typed command submitted."""
    done = subprocess.run(["bash", "-c", command], cwd=folder, capture_output=True, text=True)
    assert done.returncode == 0, done.stderr
    return re.findall(r"Submitted batch job (\d+)", done.stdout)


def wait_until_done(out: Path, wanted: int, seconds: float) -> None:
    deadline = time.monotonic() + seconds
    while (found := sum(1 for _ in out.glob("runs/001/*/jobs/*/done"))) < wanted:
        assert time.monotonic() < deadline, f"{found} of {wanted} jobs after {seconds:g} s"
        time.sleep(2.0)


@pytest.mark.engine
@pytest.mark.slow
def test_two_thousand_tasks(cli, start_slurm, tmp_path):
    start_slurm(32)
    deck = tmp_path / "deck"
    deck.mkdir()
    for name, text in {**DECK, "steps.sh": FAILING}.items():
        (deck / name).write_text(text)
    settings = tmp_path / "site.toml"
    settings.write_text('[site]\narray_limit = 900\nwalltime = "00:05:00"\n')
    write_cells(tmp_path / "cells", np.random.default_rng(0), CRYSTALS, ("2/m",))
    out = tmp_path / "out"
    options = ("--deck", deck, "--settings", settings, "--scheduler", "slurm", "--format", "extxyz", "--json")
    made = cli("prepare", tmp_path / "cells", "--aim", "sharpest", "--jobs", JOBS, "--out", out, *options)
    assert made.code == 0, made.err
    total = CRYSTALS * (JOBS + 1)
    assert load_campaign(out).jobs == total > 2000
    # Slurm itself, as it comes, takes no array of so many
    whole = subprocess.run(["sbatch", f"--array=1-{total}", "submit.sh"], cwd=out, capture_output=True, text=True)
    assert whole.returncode != 0

    arrays = typed(out, made.json["submit"])
    assert len(arrays) == 3
    state = cli("progress", out, "--queue", "--json").json
    assert sum(state["states"].values()) == total
    assert state["states"].get("missing", 0) == 0  # what has not begun waits in the queue
    assert not set(state["resubmit"]) & {f"{m.run}/jobs/reference" for m in load_campaign(out).members}
    wait_until_done(out, total - CRYSTALS, 600)
    while subprocess.run(["squeue", "-h", "-r"], capture_output=True, text=True, check=True).stdout.strip():
        time.sleep(0.5)
    assert all(len(list(folder.iterdir())) <= 900 for folder in (out / "logs").iterdir())

    state = cli("progress", out, "--queue", "--resubmit", "--json").json
    assert state["states"]["failed"] == CRYSTALS
    assert sorted(state["resubmit"]) == sorted(f"{m.run}/jobs/s2-plus-1" for m in load_campaign(out).members)
    assert state["resubmission"]["lists"] == ["joblist-4.txt"]
    assert len(typed(out, state["resubmission"]["submit"])) == 1
    wait_until_done(out, total, 300)
    for attempts in out.glob("runs/001/*/jobs/*/attempts.txt"):  # nothing ran twice
        expected = 2 if attempts.parent.name == "s2-plus-1" else 1
        assert attempts.read_text().count("start ") == expected
