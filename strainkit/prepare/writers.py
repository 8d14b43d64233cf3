"""Cell writers: a table of formats, one file a job, 16 significant digits, atom order kept.

Our own writers cover CIF, POSCAR, extended XYZ and the programs that have a deck or are met often. A few more come from
ASE and phonopy, where these keep order and precision. Not offered, because the strain in the file would not be the
planned one or the atoms would be in another order (measured on a triclinic cell with ASE 3.29 and phonopy 4.10): CFG,
ONETEP, XDATCAR and the RES family (strain wrong by 1e-10 to 1e-7), LAMMPS, V_sim and CAR (frame lost), Elk, exciting and
ABACUS through phonopy (atoms sorted by element).
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass

import numpy as np

from strainkit.crystal.crystal import Crystal
from strainkit.errors import InputError, UsageError
from strainkit.findings import Finding, finding
from strainkit.prepare.borrowed import crystal_text, gen_text, pwmat_text, xsf_text
from strainkit.prepare.geometry import (
    abinit_text,
    aims_text,
    castep_text,
    cif_text,
    cp2k_text,
    poscar_text,
    qe_text,
    siesta_text,
)
from strainkit.run.extxyz import extxyz_text

__all__ = ["FORMATS", "CellFormat", "cell_formats", "default_formats", "format_findings", "write_cell"]


@dataclass(frozen=True)
class CellFormat:
    """How one format is written.

    Attributes
    ----------
    file_name : str
        Name inside a job folder.
    write : callable
        Text of a crystal; the second argument is a title of one line.
    of : str
        What reads it.
    keeps_orientation : bool
        False where a file holds cell lengths and angles only, so that the Cartesian frame is the reader's choice.
    keeps_moments : bool
        Whether magnetic moments go into the file; a magnetic crystal is refused otherwise.
    right_handed : bool
        Whether its program refuses left-handed cells.
    """

    file_name: str
    write: Callable[[Crystal, str], str]
    of: str
    keeps_orientation: bool = True
    keeps_moments: bool = False
    right_handed: bool = False


def _extxyz(crystal: Crystal, title: str) -> str:
    return extxyz_text(crystal, {"title": title})


#: format name -> how it is written
FORMATS: dict[str, CellFormat] = {
    "poscar": CellFormat("POSCAR", poscar_text, "VASP and many others"),
    "cif": CellFormat("cell.cif", cif_text, "viewers and many programs", keeps_orientation=False),
    "extxyz": CellFormat("cell.extxyz", _extxyz, "ASE and many others", keeps_moments=True),
    "qe": CellFormat("cell.pwi", qe_text, "Quantum ESPRESSO"),
    "abinit": CellFormat("cell.abi", abinit_text, "ABINIT", keeps_moments=True, right_handed=True),
    "cp2k": CellFormat("cell.inp", cp2k_text, "CP2K"),
    "castep": CellFormat("cell.cell", castep_text, "CASTEP", keeps_moments=True),
    "aims": CellFormat("geometry.in", aims_text, "FHI-aims", keeps_moments=True),
    "siesta": CellFormat("cell.fdf", siesta_text, "SIESTA", keeps_moments=True),
    "gen": CellFormat("geo.gen", gen_text, "DFTB+, through ASE"),
    "crystal": CellFormat("cell.gui", crystal_text, "CRYSTAL (external geometry), through ASE"),
    "xsf": CellFormat("cell.xsf", xsf_text, "XCrySDen and others, through ASE"),
    "pwmat": CellFormat("atom.config", pwmat_text, "PWmat, through phonopy"),
}


def cell_formats(names: Sequence[str]) -> dict[str, CellFormat]:
    """The chosen formats by name, in the order given, each once."""
    unknown = [name for name in names if name not in FORMATS]
    if unknown:
        raise UsageError(f"unknown cell format {unknown[0]!r}", "--format", f"Choose from {', '.join(FORMATS)}.")
    return {name: FORMATS[name] for name in names}


def default_formats(crystal: Crystal) -> tuple[str, ...]:
    """Formats of a crystal when none is named: those for the eye and for most programs, or the one that keeps moments."""
    return ("poscar", "cif") if crystal.magnetic_moments is None else ("extxyz",)


def write_cell(name: str, crystal: Crystal, title: str) -> str:
    """Text of a crystal in a format.

    Raises
    ------
    InputError
        When the format cannot hold the crystal's magnetic moments, or its program refuses the cell's handedness.
    """
    chosen = FORMATS[name]
    where = crystal.source or crystal.name
    if crystal.magnetic_moments is not None and not chosen.keeps_moments:
        able = ", ".join(key for key, value in FORMATS.items() if value.keeps_moments)
        raise InputError(
            f"the format {name} cannot hold the magnetic moments of this crystal", where, f"Use a --deck, or --format {able}."
        )
    if chosen.right_handed:
        refuse_left_handed(crystal, chosen.of)
    return chosen.write(crystal, " ".join(title.split()))


def refuse_left_handed(crystal: Crystal, program: str) -> None:
    """Raise an InputError when the lattice vectors are left-handed, which the program does not accept."""
    if np.linalg.det(crystal.lattice) < 0:
        raise InputError(
            f"the lattice vectors are left-handed, and {program} refuses such cells",
            crystal.source or crystal.name,
            "Exchange two lattice vectors (and the same two coordinates) in the cell file.",
        )


def format_findings(names: Sequence[str]) -> list[Finding]:
    """What to know about the chosen formats."""
    return [
        finding(
            "orientation-not-in-format",
            FORMATS[name].file_name,
            f"{name.upper()} holds cell lengths and angles only: its reader chooses the axes, and the stress comes back in "
            "those",
        )
        for name in names
        if not FORMATS[name].keeps_orientation
    ]
