"""Force constants at q = 0 from displaced cells: phonopy finds the fewest displacements and does the symmetry."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from strainkit.crystal.crystal import Crystal
from strainkit.crystal.spacegroup import spglib_raises
from strainkit.tensors.arrays import FloatArray, IntArray

if TYPE_CHECKING:
    from phonopy import Phonopy

__all__ = ["DISTANCE", "Displacement", "displacements", "force_constants", "frequencies"]

#: length of a displacement, angstrom
DISTANCE = 0.01


@dataclass(frozen=True)
class Displacement:
    """One displaced cell.

    Attributes
    ----------
    atom : int
        Index of the atom that is moved, in the order of the crystal.
    vector : (3,)
        Displacement, angstrom, given frame.
    """

    atom: int
    vector: FloatArray

    def apply(self, crystal: Crystal) -> Crystal:
        """The crystal with this one atom moved."""
        from dataclasses import replace

        positions = crystal.positions.copy()
        positions[self.atom] += np.linalg.solve(crystal.lattice.T, self.vector)
        return replace(crystal, positions=positions)


def _phonopy(crystal: Crystal, symprec: float) -> Phonopy:
    """Phonopy on the cell itself: its periodic images together are the lattice at q = 0."""
    from phonopy import Phonopy
    from phonopy.structure.atoms import PhonopyAtoms

    atoms = PhonopyAtoms(
        numbers=crystal.numbers.tolist(),
        cell=crystal.lattice,
        scaled_positions=crystal.positions,
        magnetic_moments=crystal.magnetic_moments,
    )
    with spglib_raises():  # importing phonopy changes spglib's switch; this puts it back
        return Phonopy(atoms, supercell_matrix=np.eye(3, dtype=int), primitive_matrix=np.eye(3), symprec=symprec, log_level=0)


def displacements(crystal: Crystal, symprec: float, distance: float = DISTANCE) -> list[Displacement]:
    """The fewest displacements that symmetry allows, both signs where no operation supplies the other.

    Parameters
    ----------
    crystal : Crystal
    symprec : float
        Distance tolerance, angstrom.
    distance : float
        Length of each, angstrom.
    """
    study = _phonopy(crystal, symprec)
    study.generate_displacements(distance=distance)
    return [Displacement(int(row[0]), np.array(row[1:], dtype=float)) for row in study.displacements]


def force_constants(crystal: Crystal, moved: Sequence[Displacement], forces: FloatArray, symprec: float) -> FloatArray:
    """Force constants at q = 0.

    Parameters
    ----------
    crystal : Crystal
        Undisplaced, its forces zero by symmetry or small.
    moved : sequence of Displacement
        A set from `displacements`.
    forces : (..., len(moved), n, 3)
        eV/A, forces of the undisplaced crystal subtracted.
    symprec : float
        The tolerance that the set was made with, angstrom.

    Returns
    -------
    (..., 3 n, 3 n), eV/A^2, symmetric, three zero eigenvalues for the translations.
    """
    study = _phonopy(crystal, symprec)
    size = 3 * len(crystal.numbers)
    sets = np.asarray(forces, dtype=float)
    matrices = [_solve(study, moved, one) for one in sets.reshape(-1, *sets.shape[-3:])]
    return np.array(matrices).reshape(*sets.shape[:-3], size, size)


def _solve(study: Phonopy, moved: Sequence[Displacement], forces: FloatArray) -> FloatArray:
    """Force constants (3 n, 3 n) of one set of forces (len(moved), n, 3)."""
    count = forces.shape[1]
    study.dataset = {
        "natom": count,
        "first_atoms": [{"number": m.atom, "displacement": m.vector, "forces": f} for m, f in zip(moved, forces, strict=True)],
    }
    study.produce_force_constants(show_drift=False)
    study.symmetrize_force_constants(show_drift=False)
    matrix = np.asarray(study.force_constants, dtype=float).transpose(0, 2, 1, 3).reshape(3 * count, 3 * count)
    return np.asarray(0.5 * (matrix + matrix.T))


def frequencies(constants: FloatArray, numbers: IntArray) -> tuple[FloatArray, FloatArray]:
    """Zone-centre frequencies (3 n,), THz, ascending, imaginary ones negative; and eigenvectors (3 n, 3 n) as columns.

    Parameters
    ----------
    constants : (3 n, 3 n)
        Force constants at q = 0, eV/A^2.
    numbers : (n,)
        Atomic numbers.
    """
    from ase import units
    from ase.data import atomic_masses

    masses = np.repeat(atomic_masses[numbers], 3)
    values, vectors = np.linalg.eigh(constants / np.sqrt(np.outer(masses, masses)))
    # angular frequency in 1/s of one sqrt(eV / A^2 / amu), over 2 pi, in THz
    unit = np.sqrt(units._e / units._amu) * 1e10 / (2e12 * np.pi)
    return np.sign(values) * np.sqrt(np.abs(values)) * unit, vectors
