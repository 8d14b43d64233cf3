"""Jobs that do not fit with the others: externally studentised residuals with a family-wise level. Never removed silently."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np

from strainkit.design.jobs import StrainJob
from strainkit.findings import Finding, finding
from strainkit.fit.regression import Regression
from strainkit.tensors.arrays import FloatArray

__all__ = ["find_outliers", "outlier_tests"]

#: family-wise level
LEVEL = 0.01
#: what is below this part of the typical stress of the set is not worth a word
MATTERS = 0.02


def outlier_tests(regression: Regression, rows: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Every job against a fit without it.

    Parameters
    ----------
    regression : Regression
    rows : (rows,)
        Its data.

    Returns
    -------
    p_values : (jobs,)
        Before correction for their number; NaN where a job cannot be tested.
    sizes : (jobs,)
        How far a job's stress (norm, GPa) is from what the others predict, as far as they predict it.
    """
    from scipy.special import fdtrc

    left, tests = regression.estimator.leverage
    residual = left @ rows
    squares, freedom = float(residual @ residual), len(rows) - regression.estimator.whole.rank
    p_values, sizes = np.full((2, len(tests)), np.nan)
    for job, test in enumerate(tests):
        if test is None:
            continue
        along = test.combinations @ residual[test.rows]
        part = float((along**2 / test.shares).sum())
        rest = max(squares - part, 1e-300)
        p_values[job] = fdtrc(test.rank, freedom - test.rank, (part / test.rank) / (rest / (freedom - test.rank)))
        sizes[job] = float(np.linalg.norm(along / test.shares))
    return p_values, sizes


def find_outliers(regression: Regression, jobs: Sequence[StrainJob], second: FloatArray, signal: float) -> list[Finding]:
    """Proposals: jobs that stand out at a family-wise level of one percent, and by an amount that matters.

    Parameters
    ----------
    regression : Regression
    jobs : sequence of StrainJob
        Its jobs.
    second : (jobs, 6)
        Their second Piola-Kirchhoff stresses, Mandel, GPa.
    signal : float
        Typical length of such a stress, GPa.
    """
    p, sizes = outlier_tests(regression, regression.estimator.model.rows(second))
    tested = int(np.isfinite(p).sum())
    if not tested:
        return []
    worst = float(np.nanmin(p))
    # the two jobs of a pair at one magnitude cannot be told apart by the odd part
    found = [i for i, value in enumerate(p) if value <= worst * (1 + 1e-6) + 1e-300]
    if worst * tested > LEVEL or sizes[found[0]] < MATTERS * signal:
        return []
    which = " or ".join(jobs[i].label for i in found)
    text = (
        f"{sizes[found[0]]:.2g} GPa from what the other jobs say (p = {worst * tested:.2g} over {tested} jobs); "
        f"compare: fit --drop {jobs[found[0]].label}"
    )
    return [finding("outlier", which, text)]
