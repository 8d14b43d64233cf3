"""Displaced cells beside clamped-ion jobs, and which way to the relaxed-ion stiffness is the cheaper one."""

from __future__ import annotations

import numpy as np

from strainkit.crystal.crystal import Crystal
from strainkit.crystal.operations import crystal_operations
from strainkit.design.jobs import StrainJob
from strainkit.dynamics.gamma import displacements
from strainkit.dynamics.internal import ions_answer
from strainkit.findings import Finding, finding

__all__ = ["STEPS_MOLECULAR", "STEPS_OTHER", "cost_finding", "displaced_jobs"]

#: relaxation steps a job that are assumed: molecular crystals (README measures 26 to 141), all others
STEPS_MOLECULAR, STEPS_OTHER = 50, 12


def displaced_jobs(crystal: Crystal, symprec: float) -> list[StrainJob]:
    """The fewest cells with one atom displaced that give the force constants at q = 0; none where ions cannot answer."""
    if not ions_answer(crystal_operations(crystal, symprec)):
        return []
    return [
        StrainJob(f"d{number}", 0, 0.0, np.eye(3), "displaced", (moved.atom, moved.vector))
        for number, moved in enumerate(displacements(crystal, symprec), start=1)
    ]


def cost_finding(crystal: Crystal, strained: int, displaced: int, molecular: bool) -> Finding:
    """Which way takes fewer single-point calculations, and what speaks against it."""
    where = crystal.source or crystal.name
    if not displaced:
        text = "symmetry keeps the ions at their affine places: clamped and relaxed ions give the same stiffness"
        return finding("internal-strain-cost", where, text)
    steps = STEPS_MOLECULAR if molecular else STEPS_OTHER
    relaxing, clamped = strained * steps, strained + displaced
    text = (
        f"relaxing {strained} jobs takes about {relaxing} single points ({steps} steps a job assumed), clamped ions "
        f"{clamped} ({strained} strained and {displaced} displaced cells)"
    )
    better = "relaxing" if relaxing <= clamped else "clamped ions"
    if better == "clamped ions" and molecular:
        text += ": clamped ions are cheaper, but soft modes amplify the noise of the forces; relaxing is the safer way"
    else:
        text += f": {better} {'is' if better == 'relaxing' else 'are'} cheaper"
    return finding("internal-strain-cost", where, text)
