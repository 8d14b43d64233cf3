"""Where directions lie in the projection, and which low-index poles are named there."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from strainkit.crystal.lattice import low_indices
from strainkit.derive.elastic import ElasticCrystal
from strainkit.tensors.arrays import FloatArray, IntArray

__all__ = ["AXIS_LETTERS", "Pole", "Room", "poles", "projected"]

#: a plane normal and a direction closer than this, degrees, are one pole
_SAME = 0.5
#: half the width and height of a label, and the room for a mark, in radii of the disc
_LABEL, _MARK = (0.095, 0.045), 0.035
#: where the letters of the frame's axes stand
AXIS_LETTERS = {"X": np.array([0.0, -1.11]), "Y": np.array([1.1, 0.0])}


@dataclass(frozen=True)
class Pole:
    """One mark in the disc.

    Attributes
    ----------
    place : (2,)
        In radii, to the right and upwards.
    kinds : tuple of "plane", "direction"
    label : str
        Mathtext; empty where there is no room for it.
    label_at : (2,)
        Middle of the label.
    """

    place: FloatArray
    kinds: tuple[str, ...]
    label: str
    label_at: FloatArray


class Room:
    """Boxes in the disc that are taken: marks, labels, and the letters of the axes X (down) and Y (right)."""

    def __init__(self, marks: Sequence[FloatArray] = ()) -> None:
        self._taken: list[tuple[FloatArray, tuple[float, float]]] = [(place, (_MARK, _MARK)) for place in marks]
        self._taken += [(place, (0.05, 0.05)) for place in AXIS_LETTERS.values()]

    def clearance(self, places: FloatArray, size: tuple[float, float] = _LABEL) -> FloatArray:
        """How far boxes (half width, half height) around places (k, 2) are from what is taken (k,); negative: they touch."""
        if not self._taken:
            return np.ones(len(places))
        others, rooms = (np.array(part) for part in zip(*self._taken, strict=True))
        gaps = np.abs(places[:, None] - others) - (rooms + np.array(size))
        return np.asarray(gaps.max(axis=2).min(axis=1))

    def free(self, place: FloatArray, size: tuple[float, float] = _LABEL) -> bool:
        """Is there room for a box around this place?"""
        return bool(self.clearance(place[None], size)[0] > 0)

    def take(self, place: FloatArray, size: tuple[float, float] = _LABEL) -> None:
        """Take this room."""
        self._taken.append((place, size))


def projected(vectors: FloatArray) -> FloatArray:
    """Places (k, 2), right and up in radii of the disc, of directions (k, 3) in the frame drawn (X down, Y right).

    A direction below the plane of the paper is replaced by its opposite.
    """
    n = np.asarray(vectors, dtype=float).reshape(-1, 3)
    n = n / np.linalg.norm(n, axis=1, keepdims=True)
    n = np.where((n[:, 2] < -1e-9)[:, None], -n, n)
    across = np.hypot(n[:, 0], n[:, 1])
    radius = np.sqrt(np.maximum(0.0, 1.0 - n[:, 2]))
    scale = np.divide(radius, across, out=np.zeros_like(radius), where=across > 1e-12)
    return np.column_stack([scale * n[:, 1], -scale * n[:, 0]])


def poles(elastic: ElasticCrystal, room: Room) -> list[Pole]:
    """Poles of planes and directions with no index above one, the simplest first; both ends of those on the rim.

    Labels go where there is room, and take it.
    """
    axes, frame = elastic.axes, elastic.frame.rotation
    assert axes is not None
    indices = low_indices(1)
    normals, directions = axes.normal(indices) @ frame.T, axes.direction(indices) @ frame.T
    taken: set[int] = set()
    marks = []
    for i, normal in enumerate(normals):
        near = np.degrees(np.arccos(np.clip(np.abs(directions @ normal), 0.0, 1.0)))
        j = int(near.argmin())
        if near[j] < _SAME:
            taken.add(j)
            marks.append(_Mark(normal, ("plane", "direction"), indices[i], "" if i == j else "()"))
        else:
            marks.append(_Mark(normal, ("plane",), indices[i], "()"))
    marks += [_Mark(d, ("direction",), indices[j], "[]") for j, d in enumerate(directions) if j not in taken]
    return _with_room(sorted(marks, key=lambda mark: int(np.abs(mark.indices).sum())), room)


@dataclass(frozen=True)
class _Mark:
    vector: FloatArray
    kinds: tuple[str, ...]
    indices: IntArray
    brackets: str


def _with_room(marks: list[_Mark], room: Room) -> list[Pole]:
    """Every mark, and labels beside them as long as they touch neither marks nor other labels."""
    ends = []
    for mark in marks:
        place = projected(mark.vector)[0]
        upright = bool(mark.vector[2] >= -1e-9)
        names = [_named(sign * mark.indices, mark.brackets) for sign in ((1, -1) if upright else (-1, 1))]
        ends.append([(place, names[0])] + ([(-place, names[1])] if abs(mark.vector[2]) < 1e-6 else []))
    for spots in ends:
        for place, _ in spots:
            room.take(place, (_MARK, _MARK))
    found = []
    for mark, spots in zip(marks, ends, strict=True):
        named = False
        for place, label in spots:
            at = None if named else next((p for p in _beside(place) if room.free(p)), None)
            if at is not None:
                room.take(at)
                named = True
            found.append(Pole(place, mark.kinds, "" if at is None else label, place if at is None else at))
    return found


def _beside(place: FloatArray) -> list[FloatArray]:
    """Places for a label: towards the rim first, then around the mark."""
    inside = [np.array(step) for step in ((0, 0.1), (0, -0.1), (0.18, 0), (-0.18, 0), (0.15, 0.08), (-0.15, 0.08))]
    spots = [place + step for step in inside]
    if np.hypot(*place) > 0.97:
        outward = place / np.hypot(*place)
        return [place + outward * np.array([0.16, 0.1])] + [p for p in spots if np.hypot(*p) < 0.86]
    return [p for p in spots if np.hypot(*p) < 0.9]


def _named(indices: IntArray, brackets: str) -> str:
    """Indices with bars over negative ones, for matplotlib."""
    inside = "".join(rf"$\overline{{{-i}}}$" if i < 0 else str(i) for i in map(int, indices))
    return brackets[:1] + inside + brackets[1:]
