"""Jobs and expected errors of strainkit's sets beside the published high-throughput protocol, for every Laue class.

Protocol: six single-component strains at +-0.5 % and +-1 %, 24 jobs for every crystal (M. de Jong et al., Sci. Data 2,
150009, 2015). All sets are judged by the same formula: standard errors of the independent constants in IEEE axes, root
mean square over the constants, for a noise of 0.01 GPa in every stress component. "Same size" holds the largest
principal strain at 1 %, "same norm" the largest Frobenius norm at that of the protocol.

Run: python tests/benchmarks/strain_sets.py
"""

from __future__ import annotations

import sys
from pathlib import Path

import numpy as np

sys.path.insert(0, str(Path(__file__).parent.parent))

from support.groups import COUNTS, LAUE_CLASSES, rotations

from strainkit.design.aims import fewest, sharpest
from strainkit.design.expect import expect
from strainkit.design.jobs import StrainJob, reference_job, strained_jobs
from strainkit.design.symmetric import most_symmetric
from strainkit.tensors.constants import constant_basis
from strainkit.tensors.invariants import invariant_matrices
from strainkit.tensors.sixvectors import from_mandel
from strainkit.tensors.strain import gradient_from_strain

SIZE = 0.01


def protocol() -> list[StrainJob]:
    """The 24 single-component strains, tensor components of 0.5 and 1 %."""
    jobs = []
    for number, component in enumerate(np.eye(6), start=1):
        unit = from_mandel(component)
        unit /= np.abs(np.linalg.eigvalsh(unit)).max()
        for size in (0.5 * SIZE, SIZE, -0.5 * SIZE, -SIZE):
            jobs.append(StrainJob(f"p{number}{size:+g}", number, size, gradient_from_strain(size * unit)))
    return jobs


def judged(jobs, group):
    basis = constant_basis(invariant_matrices(group), np.eye(3))
    promise, _ = expect([reference_job(), *jobs], group, basis)
    errors = np.array(list(promise.standard_errors.values()), dtype=float)
    return len(jobs), float(np.sqrt((errors**2).mean())), promise.relative_cost


def main() -> None:
    """Print the table."""
    heads = ["Laue class", "constants", "protocol: jobs", "error", "fewest: jobs", "same size", "same norm"]
    heads += ["symmetric: jobs", "error", "cost, of fewest", "sharpest, 24 jobs"]
    print("| " + " | ".join(heads) + " |\n" + "|---" * len(heads) + "|")
    norm = 2**0.5 * SIZE
    for laue in LAUE_CLASSES:
        group = rotations(laue)
        units = fewest(group)
        largest = np.linalg.norm(units, axis=1).max()
        sets = [
            judged(protocol(), group),
            judged(strained_jobs(from_mandel(units), [SIZE], group), group),
            judged(strained_jobs(from_mandel(units), [norm / largest], group), group),
            judged(strained_jobs(from_mandel(most_symmetric(group)), [SIZE], group), group),
            judged(strained_jobs(from_mandel(sharpest(group, 24)), [SIZE], group), group),
        ]
        (n0, e0, _), (n1, e1, c1), (_, e2, _), (n3, e3, c3), (_, e4, _) = sets
        cells = [laue, COUNTS[laue][0], n0, f"{e0:.2f}", n1, f"{e1:.2f}", f"{e2:.2f}"]
        cells += [n3, f"{e3:.2f}", f"{c3:g}, {c1:g}", f"{e4:.2f}"]
        print("| " + " | ".join(map(str, cells)) + " |")


if __name__ == "__main__":
    main()
