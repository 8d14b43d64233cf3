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
from strainkit.tensors.arrays import FloatArray, IntArray, known
from strainkit.tensors.sixvectors import to_mandel
from strainkit.tensors.strain import green_lagrange
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
    found = _opposites(regression, energies)
    if not found:
        return EnergyCheck((), None, None, None, ())
    at, other = (np.array([pair[side] for pair in found]) for side in (0, 1))
    up, down = (np.array([pair[side] for pair in found]) for side in (2, 3))
    t = model.signed_magnitudes[at]
    unit, apart = _units(green_lagrange(np.array([job.gradient for job in jobs])), at, other, t)
    even, cubic = (_along(regression, columns, at, unit) / t**power for columns, power in ((model.even, 2), (model.cubic, 3)))
    scale = EV_PER_A3_IN_GPA / volume
    a = (unit[:, :, None] * unit[:, None, :]).reshape(-1, 36) @ matrices.reshape(-1, 36).T
    errors = np.full(len(at), np.nan)
    if regression.covariance is not None:
        errors = np.sqrt(np.maximum(((a @ regression.covariance) * a).sum(axis=1), 0.0))
    answer = apart @ np.einsum("n,nij->ij", regression.values, matrices)
    slopes = scale * (up - down) / (2 * t) - even * t**2 / 3 - t * (answer * unit).sum(axis=1)
    bends = scale * (up + down - 2 * rest) / t**2 - cubic * t**2 / 2
    bends -= (answer * apart).sum(axis=1) + 2.0 / t * (apart @ known(regression.reference_stress))
    columns = (t, bends, a @ regression.values, errors, slopes, unit @ regression.reference_stress)
    pairs = [PairCheck(jobs[i].label, *map(float, row)) for i, *row in zip(at, *columns, strict=True)]
    at_rest = _from_slopes(slopes, unit @ model.reference_basis, model.reference_basis)
    # the even response, a third of which enters a slope, and the stress at rest have about the noise of one stress
    return _verdict(pairs, at_rest, (regression.noise or 0.0) * float(np.linalg.norm(unit, axis=1).max()))


def _opposites(regression: Regression, energies: Sequence[float | None]) -> list[tuple[int, int, float, float]]:
    """Job on the positive side, the opposite one (-1 where an image is it), and both energies, eV."""
    model = regression.estimator.model
    found = []
    for i, (t, shape, other) in enumerate(
        zip(model.signed_magnitudes, model.shape_of_job, regression.estimator.opposite, strict=True)
    ):
        energy = energies[i]
        if shape < 0 or t <= 0 or energy is None:
            continue
        opposite = energies[other] if other >= 0 else energy if model.shapes[shape].has_image else None
        if opposite is not None:
            found.append((i, int(other), energy, opposite))
    return found


def _units(strains: FloatArray, at: IntArray, other: IntArray, t: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Unit strains u and asymmetries d (pairs, 6), Mandel, of pairs with strains t (d + u) and t (d - u)."""
    vectors = to_mandel(strains)
    plus = vectors[at] / t[:, None]
    minus = np.where(other[:, None] < 0, plus, -vectors[other] / t[:, None])
    limit = 2.0 * np.array([same_to_second_order(float(size)) for size in t])
    turned = np.abs(plus - minus).max(axis=1) > limit  # the opposite of an image, in another orientation
    minus[turned] = plus[turned]
    return 0.5 * (plus + minus), 0.5 * (plus - minus)


def _along(regression: Regression, columns: slice, at: IntArray, unit: FloatArray) -> FloatArray:
    """Stress response (jobs,), GPa, that some columns of the model give along the unit strains (jobs, 6) of these jobs."""
    model = regression.estimator.model
    response = model.spread(model.matrix[:, columns] @ regression.parameters[columns])
    return np.asarray((response[at] * unit).sum(axis=1))


def _from_slopes(slopes: FloatArray, directions: FloatArray, basis: FloatArray) -> FloatArray | None:
    values, _, rank, _ = np.linalg.lstsq(directions, slopes, rcond=1e-6)
    return None if rank < basis.shape[1] else basis @ values


def _or_zero(value: float) -> float:
    return 0.0 if np.isnan(value) else value


def _verdict(pairs: list[PairCheck], energy_stress: FloatArray | None, noise: float) -> EnergyCheck:
    def off(p: PairCheck) -> float:
        return abs(p.curvature_energy - p.curvature_stress)

    def slope_off(p: PairCheck) -> float:
        return abs(p.slope_energy - p.slope_stress)

    bent = [p for p in pairs if off(p) > max(PART * abs(p.curvature_stress), SIGMAS * _or_zero(p.curvature_error), LEAST)]
    # a slope is wrong by so much as makes a difference of PART at one percent strain, and not by the noise of stresses at rest
    tilted = [p for p in pairs if slope_off(p) > max(PART * 0.01 * abs(p.curvature_stress), SIGMAS * noise, 0.02)]
    findings = []
    causes = (
        "a basis-set (Pulay) stress, ions not fully relaxed, a term missing from the stress (dispersion, +U), or a job of the "
        "pair or the reference in another minimum"
    )
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
