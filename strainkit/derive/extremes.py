"""The extremes of a crystal over all directions, each with the low-index plane or direction that it lies near."""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import Any

import numpy as np

from strainkit.crystal.lattice import IndexAxes, low_indices
from strainkit.derive.directional import poisson_range, shear_range, young
from strainkit.derive.elastic import ElasticCrystal
from strainkit.derive.search import Top, search
from strainkit.derive.spread import WithError, half_width, with_errors
from strainkit.derive.waves import christoffel, sound_speeds, speed
from strainkit.tensors.arrays import FloatArray
from strainkit.tensors.sixvectors import from_mandel

__all__ = ["Extreme", "Near", "extremes", "ratio"]

#: draws behind the errors of extremes: good to about 4 %
_DRAWS = 300


@dataclass(frozen=True)
class Near:
    """A unit vector (3,), given frame, with the low-index direction and plane normal nearest to it and the angles, degrees."""

    vector: FloatArray
    direction: tuple[tuple[int, ...], float] | None
    plane: tuple[tuple[int, ...], float] | None

    def to_dict(self, rotation: FloatArray) -> dict[str, Any]:
        """JSON-ready; the vector in the frame whose axes are the rows of `rotation`."""
        return {
            "cartesian": rotation @ self.vector,
            "nearest_direction": None if self.direction is None else list(self.direction[0]),
            "direction_angle_deg": None if self.direction is None else self.direction[1],
            "nearest_plane": None if self.plane is None else list(self.plane[0]),
            "plane_angle_deg": None if self.plane is None else self.plane[1],
        }


@dataclass(frozen=True)
class Extreme:
    """An extreme over all directions.

    Attributes
    ----------
    value : WithError
    along : Near
        Of Young's modulus and of a wave the direction, of a shear modulus the plane normal, of Poisson's ratio the pull.
    side : Near or None
        Direction of the shear, of the contraction, or of the wave's displacement.
    drawn : (s,)
        The extreme of every draw from the error distribution.
    """

    value: WithError
    along: Near
    side: Near | None = None
    drawn: FloatArray = field(default_factory=lambda: np.zeros(0), repr=False)

    def to_dict(self, rotation: FloatArray) -> dict[str, Any]:
        """JSON-ready; vectors in the frame whose axes are the rows of `rotation`."""
        out = {**self.value.to_dict(), "along": self.along.to_dict(rotation)}
        return out if self.side is None else {**out, "side": self.side.to_dict(rotation)}


def extremes(elastic: ElasticCrystal) -> dict[str, tuple[Extreme, Extreme]]:
    """Smallest and largest of each directional quantity.

    Returns
    -------
    dict
        "young_GPa", "linear_compressibility_per_TPa", "shear_GPa", "poisson", and with a density "sound_m_per_s".
    """
    s, draws, simple = elastic.compliance, elastic.compliance_draws[:_DRAWS], _simple(elastic.axes)
    found: dict[str, tuple[Extreme, Extreme]] = {}
    pair = []
    for largest in (False, True):
        top = search(young, s, draws, largest, simple)
        pair.append(_named(elastic.axes, top, top.direction[None]))
    found["young_GPa"] = (pair[0], pair[1])
    found["linear_compressibility_per_TPa"] = _compressibilities(elastic)
    for name, function in (("shear_GPa", shear_range), ("poisson", poisson_range)):
        pair = []
        for order in (0, 1):
            top = search(lambda m, n, f=function, i=order: f(m, n)[i], s, draws, bool(order), simple)  # type: ignore[misc]
            side = function(s, top.direction[None])[2 + order][0]
            pair.append(_named(elastic.axes, top, np.array([top.direction, side])))
        found[name] = (pair[0], pair[1])
    if elastic.density is not None:
        found["sound_m_per_s"] = _speeds(elastic, elastic.density)
    return found


def ratio(least: Extreme, most: Extreme) -> WithError:
    """Largest over smallest value, with a sampled error."""
    count = min(len(least.drawn), len(most.drawn))
    error = float(half_width(most.drawn[:count] / least.drawn[:count])) if count > 1 else None
    return WithError(most.value.value / least.value.value, error)


def _compressibilities(elastic: ElasticCrystal) -> tuple[Extreme, Extreme]:
    """Eigenvalues of the tensor S_ijkk, whose quadratic form the linear compressibility is."""
    trace = np.array([1.0, 1.0, 1.0, 0.0, 0.0, 0.0])
    values, vectors = np.linalg.eigh(1e3 * from_mandel(elastic.compliance @ trace))
    drawn = np.linalg.eigvalsh(1e3 * from_mandel(elastic.compliance_draws @ trace))
    errors = half_width(drawn) if len(drawn) > 1 else None
    found = with_errors(values, errors)
    tops = [Top(found[i], vectors[:, i], drawn[:, i]) for i in (0, 2)]
    return _named(elastic.axes, tops[0], tops[0].direction[None]), _named(elastic.axes, tops[1], tops[1].direction[None])


def _speeds(elastic: ElasticCrystal, density: float) -> tuple[Extreme, Extreme]:
    """The slowest and the fastest wave."""
    draws = elastic.wave_draws[:_DRAWS]
    pair = []
    for order in (0, 2):

        def quantity(m: FloatArray, n: FloatArray, order: int = order) -> FloatArray:
            return speed(np.linalg.eigvalsh(christoffel(m, elastic.stress, n))[..., order], density)

        top = search(quantity, elastic.waves.mandel, draws, bool(order), _simple(elastic.axes))
        side = sound_speeds(elastic.waves.mandel, elastic.stress, density, top.direction[None])[1][0, order]
        pair.append(_named(elastic.axes, top, np.array([top.direction, side])))
    return pair[0], pair[1]


def _simple(axes: IndexAxes | None) -> FloatArray:
    """Low-index directions and plane normals (k, 3), lowest indices first; of the Cartesian axes without a cell."""
    if axes is None:
        return np.asarray(low_indices(1) / np.linalg.norm(low_indices(1), axis=1, keepdims=True))
    indices = low_indices()
    return np.asarray(np.stack([axes.direction(indices), axes.normal(indices)], axis=1).reshape(-1, 3))


def _named(axes: IndexAxes | None, top: Top, vectors: FloatArray) -> Extreme:
    """Of all directions that symmetry makes alike, the one with the nicest indices."""
    if axes is None:
        near = [Near(v if v[np.abs(v) > 1e-6][0] > 0 else -v, None, None) for v in vectors]
    else:
        choices = [[Near(v, axes.nearest(v), axes.nearest(v, planes=True)) for v in turned] for turned in axes.alike(vectors)]
        near = min(choices, key=_awkwardness)
    return Extreme(top.value, near[0], near[1] if len(near) > 1 else None, top.drawn)


def _awkwardness(near: list[Near]) -> tuple[list[float], int, int, list[int]]:
    """Sorts alike sets of directions for print: small angles, then small indices, few minus signs, h before k before l."""
    names = [name for n in near for name in (n.direction, n.plane) if name is not None]
    numbers = [i for indices, _ in names for i in indices]
    return [round(angle, 2) for _, angle in names], sum(map(abs, numbers)), sum(i < 0 for i in numbers), [-i for i in numbers]
