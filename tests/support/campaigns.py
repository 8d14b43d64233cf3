"""Cells, returned files and decks for campaigns; all invented."""

from __future__ import annotations

from collections.abc import Callable
from pathlib import Path

import numpy as np

from strainkit.run.campaign import load_campaign
from strainkit.run.extxyz import extxyz_text
from strainkit.run.plan import Plan, job_folder, load_plan
from strainkit.tensors.constants import constant_basis
from strainkit.tensors.rotations import rotate_matrix
from strainkit.tensors.strain import cauchy_from_pk2
from strainkit.units import EV_PER_A3_IN_GPA
from support.crystals import SPACE_GROUPS, conventional, random_rotation, rewritten
from support.published import BY_LAUE_CLASS, mandel
from support.returned import linear_law, write_return

#: a program of one line: it returns the cell it was given with an invented stress
DECK = {
    "deck.toml": '[program]\nname = "echo"\ncommand = ""\ngeometry = "extxyz"\n[deck]\npause = 0.0\n',
    "start.extxyz": "{{ geometry }}\n",
    "steps.sh": """make_inputs() { :; }
run_program() {
  sleep {{ deck.pause }}
  sed '2s|$| energy=-1.0 stress="0.1 0 0 0 0.1 0 0 0 0.1"|' start.extxyz >returned.extxyz
}
is_finished() { [ -s returned.extxyz ]; }
tidy_up() { :; }
""",
}


def write_cells(
    folder: Path, rng: np.random.Generator, copies: int = 1, classes: tuple[str, ...] = tuple(SPACE_GROUPS)
) -> None:
    """One extended XYZ file a Laue class and copy, each in a random orientation."""
    folder.mkdir(parents=True, exist_ok=True)
    for copy in range(copies):
        for laue in classes:
            crystal = rewritten(conventional(laue), random_rotation(rng), np.eye(3, dtype=int))
            name = f"{laue.replace('/', '_over_').replace('-', 'bar')}-{copy}"
            (folder / f"{name}.extxyz").write_text(extxyz_text(crystal, {}))


def write_deck(folder: Path) -> Path:
    """The folder of the deck above."""
    folder.mkdir(parents=True)
    for name, text in DECK.items():
        (folder / name).write_text(text)
    return folder


def published_law(plan: Plan) -> Callable[[np.ndarray], np.ndarray]:
    """The published tensor of the crystal's Laue class, made to obey the crystal's own group."""
    axes = plan.frames["ieee"].rotation
    tensor = rotate_matrix(axes.T, mandel(BY_LAUE_CLASS[plan.symmetry.laue_class]))
    basis = constant_basis(plan.symmetry.invariants, axes)
    return linear_law(basis.stiffness(basis.values(tensor)))


def write_all_returns(campaign: Path, rng: np.random.Generator, noise: float = 0.005) -> None:
    """Outputs of every job: the published tensor of the crystal's Laue class and Gaussian noise (GPa), turned at random."""
    for member in load_campaign(campaign).members:
        plan = load_plan(campaign / member.run)
        law = published_law(plan)
        return_jobs(campaign / member.run, plan, law, rng, noise)


def return_jobs(
    run: Path, plan: Plan, law: Callable[[np.ndarray], np.ndarray], rng: np.random.Generator, noise: float = 0.005
) -> None:
    """Outputs of a linear law with noise, their energies those of the law, each turned at random."""
    for job in plan.jobs:
        error = rng.normal(scale=noise, size=(3, 3))
        stress = cauchy_from_pk2(law(job.strain) + (error + error.T) / 2**0.5, job.gradient)
        energy = 0.5 * plan.crystal.volume / EV_PER_A3_IN_GPA * float((law(job.strain) * job.strain).sum())
        turn = random_rotation(rng)
        write_return(
            run / job_folder(job.label), plan.crystal.deformed(turn @ job.gradient), turn @ stress @ turn.T, energy=energy
        )
