"""The energy check: the same constants from the energies of the same jobs, free of charge.

For a pair of shape e at magnitude m, per reference volume V0,

    (E+ + E- - 2 E0) / (V0 m^2) = e:C:e + (e:c) m^2 / 2        second order, c the cubic stress response where it is fitted
    (E+ - E-) / (2 V0 m)        = S0:e + (e:q) m^2 / 3         first order, q the even stress response

Both sides follow from E/V0 = S0:eta + eta:C:eta/2 + ... with S = dE/d(eta)/V0. A mismatch has three causes that it cannot tell
apart: a basis-set (Pulay) stress, ions that are not relaxed, a term missing from the stress (dispersion, +U). It holds at
constant cutoff, without a finite-basis correction, for the free energy that is consistent with the forces.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np

from strainkit.design.jobs import StrainJob
from strainkit.design.shapes import same_to_second_order
from strainkit.findings import Finding, finding
from strainkit.fit.regression import Regression
from strainkit.tensors.arrays import FloatArray
from strainkit.tensors.sixvectors import to_mandel
from strainkit.units import EV_PER_A3_IN_GPA

__all__ = ["EnergyCheck", "PairCheck", "check_energies"]

#: mismatch that counts: this part of the value, and this many standard errors, and this many GPa
PART, SIGMAS, LEAST = 0.03, 4.0, 0.2


@dataclass(frozen=True)
class PairCheck:
    """One pair (or single job with an image) seen from its energies and from its stresses, GPa.

    Attributes
    ----------
    label : str
        Job on the positive side.
    magnitude : float
        Fraction.
    curvature_energy, curvature_stress, curvature_error : float
        e:C:e from energies, from the fitted stiffness, and the standard error of the latter.
    slope_energy, slope_stress : float
        S0:e from energies and from stresses.
    """

    label: str
    magnitude: float
    curvature_energy: float
    curvature_stress: float
    curvature_error: float
    slope_energy: float
    slope_stress: float


@dataclass(frozen=True)
class EnergyCheck:
    """All pairs, whether they agree, and the reference stress that the energies see.

    Attributes
    ----------
    pairs : tuple of PairCheck
    curvature_agrees, slope_agrees : bool or None
        None when there is nothing to compare.
    energy_stress : (6,) or None
        Symmetry-allowed reference stress (Mandel, GPa) by least squares on the slopes; None when they do not fix it.
    findings : tuple of Finding
    """

    pairs: tuple[PairCheck, ...]
    curvature_agrees: bool | None
    slope_agrees: bool | None
    energy_stress: FloatArray | None
    findings: tuple[Finding, ...]

    def to_dict(self) -> dict[str, Any]:
        """JSON-ready check."""
        return {
            "pairs": [
                {
                    "label": p.label,
                    "magnitude_percent": 100 * p.magnitude,
                    "curvature_energy_GPa": p.curvature_energy,
                    "curvature_stress_GPa": p.curvature_stress,
                    "curvature_standard_error_GPa": p.curvature_error,
                    "slope_energy_GPa": p.slope_energy,
                    "slope_stress_GPa": p.slope_stress,
                }
                for p in self.pairs
            ],
            "curvature_agrees": self.curvature_agrees,
            "slope_agrees": self.slope_agrees,
        }


def check_energies(
    jobs: Sequence[StrainJob], energies: Sequence[float | None], volume: float, regression: Regression, matrices: FloatArray
) -> EnergyCheck:
    """Compare energies with stresses.

    Parameters
    ----------
    jobs : sequence of StrainJob
        The jobs of the regression, in its order.
    energies : sequence of float or None
        Free energies, eV, of the same jobs.
    volume : float
        Of the reference cell, A^3.
    regression : Regression
    matrices : (n, 6, 6)
        Mandel matrices of the constants, given frame.
    """
    rest = next((e for job, e in zip(jobs, energies, strict=True) if not job.shape), None)
    if rest is None or not regression.determined.all():
        return EnergyCheck((), None, None, None, ())
    model = regression.estimator.model
    scale = EV_PER_A3_IN_GPA / volume
    known = {i: e for i, e in enumerate(energies) if e is not None}
    stiffness = np.tensordot(regression.values, matrices, axes=1)
    pairs: list[PairCheck] = []
    slopes: list[float] = []
    directions: list[FloatArray] = []
    for i, energy in known.items():
        t, index = float(model.signed_magnitudes[i]), int(model.shape_of_job[i])
        if index < 0 or t <= 0:
            continue
        shape = model.shapes[index]
        same = np.flatnonzero((model.shape_of_job == index) & (np.abs(model.signed_magnitudes + t) < 1e-6 * t))
        opposite = known.get(int(same[0])) if len(same) else energy if shape.has_image else None
        if opposite is None:
            continue
        even, cubic = _responses(regression, i, t)
        unit, apart = _unit(jobs[i], jobs[int(same[0])] if len(same) else None, t)
        a = np.einsum("aij,i,j->a", matrices, unit, unit)
        error = np.nan if regression.covariance is None else float(np.sqrt(max(a @ regression.covariance @ a, 0.0)))
        slope = scale * (energy - opposite) / (2 * t) - float(unit @ even) * t**2 / 3 - t * float(unit @ stiffness @ apart)
        bend = scale * (energy + opposite - 2 * rest) / t**2 - float(unit @ cubic) * t**2 / 2
        bend -= float(apart @ stiffness @ apart + 2.0 / t * np.nan_to_num(regression.reference_stress) @ apart)
        pairs.append(
            PairCheck(
                label=jobs[i].label,
                magnitude=t,
                curvature_energy=bend,
                curvature_stress=float(unit @ stiffness @ unit),
                curvature_error=error,
                slope_energy=slope,
                slope_stress=float(unit @ regression.reference_stress),
            )
        )
        slopes.append(slope)
        directions.append(unit @ model.reference_basis)
    return _verdict(pairs, _from_slopes(slopes, directions, model.reference_basis))


def _unit(job: StrainJob, other: StrainJob | None, t: float) -> tuple[FloatArray, FloatArray]:
    """Unit strain u and asymmetry d (6,), Mandel, of a pair with strains t (d + u) and t (d - u)."""
    plus = to_mandel(job.strain) / t
    minus = plus if other is None else -to_mandel(other.strain) / t
    if np.abs(plus - minus).max() > 2.0 * same_to_second_order(t):  # the opposite of an image, in another orientation
        minus = plus
    return 0.5 * (plus + minus), 0.5 * (plus - minus)


def _responses(regression: Regression, job: int, t: float) -> tuple[FloatArray, FloatArray]:
    """Even and cubic stress responses q and c (6,), Mandel, GPa, of a job's shape, in the job's own orientation."""
    model = regression.estimator.model
    rows = model.job_of_row == job
    weight = model.weights[job] ** 0.5
    found = []
    for columns, power in ((model.even, 2), (model.cubic, 3)):
        part = model.projections[job] @ (model.matrix[rows, columns] @ regression.parameters[columns])
        found.append(part / weight / t**power)
    return found[0], found[1]


def _from_slopes(slopes: list[float], directions: list[FloatArray], basis: FloatArray) -> FloatArray | None:
    if not slopes:
        return None
    values, _, rank, _ = np.linalg.lstsq(np.array(directions), np.array(slopes), rcond=1e-6)
    return None if rank < basis.shape[1] else basis @ values


def _verdict(pairs: list[PairCheck], energy_stress: FloatArray | None) -> EnergyCheck:
    if not pairs:
        return EnergyCheck((), None, None, None, ())

    def off(p: PairCheck) -> float:
        return abs(p.curvature_energy - p.curvature_stress)

    def slope_off(p: PairCheck) -> float:
        return abs(p.slope_energy - p.slope_stress)

    bent = [p for p in pairs if off(p) > max(PART * abs(p.curvature_stress), SIGMAS * np.nan_to_num(p.curvature_error), LEAST)]
    # a slope is wrong by so much as makes a difference of PART at one percent strain
    tilted = [p for p in pairs if slope_off(p) > max(PART * 0.01 * abs(p.curvature_stress), 0.02)]
    findings = []
    causes = "a basis-set (Pulay) stress, ions not fully relaxed, or a term missing from the stress (dispersion, +U)"
    if bent:
        p = max(bent, key=off)
        text = f"energies give {p.curvature_energy:.2f}, stresses {p.curvature_stress:.2f} GPa for this shape: {causes}"
        findings.append(finding("energy-mismatch", p.label, text))
    if tilted:
        p = max(tilted, key=slope_off)
        values = f"{p.slope_energy:.3f} GPa by energies, {p.slope_stress:.3f} by stresses"
        text = f"reference stress along this shape: {values}: {causes}"
        findings.append(finding("energy-slope-mismatch", p.label, text))
    return EnergyCheck(tuple(pairs), not bent, not tilted, energy_stress, tuple(findings))
