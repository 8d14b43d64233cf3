"""What a fit must say about itself."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np

from strainkit.design.extend import lost_constants, restoring_jobs
from strainkit.design.jobs import StrainJob, magnitudes_of
from strainkit.design.model import Order
from strainkit.findings import Finding, finding
from strainkit.fit.regression import Regression
from strainkit.run.plan import Plan
from strainkit.tensors.arrays import known
from strainkit.tensors.prestress import stress_strain_coefficients
from strainkit.tensors.sixvectors import from_mandel, stiffness_to_voigt
from strainkit.tensors.stiffness import Stiffness

__all__ = ["instability", "judge", "undecided", "what_determines"]

#: residual stress above this part of the smallest diagonal constant is a warning
NOTABLE_STRESS = 0.05


def what_determines(plan: Plan, jobs: Sequence[StrainJob], order: Order) -> str:
    """What would determine the constants that these jobs do not: planned jobs, or another magnitude for cubic terms."""
    used = {job.label for job in jobs}
    missing = [job for job in plan.strain_set if job.label not in used]
    wanted = restoring_jobs(jobs, missing, plan.symmetry, plan.basis, order=order)
    words = []
    if not wanted and order != "linear":
        sizes = magnitudes_of(plan.strain_set)
        wanted = restoring_jobs(jobs, missing, plan.symmetry, plan.basis)
        if len(sizes) == 1 and not lost_constants([*jobs, *wanted], plan.symmetry, plan.basis):
            command = f"strainkit prepare --extend RUN --magnitude {50 * sizes[0]:g}"
            words.append(f"{order} terms need jobs at a second magnitude too: {command}")
    if wanted:
        words.insert(0, f"with {' '.join(job.label for job in wanted)} they would")
    return "; ".join(words) or "no planned job fixes these; more jobs may: strainkit prepare --extend RUN --more N"


def _smallest(moduli: Stiffness) -> tuple[float, float | None]:
    error = moduli.standard_error_of(lambda c: np.linalg.eigvalsh(c)[:, 0])
    return float(moduli.eigenvalues[0]), None if error is None else float(error)


def undecided(moduli: Stiffness) -> bool:
    """Is the smallest eigenvalue not positive, but within two standard errors of zero?"""
    smallest, error = _smallest(moduli)
    return smallest <= 0 and error is not None and smallest >= -2.0 * error


def instability(moduli: Stiffness) -> str:
    """What a smallest eigenvalue that is not positive says about stability, in words."""
    smallest, error = _smallest(moduli)
    if error is None or not undecided(moduli):
        return f"smallest eigenvalue {smallest:.3g} GPa: the crystal is not stable"
    return f"smallest eigenvalue {smallest:.2g} +- {error:.2g} GPa: stability undecided, within two standard errors of zero"


def judge(plan: Plan, regression: Regression, jobs: Sequence[StrainJob], order: Order) -> list[Finding]:
    """Findings about a fit of the given jobs."""
    findings: list[Finding] = []
    lost = [name for name, known in zip(plan.basis.names, regression.determined, strict=True) if not known]
    if lost:
        text = f"the usable jobs do not determine these; {what_determines(plan, jobs, order)}"
        findings.append(finding("undetermined-constants", ", ".join(lost), text))
    used = {job.label for job in jobs}
    absent = [job.label for job in plan.strain_set if job.label not in used]
    if absent:
        findings.append(finding("jobs-not-used", ", ".join(absent), f"{len(absent)} of {len(plan.strain_set)} jobs not used"))
    findings += _lone_partners(regression, jobs)
    if regression.noise is None:
        findings.append(
            finding("no-error-estimate", "fit", "no spare degrees of freedom: no error estimate from these data (--noise)")
        )
    if not lost:
        findings += _mechanical(plan, regression)
    return findings


def _lone_partners(regression: Regression, jobs: Sequence[StrainJob]) -> list[Finding]:
    """Jobs whose opposite is not there, so that the even response swallows them."""
    alone = [jobs[index].label for index in regression.estimator.alone]
    if not alone:
        return []
    return [finding("lone-partner", ", ".join(alone), "the job of opposite strain is not there, so this one adds little")]


def _mechanical(plan: Plan, regression: Regression) -> list[Finding]:
    """Stability and residual stress."""
    findings = []
    stiffness = plan.basis.stiffness(regression.values)
    stress = from_mandel(known(regression.reference_stress))
    b = stress_strain_coefficients(stiffness, stress)
    spread = plan.basis.matrices.reshape(len(plan.basis.names), 36)
    errors = None if regression.covariance is None else spread.T @ regression.covariance @ spread
    moduli = Stiffness(0.5 * (b + b.T), errors)
    if moduli.eigenvalues[0] <= 0:
        findings.append(finding("not-positive-definite", "stiffness", instability(moduli)))
    if np.isnan(regression.reference_stress).any():
        findings.append(
            finding("reference-stress-unknown", "reference", "the reference job is missing: residual stress unknown")
        )
        return findings
    largest = float(np.abs(np.linalg.eigvalsh(stress)).max())
    softest = float(np.diag(stiffness_to_voigt(stiffness)).min())
    if softest > 0 and largest > NOTABLE_STRESS * softest:
        findings.append(
            finding(
                "residual-stress",
                "reference",
                f"the reference cell carries a stress of {largest:.3g} GPa, {100 * largest / softest:.0f} % of the "
                "smallest diagonal constant: relax it further, or raise the cutoff",
            )
        )
    return findings
