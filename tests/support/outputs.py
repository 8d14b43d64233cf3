"""The real outputs kept under tests/data/outputs, and slow ways to read their numbers that share nothing with the readers."""

from __future__ import annotations

import lzma
import re
from functools import cache
from pathlib import Path

import numpy as np

OUTPUTS = Path(__file__).parents[1] / "data" / "outputs"
#: CODATA 2018, typed in: Hartree and Rydberg in eV, bohr in A
HARTREE, BOHR = 27.211386245988, 0.529177210903


@cache
def content(name: str) -> bytes:
    """Unpacked bytes of qe/relaxed.out and the like."""
    return lzma.decompress((OUTPUTS / f"{name}.xz").read_bytes())


def unpack(name: str, folder: Path) -> Path:
    """A copy in a folder, under its own name."""
    path = folder / Path(name).name
    path.write_bytes(content(name))
    return path


def _after(text: str, heading: str, skip: int, count: int) -> list[list[str]]:
    lines = text.rsplit(heading, 1)[1].split("\n")[1:]
    return [re.sub(r"[|*=,\[\]()]", " ", line).split() for line in lines[skip : skip + count]]


def _floats(rows: list[list[str]], first: int, last: int | None = None) -> np.ndarray:
    return np.array([[float(word) for word in row[first:last]] for row in rows])


def slow_qe(name: str) -> dict[str, np.ndarray | float]:
    """Stress from the kbar columns (the reader takes the other three), energy from the sum of the last line with a !."""
    text = content(name).decode()
    energy = [line.split()[-2] for line in text.splitlines() if line.startswith("!")][-1]
    count = int(re.search(r"atoms/cell += +(\d+)", text)[1])
    return {
        "stress": -0.1 * _floats(_after(text, "total   stress", 0, 3), 3),
        "energy": float(energy) * HARTREE / 2,
        "forces": _floats(_after(text, "Forces acting on atoms", 1, count), -3) * HARTREE / 2 / BOHR,
    }


def slow_abinit(name: str) -> dict[str, np.ndarray | float]:
    """Stress in GPa, forces in eV/A, energy in eV as ABINIT itself converts them; none of these is read by the reader."""
    text = content(name).decode()
    numbers = [float(x) for x in re.findall(r"= +(\S+E[+-]\d\d)", text.rsplit("stress tensor (GPa)", 1)[1][:400])[1:7]]
    xx, yz, yy, xz, zz, xy = numbers
    count = int(re.search(r"natom = +(\d+)", text)[1])
    return {
        "stress": np.array([[xx, xy, xz], [xy, yy, yz], [xz, yz, zz]]),
        "energy": float(re.findall(r"total_energy_eV +: +(\S+)", text)[-1]),
        "forces": _floats(_after(text, "cartesian forces (eV/Angstrom) at end:", 0, count), 1),
        "positions": _floats(_after(text, "reduced coordinates (array xred)", 0, count), 0),
        "lattice": _floats(_after(text, "lattice_vectors:", 0, 3), 1) * BOHR,
    }


def slow_cp2k(name: str) -> dict[str, np.ndarray | float]:
    text = content(name).decode()
    return {
        "stress": -_floats(_after(text, "STRESS| Analytical stress tensor [GPa]", 1, 3), -3),
        "energy": float(re.findall(r"ENERGY\|.*: +(\S+)", text)[-1]) * HARTREE,
        "forces": _floats(_after(text, "ATOMIC FORCES in", 2, 2), 3) * HARTREE / BOHR,
    }


def slow_gpaw(name: str) -> dict[str, np.ndarray | float]:
    """Both kinds of text; 1 eV/A^3 = 160.2176634 GPa (exact since 2019)."""
    text = content(name).decode()
    new = "gpaw26" in name
    stress, forces, skip = ("Stress tensor  # eV/Ang^3", "Forces  # eV/Ang", 2) if new else ("STRESS", "Forces in eV/Ang:", 0)
    text = text.replace("Stress tensor:\n", "STRESS\n")
    pulls = _after(text, forces + "\n", skip - 1, 2) if new else _after(text, forces, 0, 2)
    return {
        "stress": _floats(_after(text, stress, skip, 3), 0) * 160.2176634,
        "energy": float(re.findall(r"Free energy: +(\S+)", text)[-1]),
        "forces": _floats([row[:3] for row in pulls] if new else [row[2:] for row in pulls], 0),
        "lattice": np.array([[0, 2.7512, 2.7512], [2.7375, 0.0137, 2.7375], [2.7375, 2.7375, 0.0137]]),
    }
