"""A whole stiffness from the constants that were given and the symmetry that fixes the others."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from strainkit.errors import InputError
from strainkit.tensors.arrays import FloatArray
from strainkit.tensors.constants import ALL_NAMES, ConstantBasis, constant_basis
from strainkit.tensors.invariants import invariant_matrices
from strainkit.tensors.sixvectors import stiffness_to_voigt
from strainkit.tensors.stiffness import Stiffness

__all__ = ["Entry", "complete", "misfits"]


@dataclass(frozen=True)
class Entry:
    """One constant as it was written: value, standard error (None when not given) and a unit of its last digit, GPa."""

    value: float
    error: float | None
    last_place: float

    def scaled(self, factor: float) -> Entry:
        """The same in another unit."""
        return Entry(self.value * factor, None if self.error is None else self.error * factor, self.last_place * factor)


def misfits(entries: dict[str, Entry], rotations: FloatArray) -> list[str]:
    """Names that a Laue group needs and the entries do not fix, and names that it forbids and they set."""
    basis, _, rows = _equations(entries, rotations)
    return _missing(basis, rows) + _forbidden(entries, rows)


def complete(entries: dict[str, Entry], rotations: FloatArray, where: str, frame: str) -> Stiffness:
    """The stiffness that a Laue group allows and that has the given constants.

    Parameters
    ----------
    entries : dict
        Name -> `Entry`.
    rotations : (m, 3, 3)
        Proper rotations of the group, in the axes of the names.
    where, frame : str
        Named in errors; name of the axes.

    Raises
    ------
    InputError
        Constants that neither the entries nor the symmetry fix, or entries that contradict it by more than their rounding
        and three standard errors.
    """
    basis, every, rows = _equations(entries, rotations)
    forbidden, missing = _forbidden(entries, rows), _missing(basis, rows)
    if forbidden:
        raise InputError(
            f"{', '.join(forbidden)} must be zero by symmetry", where, "Check the Laue class and the axes of the constants."
        )
    if missing:
        raise InputError(
            f"missing constants: {', '.join(missing)}",
            where,
            "Name the Laue class (a line such as: laue m-3m), give --cell, or write every constant, zeros too.",
        )
    wanted = np.array([entry.value for entry in entries.values()])
    last = np.array([entry.last_place for entry in entries.values()])
    errors = np.array([entry.error or 0.0 for entry in entries.values()])
    leading = [order for order, name in enumerate(entries) if name in basis.names]
    if len(leading) < len(basis.names):
        leading = list(range(len(entries)))
    weights = 1.0 / np.maximum(errors, last)[leading]
    solver = np.linalg.pinv(rows[leading] * weights[:, None]) * weights
    values = solver @ wanted[leading]
    slack = np.maximum(0.5 * (last + np.abs(rows @ solver) @ last[leading]) * 1.01, 3.0 * errors)
    for name, row, value, allowed in zip(entries, rows, wanted, slack, strict=True):
        if abs(row @ values - value) > allowed:
            partners = [n for n in (list(entries)[i] for i in leading) if n != name and (np.abs(every[n] * row) > 1e-9).any()]
            raise InputError(
                f"{name} = {value:g}, but symmetry and {', '.join(partners)} give {row @ values:.5g}",
                where,
                "Check the Laue class and the axes, or leave the dependent constant out.",
            )
    return Stiffness(basis.stiffness(values), _covariance(entries, basis, rows), frame=frame)


def _equations(entries: dict[str, Entry], rotations: FloatArray) -> tuple[ConstantBasis, dict[str, FloatArray], FloatArray]:
    """Independent constants of the group, and every constant (by name) and the given ones (rows) in terms of them."""
    basis = constant_basis(invariant_matrices(rotations), np.eye(3))
    voigt = stiffness_to_voigt(basis.matrices)
    every = {name: voigt[:, int(name[1]) - 1, int(name[2]) - 1] for name in ALL_NAMES}
    every = {name: np.where(np.abs(row) > 1e-12, row, 0.0) for name, row in every.items()}
    return basis, every, np.array([every[name] for name in entries])


def _missing(basis: ConstantBasis, rows: FloatArray) -> list[str]:
    unit = np.eye(len(basis.names))
    return [name for name, column in zip(basis.names, unit, strict=True) if not _in_span(rows, column)]


def _forbidden(entries: dict[str, Entry], rows: FloatArray) -> list[str]:
    pairs = zip(entries.items(), rows, strict=True)
    return [name for (name, entry), row in pairs if not row.any() and abs(entry.value) > 3.0 * (entry.error or 0.0)]


def _in_span(rows: FloatArray, column: FloatArray) -> bool:
    solution = np.linalg.lstsq(rows.T, column, rcond=None)[0]
    return bool(np.abs(rows.T @ solution - column).max() < 1e-9)


def _covariance(entries: dict[str, Entry], basis: ConstantBasis, rows: FloatArray) -> FloatArray | None:
    """(36, 36), GPa^2, from errors taken as independent; None unless every constant can be given one.

    The errors of the independent constants count where they are there: their copies (C22 of C11) are no new measurement.
    """
    chosen = [name for name in basis.names if name in entries and entries[name].error is not None]
    if len(chosen) < len(basis.names):
        chosen = [name for name, entry in entries.items() if entry.error is not None]
    order = list(entries)
    weighted = np.array([rows[order.index(name)] / max(entries[name].error or 0.0, 1e-12) for name in chosen])
    if not len(weighted) or np.linalg.matrix_rank(weighted) < len(basis.names):
        return None
    flat = basis.matrices.reshape(len(basis.names), 36)
    return np.asarray(flat.T @ np.linalg.inv(weighted.T @ weighted) @ flat)
