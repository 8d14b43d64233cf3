"""Distances between atoms that cannot be right."""

from __future__ import annotations

import numpy as np

from strainkit.crystal.crystal import Crystal
from strainkit.crystal.molecules import Molecules
from strainkit.crystal.neighbours import Neighbours, is_metal
from strainkit.crystal.pairs import close_pairs
from strainkit.errors import InputError
from strainkit.findings import Finding, finding
from strainkit.tensors.arrays import BoolArray, FloatArray, IntArray

__all__ = ["judge_contacts", "refuse_coincident"]

#: two atoms closer than this are one atom written twice, angstrom
COINCIDENT = 0.2
#: bonds shorter than this part of the sum of the covalent radii exist nowhere (N2 0.77, C2H2 0.79, uranyl 0.68, Cr-Cr 0.66)
SHORTEST_BOND = 0.70
SHORTEST_METAL_BOND = 0.60
#: hydrogens of nonmetals come no closer than this to each other, angstrom (1.5 in water, 1.6 in CH2)
CLOSEST_HYDROGENS = 1.3
#: nonmetals of two molecules come no closer than this part of the sum of their van der Waals radii (Bondi)
CLOSEST_MOLECULES = 0.65
_ORGANIC = (6, 7, 8, 9, 14, 15, 16, 17, 35)
#: most bonds to nonmetals of an atom that has no metal or boron about it
_MOST_BONDS = {1: 2, 6: 4, 7: 4, 8: 3, 9: 2}


def refuse_coincident(crystal: Crystal) -> None:
    """Refuse a crystal in which atoms sit on top of each other.

    Raises
    ------
    InputError
        Two atoms closer than 0.2 A, with their names.
    """
    found = close_pairs(crystal.lattice, crystal.positions, np.full(len(crystal.numbers), 0.5 * COINCIDENT))
    mine = np.flatnonzero(found.first <= found.second)
    if not len(mine):
        return
    pairs = [(int(found.first[k]), int(found.second[k]), found.lengths[k]) for k in mine]
    texts = [f"{crystal.sites((i,))} and {crystal.sites((j,))} ({length:.2g} A)" for i, j, length in pairs]
    more = f" and {len(texts) - 4} more" if len(texts) > 4 else ""
    raise InputError(
        f"atoms on top of each other: {', '.join(dict.fromkeys(texts[:4]))}{more}",
        crystal.source or crystal.name,
        "Keep one of each pair; atoms on faces, edges and corners of the cell are listed once.",
    )


def judge_contacts(crystal: Crystal, found: Neighbours, molecules: Molecules) -> list[Finding]:
    """Atoms too close to each other, or with too many neighbours, as findings with sites and numbers."""
    doubts = []
    once = found.first <= found.second
    close = np.flatnonzero(once & (_short_bonds(crystal, found) | _close_hydrogens(crystal, found)))
    touching = np.flatnonzero(once & _touching_molecules(crystal, found, molecules))
    for pairs, words in ((close, "closer than any bond"), (touching, "different molecules")):
        if len(pairs):
            pairs = pairs[np.argsort(found.lengths[pairs], kind="stable")]
            atoms = [int(atom) for k in pairs for atom in (found.first[k], found.second[k])]
            doubts.append(finding("atoms-too-close", crystal.sites(atoms), f"{_pairs_text(crystal, found, pairs)}: {words}"))
    crowded = _crowded(crystal.numbers, found.bonds)
    if crowded:
        texts = [f"{crystal.sites((atom,))} has {count} bonds" for atom, count in crowded.items()]
        texts = list(dict.fromkeys(texts))
        more = f" and {len(texts) - 4} more" if len(texts) > 4 else ""
        doubts.append(finding("atoms-too-close", crystal.sites(crowded), f"too many neighbours: {', '.join(texts[:4])}{more}"))
    return doubts


def _pairs_text(crystal: Crystal, found: Neighbours, pairs: IntArray) -> str:
    texts = []
    for k in pairs:
        one, other = crystal.sites((found.first[k],)), crystal.sites((found.second[k],))
        texts.append(f"{one} to {other} {found.lengths[k]:.2f} A")
    texts = list(dict.fromkeys(texts))
    return ", ".join(texts[:4]) + (f" and {len(texts) - 4} more" if len(texts) > 4 else "")


def _short_bonds(crystal: Crystal, found: Neighbours) -> BoolArray:
    from ase.data import covalent_radii

    radii = covalent_radii[crystal.numbers]
    metal = is_metal(crystal.numbers)
    share = np.where(metal[found.first] | metal[found.second], SHORTEST_METAL_BOND, SHORTEST_BOND)
    return np.asarray(found.lengths < share * (radii[found.first] + radii[found.second]))


def _close_hydrogens(crystal: Crystal, found: Neighbours) -> BoolArray:
    """Two hydrogens too close to each other that are no H2 molecule and bind no metal."""
    numbers = crystal.numbers
    bonds = found.bonds
    metal = is_metal(numbers)
    binds_metal, binds_other = np.zeros(len(numbers), dtype=bool), np.zeros(len(numbers), dtype=bool)
    np.logical_or.at(binds_metal, bonds.first, metal[bonds.second])
    np.logical_or.at(binds_other, bonds.first, numbers[bonds.second] != 1)
    both = (numbers[found.first] == 1) & (numbers[found.second] == 1)
    crowd = np.bincount(bonds.first[numbers[bonds.second] == 1], minlength=len(numbers)) > 1
    odd = binds_other | (crowd & bool((numbers != 1).any()))
    free = ~(binds_metal[found.first] | binds_metal[found.second])
    return np.asarray(both & (found.lengths < CLOSEST_HYDROGENS) & free & (odd[found.first] | odd[found.second]))


def _touching_molecules(crystal: Crystal, found: Neighbours, molecules: Molecules) -> BoolArray:
    """Unbonded organic atoms of different molecules, or of different images of one, that are too close."""
    from ase.data.vdw import vdw_radii

    organic = np.isin(crystal.numbers, _ORGANIC) & molecules.movable
    both = organic[found.first] & organic[found.second] & ~found.bonded
    same_part = molecules.part[found.first] == molecules.part[found.second]
    same_image = (molecules.images[found.first] + found.shifts == molecules.images[found.second]).all(axis=1)
    sums: FloatArray = (
        np.nan_to_num(vdw_radii)[crystal.numbers[found.first]] + np.nan_to_num(vdw_radii)[crystal.numbers[found.second]]
    )
    return np.asarray(both & ~(same_part & same_image) & (found.lengths < CLOSEST_MOLECULES * sums))


def _crowded(numbers: IntArray, bonds: Neighbours) -> dict[int, int]:
    """Atoms with more bonds than their element can have, and how many."""
    metal = is_metal(numbers) | (numbers == 5)
    exempt = np.zeros(len(numbers), dtype=bool)
    np.logical_or.at(exempt, bonds.first, metal[bonds.second])
    counts = np.bincount(bonds.first, minlength=len(numbers))
    return {
        int(i): int(counts[i])
        for i in np.flatnonzero(~exempt)
        if counts[i] > _MOST_BONDS.get(int(numbers[i]), 99)
        # elements under pressure and toy crystals pack their atoms as they like
        and (numbers[bonds.second[bonds.first == i]] != numbers[i]).any()
    }
