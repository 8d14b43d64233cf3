"""Least squares on the one linear model: constants, their covariance, the noise and what stays undetermined.

The noise comes from the odd part of the residuals alone: what is left of the data after every conceivable even response is
projected out knows nothing but the stiffness, so k-mesh jumps and other even errors do not spoil it. The residual of
that sub-regression is uncorrelated with the estimates of the whole (they are best linear unbiased), so Student's t holds
exactly for Gaussian noise.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from strainkit.design.model import Order, build_model
from strainkit.fit.estimator import Estimator, Layout
from strainkit.tensors.arrays import BoolArray, FloatArray
from strainkit.tensors.sixvectors import stress_from_voigt, to_mandel
from strainkit.tensors.strain import green_lagrange, pk2_from_cauchy

__all__ = ["Estimator", "Layout", "Regression", "regress", "second_stresses", "solve"]


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
    odd_squares : float
        Sum of squared residuals of the odd part, GPa^2.
    second : (jobs, 6)
        The data: second Piola-Kirchhoff stresses, Mandel, GPa, given frame.
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
    odd_squares: float
    second: FloatArray
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
    layout = Layout(green_lagrange(gradients), rotations, matrices, axes)
    second = second_stresses(gradients, stresses)
    if weights is None:
        return solve(layout.estimator(order), second, noise)
    return solve(Estimator.of(build_model(layout.strains, rotations, matrices, order, weights)), second, noise)


def solve(estimator: Estimator, second: FloatArray, noise: float | None = None) -> Regression:
    """The fit of second Piola-Kirchhoff stresses (jobs, 6), Mandel, GPa, given frame; `noise` as for `regress`."""
    model = estimator.model
    rows = model.rows(second)
    parameters = estimator.estimate(rows)
    odd, rest = estimator.squares(rows)
    dof: int | None = None
    if noise is None:
        variance, dof = estimator.variance(odd, rest)
        noise = None if variance is None else float(variance**0.5)
    at_rest = estimator.whole.determined[model.reference].all()
    hidden = second.size - len(rows)
    forbidden = float(((second - model.spread(rows)) ** 2).sum())
    return Regression(
        values=np.where(estimator.determined, parameters[model.constants], np.nan),
        covariance=None if noise is None else noise**2 * estimator.unit_covariance,
        parameters=parameters,
        reference_stress=model.reference_basis @ parameters[model.reference] if at_rest else np.full(6, np.nan),
        noise=noise,
        degrees_of_freedom=dof,
        even_noise=(float(rest) / estimator.even_freedom) ** 0.5 if estimator.even_freedom > 0 else None,
        # root mean square of what lies outside the allowed space of each job
        forbidden_noise=(forbidden / hidden) ** 0.5 if hidden else None,
        residuals=model.spread(rows - model.matrix @ parameters),
        odd_squares=float(odd),
        second=second,
        estimator=estimator,
    )
