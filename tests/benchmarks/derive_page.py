"""Time of everything that `strainkit derive` computes, for the cheapest and the dearest Laue class, with and without errors.

Seconds depend on the machine, so each is also given in units of a fixed piece of work of the same run: the eigenvalues of
20,000 symmetric 6x6 matrices. Best of five.

Run: OMP_NUM_THREADS=1 python tests/benchmarks/derive_page.py
"""

from __future__ import annotations

import sys
import time
from collections.abc import Callable
from dataclasses import replace
from pathlib import Path

import numpy as np

sys.path.insert(0, str(Path(__file__).parent.parent))

from support.crystals import conventional
from support.published import BY_LAUE_CLASS, mandel

from strainkit.crystal.symmetry import find_symmetry
from strainkit.derive.derived import derive_properties
from strainkit.derive.elastic import from_tensor_file
from strainkit.tensors.sixvectors import stiffness_to_voigt
from strainkit.tensors.textfile import parse_tensor


def best(work: Callable[[], object]) -> float:
    """Shortest of five processor times, seconds."""
    times = []
    for _ in range(5):
        start = time.process_time()
        work()
        times.append(time.process_time() - start)
    return min(times)


def main() -> None:
    """Print the table."""
    matrices = np.random.default_rng(0).normal(size=(20_000, 6, 6))
    unit = best(lambda: np.linalg.eigvalsh(matrices + matrices.transpose(0, 2, 1)))
    for laue in ("m-3m", "-1"):
        crystal = conventional(laue)
        rows = [" ".join(f"{x:.3f}" for x in row) for row in stiffness_to_voigt(mandel(BY_LAUE_CLASS[laue]))]
        text = "\n".join([f"laue {laue}", *rows, "errors", *["0.5 0.5 0.5 0.5 0.5 0.5"] * 6])
        elastic = from_tensor_file(parse_tensor(text), crystal, find_symmetry(crystal), "ieee")
        bare = replace(elastic.moduli, covariance=None)
        for words, moduli in (("with errors", elastic.moduli), ("without", bare)):
            seconds = best(
                lambda m=moduli, e=elastic: derive_properties(replace(e, moduli=m, waves=m), [(0, 1, 2)], [(1, 1, 0)])
            )
            print(f"{laue:6} {words:12} {seconds:6.2f} s  {seconds / unit:6.1f} units")


if __name__ == "__main__":
    main()
