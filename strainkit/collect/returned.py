"""What one output file says, and the row of the table of readers that says how to read it."""

from __future__ import annotations

import re
from collections.abc import Callable, Mapping
from dataclasses import dataclass, field
from typing import TYPE_CHECKING, Any

from strainkit.tensors.arrays import FloatArray, IntArray

if TYPE_CHECKING:
    from strainkit.collect.source import Source

__all__ = ["Geometry", "Problems", "Reader", "Returned", "Settings", "Stress"]

#: (status, message) pairs; the status is one of unfinished, unconverged, broken
Problems = tuple[tuple[str, str], ...]
Settings = Mapping[str, str | float | tuple[float, ...]]


@dataclass(frozen=True)
class Returned:
    """What one output file says.

    Attributes
    ----------
    program : str
        Key of the reader.
    lattice : (3, 3)
        Rows, angstrom.
    positions : (n, 3)
        Fractional.
    numbers : (n,)
        Atomic numbers.
    stress : (3, 3) or None
        Cauchy stress in the output's own frame, GPa, positive in tension.
    energy : float or None
        Free energy of the cell, eV.
    forces : (n, 3) or None
        On the atoms, eV/A, in the output's own frame and order.
    problems : tuple of (status, message)
        Why the numbers must not be used; empty for a finished, converged job.
    version : str
        Of the program, as it prints it; empty when it does not.
    settings : mapping
        Those of cutoff_eV, kpoints ("4x4x4"), kpoint_count, functional, dispersion, smearing and spin that the output says.
        They are for comparison within a set: the words are the program's own.
    stress_repeat : (3, 3) or None
        The same stress as the output prints it a second time, GPa, positive in tension.
    lattice_precision : float
        Half of the last digit to which the output prints a lattice vector, A.
    positions_known : bool
        False when the output holds only the positions from which a relaxation began.
    """

    program: str
    lattice: FloatArray
    positions: FloatArray
    numbers: IntArray
    stress: FloatArray | None
    energy: float | None
    forces: FloatArray | None
    problems: Problems = ()
    version: str = ""
    settings: Settings = field(default_factory=dict)
    stress_repeat: FloatArray | None = None
    lattice_precision: float = 1e-6
    positions_known: bool = True


@dataclass(frozen=True)
class Geometry:
    """The cell and atoms to which an output's stress belongs; fields as in Returned."""

    lattice: FloatArray
    positions: FloatArray
    numbers: IntArray
    precision: float = 1e-6
    positions_known: bool = True


@dataclass(frozen=True)
class Stress:
    """A stress (3, 3), GPa, positive in tension, with its repetition in other units and how far rounding lets them differ."""

    value: FloatArray
    repeat: FloatArray | None = None
    rounding: float = 0.0


def _nothing(_: Any) -> None:
    return None


@dataclass(frozen=True)
class Reader:
    """One kind of output: a row of the table. Columns after `load` take what `load` gave and may raise ValueError.

    Attributes
    ----------
    program : str
        Name in messages.
    recognises : callable
        Whether the first bytes of a file are of this kind.
    load : callable
        From the file's content to what the other columns read.
    geometry, stress, energy, forces : callable
        Of the last ionic step; stress, energy and forces give None where the output has none.
    settings, version : callable
        As in Returned.
    doubts : callable
        Problems that take more than a word to find: thresholds not reached, a stress of an earlier step.
    end_mark : pattern or None
        Found in every output of a job that ended by itself; None for formats that are complete or unreadable.
    bad_marks : tuple of (pattern, status, message)
        Words that say the numbers are not converged; patterns whose time grows with the text alone, however long its lines.
    tells_relaxed : bool
        Whether the file would say that its ions are not relaxed. One that does not never counts beside one that has problems.
    checked : str
        How the reader was checked: run, real or manual.
    """

    program: str
    recognises: Callable[[bytes], bool]
    load: Callable[[Source], Any]
    geometry: Callable[[Any], Geometry]
    stress: Callable[[Any], Stress | None]
    energy: Callable[[Any], float | None] = _nothing
    forces: Callable[[Any], FloatArray | None] = _nothing
    settings: Callable[[Any], Settings] = lambda _: {}
    version: Callable[[Any], str] = lambda _: ""
    doubts: Callable[[Any], Problems] = lambda _: ()
    end_mark: re.Pattern[str] | None = None
    bad_marks: tuple[tuple[re.Pattern[str], str, str], ...] = ()
    tells_relaxed: bool = True
    checked: str = "manual"
