"""Blind fault injector: cells of another strain, that drifted, or of another crystal (see faults)."""

from __future__ import annotations

import lzma
import re
from dataclasses import replace
from pathlib import Path

import numpy as np

from strainkit.tensors.strain import cauchy_from_pk2, gradient_from_strain
from support.blind.faults import CELLS, SYNTHETIC, Injected, fault, pick
from support.blind.sets import Output, StrainSet, synthetic_set
from support.blind.text import editor
from support.crystals import SPACE_GROUPS, random_rotation

OUTPUTS = Path(__file__).parent.parent.parent / "data" / "outputs"
#: outputs of other crystals by the same programs
FOREIGN = {
    "qe": ("qe/relaxed.out", "qe/two-species.out"),
    "abinit": ("abinit/relaxed.abo", "abinit/two-species.abo"),
    "cp2k": ("cp2k/relaxed.out", "cp2k/two-species.out"),
    "gpaw": ("gpaw/relaxed.txt", "gpaw26/relaxed.txt"),
}

#: elements of the real sets and those below them
HEAVIER = {"Si": "Ge", "O": "S", "N": "P"}


def strained_output(work: StrainSet, label: str, strain: np.ndarray, rng: np.random.Generator) -> None:
    """The job computed at another strain: cell, stress and energy all of that strain."""
    old, gradient, turn = work.outputs[label], gradient_from_strain(strain), random_rotation(rng)
    stress = cauchy_from_pk2(work.law(strain), gradient)
    cell = replace(work.plan.crystal.deformed(turn @ gradient), positions=old.cell.positions)
    work.outputs[label] = Output(cell, turn @ stress @ turn.T, old.energy, old.forces, dict(old.info))


@fault("another strain", SYNTHETIC)
def other_strain(work: StrainSet, rng: np.random.Generator, taken: frozenset[str]) -> Injected | None:
    """A cell of another size of the planned strain, of a strain with factor-of-two shear, or of the inverse."""
    label = pick(work, rng, taken, strained=True)
    if label is None:
        return None
    strain = next(job.strain for job in work.plan.strain_set if job.label == label)
    factor = float(rng.choice((0.5, 0.9, 0.98, 1.02, 1.1, 1.5, 2.0)))
    sheared = np.where(np.eye(3, dtype=bool), strain, 2 * strain)
    if rng.random() < 0.3 and not np.allclose(sheared, strain, atol=1e-4):
        strained_output(work, label, sheared, rng)
        note = "shear of twice the size"
    else:
        strained_output(work, label, factor * strain, rng)
        note = f"strain times {factor}"
    return Injected((label,), frozenset(("cell-drifted", "cell-mismatch", "output-of-other-job")), note)


@fault("cell drifted", CELLS)
def drifted(work: StrainSet, rng: np.random.Generator, taken: frozenset[str]) -> Injected | None:
    """A cell that relaxed by mistake, all the way or in part, or that is off by 1e-4 to 1e-2 in a random strain."""
    label = pick(work, rng, taken, strained=rng.random() < 0.8)
    if label is None:
        return None
    strain = next(job.strain for job in work.plan.strain_set if job.label == label)
    off = rng.normal(size=(3, 3)) * 10 ** rng.uniform(-4, -2) / 2
    target = strain * rng.choice((0.0, 0.3, 0.7)) if rng.random() < 0.5 and strain.any() else strain + off + off.T
    note = f"largest change {np.abs(target - strain).max():.2g}"
    if work.real:
        before, after = gradient_from_strain(strain), gradient_from_strain(target)
        editor(work, label).drift(after @ np.linalg.inv(before))
    else:
        strained_output(work, label, target, rng)
    return Injected((label,), frozenset(("cell-drifted", "cell-mismatch", "output-of-other-job")), note)


@fault("another crystal", SYNTHETIC)
def other_crystal(work: StrainSet, rng: np.random.Generator, taken: frozenset[str]) -> Injected | None:
    """Output of another crystal, of another composition, or with its atoms in another order."""
    label = pick(work, rng, taken)
    if label is None:
        return None
    output, way = work.outputs[label], int(rng.integers(4))
    numbers, positions = output.cell.numbers.copy(), output.cell.positions.copy()
    if way == 0:
        laue = str(rng.choice([x for x in SPACE_GROUPS if x != work.plan.symmetry.laue_class]))
        other = synthetic_set(laue, int(rng.integers(1000)))
        work.outputs[label], note = other.outputs[str(rng.choice(other.labels))], f"output of {laue}"
    else:
        if way == 1:
            numbers[numbers == 8], note = 16, "S for O"
        elif way == 2:
            numbers[rng.integers(len(numbers))], note = 9, "one atom F"
        else:
            kinds = np.flatnonzero(numbers == 12)[0], np.flatnonzero(numbers == 8)[0]
            order = np.arange(len(numbers))
            order[list(kinds)] = order[list(kinds[::-1])]
            numbers, positions, note = numbers[order], positions[order], "two atoms in another order"
        output.cell = replace(output.cell, numbers=numbers, positions=positions)
    codes = ("cell-mismatch", "cell-drifted") if way == 0 else ("cell-mismatch",)
    return Injected((label,), frozenset(codes), note)


@fault("another crystal, real output", frozenset(("real",)))
def foreign(work: StrainSet, rng: np.random.Generator, taken: frozenset[str]) -> Injected | None:
    """A finished output of another crystal by the same program, or the same output with another element in every place."""
    label = pick(work, rng, taken)
    if label is None:
        return None
    job = editor(work, label)
    if rng.random() < 0.5:
        source = str(rng.choice(FOREIGN[work.kind]))
        main = job.main
        for name in job.names:
            if name.endswith((".restart", "returned.extxyz", ".inp")):
                work.files[name] = ""
        work.files[main] = lzma.decompress((OUTPUTS / f"{source}.xz").read_bytes()).decode()
        return Injected((label,), frozenset(("cell-mismatch", "cell-drifted")), source)
    old = str(rng.choice(sorted(set(work.plan.crystal.symbols) & set(HEAVIER))))
    for name in job.names:
        text = re.sub(rf"\b{old}\b", HEAVIER[old], work.files[name])
        work.files[name] = re.sub(r"(znucl +|- )14\.00000", r"\g<1>32.00000", text)
    return Injected((label,), frozenset(("cell-mismatch",)), f"{HEAVIER[old]} for {old} in every place")
