"""Is the strain magnitude right: constants per magnitude, extrapolation, the test on cubic terms, the best magnitude.

Central differences at magnitude m carry a bias c m^2 from the cubic response and a noise s / m. The test on the cubic terms
informs; it never chooses the order of the fit, because intervals after such a choice no longer cover.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np

from strainkit.design.jobs import StrainJob, magnitudes_of
from strainkit.design.model import build_model
from strainkit.design.shapes import same_magnitude
from strainkit.findings import Finding, finding
from strainkit.fit.judge import what_determines
from strainkit.fit.nonlinearity import extra_terms_test
from strainkit.fit.regression import Estimator, Regression, regress
from strainkit.run.plan import Plan
from strainkit.tensors.arrays import FloatArray

__all__ = ["Convergence", "converge"]

#: level of the test on the cubic terms
LEVEL = 0.05
#: a shift matters above this part of the constant, or of a tenth of the largest constant where that is more
MATTERS = 0.01


@dataclass(frozen=True)
class Convergence:
    """How the constants depend on the strain magnitude.

    Attributes
    ----------
    names : tuple of str
    magnitudes : tuple of float
        Fractions, ascending.
    each : tuple of Regression or None
        Linear fit of the jobs at one magnitude (and the reference); None where that fails.
    common, zero : Regression
        Linear fit of all jobs, and fit with cubic terms: its constants are those at zero strain. `zero` is None with one
        magnitude.
    f_statistic, p_value : float or None
        Of the hypothesis that there are no cubic terms.
    shift, shift_error : (n,) or None
        Constants of the common fit less those at zero strain, GPa.
    bias, bias_error : (n,) or None
        Bias of a linear fit at the largest magnitude alone, GPa; it goes as the square of the magnitude.
    noise_error : (n,)
        Standard errors of a linear fit at the largest magnitude alone, GPa; they go as one over the magnitude.
    best : float or None
        Magnitude (fraction) with the smallest expected total error.
    findings : tuple of Finding
    """

    names: tuple[str, ...]
    magnitudes: tuple[float, ...]
    each: tuple[Regression | None, ...]
    common: Regression
    zero: Regression | None
    f_statistic: float | None
    p_value: float | None
    shift: FloatArray | None
    shift_error: FloatArray | None
    bias: FloatArray | None
    bias_error: FloatArray | None
    noise_error: FloatArray
    best: float | None
    findings: tuple[Finding, ...]

    def expected_error(self, magnitude: float) -> FloatArray:
        """Expected total errors (n,), GPa, of a linear fit at one magnitude (fraction): bias and noise together."""
        ratio = magnitude / self.magnitudes[-1]
        bias = np.zeros(len(self.names)) if self.bias is None else self.bias * ratio**2
        return np.asarray(np.hypot(bias, self.noise_error / ratio))

    def to_dict(self) -> dict[str, Any]:
        """JSON-ready numbers."""

        def constants(found: Regression | None) -> list[dict[str, Any]] | None:
            if found is None:
                return None
            errors = np.full(len(self.names), np.nan) if found.covariance is None else np.sqrt(np.diag(found.covariance))
            rows = zip(self.names, found.values, errors, strict=True)
            return [{"name": n, "value_GPa": v, "standard_error_GPa": e} for n, v, e in rows]

        return {
            "schema": "strainkit/convergence/1",
            "magnitudes_percent": [100 * m for m in self.magnitudes],
            "each": [constants(found) for found in self.each],
            "common": constants(self.common),
            "zero_strain": constants(self.zero),
            "cubic_terms": {"f": self.f_statistic, "p": self.p_value},
            "shift_GPa": self.shift,
            "shift_standard_error_GPa": self.shift_error,
            "bias_at_largest_GPa": self.bias,
            "recommended_magnitude_percent": None if self.best is None else 100 * self.best,
            "expected_error_GPa": [
                {"magnitude_percent": 100 * m, "largest": float(np.max(self.expected_error(m)))}
                for m in np.geomspace(0.2 * self.magnitudes[0], 3 * self.magnitudes[-1], 13)
            ],
            "findings": [f.to_dict() for f in self.findings],
        }


def converge(plan: Plan, jobs: Sequence[StrainJob], stresses: FloatArray, noise: float | None = None) -> Convergence:
    """Study the dependence on magnitude.

    Parameters
    ----------
    plan : Plan
    jobs : sequence of StrainJob
        Usable jobs, the reference included if usable.
    stresses : (jobs, 6)
        Cauchy, Voigt, GPa, given frame.
    noise : float, optional
        Known stress noise, GPa; estimated otherwise (from the fit with cubic terms where there is one).
    """
    gradients = np.array([job.gradient for job in jobs])
    sizes = magnitudes_of(jobs)
    rotations, matrices = plan.symmetry.rotations, plan.basis.matrices

    def fit(keep: Sequence[int], order: str = "linear", known: float | None = noise) -> Regression:
        chosen = list(keep)
        return regress(
            gradients[chosen],
            stresses[chosen],
            rotations,
            matrices,
            order,  # type: ignore[arg-type]
            known,
            axes=plan.standard_axes,
        )

    everything = range(len(jobs))
    common = fit(everything)
    zero = fit(everything, "cubic") if len(sizes) > 1 else None
    if zero is not None and not zero.determined.all():
        zero = None
    level = noise if noise is not None else (zero or common).noise
    each = []
    for size in sizes:
        found = fit([i for i, job in enumerate(jobs) if not job.shape or same_magnitude(abs(job.magnitude), size)], known=level)
        each.append(found if found.determined.all() else None)
    f, p = (None, None) if zero is None else extra_terms_test(common, zero)
    shift, shift_error = (None, None) if zero is None else _contrast(common, zero, level)
    noise_error, bias, bias_error = _at_largest(plan, jobs, zero, sizes[-1], level)
    partial = Convergence(
        plan.basis.names, sizes, tuple(each), common, zero, f, p, shift, shift_error, bias, bias_error, noise_error, None, ()
    )
    best = _best(partial)
    return Convergence(**{**vars(partial), "best": best, "findings": (*_lost(plan, jobs, common), *_judge(partial, best))})


def _lost(plan: Plan, jobs: Sequence[StrainJob], common: Regression) -> list[Finding]:
    """Constants that the jobs do not determine, and what would."""
    lost = [name for name, known in zip(plan.basis.names, common.determined, strict=True) if not known]
    text = f"the usable jobs do not determine these; {what_determines(plan, jobs, 'linear')}" if lost else ""
    return [finding("undetermined-constants", ", ".join(lost), text)] if lost else []


def _contrast(common: Regression, zero: Regression, level: float | None) -> tuple[FloatArray, FloatArray | None]:
    """Common less zero-strain constants; the common fit is efficient in the smaller model, so variances subtract."""
    shift = common.values - zero.values
    if level is None:
        return shift, None
    spread = np.diag(zero.estimator.unit_covariance) - np.diag(common.estimator.unit_covariance)
    return shift, level * np.sqrt(np.clip(spread, 0.0, None))


def _at_largest(
    plan: Plan, jobs: Sequence[StrainJob], zero: Regression | None, size: float, level: float | None
) -> tuple[FloatArray, FloatArray | None, FloatArray | None]:
    """Noise errors, and bias with its standard error, of a linear fit at one magnitude alone."""
    chosen = [i for i, job in enumerate(jobs) if not job.shape or same_magnitude(abs(job.magnitude), size)]
    strains = np.array([jobs[i].strain for i in chosen])
    solver = Estimator.of(build_model(strains, plan.symmetry.rotations, plan.basis.matrices))
    noise = np.full(len(plan.basis.names), np.nan)
    if level is not None:
        noise = level * np.sqrt(np.diag(solver.unit_covariance))
    if zero is None or not solver.determined.all():
        return noise, None, None
    model = zero.estimator.model
    responses = model.spread(model.matrix[:, model.cubic])[chosen]
    effect = solver.estimate(solver.model.rows(responses))[solver.model.constants]
    spread = zero.estimator.whole.inverse[model.cubic, model.cubic]
    variance = np.clip(np.einsum("ia,ab,ib->i", effect, spread, effect), 0.0, None)
    return noise, effect @ zero.parameters[model.cubic], None if level is None else level * np.sqrt(variance)


def _best(found: Convergence) -> float | None:
    """Magnitude with the smallest expected root-mean-square error over the constants; None when nothing is known of bias."""
    if found.bias is None or np.isnan(found.noise_error).any():
        return None
    bias, noise = float((found.bias**2).sum()), float((found.noise_error**2).sum())
    if bias <= 0:
        return None
    # minimum of bias r^4 + noise / r^2 over the ratio r to the largest magnitude
    ratio = (noise / (2.0 * bias)) ** (1 / 6)
    return float(np.clip(ratio, 0.1, 5.0) * found.magnitudes[-1])


def _judge(found: Convergence, best: float | None) -> list[Finding]:
    findings = []
    sizes = ", ".join(f"{100 * m:g}" for m in found.magnitudes)
    if found.zero is None:
        text = "the effect of the strain magnitude cannot be seen"
        half = 50 * found.magnitudes[0]
        findings.append(
            finding("one-magnitude", f"{sizes} %", f"{text}; add another: strainkit prepare --extend RUN --magnitude {half:g}")
        )
        return findings
    if found.p_value is None or found.shift is None:
        findings.append(finding("cubic-untested", f"{sizes} %", "no spare degrees of freedom left beside the cubic terms"))
        return findings
    values = np.abs(found.zero.values)
    scale = np.maximum(values, 0.1 * values.max())
    large = np.abs(found.shift) > MATTERS * scale
    worst = int(np.argmax(np.abs(found.shift) / scale))
    name, shift = found.names[worst], found.shift[worst]
    text = f"{name} shifts by {shift:+.3g} GPa ({100 * shift / found.zero.values[worst]:+.2g} %) from zero strain"
    if found.p_value < LEVEL and large.any():
        findings.append(finding("magnitude-matters", f"{sizes} %", f"cubic response (p = {found.p_value:.2g}): {text}"))
    elif found.p_value < LEVEL:
        text = f"cubic response is there (p = {found.p_value:.2g}) but small: {text}"
        findings.append(finding("cubic-response", f"{sizes} %", text))
    if found.shift_error is not None and (2 * found.shift_error > 5 * MATTERS * scale).any():
        text = "the shift to zero strain is known to no better than 5 %: add jobs (--more N)"
        findings.append(finding("convergence-unclear", f"{sizes} %", text))
    return findings
