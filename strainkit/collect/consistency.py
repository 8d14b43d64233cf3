"""How well the stresses of a set follow what any set must: one stiffness, small even responses, positive work.

This weighs changes to the stresses against each other; it is no fit, and its numbers are no errors.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property

import numpy as np

from strainkit.collect.table import StressRecord
from strainkit.design.jobs import StrainJob
from strainkit.design.model import LinearModel, build_model
from strainkit.run.plan import Plan
from strainkit.tensors.arrays import FloatArray
from strainkit.tensors.leastsquares import factorise
from strainkit.tensors.rotations import rotation6
from strainkit.tensors.sixvectors import stress_from_voigt, to_mandel

__all__ = ["Group", "typical_change"]

#: weight of an even response, in units of the typical stress, against a misfit of the same size: this at strains up to the
#: second number, less beyond (even responses of some times the strain are usual: common practice, no source)
EVEN, EVEN_UP_TO = 0.2, 0.01


@dataclass(frozen=True)
class Group:
    """The stresses of a strain set and the model they must follow.

    Attributes
    ----------
    records, jobs : list
        Of the finished jobs of the set, in one order.
    cauchy : (jobs, 6)
        Their Cauchy stresses, Mandel, GPa, given frame.
    to_second : (jobs, 6, 6)
        What makes second Piola-Kirchhoff stresses of them.
    model : LinearModel
    basis : (rows, p)
        Orthonormal: what the model can follow, even responses at their weight.
    rest : int or None
        Index of the unstrained job.
    spare : int
        Components less the parameters of the model.
    """

    records: list[StressRecord]
    jobs: list[StrainJob]
    cauchy: FloatArray
    to_second: FloatArray
    model: LinearModel
    basis: FloatArray
    rest: int | None
    spare: int

    @classmethod
    def of(cls, plan: Plan, pairs: list[tuple[StrainJob, StressRecord]]) -> Group:
        """The group of finished jobs with their records."""
        jobs, records = [job for job, _ in pairs], [record for _, record in pairs]
        gradients = np.array([job.gradient for job in jobs])
        cauchy = to_mandel(stress_from_voigt(np.array([record.stress for record in records])))
        to_second = _to_second(gradients)
        model = build_model(np.array([job.strain for job in jobs]), plan.symmetry.rotations, plan.basis.matrices)
        largest = float(np.abs(model.signed_magnitudes).max())
        width = model.matrix.shape[1]
        even = np.arange(width)[model.even]
        prior = np.zeros((len(even), width))
        prior[np.arange(len(even)), even] = EVEN * EVEN_UP_TO / max(EVEN_UP_TO, largest)
        stacked = np.vstack([model.matrix, prior])
        u, s, _ = np.linalg.svd(stacked / np.maximum(np.linalg.norm(stacked, axis=0), 1e-300), full_matrices=False)
        basis = u[: len(model.matrix), s > 1e-9 * s[0]]
        rest = next((i for i, job in enumerate(jobs) if not job.shape), None)
        spare = 6 * len(jobs) - factorise(model.matrix).rank
        return cls(records, jobs, cauchy, to_second, model, basis, rest, spare)

    def second(self, cauchy: FloatArray) -> FloatArray:
        """Second Piola-Kirchhoff stresses (jobs, 6) of Cauchy stresses (jobs, 6), both Mandel."""
        return np.asarray(np.einsum("jab,jb->ja", self.to_second, cauchy))

    def misfits(self, cauchy: FloatArray) -> FloatArray:
        """Roots (k,) of the sums of squares of all that does not fit in sets (k, jobs, 6), in units of the typical stress."""
        second = cauchy.swapaxes(0, 1) @ self.to_second.swapaxes(1, 2)  # (jobs, k, 6)
        rows = np.concatenate([s @ p for s, p in zip(second, self.model.projections, strict=True)], axis=1)
        allowed = _squares(rows)
        left = allowed - _squares(rows @ self.basis)
        outside = np.einsum("jka,jka->k", second, second) - allowed  # components that symmetry forbids
        at_rest = second[self.rest] if self.rest is not None else second.mean(axis=0)
        work = ((second - at_rest) @ self.directions[:, :, None])[..., 0]
        negative = (np.minimum(work, 0.0) ** 2).sum(axis=0)
        typical = typical_change(second.swapaxes(0, 1), self.rest)
        return np.asarray(np.sqrt(np.maximum(left, 0.0) + np.maximum(outside, 0.0) + negative) / typical)

    def without_one(self) -> tuple[list[int], float]:
        """Jobs whose stress, left free, takes away most of the misfit (partners do so alike), and the misfit left then."""
        gains, whole, typical = self.gains(self.cauchy)
        worst = np.flatnonzero(gains > 0.9 * gains.max()).tolist()
        return worst, float(np.sqrt(max(whole - gains.max(), 0.0)) / typical)

    def gains(self, cauchy: FloatArray) -> tuple[FloatArray, float, float]:
        """What each stress (jobs,), left free, takes away of the sum of squares of a misfit, that sum (GPa^2), typical stress.

        For a set (jobs, 6); negative work is not counted.
        """
        second = self.second(cauchy)
        parts = [s @ p for s, p in zip(second, self.model.projections, strict=True)]
        rows = np.concatenate(parts)
        left = rows - self.basis @ (self.basis.T @ rows)
        outside = (second**2).sum(axis=1) - np.array([part @ part for part in parts])
        gains = np.zeros(len(second))
        for job, part in enumerate(parts):
            mine = self.model.job_of_row == job
            own = np.eye(len(part)) - self.basis[mine] @ self.basis[mine].T
            gains[job] = left[mine] @ np.linalg.pinv(own, rcond=1e-6) @ left[mine] + outside[job]
        return gains, float(left @ left + outside.sum()), float(typical_change(second, self.rest))

    @cached_property
    def directions(self) -> FloatArray:
        """Strains (jobs, 6), Mandel, of length one; zero at rest."""
        strains = to_mandel(np.array([job.strain for job in self.jobs]))
        sizes = np.linalg.norm(strains, axis=1, keepdims=True)
        return np.asarray(strains / np.where(sizes > 0, sizes, 1.0))


def _squares(rows: FloatArray) -> FloatArray:
    return np.asarray(np.einsum("kr,kr->k", rows, rows))


def _to_second(gradients: FloatArray) -> FloatArray:
    """Matrices (jobs, 6, 6) from Cauchy to second Piola-Kirchhoff stress, both Mandel."""
    return np.asarray(np.linalg.det(gradients)[:, None, None] * rotation6(np.linalg.inv(gradients)))


def typical_change(second: FloatArray, rest: int | None) -> FloatArray:
    """Typical change of stress (norm, GPa) of sets (..., jobs, 6): the geometric mean, which no single job rules."""
    at_rest = np.median(second, axis=-2, keepdims=True) if rest is None else second[..., rest : rest + 1, :]
    apart = np.linalg.norm(second - at_rest, axis=-1)
    apart = apart if rest is None else np.delete(apart, rest, axis=-1)
    floor = np.maximum(1e-4 * apart.max(axis=-1, keepdims=True), 1e-9)
    return np.asarray(np.exp(np.log(np.maximum(apart, floor)).mean(axis=-1)))
