"""Clean strain sets for the blind fault bench: lawful synthetic ones of every Laue class, and folders of real outputs.

Everything synthetic is invented. Stresses follow second- and third-order constants of the crystal's own symmetry with Gaussian
noise, energies the same law, atoms a linear answer to the strain. Written without knowledge of how `collect` judges.
"""

from __future__ import annotations

import lzma
from collections.abc import Callable
from copy import deepcopy
from dataclasses import dataclass, field, replace
from functools import cache
from pathlib import Path

import numpy as np
import spglib

from strainkit.crystal.crystal import Crystal
from strainkit.crystal.spacegroup import spglib_raises
from strainkit.design.strainset import Wish
from strainkit.prepare.runfolder import plan_run
from strainkit.run.extxyz import RETURNED, extxyz_text
from strainkit.run.plan import MANIFEST, Plan, job_folder, load_plan
from strainkit.tensors.strain import cauchy_from_pk2
from strainkit.units import EV_PER_A3_IN_GPA
from support.campaigns import published_law
from support.crystals import conventional, random_rotation, random_unimodular, rewritten

#: columns of a table of stresses, in the order of its header
COLUMNS = ("xx", "yy", "zz", "yz", "xz", "xy")
_PLACES = ((0, 0), (1, 1), (2, 2), (1, 2), (0, 2), (0, 1))


@dataclass
class Output:
    """What one job of a synthetic set returned.

    Cell and Cauchy stress (3, 3), GPa, positive in tension, both in the output's axes; `info` holds further pairs of the
    comment line; a stress of None is not printed.
    """

    cell: Crystal
    stress: np.ndarray | None
    energy: float | None
    forces: np.ndarray | None = None
    info: dict[str, object] = field(default_factory=dict)

    def text(self) -> str:
        """Extended XYZ."""
        pairs = dict(self.info)
        if self.energy is not None:
            pairs["energy"] = self.energy
        if self.stress is not None:
            pairs["stress"] = self.stress / EV_PER_A3_IN_GPA
        return extxyz_text(self.cell, pairs, self.forces)


@dataclass
class StrainSet:
    """A set that can be written into a run folder: as extended XYZ, as one table, or as the files that a program left.

    Attributes
    ----------
    kind : "xyz", "table", or the name of a program
    outputs : dict
        Label -> Output, of synthetic sets.
    files : dict
        Path relative to the run folder -> text, of real sets; faults may add to it in any set, and "" removes a file.
    packed : dict
        Further files that are not text.
    law : callable or None
        Second Piola-Kirchhoff stress (3, 3), GPa, of a Green-Lagrange strain.
    """

    name: str
    kind: str
    plan: Plan
    outputs: dict[str, Output] = field(default_factory=dict)
    files: dict[str, str] = field(default_factory=dict)
    packed: dict[str, bytes] = field(default_factory=dict)
    law: Callable[[np.ndarray], np.ndarray] | None = None
    table_energies: bool = True

    @property
    def labels(self) -> list[str]:
        """Labels of the jobs, the reference first."""
        return [job.label for job in self.plan.strain_set]

    @property
    def real(self) -> bool:
        """Is it a set of a program's own outputs?"""
        return not self.outputs

    def copy(self) -> StrainSet:
        """A set that faults may change; the plan and the law are shared."""
        return replace(self, outputs=deepcopy(self.outputs), files=dict(self.files), packed=dict(self.packed))

    def write(self, folder: Path) -> list[str]:
        """Write the run folder; returns the options that `collect` needs."""
        folder.mkdir(parents=True, exist_ok=True)
        self.plan.save(folder)
        for job in self.plan.jobs:
            (folder / job_folder(job.label)).mkdir(parents=True, exist_ok=True)
        options: list[str] = []
        if self.kind == "table":
            (folder / "table.csv").write_text(self.table())
            options = ["--table", str(folder / "table.csv")]
        elif self.outputs:
            for label, output in self.outputs.items():
                (folder / job_folder(label) / RETURNED).write_text(output.text())
        for name, text in self.files.items():
            if text or name.endswith(".empty"):
                (folder / name.removesuffix(".empty")).write_text(text, newline="")
            else:
                (folder / name).unlink(missing_ok=True)
        for name, data in self.packed.items():
            (folder / name).write_bytes(data)
        return options

    def table(self) -> str:
        """One table of the whole set, energies in the last column where it has them."""
        head = ["label", *COLUMNS] + (["energy_eV"] if self.table_energies else [])
        rows = [",".join(head)]
        for label, output in self.outputs.items():
            if output.stress is None:
                continue
            cells = [label, *(f"{output.stress[place]:.10g}" for place in _PLACES)]
            rows.append(",".join([*cells, f"{output.energy:.8f}"] if self.table_energies else cells))
        return "\n".join(rows) + "\n"


def real_set(folder: Path) -> StrainSet:
    """A run folder of real outputs, or packed files LABEL.NAME.xz beside the manifest as in tests/data."""
    plan = load_plan(folder)
    files = {}
    for job in plan.jobs:
        place = folder / job_folder(job.label)
        sources = sorted(place.iterdir()) if place.is_dir() else sorted(folder.glob(f"{job.label}.*"))
        for path in sources:
            name = path.name if place.is_dir() else path.name.removeprefix(f"{job.label}.")
            data = lzma.decompress(path.read_bytes()) if name.endswith(".xz") else path.read_bytes() if path.is_file() else b""
            name = name.removesuffix(".xz")
            name = name if place.is_dir() else f"output.{name}"
            if data and not name.endswith((".gpw", ".traj", ".nc", ".log")):
                files[f"{job_folder(job.label)}/{name}"] = data.decode("utf-8", "replace")
    words = {"Program PWSCF": "qe", "of ABINIT": "abinit", "CP2K|": "cp2k", "gpaw": "gpaw"}
    text = "".join(files.values())
    return StrainSet(folder.name, next(name for word, name in words.items() if word in text), plan, files=files)


def synthetic_set(laue: str, seed: int, kind: str = "xyz") -> StrainSet:
    """A lawful set of a Laue class whose plan, size, reference stress, noise and axes follow from the seed."""
    rng = np.random.default_rng([seed, sum(map(ord, laue))])
    plan = _plan(laue, int(rng.integers(4)), int(rng.integers(2)))
    linear = published_law(plan)
    start = np.zeros((3, 3))
    if rng.random() < 0.5:
        start = _averaged(_symmetric(rng), plan.symmetry.rotations) * 10 ** rng.uniform(-2, 0)
    law, density = _third_order(plan, linear, start, rng)
    noise = 10 ** rng.uniform(np.log10(5e-4), np.log10(3e-2))
    answer = _atoms_answer(plan, rng) * (rng.random() < 0.7)
    size = np.sqrt(np.mean([np.mean((law(j.strain) - start) ** 2) for j in plan.strain_set if j.shape]))
    work = np.mean([abs(density(j.strain)) for j in plan.strain_set if j.shape]) * plan.crystal.volume / EV_PER_A3_IN_GPA
    tidy, base = rng.random() < 0.5, -rng.uniform(100, 9000)
    outputs = {}
    for job in plan.strain_set:
        error = _symmetric(rng) * noise * size
        if tidy:
            error = _averaged(error, [r for r in plan.symmetry.rotations if np.allclose(r @ job.strain @ r.T, job.strain)])
        stress = cauchy_from_pk2(law(job.strain) + error, job.gradient)
        energy = base + density(job.strain) * plan.crystal.volume / EV_PER_A3_IN_GPA + rng.normal() * 0.05 * noise * work
        turn = np.eye(3) if kind == "table" else random_rotation(rng)
        cell = plan.crystal.deformed(turn @ job.gradient)
        cell = replace(cell, positions=cell.positions + np.einsum("iajk,jk->ia", answer, job.strain))
        forces = rng.normal(scale=3e-5, size=cell.positions.shape)
        outputs[job.label] = Output(cell, turn @ stress @ turn.T, float(energy), forces - forces.mean(0))
    return StrainSet(f"{laue}~{seed}", kind, plan, outputs, law=law, table_energies=bool(rng.random() < 0.6))


@cache
def _plan(laue: str, choice: int, turned: int) -> Plan:
    """Fewest, fewest at two magnitudes, symmetric, symmetric at a half percent; in standard or in other axes and basis."""
    rng = np.random.default_rng(turned)
    crystal = conventional(laue)
    if turned:
        crystal = rewritten(crystal, random_rotation(rng), random_unimodular(rng), rng.permutation(len(crystal.numbers)))
    wishes = (
        Wish(magnitudes=(0.01,)),
        Wish(magnitudes=(0.005, 0.01)),
        Wish(aim="symmetric", magnitudes=(0.01,)),
        Wish(aim="symmetric", magnitudes=(0.005,)),
    )
    return plan_run(crystal, wishes[choice], atoms="affine")


def _symmetric(rng: np.random.Generator) -> np.ndarray:
    """Random symmetric (3, 3) whose Mandel components have unit variance."""
    matrix = rng.normal(size=(3, 3))
    return np.diag(np.diag(matrix)) + (np.triu(matrix, 1) + np.triu(matrix, 1).T) / 2**0.5


def _averaged(matrix: np.ndarray, rotations: np.ndarray | list[np.ndarray]) -> np.ndarray:
    return np.mean([r @ matrix @ r.T for r in rotations], axis=0)


def _third_order(plan: Plan, linear: Callable, start: np.ndarray, rng: np.random.Generator) -> tuple[Callable, Callable]:
    """Stress law and energy density (GPa) with cubic energy c <(A_R : eta)^3>, A_R the images of one random matrix."""
    images = np.array([r @ (np.eye(3) + 0.5 * _symmetric(rng)) @ r.T for r in plan.symmetry.rotations])
    strength = -float(rng.uniform(0, 0.5)) * np.trace(linear(np.eye(3))) / 9

    def law(strain: np.ndarray) -> np.ndarray:
        along = np.einsum("rij,ij->r", images, strain)
        return start + linear(strain) + 3 * strength * np.einsum("r,rij->ij", along**2, images) / len(images)

    def density(strain: np.ndarray) -> float:
        along = np.einsum("rij,ij->r", images, strain)
        return float((start * strain).sum() + (linear(strain) * strain).sum() / 2 + strength * np.mean(along**3))

    return law, density


def _atoms_answer(plan: Plan, rng: np.random.Generator) -> np.ndarray:
    """(n, 3, 3, 3): fractional displacement of each atom per strain, made to obey the space group."""
    crystal: Crystal = plan.crystal
    with spglib_raises():
        data = spglib.get_symmetry((crystal.lattice, crystal.positions, crystal.numbers), symprec=1e-4)
    field_ = rng.normal(scale=0.3, size=(len(crystal.numbers), 3, 3, 3))
    lattice, inverse = crystal.lattice, np.linalg.inv(crystal.lattice)
    total = np.zeros_like(field_)
    for rotation, shift in zip(data["rotations"], data["translations"], strict=True):
        turned = crystal.positions @ rotation.T + shift
        gaps = turned[:, None] - crystal.positions[None]
        target = np.abs(gaps - np.round(gaps)).sum(-1).argmin(1)
        cartesian = lattice.T @ rotation @ inverse.T
        total[target] += np.einsum("ab,ibkl,mk,nl->iamn", rotation, field_, cartesian, cartesian)
    total /= len(data["rotations"])
    return (total - total.mean(0)) / 10.0


__all__ = ["COLUMNS", "MANIFEST", "Output", "StrainSet", "real_set", "synthetic_set"]
