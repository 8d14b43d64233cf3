"""The numbers by which crystals are compared, each with its error."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

from strainkit.derive.averages import averages
from strainkit.derive.elastic import ElasticCrystal
from strainkit.derive.extremes import Extreme, extremes
from strainkit.derive.spread import WithError
from strainkit.tensors.averages import AVERAGES, SCHEMES

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


@dataclass(frozen=True)
class Moduli:
    """Values by name, and where the extremes lie: "young_GPa" and "shear_GPa" to (least, most)."""

    values: Mapping[str, WithError]
    ends: Mapping[str, tuple[Extreme, Extreme]]


def moduli_of(elastic: ElasticCrystal) -> Moduli | None:
    """The quantities of one crystal, averages by Hill; None for an unstable one, whose moduli have no meaning."""
    if elastic.moduli.eigenvalues[0] <= 0:
        return None
    means, ends = averages(elastic.moduli), extremes(elastic)
    hill = SCHEMES.index("hill")
    values = {
        name: WithError(float(means.values[row, hill]), None if means.errors is None else float(means.errors[row, hill]))
        for row, name in enumerate(AVERAGES)
    }
    values["pugh_ratio"] = WithError(means.pugh, means.pugh_error)
    values["anisotropy_index"] = WithError(means.anisotropy, means.anisotropy_error)
    values["young_least_GPa"], values["young_most_GPa"] = (end.value for end in ends["young_GPa"])
    values["shear_least_GPa"] = ends["shear_GPa"][0].value
    return Moduli({q.name: values[q.name] for q in QUANTITIES}, ends)
