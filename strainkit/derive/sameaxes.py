"""Which crystals have constants that mean the same: one Laue class, and axes that can be matched."""

from __future__ import annotations

from collections import Counter
from functools import reduce
from math import gcd

import numpy as np

from strainkit.crystal.crystal import Crystal, lengths_angles
from strainkit.crystal.frames import conventional_axes, physical_axes
from strainkit.crystal.symmetry import LAUE_CLASSES
from strainkit.derive.member import Member
from strainkit.tensors.arrays import FloatArray
from strainkit.tensors.constants import constant_basis
from strainkit.tensors.invariants import invariant_matrices
from strainkit.tensors.laue import laue_settings
from strainkit.tensors.rotations import rotate_matrix

__all__ = ["common_names", "named_constants", "obstacle"]

#: a, b, c are the same ones when they differ by less
_LENGTH, _ANGLE = 0.10, 5.0
#: Laue classes whose constants are named by symmetry up to the sign of these
_SIGNED = {"4/m": ("C16",), "-3": ("C14", "C15"), "-3m": ("C14", "C15")}
_LOW = ("-1", "2/m", "mmm")


def named_constants(member: Member) -> tuple[str, ...]:
    """Names of the independent constants in the member's conventional axes; empty when these are unknown."""
    rotations = _named_rotations(member)
    return () if rotations is None else constant_basis(invariant_matrices(rotations), np.eye(3)).names


def _named_rotations(member: Member) -> FloatArray | None:
    e = member.elastic
    if e.naming is None or e.laue_class is None:
        return None
    if member.symmetry is None:
        return laue_settings(e.laue_class)[0].rotations
    return np.asarray(e.naming @ member.symmetry.rotations @ e.naming.T)


def obstacle(first: Member, second: Member) -> str:
    """Why the constants of two members cannot be set against each other, in words; empty when they can."""
    laue = [m.elastic.laue_class for m in (first, second)]
    if None in laue:
        return f"{first.label if laue[0] is None else second.label} names no Laue class"
    if laue[0] != laue[1]:
        return f"Laue class {laue[1]} against {laue[0]} of {first.label}"
    for member in (first, second):
        if member.symmetry is None and (doubt := _typed_doubt(member)):
            return doubt
    if named_constants(first) != named_constants(second):
        return f"two-fold axes lie otherwise than in {first.label}"
    if laue[0] not in _LOW or first.symmetry is None or second.symmetry is None:
        return ""
    cells = [lengths_angles(conventional_axes(m.symmetry)[0]) for m in (first, second) if m.symmetry is not None]
    gap = np.abs(np.array(cells[0]) - np.array(cells[1]))
    if (gap[:3] > _LENGTH * np.array(cells[0][:3])).any() or (gap[3:] > _ANGLE).any():
        return f"a, b, c are others than in {first.label}: its axes cannot be matched"
    if _same_crystal(first, second) and not _same_orientation(first, second):
        return f"a, b, c lie otherwise among the atoms than in {first.label}"
    return ""


def common_names(members: list[Member]) -> tuple[str, ...]:
    """Constants that members without an `obstacle` share: without those whose sign hangs on a choice of axes."""
    first = members[0]
    names = named_constants(first)
    signed = _SIGNED.get(first.elastic.laue_class or "", ())
    if not signed or all(_signs_agree(first, other) for other in members[1:]):
        return names
    return tuple(name for name in names if name not in signed)


def _signs_agree(first: Member, second: Member) -> bool:
    if first.symmetry is None or second.symmetry is None:
        return all(m.axes == "ieee" for m in (first, second))
    return _same_crystal(first, second) and _same_orientation(first, second)


def _typed_doubt(member: Member) -> str:
    """What keeps the constants of a typed tensor without a cell from being those of the IEEE axes."""
    laue = member.elastic.laue_class
    assert laue is not None
    oblique = LAUE_CLASSES[laue][0] in ("triclinic", "monoclinic")
    if member.axes == "given" or (member.axes == "crystal" and oblique):
        return f"the axes of {member.label} are {member.axes}: give its cell"
    if laue in _LOW and member.axes is None:
        return f"{member.label} does not name its axes"
    mandel = member.elastic.moduli.mandel
    turned = [rotate_matrix(r, mandel) for r in laue_settings(laue)[0].rotations]
    if np.abs(np.array(turned) - mandel).max() > 0.02 * np.abs(mandel).max():
        return f"the symmetry axes of {member.label} are not those of IEEE axes"
    return ""


def _same_crystal(first: Member, second: Member) -> bool:
    one, other = first.symmetry, second.symmetry
    assert one is not None
    assert other is not None
    assert first.crystal is not None
    assert second.crystal is not None
    return one.number == other.number and _reduced(first.crystal) == _reduced(second.crystal)


def _reduced(crystal: Crystal) -> dict[str, int]:
    counts = Counter(crystal.symbols)
    divisor = reduce(gcd, counts.values())
    return {symbol: count // divisor for symbol, count in counts.items()}


def _same_orientation(first: Member, second: Member) -> bool:
    """Do the naming axes of two cells of one crystal lie alike among its atoms, up to its own rotations?"""
    turns = []
    group: FloatArray = np.eye(3)[None]
    for member in (first, second):
        assert member.crystal is not None
        assert member.symmetry is not None
        assert member.elastic.naming is not None
        atoms = physical_axes(member.crystal, member.symmetry)
        turns.append(member.elastic.naming @ atoms.T)
        group = atoms @ member.symmetry.rotations @ atoms.T
    traces = np.einsum("ij,gjk,ik->g", turns[0], group, turns[1])
    return bool(np.degrees(np.arccos(np.clip(0.5 * (traces.max() - 1.0), -1.0, 1.0))) < _ANGLE)
