"""What is doubtful about a cell before anything is computed with it: findings with sites and numbers.

A cell that cannot be computed at all (partly occupied sites, alternatives on top of each other, atoms that coincide) is
refused with an InputError by the readers or here; everything else is said and left to the user.
"""

from __future__ import annotations

import numpy as np

from strainkit.crystal.contacts import judge_contacts, refuse_coincident
from strainkit.crystal.crystal import Crystal, lengths_angles
from strainkit.crystal.hydrogens import judge_hydrogens
from strainkit.crystal.molecules import Molecules, find_molecules
from strainkit.crystal.neighbours import find_neighbours, is_metal
from strainkit.crystal.symmetry import Symmetry
from strainkit.crystal.voids import PROBE, Voids, find_voids
from strainkit.findings import Finding, finding

__all__ = ["judge_cell", "judge_setting"]

#: a void this large holds a water molecule, A^3
NOTABLE_VOID = 40.0
#: packing coefficients of molecular crystals outside this range are implausible (Kitaigorodskii: 0.65 to 0.77; solid
#: nitrogen 0.49 and ice 0.48 by the measure used here)
PACKING = (0.40, 0.90)
#: densities outside this range belong to no solid at any pressure of interest, kg/m^3 (solid hydrogen 87, osmium 22600)
DENSITY = (80.0, 26000.0)
#: a deviation from the group smaller than this does not matter to any program, angstrom
NOTABLE_DEVIATION = 1e-5


def judge_cell(crystal: Crystal) -> tuple[Molecules, list[Finding]]:
    """The molecules of a crystal, and what is doubtful about its atoms.

    Raises
    ------
    InputError
        When atoms are on top of each other.
    """
    refuse_coincident(crystal)
    neighbours = find_neighbours(crystal)
    molecules = find_molecules(crystal, neighbours)
    return molecules, [
        *judge_contacts(crystal, neighbours, molecules),
        *judge_hydrogens(crystal, neighbours),
        *_judge_electrons(crystal, molecules),
        *_judge_parts(crystal, molecules),
        *_judge_space(crystal, molecules),
    ]


def _where(crystal: Crystal) -> str:
    return crystal.source or crystal.name


def _judge_electrons(crystal: Crystal, molecules: Molecules) -> list[Finding]:
    """Odd electron counts, of the cell and of its molecules; nothing is said about metals and magnets."""
    if is_metal(crystal.numbers).any() or crystal.magnetic_moments is not None or not molecules.movable.all():
        return []
    electrons = np.zeros(len(molecules.kinds), dtype=int)
    np.add.at(electrons, molecules.part, crystal.numbers)
    odd = [formula for formula, count in zip(molecules.formulas, electrons, strict=True) if count % 2]
    names = ", ".join(f"{odd.count(formula)} {formula}" for formula in dict.fromkeys(odd))
    total = int(crystal.numbers.sum())
    if total % 2 or len(set(odd)) == 1:
        text = f"{total} electrons in the cell, an odd count in {names}"
        reason = "radicals, ions without their counter-ions, or hydrogens missing or too many"
        return [finding("odd-electrons", _where(crystal), f"{text}: {reason}")]
    if odd:
        return [
            finding("ions-or-radicals", _where(crystal), f"an odd electron count in {names}: ions that balance, or radicals")
        ]
    return []


def _judge_parts(crystal: Crystal, molecules: Molecules) -> list[Finding]:
    """Atoms without any bond that should have one, and molecules inside a framework."""
    doubts = []
    kinds = np.array(molecules.kinds)[molecules.part]
    lone = np.flatnonzero(kinds == "unbonded")
    if len(lone):
        text = f"{len(lone)} atoms of the cell have no neighbour at bonding distance: are the lengths in angstrom?"
        doubts.append(finding("unbonded-atoms", crystal.sites(lone), text))
    inside = molecules.movable
    if inside.any() and not inside.all() and not len(lone):
        guests = ", ".join(f"{count} {formula}" for kind, formula, count in molecules.counts if kind == "molecule")
        hosts = ", ".join(f"{count} {kind}s {formula}" for kind, formula, count in molecules.counts if kind != "molecule")
        doubts.append(finding("molecules-and-network", _where(crystal), f"{guests} beside {hosts}"))
    return doubts


def _judge_space(crystal: Crystal, molecules: Molecules) -> list[Finding]:
    """Voids, packing and density."""
    voids = find_voids(crystal)
    doubts = []
    if voids.largest >= NOTABLE_VOID:
        framework = all(kind == "network" for kind in molecules.kinds)
        doubts.append(finding("open-framework" if framework else "void", _where(crystal), _void_text(crystal, voids)))
    low, high = PACKING
    helium = bool((crystal.numbers <= 2).all())
    if molecules.movable.all() and not helium and not low <= voids.packing <= high:
        text = (
            f"density {crystal.density:.0f} kg/m^3, packing coefficient {voids.packing:.2f} (molecular crystals: 0.65 to 0.77)"
        )
        doubts.append(finding("implausible-density", _where(crystal), text))
    elif not DENSITY[0] <= crystal.density <= DENSITY[1]:
        doubts.append(finding("implausible-density", _where(crystal), f"density {crystal.density:.0f} kg/m^3"))
    return doubts


def _void_text(crystal: Crystal, voids: Voids) -> str:
    place = " ".join(f"{x % 1.0:.2f}" for x in voids.centre)
    share = 100.0 * voids.volume / crystal.volume
    return (
        f"a probe of {PROBE:g} A radius finds {voids.volume:.0f} A^3 ({share:.0f} %) of the cell empty, "
        f"{voids.largest:.0f} A^3 in one piece, widest about {place} (fractional); "
        f"a water molecule needs about {NOTABLE_VOID:.0f} A^3"
    )


def judge_setting(crystal: Crystal, symmetry: Symmetry) -> list[Finding]:
    """What is doubtful or unusual about the cell's basis and about atoms off their symmetric positions."""
    where, doubts = _where(crystal), []
    if np.linalg.det(crystal.lattice) < 0:
        text = "a, b, c are left-handed and kept so; some programs (ABINIT, VASP) refuse such cells"
        doubts.append(finding("left-handed-cell", where, text))
    standard = lengths_angles(symmetry.standard_lattice)
    if not np.allclose(crystal.cell_lengths_angles, standard, rtol=1e-3, atol=1e-3):
        a, b, c, alpha, beta, gamma = standard
        text = (
            f"the cell is kept as given; the standard cell of {symmetry.space_group} is {a:.3f} {b:.3f} {c:.3f} A, "
            f"{alpha:.2f} {beta:.2f} {gamma:.2f} deg"
        )
        doubts.append(finding("nonstandard-setting", where, text))
    if symmetry.deviation > NOTABLE_DEVIATION:
        text = f"atoms are up to {symmetry.deviation:.2g} A off {symmetry.space_group}; prepare --symmetrize moves them onto it"
        doubts.append(finding("off-symmetry", where, text))
    return doubts
