"""Extremes of a directional quantity over all directions: a grid, then local refinement, with sampled errors.

The quantities are ratios of fourth-order polynomials of the direction (or eigenvalues of such), so that nothing hides between
points five degrees apart; tests hold the result against brute force.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np

from strainkit.derive.directional import hemisphere, tangents
from strainkit.derive.spread import WithError, half_width
from strainkit.tensors.arrays import FloatArray

__all__ = ["Quantity", "Top", "search"]

#: maps 6x6 matrices (s, 6, 6) and unit vectors (s or 1, k, 3) to values (s, k)
Quantity = Callable[[FloatArray, FloatArray], FloatArray]

#: points of the grid on half the sphere, about five degrees apart
_GRID = 800
#: points of the grid for each draw, besides the extremes of the tensor itself
_COARSE = 100
#: values closer than this, relatively, are equal
_EQUAL = 1e-9
#: starts of the refinement, at least this far apart (degrees)
_STARTS, _APART = 12, 15.0
#: eight neighbours on a circle around the present best
_RING = np.array([(np.cos(t), np.sin(t)) for t in np.radians(45.0 * np.arange(8))])
#: coefficients of a quadratic a + g.x + x.H.x / 2 from the values at the centre and on the ring (least squares)
_X, _Y = np.vstack([(0.0, 0.0), _RING]).T
_QUADRATIC = np.linalg.pinv(np.column_stack([np.ones(9), _X, _Y, 0.5 * _X**2, _X * _Y, 0.5 * _Y**2]))


@dataclass(frozen=True)
class Top:
    """The largest or smallest value over all directions.

    Attributes
    ----------
    value : WithError
        With a sampled standard error.
    direction : (3,)
        Unit vector in the frame of the tensor; one of several where symmetry makes them alike.
    drawn : (s,)
        The extreme of every draw; empty without draws.
    """

    value: WithError
    direction: FloatArray
    drawn: FloatArray


def search(
    quantity: Quantity, matrix: FloatArray, draws: FloatArray, largest: bool, preferred: FloatArray | None = None
) -> Top:
    """Find an extreme over all directions.

    Parameters
    ----------
    quantity : callable
        See `Quantity`.
    matrix : (6, 6)
        What the quantity takes, compliance or stiffness (Mandel).
    draws : (s, 6, 6)
        Draws of it from the error distribution; none for no error.
    largest : bool
        The largest value, else the smallest.
    preferred : (k, 3), optional
        Directions to name, the first first, where they are as good as the best (an extreme may be shared by many).
    """
    sign = 1.0 if largest else -1.0
    grid = hemisphere(_GRID)

    def signed(matrices: FloatArray, directions: FloatArray) -> FloatArray:
        return sign * quantity(matrices, directions)

    starts = _apart(grid, signed(matrix[None], grid[None])[0])
    many = np.broadcast_to(matrix, (len(starts), 6, 6))
    best, values = _refine(signed, many, starts, 60)
    top = int(np.argmax(values))
    direction = best[top]
    if preferred is not None:
        equal = signed(matrix[None], preferred[None])[0] >= values[top] - _EQUAL * abs(values[top])
        direction = preferred[np.argmax(equal)] if equal.any() else direction
    drawn: FloatArray = np.zeros(0)
    if len(draws):
        drawn = sign * _sampled(signed, draws, np.vstack([best, hemisphere(_COARSE)]))
    error = float(half_width(drawn)) if len(drawn) > 1 else None
    return Top(WithError(sign * float(values[top]), error), direction, drawn)


def _sampled(signed: Quantity, draws: FloatArray, candidates: FloatArray) -> FloatArray:
    """The largest value for every draw: the best candidate, refined."""
    first = candidates[np.argmax(signed(draws, candidates[None]), axis=1)]
    return _refine(signed, draws, first, 5)[1]


def _apart(grid: FloatArray, values: FloatArray) -> FloatArray:
    """The best grid points that are not close to a better one."""
    chosen: list[FloatArray] = []
    near = np.cos(np.radians(_APART))
    for point in grid[np.argsort(-values)]:
        if all(abs(point @ other) < near for other in chosen):
            chosen.append(point)
        if len(chosen) == _STARTS:
            break
    return np.array(chosen)


def _refine(signed: Quantity, matrices: FloatArray, start: FloatArray, rounds: int) -> tuple[FloatArray, FloatArray]:
    """Climb from one direction a matrix: the best of a ring and of a Newton step on the quadratic through it.

    Returns
    -------
    directions (s, 3), values (s,)
    """
    n = start
    size = np.full(len(n), np.radians(4.0))
    value = signed(matrices, n[:, None])[:, 0]
    for _ in range(rounds):
        first, second = tangents(n)

        def around(steps: FloatArray, n: FloatArray = n, first: FloatArray = first, second: FloatArray = second) -> FloatArray:
            moved = n[:, None] + steps[..., :1] * first[:, None] + steps[..., 1:] * second[:, None]
            return np.asarray(moved / np.linalg.norm(moved, axis=-1, keepdims=True))

        ring = around(size[:, None, None] * _RING)
        on_ring = signed(matrices, ring)
        newton = around((size[:, None] * _newton(np.column_stack([value, on_ring])))[:, None])
        points = np.concatenate([n[:, None], ring, newton], axis=1)
        every = np.column_stack([value, on_ring, signed(matrices, newton)])
        choice = np.argmax(every, axis=1)
        row = np.arange(len(n))
        n, value = points[row, choice], every[row, choice]
        size = np.where((choice >= 1) & (choice <= 8), size, 0.5 * size)
        if size.max() < 1e-7:
            break
    return n, value


def _newton(values: FloatArray) -> FloatArray:
    """Step (s, 2) to the top of the quadratic through nine values (s, 9), in ring radii, at most two.

    Only along directions in which the quadratic has a top: on the ridge of a crystal that is round about an axis there is
    one of them.
    """
    _, gx, gy, hxx, hxy, hyy = _QUADRATIC @ values.T
    curvature, axes = np.linalg.eigh(np.array([[hxx, hxy], [hxy, hyy]]).transpose(2, 0, 1))
    slope = np.einsum("sij,is->sj", axes, np.array([gx, gy]))
    peaked = curvature < -1e-3 * np.abs(curvature).max(axis=1, keepdims=True)
    step = np.einsum("sij,sj->si", axes, np.where(peaked, -slope / np.where(peaked, curvature, 1.0), 0.0))
    length = np.linalg.norm(step, axis=1, keepdims=True)
    return np.asarray(step * np.minimum(1.0, 2.0 / np.maximum(length, 1e-300)))
