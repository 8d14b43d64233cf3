"""Empty space in a crystal: where a probe the size of a small molecule still fits, measured on a grid."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np

from strainkit.crystal.crystal import Crystal
from strainkit.tensors.arrays import BoolArray, FloatArray, IntArray

__all__ = ["PROBE", "Voids", "find_voids"]

#: radius of the probe, angstrom
PROBE = 1.2
#: radius of an element without a van der Waals radius, angstrom
UNKNOWN_RADIUS = 2.0
#: grid spacings, angstrom: of the first look, and where there is something to measure
COARSE, FINE = 0.7, 0.25
#: most grid points of the measurement; larger cells are measured more coarsely
MOST_POINTS = 120_000


@dataclass(frozen=True)
class Voids:
    """What the grid found.

    Attributes
    ----------
    packing : float
        Part of the cell inside the van der Waals radii of its atoms.
    volume : float
        All space that the probe can cover without touching an atom, A^3 a cell.
    largest : float
        The same of the largest connected void, A^3 a cell (an endless channel: what of it is in one cell).
    centre : (3,)
        Fractional coordinates of the widest point of the largest void.
    width : float
        Radius of the largest sphere that fits there, angstrom.
    """

    packing: float
    volume: float
    largest: float
    centre: FloatArray
    width: float


def find_voids(crystal: Crystal, probe: float = PROBE) -> Voids:
    """Voids that a sphere of radius `probe` (angstrom) fits into, atoms having their van der Waals radii (Bondi 1964).

    Volumes are counted on a grid and a little too small: by up to 10 % for a void of the size of a small molecule.
    """
    given, crystal = crystal, _reduced(crystal)
    rough_shape = _grid_shape(crystal, COARSE)
    points = _points(rough_shape)
    rough = _clearance(crystal, points, probe)
    packing = float((rough < 0).mean())
    none = Voids(packing, 0.0, 0.0, np.zeros(3), 0.0)
    # no point of the cell is farther from a grid point than half a grid cell's longest diagonal
    promising = rough + _half_diagonal(crystal, rough_shape) >= probe
    if not promising.any():
        return none
    # the same with half the spacing about what is left: in most crystals nothing is
    octants = (np.stack(np.meshgrid(*[(-0.25, 0.25)] * 3, indexing="ij"), axis=-1).reshape(-1, 3)) / np.array(rough_shape)
    closer = _clearance(crystal, (points[promising][:, None] + octants).reshape(-1, 3), probe).reshape(-1, 8).max(axis=1)
    promising[promising] = closer + 0.5 * _half_diagonal(crystal, rough_shape) >= probe
    if not promising.any():
        return none
    shape = _grid_shape(crystal, FINE)
    nearest = [np.round(np.arange(n) / n * m).astype(int) % m for n, m in zip(shape, rough_shape, strict=True)]
    worth = promising.reshape(rough_shape)[np.ix_(*nearest)]
    clearance = np.zeros(shape)
    clearance[worth] = _clearance(crystal, np.argwhere(worth) / np.array(shape))
    if clearance.max() < probe:
        return none
    labels = _connected(_covered(crystal, clearance, probe))
    point = crystal.volume / labels.size
    counts = np.bincount(labels.ravel())[1:]
    largest = int(counts.argmax()) + 1
    deepest = np.unravel_index(int(np.where(labels == largest, clearance, -np.inf).argmax()), shape)
    return Voids(
        packing=packing,
        volume=float(counts.sum() * point),
        largest=float(counts.max() * point),
        centre=(np.array(deepest) / np.array(shape) @ crystal.lattice @ np.linalg.inv(given.lattice)) % 1.0,
        width=float(clearance[deepest]),
    )


def _reduced(crystal: Crystal) -> Crystal:
    """The same crystal in its shortest lattice vectors: a skewed cell would need far too many grid points."""
    from ase.geometry import minkowski_reduce

    lattice, basis = minkowski_reduce(crystal.lattice)
    return replace(crystal, lattice=np.array(lattice), positions=crystal.positions @ np.linalg.inv(basis))


def _grid_shape(crystal: Crystal, spacing: float) -> tuple[int, int, int]:
    spacing = max(spacing, (crystal.volume / MOST_POINTS) ** (1 / 3))
    a, b, c = np.maximum(np.ceil(np.linalg.norm(crystal.lattice, axis=1) / spacing).astype(int), 2)
    return int(a), int(b), int(c)


def _half_diagonal(crystal: Crystal, shape: tuple[int, int, int]) -> float:
    corners = np.array([[1, 1, 1], [1, 1, -1], [1, -1, 1], [-1, 1, 1]]) / np.array(shape)
    return 0.5 * float(np.linalg.norm(corners @ crystal.lattice, axis=1).max())


def _points(shape: tuple[int, int, int]) -> FloatArray:
    """Fractional coordinates of the grid (n, 3)."""
    return np.stack(np.meshgrid(*(np.arange(n) / n for n in shape), indexing="ij"), axis=-1).reshape(-1, 3)


def _images(crystal: Crystal, positions: FloatArray, reach: float) -> FloatArray:
    """Cartesian positions of every periodic image within `reach` of the cell."""
    heights = 1.0 / np.linalg.norm(np.linalg.inv(crystal.lattice), axis=0)
    margin = reach / heights
    spans = [np.arange(-int(np.ceil(m)), int(np.ceil(m)) + 1) for m in margin]
    shifts = np.stack(np.meshgrid(*spans, indexing="ij"), axis=-1).reshape(-1, 3)
    copies = (positions % 1.0)[None] + shifts[:, None]
    inside = ((copies >= -margin) & (copies <= 1.0 + margin)).all(axis=-1)
    images: FloatArray = copies[inside] @ crystal.lattice
    return images


def _clearance(crystal: Crystal, fractional: FloatArray, limit: float = 4.0) -> FloatArray:
    """Distance of points (n, 3) of the cell from the nearest van der Waals surface, A, negative inside; at most `limit`."""
    from ase.data.vdw import vdw_radii
    from scipy.spatial import cKDTree

    points = fractional @ crystal.lattice
    best = np.full(len(points), limit)
    for number in np.unique(crystal.numbers):
        radius = vdw_radii[number] if number < len(vdw_radii) and np.isfinite(vdw_radii[number]) else UNKNOWN_RADIUS
        atoms = _images(crystal, crystal.positions[crystal.numbers == number], limit + radius)
        if len(atoms):
            distances, _ = cKDTree(atoms).query(points, distance_upper_bound=limit + radius)
            best = np.minimum(best, distances - radius)
    return best


def _covered(crystal: Crystal, clearance: FloatArray, probe: float) -> BoolArray:
    """Grid points (a, b, c) that some probe covers: those inside the largest free sphere about a possible centre.

    Spheres are followed to one grid step beyond the probe, where the next centre takes over: a sphere of the probe's own
    radius about the grid's centres alone would miss what lies between the last centre and the atoms.
    """
    shape = np.array(clearance.shape)
    places = np.argwhere(clearance >= probe)
    radii = clearance[tuple(places.T)]
    order = np.argsort(-radii)  # the largest spheres first: those that reach as far as a step stand in front
    places, radii = places[order], radii[order]
    most = probe + 2.0 * _half_diagonal(crystal, clearance.shape)
    reach = np.ceil(most * np.linalg.norm(np.linalg.inv(crystal.lattice), axis=0) * shape).astype(int)
    steps = np.stack(np.meshgrid(*(np.arange(-n, n + 1) for n in reach), indexing="ij"), axis=-1).reshape(-1, 3)
    lengths = np.linalg.norm(steps / shape @ crystal.lattice, axis=1)
    near = lengths <= most
    counts = np.searchsorted(-radii, -lengths[near])  # spheres with a radius above the length
    covered = clearance >= probe
    for step, count in zip(steps[near], counts.tolist(), strict=True):
        covered[tuple(((places[:count] + step) % shape).T)] = True
    return covered


def _connected(inside: BoolArray) -> IntArray:
    """Number of the connected void of every grid point, from 1; 0 outside; connected across the faces of the cell."""
    from scipy.ndimage import label
    from scipy.sparse import coo_array
    from scipy.sparse.csgraph import connected_components

    labels, count = label(inside)
    pairs = []
    for axis in range(3):
        first, last = np.take(labels, 0, axis).ravel(), np.take(labels, -1, axis).ravel()
        both = (first > 0) & (last > 0)
        pairs.append(np.stack([first[both], last[both]]))
    joined = np.hstack(pairs)
    graph = coo_array((np.ones(joined.shape[1]), joined), shape=(count + 1, count + 1))
    _, merged = connected_components(graph, directed=False)
    distinct = np.unique(merged[1:], return_inverse=True)[1] + 1
    numbers: IntArray = np.concatenate([[0], distinct])[labels]
    return numbers
