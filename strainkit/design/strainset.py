"""Choosing the strain set of a crystal: by aim, by number of jobs, or by the error that is wanted."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from math import ceil

import numpy as np

from strainkit.crystal.crystal import Crystal
from strainkit.crystal.frames import physical_axes
from strainkit.crystal.symmetry import Symmetry
from strainkit.design.aims import fewest, fewest_jobs, sharpest
from strainkit.design.expect import ASSUMED_NOISE, expect
from strainkit.design.jobs import StrainJob, percent, reference_job, strained_jobs
from strainkit.design.symmetric import most_symmetric
from strainkit.errors import UsageError, counted
from strainkit.findings import Finding, finding
from strainkit.tensors.arrays import FloatArray
from strainkit.tensors.constants import ConstantBasis
from strainkit.tensors.sixvectors import from_mandel

__all__ = ["AIMS", "CEILING", "Wish", "choose_strains"]

AIMS = ("fewest", "symmetric", "sharpest")
#: magnitude that a set is given when none is asked for (fraction)
DEFAULT_MAGNITUDE = 0.01
#: largest magnitude that `--target-error` chooses by itself (fraction)
CEILING = 0.02
#: a set for a target error may hold this many times the fewest jobs
_MOST_TIMES_FEWEST = 12


@dataclass(frozen=True)
class Wish:
    """What a strain set should be.

    Attributes
    ----------
    aim : "fewest", "symmetric" or "sharpest"
    magnitudes : tuple of float
        Largest principal strains, fractions; empty to leave the choice open.
    jobs : int or None
        Most strained jobs; needed by "sharpest", refused by the others.
    target_error : float or None
        Largest standard error of a constant, GPa, at the assumed noise.
    noise : float
        Assumed standard deviation of one Mandel stress component, GPa.
    ceiling : float
        Largest magnitude that a target error may lead to, fraction.
    """

    aim: str = "fewest"
    magnitudes: tuple[float, ...] = ()
    jobs: int | None = None
    target_error: float | None = None
    noise: float = ASSUMED_NOISE
    ceiling: float = CEILING

    def __post_init__(self) -> None:
        if self.aim not in AIMS:
            raise UsageError(f"unknown aim {self.aim!r}", "--aim", f"Use one of {', '.join(AIMS)}.")
        if (self.jobs is None) == (self.aim == "sharpest" and self.target_error is None):
            remedy = "Give the number of strained jobs with --aim sharpest --jobs N, and only there."
            raise UsageError("--jobs and --aim sharpest belong together", "--jobs", remedy)
        if self.target_error is not None and not self.target_error > 0:
            raise UsageError(f"a target error of {self.target_error:g} GPa is not possible", "--target-error")
        if not self.noise > 0:
            raise UsageError(f"a noise of {self.noise:g} GPa is not possible", "--noise", "Give a positive number.")


def choose_strains(
    crystal: Crystal, symmetry: Symmetry, basis: ConstantBasis, wish: Wish
) -> tuple[list[StrainJob], list[Finding]]:
    """The jobs of a crystal, the reference first, and how a target error was met.

    Parameters
    ----------
    crystal : Crystal
    symmetry : Symmetry
    basis : ConstantBasis
        Symmetry and independent constants of the crystal.
    wish : Wish
    """
    magnitudes = wish.magnitudes or (DEFAULT_MAGNITUDE,)
    axes = physical_axes(crystal, symmetry)
    units = aimed(symmetry, axes, wish.aim, None if wish.jobs is None else wish.jobs // len(set(magnitudes)))
    jobs = _jobs(units, magnitudes, symmetry)
    if wish.target_error is None:
        return jobs, []
    return _reach(symmetry, axes, basis, wish, jobs, units)


def aimed(symmetry: Symmetry, axes: FloatArray, aim: str, jobs: int | None = None) -> FloatArray:
    """Unit strains (k, 3, 3), given frame, of an aim, found in the crystal's physical axes (3, 3), rows.

    `jobs` are those at one magnitude, for "sharpest".
    """
    group = axes @ symmetry.rotations @ axes.T
    if aim == "symmetric":
        units = most_symmetric(group)
    elif aim == "fewest" or jobs is None:
        units = fewest(group)
    else:
        units = sharpest(group, jobs)
    return np.asarray(axes.T @ from_mandel(units) @ axes)


def _jobs(units: FloatArray, magnitudes: Sequence[float], symmetry: Symmetry) -> list[StrainJob]:
    return [reference_job(), *strained_jobs(units, magnitudes, symmetry.rotations)]


def _reach(
    symmetry: Symmetry,
    axes: FloatArray,
    basis: ConstantBasis,
    wish: Wish,
    jobs: list[StrainJob],
    units: FloatArray,
) -> tuple[list[StrainJob], list[Finding]]:
    """Meet a target error: by a larger magnitude where it was left open, then by more shapes."""
    assert wish.target_error is not None

    def error(trial: list[StrainJob]) -> float:
        return expect(trial, symmetry.rotations, basis, wish.noise)[0].largest

    magnitudes, notes = wish.magnitudes or (DEFAULT_MAGNITUDE,), []
    if error(jobs) > wish.target_error and not wish.magnitudes:
        # errors fall as one over the magnitude: the next 0.05 % that meets the target
        size = ceil(round(2000 * magnitudes[0] * error(jobs) / wish.target_error, 6)) / 2000
        if size > wish.ceiling:
            notes.append(f"{percent(size)} % strain would exceed the ceiling of {percent(wish.ceiling)} %")
        magnitudes = (min(size, wish.ceiling),)
        jobs = _jobs(units, magnitudes, symmetry)
    least = fewest_jobs(symmetry.rotations)
    count = least
    while error(jobs) > wish.target_error:
        count = max(count + 2, 2 * int(0.45 * count * (error(jobs) / wish.target_error) ** 2))
        if count > _MOST_TIMES_FEWEST * least:
            raise UsageError(
                f"a standard error of {wish.target_error:g} GPa at a noise of {wish.noise:g} GPa needs more than "
                f"{_MOST_TIMES_FEWEST * least} jobs at {percent(max(magnitudes))} % strain",
                "--target-error",
                "Lower the noise (convergence settings), raise --ceiling or --magnitude, or ask for less.",
            )
        jobs = _jobs(aimed(symmetry, axes, "sharpest", count), magnitudes, symmetry)
    sizes = ", ".join(percent(m) for m in magnitudes)
    notes.append(f"{counted(len(jobs) - 1, 'strained job')} at {sizes} % promise {error(jobs):.3g} GPa for the worst constant")
    text = f"target {wish.target_error:g} GPa at a noise of {wish.noise:g} GPa: {'; '.join(notes)}"
    return jobs, [finding("target-error", "strain set", text)]
