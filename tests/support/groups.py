"""Proper rotation groups of the eleven Laue classes, generated from axes (not from strainkit)."""

from __future__ import annotations

from functools import cache

import numpy as np
from scipy.spatial.transform import Rotation


def _turn(axis: tuple[float, float, float], degrees: float) -> np.ndarray:
    direction = np.array(axis) / np.linalg.norm(axis)
    return Rotation.from_rotvec(np.radians(degrees) * direction).as_matrix()


X, Y, Z, DIAGONAL = (1, 0, 0), (0, 1, 0), (0, 0, 1), (1, 1, 1)
_GENERATORS = {
    "-1": [],
    "2/m": [(Y, 180)],
    "mmm": [(X, 180), (Y, 180)],
    "4/m": [(Z, 90)],
    "4/mmm": [(Z, 90), (X, 180)],
    "-3": [(Z, 120)],
    "-3m": [(Z, 120), (X, 180)],
    "6/m": [(Z, 60)],
    "6/mmm": [(Z, 60), (X, 180)],
    "m-3": [(DIAGONAL, 120), (X, 180)],
    "m-3m": [(DIAGONAL, 120), (Z, 90)],
}

#: Laue class -> independent constants, fewest strained jobs at one magnitude (textbook; METHODS of the project)
COUNTS = {
    "-1": (21, 12),
    "2/m": (13, 8),
    "mmm": (9, 6),
    "4/m": (7, 4),
    "4/mmm": (6, 4),
    "-3": (7, 4),
    "-3m": (6, 4),
    "6/m": (5, 4),
    "6/mmm": (5, 4),
    "m-3": (3, 2),
    "m-3m": (3, 2),
}
LAUE_CLASSES = tuple(COUNTS)


@cache
def rotations(laue: str) -> np.ndarray:
    """(m, 3, 3): closure of the generators under multiplication."""
    group = [np.eye(3)]
    generators = [_turn(axis, angle) for axis, angle in _GENERATORS[laue]]
    frontier = list(group)
    while frontier:
        new = []
        for element in frontier:
            for generator in generators:
                product = generator @ element
                if not any(np.allclose(product, known, atol=1e-8) for known in group + new):
                    new.append(product)
        group += new
        frontier = new
    return np.array(group)
