"""A factorised linear model, and a store of those that many crystals share.

What a fit costs is the factorisation, and that depends on nothing but the strains and the Laue group. Crystals of one class
have the same strains in their standard axes, however their cells are turned, so that one factorisation serves them all.
"""

from __future__ import annotations

from collections import OrderedDict
from dataclasses import dataclass, replace
from functools import cached_property

import numpy as np

from strainkit.design.model import LinearModel, Order, build_model
from strainkit.tensors.arrays import BoolArray, FloatArray, IntArray
from strainkit.tensors.constants import constant_basis
from strainkit.tensors.invariants import invariant_matrices
from strainkit.tensors.leastsquares import LeastSquares, factorise
from strainkit.tensors.rotations import rotate_matrix
from strainkit.tensors.sixvectors import stiffness_to_voigt

__all__ = ["Estimator", "JobLeverage", "Layout"]


@dataclass(frozen=True)
class Estimator:
    """A factorised linear model: everything about a fit that does not depend on the stresses.

    Attributes
    ----------
    model : LinearModel
    whole, odd : LeastSquares
        Of all rows, and of the rows with every even response projected out.
    odd_freedom, even_freedom : int
        Spare degrees of freedom of the odd part, and of the rest.
    """

    model: LinearModel
    whole: LeastSquares
    odd: LeastSquares
    odd_freedom: int
    even_freedom: int

    @classmethod
    def of(cls, model: LinearModel) -> Estimator:
        """Factorise a model."""
        whole, odd = factorise(model.matrix), factorise(model.odd_matrix)
        rows = len(model.matrix)
        odd_freedom = rows - model.even_basis.shape[1] - odd.rank
        return cls(model, whole, odd, odd_freedom, rows - whole.rank - odd_freedom)

    @property
    def determined(self) -> BoolArray:
        """Which constants (n,) the jobs determine."""
        return self.whole.determined[self.model.constants]

    @property
    def unit_covariance(self) -> FloatArray:
        """Covariance (n, n) of the constants for unit noise; NaN where undetermined."""
        return self.whole.inverse[self.model.constants, self.model.constants]

    def estimate(self, rows: FloatArray) -> FloatArray:
        """All parameters (parameters, ...) from data rows (rows, ...)."""
        return self.whole.solver @ rows

    def squares(self, rows: FloatArray) -> tuple[FloatArray, FloatArray]:
        """Sums of squared residuals (...,) of data rows (rows, ...): odd part, and the rest."""
        odd = self.model.odd_part(rows)
        odd_left = ((odd - self.model.odd_matrix @ (self.odd.solver @ odd)) ** 2).sum(axis=0)
        all_left = ((rows - self.model.matrix @ (self.whole.solver @ rows)) ** 2).sum(axis=0)
        return odd_left, np.maximum(all_left - odd_left, 0.0)

    def noise_variance(self, rows: FloatArray) -> tuple[FloatArray | None, int | None]:
        """Variance (...,) of one Mandel component and its degrees of freedom; None without spare degrees of freedom."""
        return self.variance(*self.squares(rows))

    def variance(self, odd: FloatArray, rest: FloatArray) -> tuple[FloatArray | None, int | None]:
        """The same from sums of squared residuals (...,)."""
        if self.odd_freedom > 0:
            return odd / self.odd_freedom, self.odd_freedom
        if self.even_freedom > 0:
            return (odd + rest) / self.even_freedom, self.even_freedom
        return None, None

    @cached_property
    def leverage(self) -> tuple[FloatArray, tuple[JobLeverage | None, ...]]:
        """What a fit leaves of data rows, (rows, rows), and how each job is tested against a fit without it.

        None for a job that cannot be tested.
        """
        model = self.model
        left = np.eye(len(model.matrix)) - model.matrix @ self.whole.solver
        freedom = len(left) - self.whole.rank
        tests: list[JobLeverage | None] = []
        for job in range(len(model.projections)):
            mine = np.flatnonzero(model.job_of_row == job)
            values, vectors = np.linalg.eigh(left[np.ix_(mine, mine)])
            keep = values > 1e-8
            rank = int(keep.sum())
            testable = rank > 0 and freedom - rank > 0
            tests.append(JobLeverage(mine, vectors[:, keep].T, values[keep], rank) if testable else None)
        return left, tuple(tests)

    @cached_property
    def term_weights(self) -> tuple[list[FloatArray | None], list[FloatArray | None]]:
        """Inverse covariance, for unit noise, of the even and of the cubic terms of every shape; None where undetermined."""

        def of(columns: slice) -> FloatArray | None:
            if columns.start == columns.stop or not self.whole.determined[columns].all():
                return None
            return np.linalg.inv(self.whole.inverse[columns, columns])

        return [of(c) for c in self.model.even_of_shape], [of(c) for c in self.model.cubic_of_shape]

    @cached_property
    def opposite(self) -> IntArray:
        """(jobs,) the first job of opposite strain, -1 where there is none."""
        t, shape = self.model.signed_magnitudes, self.model.shape_of_job
        pairs = (shape[:, None] == shape) & (np.abs(t[:, None] + t) < 1e-6 * np.abs(t)[:, None])
        return np.where(pairs.any(axis=1), pairs.argmax(axis=1), -1)

    @cached_property
    def alone(self) -> IntArray:
        """Strained jobs whose opposite is not there, though no rotation supplies it."""
        shapes = self.model.shapes
        image = np.array([index < 0 or shapes[index].has_image for index in self.model.shape_of_job])
        return np.flatnonzero((self.opposite < 0) & ~image)

    def turned(self, rotation: FloatArray, change: FloatArray | None = None) -> Estimator:
        """The same of the same jobs in other axes (rows of `rotation` (3, 3) in the present frame), and for other constants.

        Parameters
        ----------
        rotation : (3, 3)
        change : (n, n), optional
            Present constants = change @ new constants; all of them must be determined.
        """
        model = self.model.turned(rotation)
        whole, odd = self.whole, self.odd
        if change is not None:
            model = model.with_constants(change)
            count = len(change)
            whole = _changed(whole, self.model.constants, change)
            odd = _changed(odd, slice(0, count), change)
        twin = replace(self, model=model, whole=whole, odd=odd)
        # neither axes nor constants matter to these
        twin.__dict__.update(leverage=self.leverage, term_weights=self.term_weights, opposite=self.opposite, alone=self.alone)
        return twin


@dataclass(frozen=True)
class JobLeverage:
    """One job of a fit: its rows, combinations (k, rows) of what is left of them, and the shares (k,) of those in the noise."""

    rows: IntArray
    combinations: FloatArray
    shares: FloatArray
    rank: int


def _changed(found: LeastSquares, columns: slice, change: FloatArray) -> LeastSquares:
    """The factorisation for other parameters in some columns."""
    back = np.linalg.inv(change)
    inverse, solver = found.inverse.copy(), found.solver.copy()
    solver[columns] = back @ solver[columns]
    inverse[columns] = back @ inverse[columns]
    inverse[:, columns] = inverse[:, columns] @ back.T
    return replace(found, inverse=inverse, solver=solver)


#: (order, strains, rotations) in standard axes -> estimator and names of its constants; the latest used last
_KEPT: OrderedDict[tuple[str, bytes, bytes], tuple[Estimator, tuple[str, ...]]] = OrderedDict()
_MOST_KEPT = 256


@dataclass(frozen=True)
class Layout:
    """What a fit depends on besides the stresses.

    Attributes
    ----------
    strains : (jobs, 3, 3)
        Green-Lagrange, given frame.
    rotations : (m, 3, 3)
        Proper rotations of the Laue group, given frame.
    matrices : (n, 6, 6)
        Mandel matrices of the constants, given frame.
    axes : (3, 3) or None
        Rows: the crystal's standard axes in the given frame. With them estimators come from a store that knows those of all
        crystals with the same strains in these axes; their numbers are those of a factorisation of this crystal's own.
    """

    strains: FloatArray
    rotations: FloatArray
    matrices: FloatArray
    axes: FloatArray | None = None

    def estimator(self, order: Order) -> Estimator:
        """Estimator of an order."""
        if self.axes is None:
            return Estimator.of(build_model(self.strains, self.rotations, self.matrices, order))
        turned, group, strains_key, group_key = self._standard
        key = str(order), strains_key, group_key
        found = _KEPT.get(key)
        if found is None:
            basis = constant_basis(invariant_matrices(group), np.eye(3))
            found = Estimator.of(build_model(turned, group, basis.matrices, order)), basis.names
            if len(_KEPT) >= _MOST_KEPT:
                _KEPT.popitem(last=False)
            _KEPT[key] = found
        _KEPT.move_to_end(key)
        estimator, names = found
        if not estimator.determined.all():
            return Estimator.of(build_model(self.strains, self.rotations, self.matrices, order))
        return estimator.turned(self.axes.T, self._change(names))

    @cached_property
    def _standard(self) -> tuple[FloatArray, FloatArray, bytes, bytes]:
        """Strains and rotations in standard axes, and the same without rounding errors, as a key."""
        axes = self.axes
        assert axes is not None
        turned, group = axes @ self.strains @ axes.T, axes @ self.rotations @ axes.T
        return turned, group, _rounded(turned), _rounded(group)

    @cached_property
    def _elements(self) -> FloatArray:
        """Voigt matrices (n, 6, 6) of the constants in standard axes."""
        assert self.axes is not None
        return stiffness_to_voigt(rotate_matrix(self.axes, self.matrices))

    def _change(self, names: tuple[str, ...]) -> FloatArray | None:
        """Constants named in standard axes = (n, n) @ those of the layout; None where they are the same.

        The cell's setting chooses the axes that the layout's are named in. A constant is an element of the matrix.
        """
        change = self._elements[:, [int(name[1]) - 1 for name in names], [int(name[2]) - 1 for name in names]].T
        return None if np.abs(change - np.eye(len(change))).max() < 1e-13 else change


def _rounded(values: FloatArray) -> bytes:
    return bytes((np.round(values, 12) + 0.0).tobytes())
