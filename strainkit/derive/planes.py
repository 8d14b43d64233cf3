"""Moduli along directions and on planes of a crystal, and the table of low-index planes."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np

from strainkit.crystal.molecules import Molecules
from strainkit.crystal.neighbours import Neighbours
from strainkit.derive.directional import linear_compressibility, poisson_range, shear, shear_range, young
from strainkit.derive.elastic import ElasticCrystal
from strainkit.derive.layers import Cut, easiest_cut
from strainkit.derive.spread import WithError, half_width, with_errors
from strainkit.derive.waves import christoffel, sound_speeds, speed
from strainkit.tensors.arrays import FloatArray

__all__ = ["Along", "OnPlane", "along", "low_index_planes", "on_planes"]

Indices = tuple[int, ...]

#: families of planes in the table: those of the widest lattice spacing, and none below this part of the widest
_FAMILIES, _NARROWEST = 12, 1.0 / 3.0
#: shear moduli closer than this on one plane have no direction of their own
_ROUND = 1e-6


@dataclass(frozen=True)
class Along:
    """What a crystal does along one direction.

    Attributes
    ----------
    direction : (3,)
        Unit vector, given frame.
    young : WithError
        GPa.
    compressibility : WithError
        Linear, 1/TPa.
    poisson_least, poisson_most : WithError
        Over all sides at right angles, under tension along the direction.
    speeds : tuple of WithError
        Of the three waves that run along it, m/s, slowest first; empty without a density.
    polarisations : (3, 3)
        Their unit displacement vectors, rows, given frame.
    """

    direction: FloatArray
    young: WithError
    compressibility: WithError
    poisson_least: WithError
    poisson_most: WithError
    speeds: tuple[WithError, ...]
    polarisations: FloatArray

    def to_dict(self, rotation: FloatArray) -> dict[str, Any]:
        """JSON-ready; vectors in the frame whose axes are the rows of `rotation`."""
        tilt = np.degrees(np.arccos(np.clip(np.abs(self.polarisations @ self.direction), 0.0, 1.0)))
        return {
            "cartesian": rotation @ self.direction,
            "young_GPa": self.young.to_dict(),
            "linear_compressibility_per_TPa": self.compressibility.to_dict(),
            "poisson_least": self.poisson_least.to_dict(),
            "poisson_most": self.poisson_most.to_dict(),
            "sound": [
                {"speed_m_per_s": v.to_dict(), "polarisation": rotation @ p, "angle_to_direction_deg": float(angle)}
                for v, p, angle in zip(self.speeds, self.polarisations, tilt, strict=bool(self.speeds))
            ],
        }


@dataclass(frozen=True)
class OnPlane:
    """What a crystal does on one plane.

    Attributes
    ----------
    indices : (h, k, l)
    spacing, lattice_spacing : float
        1/|h a* + k b* + l c*|, and the distance of neighbouring lattice planes (centring counted), angstrom.
    along_normal : Along
    shear_least, shear_most : WithError
        GPa, over all directions in the plane.
    least_direction, most_direction : (3,)
        Unit vectors, given frame.
    least_indices, most_indices : ([uvw], degrees) or None
        Low-index direction in the plane that lies nearest, and the angle; None when all directions are alike.
    shortest : ([uvw], angstrom)
        Direction and length of the shortest lattice vector in the plane.
    shear_shortest : WithError
        Shear modulus along it, GPa.
    cut : Cut or None
        Bonds that the plane cuts; None without atoms.
    alike : int
        Planes that symmetry makes alike, opposite normals counted once.
    """

    indices: Indices
    spacing: float
    lattice_spacing: float
    along_normal: Along
    shear_least: WithError
    shear_most: WithError
    least_direction: FloatArray
    most_direction: FloatArray
    least_indices: tuple[Indices, float] | None
    most_indices: tuple[Indices, float] | None
    shortest: tuple[Indices, float]
    shear_shortest: WithError
    cut: Cut | None
    alike: int

    def to_dict(self, rotation: FloatArray) -> dict[str, Any]:
        """JSON-ready; vectors in the frame whose axes are the rows of `rotation`."""

        def named(value: WithError, vector: FloatArray, indices: tuple[Indices, float] | None) -> dict[str, Any]:
            place: dict[str, Any] = {"nearest_direction": None, "angle_deg": None}
            if indices is not None:
                place = {"nearest_direction": list(indices[0]), "angle_deg": indices[1]}
            return {**value.to_dict(), "cartesian": rotation @ vector if indices is not None else None, **place}

        return {
            "plane": list(self.indices),
            "alike": self.alike,
            "d_spacing_A": self.spacing,
            "lattice_spacing_A": self.lattice_spacing,
            "bonds_cut_per_nm2": None if self.cut is None else self.cut.bonds_per_nm2,
            "gap_A": None if self.cut is None else self.cut.gap,
            "layers": None if self.cut is None else self.cut.layers,
            "shear_least_GPa": named(self.shear_least, self.least_direction, self.least_indices),
            "shear_most_GPa": named(self.shear_most, self.most_direction, self.most_indices),
            "shortest_lattice_vector": {
                "direction": list(self.shortest[0]),
                "length_A": self.shortest[1],
                "shear_GPa": self.shear_shortest.to_dict(),
            },
            "along_normal": self.along_normal.to_dict(rotation),
        }


def _sampled(values: FloatArray) -> FloatArray | None:
    return half_width(values) if len(values) > 1 else None


def along(elastic: ElasticCrystal, directions: FloatArray) -> list[Along]:
    """What the crystal does along unit vectors (k, 3), given frame."""
    s, n = elastic.compliance, np.asarray(directions, dtype=float).reshape(-1, 3)
    moduli = elastic.moduli
    stretch = with_errors(young(s, n), moduli.standard_error_of(lambda c: young(np.linalg.inv(c), n)))
    squeeze = with_errors(
        1e3 * linear_compressibility(s, n),
        moduli.standard_error_of(lambda c: 1e3 * linear_compressibility(np.linalg.inv(c), n)),
    )
    least, most = poisson_range(s, n)[:2]
    drawn = poisson_range(elastic.compliance_draws, n)[:2] if len(elastic.draws) else (np.zeros((0, 1)),) * 2
    thin, thick = with_errors(least, _sampled(drawn[0])), with_errors(most, _sampled(drawn[1]))
    waves: list[tuple[WithError, ...]] = [()] * len(n)
    polarisations: FloatArray = np.zeros((len(n), 0, 3))
    if elastic.density is not None:
        speeds, polarisations = sound_speeds(elastic.waves.mandel, elastic.stress, elastic.density, n)
        values = np.linalg.eigvalsh(christoffel(elastic.wave_draws, elastic.stress, n))
        errors = _sampled(speed(values, elastic.density))
        waves = [tuple(with_errors(v, None if errors is None else errors[i])) for i, v in enumerate(speeds)]
    return [Along(*row) for row in zip(n, stretch, squeeze, thin, thick, waves, polarisations, strict=True)]


def on_planes(
    elastic: ElasticCrystal, planes: Sequence[Indices], bonds: Neighbours | None, molecules: Molecules | None
) -> list[OnPlane]:
    """What the crystal does on planes (hkl); bonds (None without atoms) and molecules say what each plane cuts."""
    axes = elastic.axes
    assert axes is not None
    if not planes:
        return []
    normals = axes.normal(np.array(planes))
    least, most, at_least, at_most = shear_range(elastic.compliance, normals)
    drawn = shear_range(elastic.compliance_draws, normals)[:2] if len(elastic.draws) else (np.zeros((0, 1)),) * 2
    low, high = with_errors(least, _sampled(drawn[0])), with_errors(most, _sampled(drawn[1]))
    shortest = [axes.shortest_in_plane(np.array(plane)) for plane in planes]
    sides = axes.direction(np.array([indices for indices, _ in shortest]))
    slip = with_errors(
        shear(elastic.compliance, normals, sides),
        elastic.moduli.standard_error_of(lambda c: shear(np.linalg.inv(c), normals, sides)),
    )
    rows = []
    for i, (plane, normal) in enumerate(zip(planes, along(elastic, normals), strict=True)):
        whole = np.array(plane)
        reciprocal, distance = axes.lattice_planes(whole)
        directed = most[i] / least[i] - 1.0 > _ROUND
        cut = None if bonds is None or elastic.crystal is None else easiest_cut(elastic.crystal, bonds, molecules, reciprocal)
        rows.append(
            OnPlane(
                indices=plane,
                spacing=float(axes.spacing(whole)),
                lattice_spacing=distance,
                along_normal=normal,
                shear_least=low[i],
                shear_most=high[i],
                least_direction=at_least[i],
                most_direction=at_most[i],
                least_indices=axes.nearest_in_plane(at_least[i], whole) if directed else None,
                most_indices=axes.nearest_in_plane(at_most[i], whole) if directed else None,
                shortest=shortest[i],
                shear_shortest=slip[i],
                cut=cut,
                alike=len(axes.images(whole)),
            )
        )
    return rows


def low_index_planes(elastic: ElasticCrystal, bonds: Neighbours | None, molecules: Molecules | None) -> list[OnPlane]:
    """Low-index planes of wide spacing: by the gap between layers in molecular crystals, by spacing in others."""
    assert elastic.axes is not None
    families = elastic.axes.families[:_FAMILIES]
    spacings = [elastic.axes.lattice_planes(np.array(plane))[1] for plane in families]
    wide = [plane for plane, spacing in zip(families, spacings, strict=True) if spacing >= _NARROWEST * spacings[0]]
    rows = on_planes(elastic, wide, bonds, molecules)
    if molecules is None:
        return rows
    return sorted(rows, key=lambda row: 0.0 if row.cut is None else -round(row.cut.gap, 3))
