"""Units. Stress in GPa (positive in tension), length in angstrom, energy in eV; all factors come from ase.units.

Shape and unit are stated at every public argument; percent appears only on the command line and in reports.
"""

from __future__ import annotations

from ase import units as _ase

__all__ = ["AMU_PER_A3_IN_KG_M3", "EV_IN_KJ_PER_MOL", "EV_PER_A3_IN_GPA", "HBAR_OVER_K_IN_K_S", "STRESS_UNITS_IN_GPA"]

#: one eV/A^3 in GPa
EV_PER_A3_IN_GPA: float = 1.0 / _ase.GPa
#: one eV a formula unit in kJ/mol
EV_IN_KJ_PER_MOL: float = _ase.mol / _ase.kJ
#: one atomic mass unit per cubic angstrom in kg/m^3
AMU_PER_A3_IN_KG_M3: float = _ase._amu * 1e30
#: the quantum of an angular frequency of 1/s as a temperature, K s
HBAR_OVER_K_IN_K_S: float = _ase._hbar / _ase._k

#: stress units that a user may name, in GPa
STRESS_UNITS_IN_GPA: dict[str, float] = {
    "GPa": 1.0,
    "MPa": 1e-3,
    "kbar": 0.1,
    "bar": 1e-4,
    "eV/A^3": EV_PER_A3_IN_GPA,
    "Ha/bohr^3": _ase.Hartree / _ase.Bohr**3 * EV_PER_A3_IN_GPA,
    "Ry/bohr^3": _ase.Rydberg / _ase.Bohr**3 * EV_PER_A3_IN_GPA,
}
