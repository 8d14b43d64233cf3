"""How long collect takes against the bare parse of the same files, in one run, and how much memory it needs.

One run folder with many small jobs (24 atoms, extended XYZ with forces: of all formats the fastest to parse, so the hardest).
The bare parse is `recognise` and `read_returned` on every file, with as many processes. Both are timed three times, in turn,
and the fastest time counts. A second collection reads nothing.

Then whole collections of real outputs (hexagonal silicon of Quantum ESPRESSO, tests/data/sets, nine jobs) as they are, and with
one of their ionic steps printed more often, as in longer relaxations: CPU time over that of the bare parse of the same files.

Run: python tests/benchmarks/collect_speed.py [JOBS] [PROCESSES]
"""

from __future__ import annotations

import lzma
import re
import resource
import sys
import tempfile
import time
from concurrent.futures import ProcessPoolExecutor
from dataclasses import replace
from multiprocessing import get_context
from pathlib import Path

import numpy as np

sys.path.insert(0, str(Path(__file__).parent.parent))

from support.crystals import conventional
from support.published import mandel
from support.realsets import unpack
from support.returned import linear_law

from strainkit.cli.each import collect_one
from strainkit.collect.gather import collect_run
from strainkit.collect.readers import read_returned, recognise
from strainkit.design.jobs import StrainJob
from strainkit.prepare.runfolder import plan_run
from strainkit.run.extxyz import RETURNED, extxyz_text
from strainkit.run.plan import Plan, job_folder
from strainkit.tensors.strain import cauchy_from_pk2, gradient_from_strain
from strainkit.units import EV_PER_A3_IN_GPA


def many(jobs: int) -> Plan:
    """A plan of as many jobs as asked for: the shapes of one crystal at ever larger magnitudes."""
    plan = plan_run(conventional("mmm"))
    units = [job for job in plan.jobs if job.shape]
    more: list[StrainJob] = [plan.jobs[0]]
    for i in range(jobs - 1):
        size = 0.002 + 1e-5 * (i // len(units))
        base = units[i % len(units)]
        strain = base.strain * size / abs(base.magnitude)
        label = f"s{base.shape}-{i}"
        more.append(StrainJob(label, base.shape, size * np.sign(base.magnitude), gradient_from_strain(strain), "finer"))
    return replace(plan, jobs=tuple(more))


def fill(run: Path, plan: Plan) -> list[Path]:
    """Outputs of 24 atoms with forces; their paths."""
    law = linear_law(mandel("aragonite_Liu2005"))
    rng = np.random.default_rng(0)
    paths = []
    for job in plan.jobs:
        folder = run / job_folder(job.label)
        folder.mkdir(parents=True)
        cell = plan.crystal.deformed(job.gradient)
        sigma = cauchy_from_pk2(law(job.strain), job.gradient) / EV_PER_A3_IN_GPA
        text = extxyz_text(cell, {"energy": -1.0, "stress": sigma}, 1e-5 * rng.normal(size=cell.positions.shape))
        (folder / RETURNED).write_text(text)
        paths.append(folder / RETURNED)
    return paths


def bare(paths: list[Path]) -> int:
    """Recognise and parse, and no more."""
    count = 0
    for path in paths:
        reader = recognise(path)
        assert reader is not None
        count += read_returned(path, reader).stress is not None
    return count


def parse_all(paths: list[Path], workers: int) -> None:
    """The bare parse in some processes."""
    if workers == 1:
        bare(paths)
        return
    with ProcessPoolExecutor(workers, mp_context=get_context("fork")) as pool:
        list(pool.map(bare, [paths[i : i + 50] for i in range(0, len(paths), 50)]))


def longer(text: str, more: int) -> str:
    """An output of pw.x with its second ionic step printed `more` times more."""
    first, second = (match.start() for match in list(re.finditer("     Self-consistent Calculation", text))[1:3])
    return text[:first] + (more + 1) * text[first:second] + text[second:]


def real(more: int, sets: int = 10) -> tuple[float, float]:
    """Size of an output (kB), and CPU time of collecting some sets over that of parsing their files; the best of three."""
    with tempfile.TemporaryDirectory() as folder:
        runs = [Path(folder) / str(number) for number in range(sets)]
        for run in runs:
            unpack("hexagonal_silicon_qe", run)
            for packed in run.glob("jobs/*/*.xz"):
                packed.with_suffix("").write_text(longer(lzma.decompress(packed.read_bytes()).decode(), more))
                packed.unlink()
        paths = [path for run in runs for path in run.glob("jobs/*/*.out")]
        parse = whole = float("inf")
        for _ in range(3):
            start = time.process_time()
            bare(paths)
            parse = min(parse, time.process_time() - start)
            for run in runs:
                (run / "stresses.json").unlink(missing_ok=True)  # so that every file is read again
            start = time.process_time()
            summaries = [collect_one(True, run) for run in runs]
            whole = min(whole, time.process_time() - start)
            assert all(summary["usable"] == 9 for summary in summaries)
        return sum(path.stat().st_size for path in paths) / len(paths) / 1e3, whole / parse


def main() -> None:
    jobs = int(sys.argv[1]) if len(sys.argv) > 1 else 10_000
    workers = int(sys.argv[2]) if len(sys.argv) > 2 else 2
    with tempfile.TemporaryDirectory() as folder:
        run = Path(folder)
        plan = many(jobs)
        paths = fill(run, plan)
        parse = first = float("inf")
        for _ in range(3):
            start = time.perf_counter()
            parse_all(paths, workers)
            parse = min(parse, time.perf_counter() - start)
            start = time.perf_counter()
            table = collect_run(run, plan, workers=workers)
            first = min(first, time.perf_counter() - start)
            assert len(table.usable) == jobs
        start = time.perf_counter()
        table.save(run)
        save = time.perf_counter() - start
        start = time.perf_counter()
        collect_run(run, plan, workers=workers)
        again = time.perf_counter() - start
        peak = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1024
    print(
        f"{jobs} jobs, {workers} processes: bare parse {parse:.2f} s, collect {first:.2f} s, ratio {first / parse:.2f}; "
        f"writing the table {save:.2f} s; again without changes {again:.2f} s; peak memory {peak:.0f} MB"
    )
    for more in (0, 20, 80):
        size, ratio = real(more)
        print(f"real outputs of {size:.0f} kB: collect {ratio:.2f} times the bare parse")


if __name__ == "__main__":
    main()
