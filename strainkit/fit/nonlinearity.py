"""Even and cubic response of every shape, with significance after multiplicity and what it does to the constants."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any, Literal

import numpy as np

from strainkit.design.jobs import StrainJob
from strainkit.fit.regression import Regression
from strainkit.tensors.arrays import FloatArray
from strainkit.tensors.sixvectors import COMPONENTS, from_mandel, stress_to_voigt

__all__ = ["Response", "Verdict", "extra_terms_test", "responses"]

Verdict = Literal[
    "linear within noise",
    "curved; --order cubic corrects it",
    "curved and corrected",
    "curved beyond what this set can correct",
    "cannot be told from these jobs",
    "cannot be told from one magnitude",
]


@dataclass(frozen=True)
class Response:
    """Nonlinear response of one shape at the set's largest magnitude.

    Attributes
    ----------
    shape : str
        Labels of the shape's jobs begin with this.
    kind : "even" or "cubic"
    stress : (6,)
        Response at the largest magnitude, Voigt, GPa, given frame.
    component : str
        The largest one, by name.
    p_value : float
        Of no response, after Holm's correction over all shapes of this kind.
    """

    shape: str
    kind: str
    stress: FloatArray
    component: str
    p_value: float

    def to_dict(self) -> dict[str, Any]:
        """JSON-ready."""
        return {
            "shape": self.shape,
            "kind": self.kind,
            "stress_GPa": self.stress.tolist(),
            "component": self.component,
            "p": self.p_value,
        }


def responses(regression: Regression, jobs: Sequence[StrainJob], kind: Literal["even", "cubic"]) -> list[Response]:
    """Response of every shape whose terms the jobs determine; empty without a noise estimate.

    Parameters
    ----------
    regression : Regression
        For "cubic" one of order cubic.
    jobs : sequence of StrainJob
        Its jobs.
    kind : "even" or "cubic"
    """
    from scipy.special import chdtrc, fdtrc

    model, noise = regression.estimator.model, regression.noise
    weights = regression.estimator.term_weights[0 if kind == "even" else 1]
    if not noise:
        return []
    found = []
    for index, shape in enumerate(model.shapes):
        columns = model.even_of_shape[index] if kind == "even" else model.cubic_of_shape[index]
        basis = shape.even if kind == "even" else shape.odd
        weight = weights[index]
        if weight is None:
            continue
        terms = regression.parameters[columns]
        statistic = float(terms @ weight @ terms) / noise**2
        if regression.degrees_of_freedom is None:
            p = float(chdtrc(len(terms), statistic))
        else:
            p = float(fdtrc(len(terms), regression.degrees_of_freedom, statistic / len(terms)))
        stress = stress_to_voigt(from_mandel(basis @ terms))
        label = next(job.label for i, job in enumerate(jobs) if model.shape_of_job[i] == index)
        found.append(Response(label.split("-")[0], kind, stress, COMPONENTS[int(np.abs(stress).argmax())], p))
    return _holm(found)


def _holm(found: list[Response]) -> list[Response]:
    """Holm's step-down correction of the p-values."""
    order = sorted(range(len(found)), key=lambda i: found[i].p_value)
    corrected = list(found)
    largest = 0.0
    for rank, i in enumerate(order):
        largest = max(largest, min(1.0, found[i].p_value * (len(found) - rank)))
        r = found[i]
        corrected[i] = Response(r.shape, r.kind, r.stress, r.component, largest)
    return corrected


def extra_terms_test(smaller: Regression, larger: Regression) -> tuple[float | None, float | None]:
    """F-test, on the odd part of the data, that the extra odd terms of a larger model are nothing.

    Parameters
    ----------
    smaller, larger : Regression
        Fits of the same jobs.

    Returns
    -------
    F and its p-value; None where the test cannot be made.
    """
    from scipy.special import fdtrc

    freedom = larger.estimator.odd_freedom
    extra = smaller.estimator.odd_freedom - freedom
    if extra < 1 or freedom < 1:
        return None, None
    without, with_more = smaller.odd_squares, larger.odd_squares
    value = (without - with_more) / extra / max(with_more / freedom, 1e-300)
    return value, float(fdtrc(extra, freedom, value))
