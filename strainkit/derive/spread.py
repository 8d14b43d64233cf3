"""Standard errors by seeded sampling, for quantities that are not smooth in the stiffness."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, replace

import numpy as np

from strainkit.tensors.arrays import FloatArray
from strainkit.tensors.stiffness import Stiffness

__all__ = ["DRAWS", "WithError", "half_width", "spread_of", "stable_draws", "with_errors"]

#: draws behind a sampled standard error: it is then good to about 3 %
DRAWS = 600

#: the quantiles one standard deviation either side of a normal distribution's mean
_ONE_SIGMA = (0.158655, 0.841345)


@dataclass(frozen=True)
class WithError:
    """A number and its standard error, None where there is no error estimate."""

    value: float
    error: float | None = None

    def to_dict(self) -> dict[str, float | None]:
        """{"value", "standard_error"}."""
        return {"value": self.value, "standard_error": self.error}


def with_errors(values: FloatArray, errors: FloatArray | None) -> list[WithError]:
    """One `WithError` a value (k,); errors (k,) or None."""
    spread = [None] * len(values) if errors is None else [float(e) for e in errors]
    return [WithError(float(v), e) for v, e in zip(values, spread, strict=True)]


def stable_draws(stiffness: Stiffness, count: int = DRAWS, seed: int = 0) -> FloatArray:
    """Mandel matrices (at most count, 6, 6) of a normal distribution with the covariance, unstable ones left out.

    Normal also where the noise was estimated: a standard error is the root of a variance; Student's factor belongs to
    intervals. Empty without covariance or when no draw is stable.
    """
    if stiffness.covariance is None:
        return np.zeros((0, 6, 6))
    draws = replace(stiffness, degrees_of_freedom=None).sample(count, seed)
    return np.asarray(draws[np.linalg.eigvalsh(draws)[:, 0] > 0])


def half_width(values: FloatArray) -> FloatArray:
    """Half the width of the central 68.3 % of values (draws, ...): the standard deviation of normal ones, deaf to outliers."""
    low, high = np.quantile(values, _ONE_SIGMA, axis=0)
    return np.asarray(0.5 * (high - low))


def spread_of(
    stiffness: Stiffness, quantity: Callable[[FloatArray], FloatArray], count: int = DRAWS, seed: int = 0
) -> FloatArray | None:
    """Sampled standard error of a quantity that maps Mandel matrices (m, 6, 6) to values (m, ...); None without covariance."""
    draws = stable_draws(stiffness, count, seed)
    return half_width(quantity(draws)) if len(draws) > 1 else None
