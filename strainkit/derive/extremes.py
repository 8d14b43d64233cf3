"""The extremes of a crystal over all directions, each with the low-index plane or direction that it lies near."""

from __future__ import annotations

from collections.abc import Callable, Collection
from dataclasses import dataclass, field
from typing import Any

import numpy as np

from strainkit.crystal.lattice import IndexAxes, low_indices
from strainkit.derive.directional import linear_compressibility, poisson, poisson_range, shear, shear_range, young
from strainkit.derive.elastic import ElasticCrystal
from strainkit.derive.search import Top, search
from strainkit.derive.spread import WithError, half_width, with_errors
from strainkit.derive.waves import christoffel, speed
from strainkit.tensors.arrays import FloatArray
from strainkit.tensors.sixvectors import from_mandel

__all__ = ["Extreme", "Near", "extremes", "ratio"]

#: maps 6x6 matrices (..., 6, 6), unit vectors (..., k, 3) and 0 or 1 (least, most) to (..., k) values or (..., k, 3) vectors
Directed = Callable[[FloatArray, FloatArray, int], FloatArray]

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


#: names of the quantities, in the order of a page
_ALL = ("young_GPa", "linear_compressibility_per_TPa", "shear_GPa", "poisson", "sound_m_per_s")


def extremes(elastic: ElasticCrystal, wanted: Collection[str] = _ALL) -> dict[str, tuple[Extreme, Extreme]]:
    """Smallest and largest of each directional quantity.

    Parameters
    ----------
    elastic : ElasticCrystal
    wanted : names, optional
        Some of "young_GPa", "linear_compressibility_per_TPa", "shear_GPa", "poisson" and, given a density, "sound_m_per_s".
    """
    s, draws = elastic.compliance, elastic.compliance_draws[:_DRAWS]
    found = {}
    for name in (n for n in _ALL if n in wanted):
        if name == "young_GPa":
            found[name] = _ends(elastic, s, draws, lambda m, n, _: young(m, n))
        elif name == "linear_compressibility_per_TPa":
            found[name] = _compressibilities(elastic)
        elif name == "sound_m_per_s":
            if elastic.density is not None:
                found[name] = _speeds(elastic, elastic.density)
        else:
            function, of_pair = (shear_range, shear) if name == "shear_GPa" else (poisson_range, poisson)
            found[name] = _ends(
                elastic,
                s,
                draws,
                lambda m, n, most, f=function: f(m, n)[most],  # type: ignore[misc]
                lambda m, n, most, f=function: f(m, n)[2 + most],  # type: ignore[misc]
                of_pair,
            )
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
    simple = _simple(elastic.axes)
    along = 1e3 * linear_compressibility(elastic.compliance, simple)
    ends = []
    for i in (0, 2):  # an axis of symmetry leaves a whole plane of equal directions: name a simple one
        equal = np.abs(along - values[i]) < 1e-9 * np.abs(values).max()
        direction = simple[np.argmax(equal)] if equal.any() else vectors[:, i]
        ends.append(_named(elastic.axes, Top(found[i], direction, drawn[:, i]), [direction[None]]))
    return ends[0], ends[1]


def _speeds(elastic: ElasticCrystal, density: float) -> tuple[Extreme, Extreme]:
    """The slowest and the fastest wave, with their displacements."""

    def value(m: FloatArray, n: FloatArray, most: int) -> FloatArray:
        return speed(np.linalg.eigvalsh(christoffel(m, elastic.stress, n))[..., 2 * most], density)

    def displacement(m: FloatArray, n: FloatArray, most: int) -> FloatArray:
        return np.asarray(np.linalg.eigh(christoffel(m, elastic.stress, n))[1][..., 2 * most])

    def of_pair(m: FloatArray, n: FloatArray, u: FloatArray) -> FloatArray:
        return speed(np.einsum("ki,kij,kj->k", u, christoffel(m, elastic.stress, n), u), density)

    return _ends(elastic, elastic.waves.mandel, elastic.wave_draws[:_DRAWS], value, displacement, of_pair)


def _ends(
    elastic: ElasticCrystal,
    matrix: FloatArray,
    draws: FloatArray,
    value: Directed,
    side: Directed | None = None,
    of_pair: Callable[[FloatArray, FloatArray, FloatArray], FloatArray] | None = None,
) -> tuple[Extreme, Extreme]:
    """Smallest and largest value of a quantity that depends on a direction and may have a second one of its own."""
    ends, simple = [], _simple(elastic.axes)
    for most in (0, 1):
        top = search(lambda m, n, most=most: value(m, n, most), matrix, draws, bool(most), simple)  # type: ignore[misc]
        equal = [top.direction[None]]
        if side is not None and of_pair is not None:
            n, best = top.direction[None], top.value.value
            other = side(matrix, n, most)
            # several second directions may be as good (all of those at right angles, say): name a simple one
            shared = np.abs(of_pair(matrix, np.broadcast_to(n, simple.shape), simple) - best) < 1e-9 * abs(best)
            if abs(other[0] @ n[0]) < 0.5:
                shared &= np.abs(simple @ n[0]) < 1e-9
            if shared.any():
                other = simple[None, np.argmax(shared)]
            equal = [np.concatenate([n, other])]
            if abs(value(matrix, other, most)[0] - best) < 1e-9 * abs(best):  # shear and waves: the two may change places
                equal.append(np.concatenate([other, n]))
        ends.append(_named(elastic.axes, top, equal))
    return ends[0], ends[1]


def _simple(axes: IndexAxes | None) -> FloatArray:
    """Low-index directions and plane normals (k, 3), lowest indices first; of the Cartesian axes without a cell."""
    if axes is None:
        return np.asarray(low_indices(1) / np.linalg.norm(low_indices(1), axis=1, keepdims=True))
    indices = low_indices()
    return np.asarray(np.stack([axes.direction(indices), axes.normal(indices)], axis=1).reshape(-1, 3))


def _named(axes: IndexAxes | None, top: Top, equal: list[FloatArray]) -> Extreme:
    """Of all directions that are equally good, by symmetry or otherwise, the ones with the nicest indices."""
    if axes is None:
        near = [Near(v if v[np.abs(v) > 1e-6][0] > 0 else -v, None, None) for v in equal[0]]
    else:
        turned = np.concatenate([axes.alike(vectors) for vectors in equal])
        flat = turned.reshape(-1, 3)
        every = [Near(*named) for named in zip(flat, axes.nearest(flat), axes.nearest(flat, planes=True), strict=True)]
        size = turned.shape[1]
        near = min((every[start : start + size] for start in range(0, len(every), size)), key=_ugly)
    return Extreme(top.value, near[0], near[1] if len(near) > 1 else None, top.drawn)


def _ugly(near: list[Near]) -> tuple[float, int, int, list[int]]:
    """Sorts directions for print: small angles, then small indices, few minus signs, h before k before l."""
    names = [name for n in near for name in (n.plane, n.direction) if name is not None]
    numbers = [i for indices, _ in names for i in indices]
    angles = sum(min(name[1] for name in (n.plane, n.direction) if name is not None) for n in near)
    return round(angles, 2), sum(map(abs, numbers)), sum(i < 0 for i in numbers), [-i for i in numbers]
