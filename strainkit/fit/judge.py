"""What a fit must say about itself."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np

from strainkit.design.extend import restoring_jobs
from strainkit.design.jobs import StrainJob
from strainkit.findings import Finding, finding
from strainkit.fit.regression import Regression
from strainkit.run.plan import Plan
from strainkit.tensors.arrays import known
from strainkit.tensors.prestress import stress_strain_coefficients
from strainkit.tensors.sixvectors import from_mandel, stiffness_to_voigt

__all__ = ["judge"]

#: residual stress above this part of the smallest diagonal constant is a warning
NOTABLE_STRESS = 0.05


def judge(plan: Plan, regression: Regression, jobs: Sequence[StrainJob]) -> list[Finding]:
    """Findings about a fit of the given jobs."""
    findings: list[Finding] = []
    lost = [name for name, known in zip(plan.basis.names, regression.determined, strict=True) if not known]
    if lost:
        used = {job.label for job in jobs}
        remedy = restoring_jobs(jobs, [j for j in plan.strain_set if j.label not in used], plan.symmetry, plan.basis)
        names = " ".join(job.label for job in remedy)
        text = f"the usable jobs do not determine these; with {names} they would" if remedy else "no planned job fixes these"
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
    smallest = float(np.linalg.eigvalsh(0.5 * (b + b.T))[0])
    if smallest <= 0:
        findings.append(
            finding("not-positive-definite", "stiffness", f"smallest eigenvalue {smallest:.3g} GPa: the crystal is not stable")
        )
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
