"""Extended XYZ at full precision: cells for programs that read it, and results in strainkit's own exchange file.

A result is `returned.extxyz`: the lattice, one line an atom (forces in eV/A when known) and, in the comment line, `energy`
(the free energy that belongs to the forces, eV) and `stress` of nine numbers, eV/A^3, positive in tension.
"""

from __future__ import annotations

import re
from collections.abc import Mapping
from pathlib import Path

import numpy as np

from strainkit.crystal.crystal import Crystal
from strainkit.tensors.arrays import FloatArray

__all__ = ["RETURNED", "extxyz_text", "recorded_engine"]

#: name of the exchange file in a job folder
RETURNED = "returned.extxyz"


def _value(value: object) -> str:
    if isinstance(value, bool | np.bool_):
        return "T" if value else "F"
    if isinstance(value, int | float | np.number):
        return repr(value.item() if isinstance(value, np.number) else value)
    text = " ".join(repr(float(x)) for x in value.ravel()) if isinstance(value, np.ndarray) else str(value)
    return '"' + text.replace('"', "'").replace("\n", " ") + '"'


def extxyz_text(crystal: Crystal, info: Mapping[str, object], forces: FloatArray | None = None) -> str:
    """One frame.

    Parameters
    ----------
    crystal : Crystal
    info : mapping
        Further key=value pairs of the comment line: numbers, truth values, arrays or text.
    forces : (n, 3), optional
        eV/A.
    """
    columns: list[FloatArray] = [crystal.positions @ crystal.lattice]
    properties = "species:S:1:pos:R:3"
    if crystal.magnetic_moments is not None:
        properties += ":initial_magmoms:R:1"
        columns.append(crystal.magnetic_moments[:, None])
    if forces is not None:
        properties += ":forces:R:3"
        columns.append(forces)
    pairs = {"Lattice": crystal.lattice, "Properties": properties, "pbc": "T T T", **info}
    head = " ".join(f"{key}={text if key == 'Properties' else _value(text)}" for key, text in pairs.items())
    rows = np.hstack(columns)
    lines = [f"{s:2s} " + " ".join(f"{x:.16g}" for x in row) for s, row in zip(crystal.symbols, rows, strict=True)]
    return "\n".join([str(len(rows)), head, *lines]) + "\n"


def recorded_engine(path: Path) -> str | None:
    """What an exchange file says about the engine that made it (its `engine` key); None when it says nothing or is gone."""
    try:
        with path.open(encoding="utf-8", errors="replace") as file:
            head = [next(file, "") for _ in range(2)][1]
    except OSError:
        return None
    found = re.search(r'\bengine="([^"]*)"', head)
    return found[1] if found else None
