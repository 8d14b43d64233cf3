"""Blind fault injector: faults that live in the numbers, for synthetic and for real sets alike.

Written from the list of faults and from the documented meaning of the finding codes alone, without knowledge of how `collect`
judges. Sizes and choices are "common practice, no source". A fault changes a set in place and says which jobs it touched and
which codes name it; None when it cannot be made in that set.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, replace

import numpy as np
from scipy.spatial.transform import Rotation

from strainkit.run.plan import job_folder
from support.blind.sets import StrainSet
from support.blind.text import editor
from support.crystals import random_rotation


@dataclass(frozen=True)
class Injected:
    """What was done: the jobs that are wrong, the codes whose documented meaning is this fault, and a note with the size.

    `whole`: it is the whole set, so a finding need not name a job. `remedy`: option and values that mend a table.
    `numbers_only`: nothing but the values of stresses and energies could show it.
    """

    labels: tuple[str, ...]
    codes: frozenset[str]
    note: str
    whole: bool = False
    remedy: tuple[str, str] | None = None
    numbers_only: bool = False


Fault = Callable[[StrainSet, np.random.Generator, frozenset[str]], Injected | None]
#: name -> (fault, kinds of sets it can be made in)
NUMBERS: dict[str, tuple[Fault, frozenset[str]]] = {}
EVERY, CELLS, SYNTHETIC = frozenset(("xyz", "table", "real")), frozenset(("xyz", "real")), frozenset(("xyz",))


def fault(name: str, kinds: frozenset[str] = EVERY) -> Callable[[Fault], Fault]:
    """Register a fault."""

    def keep(function: Fault) -> Fault:
        NUMBERS[name] = (function, kinds)
        return function

    return keep


def stress_of(work: StrainSet, label: str) -> np.ndarray:
    """Stress of a job (3, 3), GPa, positive in tension, in the output's axes."""
    return editor(work, label).stress() if work.real else work.outputs[label].stress


def change_stress(work: StrainSet, label: str, change: Callable[[np.ndarray], np.ndarray]) -> None:
    """Change a job's stress wherever it is printed."""
    if work.real:
        editor(work, label).change_stress(change)
    else:
        work.outputs[label].stress = change(work.outputs[label].stress)


def pick(work: StrainSet, rng: np.random.Generator, taken: frozenset[str], strained: bool = False) -> str | None:
    """A random job that no other fault has touched."""
    free = [x for x in work.labels[int(strained) :] if x not in taken]
    return str(rng.choice(free)) if free else None


def scope(work: StrainSet, rng: np.random.Generator, taken: frozenset[str], how: str) -> tuple[str, ...]:
    """Jobs of a fault: one, some (two up to half of the strained ones, or all of one shape) or all."""
    free = [x for x in work.labels if x not in taken]
    if not free or (how == "some" and len(free) < 3):
        return ()
    if how == "all":
        return tuple(free) if len(free) == len(work.labels) else ()
    if how == "one":
        return (str(rng.choice(free)),)
    shapes = {job.label: job.shape for job in work.plan.strain_set}
    if rng.random() < 0.4:
        shape = rng.choice(sorted({s for s in shapes.values() if s}))
        return tuple(x for x in free if shapes[x] == shape)
    most = max(2, len(work.labels) // 2)
    return tuple(sorted(rng.choice(free, min(len(free) - 1, int(rng.integers(2, most + 1))), replace=False).tolist()))


#: matrices (3, 3) of places: what a reader makes of xx yy zz yz xz xy in another order
def _order(name: str) -> Callable[[np.ndarray], np.ndarray]:
    def change(s: np.ndarray) -> np.ndarray:
        yz, xz, xy = s[1, 2], s[0, 2], s[0, 1]
        diagonal = [s[0, 0], s[1, 1], s[2, 2]]
        if name == "zz xx yy":
            diagonal, (yz, xz, xy) = diagonal[1:] + diagonal[:1], (xz, xy, yz)
        else:
            yz, xz, xy = {"xy yz xz": (xy, yz, xz), "xy xz yz": (xy, xz, yz), "xz yz xy": (xz, yz, xy)}[name]
        return np.array([[diagonal[0], xy, xz], [xy, diagonal[1], yz], [xz, yz, diagonal[2]]])

    return change


_ORDERS = ("xy yz xz", "xy xz yz", "xz yz xy", "zz xx yy")
_UNITS = {"kbar": 10.0, "eV/A^3": 1 / 160.21766, "MPa": 1000.0, "": 0.1, " ": 160.21766, "  ": 1e-3}


def _spread(how: str) -> None:
    """Sign, unit, order and axes, for one job, some jobs or the whole set."""

    @fault(f"sign, {how}")
    def sign(work: StrainSet, rng: np.random.Generator, taken: frozenset[str]) -> Injected | None:
        labels = scope(work, rng, taken, how)
        for label in labels:
            change_stress(work, label, lambda s: -s)
        return _done(work, labels, {"stress-sign"}, "stress negated", how, ("--stress-sign", "compression"))

    @fault(f"unit, {how}")
    def unit(work: StrainSet, rng: np.random.Generator, taken: frozenset[str]) -> Injected | None:
        labels, name = scope(work, rng, taken, how), str(rng.choice(list(_UNITS)))
        for label in labels:
            change_stress(work, label, lambda s: s * _UNITS[name])
        remedy = ("--stress-unit", name) if name.strip() else None
        return _done(work, labels, {"stress-unit"}, f"stress times {_UNITS[name]:.5g}", how, remedy)

    @fault(f"order, {how}")
    def order(work: StrainSet, rng: np.random.Generator, taken: frozenset[str]) -> Injected | None:
        labels, name = scope(work, rng, taken, how), str(rng.choice(_ORDERS))
        for label in labels:
            change_stress(work, label, _order(name))
        return _done(work, labels, {"stress-order"}, f"components taken as {name}", how, ("--stress-order", ""))

    @fault(f"axes, {how}")
    def axes(work: StrainSet, rng: np.random.Generator, taken: frozenset[str]) -> Injected | None:
        labels = scope(work, rng, taken, how)
        common = random_rotation(rng) if rng.random() < 0.6 else Rotation.from_euler("z", 90.0, degrees=True).as_matrix()
        for label in labels:
            turn = common
            if work.kind == "xyz" and rng.random() < 0.5:  # a along x, b in the xy plane, as many programs do
                a, b = work.outputs[label].cell.lattice[:2]
                x, z = a / np.linalg.norm(a), np.cross(a, b) / np.linalg.norm(np.cross(a, b))
                turn = np.array([x, np.cross(z, x), z])
            change_stress(work, label, lambda s, turn=turn: turn @ s @ turn.T)
        return _done(work, labels, {"stress-frame"}, "stress in turned axes", how, None)


def _done(
    work: StrainSet, labels: tuple[str, ...], codes: set[str], note: str, how: str, remedy: tuple[str, str] | None
) -> Injected | None:
    whole = 2 * len(labels) > len(work.labels)  # which side is wrong is then a matter of words
    return Injected(labels, frozenset(codes), note, whole, remedy if how == "all" else None, True) if labels else None


for _how in ("one", "some", "all"):
    _spread(_how)


@fault("stress of another job")
def same_stress(work: StrainSet, rng: np.random.Generator, taken: frozenset[str]) -> Injected | None:
    """The stress of one job, sometimes with its energy, copied into another."""
    label = pick(work, rng, taken)
    other = pick(work, rng, taken | {label or ""})
    if label is None or other is None:
        return None
    value = stress_of(work, other)
    if work.kind == "xyz":  # the numbers of the table, or the very file's
        turns = [np.linalg.solve(work.plan.crystal.deformed(j.gradient).lattice, work.outputs[j.label].cell.lattice).T
                 for j in work.plan.strain_set if j.label in (label, other)]  # fmt: skip
        turns = turns if work.labels.index(label) < work.labels.index(other) else turns[::-1]
        value = turns[0] @ turns[1].T @ value @ turns[1] @ turns[0].T if rng.random() < 0.5 else value
        if rng.random() < 0.5:
            work.outputs[label].energy = work.outputs[other].energy
    change_stress(work, label, lambda s: value)
    return Injected((label,), frozenset(("identical-outputs",)), f"stress of {other}")


@fault("energy jump")
def energy_jump(work: StrainSet, rng: np.random.Generator, taken: frozenset[str]) -> Injected | None:
    """The energy of one job off by 1 meV to 5 eV, the stress with it half of the time (another minimum)."""
    label = pick(work, rng, taken)
    if label is None or (work.kind == "table" and not work.table_energies):
        return None
    jump = float(rng.choice((-1, 1))) * 10 ** rng.uniform(-3, 0.7)
    if work.real:
        editor(work, label).change_energy(jump)
    else:
        work.outputs[label].energy += jump
    if rng.random() < 0.5:
        _disturb(work, label, rng, 10 ** rng.uniform(-2, 0))
        return Injected((label,), frozenset(("energy-jump", "ions-elsewhere")), f"energy {jump:+.3g} eV and another stress",
                        numbers_only=True)  # fmt: skip
    return Injected((label,), frozenset(("energy-jump",)), f"energy {jump:+.3g} eV", numbers_only=True)


def _disturb(work: StrainSet, label: str, rng: np.random.Generator, size: float) -> None:
    """Add a random stress of a given size, as a part of the largest stress change in the set."""
    here = [x for x in work.labels if work.real or (x in work.outputs and work.outputs[x].stress is not None)]
    present = [stress_of(work, x) for x in here]
    largest = max(np.abs(s).max() for s in present if np.isfinite(s).all())
    noise = rng.normal(size=(3, 3)) * size * largest / 2
    change_stress(work, label, lambda s: s + noise + noise.T)


@fault("ions in another minimum", CELLS)
def other_minimum(work: StrainSet, rng: np.random.Generator, taken: frozenset[str]) -> Injected | None:
    """One atom 0.05 to 0.8 A elsewhere, with the energy and stress of that place."""
    label = pick(work, rng, taken)
    if label is None:
        return None
    step, drop = rng.normal(size=3), -(10 ** rng.uniform(-3, -0.5))
    step *= 10 ** rng.uniform(-1.3, -0.1) / np.linalg.norm(step)
    if work.real:
        if not editor(work, label).move_atom(step, rng):
            return None
        editor(work, label).change_energy(drop)
    else:
        output = work.outputs[label]
        positions = output.cell.positions.copy()
        positions[rng.integers(len(positions))] += np.linalg.solve(output.cell.lattice.T, step)
        output.cell, output.energy = replace(output.cell, positions=positions), output.energy + drop
    _disturb(work, label, rng, 10 ** rng.uniform(-2, -0.3))
    return Injected((label,), frozenset(("ions-elsewhere", "energy-jump")), f"an atom moved {np.linalg.norm(step):.2f} A")


@fault("not a number")
def not_a_number(work: StrainSet, rng: np.random.Generator, taken: frozenset[str]) -> Injected | None:
    """NaN or infinity in the stress (or energy), as the program prints them."""
    label = pick(work, rng, taken)
    if label is None:
        return None
    value, place = float(rng.choice((np.nan, np.inf, -np.inf))), rng.integers(3, size=2)
    if not work.real and work.outputs[label].energy is not None and rng.random() < 0.25 and (work.kind != "table"):
        work.outputs[label].energy = value
        return Injected((label,), frozenset(("job-broken", "unreadable-output")), f"{value} in the energy")
    hole = np.zeros((3, 3))
    hole[place[0], place[1]] = hole[place[1], place[0]] = value
    change_stress(work, label, lambda s: s + hole)
    return Injected((label,), frozenset(("job-broken", "unreadable-output")), f"{value} in the stress")


@fault("reference missing")
def no_reference(work: StrainSet, rng: np.random.Generator, taken: frozenset[str]) -> Injected | None:
    """The reference job never ran, or its output is an empty file."""
    label = work.labels[0]
    if label in taken:
        return None
    empty = rng.random() < 0.5
    if work.kind != "real" and not work.real:
        work.outputs.pop(label)
        if empty and work.kind == "xyz":
            work.files[f"{job_folder(label)}/returned.extxyz.empty"] = ""
    else:
        editor(work, label).remove(empty)
    return Injected((label,), frozenset(("reference-missing",)), "empty output" if empty else "no output", whole=True)
