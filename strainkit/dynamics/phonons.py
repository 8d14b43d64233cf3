"""Force constants of a supercell from phonopy's files: sound speeds at small q, and where ions go under strain."""

from __future__ import annotations

from itertools import product
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from strainkit.crystal.crystal import Crystal
from strainkit.crystal.spacegroup import spglib_raises
from strainkit.errors import InputError
from strainkit.tensors.arrays import FloatArray, IntArray
from strainkit.tensors.rotations import polar
from strainkit.tensors.sixvectors import to_mandel
from strainkit.tensors.strain import gradient_between

if TYPE_CHECKING:
    from phonopy import Phonopy

__all__ = ["crystal_of", "gamma_constants", "load_phonopy", "rotation_to", "sound_speeds", "strain_response"]

#: distance from q = 0 at which slopes are taken, in units of 2 pi / A
_STEP = 1e-3


def load_phonopy(path: Path) -> Phonopy:
    """Read a phonopy.yaml (or phonopy_params.yaml) that holds force constants or the forces to make them.

    FORCE_CONSTANTS and FORCE_SETS beside the file are used where it holds neither.

    Raises
    ------
    InputError
        With phonopy's own words.
    """
    import phonopy

    if not path.is_file():
        raise InputError("no such file", path, "Name a phonopy.yaml with force constants in it or beside it.")
    beside = {
        f"{kind.lower()}_filename": str(path.parent / kind)
        for kind in ("FORCE_CONSTANTS", "FORCE_SETS")
        if (path.parent / kind).is_file()
    }
    try:
        with spglib_raises():
            study = phonopy.load(str(path), log_level=0, is_nac=False, is_compact_fc=False, **beside)
    except Exception as error:  # phonopy and its parsers raise what they like
        reason = " ".join(str(error).split())[:200] or type(error).__name__
        raise InputError(f"not readable by phonopy: {reason}", path) from None
    if study.force_constants is None:
        raise InputError("no force constants in it or beside it", path, "Write FORCE_CONSTANTS or FORCE_SETS beside it.")
    return study


def crystal_of(study: Phonopy, source: str = "") -> Crystal:
    """The unit cell that the force constants belong to."""
    cell: Any = study.unitcell
    return Crystal(
        lattice=np.array(cell.cell),
        positions=np.array(cell.scaled_positions),
        numbers=np.array(cell.numbers),
        name="phonopy",
        source=source,
    )


def rotation_to(study: Phonopy, lattice: FloatArray) -> FloatArray:
    """Rotation R (3, 3) with x_phonopy = R x_given for a given lattice (3, 3) of the same unit cell.

    Raises
    ------
    InputError
        When the cells differ by more than a rotation and one percent.
    """
    gradient = gradient_between(lattice, np.array(study.unitcell.cell))
    rotation, stretch = polar(gradient)
    if np.linalg.det(gradient) <= 0 or np.abs(stretch - np.eye(3)).max() > 0.01:
        raise InputError(
            "the unit cell of the force constants is another than that of the run",
            "--force-constants",
            "Both must be the same cell in the same setting; they may be turned against each other.",
        )
    return rotation


def sound_speeds(study: Phonopy, directions: FloatArray) -> FloatArray:
    """Speeds (m, 3), km/s, ascending, of the three acoustic branches at small q along unit vectors (m, 3) in phonopy's frame.

    Group velocities from phonopy, without the non-analytic term of polar crystals.
    """
    lattice = np.array(study.primitive.cell)
    points = _STEP * np.asarray(directions, dtype=float) @ lattice.T
    with spglib_raises():
        study.run_qpoints(points, with_group_velocities=True)
    velocities = np.array(study.qpoints.group_velocities)[:, :3]
    speeds = np.einsum("mbi,mi->mb", velocities, np.asarray(directions, dtype=float)) * 0.1
    return np.sort(speeds, axis=1)


def _blocks(study: Phonopy, crystal: Crystal) -> tuple[FloatArray, IntArray, FloatArray]:
    """Force constants (n, N, 3, 3) between unit cell and supercell, owners (N,) in the unit cell, rotation to phonopy's frame.

    Raises
    ------
    InputError
        When the unit cells differ, or their atoms stand in another order.
    """
    rotation = rotation_to(study, crystal.lattice)
    cell = study.unitcell
    shift = np.array(cell.scaled_positions) - crystal.positions
    shift -= np.round(shift)
    same = np.array_equal(cell.numbers, crystal.numbers)
    if not same or np.linalg.norm(shift @ crystal.lattice, axis=1).max() > 0.1:
        raise InputError("the atoms of the force constants are not those of the run, in the same order", "--force-constants")
    supercell: Any = study.supercell
    owner = np.array([supercell.u2u_map[i] for i in supercell.s2u_map])
    full = np.asarray(study.force_constants, dtype=float)[np.array(supercell.u2s_map)]
    return np.einsum("ia,mnij,jb->mnab", rotation, full, rotation), owner, rotation


def gamma_constants(study: Phonopy, crystal: Crystal) -> FloatArray:
    """Force constants at q = 0 (3 n, 3 n), eV/A^2, of the run's crystal in its own frame, summed over the supercell.

    Raises
    ------
    InputError
        When the unit cells differ, or their atoms stand in another order.
    """
    blocks, owner, _ = _blocks(study, crystal)
    n = len(crystal.numbers)
    summed = np.zeros((n, n, 3, 3))
    for column, atom in enumerate(owner):
        summed[:, atom] += blocks[:, column]
    matrix = summed.transpose(0, 2, 1, 3).reshape(3 * n, 3 * n)
    return np.asarray(0.5 * (matrix + matrix.T))


def strain_response(study: Phonopy, crystal: Crystal) -> FloatArray:
    """Forces (3 n, 6), eV/A per unit Mandel strain, on ions at their affine places: the first moments of the force constants.

    Pairs are taken at their shortest distance in the supercell, averaged over images that are equally far, so the supercell
    must be larger than the reach of the forces (Born & Huang, Dynamical Theory of Crystal Lattices, 1954, sections 26 and 27).

    Raises
    ------
    InputError
        When the unit cells differ, or their atoms stand in another order.
    """
    blocks, _, rotation = _blocks(study, crystal)
    supercell: Any = study.supercell
    lattice, places = np.array(supercell.cell), np.array(supercell.scaled_positions)
    images = np.array(list(product((-1, 0, 1), repeat=3))) @ lattice
    response = np.empty((len(crystal.numbers), 3, 6))
    for i, atom in enumerate(supercell.u2s_map):
        apart = places - places[atom]
        ways = (apart - np.round(apart))[:, None, :] @ lattice + images
        far = np.linalg.norm(ways, axis=2)
        shortest = far < far.min(axis=1, keepdims=True) + 1e-4
        mean = (ways * shortest[:, :, None]).sum(axis=1) / shortest.sum(axis=1)[:, None] @ rotation
        moment = -np.einsum("nab,nc->abc", blocks[i], mean)
        response[i] = to_mandel(0.5 * (moment + moment.transpose(0, 2, 1)))
    response -= response.mean(axis=0)
    return response.reshape(-1, 6)
