"""k-point meshes: one mesh for the whole set from the reference cell, and how many points are left by symmetry."""

from __future__ import annotations

from math import ceil, pi

import numpy as np

from strainkit.crystal.crystal import Crystal
from strainkit.crystal.symmetry import species, spglib_raises
from strainkit.errors import UsageError

__all__ = ["irreducible_kpoints", "kpoint_mesh"]


def kpoint_mesh(crystal: Crystal, spacing: float) -> tuple[int, int, int]:
    """Gamma-centred mesh whose points are no further apart than `spacing`, 1/A, 2 pi included."""
    if not 0.01 <= spacing <= 10.0:
        raise UsageError(f"a k-point spacing of {spacing:g} 1/A is out of range", "--kspacing", "0.15 to 0.4 is usual.")
    reciprocal = 2.0 * pi * np.linalg.norm(np.linalg.inv(crystal.lattice), axis=0)
    a, b, c = (max(1, ceil(round(float(length / spacing), 6))) for length in reciprocal)
    return a, b, c


def irreducible_kpoints(crystal: Crystal, mesh: tuple[int, int, int], symprec: float) -> int:
    """Number of points of a Gamma-centred mesh that symmetry and time reversal leave different (spglib)."""
    import spglib

    cell = (crystal.lattice.tolist(), crystal.positions.tolist(), species(crystal).tolist())
    with spglib_raises():
        mapping, _ = spglib.get_ir_reciprocal_mesh(mesh, cell, is_shift=(0, 0, 0), symprec=symprec)
    return len(np.unique(mapping))
