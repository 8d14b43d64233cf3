"""Everything a fit is asked about itself: energies, curvature, outliers, readings of the reference stress."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from statistics import median
from typing import Any

import numpy as np

from strainkit.design.jobs import StrainJob, magnitudes_of
from strainkit.design.model import Order
from strainkit.findings import Finding, finding
from strainkit.fit.energy import EnergyCheck, check_energies
from strainkit.fit.magnitude import LEVEL
from strainkit.fit.nonlinearity import Response, Verdict, extra_terms_test, responses
from strainkit.fit.outliers import MATTERS, find_outliers
from strainkit.fit.regression import Layout, Regression, solve
from strainkit.fit.residual import Treatment, treatments
from strainkit.run.plan import Plan
from strainkit.tensors.arrays import FloatArray, known
from strainkit.tensors.sixvectors import from_mandel, stress_to_voigt

__all__ = ["Checks", "examine"]

#: a cubic shift above this part of a constant is beyond what cubic terms can be trusted with
TOO_CURVED = 0.1
#: responses are listed when they are real at this level
LISTED = 0.01


@dataclass(frozen=True)
class Checks:
    """What was found.

    Attributes
    ----------
    energy : EnergyCheck
    verdict : str
        On the curvature, see `Verdict`.
    responses : tuple of Response
        Even ones of every shape, cubic ones where there are two magnitudes.
    other_order : Regression or None
        The fit of the order that was not asked for, where the jobs allow it.
    cubic_p_value : float or None
    treatments : tuple of Treatment
        Readings of the reference stress, when they differ by more than the error bars.
    findings : tuple of Finding
    """

    energy: EnergyCheck
    verdict: Verdict
    responses: tuple[Response, ...]
    other_order: Regression | None
    cubic_p_value: float | None
    treatments: tuple[Treatment, ...]
    findings: tuple[Finding, ...]

    def to_dict(self, names: Sequence[str]) -> dict[str, Any]:
        """JSON-ready; `names` are those of the constants."""
        other = None
        if self.other_order is not None:
            other = dict(zip(names, map(float, self.other_order.values), strict=True))
        return {
            "energy_check": self.energy.to_dict(),
            "curvature_verdict": self.verdict,
            "responses": [r.to_dict() for r in self.responses],
            "other_order_constants_GPa": other,
            "cubic_p": self.cubic_p_value,
            "reference_stress_readings": [t.to_dict() for t in self.treatments],
        }


def examine(
    plan: Plan,
    jobs: Sequence[StrainJob],
    stresses: FloatArray,
    energies: Sequence[float | None],
    regression: Regression,
    layout: Layout,
    order: Order,
) -> Checks:
    """Put a fit to its questions.

    Parameters
    ----------
    plan : Plan
    jobs : sequence of StrainJob
        Those of the fit.
    stresses : (jobs, 6)
        Their Cauchy stresses, Voigt, GPa, given frame.
    energies : sequence of float or None
        Their free energies, eV.
    regression : Regression
    layout : Layout
        What it depends on besides the stresses.
    order : "linear" or "cubic"
    """
    second = regression.second
    energy = check_energies(jobs, energies, plan.crystal.volume, regression, layout.matrices)
    findings = list(energy.findings)
    sizes = magnitudes_of(jobs)
    other = cubic = None
    if len(sizes) > 1:
        other = solve(layout.estimator("cubic" if order == "linear" else "linear"), second)
        cubic = other if order == "linear" else regression
        cubic = cubic if cubic.determined.all() else None
    signal = _typical(second - known(regression.reference_stress))
    findings += find_outliers(cubic or regression, jobs, second, signal)
    bent = [*responses(regression, jobs, "even"), *(responses(cubic, jobs, "cubic") if cubic else [])]
    findings += _even_findings(bent, MATTERS * signal)
    p, verdict = None, "cannot be told from one magnitude"
    if len(sizes) > 1:
        quintic = solve(layout.estimator("quintic"), second) if len(sizes) > 2 and cubic else None
        linear = regression if order == "linear" else other
        p, verdict, doubts = _curvature(plan, second, linear, cubic, quintic, order, bent)
        findings += doubts
    readings, doubts = _readings(jobs, stresses, regression, layout, energy)
    findings += doubts
    return Checks(energy, verdict, tuple(bent), other, p, tuple(readings), tuple(findings))  # type: ignore[arg-type]


def _typical(stresses: FloatArray) -> float:
    """Median length of stresses (jobs, 6)."""
    return float(median(np.linalg.norm(stresses, axis=1).tolist()))


def _even_findings(found: Sequence[Response], least: float) -> list[Finding]:
    """Even responses that are real and larger than `least`, GPa."""
    even = [r for r in found if r.kind == "even" and r.p_value < LISTED and np.abs(r.stress).max() > least]
    if not even:
        return []
    worst = max(even, key=lambda r: float(np.abs(r.stress).max()))
    size = float(np.abs(worst.stress).max())
    text = f"quadratic response up to {size:.3g} GPa ({worst.component}) at the largest strain; pairs cancel it"
    return [finding("even-response", ", ".join(r.shape for r in even), text)]


def _curvature(
    plan: Plan,
    second: FloatArray,
    linear: Regression | None,
    cubic: Regression | None,
    quintic: Regression | None,
    order: Order,
    found: Sequence[Response],
) -> tuple[float | None, str, list[Finding]]:
    """p-value of the cubic terms, the verdict, and what to say."""
    if linear is None or cubic is None:
        return None, "cannot be told from these jobs", []
    _, p = extra_terms_test(linear, cubic)
    if p is None or p >= LEVEL:
        return p, "linear within noise", []
    shift = np.abs(linear.values - cubic.values)
    values = np.abs(cubic.values)
    part = shift / np.maximum(values, 0.1 * values.max())
    worst = int(part.argmax())
    beyond = part[worst] > TOO_CURVED
    if quintic is not None and quintic.determined.all():
        _, p_more = extra_terms_test(cubic, quintic)
        more = np.abs(quintic.values - cubic.values) > 0.3 * shift.max()
        beyond = beyond or bool(p_more is not None and p_more < LEVEL and more.any())
    shapes = ", ".join(f"{r.shape} ({r.component})" for r in found if r.kind == "cubic" and r.p_value < LISTED)
    name = plan.basis.names[worst]
    moved = f"{name} by {shift[worst]:.3g} GPa ({100 * part[worst]:.2g} %)"
    text = f"cubic response (p = {p:.2g}) of {shapes or 'the set'} moves {moved}"
    if beyond:
        text += ": more than cubic terms can be trusted to correct; use smaller strains, or find the job that is wrong"
        return p, "curved beyond what this set can correct", [finding("curved", "strain set", text)]
    if order == "linear":
        code = "magnitude-matters" if part[worst] > 0.01 else "cubic-response"
        return p, "curved; --order cubic corrects it", [finding(code, "strain set", f"{text}; --order cubic removes it")]
    return p, "curved and corrected", [finding("cubic-response", "strain set", f"{text}; removed by this fit")]


def _readings(
    jobs: Sequence[StrainJob],
    stresses: FloatArray,
    regression: Regression,
    layout: Layout,
    energy: EnergyCheck,
) -> tuple[list[Treatment], list[Finding]]:
    """C, B and C without an offset, when they differ by more than the error bars, and what the energies say about it."""
    stress = regression.reference_stress
    if np.isnan(stress).any() or not regression.determined.all() or regression.covariance is None:
        return [], []
    offset = stress_to_voigt(from_mandel(stress))
    found = treatments(regression, np.array([job.gradient for job in jobs]), stresses, offset, layout.matrices)
    spread = max(float(np.abs(a.voigt - b.voigt).max()) for a in found for b in found)
    bar = 2.0 * float(np.sqrt(np.diag(regression.covariance).max()))
    smallest = float(np.diag(found[0].voigt).min())
    if spread <= max(bar, 0.01 * abs(smallest)):
        return [], []
    if energy.slope_agrees is None:
        word = "say which it is with --reference-stress"
    elif energy.slope_agrees:
        word = "the energies agree with the stress: it is real"
    else:
        word = "the energies disagree with the stress: at least part of it is an offset; raise the cutoff"
    text = f"constants differ by up to {spread:.3g} GPa between the readings of the reference stress; {word}"
    return found, [finding("reference-stress-reading", "reference", text)]
