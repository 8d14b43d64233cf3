"""Relaxed cells out of the outputs of programs, so that the output of a variable-cell run can be given as CELL.

Each kind is recognised by its content. Quantum ESPRESSO, VASP, CASTEP and FHI-aims are read through ASE; ABINIT here, since ASE
ignores acell, and CP2K from the restart file that it leaves (its output rounds the cell).
"""

from __future__ import annotations

import re
from collections.abc import Callable
from dataclasses import dataclass

import numpy as np

from strainkit.findings import Finding, finding
from strainkit.tensors.arrays import FloatArray

__all__ = ["OUTPUTS", "OWN", "Output", "recognise_output", "relaxation_doubts"]

#: characters in which a file says what it is
_HEAD = 4096


@dataclass(frozen=True)
class Output:
    """One kind of output that holds a cell.

    Attributes
    ----------
    program : str
    words : tuple of str
        All of them stand in the first characters.
    ase_format : str
        Name of the format; a key of `OWN`, or one of ase.io.read.
    ended : pattern or None
        Found in every run that ended and converged; None where the file does not say.
    failed : pattern or None
        Found in runs that did not converge.
    """

    program: str
    words: tuple[str, ...]
    ase_format: str
    ended: re.Pattern[str] | None = None
    failed: re.Pattern[str] | None = None


OUTPUTS: tuple[Output, ...] = (
    Output(
        "Quantum ESPRESSO",
        ("Program PWSCF",),
        "espresso-out",
        re.compile(r"JOB DONE\."),
        re.compile(r"convergence NOT achieved|maximum number of steps has been reached"),
    ),
    Output(
        "ABINIT",
        ("ABINIT", ".Version"),
        "abinit-out",
        re.compile(r"Calculation completed"),
        re.compile(r"was not enough SCF cycles to converge|not enough Broyd/MD steps to converge"),
    ),
    Output("VASP", ("<modeling>", "vasp"), "vasp-xml", re.compile(r"</modeling>\s*\Z")),
    Output("VASP", ("vasp.", "executed on"), "vasp-out", re.compile(r"reached required accuracy")),
    Output(
        "CASTEP",
        ("CCC   AA    SSS  TTTTT  EEEEE  PPPP",),
        "castep-castep",
        re.compile(r"Total time\s*="),
        re.compile(r"Geometry optimization failed to converge|has not converged"),
    ),
    Output(
        "FHI-aims",
        ("FHI-aims",),
        "aims-output",
        re.compile(r"Present geometry is converged"),
        re.compile(r"cycle not converged"),
    ),
    Output(
        "FHI-aims",
        ("| Number of atoms ", "| Number of spin channels "),
        "aims-output",
        re.compile(r"Present geometry is converged"),
        re.compile(r"cycle not converged"),
    ),
    Output("CP2K restart", ("&GLOBAL", "&MOTION", "STEP_START_VAL"), "cp2k-restart"),
)


Cell = tuple[FloatArray, FloatArray, list[int]]


def recognise_output(text: str) -> Output | None:
    """The kind of output that a text is, None when it is none."""
    head = text[:_HEAD]
    return next((kind for kind in OUTPUTS if all(word in head for word in kind.words)), None)


def relaxation_doubts(kind: Output, text: str, source: str) -> tuple[Finding, ...]:
    """A finding when the run that the cell comes from did not end or did not converge."""
    if kind.ended is not None and not kind.ended.search(text):
        why = f"no sign in this {kind.program} output that the run ended and converged: its last cell is taken"
    elif kind.failed is not None and kind.failed.search(text):
        why = f"this {kind.program} run did not converge: its last cell is taken"
    else:
        return ()
    return (finding("relaxation-unfinished", source, why),)


def abinit_cell(text: str) -> Cell:
    """Lattice (3, 3) in angstrom, fractional positions (n, 3) and atomic numbers of the last step of an ABINIT output.

    Raises
    ------
    ValueError
        When the output holds no such thing.
    """
    from ase.units import Bohr

    number = r"[-+]?\d+\.\d+(?:[EeDd][-+]\d+)?"
    row = rf"\s+{number}\s+{number}\s+{number}"
    lattices = re.findall(rf"\(rprimd\) \[bohr\]\n((?:{row}[ \t]*\n){{3}})", text)
    positions = re.findall(rf"Reduced coordinates \(xred\)\n((?:{row}[ \t]*\n)+)", text)
    kinds = re.search(r"^\s+typat\s+((?:\d+\s+)+)", text, re.M)
    charges = re.search(rf"^\s+znucl\s+((?:{number}\s+)+)", text, re.M)
    if not positions or kinds is None or charges is None:
        raise ValueError("no positions of a relaxation step in it")
    numbers = [round(float(charges[1].split()[int(kind) - 1])) for kind in kinds[1].split()]
    if lattices:
        lattice = np.array(lattices[-1].split(), dtype=float).reshape(3, 3) * Bohr
    else:
        rows = re.findall(rf"R\([123]\)=\s*({number})\s+({number})\s+({number})", text)
        if len(rows) < 3:
            raise ValueError("no lattice vectors in it")
        lattice = np.array(rows[-3:], dtype=float) * Bohr
    return lattice, np.array(positions[-1].split(), dtype=float).reshape(-1, 3), numbers


def cp2k_cell(text: str) -> Cell:
    """Lattice (3, 3) in angstrom, fractional positions (n, 3) and atomic numbers in a restart file of CP2K.

    Raises
    ------
    ValueError
        When the file holds no such thing.
    """
    from ase.data import atomic_numbers

    cell = re.search(r"&CELL\s*\n((?:\s+[ABC]\s.*\n){3})", text)
    block = re.search(r"&COORD\s*\n(.*?)&END COORD", text, re.S)
    if cell is None or block is None:
        raise ValueError("no CELL and COORD sections in it")
    elements = dict(re.findall(r"&KIND\s+(\S+)\n(?:(?!&END KIND).*\n)*?\s+ELEMENT\s+(\S+)", text))
    lattice = np.array([line.split()[1:4] for line in cell[1].splitlines()], dtype=float)
    rows = [line.split() for line in block[1].splitlines()]
    atoms = [row for row in rows if len(row) >= 4]
    places = np.array([row[1:4] for row in atoms], dtype=float)
    scaled = any(row[:1] == ["SCALED"] and row[1:2] != ["F"] for row in rows)
    numbers = [atomic_numbers[elements.get(row[0], row[0])] for row in atoms]
    return lattice, places if scaled else places @ np.linalg.inv(lattice), numbers


#: format -> reader of text, for the outputs that are read here
OWN: dict[str, Callable[[str], Cell]] = {"abinit-out": abinit_cell, "cp2k-restart": cp2k_cell}
