"""The stiffness tensor with its covariance: rotation, compliance, sampling and linear propagation of errors."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, replace
from typing import Any

import numpy as np

from strainkit.errors import UsageError
from strainkit.tensors.arrays import FloatArray
from strainkit.tensors.rotations import rotation6
from strainkit.tensors.sixvectors import compliance_to_voigt, full_tensor, stiffness_from_voigt, stiffness_to_voigt

__all__ = ["Stiffness"]


@dataclass(frozen=True)
class Stiffness:
    """A stiffness tensor in GPa with the covariance of its elements.

    Attributes
    ----------
    mandel : (6, 6)
        Symmetric, GPa, order xx yy zz yz xz xy with shear times sqrt 2.
    covariance : (36, 36) or None
        Covariance of ``mandel.ravel()`` in GPa^2; None when no error estimate exists.
    degrees_of_freedom : int or None
        Of the noise estimate behind the covariance, for Student intervals; None when the noise was given, not estimated.
    frame : str
        Name of the Cartesian frame of the components.
    """

    mandel: FloatArray
    covariance: FloatArray | None = None
    degrees_of_freedom: int | None = None
    frame: str = "given"

    def __post_init__(self) -> None:
        matrix = np.array(self.mandel, dtype=float)
        if matrix.shape != (6, 6) or not np.isfinite(matrix).all():
            raise UsageError(f"a stiffness needs 6x6 finite numbers, got shape {matrix.shape}")
        if np.abs(matrix - matrix.T).max() > 1e-6 * max(np.abs(matrix).max(), 1e-300):
            raise UsageError("a stiffness must be symmetric", remedy="Average the off-diagonal pairs if that is meant.")
        object.__setattr__(self, "mandel", 0.5 * (matrix + matrix.T))
        if self.covariance is not None and np.shape(self.covariance) != (36, 36):
            raise UsageError(f"the covariance must be 36x36, got {np.shape(self.covariance)}")

    @classmethod
    def from_voigt(cls, voigt: FloatArray, frame: str = "given") -> Stiffness:
        """Stiffness of a Voigt matrix (6, 6) in GPa, without errors."""
        return cls(stiffness_from_voigt(voigt), frame=frame)

    @property
    def voigt(self) -> FloatArray:
        """Voigt stiffness (6, 6), GPa."""
        return stiffness_to_voigt(self.mandel)

    @property
    def standard_errors(self) -> FloatArray | None:
        """Standard errors of the Voigt stiffness (6, 6), GPa; None without covariance."""
        if self.covariance is None:
            return None
        return stiffness_to_voigt(np.sqrt(np.clip(np.diag(self.covariance), 0.0, None)).reshape(6, 6))

    @property
    def compliance(self) -> FloatArray:
        """Voigt compliance (6, 6), 1/GPa; raises numpy.linalg.LinAlgError for a singular stiffness."""
        return compliance_to_voigt(np.linalg.inv(self.mandel))

    @property
    def tensor(self) -> FloatArray:
        """Fourth-rank stiffness (3, 3, 3, 3), GPa."""
        return full_tensor(self.mandel)

    @property
    def eigenvalues(self) -> FloatArray:
        """Eigenvalues (6,) of the Mandel matrix, GPa, ascending; all positive for a stable crystal without stress."""
        return np.linalg.eigvalsh(self.mandel)

    def rotated(self, rotation: FloatArray, frame: str) -> Stiffness:
        """The same crystal in another frame: rows of `rotation` (3, 3) are the new axes in the present frame."""
        q = rotation6(rotation)
        covariance = self.covariance
        if covariance is not None:
            both = np.kron(q, q)
            covariance = both @ covariance @ both.T
        return replace(self, mandel=q @ self.mandel @ q.T, covariance=covariance, frame=frame)

    def sample(self, count: int, seed: int = 0) -> FloatArray:
        """Mandel matrices (count, 6, 6) drawn from the error distribution (Student where degrees of freedom are known)."""
        steps = self._error_steps()
        rng = np.random.default_rng(seed)
        weights = rng.standard_normal((count, len(steps)))
        if self.degrees_of_freedom is not None:
            weights *= np.sqrt(self.degrees_of_freedom / rng.chisquare(self.degrees_of_freedom, count))[:, None]
        return self.mandel + np.tensordot(weights, steps, axes=1)

    def standard_error_of(self, quantity: Callable[[FloatArray], FloatArray]) -> FloatArray | None:
        """Standard error, to first order, of a quantity of the stiffness.

        Parameters
        ----------
        quantity : callable
            Maps Mandel matrices (m, 6, 6) to values (m, ...).

        Returns
        -------
        array of the shape of one value, or None without covariance.
        """
        if self.covariance is None:
            return None
        steps = self._error_steps()
        if not len(steps):
            return np.zeros(np.shape(quantity(self.mandel[None]))[1:])
        size = 1e-4 * np.linalg.norm(self.mandel) / np.linalg.norm(steps, axis=(1, 2))
        shift = steps * size[:, None, None]
        up, down = quantity(self.mandel + shift), quantity(self.mandel - shift)
        slope = (up - down) / (2.0 * size.reshape(-1, *([1] * (up.ndim - 1))))
        return np.asarray(np.sqrt((slope**2).sum(axis=0)))

    def _error_steps(self) -> FloatArray:
        """Independent one-sigma displacements (r, 6, 6) of the Mandel matrix."""
        if self.covariance is None:
            raise UsageError("this stiffness has no error estimate", remedy="Give a noise level to the fit (--noise).")
        values, vectors = np.linalg.eigh(0.5 * (self.covariance + self.covariance.T))
        keep = values > 1e-12 * max(values[-1], 0.0)
        steps = (vectors[:, keep] * np.sqrt(values[keep])).T.reshape(-1, 6, 6)
        return np.asarray(0.5 * (steps + np.swapaxes(steps, 1, 2)))

    def to_dict(self) -> dict[str, Any]:
        """JSON-ready numbers: {"frame", "stiffness_GPa" 6x6 Voigt, "standard_error_GPa" 6x6 or None}."""
        errors = self.standard_errors
        return {
            "frame": self.frame,
            "stiffness_GPa": self.voigt.tolist(),
            "standard_error_GPa": None if errors is None else errors.tolist(),
        }

    def __repr__(self) -> str:
        errors = self.standard_errors
        lines = [f"Stiffness in GPa, Voigt order xx yy zz yz xz xy, frame {self.frame}:"]
        lines += [" ".join(f"{0.0 if abs(x) < 5e-3 else x:9.2f}" for x in row) for row in self.voigt]
        if errors is not None:
            lines.append(f"standard errors up to {errors.max():.2g} GPa")
        return "\n".join(lines)
