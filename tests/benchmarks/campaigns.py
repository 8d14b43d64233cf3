"""Cost of campaigns as ratios taken in one run: against ASE's writers and readers, and from 100 to 1,000 crystals.

Crystals are invented ones of all Laue classes with 20 to 200 atoms in random orientations, and the sample cells. prepare: CPU
time of reading, planning and writing run folders (POSCAR and CIF of every job), over that of writing the same cells as the same
two formats through ASE. collect: CPU time of the collection over that of reading the same outputs through ASE, or of parsing
them alone by strainkit's own reader. fit: crystals a second of one core, two magnitudes, data in memory; and the whole
command, files included. memory: peak of one process over 1,000 crystals against 100. help: strainkit --help against a typer
program with one command.

Run: python tests/benchmarks/campaigns.py [CRYSTALS] [SIMULATED]     by default 200 and 10000; it takes some minutes
"""

from __future__ import annotations

import json
import os
import resource
import subprocess
import sys
import tempfile
import time
from collections.abc import Callable
from pathlib import Path

os.environ.setdefault("OPENBLAS_NUM_THREADS", "1")
os.environ.setdefault("OMP_NUM_THREADS", "1")
sys.path.insert(0, str(Path(__file__).resolve().parent.parent))

import ase.io
import numpy as np
from ase.geometry import cellpar_to_cell
from ase.spacegroup import Spacegroup
from support.campaigns import published_law, return_jobs
from support.crystals import SPACE_GROUPS, random_rotation, rewritten

from strainkit.cli.each import collect_one, fit_one
from strainkit.collect.readers import READERS, read_returned
from strainkit.collect.table import load_table
from strainkit.crystal.crystal import Crystal
from strainkit.crystal.read import read_crystal
from strainkit.fit.options import FitOptions
from strainkit.fit.result import fit_run
from strainkit.prepare.runfolder import plan_run, write_run
from strainkit.run.extxyz import RETURNED, extxyz_text
from strainkit.run.plan import load_plan
from strainkit.shipped import shipped_folder

SIZES = (0.005, 0.01)


def cells(folder: Path, count: int, rng: np.random.Generator) -> list[Path]:
    """Files of sample cells and of invented crystals of 20 to 200 atoms."""
    paths = []
    samples = sorted(shipped_folder("sample_cells").glob("*.cif"))
    for number in range(count):
        if number % 5 == 0:
            text = samples[number // 5 % len(samples)].read_text()
            path = folder / f"c{number}.cif"
        else:
            text = extxyz_text(invented(rng), {})
            path = folder / f"c{number}.extxyz"
        path.write_text(text)
        paths.append(path)
    return paths


def invented(rng: np.random.Generator) -> Crystal:
    """Atoms scattered in a cell of a random Laue class, 20 to 200 of them, none closer than 1.7 A to another."""
    while True:
        number, parameters = list(SPACE_GROUPS.values())[rng.integers(len(SPACE_GROUPS))]
        wanted = int(rng.integers(20, 201))
        scale = (wanted * 18.0 / np.linalg.det(cellpar_to_cell(parameters))) ** (1 / 3)
        cell = [*(scale * np.array(parameters[:3])), *parameters[3:]]
        lattice, group = cellpar_to_cell(cell), Spacegroup(number)
        placed = np.zeros((0, 3))
        for _ in range(400):
            orbit = group.equivalent_sites(rng.uniform(size=3))[0]
            between = orbit[:, None] - np.concatenate([placed, orbit])
            away = np.linalg.norm((between - np.round(between)) @ lattice, axis=-1)
            away[np.arange(len(orbit)), len(placed) + np.arange(len(orbit))] = 9.0
            if away.min() > 1.7:
                placed = np.concatenate([placed, orbit])
            if len(placed) >= wanted:
                break
        if 20 <= len(placed) <= 200:
            given = Crystal(lattice, placed, np.full(len(placed), 12), "invented")
            return rewritten(given, random_rotation(rng), np.eye(3, dtype=int))


def cpu(work: Callable[[], object]) -> float:
    """Processor seconds of some work."""
    start = time.process_time()
    work()
    return time.process_time() - start


def prepare_all(paths: list[Path], out: Path) -> None:
    for path in paths:
        write_run(plan_run(read_crystal(path), SIZES), out / path.stem)


def bare_write(paths: list[Path], out: Path) -> float:
    """ASE writing the same cells; choosing them is not counted."""
    total = 0.0
    for path in paths:
        plan = load_plan(out / path.stem)
        frames = [plan.starting_cell(job).to_atoms() for job in plan.jobs]
        with tempfile.TemporaryDirectory() as folder:

            def write(frames=frames, folder=folder) -> None:
                for number, atoms in enumerate(frames):
                    ase.io.write(f"{folder}/{number}.vasp", atoms, format="vasp", direct=True)
                    ase.io.write(f"{folder}/{number}.cif", atoms, format="cif")

            total += cpu(write)
    return total


def give_back(paths: list[Path], out: Path, rng: np.random.Generator) -> None:
    for path in paths:
        plan = load_plan(out / path.stem)
        return_jobs(out / path.stem, plan, published_law(plan), rng, noise=5e-4)


def parse_all(runs: list[Path]) -> None:
    reader = next(r for r in READERS if r.program == "extended XYZ")
    for run in runs:
        for path in run.glob(f"jobs/*/{RETURNED}"):
            read_returned(path, reader)


def parse_ase(runs: list[Path]) -> None:
    for run in runs:
        for path in run.glob(f"jobs/*/{RETURNED}"):
            ase.io.read(path, format="extxyz")


def fit_rate(runs: list[Path]) -> float:
    """Crystals a second of one core, data in memory, the best of five rounds."""
    loaded = [(load_plan(run), load_table(run)) for run in runs]
    for plan, table in loaded:
        fit_run(plan, table)
    return len(loaded) / min(cpu(lambda: [fit_run(*pair) for pair in loaded]) for _ in range(5))


def memory(base: Path, runs: list[Path], count: int) -> float:
    """Peak memory, MB, of collect and fit of a campaign of so many crystals in a process of its own."""
    code = (
        "import resource, sys\nfrom functools import partial\nfrom pathlib import Path\n"
        "from strainkit.cli.loop import loop\nfrom strainkit.cli.each import collect_one, fit_one\n"
        "from strainkit.fit.options import FitOptions\n"
        "loop(Path(sys.argv[1]), 'collect', partial(collect_one, False), 1, True)\n"
        "loop(Path(sys.argv[1]), 'fit', partial(fit_one, FitOptions(), True), 1, True)\n"
        "print(resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1024)\n"
    )
    campaign = base / f"first-{count}"
    place = campaign / "runs/001"
    place.mkdir(parents=True)
    names = [f"c{number}" for number in range(count)]
    for number, name in enumerate(names):  # the same runs again and again
        (place / name).symlink_to(runs[number % len(runs)])
    crystals = [
        {"name": n, "run": f"runs/001/{n}", "source": n, "source_sha256": "", "laue_class": "", "jobs": 0} for n in names
    ]
    data = {"schema": "strainkit/campaign/1", "recipe_sha256": "", "refused_cells": [], "crystals": crystals}
    (campaign / "campaign.json").write_text(json.dumps(data))
    return float(subprocess.run([sys.executable, "-c", code, campaign], capture_output=True, text=True, check=True).stdout)


def help_ratio() -> float:
    """strainkit --help over a typer program with one command, the best of nine fresh processes each."""
    bare = "import typer\napp = typer.Typer(rich_markup_mode=None)\n@app.command()\ndef f(x: int = 1): ...\napp(['--help'])"
    ours = "from strainkit.cli.main import app\napp(['--help'])"
    times = {}
    for name, code in (("bare", bare), ("ours", ours)):
        every = []
        for _ in range(9):
            before = resource.getrusage(resource.RUSAGE_CHILDREN)
            subprocess.run([sys.executable, "-c", code], capture_output=True, check=True)
            after = resource.getrusage(resource.RUSAGE_CHILDREN)
            every.append(after.ru_utime + after.ru_stime - before.ru_utime - before.ru_stime)
        times[name] = min(every)
    return times["ours"] / times["bare"]


def simulate(count: int, runs: list[Path]) -> tuple[float, float]:
    """Seconds of CPU of collecting and fitting many crystals of small records: the same runs again and again."""
    small = sorted(runs, key=lambda run: (run / "strain-set.json").stat().st_size)[:50]
    todo = [small[i % len(small)] for i in range(count)]
    return (
        cpu(lambda: [collect_one(True, run) for run in todo]),
        cpu(lambda: [fit_one(FitOptions(), True, run) for run in todo]),
    )


def main() -> None:
    count = int(sys.argv[1]) if len(sys.argv) > 1 else 200
    many = int(sys.argv[2]) if len(sys.argv) > 2 else 10_000
    rng = np.random.default_rng(0)
    with tempfile.TemporaryDirectory() as folder:
        base = Path(folder)
        place = base / "out/runs/001"
        place.mkdir(parents=True)
        paths = cells(base, count, rng)
        prepare_all(paths[:60], base / "warm")  # the strains of every Laue class are sought once
        mine = cpu(lambda: prepare_all(paths, place))
        theirs = bare_write(paths, place)
        atoms = [len(load_plan(place / p.stem).crystal.numbers) for p in paths]
        jobs = sum(len(load_plan(place / p.stem).jobs) for p in paths)
        print(f"{count} crystals of {min(atoms)} to {max(atoms)} atoms, {jobs} jobs")
        print(f"prepare   {mine / count * 1e3:6.1f} ms a crystal, {mine / theirs:.2f} times ASE's bare write")
        give_back(paths, place, rng)
        runs = [place / p.stem for p in paths]
        own, other = cpu(lambda: parse_all(runs)), cpu(lambda: parse_ase(runs))
        collect = cpu(lambda: [collect_one(True, run) for run in runs])
        print(f"collect   {collect / count * 1e3:6.1f} ms a crystal, {collect / other:.2f} times ASE's bare read, ", end="")
        print(f"{collect / own:.2f} times our own readers alone")
        again = cpu(lambda: [collect_one(False, run) for run in runs])
        print(f"          {again / count * 1e3:6.1f} ms a crystal where nothing changed")
        rate = fit_rate(runs[:200])
        whole = cpu(lambda: [fit_one(FitOptions(), True, run) for run in runs])
        print(f"fit       {rate:6.0f} crystals a second a core, files included {count / whole:.0f}")
        small, large = (memory(base, runs[:50], number) for number in (100, 1000))
        print(f"memory    {large:6.0f} MB at 1000 crystals, {large / small:.2f} times that at 100")
        print(f"help      {help_ratio():6.2f} times a bare typer program")
        if many:
            one, two = simulate(many, runs)
            print(f"simulated {many} crystals of small records: collect {one:.0f} s, fit {two:.0f} s of one core")


if __name__ == "__main__":
    main()
