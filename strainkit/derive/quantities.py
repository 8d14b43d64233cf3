"""The numbers by which crystals are compared, each with its error, and how far noise may have pushed it outwards.

Noise makes a crystal look less even than it is: the largest value over all directions comes out too large, the smallest too
small, the anisotropy index too large. In a crystal that is uneven by more than the noise this is little; in a round one the
draws about the estimate show (sqrt 2 - 1) of it, since they add the same noise a second time.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np

from strainkit.derive.averages import averages
from strainkit.derive.elastic import ElasticCrystal
from strainkit.derive.extremes import Extreme, extremes
from strainkit.derive.spread import WithError
from strainkit.tensors.arrays import FloatArray
from strainkit.tensors.averages import AVERAGES, SCHEMES, anisotropy_of

__all__ = ["QUANTITIES", "Moduli", "Quantity", "moduli_of"]


@dataclass(frozen=True)
class Quantity:
    """One thing to compare.

    Attributes
    ----------
    name : str
        In JSON and CSV.
    words, unit : str
        In pages; the unit is empty for pure numbers.
    key : str
        What `--by` calls it.
    """

    name: str
    words: str
    unit: str
    key: str

    @property
    def title(self) -> str:
        """Words with the unit."""
        return f"{self.words}, {self.unit}" if self.unit else self.words


#: moduli of every crystal, whatever its symmetry and axes
QUANTITIES = (
    Quantity("young_GPa", "Young's modulus E", "GPa", "young"),
    Quantity("shear_GPa", "shear modulus G", "GPa", "shear"),
    Quantity("bulk_GPa", "bulk modulus K", "GPa", "bulk"),
    Quantity("poisson", "Poisson's ratio", "", "poisson"),
    Quantity("pugh_ratio", "K/G", "", "pugh"),
    Quantity("anisotropy_index", "universal anisotropy", "", "anisotropy"),
    Quantity("young_least_GPa", "E, least", "GPa", "young-least"),
    Quantity("young_most_GPa", "E, most", "GPa", "young-most"),
    Quantity("shear_least_GPa", "G on a plane, least", "GPa", "shear-least"),
)


#: what the draws show of the outward push, at the least
_SHOWN = 2.0**0.5 - 1.0


@dataclass(frozen=True)
class Moduli:
    """Moduli of one crystal.

    Attributes
    ----------
    values : mapping
        Name -> value with its error.
    pushed : mapping
        Name -> how much too large (negative: too small) noise may have made the value, for those that it pushes.
    ends : mapping
        "young_GPa" and "shear_GPa" -> least and most over all directions.
    """

    values: Mapping[str, WithError]
    pushed: Mapping[str, float]
    ends: Mapping[str, tuple[Extreme, Extreme]]


def moduli_of(elastic: ElasticCrystal) -> Moduli | None:
    """The quantities of one crystal, averages by Hill; None for an unstable one, whose moduli have no meaning."""
    if elastic.moduli.eigenvalues[0] <= 0:
        return None
    means, ends = averages(elastic.moduli), extremes(elastic, ("young_GPa", "shear_GPa"))
    hill = SCHEMES.index("hill")
    values = {
        name: WithError(float(means.values[row, hill]), None if means.errors is None else float(means.errors[row, hill]))
        for row, name in enumerate(AVERAGES)
    }
    values["pugh_ratio"] = WithError(means.pugh, means.pugh_error)
    values["anisotropy_index"] = WithError(means.anisotropy, means.anisotropy_error)
    (least, most), softest = ends["young_GPa"], ends["shear_GPa"][0]
    pushed = {"anisotropy_index": max(0.0, _push(means.anisotropy, anisotropy_of(elastic.draws)))}
    for name, end, sign in (("young_least_GPa", least, -1), ("young_most_GPa", most, 1), ("shear_least_GPa", softest, -1)):
        values[name] = end.value
        pushed[name] = sign * max(0.0, sign * _push(end.value.value, end.drawn))
    return Moduli({q.name: values[q.name] for q in QUANTITIES}, pushed, ends)


def _push(value: float, drawn: FloatArray) -> float:
    """How far noise may have moved a value, from the values of draws (s,) about it."""
    return (float(np.median(drawn)) - value) / _SHOWN if len(drawn) > 1 else 0.0
