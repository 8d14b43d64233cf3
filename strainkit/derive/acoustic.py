"""An independent check: sound speeds of phonopy's force constants at small q against those of the stiffness.

Force constants know nothing of strained cells, so a wrong frame, a wrong unit or an unconverged set shows at once. Both are
at zero macroscopic electric field (stresses of periodic cells; force constants without the non-analytic term), so that
piezoelectric crystals may be compared too.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np

from strainkit.derive.elastic import ElasticCrystal
from strainkit.derive.waves import sound_speeds
from strainkit.dynamics.phonons import rotation_to
from strainkit.dynamics.phonons import sound_speeds as phonon_speeds
from strainkit.errors import UsageError
from strainkit.findings import Finding, finding
from strainkit.tensors.arrays import FloatArray

if TYPE_CHECKING:
    from phonopy import Phonopy

__all__ = ["AcousticCheck", "acoustic_check"]

#: directions [uvw] that are compared
DIRECTIONS = ((1, 0, 0), (0, 1, 0), (0, 0, 1), (0, 1, 1), (1, 0, 1), (1, 1, 0), (1, 1, 1))
#: relative difference of a speed that cutoffs of the force constants can explain, beside two standard errors
_TOLERANCE = 0.03


@dataclass(frozen=True)
class AcousticCheck:
    """Speeds of the three acoustic waves from both sides.

    Attributes
    ----------
    directions : tuple of [u, v, w]
    elastic, phonons : (m, 3)
        km/s, slowest first; NaN where a modulus is negative.
    errors : (m, 3) or None
        Standard errors of `elastic`.
    findings : tuple of Finding
    """

    directions: tuple[tuple[int, int, int], ...]
    elastic: FloatArray
    phonons: FloatArray
    errors: FloatArray | None
    findings: tuple[Finding, ...]

    @property
    def difference(self) -> FloatArray:
        """Relative difference (m, 3), phonons over elastic less one."""
        return np.asarray(self.phonons / self.elastic - 1.0)

    def to_dict(self) -> dict[str, Any]:
        """JSON-ready."""
        return {
            "directions": self.directions,
            "elastic_km_per_s": self.elastic,
            "elastic_standard_error_km_per_s": self.errors,
            "phonons_km_per_s": self.phonons,
            "largest_difference": float(np.abs(self.difference).max()),
            "agrees": not self.findings,
        }


def acoustic_check(elastic: ElasticCrystal, study: Phonopy) -> AcousticCheck:
    """Compare along low-index directions of the crystal.

    Raises
    ------
    UsageError
        For a tensor without a cell.
    InputError
        When the force constants belong to another cell.
    """
    if elastic.crystal is None or elastic.axes is None or elastic.density is None:
        raise UsageError("sound speeds need the cell", "--force-constants", "Give the structure with --cell.")
    rotation = rotation_to(study, elastic.crystal.lattice)
    along = elastic.axes.direction(np.array(DIRECTIONS))
    measured = phonon_speeds(study, along @ rotation.T)
    own = sound_speeds(elastic.waves.mandel, elastic.stress, elastic.density, along)[0] / 1e3
    errors = None
    if len(elastic.draws):
        drawn = sound_speeds(elastic.wave_draws, elastic.stress, elastic.density, along)[0] / 1e3
        errors = np.nanstd(drawn, axis=0)
    return AcousticCheck(DIRECTIONS, own, measured, errors, tuple(_doubts(own, measured, errors)))


def _doubts(own: FloatArray, measured: FloatArray, errors: FloatArray | None) -> list[Finding]:
    allowed = _TOLERANCE * own + (0.0 if errors is None else 2.0 * errors)
    if (np.abs(measured - own) <= allowed).all():
        return []
    ratio = measured / own
    worst = np.unravel_index(np.nanargmax(np.abs(np.log(np.abs(ratio)))), ratio.shape)
    where = "[{} {} {}]".format(*DIRECTIONS[worst[0]])
    text = f"{measured[worst]:.3g} against {own[worst]:.3g} km/s along {where}"
    factor = float(np.median(ratio) ** 2)
    if np.nanmax(np.abs(ratio / np.median(ratio) - 1.0)) < _TOLERANCE:
        text += f"; all speeds are off alike, as if the stiffness had to be multiplied by {factor:.3g}: look at the unit"
    else:
        text += "; not by one factor: look at the frame, at the settings of both, and whether ions were relaxed in both"
    return [finding("acoustic-mismatch", "force constants", text)]
