"""What a stress on the reference cell does to the constants: real (cell not relaxed, pressure) or a basis-set offset.

A plane-wave offset p goes as one over the volume: it is a constant Kirchhoff stress, p V0/V as a Cauchy stress, and is
subtracted as such. It shifts C11, C12, C13 and K by one to three p, shear constants little. The correction is approximate.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any, Literal

import numpy as np

from strainkit.fit.regression import Regression, second_stresses
from strainkit.tensors.arrays import FloatArray, known
from strainkit.tensors.prestress import stress_strain_coefficients
from strainkit.tensors.sixvectors import from_mandel, stiffness_to_voigt

__all__ = ["ReferenceStress", "Treatment", "remove_offset", "treatments"]

ReferenceStress = Literal["real", "offset"]


@dataclass(frozen=True)
class Treatment:
    """Constants under one reading of the reference stress.

    Attributes
    ----------
    name : str
        "C as fitted", "B, stress real" or "C, stress an offset".
    voigt : (6, 6)
        GPa, given frame.
    """

    name: str
    voigt: FloatArray

    def to_dict(self) -> dict[str, Any]:
        """JSON-ready, in the given frame."""
        return {"reading": self.name, "constants_given_frame_GPa": self.voigt.tolist()}


def remove_offset(stresses: FloatArray, gradients: FloatArray, offset: FloatArray) -> FloatArray:
    """Cauchy stresses (jobs, 6), Voigt, GPa, less a constant Kirchhoff stress `offset` (6,), Voigt, GPa."""
    return np.asarray(stresses - offset[None, :] / np.linalg.det(gradients)[:, None])


def treatments(
    regression: Regression, gradients: FloatArray, stresses: FloatArray, offset: FloatArray, matrices: FloatArray
) -> list[Treatment]:
    """All readings side by side.

    Parameters
    ----------
    regression : Regression
        Fit of the stresses as they are.
    gradients, stresses : (jobs, 3, 3), (jobs, 6)
        As for `regress`.
    offset : (6,)
        Offset of the reference, Voigt, GPa.
    matrices : (n, 6, 6)
        Mandel matrices of the constants, given frame.
    """
    plain = np.einsum("n,nij->ij", regression.values, matrices)
    t = from_mandel(known(regression.reference_stress))
    model = regression.estimator.model
    removed = second_stresses(gradients, remove_offset(stresses, gradients, offset))
    cleared = regression.estimator.estimate(model.rows(removed))[model.constants]
    return [
        Treatment("C as fitted", stiffness_to_voigt(plain)),
        Treatment("B, stress real", stiffness_to_voigt(stress_strain_coefficients(plain, t))),
        Treatment("C, stress an offset", stiffness_to_voigt(np.einsum("n,nij->ij", cleared, matrices))),
    ]
