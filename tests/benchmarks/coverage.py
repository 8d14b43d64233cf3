"""Coverage of the 95 % intervals and efficiency of the estimator, for every Laue class, by simulation.

Gaussian noise on every Mandel component of the second Piola-Kirchhoff stress, published tensors (see
tests/data/published_stiffness.json), the fewest jobs at 1 %, at 0.5 and 1 %, and image-using (single-sided) sets. The noise is
2e-4 of the mean stiffness, which makes errors of about one percent of the constants. Every cell is the share, in percent, of
20,000 simulated sets whose interval holds the true value; the worst constant is shown. The last column is the mean over
constants and sets of the sampled variance over the Cramer-Rao bound; its own sampling error is below 1 %.

Run: python tests/benchmarks/coverage.py [SETS]
"""

from __future__ import annotations

import sys
from pathlib import Path

import numpy as np
from scipy.stats import t as student

sys.path.insert(0, str(Path(__file__).parent.parent))

from support.groups import LAUE_CLASSES, rotations
from support.published import BY_LAUE_CLASS, mandel

from strainkit.design.aims import fewest
from strainkit.design.jobs import reference_job, strained_jobs
from strainkit.design.model import build_model
from strainkit.design.symmetric import most_symmetric
from strainkit.fit.regression import Estimator
from strainkit.tensors.averages import averages_of
from strainkit.tensors.constants import constant_basis
from strainkit.tensors.invariants import invariant_matrices
from strainkit.tensors.sixvectors import from_mandel, to_mandel

#: noise over the mean eigenvalue of the stiffness
NOISE = 2e-4
DIRECTION = np.array([2.0, 3.0, 5.0]) / 38**0.5


def young_along(matrices: np.ndarray) -> np.ndarray:
    """Young's modulus along a general direction from Mandel matrices (..., 6, 6)."""
    n = to_mandel(np.outer(DIRECTION, DIRECTION))
    return 1.0 / np.einsum("i,...ij,j->...", n, np.linalg.inv(matrices), n)


def derived(matrices: np.ndarray) -> np.ndarray:
    """K, G, E by Hill and E along the direction, (..., 4)."""
    means = averages_of(matrices)
    return np.stack([means[..., 0, 2], means[..., 1, 2], means[..., 2, 2], young_along(matrices)], axis=-1)


def simulate(laue, units, magnitudes, order="linear", cubic=0.0, sets=20_000, seed=0, noise=NOISE):
    """Coverage of constants (n,), of derived quantities (4,), and variance over the Cramer-Rao bound (n,)."""
    group = rotations(laue)
    basis = constant_basis(invariant_matrices(group), np.eye(3))
    jobs = [reference_job(), *strained_jobs(from_mandel(units), magnitudes, group)]
    model = build_model(np.array([job.strain for job in jobs]), group, basis.matrices, order)
    estimator = Estimator.of(model)
    if not estimator.odd_freedom:
        return None
    truth = basis.values(mandel(BY_LAUE_CLASS[laue]))
    sigma = noise * float(np.trace(basis.stiffness(truth))) / 6
    rng = np.random.default_rng(seed)
    exact = np.array([basis.stiffness(truth) @ to_mandel(job.strain) for job in jobs])
    if cubic:
        for index, shape in enumerate(model.shapes):
            response = shape.odd @ rng.normal(size=shape.odd.shape[1])
            response *= cubic * sigma / np.abs(response).max()
            for job in np.flatnonzero(model.shape_of_job == index):
                exact[job] += response * (model.signed_magnitudes[job] / max(magnitudes)) ** 3
    exact_rows = model.rows(exact[:, :, None])
    rows = exact_rows + sigma * rng.normal(size=(len(exact_rows), sets))
    values = estimator.estimate(rows)[model.constants]
    variance, dof = estimator.noise_variance(rows)
    unit = estimator.unit_covariance
    reach = student.ppf(0.975, dof) * np.sqrt(variance)
    inside = np.abs(values - truth[:, None]) <= reach * np.sqrt(np.diag(unit))[:, None]
    efficiency = values.var(axis=1) / (sigma**2 * np.diag(unit))
    # derived quantities: linear propagation at each set's own tensor
    matrices = basis.stiffness(values.T)
    root = np.linalg.cholesky(unit)
    step = 1e-3
    slope = [
        (derived(matrices + step * basis.stiffness(column)) - derived(matrices - step * basis.stiffness(column))) / (2 * step)
        for column in root.T
    ]
    error = np.sqrt((np.array(slope) ** 2).sum(axis=0)) * reach[:, None]
    hit = np.abs(derived(matrices) - derived(basis.stiffness(truth))) <= error
    return inside.mean(axis=1), hit.mean(axis=0), efficiency


def worst(shares):
    """The share farthest from 95 %, in percent."""
    shares = 100 * np.asarray(shares)
    return f"{shares[np.abs(shares - 95).argmax()]:.1f}"


def main() -> None:
    """Print the table."""
    sets = int(sys.argv[1]) if len(sys.argv) > 1 else 20_000
    heads = ["Laue class", "1 %: constants", "K G E, E(n)", "0.5 and 1 %: constants", "K G E, E(n)"]
    heads += ["symmetric set: constants", "cubic order, cubic terms 0 to 5 x noise: constants", "variance / bound"]
    print("| " + " | ".join(heads) + " |\n" + "|---" * len(heads) + "|")
    for laue in LAUE_CLASSES:
        group = rotations(laue)
        one = simulate(laue, fewest(group), [0.01], sets=sets)
        two = simulate(laue, fewest(group), [0.005, 0.01], sets=sets)
        single = simulate(laue, most_symmetric(group), [0.005, 0.01], sets=sets)
        curved = [
            simulate(laue, fewest(group), [0.005, 0.01], "cubic", size, sets, seed) for seed, size in enumerate((0, 1, 2, 3, 5))
        ]
        bound = np.mean(np.concatenate([r[2] for r in (one, two, single, *curved) if r is not None]))
        cells = [laue, worst(one[0]), worst(one[1]), worst(two[0]), worst(two[1])]
        cells += [worst(single[0]) if single else "-", worst(np.concatenate([c[0] for c in curved])), f"{bound:.3f}"]
        print("| " + " | ".join(cells) + " |", flush=True)
    group = rotations("m-3")
    loud = simulate("m-3", fewest(group), [0.01], sets=sets, noise=4e-3)
    print(f"errors of a fifth of the constants (m-3, noise 4e-3): constants {worst(loud[0])}, K G E, E(n) {worst(loud[1])}")


if __name__ == "__main__":
    main()
