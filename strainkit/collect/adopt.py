"""Strained calculations that a user already has: what they are of, and how they are strained."""

from __future__ import annotations

from dataclasses import dataclass
from pathlib import Path

import numpy as np

from strainkit.collect.readers import read_returned, recognise
from strainkit.crystal.crystal import Crystal
from strainkit.errors import InputError
from strainkit.tensors.arrays import FloatArray, IntArray
from strainkit.tensors.rotations import polar
from strainkit.tensors.strain import gradient_between

__all__ = ["Found", "find_strained"]

#: a larger stretch than this is another cell, or the same lattice in another basis
_LARGEST = 0.10


@dataclass(frozen=True)
class Found:
    """A finished calculation of the strained crystal.

    Attributes
    ----------
    path : path
    gradient : (3, 3)
        Symmetric deformation gradient, rotation removed, frame of the reference.
    """

    path: Path
    gradient: FloatArray


def find_strained(crystal: Crystal, folder: Path) -> tuple[list[Found], list[str]]:
    """Every output below a folder that is a finished calculation of this crystal, strained or not; and why others are not.

    The cells must be in the basis of the reference, their atoms in its order.

    Parameters
    ----------
    crystal : Crystal
        The reference.
    folder : path

    Raises
    ------
    InputError
        When there is no such folder.
    """
    if not folder.is_dir():
        raise InputError("no such folder", folder, "Name the folder that holds your finished calculations.")
    found: list[Found] = []
    refused: list[str] = []
    for path in sorted(p for p in folder.rglob("*") if p.is_file() and not p.is_symlink()):
        reader = recognise(path)
        if reader is None:
            continue
        try:
            returned = read_returned(path, reader)
            if returned.problems:
                raise InputError(returned.problems[0][1])
            found.append(Found(path, _stretch(crystal, returned.lattice, returned.numbers)))
        except InputError as error:
            refused.append(f"{path.relative_to(folder)}: {error.what}")
    return found, refused


def _stretch(crystal: Crystal, lattice: FloatArray, numbers: IntArray) -> FloatArray:
    if not np.array_equal(numbers, crystal.numbers):
        raise InputError("other atoms than the reference, or in another order")
    gradient = gradient_between(crystal.lattice, lattice)
    _, stretch = polar(gradient)
    size = float(np.abs(np.linalg.eigvalsh(stretch) - 1.0).max())
    if np.linalg.det(gradient) <= 0 or size > _LARGEST:
        raise InputError(f"a cell strained by {100 * size:.0f} %: another cell, or another basis of the lattice")
    return np.asarray(0.5 * (stretch + stretch.T))
