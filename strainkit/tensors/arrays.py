"""Array types shared by the whole package."""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

__all__ = ["BoolArray", "FloatArray", "IntArray", "known"]

FloatArray = NDArray[np.floating[Any]]
BoolArray = NDArray[np.bool_]
IntArray = NDArray[np.signedinteger[Any]]


def known(values: FloatArray) -> FloatArray:
    """The values with NaN, which stands for the unknown, turned into zero."""
    return np.where(np.isnan(values), 0.0, values)
