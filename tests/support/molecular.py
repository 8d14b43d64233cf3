"""Molecular crystals for tests: published structures written from memory, and molecules of ASE's G2 collection in boxes.

Urea: S. Swaminathan, B. M. Craven & R. K. McMullan, Acta Cryst. B 40, 300 (1984), 12 K, from memory. Solid CO2: see
`support.files`. ND4Cl phase IV (CsCl-like, P-43m): N-D about 1.03 A, a about 3.85 A, from memory of the literature. Ammonia
(P2_13): J. W. Reed & P. M. Harris, J. Chem. Phys. 35, 1730 (1961), with N-H made 1.01 A, from memory.
"""

from __future__ import annotations

import numpy as np
from ase import Atoms
from ase.build import molecule
from ase.spacegroup import crystal

from strainkit.crystal.crystal import Crystal


def dry_ice() -> Crystal:
    """CO2, Pa-3, four molecules: carbons on corners and face centres, so that most molecules cross faces."""
    atoms = crystal(["C", "O"], [(0, 0, 0), (0.1185, 0.1185, 0.1185)], spacegroup=205, cellpar=[5.624] * 3 + [90] * 3)
    return Crystal.from_atoms(atoms, "dry_ice")


def urea() -> Crystal:
    """CO(NH2)2, P-42_1m, two molecules on mm2 sites."""
    sites = {
        "C": [(0, 0.5, 0.3260)],
        "O": [(0, 0.5, 0.5953)],
        "N": [(0.1459, 0.6459, 0.1766)],
        "H": [(0.2575, 0.7575, 0.2827), (0.1441, 0.6441, -0.0380)],
    }
    symbols = [symbol for symbol, places in sites.items() for _ in places]
    basis = [place for places in sites.values() for place in places]
    atoms = crystal(symbols, basis, spacegroup=113, cellpar=[5.565, 5.565, 4.684, 90, 90, 90])
    return Crystal.from_atoms(atoms, "urea")


def ammonia() -> Crystal:
    """NH3, P2_13, four molecules on threefold axes."""
    nitrogen = np.full(3, 0.2107)
    along = np.ones(3) / 3**0.5
    across = np.array([1.0, -1.0, 0.0]) / 2**0.5
    # N-H 1.01 A, H-N-H 107 deg: the hydrogens form a triangle of 1.624 A, 0.938 A from the axis, 0.375 A along it
    hydrogen = nitrogen + (0.375 * along + 0.938 * across) / 5.13
    atoms = crystal(["N", "H"], [nitrogen, hydrogen], spacegroup=198, cellpar=[5.13] * 3 + [90] * 3)
    return Crystal.from_atoms(atoms, "ammonia")


def ammonium_chloride() -> Crystal:
    """NH4Cl, P-43m: ammonium and chloride ions."""
    x = 1.03 / 3**0.5 / 3.85
    atoms = crystal(["N", "H", "Cl"], [(0, 0, 0), (x, x, x), (0.5, 0.5, 0.5)], spacegroup=215, cellpar=[3.85] * 3 + [90] * 3)
    return Crystal.from_atoms(atoms, "ammonium_chloride")


def boxed(atoms: Atoms, margin: float = 7.0) -> Crystal:
    """Any group of atoms alone in a cell, `margin` angstrom between its images."""
    atoms = Atoms(atoms.numbers, atoms.positions)  # no magnetic moments: these would silence doubts about electrons
    atoms.set_cell(np.diag(np.ptp(atoms.positions, axis=0) + margin))
    atoms.center()
    atoms.pbc = True
    return Crystal.from_atoms(atoms, "boxed")


def side_by_side(names: list[str], spacing: float = 7.5) -> Crystal:
    """Molecules of ASE's G2 collection in a row, too far apart to touch."""
    together = Atoms()
    for place, name in enumerate(names):
        one = molecule(name)
        one.translate(np.array([spacing * place, 0.0, 0.0]) - one.positions.mean(axis=0))
        together += one
    return boxed(together)
