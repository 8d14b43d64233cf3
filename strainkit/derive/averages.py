"""Averages over all orientations (`strainkit.tensors.averages`) with standard errors."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

from strainkit.derive.spread import spread_of
from strainkit.errors import NoTensorError
from strainkit.tensors.arrays import FloatArray
from strainkit.tensors.averages import AVERAGES, SCHEMES, anisotropy_of, averages_of, pugh_of
from strainkit.tensors.stiffness import Stiffness

__all__ = ["Averages", "averages"]


@dataclass(frozen=True)
class Averages:
    """Averaged moduli of one stiffness.

    Attributes
    ----------
    values, errors : (4, 3)
        In the order of `AVERAGES` and `SCHEMES`; errors are None without covariance.
    anisotropy, anisotropy_error : float
        Universal anisotropy index, zero for an isotropic solid; its error is sampled, since the index is not smooth there.
    pugh, pugh_error : float
        K/G of the Hill averages.
    """

    values: FloatArray
    errors: FloatArray | None
    anisotropy: float
    anisotropy_error: float | None
    pugh: float
    pugh_error: float | None

    def to_dict(self) -> dict[str, Any]:
        """JSON-ready: {"bulk_GPa": {"voigt", "reuss", "hill", "standard_error": {...}}, ..., "anisotropy_index"}."""
        out: dict[str, Any] = {}
        for row, name in enumerate(AVERAGES):
            out[name] = dict(zip(SCHEMES, map(float, self.values[row]), strict=True))
            errors = [None] * 3 if self.errors is None else list(map(float, self.errors[row]))
            out[name]["standard_error"] = dict(zip(SCHEMES, errors, strict=True))
        out["anisotropy_index"] = self.anisotropy
        out["anisotropy_index_standard_error"] = self.anisotropy_error
        out["pugh_ratio"] = {"value": self.pugh, "standard_error": self.pugh_error}
        return out


def averages(stiffness: Stiffness) -> Averages:
    """Averages of a stiffness with standard errors.

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
    index_error, pugh_error = spread_of(stiffness, anisotropy_of), stiffness.standard_error_of(pugh_of)
    return Averages(
        values=averages_of(stiffness.mandel),
        errors=stiffness.standard_error_of(averages_of),
        anisotropy=float(anisotropy_of(stiffness.mandel)),
        anisotropy_error=None if index_error is None else float(index_error),
        pugh=float(pugh_of(stiffness.mandel)),
        pugh_error=None if pugh_error is None else float(pugh_error),
    )
