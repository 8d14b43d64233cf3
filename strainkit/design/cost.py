"""What each job costs: the symmetry its cell keeps, and the k-points that leaves."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np

from strainkit.crystal.crystal import Crystal
from strainkit.crystal.kpoints import irreducible_kpoints
from strainkit.crystal.symmetry import Symmetry, laue_class_of
from strainkit.design.jobs import StrainJob
from strainkit.tensors.invariants import stabiliser
from strainkit.tensors.sixvectors import to_mandel

__all__ = ["JobCost", "job_costs", "with_costs"]


@dataclass(frozen=True)
class JobCost:
    """Cost of one job.

    Attributes
    ----------
    label : str
    laue_class : str
        Of the strained cell.
    lost : float
        Order of the crystal's Laue group over that of the strained cell: about the cost in reference jobs.
    kpoints : int or None
        Irreducible points of the mesh in question.
    """

    label: str
    laue_class: str
    lost: float
    kpoints: int | None = None


def job_costs(
    jobs: Sequence[StrainJob], crystal: Crystal, symmetry: Symmetry, mesh: tuple[int, int, int] | None = None
) -> list[JobCost]:
    """Cost of every job; with a k-mesh also its irreducible points."""
    costs = []
    for job in jobs:
        kept = symmetry.rotations
        if job.shape:
            kept = kept[stabiliser(kept, to_mandel(job.strain), atol=1e-5)]
        points = None
        if mesh is not None:
            # tight enough that the strain itself is seen
            length = float(np.linalg.norm(crystal.lattice, axis=1).min())
            tolerance = min(symmetry.tolerance, 0.02 * abs(job.magnitude) * length) if job.shape else symmetry.tolerance
            points = irreducible_kpoints(crystal.deformed(job.gradient), mesh, tolerance)
        costs.append(JobCost(job.label, laue_class_of(kept), len(symmetry.rotations) / len(kept), points))
    return costs


def with_costs(plan: dict[str, Any], costs: Sequence[JobCost]) -> dict[str, Any]:
    """A manifest's dictionary with the Laue class and the irreducible k-points of every job's cell."""
    known = {cost.label: {"laue_class": cost.laue_class, "irreducible_kpoints": cost.kpoints} for cost in costs}
    return plan | {"jobs": [job | known.get(job["label"], {}) for job in plan["jobs"]]}
