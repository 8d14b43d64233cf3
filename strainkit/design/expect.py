"""What a strain set promises before anything is run: standard errors, spare degrees of freedom, cost."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from strainkit.design.exchange import SPARE
from strainkit.design.jobs import StrainJob
from strainkit.design.model import LinearModel, Order, build_model
from strainkit.errors import counted
from strainkit.findings import Finding, finding
from strainkit.tensors.arrays import FloatArray
from strainkit.tensors.averages import averages_of
from strainkit.tensors.constants import ConstantBasis, basis_of_group
from strainkit.tensors.leastsquares import factorise
from strainkit.tensors.stiffness import Stiffness

__all__ = ["ASSUMED_NOISE", "Expectation", "expect", "model_of"]

#: stress noise assumed before anything is run, GPa (standard deviation of one Mandel component)
ASSUMED_NOISE = 0.01


@dataclass(frozen=True)
class Expectation:
    """Promise of a strain set.

    Attributes
    ----------
    standard_errors : dict
        Constant -> standard error in GPa at the assumed noise; None where the set does not determine it.
    averages : dict
        "bulk" and "shear" -> standard error in GPa: of the Hill averages of a guess, of the Voigt averages without one.
    spare : int
        Spare degrees of freedom of the odd part, from which the noise is estimated.
    relative_cost : float
        Cost of the strained jobs in reference jobs, by lost symmetry.
    noise : float
        Assumed standard deviation of one Mandel stress component, GPa.
    """

    standard_errors: dict[str, float | None]
    averages: dict[str, float | None]
    spare: int
    relative_cost: float
    noise: float

    @property
    def largest(self) -> float:
        """Largest standard error of a constant, GPa; infinite when one is undetermined."""
        return max(float("inf") if e is None else e for e in self.standard_errors.values())


def model_of(jobs: Sequence[StrainJob], rotations: FloatArray, basis: ConstantBasis, order: Order = "linear") -> LinearModel:
    """Linear model of a list of jobs, all of one weight."""
    return build_model(np.array([job.strain for job in jobs]).reshape(-1, 3, 3), rotations, basis.matrices, order)


def expect(
    jobs: Sequence[StrainJob],
    rotations: FloatArray,
    basis: ConstantBasis,
    noise: float = ASSUMED_NOISE,
    guess: Stiffness | None = None,
    naming: FloatArray | None = None,
) -> tuple[Expectation, list[Finding]]:
    """Promise of a list of jobs, and what to warn about.

    Parameters
    ----------
    jobs : sequence of StrainJob
        The reference included.
    rotations : (m, 3, 3)
        Proper rotations of the Laue group, given frame.
    basis : ConstantBasis
    noise : float
        Standard deviation of one Mandel stress component, GPa.
    guess : Stiffness, optional
        In the given frame; the errors of the Hill averages are taken at it.
    naming : (3, 3), optional
        Rows: the axes in which the constants are named, in the given frame. Without a guess the promise is the same for all
        crystals with the same strains in them, and kept.
    """
    strains = np.array([job.strain for job in jobs]).reshape(-1, 3, 3)
    if naming is None or guess is not None:
        return _expect(strains, rotations, basis, noise, guess)
    # what is kept follows from the key alone: it must not matter which crystal of a class came first
    strains, group = (np.round(naming @ x @ naming.T, 12) + 0.0 for x in (strains, rotations))
    key = strains.tobytes(), group.tobytes(), noise
    if key not in _KEPT:
        if len(_KEPT) >= _MOST_KEPT:
            _KEPT.clear()
        u, _, vt = np.linalg.svd(group)
        _KEPT[key] = _expect(strains, u @ vt, basis_of_group(u @ vt, np.eye(3)), noise, None)
    expectation, findings = _KEPT[key]
    return expectation, list(findings)


#: (strains and rotations in naming axes, noise) -> promise
_KEPT: dict[tuple[bytes, bytes, float], tuple[Expectation, list[Finding]]] = {}
_MOST_KEPT = 256


def _expect(
    strains: FloatArray, rotations: FloatArray, basis: ConstantBasis, noise: float, guess: Stiffness | None
) -> tuple[Expectation, list[Finding]]:
    model = build_model(strains, rotations, basis.matrices)
    covariance = noise**2 * factorise(model.matrix).inverse[model.constants, model.constants]
    errors = [None if np.isnan(v) else float(v**0.5) for v in np.diag(covariance)]
    cost = sum(len(rotations) / len(model.shapes[i].residual) for i in model.shape_of_job if i >= 0)
    spare = model.odd_degrees_of_freedom
    findings = []
    if spare < SPARE:
        text = f"{counted(spare, 'spare degree')} of freedom: "
        text += "this set cannot estimate its own noise" if spare < 1 else "the noise will be poorly estimated"
        findings.append(finding("few-spare-degrees", "strain set", text))
    named = dict(zip(basis.names, errors, strict=True))
    return Expectation(named, _averages(covariance, basis, guess), spare, float(cost), noise), findings


def _averages(covariance: FloatArray, basis: ConstantBasis, guess: Stiffness | None) -> dict[str, float | None]:
    if np.isnan(covariance).any():
        return {"bulk": None, "shear": None}
    spread = basis.matrices.reshape(len(basis.names), 36)
    scheme = 0 if guess is None else 2
    # without a guess any stiffness will do: the Voigt averages are linear
    centre = Stiffness(np.diag([30.0] * 3 + [20.0] * 3) if guess is None else guess.mandel, spread.T @ covariance @ spread)
    error = centre.standard_error_of(lambda m: averages_of(m)[:, :2, scheme])
    assert error is not None
    return {"bulk": float(error[0]), "shear": float(error[1])}
