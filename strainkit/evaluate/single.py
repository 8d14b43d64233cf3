"""One calculation with a local engine: relax the ions at fixed cell, then energy, forces and stress."""

from __future__ import annotations

import tempfile
import warnings
from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import dataclass
from typing import Any

import numpy as np

from strainkit.crystal.crystal import Crystal
from strainkit.errors import InputError
from strainkit.evaluate.engines import Engine
from strainkit.tensors.arrays import FloatArray

__all__ = ["DEFAULT_FMAX", "Outcome", "evaluate_cell"]

#: largest force that counts as relaxed, eV/A: molecular crystals need no less (soft modes)
DEFAULT_FMAX = 2e-4
#: optimiser steps before a job is given up
MAX_STEPS = 2000


@dataclass(frozen=True)
class Outcome:
    """What an engine returns for one cell.

    Attributes
    ----------
    crystal : Crystal
        With the relaxed positions, the cell unchanged.
    energy : float
        Free energy consistent with the forces, eV.
    stress : (3, 3)
        Cauchy stress, eV/A^3, positive in tension.
    forces : (n, 3)
        eV/A.
    steps : int
        Optimiser steps taken.
    converged : bool
        Largest force at or below the tolerance (true for clamped ions).
    """

    crystal: Crystal
    energy: float
    stress: FloatArray
    forces: FloatArray
    steps: int
    converged: bool


@contextmanager
def scratch_folder(calculator: Any) -> Iterator[None]:
    """Let a calculator that writes files do so in a folder of its own, so that parallel jobs do not meet."""
    if not hasattr(calculator, "directory"):
        yield
        return
    with tempfile.TemporaryDirectory(prefix="strainkit-") as folder:
        calculator.directory = folder
        yield


@contextmanager
def quiet_engine() -> Iterator[None]:
    """Without the remarks that engines and optimisers make to their developers at every step."""
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")
        yield


def evaluate_cell(crystal: Crystal, engine: Engine, relax: bool, fmax: float = DEFAULT_FMAX) -> Outcome:
    """Energy, forces and stress of a cell, its ions relaxed first if asked.

    Parameters
    ----------
    crystal : Crystal
    engine : Engine
    relax : bool
        Relax the ions at fixed cell (LBFGS) to the force `fmax`, eV/A.

    Raises
    ------
    InputError
        When the engine fails on this cell.
    """
    atoms = crystal.to_atoms()
    atoms.calc = engine.calculator()
    with quiet_engine(), scratch_folder(atoms.calc):
        try:
            steps, converged = _relax(atoms, fmax) if relax else (0, True)
            energy = float(atoms.get_potential_energy(force_consistent="free_energy" in atoms.calc.implemented_properties))
            forces = np.array(atoms.get_forces(apply_constraint=False))
            stress = np.array(atoms.get_stress(voigt=False, apply_constraint=False))
        except Exception as error:  # engines fail in their own ways
            raise InputError(f"the engine {engine.name} failed: {' '.join(str(error).split())}", crystal.name) from None
    if not (np.isfinite(stress).all() and np.isfinite(forces).all() and np.isfinite(energy)):
        raise InputError(f"the engine {engine.name} returned numbers that are not finite", crystal.name)
    moved = Crystal.from_atoms(atoms, crystal.name, crystal.source)
    return Outcome(moved, energy, stress, forces, steps, converged)


def _relax(atoms: Any, fmax: float) -> tuple[int, bool]:
    from ase.optimize import LBFGS

    with LBFGS(atoms, logfile=None) as optimiser:
        converged = bool(optimiser.run(fmax=fmax, steps=MAX_STEPS))
        return int(optimiser.nsteps), converged
