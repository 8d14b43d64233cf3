"""Files of force constants, made here with an engine."""

from __future__ import annotations

import numpy as np
from ase import Atoms


def phonopy_file(folder, atoms, engine, repeats):
    """A phonopy_params.yaml with force constants, made here with the engine."""
    from phonopy import Phonopy
    from phonopy.structure.atoms import PhonopyAtoms

    cell = PhonopyAtoms(symbols=list(atoms.symbols), cell=atoms.cell.array, scaled_positions=atoms.get_scaled_positions())
    study = Phonopy(cell, supercell_matrix=np.eye(3, dtype=int) * repeats, primitive_matrix=np.eye(3), log_level=0)
    study.generate_displacements(distance=0.01)
    calculator = engine.calculator()
    forces = []
    for moved in study.supercells_with_displacements:
        image = Atoms(moved.symbols, cell=moved.cell, scaled_positions=moved.scaled_positions, pbc=True, calculator=calculator)
        forces.append(image.get_forces())
    study.forces = forces
    study.produce_force_constants(show_drift=False)
    study.save(folder / "phonopy_params.yaml", settings={"force_constants": True})
    return folder / "phonopy_params.yaml"
