"""Mechanical stability: every eigenvalue of the stiffness positive, with the probability under its error bars.

The eigenvalues of the Mandel matrix decide for every crystal system (M. Born & K. Huang, Dynamical Theory of Crystal
Lattices, 1954); under reference stress they are those of the symmetric part of the stress-strain coefficients B.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import Any

import numpy as np

from strainkit.derive.spread import DRAWS, half_width
from strainkit.tensors.arrays import FloatArray
from strainkit.tensors.sixvectors import from_mandel, strain_to_voigt
from strainkit.tensors.stiffness import Stiffness

__all__ = ["Stability", "stability"]

#: draws behind the probability
_DRAWS = 10_000


@dataclass(frozen=True)
class Stability:
    """Eigenvalues of a stiffness and what its errors say about their sign.

    Attributes
    ----------
    eigenvalues : (6,)
        GPa, ascending.
    errors : (6,) or None
        Sampled standard errors, GPa.
    probability : float or None
        That all are positive: share of draws (Student's where the noise was estimated); None without covariance.
    draws : int
    softest : (3, 3)
        Unit strain tensor of the smallest eigenvalue, in the frame of the stiffness.
    """

    eigenvalues: FloatArray
    errors: FloatArray | None
    probability: float | None
    draws: int
    softest: FloatArray

    @property
    def stable(self) -> bool:
        """Is the tensor itself positive definite?"""
        return bool(self.eigenvalues[0] > 0)

    def to_dict(self, rotation: FloatArray) -> dict[str, Any]:
        """JSON-ready; the softest strain in the frame whose axes are the rows of `rotation`."""
        return {
            "stable": self.stable,
            "probability": self.probability,
            "probability_draws": self.draws,
            "eigenvalues_GPa": self.eigenvalues,
            "eigenvalues_standard_error_GPa": self.errors,
            "softest_strain_voigt": strain_to_voigt(rotation @ self.softest @ rotation.T),
        }


def stability(stiffness: Stiffness, seed: int = 0) -> Stability:
    """Stability of a stiffness (its symmetric stress-strain coefficients under reference stress)."""
    values, vectors = np.linalg.eigh(stiffness.mandel)
    errors = probability = None
    count = 0
    if stiffness.covariance is not None:
        count = _DRAWS
        probability = float((np.linalg.eigvalsh(stiffness.sample(count, seed))[:, 0] > 0).mean())
        normal = replace(stiffness, degrees_of_freedom=None).sample(DRAWS, seed)
        errors = half_width(np.linalg.eigvalsh(normal))
    return Stability(values, errors, probability, count, from_mandel(vectors[:, 0]))
