"""What the next attempt begins from when the last one left nothing, half a step, or a whole one; without the programs.

The forms of the programs' files are those of their manuals, written from memory; the numbers are invented. The shell is real.
"""

from __future__ import annotations

import shutil
import subprocess
import sys
import types
from pathlib import Path

import numpy as np
import pytest

from strainkit.crystal.crystal import Crystal
from strainkit.prepare.calculation import plan_calculation
from strainkit.prepare.relaxation import write_relaxation
from strainkit.prepare.settings import Settings

HEAD = "title\n1.0\n 0.0 2.8 2.8\n 2.8 0.0 2.8\n 2.8 2.8 0.0\nSi\n2\nDirect\n"
GEOMETRY = "lattice_vector 0.0 2.8 2.8\nlattice_vector 2.8 0.0 2.8\nlattice_vector 2.8 2.8 0.0\n"
FRAME = " 0.0 5.3 5.3 <-- h\n 5.3 0.0 5.3 <-- h\n 5.3 5.3 0.0 <-- h\n Si 1 0.0 0.0 0.0 <-- R\n"

#: deck: (file that an attempt leaves, first input, input of the second attempt, what a whole last step looks like)
LEFT = {
    "qe": ("pw-1.out", "pw.in", "pw-2.in", "ATOMIC_POSITIONS (crystal)\nSi 0.0 0.0 0.0\nSi 0.26125 0.25 0.25125\n"),
    "abinit": ("abinit-1.abo", "abinit.abi", "abinit-2.abi", "Reduced coordinates (xred)\n 0 0 0\n 0.26125 0.25 0.25125\n"),
    "castep": ("castep-1.geom", "castep.cell", "castep-2.cell", f"{FRAME} Si 2 2.26125 2.0 2.25125 <-- R\n"),
    "vasp": ("CONTCAR", "POSCAR", "POSCAR", f"{HEAD} 0.0 0.0 0.0\n 0.26125 0.25 0.25125\n"),
    "aims": ("geometry.in.next_step", "geometry.in", "geometry.in", f"{GEOMETRY}atom 0 0 0 Si\natom 1.26125 1.3 1.3125 Si\n"),
    "cp2k": ("strainkit-1.restart", "cp2k.inp", "cp2k-2.inp", "&FORCE_EVAL\n Si 1.26125 1.3 1.3125\n&END FORCE_EVAL\n"),
}  # fmt: skip


def folder(tmp_path: Path, deck: str) -> Path:
    lattice = 2.716 * np.array([[0, 1, 1], [1, 0, 1], [1, 1, 0]])
    crystal = Crystal(lattice, [[0, 0, 0], [0.25, 0.25, 0.25]], [14, 14], name="silicon")
    species = tmp_path / "library" / ("Si/POTCAR" if deck == "vasp" else "Si")
    species.parent.mkdir(parents=True)
    species.write_text("potential\n")
    settings = Settings(pseudopotentials={} if deck == "gpaw" else {"Si": "Si"}, folder=str(tmp_path / "library"))
    write_relaxation(plan_calculation(deck, crystal, "cell", settings, 0.5), tmp_path / "job", "bash")
    return tmp_path / "job"


def attempt(job: Path, number: int) -> None:
    steps = (job / "submit.sh").read_text().partition("# what this program needs")[2].partition('child=""')[0]
    subprocess.run(["bash", "-c", f"#{steps}\nn={number}; make_inputs || exit 1"], cwd=job, timeout=20, check=True)


@pytest.mark.parametrize("deck", LEFT)
def test_an_attempt_begins_from_a_whole_step_or_from_the_start(tmp_path, deck):
    name, first, second, whole = LEFT[deck]
    start = (folder(tmp_path, deck) / first).read_text()
    assert start
    cuts = [None, "", whole[: len(whole) // 2], whole[: -len("25\n")], whole[: whole.rindex("\n", 0, -1) + 1]]
    for number, left in enumerate([*cuts, whole]):
        job = shutil.copytree(tmp_path / "job", tmp_path / f"{number}")
        attempt(job, 1)
        if left is not None:
            (job / name).write_text(left)
        attempt(job, 2)
        made = (job / second).read_text()
        if left == whole:
            assert ".26125" in made
        else:
            assert made == start, left


def test_gpaw_begins_from_a_whole_step_or_from_the_start(tmp_path, monkeypatch):
    from ase.io import read, write

    job = folder(tmp_path, "gpaw")
    head = (job / "gpaw_job.py").read_text().partition("atoms.calc")[0]
    monkeypatch.chdir(job)
    monkeypatch.setattr(sys, "argv", ["gpaw_job.py", "2"])
    monkeypatch.setitem(sys.modules, "gpaw", types.SimpleNamespace(GPAW=None, PW=None))
    start = read("start.extxyz")
    moved = start.copy()
    moved.positions[1] += 0.01
    write("whole.traj", moved)
    whole = Path("whole.traj").read_bytes()
    for content, expected in ((b"", start), (whole[:40], start), (whole, moved)):
        Path("relax-1.traj").write_bytes(content)
        names: dict = {}
        exec(head, names)
        np.testing.assert_allclose(names["atoms"].positions, expected.positions, atol=1e-12)
