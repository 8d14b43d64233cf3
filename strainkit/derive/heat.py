"""Debye temperatures from the speeds of sound, with errors."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np

from strainkit.derive.elastic import ElasticCrystal
from strainkit.derive.spread import WithError
from strainkit.derive.waves import debye_speed, debye_temperature, quadrature_order, shortcut_speed

__all__ = ["Heat", "heat_of"]


@dataclass(frozen=True)
class Heat:
    """Debye temperatures from the speeds of sound.

    Attributes
    ----------
    speed : WithError
        Debye speed, m/s: exact angular average.
    shortcut_speed : float
        The same from the Hill averages (Anderson), m/s; for comparison with papers that print it.
    atoms, molecules : WithError or None
        Debye temperature, K, counting atoms, and counting molecules (ions of a salt too) where the crystal consists of them.
    shortcut : float or None
        By the shortcut, counting atoms, K.
    molecules_in_cell : int or None
    """

    speed: WithError
    shortcut_speed: float
    atoms: WithError | None
    molecules: WithError | None
    shortcut: float | None
    molecules_in_cell: int | None

    def to_dict(self) -> dict[str, Any]:
        """JSON-ready; the shortcut is labelled as such."""
        return {
            "speed_m_per_s": self.speed.to_dict(),
            "temperature_atoms_K": None if self.atoms is None else self.atoms.to_dict(),
            "temperature_molecules_K": None if self.molecules is None else self.molecules.to_dict(),
            "molecules_in_cell": self.molecules_in_cell,
            "anderson_shortcut_speed_m_per_s": self.shortcut_speed,
            "anderson_shortcut_temperature_atoms_K": self.shortcut,
        }


def heat_of(elastic: ElasticCrystal, molecules: int | None) -> Heat | None:
    """Debye temperatures of a crystal with so many molecules in its cell (None: not molecular); None without a density."""
    density, crystal = elastic.density, elastic.crystal
    if density is None:
        return None
    stiffness, stress = elastic.waves.mandel, elastic.stress
    speed = float(debye_speed(stiffness, stress, density, quadrature_order(stiffness, stress)))
    coarse = quadrature_order(stiffness, stress, agreement=1e-3)
    error = elastic.waves.standard_error_of(lambda m: debye_speed(m, stress, density, coarse))
    exact = WithError(speed, None if error is None else float(error))
    shortcut = float(shortcut_speed(elastic.moduli.mandel, density))
    if crystal is None:
        return Heat(exact, shortcut, None, None, None, None)
    volume = crystal.volume * crystal.density / density  # a typed density is believed: the same atoms in another volume

    def temperature(count: int) -> WithError:
        kelvin = float(debye_temperature(np.array(1.0), count / volume))
        return WithError(kelvin * exact.value, None if exact.error is None else kelvin * exact.error)

    atoms = len(crystal.numbers)
    return Heat(
        speed=exact,
        shortcut_speed=shortcut,
        atoms=temperature(atoms),
        molecules=temperature(molecules) if molecules is not None and molecules < atoms else None,
        shortcut=float(debye_temperature(np.array(shortcut), atoms / volume)),
        molecules_in_cell=molecules if molecules is not None and molecules < atoms else None,
    )
