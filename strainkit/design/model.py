"""The one linear model that links returned stresses to the stiffness, for planning and for fitting alike.

For a job at Green-Lagrange strain eta = t e (unit shape e, signed magnitude t) the second Piola-Kirchhoff stress is

    S = S0 + t C:e + t^2 q_e + t^3 c_e

S0 is the reference stress that the crystal allows; C is the sum of constants times invariant matrices; q_e, free for
every shape, holds the even (quadratic) response; c_e is there at order "cubic" only. Let H+- be all rotations g of the
Laue group with g e = +e or -e: q_e is invariant under H+-, c_e takes the sign of g. A shape whose negative is an image
of itself therefore needs one job only: its odd part carries the stiffness. Rows are components of S (Mandel) in
the space that the job's own residual symmetry allows; the others are exact zeros or ties in a program that symmetrises.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from functools import cached_property
from typing import Literal

import numpy as np

from strainkit.design.shapes import Shape, largest_principal_of, same_magnitude, same_to_second_order
from strainkit.errors import UsageError
from strainkit.tensors.arrays import FloatArray, IntArray
from strainkit.tensors.invariants import invariant_vectors
from strainkit.tensors.leastsquares import factorise
from strainkit.tensors.rotations import rotation6
from strainkit.tensors.sixvectors import to_mandel

__all__ = ["LinearModel", "Order", "build_model"]

Order = Literal["linear", "cubic", "quintic"]
#: order -> odd powers of the magnitude that are fitted freely for every shape
_POWERS: dict[str, tuple[int, ...]] = {"linear": (), "cubic": (3,), "quintic": (3, 5)}

#: strains below this (largest principal value) are the reference
ZERO_STRAIN = 1e-9


@dataclass(frozen=True)
class LinearModel:
    """Design matrix of a list of jobs.

    Attributes
    ----------
    matrix : (rows, parameters)
        Square roots of the job weights are multiplied in.
    job_of_row : (rows,)
        Index of the job that each row belongs to.
    projections : tuple of (6, d)
        Columns that turn a job's Mandel stress into its rows, one a job, in the axes that the model was built in.
    weights : (jobs,)
        Weight of each job's rows: inverse variance in units of the common one.
    reference, constants, even, cubic : slice
        Column blocks: reference stress, constants, even terms, cubic (and higher odd) terms.
    reference_basis : (6, a)
        Orthonormal stresses that the unstrained crystal allows.
    even_basis : (rows, e)
        Orthonormal basis of everything that an arbitrary even response can add to the data; what is orthogonal to it
        is odd and knows the stiffness only.
    shapes : tuple of Shape
    shape_of_job : (jobs,)
        Index of the shape, -1 for the reference.
    signed_magnitudes : (jobs,)
        t of each job.
    even_of_shape, cubic_of_shape : tuple of slice
        Columns of each shape's even and cubic terms, in units of the response at the largest magnitude.
    turn : (6, 6) or None
        From the axes that the model was built in to those it is seen in, for Mandel vectors; None when they are the same.
    """

    matrix: FloatArray
    job_of_row: IntArray
    projections: tuple[FloatArray, ...]
    weights: FloatArray
    reference: slice
    constants: slice
    even: slice
    cubic: slice
    reference_basis: FloatArray
    even_basis: FloatArray
    shapes: tuple[Shape, ...]
    shape_of_job: IntArray
    signed_magnitudes: FloatArray
    even_of_shape: tuple[slice, ...]
    cubic_of_shape: tuple[slice, ...]
    turn: FloatArray | None = None

    @cached_property
    def projector(self) -> FloatArray:
        """(rows, 6 jobs): all projections side by side, with the roots of the weights."""
        out = np.zeros((len(self.matrix), 6 * len(self.projections)))
        first = 0
        for job, (projection, weight) in enumerate(zip(self.projections, self.weights, strict=True)):
            last = first + projection.shape[1]
            out[first:last, 6 * job : 6 * job + 6] = weight**0.5 * projection.T
            first = last
        return out

    def rows(self, stresses: FloatArray) -> FloatArray:
        """Data (rows, ...) of Mandel second Piola-Kirchhoff stresses (jobs, 6, ...)."""
        if self.turn is not None:
            stresses = np.einsum("ij,ni...->nj...", self.turn, stresses) if stresses.ndim > 2 else stresses @ self.turn
        return np.asarray(self.projector @ stresses.reshape(-1, *stresses.shape[2:]))

    def spread(self, values: FloatArray) -> FloatArray:
        """Mandel stresses (jobs, 6, ...) whose data are these rows (rows, ...), without what no row sees."""
        flat = (self.projector.T @ values).reshape(len(self.projections), 6, *values.shape[1:])
        flat = flat / self.weights.reshape(-1, *[1] * values.ndim)
        if self.turn is None:
            return flat
        return np.einsum("ij,nj...->ni...", self.turn, flat) if flat.ndim > 2 else flat @ self.turn.T

    @property
    def odd_degrees_of_freedom(self) -> int:
        """Spare degrees of freedom of the odd part: rows, less even nuisance, less constants and cubic terms found."""
        return int(len(self.matrix) - self.even_basis.shape[1] - factorise(self.odd_matrix).rank)

    @cached_property
    def odd_matrix(self) -> FloatArray:
        """Columns of the constants and cubic terms with every even response projected out."""
        return self.odd_part(self.matrix[:, np.r_[self.constants, self.cubic]])

    def odd_part(self, values: FloatArray) -> FloatArray:
        """What is left of rows (rows, ...) after every even response is projected out."""
        return values - self.even_basis @ (self.even_basis.T @ values)

    def turned(self, rotation: FloatArray) -> LinearModel:
        """The same jobs of the same crystal seen in other axes, the rows of `rotation` (3, 3): the design matrix stays."""
        q = rotation6(rotation)
        twin = replace(
            self,
            reference_basis=q @ self.reference_basis,
            shapes=tuple(shape.turned(q) for shape in self.shapes),
            turn=q if self.turn is None else q @ self.turn,
        )
        # what axes do not change is worked out once
        twin.__dict__.update(odd_matrix=self.odd_matrix, projector=self.projector)
        return twin

    def with_constants(self, change: FloatArray) -> LinearModel:
        """The same model for other constants: present ones = change (n, n) @ new ones."""
        matrix, odd = self.matrix.copy(), self.odd_matrix.copy()
        matrix[:, self.constants] = matrix[:, self.constants] @ change
        odd[:, : len(change)] = odd[:, : len(change)] @ change
        twin = replace(self, matrix=matrix)
        twin.__dict__.update(odd_matrix=odd, projector=self.projector)
        return twin


def _place(vectors: FloatArray, rotations: FloatArray) -> tuple[list[Shape], list[tuple[int, float, FloatArray]]]:
    """The shapes among strains (jobs, 6), Mandel, and where each strain belongs.

    That is the index of its shape (-1 at rest), its signed magnitude and the 6x6 rotation that carries the shape onto it.
    Magnitudes that are the same to second order are given their mean.
    """
    sizes = largest_principal_of(vectors)
    q = rotation6(rotations)
    shapes: list[Shape] = []
    images: list[FloatArray] = []
    placed: list[tuple[int, float, FloatArray]] = []
    for vector, size in zip(vectors, sizes.tolist(), strict=True):
        if size < ZERO_STRAIN:
            placed.append((-1, 0.0, np.eye(6)))
            continue
        unit = vector / size
        for index, image in enumerate(images):
            away = np.abs(image - unit).max(axis=1)
            nearest = int(away.argmin())
            if away[nearest] < same_to_second_order(size):
                sign = 1.0 if nearest < len(q) else -1.0
                placed.append((index, sign * size, q[nearest % len(q)]))
                break
        else:
            shapes.append(Shape.of(unit, rotations, same_to_second_order(size)))
            images.append(np.concatenate([q @ unit, -q @ unit]))
            placed.append((len(shapes) - 1, size, np.eye(6)))
    return shapes, _common_magnitudes(placed)


def _common_magnitudes(placed: list[tuple[int, float, FloatArray]]) -> list[tuple[int, float, FloatArray]]:
    groups: dict[int, list[list[float]]] = {}
    for index, t, _ in placed:
        known = groups.setdefault(index, [])
        close = (group for group in known if same_magnitude(group[0], abs(t)))
        group = next(close, None)
        if group is None:
            known.append([abs(t)])
        else:
            group.append(abs(t))
    means = {(index, size): float(np.mean(group)) for index, known in groups.items() for group in known for size in group}
    return [(index, float(np.copysign(means[index, abs(t)], t)), turn) for index, t, turn in placed]


def build_model(
    strains: FloatArray,
    rotations: FloatArray,
    matrices: FloatArray,
    order: Order = "linear",
    weights: FloatArray | None = None,
) -> LinearModel:
    """Linear model of a list of jobs.

    Parameters
    ----------
    strains : (jobs, 3, 3)
        Green-Lagrange strains in the given frame; zero for the reference.
    rotations : (m, 3, 3)
        Proper rotations of the Laue group, given frame.
    matrices : (n, 6, 6)
        Mandel matrices of the independent constants, given frame.
    order : "linear", "cubic" or "quintic"
        Whether cubic (and fifth-power) terms are fitted.
    weights : (jobs,), optional
        Inverse variances in units of the common one; ones when left out.
    """
    if order not in _POWERS:
        raise UsageError(f"unknown order {order!r}", "--order", "Use linear or cubic.")
    powers = _POWERS[order]
    vectors = to_mandel(strains)
    weights = np.ones(len(vectors)) if weights is None else np.asarray(weights, dtype=float)
    free = invariant_vectors(rotations)
    shapes, placed = _place(vectors, rotations)
    n, a = len(matrices), free.shape[1]
    even_start = a + n
    cubic_start = even_start + sum(s.even.shape[1] for s in shapes)
    even_at = even_start + np.cumsum([0, *(s.even.shape[1] for s in shapes)])
    odd_at = np.cumsum([0, *(s.odd.shape[1] for s in shapes)])
    width = cubic_start + len(powers) * int(odd_at[-1])
    largest = max((abs(t) for _, t, _ in placed), default=0.0) or 1.0

    blocks, projections, nuisance = [], [], []
    for vector, (index, t, turn), weight in zip(vectors, placed, weights, strict=True):
        shape = shapes[index] if index >= 0 else None
        allowed = turn @ shape.allowed if shape else free
        block = np.zeros((allowed.shape[1], width))
        block[:, :a] = allowed.T @ free
        block[:, a:even_start] = (allowed.T @ (matrices @ vector).T) if n else 0.0
        even = free
        if shape:
            even = turn @ shape.even
            block[:, even_at[index] : even_at[index + 1]] = allowed.T @ even * (t / largest) ** 2
            for place, power in enumerate(powers):
                first = cubic_start + place * odd_at[-1]
                columns = slice(first + odd_at[index], first + odd_at[index + 1])
                block[:, columns] = allowed.T @ turn @ shape.odd * (t / largest) ** power
        blocks.append(weight**0.5 * block)
        nuisance.append(((index, round(abs(t), 10)), weight**0.5 * allowed.T @ even))
        projections.append(allowed)
    sizes = [len(block) for block in blocks]
    return LinearModel(
        matrix=np.vstack(blocks) if blocks else np.zeros((0, width)),
        job_of_row=np.repeat(np.arange(len(blocks)), sizes),
        projections=tuple(projections),
        weights=weights,
        reference=slice(0, a),
        constants=slice(a, even_start),
        even=slice(even_start, cubic_start),
        cubic=slice(cubic_start, width),
        reference_basis=free,
        even_basis=_even_basis(nuisance, sizes),
        shapes=tuple(shapes),
        shape_of_job=np.array([index for index, _, _ in placed], dtype=np.int64),
        signed_magnitudes=np.array([t for _, t, _ in placed]),
        even_of_shape=tuple(slice(*map(int, even_at[i : i + 2])) for i in range(len(shapes))),
        cubic_of_shape=tuple(slice(*map(int, cubic_start + odd_at[i : i + 2])) for i in range(len(shapes) if powers else 0)),
    )


def _even_basis(nuisance: list[tuple[tuple[int, float], FloatArray]], sizes: list[int]) -> FloatArray:
    """Orthonormal basis of the data that free even responses, one for every shape and magnitude, can produce."""
    starts = np.cumsum([0, *sizes])
    groups: dict[tuple[int, float], FloatArray] = {}
    for row, (key, block) in enumerate(nuisance):
        columns = groups.setdefault(key, np.zeros((starts[-1], block.shape[1])))
        columns[starts[row] : starts[row + 1]] = block
    # groups touch different rows, so each is made orthonormal on its own
    bases = [np.linalg.qr(columns)[0] for columns in groups.values() if columns.shape[1]]
    return np.hstack(bases) if bases else np.zeros((starts[-1], 0))
