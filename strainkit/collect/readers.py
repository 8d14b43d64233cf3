"""Readers: a table of programs, each recognised by content, with its end-of-job and convergence marks.

ASE parses where it is right (FHI-aims, CASTEP, Quantum ESPRESSO, VASP, its own formats); none of its readers checks that
a job ended, so that is done here, before a number is believed.
"""

from __future__ import annotations

import re
import warnings
from collections.abc import Callable, Mapping
from dataclasses import dataclass, field
from pathlib import Path
from typing import TYPE_CHECKING

import numpy as np

from strainkit.errors import InputError
from strainkit.tensors.arrays import FloatArray, IntArray
from strainkit.units import EV_PER_A3_IN_GPA

if TYPE_CHECKING:
    from ase import Atoms

__all__ = ["READERS", "Reader", "Returned", "read_returned", "recognise"]

#: bytes looked at to tell what a file is
_HEAD = 4096


@dataclass(frozen=True)
class Returned:
    """What one output file says.

    Attributes
    ----------
    program : str
        Key of the reader.
    lattice : (3, 3)
        Rows, angstrom.
    positions : (n, 3)
        Fractional.
    numbers : (n,)
        Atomic numbers.
    stress : (3, 3) or None
        Cauchy stress in the output's own frame, GPa, positive in tension.
    energy : float or None
        Free energy of the cell, eV.
    forces : (n, 3) or None
        On the atoms, eV/A, in the output's own frame and order.
    problems : tuple of (status, message)
        Why the numbers must not be used; empty for a finished, converged job.
    """

    program: str
    lattice: FloatArray
    positions: FloatArray
    numbers: IntArray
    stress: FloatArray | None
    energy: float | None
    forces: FloatArray | None
    problems: tuple[tuple[str, str], ...] = ()
    version: str = ""
    settings: Mapping[str, str | float] = field(default_factory=dict)
    stress_repeat: FloatArray | None = None
    lattice_precision: float = 1e-6


@dataclass(frozen=True)
class Reader:
    """One kind of output.

    Attributes
    ----------
    program : str
        Name in messages.
    recognises : callable
        Whether the first bytes of a file are of this kind.
    ase_format : str
        Format name for ase.io.read.
    end_mark : pattern or None
        Found in every output of a job that ended by itself; None for formats that are complete or unreadable.
    bad_marks : tuple of (pattern, status, message)
        Words that say the numbers are not converged.
    amend : callable, optional
        Mends what ASE gets wrong: (text, atoms) -> atoms.
    """

    program: str
    recognises: Callable[[bytes], bool]
    ase_format: str
    end_mark: re.Pattern[str] | None = None
    bad_marks: tuple[tuple[re.Pattern[str], str, str], ...] = ()
    amend: Callable[[str, Atoms], Atoms] | None = None


def _has(*words: bytes) -> Callable[[bytes], bool]:
    return lambda head: all(word in head for word in words)


def _extxyz(head: bytes) -> bool:
    lines = head.split(b"\n", 2)
    return len(lines) > 1 and lines[0].strip().isdigit() and b"lattice=" in lines[1].lower()


def _abinit_cell(text: str, atoms: Atoms) -> Atoms:
    """ASE ignores acell and bohr: take the lattice from the last R(1), R(2), R(3) lines, and xred with it."""
    from ase.units import Bohr

    rows = re.findall(r"R\([123]\)=\s*(\S+)\s+(\S+)\s+(\S+)", text)
    if len(rows) < 3:
        raise ValueError("no lattice vectors R(1), R(2), R(3)")
    fractions = atoms.get_scaled_positions(wrap=False)
    atoms.set_cell(np.array(rows[-3:], dtype=float) * Bohr)
    results = atoms.calc.results if atoms.calc is not None else {}
    atoms.set_scaled_positions(fractions)
    if atoms.calc is not None:
        atoms.calc.atoms = atoms.copy()
        atoms.calc.results = results
    return atoms


_NOT_CONVERGED = "electronic steps did not converge"

#: in the order in which they are tried, and preferred when a folder holds several kinds
READERS: tuple[Reader, ...] = (
    Reader(
        "extended XYZ",
        _extxyz,
        "extxyz",
        bad_marks=((re.compile(r"\bconverged=F\b"), "unconverged", "the ions were not relaxed to the tolerance"),),
    ),
    Reader("VASP vasprun.xml", _has(b"<modeling>", b"vasp"), "vasp-xml", re.compile(r"</modeling>\s*\Z")),
    Reader(
        "VASP OUTCAR",
        lambda head: head.lstrip().startswith(b"vasp."),
        "vasp-out",
        re.compile(r"General timing and accounting informations for this job"),
    ),
    Reader(
        "Quantum ESPRESSO",
        _has(b"Program PWSCF"),
        "espresso-out",
        re.compile(r"JOB DONE\."),
        (
            (re.compile(r"convergence NOT achieved"), "unconverged", _NOT_CONVERGED),
            (re.compile(r"The maximum number of steps has been reached"), "unconverged", "ions not relaxed: too few steps"),
        ),
    ),
    Reader(
        "ABINIT",
        _has(b"ABINIT", b".Version"),
        "abinit-out",
        re.compile(r"Calculation completed"),
        (
            (re.compile(r"was not enough SCF cycles to converge"), "unconverged", _NOT_CONVERGED),
            (re.compile(r"not enough Broyd/MD steps to converge"), "unconverged", "ions not relaxed: too few steps"),
        ),
        _abinit_cell,
    ),
    Reader(
        "FHI-aims",
        lambda head: b"FHI-aims" in head or _has(b"| Number of atoms ", b"| Number of spin channels ")(head),
        "aims-output",
        re.compile(r"Have a nice day\."),
        ((re.compile(r"Self-consistency cycle not converged"), "unconverged", _NOT_CONVERGED),),
    ),
    Reader(
        "CASTEP",
        _has(b"CCC   AA    SSS  TTTTT  EEEEE  PPPP"),
        "castep-castep",
        re.compile(r"Total time\s*="),
        (
            (re.compile(r"has not converged|SCF cycles performed but system has not reached"), "unconverged", _NOT_CONVERGED),
            (re.compile(r"Geometry optimization failed to converge"), "unconverged", "ions not relaxed"),
        ),
    ),
    Reader("CASTEP geom", _has(b"BEGIN header", b"END header"), "castep-geom"),
    Reader("ASE trajectory", lambda head: head.startswith(b"- of UlmASE-Trajectory"), "traj"),
    Reader("ASE database", lambda head: head.startswith(b"SQLite format 3\0"), "db"),
    Reader("ASE JSON", lambda head: head.lstrip().startswith(b"{") and b'"1":' in head and b'"calculator' in head, "json"),
)


def recognise(path: Path) -> Reader | None:
    """The reader of a file, by its content; None for anything that is not a program's output."""
    try:
        with path.open("rb") as file:
            head = file.read(_HEAD)
    except OSError:
        return None
    return next((reader for reader in READERS if reader.recognises(head)), None)


def read_returned(path: Path, reader: Reader) -> Returned:
    """Read one output file.

    Raises
    ------
    InputError
        When it cannot be parsed; the message says why.
    """
    from ase import Atoms
    from ase.io import read

    text = "" if reader.end_mark is None and not reader.bad_marks else path.read_text("utf-8", errors="replace")
    problems = []
    if reader.end_mark is not None and not reader.end_mark.search(text):
        problems.append(("unfinished", f"the {reader.program} output has no end-of-job mark"))
    problems += [(status, message) for mark, status, message in reader.bad_marks if mark.search(text)]
    try:
        with warnings.catch_warnings():
            warnings.simplefilter("ignore")  # remarks of ASE's readers to their developers
            atoms = read(path, format=reader.ase_format, index=-1)
        if not isinstance(atoms, Atoms):
            raise ValueError("no structure in it")
        if reader.amend:
            atoms = reader.amend(text, atoms)
        return _from_atoms(atoms, reader.program, problems)
    except (Exception, StopIteration) as error:
        if problems:
            raise InputError(problems[0][1], path) from None
        reason = " ".join(str(error).split())[:200] or type(error).__name__
        raise InputError(f"not readable as {reader.program}: {reason}", path) from None


def _from_atoms(atoms: Atoms, program: str, problems: list[tuple[str, str]]) -> Returned:
    results = dict(atoms.calc.results) if atoms.calc is not None else {}
    stress, forces = results.get("stress"), results.get("forces")
    if stress is None and "virial" in atoms.info:
        stress = -np.asarray(atoms.info["virial"], dtype=float).reshape(3, 3) / atoms.get_volume()
    if stress is None:
        problems.append(("unfinished", "no stress in the output"))
    elif not np.isfinite(stress).all():
        problems.append(("broken", "the stress is not a finite number"))
        stress = None
    energy = results.get("free_energy", results.get("energy"))
    return Returned(
        program=program,
        lattice=np.array(atoms.cell.array, dtype=float),
        positions=atoms.get_scaled_positions(wrap=False),
        numbers=np.array(atoms.numbers, dtype=np.int64),
        stress=None if stress is None else _full(np.asarray(stress, dtype=float)) * EV_PER_A3_IN_GPA,
        energy=None if energy is None else float(energy),
        forces=None if forces is None else np.array(forces, dtype=float),
        problems=tuple(problems),
    )


def _full(stress: FloatArray) -> FloatArray:
    """Symmetric (3, 3) from Voigt (6,) or (3, 3)."""
    if stress.shape == (6,):
        xx, yy, zz, yz, xz, xy = stress
        return np.array([[xx, xy, xz], [xy, yy, yz], [xz, yz, zz]])
    full = stress.reshape(3, 3)
    return 0.5 * (full + full.T)
