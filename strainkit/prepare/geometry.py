"""Input geometry of the programs as text. Lengths in angstrom, fractional coordinates, lattice vectors as rows.

Atoms of one element with different magnetic moments are different kinds, named Fe1, Fe2, ... in order of appearance;
without moments a kind is named by its element. `lattice_lines` and `Kind` serve the decks too.
"""

from __future__ import annotations

from collections import Counter
from dataclasses import dataclass
from itertools import groupby

import numpy as np

from strainkit.crystal.crystal import Crystal
from strainkit.tensors.arrays import FloatArray

__all__ = [
    "Kind",
    "abinit_text",
    "aims_text",
    "atom_kinds",
    "castep_text",
    "cif_text",
    "cp2k_text",
    "numbers",
    "poscar_text",
    "qe_text",
    "siesta_text",
]


@dataclass(frozen=True)
class Kind:
    """Atoms that a program treats alike: name, chemical symbol, atomic number, mass (u), moment (Bohr magnetons)."""

    name: str
    symbol: str
    number: int
    mass: float
    moment: float


def atom_kinds(crystal: Crystal) -> tuple[list[Kind], list[int]]:
    """Kinds in order of appearance, and the index of every atom's kind."""
    from ase.data import atomic_masses

    moments = np.zeros(len(crystal.numbers)) if crystal.magnetic_moments is None else crystal.magnetic_moments
    keys = list(zip(crystal.symbols, map(float, moments), map(int, crystal.numbers), strict=True))
    distinct = list(dict.fromkeys(keys))
    several = Counter(symbol for symbol, _, _ in distinct)
    seen: Counter[str] = Counter()
    kinds = []
    for symbol, moment, number in distinct:
        seen[symbol] += 1
        name = symbol if several[symbol] == 1 else f"{symbol}{seen[symbol]}"
        kinds.append(Kind(name, symbol, number, float(atomic_masses[number]), moment))
    return kinds, [distinct.index(key) for key in keys]


#: 16 decimals: 16 or more significant digits for lengths above 1 A
_ROW = "%20.16f %20.16f %20.16f"


def numbers(values: FloatArray) -> str:
    """Three numbers on one line with 16 decimals."""
    return _ROW % tuple(np.asarray(values).tolist())


def _lines(rows: FloatArray, pattern: str) -> list[str]:
    """Lines from rows (n, 3), three numbers each, and a pattern of n lines: one formatting call is several times faster."""
    return (pattern % tuple(rows.ravel().tolist())).split("\n")


def _lattice(crystal: Crystal, before: tuple[str, ...] = ("", "", "")) -> list[str]:
    return [f"{word}{numbers(row)}" for word, row in zip(before, crystal.lattice, strict=True)]


def poscar_text(crystal: Crystal, title: str) -> str:
    """VASP 5 POSCAR; species blocks repeat where the order of the atoms asks for it."""
    runs = [(symbol, len(list(group))) for symbol, group in groupby(crystal.symbols)]
    lines = [title, "1.0", *_lattice(crystal)]
    lines += [" ".join(symbol for symbol, _ in runs), " ".join(str(count) for _, count in runs), "Direct"]
    lines += _lines(crystal.positions, "\n".join([_ROW] * len(crystal.numbers)))
    return "\n".join(lines) + "\n"


def cif_text(crystal: Crystal, title: str) -> str:
    """P1 CIF with every atom; labels are made unique by a number."""
    keys = ("length_a", "length_b", "length_c", "angle_alpha", "angle_beta", "angle_gamma")
    lines = [f"# {title}", "data_strained_cell"]
    lines += [f"_cell_{key} {value:.14f}" for key, value in zip(keys, crystal.cell_lengths_angles, strict=True)]
    lines += ["_space_group_name_H-M_alt 'P 1'", "loop_", "_space_group_symop_operation_xyz", "'x, y, z'", "loop_"]
    lines += [f"_atom_site_{key}" for key in ("label", "type_symbol", "fract_x", "fract_y", "fract_z", "occupancy")]
    seen: Counter[str] = Counter()
    sites = []
    for symbol in crystal.symbols:
        seen[symbol] += 1
        sites.append(f"{symbol}{seen[symbol]} {symbol} %.16f %.16f %.16f 1.0")
    lines += _lines(crystal.positions, "\n".join(sites))
    return "\n".join(lines) + "\n"


def qe_text(crystal: Crystal, title: str) -> str:
    """Cards CELL_PARAMETERS and ATOMIC_POSITIONS of pw.x (with ibrav = 0)."""
    kinds, index = atom_kinds(crystal)
    lines = [f"! {title}", "CELL_PARAMETERS angstrom", *_lattice(crystal), "ATOMIC_POSITIONS crystal"]
    lines += [f"{kinds[k].name:4s} {numbers(row)}" for k, row in zip(index, crystal.positions, strict=True)]
    return "\n".join(lines) + "\n"


def abinit_text(crystal: Crystal, title: str) -> str:
    """Variables natom to xred of ABINIT, with spinat for a magnetic crystal."""
    kinds, index = atom_kinds(crystal)
    lines = [f"# {title}", "acell 1.0 1.0 1.0 angstrom", "rprim", *_lattice(crystal)]
    lines += [f"natom {len(index)}", f"ntypat {len(kinds)}", f"znucl {' '.join(str(k.number) for k in kinds)}"]
    lines += ["typat", *(" ".join(str(k + 1) for k in index[at : at + 20]) for at in range(0, len(index), 20))]
    lines += ["xred", *(numbers(row) for row in crystal.positions)]
    if crystal.magnetic_moments is not None:
        lines += ["spinat", *(f"0.0 0.0 {moment:.6f}" for moment in crystal.magnetic_moments)]
    return "\n".join(lines) + "\n"


def cp2k_text(crystal: Crystal, title: str) -> str:
    """Sections CELL and COORD of CP2K, for inclusion in SUBSYS."""
    kinds, index = atom_kinds(crystal)
    lines = [f"# {title}", "&CELL", *_lattice(crystal, ("  A ", "  B ", "  C ")), "  PERIODIC XYZ", "&END CELL"]
    lines += ["&COORD", "  SCALED"]
    lines += [f"  {kinds[k].name:4s} {numbers(row)}" for k, row in zip(index, crystal.positions, strict=True)]
    return "\n".join([*lines, "&END COORD"]) + "\n"


def castep_text(crystal: Crystal, title: str) -> str:
    """Blocks LATTICE_CART and POSITIONS_FRAC of a CASTEP cell file, with SPIN for a magnetic crystal."""
    lines = [f"# {title}", "%BLOCK LATTICE_CART", "ang", *_lattice(crystal), "%ENDBLOCK LATTICE_CART"]
    spins = [""] * len(crystal.numbers)
    if crystal.magnetic_moments is not None:
        spins = [f" SPIN={moment:.6f}" for moment in crystal.magnetic_moments]
    rows = zip(crystal.symbols, crystal.positions, spins, strict=True)
    lines += ["%BLOCK POSITIONS_FRAC", *(f"{symbol:2s} {numbers(row)}{spin}" for symbol, row, spin in rows)]
    return "\n".join([*lines, "%ENDBLOCK POSITIONS_FRAC"]) + "\n"


def aims_text(crystal: Crystal, title: str) -> str:
    """geometry.in of FHI-aims, with initial_moment for a magnetic crystal."""
    lines = [f"# {title}", *_lattice(crystal, ("lattice_vector ",) * 3)]
    for number, (symbol, row) in enumerate(zip(crystal.symbols, crystal.positions, strict=True)):
        lines.append(f"atom_frac {numbers(row)} {symbol}")
        if crystal.magnetic_moments is not None:
            lines.append(f"initial_moment {crystal.magnetic_moments[number]:.6f}")
    return "\n".join(lines) + "\n"


def siesta_text(crystal: Crystal, title: str) -> str:
    """FDF fragment of SIESTA from NumberOfAtoms to the coordinates, with DM.InitSpin for a magnetic crystal."""
    symbols = list(dict.fromkeys(crystal.symbols))
    atomic = dict(zip(crystal.symbols, crystal.numbers, strict=True))
    lines = [f"# {title}", f"NumberOfAtoms {len(crystal.numbers)}", f"NumberOfSpecies {len(symbols)}"]
    lines += ["%block ChemicalSpeciesLabel", *(f"{i} {atomic[s]} {s}" for i, s in enumerate(symbols, 1))]
    lines += ["%endblock ChemicalSpeciesLabel", "LatticeConstant 1.0 Ang", "%block LatticeVectors", *_lattice(crystal)]
    lines += ["%endblock LatticeVectors", "AtomicCoordinatesFormat Fractional", "%block AtomicCoordinatesAndAtomicSpecies"]
    lines += [f"{numbers(row)} {symbols.index(s) + 1}" for s, row in zip(crystal.symbols, crystal.positions, strict=True)]
    lines.append("%endblock AtomicCoordinatesAndAtomicSpecies")
    if crystal.magnetic_moments is not None:
        spins = [f"{i} {moment:.6f}" for i, moment in enumerate(crystal.magnetic_moments, 1)]
        lines += ["%block DM.InitSpin", *spins, "%endblock DM.InitSpin"]
    return "\n".join(lines) + "\n"
