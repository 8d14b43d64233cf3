"""Least squares on the one linear model: constants, their covariance, the noise and what stays undetermined.

The noise comes from the odd part of the residuals alone: what is left of the data after every conceivable even response is
projected out knows nothing but the stiffness, so k-mesh jumps and other even errors do not spoil it. The residual of
that sub-regression is uncorrelated with the estimates of the whole (they are best linear unbiased), so Student's t holds
exactly for Gaussian noise.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from strainkit.design.model import LinearModel, Order, build_model
from strainkit.fit.estimator import Estimator, kept_estimator
from strainkit.tensors.arrays import BoolArray, FloatArray
from strainkit.tensors.sixvectors import stress_from_voigt, to_mandel
from strainkit.tensors.strain import green_lagrange, pk2_from_cauchy

__all__ = ["Estimator", "Regression", "regress", "second_stresses"]


def second_stresses(gradients: FloatArray, stresses: FloatArray) -> FloatArray:
    """Second Piola-Kirchhoff stresses (jobs, 6), Mandel, of Cauchy stresses (jobs, 6), Voigt, GPa, under F (jobs, 3, 3)."""
    return to_mandel(pk2_from_cauchy(stress_from_voigt(stresses), gradients))


@dataclass(frozen=True)
class Regression:
    """Result of one fit.

    Attributes
    ----------
    values : (n,)
        Independent constants, GPa; NaN where undetermined.
    covariance : (n, n) or None
        GPa^2; None without a noise estimate. Rows and columns of undetermined constants are NaN.
    parameters : (parameters,)
        All parameters of the model, in its own column scaling; undetermined ones are arbitrary.
    reference_stress : (6,)
        Fitted symmetry-allowed reference stress S0, Mandel, GPa; NaN when no job determines it.
    noise : float or None
        Standard deviation of one Mandel component of S, GPa.
    degrees_of_freedom : int or None
        Behind the noise; None when it was given.
    even_noise : float or None
        The same from what is left of the even part.
    forbidden_noise : float or None
        Root mean square of the components that symmetry forbids or ties, GPa; zero for programs that symmetrise.
    residuals : (jobs, 6)
        Data less model, Mandel, GPa, in the allowed space of each job.
    estimator : Estimator
    """

    values: FloatArray
    covariance: FloatArray | None
    parameters: FloatArray
    reference_stress: FloatArray
    noise: float | None
    degrees_of_freedom: int | None
    even_noise: float | None
    forbidden_noise: float | None
    residuals: FloatArray
    estimator: Estimator

    @property
    def determined(self) -> BoolArray:
        """Which constants (n,) the jobs determine."""
        return self.estimator.determined


def regress(
    gradients: FloatArray,
    stresses: FloatArray,
    rotations: FloatArray,
    matrices: FloatArray,
    order: Order = "linear",
    noise: float | None = None,
    weights: FloatArray | None = None,
    axes: FloatArray | None = None,
) -> Regression:
    """Fit the constants.

    Parameters
    ----------
    gradients : (jobs, 3, 3)
        Deformation gradients, the reference's being the identity.
    stresses : (jobs, 6)
        Cauchy, Voigt, GPa, positive in tension, given frame.
    rotations : (m, 3, 3)
        Proper rotations of the Laue group, given frame.
    matrices : (n, 6, 6)
        Mandel matrices of the constants, given frame.
    order : "linear" or "cubic"
    noise : float, optional
        Known standard deviation of one Mandel component, GPa; estimated from the residuals when left out.
    weights : (jobs,), optional
        Inverse variances in units of the common one.
    axes : (3, 3), optional
        Rows: the crystal's standard axes in the given frame. Crystals that have the same strains in them share one
        factorisation, which is kept; the numbers are those of a factorisation of their own.
    """
    strains = green_lagrange(gradients)
    if axes is None or weights is not None:
        estimator = Estimator.of(build_model(strains, rotations, matrices, order, weights))
    else:
        estimator = kept_estimator(strains, rotations, matrices, order, axes)
    return _solve(estimator, second_stresses(gradients, stresses), noise)


def _solve(estimator: Estimator, second: FloatArray, noise: float | None) -> Regression:
    model = estimator.model
    rows = model.rows(second)
    parameters = estimator.estimate(rows)
    dof: int | None = None
    if noise is None:
        variance, dof = estimator.noise_variance(rows)
        noise = None if variance is None else float(variance**0.5)
    rest = float(estimator.squares(rows)[1])
    at_rest = estimator.whole.determined[model.reference].all()
    return Regression(
        values=np.where(estimator.determined, parameters[model.constants], np.nan),
        covariance=None if noise is None else noise**2 * estimator.unit_covariance,
        parameters=parameters,
        reference_stress=model.reference_basis @ parameters[model.reference] if at_rest else np.full(6, np.nan),
        noise=noise,
        degrees_of_freedom=dof,
        even_noise=(rest / estimator.even_freedom) ** 0.5 if estimator.even_freedom > 0 else None,
        forbidden_noise=_forbidden(model, second),
        residuals=_by_job(model, rows - model.matrix @ parameters),
        estimator=estimator,
    )


def _forbidden(model: LinearModel, second: FloatArray) -> float | None:
    """Root mean square of what lies outside the allowed space of each job."""
    squares, count = 0.0, 0
    for projection, stress in zip(model.projections, second, strict=True):
        squares += float(((stress - projection @ (projection.T @ stress)) ** 2).sum())
        count += 6 - projection.shape[1]
    return (squares / count) ** 0.5 if count else None


def _by_job(model: LinearModel, residual: FloatArray) -> FloatArray:
    out = np.zeros((len(model.projections), 6))
    for job, projection in enumerate(model.projections):
        out[job] = projection @ residual[model.job_of_row == job] / model.weights[job] ** 0.5
    return out
