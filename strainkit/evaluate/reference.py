"""Bring a reference cell to zero stress with a local engine, its symmetry kept."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np

from strainkit.crystal.crystal import Crystal
from strainkit.errors import InputError
from strainkit.evaluate.engines import Engine
from strainkit.evaluate.single import DEFAULT_FMAX, MAX_STEPS, quiet_engine, scratch_folder
from strainkit.tensors.arrays import FloatArray
from strainkit.tensors.sixvectors import stress_to_voigt
from strainkit.tensors.strain import gradient_between, green_lagrange
from strainkit.units import EV_PER_A3_IN_GPA

__all__ = ["Relaxation", "relax_reference"]


@dataclass(frozen=True)
class Relaxation:
    """A relaxed reference and how far it went.

    Attributes
    ----------
    crystal : Crystal
    steps : int
    converged : bool
    strain : (3, 3)
        Green-Lagrange strain from the old cell to the new one.
    largest_shift : float
        Largest displacement of an atom relative to the affine motion of the cell, angstrom.
    stress : (6,)
        Stress left, GPa, Voigt order, positive in tension.
    max_force : float
        Largest force left, eV/A.
    """

    crystal: Crystal
    steps: int
    converged: bool
    strain: FloatArray
    largest_shift: float
    stress: FloatArray
    max_force: float


def relax_reference(
    crystal: Crystal, engine: Engine, fmax: float = DEFAULT_FMAX, symprec: float = 1e-3, fixed_symmetry: bool = True
) -> Relaxation:
    """Relax cell and atoms to zero stress (LBFGS on the logarithm of the deformation).

    Parameters
    ----------
    crystal : Crystal
    engine : Engine
    fmax : float
        Largest force, and largest cell force (stress times volume), eV/A.
    symprec : float
        Tolerance of the symmetry that is kept, angstrom.
    fixed_symmetry : bool
        Keep the space group that the cell has at the start.

    Raises
    ------
    InputError
        When the engine fails on this cell.
    """
    from ase.constraints import FixSymmetry
    from ase.filters import FrechetCellFilter
    from ase.optimize import LBFGS

    atoms = crystal.to_atoms()
    atoms.calc = engine.calculator()
    if fixed_symmetry:
        atoms.set_constraint(FixSymmetry(atoms, symprec=symprec))
    try:
        with quiet_engine(), scratch_folder(atoms.calc), LBFGS(FrechetCellFilter(atoms), logfile=None) as optimiser:
            converged = bool(optimiser.run(fmax=fmax, steps=MAX_STEPS))
            steps = int(optimiser.nsteps)
        stress = np.array(atoms.get_stress(voigt=False, apply_constraint=False)) * EV_PER_A3_IN_GPA
        forces = np.array(atoms.get_forces(apply_constraint=False))
    except Exception as error:  # engines fail in their own ways
        raise InputError(f"the engine {engine.name} failed: {' '.join(str(error).split())}", crystal.name) from None
    atoms.set_constraint()
    relaxed = Crystal.from_atoms(atoms, crystal.name, crystal.source)
    shift = relaxed.positions - crystal.positions
    shift -= np.round(shift)
    shift -= shift.mean(axis=0)
    return Relaxation(
        crystal=replace(relaxed, labels=crystal.labels),
        steps=steps,
        converged=converged,
        strain=green_lagrange(gradient_between(crystal.lattice, relaxed.lattice)),
        largest_shift=float(np.linalg.norm(shift @ relaxed.lattice, axis=1).max()),
        stress=stress_to_voigt(stress),
        max_force=float(np.linalg.norm(forces, axis=1).max()),
    )
