"""Cartesian frames of a crystal: as given, IEEE 176-1987, and the crystallographers' x along a, z along c*."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from strainkit.crystal.crystal import Crystal
from strainkit.crystal.pairs import close_pairs
from strainkit.crystal.symmetry import Symmetry
from strainkit.errors import UsageError
from strainkit.tensors.arrays import FloatArray

__all__ = ["FRAMES", "Frame", "chosen_frame", "conventional_axes", "crystal_frame", "physical_axes", "standard_axes"]

#: names that `--frame` takes
FRAMES = ("given", "ieee", "crystal")


@dataclass(frozen=True)
class Frame:
    """A right-handed Cartesian frame.

    Attributes
    ----------
    name : str
        "given", "ieee" or "crystal".
    rotation : (3, 3)
        Rows are the frame's axes in the given frame: v_frame = R v_given.
    axes : str
        In words, for example "Z||c, X||a, with a, b, c of the cell as given".
    """

    name: str
    rotation: FloatArray
    axes: str


def conventional_axes(symmetry: Symmetry) -> tuple[FloatArray, str]:
    """Conventional a, b, c (rows, angstrom, given frame, metric averaged over the group), and whose they are in words.

    The given cell's when it is a conventional cell of the crystal's system (for monoclinic ones with the unique axis
    found among its three and renamed b), otherwise those of spglib's standard cell.
    """
    if abs(abs(np.linalg.det(symmetry.transformation)) - 1.0) < 1e-6:
        exact = symmetry.transformation.T @ symmetry.standard_lattice
        for order, words in enumerate(("a, b, c", "b, c, a", "c, a, b") if symmetry.system == "monoclinic" else ("a, b, c",)):
            axes = np.roll(exact, -order, axis=0)
            if _is_conventional(axes, symmetry):
                return axes, f"{'a, b, c' if order == 0 else f'a, b, c being {words}'} of the cell as given"
    rows = np.linalg.inv(symmetry.transformation).T
    words = ", ".join(_combination(row) for row in rows)
    return symmetry.standard_lattice, f"a, b, c of the standard cell, which are {words} of the cell as given"


def _combination(row: FloatArray) -> str:
    terms = ""
    for value, letter in zip(row, "abc", strict=True):
        if abs(value) > 1e-6:
            size = "" if abs(abs(value) - 1) < 1e-6 else f"{abs(value):.4g}"
            terms += f"{'-' if value < 0 else '+' if terms else ''}{size}{letter}"
    return terms or "0"


def _is_conventional(axes: FloatArray, symmetry: Symmetry) -> bool:
    """Do these vectors obey the metric of the system, with rotation axes of the right order along them?"""
    lengths = np.linalg.norm(axes, axis=1)
    unit = axes / lengths[:, None]
    bc, ac, ab = unit[1] @ unit[2], unit[0] @ unit[2], unit[0] @ unit[1]
    order = [int((np.linalg.norm(symmetry.rotations @ axis - axis, axis=1) < 1e-6).sum()) for axis in unit]
    wanted = {  # cosines of alpha, beta, gamma (None: free), pairs of equal lengths, least orders of the axes
        "triclinic": ((None, None, None), (), (1, 1, 1)),
        "monoclinic": ((0.0, None, 0.0), (), (1, 2, 1)),
        "orthorhombic": ((0.0, 0.0, 0.0), (), (2, 2, 2)),
        "tetragonal": ((0.0, 0.0, 0.0), ((0, 1),), (1, 1, 4)),
        "trigonal": ((0.0, 0.0, -0.5), ((0, 1),), (1, 1, 3)),
        "hexagonal": ((0.0, 0.0, -0.5), ((0, 1),), (1, 1, 6)),
        "cubic": ((0.0, 0.0, 0.0), ((0, 1), (1, 2)), (2, 2, 2)),
    }
    cosines, equal, orders = wanted[symmetry.system]
    return (
        all(want is None or abs(got - want) < 1e-6 for got, want in zip((bc, ac, ab), cosines, strict=True))
        and all(abs(lengths[i] / lengths[j] - 1.0) < 1e-6 for i, j in equal)
        and all(got >= least for got, least in zip(order, orders, strict=True))
    )


def crystal_frame(name: str, symmetry: Symmetry) -> Frame:
    """One of the named frames.

    "ieee" follows IEEE 176-1987 (from memory): triclinic Z||c, Y along b*; monoclinic Y||b, Z||c, X along a*;
    orthorhombic X||a, Y||b, Z||c; tetragonal, trigonal and hexagonal Z||c, X||a; cubic along the cube edges.
    "crystal" is x||a, z||c*.
    """
    if name == "given":
        return Frame("given", np.eye(3), "the Cartesian frame of the input cell")
    axes, whose = conventional_axes(symmetry)
    if name == "crystal":
        a, b, _ = axes
        z = np.sign(np.linalg.det(axes)) * np.cross(a, b)
        return Frame(name, _complete(x=a, z=z), f"X||a, Z||c*; {whose}")
    if name == "ieee":
        rotation, words = _ieee(symmetry.system, axes)
        return Frame(name, rotation, f"{words}; {whose}")
    raise UsageError(f"unknown frame {name!r}", "--frame", f"Use one of {', '.join(FRAMES)}.")


def chosen_frame(choice: str, symmetry: Symmetry | None) -> Frame:
    """The frame that a user asked for: a name, or nine numbers, row by row the axes X, Y, Z in the given frame."""
    if choice in FRAMES:
        if symmetry is not None:
            return crystal_frame(choice, symmetry)
        if choice == "given":
            return Frame("given", np.eye(3), "the axes of the tensor as typed")
        raise UsageError(f"axes {choice!r} need a cell", "--frame", "Give --cell, or --frame given.")
    try:
        rotation = np.array([float(x) for x in choice.replace(",", " ").split()]).reshape(3, 3)
    except ValueError:
        raise UsageError(
            f"unknown frame {choice!r}",
            "--frame",
            f"Use one of {', '.join(FRAMES)}, or nine numbers: the axes X, Y, Z in the given frame, row by row.",
        ) from None
    length = np.linalg.norm(rotation, axis=1, keepdims=True)
    rotation = rotation / np.where(length > 0, length, 1.0)
    if not np.allclose(rotation @ rotation.T, np.eye(3), rtol=0, atol=1e-3) or np.linalg.det(rotation) < 0:
        raise UsageError("these nine numbers are not three perpendicular right-handed axes", "--frame")
    u, _, vt = np.linalg.svd(rotation)
    return Frame("custom", u @ vt, "axes typed by the user, rows of the rotation from the given frame")


def standard_axes(symmetry: Symmetry) -> FloatArray:
    """Rows (3, 3): IEEE axes of spglib's standard cell, in the given frame, whatever cell was given."""
    return _ieee(symmetry.system, symmetry.standard_lattice)[0]


def physical_axes(crystal: Crystal, symmetry: Symmetry) -> FloatArray:
    """Rows (3, 3) of axes that are fixed to the atoms: the same however the cell was turned, chosen or repeated.

    They are the IEEE axes of spglib's standard cell. Where the lattice has rotations that the crystal lacks (4/m, -3, -3m,
    6/m and m-3), several such axes are equivalent for the lattice but not for the atoms: the ones are taken along which a
    fixed polynomial of the directions between neighbouring atoms is largest.
    """
    axes = standard_axes(symmetry)
    choices = _distinct(_lattice_rotations(symmetry.system), axes @ symmetry.rotations @ axes.T)
    if len(choices) == 1:
        return axes
    vectors, weights = _neighbours(crystal)
    probes = (_PROBES @ choices @ axes).reshape(-1, 3)  # in every choice of axes, seen from the given frame
    cosines = probes @ vectors.T
    for _ in range(3):  # the eighth power
        cosines *= cosines
    scores = np.round((cosines @ weights).reshape(len(choices), -1) @ [1.0, -0.7, 0.4, -0.2], 8)
    return np.asarray(choices[int(scores.argmax())] @ axes)


#: directions of the polynomial of `physical_axes`, off every symmetry axis
_PROBES = np.array([[0.812, 0.251, 0.527], [0.334, 0.871, -0.361], [-0.452, 0.639, 0.622], [0.183, -0.534, 0.825]])


def _lattice_rotations(system: str) -> FloatArray:
    """Proper rotations of the lattice in IEEE axes, for the systems that have Laue classes with fewer."""
    from scipy.spatial.transform import Rotation

    match system:
        case "tetragonal":
            return np.asarray(Rotation.create_group("D4").as_matrix())
        case "trigonal" | "hexagonal":
            return np.asarray(Rotation.create_group("D6").as_matrix())
        case "cubic":
            return np.asarray(Rotation.create_group("O").as_matrix())
        case _:
            return np.eye(3)[None]


def _distinct(choices: FloatArray, group: FloatArray) -> FloatArray:
    """The first of the rotations (k, 3, 3) in every set that the crystal's own ones (m, 3, 3), in the same axes, make equal."""
    left = list(range(len(choices)))
    kept = []
    while left:
        kept.append(left[0])
        same = choices[left[0]] @ group
        left = [n for n in left if np.abs(same - choices[n]).max(axis=(1, 2)).min() > 1e-6]
    return choices[kept]


def _neighbours(crystal: Crystal) -> tuple[FloatArray, FloatArray]:
    """Unit vectors (n, 3) between atoms within a few atomic distances, and smooth weights a volume."""
    reach = 3.0 * (crystal.volume / len(crystal.numbers)) ** (1 / 3)
    pairs = close_pairs(crystal.lattice, crystal.positions, np.full(len(crystal.numbers), 0.5 * reach))
    charges = crystal.numbers[pairs.first] * np.sqrt(crystal.numbers[pairs.second])
    return pairs.vectors / pairs.lengths[:, None], charges * (1.0 - (pairs.lengths / reach) ** 2) ** 4 / len(crystal.numbers)


def _ieee(system: str, axes: FloatArray) -> tuple[FloatArray, str]:
    a, b, c = axes
    match system:
        case "triclinic":
            return _complete(y=np.sign(np.linalg.det(axes)) * np.cross(c, a), z=c), "Z||c, Y||b*"
        case "monoclinic":
            return _complete(y=b, z=c), "Y||b, Z||c, X||a*"
        case "orthorhombic" | "cubic":
            return _complete(x=a, z=c), "X||a, Y||b, Z||c"
        case _:
            return _complete(x=a, z=c), "Z||c, X||a"


def _complete(x: FloatArray | None = None, y: FloatArray | None = None, *, z: FloatArray) -> FloatArray:
    """Right-handed orthonormal rows from Z and one of X and Y (made exactly perpendicular to Z)."""
    z = z / np.linalg.norm(z)
    other = x if x is not None else y
    assert other is not None
    other = other - (other @ z) * z
    other = other / np.linalg.norm(other)
    return np.array([other, np.cross(z, other), z] if x is not None else [np.cross(other, z), other, z])
