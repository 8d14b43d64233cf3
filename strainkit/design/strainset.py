"""The strain set: every job of one crystal, by label, with its strain and deformation gradient."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from strainkit.crystal.frames import standard_frame
from strainkit.crystal.symmetry import Symmetry
from strainkit.design.model import Shape, build_model
from strainkit.design.search import SPARE, fewest_pairs
from strainkit.errors import UsageError
from strainkit.findings import Finding, finding
from strainkit.tensors.arrays import FloatArray
from strainkit.tensors.constants import ConstantBasis
from strainkit.tensors.leastsquares import factorise
from strainkit.tensors.sixvectors import to_mandel
from strainkit.tensors.strain import gradient_from_strain, green_lagrange

__all__ = ["REFERENCE", "Expectation", "StrainJob", "choose_strains", "expect"]

#: label of the unstrained job
REFERENCE = "reference"
#: stress noise assumed before anything is run, GPa (standard deviation of one Mandel component)
ASSUMED_NOISE = 0.01
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
    """

    label: str
    shape: int
    magnitude: float
    gradient: FloatArray

    @property
    def strain(self) -> FloatArray:
        """Green-Lagrange strain (3, 3) in the given frame."""
        return green_lagrange(self.gradient)


@dataclass(frozen=True)
class Expectation:
    """What a strain set promises before anything is run.

    Attributes
    ----------
    standard_errors : dict
        Constant -> standard error in GPa at the assumed noise; None where the set does not determine it.
    spare : int
        Spare degrees of freedom of the odd part, from which the noise is estimated.
    relative_cost : float
        Cost of the strained jobs in reference jobs, by lost symmetry.
    noise : float
        Assumed standard deviation of one Mandel stress component, GPa.
    """

    standard_errors: dict[str, float | None]
    spare: int
    relative_cost: float
    noise: float


def reference_job() -> StrainJob:
    """The unstrained job."""
    return StrainJob(REFERENCE, 0, 0.0, np.eye(3))


def choose_strains(symmetry: Symmetry, magnitudes: Sequence[float]) -> list[StrainJob]:
    """The fewest strained jobs that fix every constant to second order, the reference first.

    Parameters
    ----------
    symmetry : Symmetry
    magnitudes : sequence of float
        Largest principal strains, fractions (0.01 is one percent).
    """
    axes = standard_frame(symmetry)
    units = fewest_pairs(axes @ symmetry.rotations @ axes.T)
    return strained_jobs(axes.T @ units @ axes, magnitudes, symmetry.rotations)


def strained_jobs(units: FloatArray, magnitudes: Sequence[float], rotations: FloatArray) -> list[StrainJob]:
    """Jobs of the unit strains (k, 3, 3), given frame, at every magnitude, the reference first.

    A shape that a rotation of the crystal maps to its negative is strained to one side only: the odd part of that one
    job is its central difference.
    """
    sizes = sorted({check_magnitude(size) for size in magnitudes})
    if not sizes:
        raise UsageError("at least one strain magnitude is needed", "--magnitude")
    jobs = [reference_job()]
    for number, unit in enumerate(units, start=1):
        one_sided = Shape.of(to_mandel(unit), rotations).has_image
        for size in sizes:
            for side, word in ((1.0, "plus"), (-1.0, "minus"))[: 1 if one_sided else 2]:
                label = f"s{number}-{word}-{percent(size)}"
                jobs.append(StrainJob(label, number, side * size, gradient_from_strain(side * size * unit)))
    return jobs


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


def expect(
    jobs: Sequence[StrainJob], rotations: FloatArray, basis: ConstantBasis, noise: float = ASSUMED_NOISE
) -> tuple[Expectation, list[Finding]]:
    """Expected standard errors, spare degrees of freedom and cost of a list of jobs, and what to warn about."""
    model = build_model(np.array([job.strain for job in jobs]), rotations, basis.matrices)
    variances = np.diag(factorise(model.matrix).inverse)[model.constants]
    cost = sum(len(rotations) / model.shapes[index].residual_order for index in model.shape_of_job if index >= 0)
    spare = model.odd_degrees_of_freedom
    findings = []
    if spare < SPARE:
        findings.append(
            finding("few-spare-degrees", "strain set", f"{spare} spare degrees of freedom: the noise is poorly estimated")
        )
    errors = [None if np.isnan(v) else float(noise * v**0.5) for v in variances]
    named = dict(zip(basis.names, errors, strict=True))
    return Expectation(named, spare, float(cost), noise), findings
