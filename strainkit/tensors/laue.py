"""Rotations of the eleven Laue classes in conventional axes, for tensors that come without a crystal."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from strainkit.tensors.arrays import FloatArray

__all__ = ["LAUE_SYMBOLS", "Setting", "laue_settings"]

_QUARTER = np.array([[0.0, -1, 0], [1, 0, 0], [0, 0, 1]])
_SIXTH = np.array([[0.5, -(0.75**0.5), 0], [0.75**0.5, 0.5, 0], [0, 0, 1]])
_CYCLE = np.array([[0.0, 0, 1], [1, 0, 0], [0, 1, 0]])
_HALF = {axis: np.diag([1.0 if axis == other else -1.0 for other in "XYZ"]) for axis in "XYZ"}

#: Laue class -> axes in words -> generators; the first setting is that of IEEE 176-1987 (Nye, Physical Properties of Crystals)
_GENERATORS: dict[str, dict[str, list[FloatArray]]] = {
    "-1": {"any axes": []},
    "2/m": {"two-fold axis along Y": [_HALF["Y"]], "two-fold axis along Z": [_HALF["Z"]]},
    "mmm": {"two-fold axes along X, Y, Z": [_HALF["X"], _HALF["Y"]]},
    "4/m": {"four-fold axis along Z": [_QUARTER]},
    "4/mmm": {"four-fold axis along Z, two-fold along X": [_QUARTER, _HALF["X"]]},
    "-3": {"three-fold axis along Z": [_SIXTH @ _SIXTH]},
    "-3m": {
        "three-fold axis along Z, two-fold along X": [_SIXTH @ _SIXTH, _HALF["X"]],
        "three-fold axis along Z, two-fold along Y": [_SIXTH @ _SIXTH, _HALF["Y"]],
    },
    "6/m": {"six-fold axis along Z": [_SIXTH]},
    "6/mmm": {"six-fold axis along Z, two-fold along X": [_SIXTH, _HALF["X"]]},
    "m-3": {"axes along the cube edges": [_CYCLE, _HALF["X"]]},
    "m-3m": {"axes along the cube edges": [_CYCLE, _QUARTER]},
}

#: the Laue classes by their Hermann-Mauguin symbols
LAUE_SYMBOLS = tuple(_GENERATORS)


@dataclass(frozen=True)
class Setting:
    """One choice of Cartesian axes for a Laue class.

    Attributes
    ----------
    words : str
        Where the symmetry axes lie.
    rotations : (m, 3, 3)
        All proper rotations of the class.
    """

    words: str
    rotations: FloatArray


def laue_settings(symbol: str) -> list[Setting]:
    """Settings of a Laue class ("-1", "2/m", ... "m-3m") that published tensors use, IEEE 176-1987 first."""
    return [Setting(words, _closure(generators)) for words, generators in _GENERATORS[symbol].items()]


def _closure(generators: list[FloatArray]) -> FloatArray:
    """Every product (m, 3, 3) of the generators."""
    group = [np.eye(3)]
    for element in group:  # the list grows while it is walked
        for generator in generators:
            product = generator @ element
            if not any(np.abs(product - known).max() < 1e-9 for known in group):
                group.append(product)
    return np.array(group)
