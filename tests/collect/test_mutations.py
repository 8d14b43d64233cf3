"""Damaged copies of real outputs: never a traceback, and no wrong stress without a problem but those explained here.

A copy is damaged in the lines that hold the numbers (four times in five) or anywhere: cut short, a piece taken out, a bit
flipped, a digit changed, two lines swapped, a line lost or doubled. It is silent when it is read without any problem though
a number differs from the intact one by more than its printed rounding.
"""

from __future__ import annotations

import random
from collections import Counter
from contextlib import suppress
from pathlib import Path

import ase.test
import numpy as np
import pytest
from ase.build import bulk
from ase.calculators.singlepoint import SinglePointCalculator
from ase.io import write as ase_write
from support.outputs import content

from strainkit.collect.readers import read_returned, recognise
from strainkit.errors import InputError

SHIPPED = Path(ase.test.__file__).parent / "testdata"
#: output -> the words between which its stress stands, its program's word for the last one
BLOCKS = {
    "qe/single.out": ("Computing stress", "init_run"),
    "qe/relaxed.out": ("Computing stress", "bfgs converged"),
    "abinit/single.abo": ("stress tensor (GPa)", "tolvrs"),
    "cp2k/single.out": ("STRESS| Analytical", "DBCSR STATISTICS"),
    "gpaw/single.txt": ("Stress tensor:\n", "Writing to"),
    "gpaw26/single.txt": ("Stress tensor  #", "Stress computation"),
    "vasp/OUTCAR_example_1": ("FORCE on cell", "VOLUME and BASIS"),
    "vasp/vasprun_pstress.xml": ('<varray name="stress"', "<time"),
    "aims/relax.out": ("Analytical stress tensor - Symm", "Energy and forces in"),
}


def original(name: str) -> bytes:
    path = SHIPPED / name
    return path.read_bytes() if path.is_file() else content(name)


def block(name: str, data: bytes) -> tuple[int, int]:
    """Where the last stress block begins and ends."""
    first, last = (word.encode() for word in BLOCKS[name])
    start = data.rindex(first)
    return start, data.index(last, start)


def cut(data: bytes, place: int, rng: random.Random) -> bytes:
    return data[:place]


def gap(data: bytes, place: int, rng: random.Random) -> bytes:
    return data[:place] + data[place + rng.randint(1, 200) :]


def bit(data: bytes, place: int, rng: random.Random) -> bytes:
    return data[:place] + bytes([data[place] ^ (1 << rng.randrange(8))]) + data[place + 1 :]


def digit(data: bytes, place: int, rng: random.Random) -> bytes:
    """The next digit becomes another one."""
    while place < len(data) - 1 and not chr(data[place]).isdigit():
        place += 1
    return data[:place] + str(rng.randrange(10)).encode() + data[place + 1 :]


def _lines(data: bytes, place: int) -> tuple[list[bytes], int]:
    return data.split(b"\n"), data.count(b"\n", 0, place)


def swap(data: bytes, place: int, rng: random.Random) -> bytes:
    lines, row = _lines(data, place)
    other = min(len(lines) - 1, row + rng.randint(1, 4))
    lines[row], lines[other] = lines[other], lines[row]
    return b"\n".join(lines)


def lose(data: bytes, place: int, rng: random.Random) -> bytes:
    lines, row = _lines(data, place)
    return b"\n".join(lines[:row] + lines[row + 1 :])


def double(data: bytes, place: int, rng: random.Random) -> bytes:
    lines, row = _lines(data, place)
    return b"\n".join([*lines[: row + 1], *lines[row:]])


#: what counts as wrong (GPa, eV, eV/A, A): two printings agree no better than the coarser, Quantum ESPRESSO's 0.01 kbar
ROUNDING = {"stress": 6.5e-4, "numbers": 0.0, "energy": 1e-9, "forces": 1e-9, "lattice": 1e-7, "positions": 1e-8}
KINDS = (cut, gap, bit, digit, swap, lose, double)


def differences(intact, returned) -> list[str]:
    """What differs by more than printed rounding."""
    found = []
    for what, rounding in ROUNDING.items():
        one, other = getattr(intact, what), getattr(returned, what)
        if one is None or other is None:  # a number that is lost is no wrong number
            continue
        if np.shape(one) != np.shape(other) or np.abs(np.subtract(one, other)).max() > rounding:
            found.append(what)
    return found


def run(name: str, count: int, path: Path) -> tuple[Counter, list[tuple[str, str, np.ndarray]]]:
    """Outcomes of `count` damaged copies, and the silent ones."""
    rng = random.Random(f"{name} {count}")
    data = original(name)
    path.write_bytes(data)
    intact = read_returned(path, recognise(path))
    assert not intact.problems
    start, end = block(name, data)
    outcomes: Counter = Counter()
    silent = []
    for number in range(count):
        kind = KINDS[number % len(KINDS)]
        place = rng.randrange(start, end) if rng.random() < 0.8 else rng.randrange(len(data) - 1)
        path.write_bytes(kind(data, place, rng))
        reader = recognise(path)
        if reader is None:
            outcomes["not recognised"] += 1
            continue
        try:
            returned = read_returned(path, reader)
        except InputError:
            outcomes["refused"] += 1
            continue
        wrong = differences(intact, returned)
        outcomes["problem" if returned.problems else "silent" if wrong else "unharmed"] += 1
        if wrong and not returned.problems:
            change = 0.0 if returned.stress is None else np.abs(returned.stress - intact.stress).max()
            silent += [(kind.__name__, what, change) for what in wrong]
    return outcomes, silent


@pytest.mark.parametrize("name", BLOCKS)
def test_every_cut_through_the_stress_is_seen(name, tmp_path):
    data = original(name)
    start, end = block(name, data)
    path = tmp_path / "cut"
    step = max(1, (end - start) // 100)
    for place in range(start, end, step):
        path.write_bytes(data[:place])
        try:
            assert read_returned(path, recognise(path)).problems, place
        except InputError:
            continue


#: numbers that a program prints once can be replaced by others of the same form: GPAW's diagonal stresses and its forces, every
#: number of vasprun.xml, the energy of the others; all other silent damage would be new
PRINTED_ONCE = {
    "gpaw26/single.txt": {"stress", "forces", "energy", "lattice", "positions"},
    "gpaw/single.txt": {"stress", "forces", "energy", "lattice", "positions"},
    "vasp/vasprun_pstress.xml": {"stress", "forces", "energy", "lattice", "positions"},
}
ELSEWHERE = {"energy", "forces", "lattice", "positions"}


def check(name: str, count: int, path: Path) -> None:
    outcomes, silent = run(name, count, path)
    print(name, dict(outcomes), dict(Counter((kind, what) for kind, what, _ in silent)))  # shown by pytest -s, for README
    assert sum(outcomes.values()) == count
    assert {what for _, what, _ in silent} <= PRINTED_ONCE.get(name, ELSEWHERE)
    assert outcomes["silent"] <= count // 6


@pytest.mark.parametrize("name", BLOCKS)
def test_damaged_copies(name, tmp_path):
    check(name, 250, tmp_path / "damaged")


@pytest.mark.slow
@pytest.mark.parametrize("name", BLOCKS)
def test_ten_thousand_damaged_copies(name, tmp_path):
    check(name, 1250, tmp_path / "damaged")


@pytest.mark.parametrize("format", ["traj", "db", "json", "extxyz", "gpw", "castep", "geom"])
def test_damaged_structure_files_never_end_in_a_traceback(format, tmp_path):
    """Formats read through ASE; no number in them is printed twice, so that only the refusals are tested."""
    whole = tmp_path / f"whole.{format}"
    if format == "gpw":
        whole.write_bytes(content("gpaw/single.gpw"))
    elif format == "castep":
        whole.write_bytes((SHIPPED / "castep" / "md.castep").read_bytes())
    else:
        atoms = bulk("Si")
        stress = np.array([0.01, 0.02, 0.03, 0.004, 0.005, 0.006])
        atoms.calc = SinglePointCalculator(atoms, energy=-10.0, stress=stress, forces=np.zeros((2, 3)))
        ase_write(whole, atoms, format={"geom": "castep-geom"}.get(format, format))
    data = whole.read_bytes()
    rng = random.Random(format)
    path = tmp_path / "damaged"
    for number in range(60):
        place = rng.randrange(min(len(data), 3000) if number % 2 else len(data))
        path.write_bytes(KINDS[number % len(KINDS)](data, min(place, len(data) - 2), rng))
        reader = recognise(path)
        if reader is not None:
            with suppress(InputError):
                read_returned(path, reader)
