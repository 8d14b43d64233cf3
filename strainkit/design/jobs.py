"""Strained jobs: labels, strains and deformation gradients."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Literal

import numpy as np

from strainkit.design.shapes import Shape, same_magnitude
from strainkit.errors import UsageError
from strainkit.tensors.arrays import FloatArray
from strainkit.tensors.sixvectors import to_mandel
from strainkit.tensors.strain import gradient_from_strain, green_lagrange

__all__ = [
    "REFERENCE",
    "JobKind",
    "StrainJob",
    "check_magnitude",
    "magnitudes_of",
    "percent",
    "reference_job",
    "strained_jobs",
    "units_of",
]

JobKind = Literal["reference", "strained", "finer", "displaced"]

#: label of the unstrained job
REFERENCE = "reference"
#: strains above this are refused: the harmonic range of any solid ends well before (percent)
LARGEST_MAGNITUDE = 10.0


@dataclass(frozen=True)
class StrainJob:
    """One calculation.

    Attributes
    ----------
    label : str
        Folder name: "reference", "s1-plus-1", "s1-minus-0.5", ...
    shape : int
        Number of the shape from 1; 0 for the reference.
    magnitude : float
        Largest absolute principal value of the Green-Lagrange strain, signed by the side of the shape.
    gradient : (3, 3)
        Deformation gradient F (x' = F x) in the given frame, symmetric.
    kind : str
        "reference" and "strained" make up the strain set; "finer" repeats a strained job at finer settings; "displaced"
        moves one atom of the unstrained cell.
    moved : (int, (3,)) or None
        Atom and displacement (angstrom, given frame) of a displaced job.
    """

    label: str
    shape: int
    magnitude: float
    gradient: FloatArray
    kind: JobKind = "strained"
    moved: tuple[int, FloatArray] | None = None

    @property
    def strain(self) -> FloatArray:
        """Green-Lagrange strain (3, 3) in the given frame."""
        return green_lagrange(self.gradient)


def reference_job() -> StrainJob:
    """The unstrained job."""
    return StrainJob(REFERENCE, 0, 0.0, np.eye(3), "reference")


def strained_jobs(units: FloatArray, magnitudes: Sequence[float], rotations: FloatArray, first: int = 1) -> list[StrainJob]:
    """Jobs of the unit strains (k, 3, 3), given frame, at every magnitude (fractions), without the reference.

    A shape that a rotation of the crystal (m, 3, 3) maps to its negative is strained to one side only: the odd part of
    that one job is its central difference. Shapes are numbered from `first`.
    """
    sizes = sorted({check_magnitude(size) for size in magnitudes})
    if not sizes:
        raise UsageError("at least one strain magnitude is needed", "--magnitude")
    jobs = []
    for number, unit in enumerate(units, start=first):
        sides = ((1.0, "plus"), (-1.0, "minus"))[: Shape.of(to_mandel(unit), rotations).jobs]
        for size in sizes:
            for side, word in sides:
                label = f"s{number}-{word}-{percent(size)}"
                jobs.append(StrainJob(label, number, side * size, gradient_from_strain(side * size * unit)))
    return jobs


def magnitudes_of(jobs: Sequence[StrainJob]) -> tuple[float, ...]:
    """Distinct magnitudes (fractions) of the strained jobs, ascending; those that are one to second order as their mean."""
    groups: list[list[float]] = []
    for size in sorted(abs(job.magnitude) for job in jobs if job.shape):
        if groups and same_magnitude(groups[-1][0], size):
            groups[-1].append(size)
        else:
            groups.append([size])
    return tuple(round(float(np.mean(group)), 9) for group in groups)


def units_of(jobs: Sequence[StrainJob]) -> dict[int, FloatArray]:
    """Unit strain (3, 3), given frame, of every shape number among the jobs."""
    return {job.shape: job.strain / job.magnitude for job in reversed(jobs) if job.shape}


def check_magnitude(size: float) -> float:
    """A strain magnitude (fraction) if it can be used."""
    if not 1e-5 <= size <= LARGEST_MAGNITUDE / 100:
        raise UsageError(
            f"a strain magnitude of {100 * size:g} % is out of range",
            "--magnitude",
            f"Give a percentage between 0.001 and {LARGEST_MAGNITUDE:g}; 0.5 to 1 suits most crystals.",
        )
    return float(size)


def percent(size: float) -> str:
    """A fraction as a short percentage for labels: 0.01 -> "1"."""
    return f"{100.0 * size:.6g}"
