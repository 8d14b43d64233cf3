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
from strainkit.tensors.arrays import BoolArray, FloatArray
from strainkit.tensors.leastsquares import factorise
from strainkit.tensors.sixvectors import stress_from_voigt, to_mandel
from strainkit.tensors.strain import green_lagrange, pk2_from_cauchy

__all__ = ["Regression", "regress"]


@dataclass(frozen=True)
class Regression:
    """Result of one fit.

    Attributes
    ----------
    values : (n,)
        Independent constants, GPa; NaN where undetermined.
    covariance : (n, n) or None
        GPa^2; None without a noise estimate. Rows and columns of undetermined constants are NaN.
    determined : (n,) bool
    reference_stress : (6,)
        Fitted symmetry-allowed reference stress S0, Mandel, GPa; NaN when no job determines it.
    noise : float or None
        Standard deviation of one Mandel component of S, GPa.
    degrees_of_freedom : int or None
        Behind the noise; None when it was given.
    even_noise : float or None
        The same from what is left of the even part.
    even_degrees_of_freedom : int
    forbidden_noise : float or None
        Root mean square of the components that symmetry forbids or ties, GPa; zero for programs that symmetrise.
    residuals : (jobs, 6)
        Data less model, Mandel, GPa, in the allowed space of each job.
    model : LinearModel
    """

    values: FloatArray
    covariance: FloatArray | None
    determined: BoolArray
    reference_stress: FloatArray
    noise: float | None
    degrees_of_freedom: int | None
    even_noise: float | None
    even_degrees_of_freedom: int
    forbidden_noise: float | None
    residuals: FloatArray
    model: LinearModel


def regress(
    gradients: FloatArray,
    stresses: FloatArray,
    rotations: FloatArray,
    matrices: FloatArray,
    order: Order = "linear",
    noise: float | None = None,
    weights: FloatArray | None = None,
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
    """
    model = build_model(green_lagrange(gradients), rotations, matrices, order, weights)
    second = to_mandel(pk2_from_cauchy(stress_from_voigt(stresses), gradients))
    data = model.rows(second)
    whole = factorise(model.matrix)
    estimate = whole.solver @ data
    residual = data - model.matrix @ estimate

    odd_matrix, odd_data = model.odd_matrix, model.odd_part(data)
    odd = factorise(odd_matrix)
    odd_dof = len(data) - model.even_basis.shape[1] - odd.rank
    odd_squares = float(((odd_data - odd_matrix @ (odd.solver @ odd_data)) ** 2).sum())
    all_squares, all_dof = float((residual**2).sum()), len(data) - whole.rank
    even_dof = all_dof - odd_dof

    dof: int | None = None
    if noise is None and odd_dof > 0:
        noise, dof = (odd_squares / odd_dof) ** 0.5, odd_dof
    elif noise is None and all_dof > 0:
        noise, dof = (all_squares / all_dof) ** 0.5, all_dof
    block = model.constants
    determined = whole.determined[block]
    at_rest = whole.determined[model.reference].all()
    return Regression(
        values=np.where(determined, estimate[block], np.nan),
        covariance=None if noise is None else noise**2 * whole.inverse[block, block],
        determined=determined,
        reference_stress=model.reference_basis @ estimate[model.reference] if at_rest else np.full(6, np.nan),
        noise=noise,
        degrees_of_freedom=dof,
        even_noise=(max(all_squares - odd_squares, 0.0) / even_dof) ** 0.5 if even_dof > 0 else None,
        even_degrees_of_freedom=even_dof,
        forbidden_noise=_forbidden(model, second),
        residuals=_by_job(model, residual),
        model=model,
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
