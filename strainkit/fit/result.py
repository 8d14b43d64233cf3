"""The fitted stiffness of a run, with its errors, findings and JSON."""

from __future__ import annotations

from dataclasses import dataclass, replace
from pathlib import Path
from typing import Any

import numpy as np

from strainkit.collect.table import StressTable
from strainkit.crystal.frames import Frame
from strainkit.design.jobs import StrainJob
from strainkit.design.model import Order
from strainkit.errors import IncompleteError, NoTensorError
from strainkit.findings import Finding, finding
from strainkit.fit.checks import Checks, examine
from strainkit.fit.finer import FinerChange, finer_change
from strainkit.fit.ions import RelaxedIons, relax_ions
from strainkit.fit.judge import judge, what_determines
from strainkit.fit.regression import Layout, Regression, second_stresses, solve
from strainkit.fit.residual import ReferenceStress, remove_offset
from strainkit.run.files import atomic_write, dump_json
from strainkit.run.plan import Plan
from strainkit.tensors.arrays import FloatArray, known
from strainkit.tensors.prestress import stress_strain_coefficients
from strainkit.tensors.rotations import rotate_matrix
from strainkit.tensors.sixvectors import from_mandel, stiffness_to_voigt, stress_to_voigt
from strainkit.tensors.stiffness import Stiffness
from strainkit.tensors.strain import green_lagrange

__all__ = ["FITTED", "Fit", "fit_run", "usable_jobs"]

FITTED = "stiffness.json"
_KIND = "strainkit/stiffness"


@dataclass(frozen=True)
class Fit:
    """Stiffness of one crystal from one stress table.

    Attributes
    ----------
    plan : Plan
    regression : Regression
        Everything in the given frame.
    order : "linear" or "cubic"
    jobs_used, dropped : tuple of str
        Labels.
    reading : "real" or "offset"
        What the reference stress was taken for; an offset was subtracted as a constant Kirchhoff stress.
    checks : Checks
        Energies, curvature, outliers, readings of the reference stress.
    finer : FinerChange or None
        What the pairs at finer settings change; None when there are none.
    relaxed : RelaxedIons or None
        With clamped ions: the answer of the ions and the relaxed-ion stiffness, where the run holds what it takes.
    findings : tuple of Finding
    """

    plan: Plan
    regression: Regression
    order: Order
    jobs_used: tuple[str, ...]
    dropped: tuple[str, ...]
    reading: ReferenceStress
    checks: Checks
    finer: FinerChange | None
    relaxed: RelaxedIons | None
    findings: tuple[Finding, ...]

    @property
    def undetermined(self) -> tuple[str, ...]:
        """Names of the constants that the usable jobs do not determine."""
        names = self.plan.basis.names
        return tuple(n for n, known in zip(names, self.regression.determined, strict=True) if not known)

    @property
    def stiffness(self) -> Stiffness:
        """Thermodynamic stiffness C as fitted to the jobs (clamped ions stay clamped), in the given frame, with covariance.

        Raises
        ------
        IncompleteError
            When some constants are undetermined.
        """
        if self.undetermined:
            raise IncompleteError(f"undetermined constants: {', '.join(self.undetermined)}", self.plan.crystal.name)
        r, basis = self.regression, self.plan.basis
        spread = basis.matrices.reshape(len(basis.names), 36)
        covariance = None if r.covariance is None else spread.T @ r.covariance @ spread
        return Stiffness(basis.stiffness(r.values), covariance, r.degrees_of_freedom)

    @property
    def reference_stress(self) -> FloatArray:
        """Fitted reference stress (3, 3), GPa, positive in tension, given frame; NaN when unknown."""
        return from_mandel(self.regression.reference_stress)

    @property
    def answer(self) -> Stiffness:
        """The stiffness that all else is derived from, given frame: with the answer of the ions where that is known."""
        return self.stiffness if self.relaxed is None else self.relaxed.stiffness

    @property
    def effective(self) -> Stiffness:
        """Symmetric part of the stress-strain coefficients B, given frame: what stability and moduli are made of.

        Equal to `answer` for a crystal without residual stress; the errors are those of that.
        """
        plain = self.answer
        stress = known(self.reference_stress)
        b = stress_strain_coefficients(plain.mandel, stress)
        return Stiffness(0.5 * (b + b.T), plain.covariance, plain.degrees_of_freedom)

    def intervals(self) -> FloatArray:
        """95 % intervals of the constants (n, 2), GPa; NaN without an error estimate."""
        from scipy.special import ndtri, stdtrit

        r = self.regression
        if r.covariance is None:
            return np.full((len(r.values), 2), np.nan)
        dof = r.degrees_of_freedom
        reach = float(ndtri(0.975) if dof is None else stdtrit(dof, 0.975)) * np.sqrt(np.diag(r.covariance))
        return np.column_stack([r.values - reach, r.values + reach])

    def to_dict(self, frame: str = "ieee") -> dict[str, Any]:
        """JSON-ready result, tensors in the named frame."""
        r, plan = self.regression, self.plan
        chosen = plan.frames[frame]
        errors = np.full(len(r.values), np.nan) if r.covariance is None else np.sqrt(np.diag(r.covariance))
        constants = [
            {"name": name, "value_GPa": value, "standard_error_GPa": error, "interval95_GPa": interval}
            for name, value, error, interval in zip(plan.basis.names, r.values, errors, self.intervals(), strict=True)
        ]
        stiffness, spread, coefficients = self._matrices(chosen)
        return {
            "schema": f"{_KIND}/1",
            "name": plan.crystal.name,
            "laue_class": plan.symmetry.laue_class,
            "frame": chosen.name,
            "frame_axes": chosen.axes,
            "frame_rotation": chosen.rotation,
            "measure": "Green-Lagrange strain, second Piola-Kirchhoff stress",
            "ions": plan.ions,
            "order": self.order,
            "stress_strain_GPa": coefficients,
            "stiffness_GPa": stiffness,
            "standard_error_GPa": spread,
            "constants": constants,
            "residual_stress_GPa": stress_to_voigt(chosen.rotation @ self.reference_stress @ chosen.rotation.T),
            "degrees_of_freedom": r.degrees_of_freedom,
            "noise_GPa": r.noise,
            "even_noise_GPa": r.even_noise,
            "forbidden_component_noise_GPa": r.forbidden_noise,
            "jobs_used": list(self.jobs_used),
            "jobs_dropped": list(self.dropped),
            "undetermined": list(self.undetermined),
            "reference_stress_reading": self.reading,
            **self.checks.to_dict(plan.basis.names),
            "relaxed_ion": None if self.relaxed is None else self.relaxed.to_dict(chosen.rotation),
            "finer_settings": None if self.finer is None else self.finer.to_dict(plan.basis.names),
            "findings": [f.to_dict() for f in self.findings],
        }

    def _matrices(self, frame: Frame) -> tuple[FloatArray, FloatArray, FloatArray]:
        """Voigt stiffness, standard errors and B (6, 6) in a frame; NaN for elements that undetermined constants reach."""
        r, basis = self.regression, self.plan.basis
        turned = rotate_matrix(frame.rotation, basis.matrices)
        unknown = (np.abs(turned[~r.determined]) > 1e-7).any(axis=0)
        mandel = np.einsum("n,nij->ij", known(r.values), turned)
        variance = np.full((6, 6), np.nan)
        if r.covariance is not None:
            flat = turned.reshape(len(turned), 36)
            variance = np.einsum("ap,ab,bp->p", flat, known(r.covariance), flat).reshape(6, 6)
        stress = frame.rotation @ known(self.reference_stress) @ frame.rotation.T
        b = stress_strain_coefficients(mandel, stress)
        error = np.sqrt(np.clip(variance, 0.0, None))
        hidden = np.where(unknown, np.nan, 1.0)
        stiffness, spread, coefficients = (stiffness_to_voigt(m * hidden) for m in (mandel, error, b))
        return stiffness, spread, coefficients

    def save(self, run: Path, frame: str = "ieee") -> None:
        """Write stiffness.json into the run folder."""
        atomic_write(run / FITTED, dump_json(self.to_dict(frame)))


def usable_jobs(plan: Plan, table: StressTable, drop: tuple[str, ...] = ()) -> tuple[list[StrainJob], FloatArray]:
    """Jobs whose stress may be used, and their Cauchy stresses (jobs, 6), Voigt, GPa, given frame.

    Raises
    ------
    NoTensorError
        When there is no strained one among them.
    """
    records = {r.label: r.stress for r in table.usable if r.label not in drop and r.stress is not None}
    jobs = [job for job in plan.strain_set if job.label in records]
    if not any(job.shape for job in jobs):
        why = next((f"{f.code}: {f.message}" for f in table.findings if f.severity == "error"), "See: strainkit progress RUN")
        raise NoTensorError(f"none of the {len(plan.strain_set) - 1} strained jobs is usable", plan.crystal.name, why)
    return jobs, np.array([records[job.label] for job in jobs])


def fit_run(
    plan: Plan,
    table: StressTable,
    order: Order = "linear",
    noise: float | None = None,
    drop: tuple[str, ...] = (),
    reading: ReferenceStress = "real",
    constants: FloatArray | None = None,
    constants_file: str = "",
) -> Fit:
    """Fit the stiffness of a run from its stress table.

    Parameters
    ----------
    plan : Plan
    table : StressTable
    order : "linear" or "cubic"
        Whether cubic terms are fitted for every shape; chosen before looking at the data.
    noise : float, optional
        Known stress noise, GPa (standard deviation of one Mandel component).
    drop : tuple of str
        Labels of jobs to leave out; recorded in the result.
    reading : "real" or "offset"
        Whether a stress on the reference is real, or an offset of the basis set to be removed.
    constants : (3 n, 3 n), optional
        Force constants at q = 0, eV/A^2, given frame, for the answer of clamped ions, in place of displaced cells.
    constants_file : str
        Where those came from, for the record.

    Raises
    ------
    NoTensorError
        When no constant is determined by the usable jobs.
    """
    jobs, stresses = usable_jobs(plan, table, drop)
    gradients = np.array([job.gradient for job in jobs])
    doubts: list[Finding] = []
    if reading == "offset":
        stresses, doubts = _without_offset(jobs, gradients, stresses)
    layout = Layout(green_lagrange(gradients), plan.symmetry.rotations, plan.basis.matrices, plan.standard_axes)
    regression = solve(layout.estimator(order), second_stresses(gradients, stresses), noise)
    if not regression.determined.any():
        what = f"the usable jobs do not determine the constants; {what_determines(plan, jobs, order)}"
        raise NoTensorError(what, plan.crystal.name, "See: strainkit progress RUN")
    energies = {record.label: record.energy for record in table.records}
    checks = examine(plan, jobs, stresses, [energies[job.label] for job in jobs], regression, layout, order)
    finer = finer_change(plan, table, regression)
    changes = [] if finer is None else finer.findings(plan.basis.names, regression.values)
    used = tuple(job.label for job in jobs)
    relaxed, remarks = relax_ions(plan, table, regression, used, constants, constants_file)
    return Fit(
        plan=plan,
        regression=regression,
        order=order,
        jobs_used=used,
        dropped=tuple(drop),
        reading=reading,
        checks=checks,
        finer=finer,
        relaxed=relaxed,
        findings=(*_carried(table, used), *doubts, *judge(plan, regression, jobs, order), *checks.findings, *changes, *remarks),
    )


def _carried(table: StressTable, used: tuple[str, ...]) -> list[Finding]:
    """What collect doubted about the set and the jobs that are used, one finding a code."""
    own = [f for record in table.records if record.label in used for f in record.findings]
    alike: dict[str, list[Finding]] = {}
    for found in (*table.findings, *own):
        if found.severity != "info":
            alike.setdefault(found.code, []).append(found)
    merged = []
    for first, *others in alike.values():
        more = f"; and {len(others)} more such: {', '.join(f.where for f in others)}" if others else ""
        merged.append(replace(first, message=first.message + more))
    return merged


def _without_offset(jobs: list[StrainJob], gradients: FloatArray, stresses: FloatArray) -> tuple[FloatArray, list[Finding]]:
    """Stresses less that of the reference as a constant Kirchhoff stress."""
    at_rest = next((i for i, job in enumerate(jobs) if not job.shape), None)
    if at_rest is None:
        raise NoTensorError("no usable reference job, so its offset is unknown", "--reference-stress offset")
    offset = stresses[at_rest]
    size = float(np.abs(offset).max())
    text = f"a reference stress of up to {size:.3g} GPa was removed as a basis-set offset; the correction is approximate"
    return remove_offset(stresses, gradients, offset), [finding("offset-removed", "reference", text)]
