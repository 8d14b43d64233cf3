"""Relaxed-ion stiffness from clamped-ion jobs: the answer of the ions, with its errors, and the modes at the zone centre."""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property
from typing import Any

import numpy as np

from strainkit.collect.table import StressRecord, StressTable
from strainkit.crystal.operations import crystal_operations
from strainkit.dynamics.gamma import Displacement, force_constants, frequencies
from strainkit.dynamics.internal import ForceResponse, InternalStrain, force_response, internal_strain, ions_answer
from strainkit.errors import NoTensorError
from strainkit.findings import Finding, finding
from strainkit.fit.regression import Regression
from strainkit.run.plan import Plan
from strainkit.tensors.arrays import FloatArray
from strainkit.tensors.rotations import rotate_matrix
from strainkit.tensors.sixvectors import COMPONENTS, stiffness_to_voigt, to_mandel
from strainkit.tensors.stiffness import Stiffness
from strainkit.units import EV_PER_A3_IN_GPA

__all__ = ["RelaxedIons", "relax_ions"]

#: a mode whose force constant is known no better than to this part of itself makes the first-order errors doubtful
_NOISY_MODE = 0.3
#: imaginary modes that a message names
_NAMED = 3


@dataclass(frozen=True)
class RelaxedIons:
    """What the ions do to the stiffness.

    Attributes
    ----------
    plan : Plan
    clamped : Regression
        The fit to the clamped-ion jobs.
    answer : InternalStrain
    covariance : (n, n) or None
        Of the relaxed-ion constants, GPa^2; None where the noise of stresses or forces is unknown.
    degrees_of_freedom : int or None
        Of the less certain of the two noises.
    frequencies : (3 n,)
        Zone-centre modes, THz, ascending.
    force_noise : float or None
        Standard deviation of one force component, eV/A.
    origin : str
        Where the force constants come from, in words.
    file : str
        Their file; empty where they come from displaced cells.
    """

    plan: Plan
    clamped: Regression
    answer: InternalStrain
    covariance: FloatArray | None
    degrees_of_freedom: int | None
    frequencies: FloatArray
    force_noise: float | None
    origin: str
    file: str = ""

    @cached_property
    def values(self) -> FloatArray:
        """Relaxed-ion constants (n,), GPa."""
        return self.clamped.values - self.plan.basis.values(self.answer.correction)

    @property
    def stiffness(self) -> Stiffness:
        """Relaxed-ion stiffness, given frame, with covariance."""
        basis = self.plan.basis
        spread = basis.matrices.reshape(len(basis.names), 36)
        covariance = None if self.covariance is None else spread.T @ self.covariance @ spread
        return Stiffness(basis.stiffness(self.values), covariance, self.degrees_of_freedom)

    def to_dict(self, rotation: FloatArray) -> dict[str, Any]:
        """JSON-ready, the matrices turned by a frame's rotation (3, 3), the displacements in the given frame."""
        names, found = self.plan.basis.names, self.stiffness
        errors = np.full(len(names), np.nan) if self.covariance is None else np.sqrt(np.diag(self.covariance))
        # a Voigt shear strain is sqrt(2) of the Mandel component
        per_voigt = self.answer.displacements * np.where(np.arange(6) < 3, 1.0, 0.5**0.5)
        return {
            "stiffness_GPa": stiffness_to_voigt(rotate_matrix(rotation, found.mandel)),
            "constants": [
                {"name": name, "value_GPa": value, "standard_error_GPa": error}
                for name, value, error in zip(names, self.values, errors, strict=True)
            ],
            "degrees_of_freedom": self.degrees_of_freedom,
            "force_constants": self.origin,
            "force_constants_file": self.file or None,
            "force_noise_eV_per_A": self.force_noise,
            "frequencies_THz": self.frequencies,
            "displacements_A_per_strain": {c: per_voigt[:, :, i] for i, c in enumerate(COMPONENTS)},
        }


def relax_ions(
    plan: Plan,
    table: StressTable,
    clamped: Regression,
    jobs_used: tuple[str, ...],
    constants: FloatArray | None = None,
    file: str = "",
) -> tuple[RelaxedIons | None, list[Finding]]:
    """The answer of the ions to strain, where the run holds what is needed to know it.

    Parameters
    ----------
    plan : Plan
        With clamped ions.
    table : StressTable
        Records with forces.
    clamped : Regression
    jobs_used : tuple of str
        Labels that the stiffness was fitted to.
    constants : (3 n, 3 n), optional
        Force constants at q = 0, eV/A^2, given frame, in place of displaced cells.
    file : str
        Where those came from.

    Returns
    -------
    answer : RelaxedIons or None
    findings : list of Finding
        Why there is none, or what qualifies it.
    """
    if plan.ions != "clamped" or not clamped.determined.all():
        return None, []
    if not ions_answer(crystal_operations(plan.crystal, plan.symmetry.tolerance)):
        return None, []
    displaced = [job for job in plan.jobs if job.kind == "displaced"]
    if not displaced and constants is None:
        text = (
            "ions were held at their affine places, and would leave them: not comparable with experiment; displaced cells or "
        )
        return None, [finding("clamped-ions", plan.crystal.name, f"{text}force constants give the relaxed-ion stiffness")]
    records = {record.label: record for record in table.usable if record.forces is not None}
    wanted = [*jobs_used, *(job.label for job in displaced if constants is None)]
    absent = [label for label in wanted if label not in records]
    if absent:
        text = f"no relaxed-ion stiffness: no usable forces from {len(absent)} of {len(wanted)} jobs ({', '.join(absent[:5])})"
        return None, [finding("ions-unanswered", absent[0], text)]
    where = plan.crystal.name
    try:
        response = _response(plan, records, jobs_used)
        moved = [] if constants is not None else [Displacement(*job.moved) for job in displaced if job.moved is not None]
        origin = f"from {len(moved)} displaced cell{'s' * (len(moved) > 1)}" if moved else "from a phonopy file"
        if constants is None:
            rest = _forces(records.get(plan.jobs[0].label), len(plan.crystal.numbers))
            pulls = np.array([_forces(records[job.label], len(plan.crystal.numbers)) - rest for job in displaced])
            constants = force_constants(plan.crystal, moved, pulls, plan.symmetry.tolerance)
        modes, vectors = frequencies(constants, plan.crystal.numbers)
        answer = internal_strain(plan.crystal, constants, response.matrix)
    except NoTensorError as error:
        if "no minimum" in error.what:
            return None, [finding("unstable-reference", where, _imaginary(plan, modes, vectors))]
        return None, [finding("ions-unanswered", where, f"no relaxed-ion stiffness: {error.what}")]
    draws = _draw(plan, jobs_used, response, answer, moved)
    covariance, freedom = _covariance(plan, clamped, response, draws)
    found = RelaxedIons(plan, clamped, answer, covariance, freedom, modes, response.noise, origin, file)
    return found, _doubts(plan, constants, draws)


def _forces(record: StressRecord | None, count: int) -> FloatArray:
    return np.zeros((count, 3)) if record is None or record.forces is None else record.forces


def _response(plan: Plan, records: dict[str, StressRecord], labels: tuple[str, ...]) -> ForceResponse:
    jobs = [job for job in plan.strain_set if job.label in labels]
    forces = np.array([_forces(records[job.label], len(plan.crystal.numbers)) @ job.gradient for job in jobs])
    strains = to_mandel(np.array([job.strain for job in jobs]))
    return force_response(strains, forces, crystal_operations(plan.crystal, plan.symmetry.tolerance))


@dataclass(frozen=True)
class _Draws:
    """First-order changes (s, 6, 6), GPa, of the correction and changes (s, 3 n, 3 n) of the force constants, drawn."""

    corrections: FloatArray
    constants: FloatArray


def _draw(
    plan: Plan, labels: tuple[str, ...], response: ForceResponse, answer: InternalStrain, moved: list[Displacement]
) -> _Draws:
    """What the noise of the forces does: every force is drawn anew and goes the way of the measured ones."""
    count = len(plan.crystal.numbers)
    nothing = _Draws(np.empty((0, 6, 6)), np.empty((0, 3 * count, 3 * count)))
    if response.noise is None:
        return nothing
    rng = np.random.default_rng(0)
    draws = int(np.clip(2000 // count, 16, 100))
    jobs = [job for job in plan.strain_set if job.label in labels]
    strains = to_mandel(np.array([job.strain for job in jobs]))
    operations = crystal_operations(plan.crystal, plan.symmetry.tolerance)
    u = answer.displacements.reshape(3 * count, 6)
    strained = response.noise * rng.normal(size=(draws, len(jobs), count, 3))
    changes = 2.0 * np.array([u.T @ force_response(strains, noise, operations).matrix for noise in strained])
    constants = nothing.constants
    if moved:
        rest, pulls = (response.noise * rng.normal(size=(draws, cells, count, 3)) for cells in (1, len(moved)))
        constants = force_constants(plan.crystal, moved, pulls - rest, plan.symmetry.tolerance)
        changes -= u.T @ constants @ u
    changes = 0.5 * (changes + changes.swapaxes(1, 2))
    return _Draws(changes * EV_PER_A3_IN_GPA / plan.crystal.volume, constants)


def _covariance(
    plan: Plan, clamped: Regression, response: ForceResponse, draws: _Draws
) -> tuple[FloatArray | None, int | None]:
    """Covariance (n, n) of the relaxed-ion constants and its degrees of freedom; the two noises are independent."""
    if clamped.covariance is None or not len(draws.corrections):
        return None, None
    values = np.array([plan.basis.values(change) for change in draws.corrections])
    freedom = [d for d in (clamped.degrees_of_freedom, response.degrees_of_freedom) if d is not None]
    return clamped.covariance + values.T @ values / len(values), min(freedom)


def _imaginary(plan: Plan, modes: FloatArray, vectors: FloatArray) -> str:
    """The unstable modes in words: frequency, and the atom that moves most."""
    names = []
    for i in np.flatnonzero(modes < -1e-3)[:_NAMED]:
        share = (vectors[:, i].reshape(-1, 3) ** 2).sum(axis=1)
        atom = int(share.argmax())
        names.append(f"{-modes[i]:.3g}i THz (most of it on {plan.crystal.symbols[atom]}, atom {atom + 1})")
    more = int((modes < -1e-3).sum()) - len(names)
    text = "; ".join(names) + (f"; and {more} more" if more > 0 else "") if names else "modes without any force constant"
    return f"the reference is no minimum, so the ions have no answer to strain: {text}; relax it into its true structure first"


def _doubts(plan: Plan, constants: FloatArray, draws: _Draws) -> list[Finding]:
    """Modes too soft for the noise of the forces."""
    if not len(draws.constants):
        return []
    values, vectors = np.linalg.eigh(constants)
    modes = vectors[:, values > 1e-5 * values[-1]]
    spread = np.sqrt(np.mean([np.einsum("im,ij,jm->m", modes, k, modes) ** 2 for k in draws.constants], axis=0))
    part = spread / values[values > 1e-5 * values[-1]]
    if part.max() < _NOISY_MODE:
        return []
    text = (
        f"the noise of the forces reaches {100 * part.max():.0f} % of the force constant of the softest mode: the relaxed-ion "
        "stiffness and its errors are rough; tighten the electronic convergence, or relax the ions in the jobs"
    )
    return [finding("soft-modes-noisy", plan.crystal.name, text)]
