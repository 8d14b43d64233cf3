"""Cell writers: a table of formats, one file a job, 16 significant digits, atom order kept."""

from __future__ import annotations

from collections import Counter
from collections.abc import Callable
from dataclasses import dataclass
from itertools import groupby

from strainkit.crystal.crystal import Crystal
from strainkit.errors import UsageError
from strainkit.run.extxyz import extxyz_text

__all__ = ["FORMATS", "CellFormat", "cell_formats"]


@dataclass(frozen=True)
class CellFormat:
    """How one format is written.

    Attributes
    ----------
    file_name : str
        Name inside a job folder.
    write : callable
        Text of a crystal; the second argument is a title.
    keeps_orientation : bool
        False where a file holds cell lengths and angles only, so that the Cartesian frame is the reader's choice.
    """

    file_name: str
    write: Callable[[Crystal, str], str]
    keeps_orientation: bool = True


def _poscar(crystal: Crystal, title: str) -> str:
    runs = [(symbol, len(list(group))) for symbol, group in groupby(crystal.symbols)]
    lines = [title, "1.0"]
    lines += [" ".join(f"{x:22.16f}" for x in row) for row in crystal.lattice]
    lines += [" ".join(symbol for symbol, _ in runs), " ".join(str(count) for _, count in runs), "Direct"]
    lines += [" ".join(f"{x:20.16f}" for x in row) for row in crystal.positions]
    return "\n".join(lines) + "\n"


def _cif(crystal: Crystal, title: str) -> str:
    """P1 CIF with every atom; labels are made unique by a number."""
    keys = ("length_a", "length_b", "length_c", "angle_alpha", "angle_beta", "angle_gamma")
    lines = [f"# {title}", "data_strained_cell"]
    lines += [f"_cell_{key} {value:.14f}" for key, value in zip(keys, crystal.cell_lengths_angles, strict=True)]
    lines += ["_space_group_name_H-M_alt 'P 1'", "loop_", "_space_group_symop_operation_xyz", "'x, y, z'", "loop_"]
    lines += [f"_atom_site_{key}" for key in ("label", "type_symbol", "fract_x", "fract_y", "fract_z", "occupancy")]
    seen: Counter[str] = Counter()
    for symbol, position in zip(crystal.symbols, crystal.positions, strict=True):
        seen[symbol] += 1
        lines.append(f"{symbol}{seen[symbol]} {symbol} " + " ".join(f"{x:.16f}" for x in position) + " 1.0")
    return "\n".join(lines) + "\n"


def _extxyz(crystal: Crystal, title: str) -> str:
    return extxyz_text(crystal, {"title": title})


#: format name -> how it is written
FORMATS: dict[str, CellFormat] = {
    "poscar": CellFormat("POSCAR", _poscar),
    "cif": CellFormat("cell.cif", _cif, keeps_orientation=False),
    "extxyz": CellFormat("cell.extxyz", _extxyz),
}


def cell_formats(names: list[str]) -> dict[str, CellFormat]:
    """The chosen formats by name, in the order given, each once."""
    unknown = [name for name in names if name not in FORMATS]
    if unknown:
        raise UsageError(f"unknown cell format {unknown[0]!r}", "--format", f"Choose from {', '.join(FORMATS)}.")
    return {name: FORMATS[name] for name in names}
