"""Readers: a table of programs, each recognised by content, with its marks and with where it prints each number.

No number is believed before the job's end and its convergence were seen; what is damaged, hostile or not the program's
is an InputError with a reason, never a traceback.
"""

from __future__ import annotations

from pathlib import Path
from typing import Any

import numpy as np

from strainkit.collect.programs import (
    abinit,
    aims,
    castep,
    cp2k,
    espresso,
    gpaw_new,
    gpaw_text,
    outcar,
    siesta,
    through_ase,
    vasprun,
)
from strainkit.collect.programs.through_ase import atoms_from_copy, atoms_from_text, last_frame
from strainkit.collect.returned import Geometry, Reader, Returned, Stress
from strainkit.collect.source import Source, file_head, read_source
from strainkit.errors import InputError

__all__ = ["READERS", "Reader", "Returned", "read_returned", "recognise"]


def _has(*words: bytes) -> Any:
    return lambda head: all(word in head for word in words)


def _columns(module: Any) -> dict[str, Any]:
    """The columns of a program that has a module of its own."""
    names = ("recognises", "load", "geometry", "stress", "energy", "forces", "settings", "version", "doubts")
    marks = {"end_mark": module.END_MARK, "bad_marks": module.BAD_MARKS}
    return {name: getattr(module, name) for name in names} | marks


_ASE: dict[str, Any] = {
    "geometry": through_ase.geometry,
    "stress": through_ase.stress,
    "energy": through_ase.energy,
    "forces": through_ase.forces,
}
#: of formats that hold whatever the script that wrote them had at that moment
_MUTE = _ASE | {"tells_relaxed": False}


def _extxyz(head: bytes) -> bool:
    lines = head.split(b"\n", 2)
    return len(lines) > 1 and lines[0].strip().isdigit() and b"lattice=" in lines[1].lower()


def _starts(word: bytes) -> Any:
    return lambda head: head.startswith(word)


def _json(head: bytes) -> bool:
    return head.lstrip().startswith(b"{") and b'"1":' in head and b'"calculator' in head


def _pickle(head: bytes) -> bool:
    """Protocols 2 to 5, whose first operation is never a zero byte as in a record of Fortran, or ASE's old trajectories."""
    modern = len(head) > 2 and head[0] == 0x80 and 2 <= head[1] <= 5 and head[2] != 0
    return modern or head.startswith(b"PickleTrajectory")


def _refuse_pickle(source: Source) -> Any:
    raise ValueError("a pickle can run any program when it is opened; return one of the other formats")


#: in the order in which they are tried, and preferred when a folder holds several kinds
READERS: tuple[Reader, ...] = (
    Reader("extended XYZ", _extxyz, last_frame, **_ASE, doubts=through_ase.doubts, checked="run"),
    Reader("VASP vasprun.xml", **_columns(vasprun), checked="real"),
    Reader("VASP OUTCAR", **_columns(outcar), checked="real"),
    Reader("Quantum ESPRESSO", **_columns(espresso), checked="run"),
    Reader("ABINIT", **_columns(abinit), checked="run"),
    Reader("CP2K", **_columns(cp2k), checked="run"),
    Reader("FHI-aims", **_columns(aims), checked="real"),
    Reader("CASTEP", **_columns(castep), checked="real"),
    Reader("SIESTA", **_columns(siesta)),
    Reader("CASTEP geom", _has(b"BEGIN header", b"END header"), atoms_from_text("castep-geom"), **_MUTE),
    Reader("GPAW gpw", lambda head: head[:12].lower() == b"- of ulmgpaw", atoms_from_copy("gpw"), **_MUTE, checked="run"),
    Reader("ASE trajectory", _starts(b"- of UlmASE-Trajectory"), atoms_from_copy("traj"), **_MUTE, checked="run"),
    Reader("ASE database", _starts(b"SQLite format 3\0"), atoms_from_copy("db"), **_MUTE, checked="run"),
    Reader("ASE JSON", _json, atoms_from_text("json"), **_MUTE, checked="run"),
    Reader("GPAW text, new", **_columns(gpaw_new), tells_relaxed=False, checked="run"),
    Reader("GPAW text", **_columns(gpaw_text), tells_relaxed=False, checked="run"),
    Reader("pickle", _pickle, _refuse_pickle, **_ASE),
)


def recognise(path: Path) -> Reader | None:
    """The reader of a file, by its content, unpacked if need be; None for anything that is not a program's output."""
    head = file_head(path)
    return next((reader for reader in READERS if reader.recognises(head)), None)


def read_returned(path: Path, reader: Reader, within: Path | None = None) -> Returned:
    """Read one output file.

    Parameters
    ----------
    path : path
        The file, plain or packed with gzip, xz or bzip2.
    reader : Reader
        Its kind, from `recognise`.
    within : path, optional
        Folder out of which no symbolic link may lead.

    Raises
    ------
    InputError
        When it cannot be parsed; the message says why.
    """
    source = read_source(path, within)
    problems: list[tuple[str, str]] = []
    try:
        try:
            loaded = reader.load(source)
        finally:
            problems += _marks(reader, source.free_text if reader.end_mark or reader.bad_marks else "")
        if isinstance(run := getattr(loaded, "text", loaded), str):
            problems = _marks(reader, run)  # of the last run in the file
        return _assemble(reader, loaded, problems)
    except Exception as error:  # damaged files make the libraries below raise anything
        if problems:
            raise InputError(problems[0][1], path) from None
        reason = " ".join(str(error).split())[:200] or type(error).__name__
        raise InputError(f"not readable as {reader.program}: {reason}", path) from None


def _marks(reader: Reader, text: str) -> list[tuple[str, str]]:
    """The end-of-job mark that is missing and the bad marks that are there."""
    problems = [(status, message) for mark, status, message in reader.bad_marks if mark.search(text)]
    if reader.end_mark is not None and not reader.end_mark.search(text):
        problems.insert(0, ("unfinished", f"the {reader.program} output has no end-of-job mark"))
    return problems


def _assemble(reader: Reader, loaded: Any, problems: list[tuple[str, str]]) -> Returned:
    geometry = reader.geometry(loaded)
    _check(geometry)
    stress, energy, forces = reader.stress(loaded), reader.energy(loaded), reader.forces(loaded)
    for doubt in reader.doubts(loaded):
        if not any(message.startswith(doubt[1]) for _, message in problems):  # "ions not relaxed: too few steps" says more
            problems.append(doubt)
    if stress is None:
        problems.append(("unfinished", "no stress in the output"))
    else:
        problems += _disagreement(stress)
    if energy is None and reader.end_mark is not None and not problems:
        problems.append(("broken", "no energy in the output"))
    if energy is not None and not np.isfinite(energy):
        problems.append(("broken", "the energy is not a finite number"))
    if forces is not None and (forces.shape != geometry.positions.shape or not np.isfinite(forces).all()):
        problems.append(("broken", "the forces are not finite numbers, one row an atom"))
        forces = None
    finite = stress is not None and bool(np.isfinite(stress.value).all())
    return Returned(
        program=reader.program,
        lattice=geometry.lattice,
        positions=geometry.positions,
        numbers=geometry.numbers,
        stress=stress.value if stress is not None and finite else None,
        energy=energy if energy is not None and np.isfinite(energy) else None,
        forces=forces,
        problems=tuple(problems),
        version=reader.version(loaded),
        settings=reader.settings(loaded),
        stress_repeat=stress.repeat if stress is not None and finite else None,
        lattice_precision=geometry.precision,
        positions_known=geometry.positions_known,
    )


def _check(geometry: Geometry) -> None:
    """ValueError for what is no crystal."""
    if not (np.isfinite(geometry.lattice).all() and np.isfinite(geometry.positions).all()):
        raise ValueError("the cell or the positions are not finite numbers")
    lengths = np.linalg.norm(geometry.lattice, axis=1)
    if lengths.min() <= 0 or abs(np.linalg.det(geometry.lattice)) < 1e-3 * np.prod(lengths):
        raise ValueError("the cell has no volume")
    if geometry.positions.shape != (len(geometry.numbers), 3) or not len(geometry.numbers):
        raise ValueError("no atoms, or not three coordinates each")


def _disagreement(stress: Stress) -> list[tuple[str, str]]:
    if not np.isfinite(stress.value).all():
        return [("broken", "the stress is not a finite number")]
    if stress.repeat is None:
        return []
    apart = float(np.abs(stress.value - stress.repeat).max())
    if apart <= stress.rounding:
        return []
    return [("broken", f"the stress is printed twice and differs by {apart:.3g} GPa")]
