"""Cells in: CIF, POSCAR, extended XYZ by content or name, and every format ASE reads when it is named."""

from __future__ import annotations

import re
import warnings
from dataclasses import replace
from io import StringIO
from pathlib import Path
from typing import Any

import numpy as np

from strainkit.crystal.cif import crystal_from_cif
from strainkit.crystal.contacts import refuse_coincident
from strainkit.crystal.crystal import Crystal
from strainkit.crystal.outputs import OUTPUTS, OWN, Output, recognise_output, relaxation_doubts
from strainkit.errors import InputError, StrainkitError
from strainkit.findings import Finding, finding

__all__ = ["crystal_name", "is_always_called", "is_called_a_cell", "read_crystal"]

#: file-name endings whose meaning is beyond doubt -> ASE format
_ENDINGS = {
    ".vasp": "vasp",
    ".poscar": "vasp",
    ".extxyz": "extxyz",
    ".xyz": "extxyz",
    ".traj": "traj",
    ".cell": "castep-cell",
    ".gen": "gen",
    ".xsf": "xsf",
    ".res": "res",
}
_NAMES = {"POSCAR": "vasp", "CONTCAR": "vasp"}
#: outputs that job scripts number, and those that a program always calls the same
_JOB_OUTPUT = re.compile(r"(pw|abinit|castep|aims|vasp)-\d+\.\w+|strainkit-1\.restart|returned\.extxyz|OUTCAR|vasprun\.xml")


def read_crystal(path: str | Path, format: str | None = None) -> Crystal:
    """Read one crystal.

    Parameters
    ----------
    path : path
        Structure file. The last frame counts where there are several.
    format : str, optional
        "cif", "poscar", "extxyz" or the name of any ASE format; guessed from content and name when left out.

    Returns
    -------
    Crystal
        In the file's own setting and orientation, nothing standardised.

    Raises
    ------
    InputError
        With the file's name and the remedy.
    """
    path = Path(path)
    if path.is_dir():
        raise InputError("a folder, not a structure file", path, "Name the file inside it.")
    try:
        raw = path.read_bytes()
    except OSError as error:
        raise InputError(error.strerror or "cannot be read", path, "Check the path and its permissions.") from None
    if not raw.strip():
        raise InputError("the file is empty", path)
    text = raw.decode("utf-8", errors="replace")
    format = {"poscar": "vasp"}.get(format, format) if format else _guess(path, text)
    kind = next((kind for kind in OUTPUTS if kind.ase_format == format), None)
    if format == "cif":
        crystal = crystal_from_cif(text, path)
    elif kind is not None:
        crystal = _from_output(path, text, kind)
    else:
        crystal = _through_ase(path, text, format)
    refuse_coincident(crystal)
    return crystal


def _from_output(path: Path, text: str, kind: Output) -> Crystal:
    """The last cell of a program's output, with a finding when the run did not end well."""
    if kind.ase_format in OWN:
        try:
            lattice, positions, numbers = OWN[kind.ase_format](text)
        except (ValueError, IndexError, KeyError) as error:
            raise InputError(f"not readable as {kind.ase_format}: {error}", path) from None
        crystal = Crystal(lattice, positions, np.array(numbers), name=crystal_name(path), source=str(path))
    else:
        crystal = _through_ase(path, text, kind.ase_format)
    return replace(crystal, remarks=(*crystal.remarks, *relaxation_doubts(kind, text, str(path))))


def _guess(path: Path, text: str) -> str:
    head = text.splitlines()[:2]
    if any(line.lower().startswith("_cell_length_a") for line in map(str.strip, text.splitlines())):
        return "cif"
    if len(head) == 2 and head[0].strip().isdigit() and "lattice=" in head[1].lower():
        return "extxyz"
    kind = recognise_output(text)
    if kind is not None:
        return kind.ase_format
    for name, format in _NAMES.items():
        if path.name.upper().startswith(name):
            return format
    if path.suffix.lower() == ".cif":
        return "cif"
    if path.suffix.lower() in _ENDINGS:
        return _ENDINGS[path.suffix.lower()]
    raise InputError(
        "cannot tell what kind of file this is", path, "Name its format with --read-as (cif, poscar, extxyz, any ASE one)."
    )


def _through_ase(path: Path, text: str, format: str) -> Crystal:
    from ase import Atoms
    from ase.io.formats import UnknownFileTypeError

    remarks: tuple[Finding, ...] = ()
    try:
        try:
            atoms = _ase_atoms(path, format)
        except KeyError as error:  # ASE knows no element D
            plain = re.sub(r"(?m)(?<!\S)D(?!\S)", "H", text)
            if error.args != ("D",) or plain == text:
                raise
            atoms = _ase_atoms(StringIO(plain), format)
            remarks = (finding("deuterium", str(path), "deuterium is treated as hydrogen"),)
    except UnknownFileTypeError:
        raise InputError(f"unknown format {format!r}", path, "Use cif, poscar, extxyz or a format name of ASE.") from None
    except StrainkitError:
        raise
    except (Exception, StopIteration) as error:
        reason = " ".join(str(error).split())[:200] or type(error).__name__
        raise InputError(f"not readable as {format}: {reason}", path) from None
    if not isinstance(atoms, Atoms):
        raise InputError(f"no structure found when read as {format}", path)
    return replace(Crystal.from_atoms(atoms, name=crystal_name(path), source=str(path)), remarks=remarks)


def _ase_atoms(source: Path | StringIO, format: str) -> Any:
    from ase.io import read

    with warnings.catch_warnings():
        warnings.simplefilter("ignore")  # remarks of ASE's readers to their developers
        return read(source, format=format, index=-1)


def crystal_name(path: Path) -> str:
    """Name of a crystal after its file, or after the folder of a file that is always called the same."""
    if is_always_called(path):
        return path.parent.name or "crystal"
    # what follows the dot of POSCAR.AlN tells it from others, and is no ending
    whole = path.name.upper().startswith(tuple(f"{name}." for name in _NAMES)) and path.suffix.lower() not in (
        ".cif",
        *_ENDINGS,
    )
    return (path.name if whole else path.name.split(".")[0]) or "crystal"


def is_always_called(path: Path) -> bool:
    """Is this a file of a kind that is called the same for every crystal (POSCAR, pw-1.out), so that its folder names it?"""
    return path.name.upper() in _NAMES or _JOB_OUTPUT.fullmatch(path.name) is not None


def is_called_a_cell(path: Path) -> bool:
    """Does the name alone say that this is a structure file (cell.cif, POSCAR_AlN, pw-1.out), and no editor's old copy?"""
    name = path.name.upper()
    known = name.startswith(tuple(_NAMES)) or path.suffix.lower() in (".cif", *_ENDINGS) or is_always_called(path)
    return known and not name.endswith("~")
