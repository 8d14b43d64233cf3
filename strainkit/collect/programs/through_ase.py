"""Formats that ASE reads rightly: its own, extended XYZ, CASTEP and FHI-aims; only the last configuration counts.

The content is handed over as a stream or as a copy with a harmless name: ASE takes an @ in a path for an index, and a
database is opened read-write.
"""

from __future__ import annotations

import re
import tempfile
import warnings
from collections.abc import Callable
from io import StringIO
from math import prod
from pathlib import Path
from typing import TYPE_CHECKING

import numpy as np

from strainkit.collect.returned import Geometry, Problems, Stress
from strainkit.collect.source import Source
from strainkit.collect.text import symmetric
from strainkit.tensors.arrays import FloatArray
from strainkit.units import EV_PER_A3_IN_GPA

if TYPE_CHECKING:
    from ase import Atoms

__all__ = ["atoms_from_copy", "atoms_from_text", "doubts", "energy", "forces", "geometry", "last_frame", "read_text", "stress"]


#: shape of an array in ASE's JSON and in the headers of its trajectories
_SHAPE = re.compile(rb'"(?:__)?ndarray\.?(?:__)?"\s*:\s*\[\s*\[([\d,\s]*)\]')


def read_text(text: str, format: str) -> Atoms:
    """The last configuration of a text."""
    from ase import Atoms
    from ase.io import read

    stream = StringIO(text)
    stream.name = format  # named in ASE's messages
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")  # remarks of ASE's readers to their developers
        atoms = read(stream, format=format, index=-1)
    if not isinstance(atoms, Atoms):
        raise ValueError("no structure in it")
    return atoms


def atoms_from_text(format: str) -> Callable[[Source], Atoms]:
    """Loader of a text format."""

    def load(source: Source) -> Atoms:
        _check_shapes(source.content)
        return read_text(source.free_text, format)

    return load


def last_frame(source: Source) -> Atoms:
    """Loader of extended XYZ: the last of its configurations, once the numbers it announces have been seen to be true."""
    lines = source.free_text.rstrip().split("\n")
    start, end = 0, 0
    while end < len(lines):
        start, count = end, int(lines[end])
        end += count + 2
        if count < 1 or end > len(lines):
            raise ValueError("the last configuration does not have the number of atoms that it announces")
    columns = re.search(r"Properties=\"?([\w:]+)", lines[start + 1])
    if columns and any(len(word) > 3 for word in columns[1].split(":")[2::3]):
        raise ValueError("thousands of columns an atom")
    for words in re.findall(r"\b(?:stress|virial)=[\"']([^\"']*)[\"']", lines[start + 1]):
        if len(words.split()) == 9:  # ASE keeps six of them
            _full(np.array(words.split(), dtype=float))
    return read_text("\n".join(lines[start:end]) + "\n", "extxyz")


def _check_shapes(content: bytes) -> None:
    """ValueError when an array is announced that is larger than the file."""
    for match in _SHAPE.finditer(content):
        if prod(int(word) for word in match[1].split(b",") if word.strip()) > len(content):
            raise ValueError("an array is said to be larger than the file")


def atoms_from_copy(format: str) -> Callable[[Source], Atoms]:
    """Loader of a binary format."""

    def load(source: Source) -> Atoms:
        from ase import Atoms
        from ase.io import read
        from ase.io.gpw import read_gpw

        _check_shapes(source.content)
        with tempfile.TemporaryDirectory(prefix="strainkit-") as folder, warnings.catch_warnings():
            warnings.simplefilter("ignore")
            copy = Path(folder) / f"returned.{format}"
            copy.write_bytes(source.content)
            if format == "gpw":  # ASE leaves the file open when it cannot be read
                with copy.open("rb") as file:
                    return read_gpw(file)
            atoms = read(copy, format=format, index=-1)
        if not isinstance(atoms, Atoms):
            raise ValueError("no structure in it")
        return atoms

    return load


def _result(atoms: Atoms, *names: str) -> object:
    results = atoms.calc.results if atoms.calc is not None else {}
    return next((results[name] for name in names if results.get(name) is not None), None)


def geometry(atoms: Atoms) -> Geometry:
    if not len(atoms):
        raise ValueError("no atoms in it")
    lattice = np.array(atoms.cell.array, dtype=float)
    return Geometry(lattice, atoms.get_scaled_positions(wrap=False), np.array(atoms.numbers, dtype=np.int64), 1e-8)


def stress(atoms: Atoms) -> Stress | None:
    """ASE's stress is in eV/A^3, positive in tension; virial = -V stress."""
    value = _result(atoms, "stress")
    if value is None and "virial" in atoms.info:
        value = -np.asarray(atoms.info["virial"], dtype=float) / atoms.get_volume()
    if value is None:
        return None
    return Stress(_full(np.asarray(value, dtype=float)) * EV_PER_A3_IN_GPA)


def _full(stress: FloatArray) -> FloatArray:
    """Symmetric (3, 3) from Voigt (6,) or nine numbers."""
    if stress.size == 6:
        xx, yy, zz, yz, xz, xy = stress.ravel()
        return np.array([[xx, xy, xz], [xy, yy, yz], [xz, yz, zz]])
    full = stress.reshape(3, 3)
    return symmetric(full, 1e-4 * float(np.abs(full).max()) + 1e-6) if np.isfinite(full).all() else full


def doubts(atoms: Atoms) -> Problems:
    """The word converged=F of an extended XYZ file."""
    if bool(atoms.info.get("converged", True)):
        return ()
    return (("unconverged", "the ions were not relaxed to the tolerance"),)


def energy(atoms: Atoms) -> float | None:
    value = _result(atoms, "free_energy", "energy")
    return None if value is None else float(value)  # type: ignore[arg-type]


def forces(atoms: Atoms) -> FloatArray | None:
    value = _result(atoms, "forces")
    return None if value is None else np.array(value, dtype=float)
