"""Averages over all orientations (Voigt, Reuss, Hill) and the universal anisotropy index, with standard errors.

R. Hill, Proc. Phys. Soc. A 65, 349 (1952); S. I. Ranganathan & M. Ostoja-Starzewski, Phys. Rev. Lett. 101, 055504 (2008).
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np

from strainkit.errors import NoTensorError
from strainkit.tensors.arrays import FloatArray
from strainkit.tensors.averages import AVERAGES, SCHEMES, averages_of
from strainkit.tensors.stiffness import Stiffness

__all__ = ["Averages", "averages"]


def _anisotropy(values: FloatArray) -> FloatArray:
    """Universal anisotropy index 5 G_V/G_R + K_V/K_R - 6 from the output of `averages_of`."""
    ratio = values[..., 0] / values[..., 1]
    return np.asarray(5.0 * ratio[..., 1] + ratio[..., 0] - 6.0)


@dataclass(frozen=True)
class Averages:
    """Averaged moduli of one stiffness.

    Attributes
    ----------
    values, errors : (4, 3)
        In the order of `AVERAGES` and `SCHEMES`; errors are None without covariance.
    anisotropy, anisotropy_error : float
        Universal anisotropy index, zero for an isotropic solid.
    """

    values: FloatArray
    errors: FloatArray | None
    anisotropy: float
    anisotropy_error: float | None

    def to_dict(self) -> dict[str, Any]:
        """JSON-ready: {"bulk_GPa": {"voigt", "reuss", "hill", "standard_error": {...}}, ..., "anisotropy_index"}."""
        out: dict[str, Any] = {}
        for row, name in enumerate(AVERAGES):
            out[name] = dict(zip(SCHEMES, map(float, self.values[row]), strict=True))
            errors = [None] * 3 if self.errors is None else list(map(float, self.errors[row]))
            out[name]["standard_error"] = dict(zip(SCHEMES, errors, strict=True))
        out["anisotropy_index"] = self.anisotropy
        out["anisotropy_index_standard_error"] = self.anisotropy_error
        return out


def averages(stiffness: Stiffness) -> Averages:
    """Averages of a stiffness with standard errors to first order.

    Raises
    ------
    NoTensorError
        For a stiffness that is not positive definite: it has no meaningful averages.
    """
    if stiffness.eigenvalues[0] <= 0:
        raise NoTensorError(
            f"the stiffness is not positive definite (smallest eigenvalue {stiffness.eigenvalues[0]:.3g} GPa)",
            remedy="Averages have no meaning for an unstable crystal; see the findings of strainkit fit.",
        )
    values = averages_of(stiffness.mandel)
    error = stiffness.standard_error_of(lambda m: _anisotropy(averages_of(m)))
    return Averages(
        values=values,
        errors=stiffness.standard_error_of(averages_of),
        anisotropy=float(_anisotropy(values)),
        anisotropy_error=None if error is None else float(error),
    )
