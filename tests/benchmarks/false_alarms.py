"""How often two fits of one true crystal seem to differ: python tests/benchmarks/false_alarms.py

Gaussian noise, the fewest jobs at 1 %, published tensors (tests/data/published_stiffness.json); every cell is the share, in
percent, of 5,000 simulated pairs in which at least one of all constants and Hill averages is told apart at the 95 % level
after Holm, and in brackets the same with Welch's approximate degrees of freedom. The sampling error is 0.2 to 0.3 %.
"""

from __future__ import annotations

import sys
from pathlib import Path

import numpy as np

sys.path.insert(0, str(Path(__file__).parent.parent))

from scipy.special import stdtr
from support.crystals import conventional
from support.published import BY_LAUE_CLASS, mandel

from strainkit.derive.significance import LEVEL, holm, two_sided
from strainkit.design.model import build_model
from strainkit.fit.regression import Estimator
from strainkit.prepare.runfolder import plan_run
from strainkit.tensors.averages import averages_of
from strainkit.tensors.stiffness import Stiffness
from strainkit.tensors.strain import green_lagrange

#: noise of the second fit in units of that of the first; None: the second one's noise is known and a third of the first's
RATIOS = (1.0, 3.0, 10.0, None)
PAIRS, CHUNK = 5_000, 1000


def alarms(laue: str, ratio: float | None, rng: np.random.Generator) -> tuple[float, float]:
    """Percent of pairs with any alarm: the test of strainkit, and Welch's."""
    truth = mandel(BY_LAUE_CLASS[laue])
    plan = plan_run(conventional(laue), [0.01])
    strains = green_lagrange(np.array([job.gradient for job in plan.jobs]))
    estimator = Estimator.of(build_model(strains, plan.symmetry.rotations, plan.basis.matrices))
    unit, true = estimator.unit_covariance, plan.basis.values(truth)
    flat = plan.basis.matrices.reshape(len(true), 36)
    averages = Stiffness(truth, flat.T @ unit @ flat).standard_error_of(averages_of)[:, 2]
    per_noise = np.concatenate([np.sqrt(np.diag(unit)), averages])
    first = 2e-4 * float(np.linalg.eigvalsh(truth).mean())
    freedom = (estimator.odd_freedom, estimator.odd_freedom if ratio is not None else None)
    count = np.zeros(2)
    for _ in range(PAIRS // CHUNK):
        values, errors = [], []
        for noise, nu in zip((first, first * (ratio or 1 / 3)), freedom, strict=True):
            constants = true + noise * rng.multivariate_normal(np.zeros(len(true)), unit, CHUNK)
            hill = averages_of(plan.basis.stiffness(constants))[..., 2]
            seen = np.full(CHUNK, noise) if nu is None else noise * np.sqrt(rng.chisquare(nu, CHUNK) / nu)
            values.append(np.hstack([constants, hill]))
            errors.append(seen[:, None] * per_noise)
        gap, size = values[0] - values[1], np.hypot(*errors)
        parts = [e**4 / (np.inf if nu is None else nu) for e, nu in zip(errors, freedom, strict=True)]
        welch = 2.0 * stdtr(size**4 / sum(parts), -np.abs(gap) / size)
        exact = two_sided(gap, (errors[0], errors[1]), freedom)
        count += [(holm(p) < LEVEL).any(axis=1).sum() for p in (exact, welch)]
    return tuple(100.0 * count / PAIRS)


def main() -> None:
    """Print the table."""
    rng = np.random.default_rng(0)
    head = ("Laue class", "degrees of freedom", "equal noise", "threefold", "tenfold", "one known, a third")
    print(f"| {' | '.join(head)} |\n|{'---|' * len(head)}")
    for laue in ("m-3m", "4/mmm", "mmm", "2/m"):
        plan = plan_run(conventional(laue), [0.01])
        cells = [f"{a:.1f} ({b:.1f})" for a, b in (alarms(laue, ratio, rng) for ratio in RATIOS)]
        print(f"| {laue} | {plan.expectation.spare} | {' | '.join(cells)} |", flush=True)


if __name__ == "__main__":
    main()
