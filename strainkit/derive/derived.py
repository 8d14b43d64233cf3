"""Everything that is derived from one crystal's tensor, in one object."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np

from strainkit.derive.acoustic import AcousticCheck, acoustic_check
from strainkit.derive.averages import Averages, averages
from strainkit.derive.elastic import ElasticCrystal, from_fit
from strainkit.derive.extremes import Extreme, extremes, ratio
from strainkit.derive.heat import Heat, heat_of
from strainkit.derive.layers import bonds_and_molecules
from strainkit.derive.planes import Along, OnPlane, along, low_index_planes, on_planes
from strainkit.derive.spread import WithError
from strainkit.derive.stability import Stability, stability
from strainkit.errors import UsageError
from strainkit.findings import Finding, finding
from strainkit.fit.judge import instability
from strainkit.fit.result import Fit
from strainkit.tensors.averages import AVERAGES
from strainkit.tensors.rotations import rotate_matrix
from strainkit.tensors.sixvectors import stiffness_to_voigt, stress_to_voigt

if TYPE_CHECKING:
    from phonopy import Phonopy

__all__ = ["Derived", "Direction", "derive_properties"]

Indices = tuple[int, ...]

#: below this probability of stability there is a finding
_SURE = 0.99
#: Laue class -> names of the constants that are equal where only central forces act between atoms (Cauchy)
_CAUCHY = {
    "mmm": (("C23", "C44"), ("C13", "C55"), ("C12", "C66")),
    **dict.fromkeys(("4/m", "4/mmm", "-3", "-3m", "6/m", "6/mmm"), (("C13", "C44"), ("C12", "C66"))),
    **dict.fromkeys(("m-3", "m-3m"), (("C12", "C44"),)),
}


@dataclass(frozen=True)
class Direction:
    """A lattice direction [uvw]: its indices, the length of u a + v b + w c in angstrom, and what the crystal does along it."""

    indices: Indices
    length: float
    along: Along


@dataclass(frozen=True)
class Derived:
    """What one tensor means; None or empty where it is unstable, or where a cell or density is missing.

    Attributes
    ----------
    elastic : ElasticCrystal
    stability : Stability
    averages : Averages or None
    extremes : dict
        As `strainkit.derive.extremes.extremes` gives them.
    cell_axes : tuple of Direction
        [100], [010], [001].
    planes, directions : tuple
        The ones asked for.
    low_index_planes : tuple of OnPlane
        Ranked.
    heat : Heat or None
    cauchy : dict
        "C12-C44" and the like, GPa, of the thermodynamic stiffness: zero for central forces.
    acoustic : AcousticCheck or None
        Where force constants were given.
    findings : tuple of Finding
    """

    elastic: ElasticCrystal
    stability: Stability
    averages: Averages | None
    extremes: dict[str, tuple[Extreme, Extreme]]
    cell_axes: tuple[Direction, ...]
    planes: tuple[OnPlane, ...]
    directions: tuple[Direction, ...]
    low_index_planes: tuple[OnPlane, ...]
    heat: Heat | None
    cauchy: dict[str, WithError]
    acoustic: AcousticCheck | None
    findings: tuple[Finding, ...]

    def to_dict(self) -> dict[str, Any]:
        """JSON-ready: what `strainkit derive --json` prints."""
        e, frame = self.elastic, self.elastic.frame
        r = frame.rotation
        moduli = e.moduli.rotated(r, frame.name)
        means = dict.fromkeys((*AVERAGES, "anisotropy_index", "anisotropy_index_standard_error", "pugh_ratio"))
        return {
            "schema": "strainkit/derived/1",
            "name": e.name,
            "origin": e.origin,
            "laue_class": e.laue_class,
            "frame": frame.name,
            "frame_axes": frame.axes,
            "frame_rotation": r,
            "indices": None if e.axes is None else e.axes.words,
            "index_axes_A": None if e.axes is None else e.axes.vectors @ r.T,
            "density_kg_per_m3": e.density,
            "reference_stress_GPa": stress_to_voigt(r @ e.stress @ r.T),
            "stress_strain_GPa": moduli.voigt,
            "stress_strain_standard_error_GPa": moduli.standard_errors,
            "stiffness_GPa": stiffness_to_voigt(rotate_matrix(r, e.waves.mandel)),
            "stability": self.stability.to_dict(r),
            **(means if self.averages is None else self.averages.to_dict()),
            "cauchy_GPa": {name: value.to_dict() for name, value in self.cauchy.items()},
            "extremes": {
                name: {"least": low.to_dict(r), "most": high.to_dict(r)} for name, (low, high) in self.extremes.items()
            },
            "young_most_over_least": self._ratio("young_GPa"),
            "shear_most_over_least": self._ratio("shear_GPa"),
            "cell_axes": [_direction(d, e) for d in self.cell_axes],
            "planes": [plane.to_dict(r) for plane in self.planes],
            "directions": [_direction(d, e) for d in self.directions],
            "low_index_planes": [plane.to_dict(r) for plane in self.low_index_planes],
            "debye": None if self.heat is None else self.heat.to_dict(),
            "acoustic_check": None if self.acoustic is None else self.acoustic.to_dict(),
            "findings": [f.to_dict() for f in self.findings],
        }

    def _ratio(self, name: str) -> dict[str, float | None] | None:
        return ratio(*self.extremes[name]).to_dict() if name in self.extremes else None


def _direction(direction: Direction, elastic: ElasticCrystal) -> dict[str, Any]:
    along = direction.along.to_dict(elastic.frame.rotation)
    return {"direction": list(direction.indices), "length_A": direction.length, **along}


def derive_properties(
    elastic: ElasticCrystal,
    planes: Sequence[Indices] = (),
    directions: Sequence[Indices] = (),
    study: Phonopy | None = None,
) -> Derived:
    """Derive everything; an unstable tensor gives its stability and nothing else.

    Parameters
    ----------
    elastic : ElasticCrystal or Fit
        A fit, printed in IEEE axes; or from `strainkit.derive.elastic.from_fit` or `from_tensor_file`, in other axes.
    planes, directions : sequences of (h, k, l) and [u, v, w]
        What to look at besides the cell axes and the low-index planes.
    study : Phonopy, optional
        Force constants of the same cell, whose sound speeds are compared.

    Raises
    ------
    UsageError
        Planes or directions without a cell that they could refer to.
    """
    if isinstance(elastic, Fit):
        elastic = from_fit(elastic)
    if (planes or directions) and elastic.axes is None:
        raise UsageError("planes and directions need a cell", "--plane, --direction", "Give the structure with --cell.")
    verdict = stability(elastic.moduli)
    findings = (*elastic.findings, *_doubts(verdict, elastic))
    if not verdict.stable:
        return Derived(elastic, verdict, None, {}, (), (), (), (), None, {}, None, findings)
    bonds = molecules = None
    if elastic.crystal is not None:
        bonds, molecules = bonds_and_molecules(elastic.crystal)
    named = elastic.axes is not None
    acoustic = None if study is None else acoustic_check(elastic, study)
    return Derived(
        elastic=elastic,
        stability=verdict,
        averages=averages(elastic.moduli),
        extremes=extremes(elastic),
        cell_axes=_directions(elastic, [(1, 0, 0), (0, 1, 0), (0, 0, 1)]) if named else (),
        planes=tuple(on_planes(elastic, planes, bonds, molecules)) if named else (),
        directions=_directions(elastic, directions) if named else (),
        low_index_planes=tuple(low_index_planes(elastic, bonds, molecules)) if named else (),
        heat=heat_of(elastic, None if molecules is None else len(molecules.kinds)),
        cauchy=_cauchy(elastic),
        acoustic=acoustic,
        findings=findings if acoustic is None else (*findings, *acoustic.findings),
    )


def _doubts(verdict: Stability, elastic: ElasticCrystal) -> list[Finding]:
    known = {f.code for f in elastic.findings}
    if not verdict.stable and "not-positive-definite" not in known:
        return [finding("not-positive-definite", "stiffness", instability(elastic.moduli))]
    if verdict.stable and verdict.probability is not None and verdict.probability < _SURE:
        text = f"stable with a probability of {100 * verdict.probability:.1f} % under the error bars"
        return [finding("stability-uncertain", "stiffness", text)]
    return []


def _directions(elastic: ElasticCrystal, directions: Sequence[Indices]) -> tuple[Direction, ...]:
    axes = elastic.axes
    if axes is None or not directions:
        return ()
    vectors = np.array(directions) @ axes.vectors
    found = along(elastic, axes.direction(np.array(directions)))
    return tuple(
        Direction(indices, float(np.linalg.norm(vector)), what)
        for indices, vector, what in zip(directions, vectors, found, strict=True)
    )


def _cauchy(elastic: ElasticCrystal) -> dict[str, WithError]:
    if elastic.naming is None or elastic.laue_class not in _CAUCHY:
        return {}
    named = elastic.waves.rotated(elastic.naming, "named")
    out = {}
    for pair in _CAUCHY[elastic.laue_class]:
        (i, j), (k, m) = ((int(name[1]) - 1, int(name[2]) - 1) for name in pair)
        error = named.standard_error_of(
            lambda c, i=i, j=j, k=k, m=m: stiffness_to_voigt(c)[:, i, j] - stiffness_to_voigt(c)[:, k, m]  # type: ignore[misc]
        )
        value = float(named.voigt[i, j] - named.voigt[k, m])
        out["-".join(pair)] = WithError(value, None if error is None else float(error))
    return out
