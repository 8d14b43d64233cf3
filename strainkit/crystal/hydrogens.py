"""Hydrogens of organic molecules: which are missing, and which sit too close as in X-ray structures.

Every carbon, nitrogen and oxygen is judged by itself from the number of its neighbours, the angle between them and the
bond orders that the lengths imply (Pauling: order = exp((r1 - d) / 0.3 A), r1 the sum of the covalent radii). Atoms next
to a metal or boron are left alone. Only what geometry decides is reported: an O-H of a phosphate, a thiol, the N-H of an
amide or an aromatic ring can be missing unseen.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np

from strainkit.crystal.crystal import Crystal
from strainkit.crystal.neighbours import Neighbours, is_metal
from strainkit.findings import Finding, finding
from strainkit.tensors.arrays import BoolArray, FloatArray, IntArray

__all__ = ["judge_hydrogens"]

#: element -> (shortest X-H distance that a relaxed or neutron structure has, neutron value), angstrom. Neutron means from
#: memory of Allen & Bruno, Acta Cryst. B 66, 380 (2010)
_XH_LENGTHS = {6: (1.03, 1.09), 7: (0.95, 1.02), 8: (0.92, 0.98)}
#: a bond to a lone metal atom longer than this is no oxide or nitride but a ligand (oxo and nitrido: 1.6 to 1.8), angstrom
LIGAND = 1.95
LINEAR = 150.0


def judge_hydrogens(crystal: Crystal, neighbours: Neighbours) -> list[Finding]:
    """Missing hydrogens and hydrogens at X-ray distance, as findings with sites and numbers."""
    surroundings = _surroundings(crystal, neighbours.bonds)
    missing = {}
    for atom, number in enumerate(crystal.numbers):
        rule = _RULES.get(int(number))
        reason = rule(surroundings[atom], surroundings) if rule else ""
        if reason:
            missing[atom] = reason
    doubts = []
    if missing:
        texts = list(dict.fromkeys(f"{crystal.sites((atom,))} {reason}" for atom, reason in missing.items()))
        more = f"; and {len(texts) - 4} more" if len(texts) > 4 else ""
        doubts.append(
            finding(
                "missing-hydrogens",
                crystal.sites(missing),
                f"{len(missing)} atoms of the cell lack at least one hydrogen: {'; '.join(texts[:4])}{more}",
            )
        )
    return doubts + _x_ray_lengths(crystal, neighbours.bonds)


@dataclass(frozen=True)
class _Atom:
    """An atom and its bonded neighbours: their numbers in the cell, elements, vectors, lengths and bond orders."""

    number: int
    atoms: IntArray
    elements: IntArray
    vectors: FloatArray
    lengths: FloatArray
    orders: FloatArray

    @property
    def left_alone(self) -> bool:
        """Next to a metal or boron?"""
        return bool((is_metal(self.elements) | (self.elements == 5)).any())

    @property
    def angle(self) -> float:
        """Angle between the first two neighbours, degrees."""
        a, b = self.vectors[:2]
        return float(np.degrees(np.arccos(np.clip(a @ b / self.lengths[0] / self.lengths[1], -1.0, 1.0))))

    @property
    def height(self) -> float:
        """Distance from the plane of the first three neighbours, angstrom."""
        a, b, c = self.vectors[:3]
        normal = np.cross(b - a, c - a)
        return float(abs(a @ normal) / max(float(np.linalg.norm(normal)), 1e-12))


def _surroundings(crystal: Crystal, bonds: Neighbours) -> list[_Atom]:
    from ase.data import covalent_radii

    numbers = crystal.numbers
    radii = covalent_radii[numbers]
    orders = np.exp((radii[bonds.first] + radii[bonds.second] - bonds.lengths) / 0.3)
    orders[(numbers[bonds.first] == 1) | (numbers[bonds.second] == 1)] = 1.0
    return [
        _Atom(int(n), bonds.second[k], numbers[bonds.second[k]], bonds.vectors[k], bonds.lengths[k], orders[k])
        for n, k in zip(numbers, bonds.of_atom(len(numbers)), strict=True)
    ]


def _carbon(atom: _Atom, others: list[_Atom]) -> str:
    count = len(atom.atoms)
    if atom.left_alone or count > 3:
        return ""
    if count == 3:  # planar: complete; a fullerene's is not quite planar but its bonds are short
        if atom.height > 0.25 and atom.orders.sum() < 3.55:
            return f"has 3 neighbours, {atom.height:.2f} A out of their plane"
        return ""
    if count == 2:
        carbene = (atom.elements == 7).all() and atom.angle < 104.5
        return "" if atom.angle > LINEAR or carbene else f"has 2 neighbours at {atom.angle:.0f} deg"
    if count == 1:
        triple = atom.elements[0] in (7, 8, 16) and atom.orders[0] > 2.2  # CO, CN-, isocyanides
        return "" if triple else f"has 1 neighbour at {atom.lengths[0]:.2f} A"
    return "has no neighbours"


def _nitrogen(atom: _Atom, others: list[_Atom]) -> str:
    count = len(atom.atoms)
    if atom.left_alone or count > 2:
        return _ligand(atom)
    if count == 2:
        flat = atom.angle > LINEAR or atom.orders.sum() > 2.4
        return "" if flat else f"has 2 neighbours by single bonds of {atom.lengths[0]:.2f} and {atom.lengths[1]:.2f} A"
    if count == 1:  # nitriles, azides, N2, NO are complete
        return "" if atom.orders[0] > 2.0 else f"has 1 neighbour at {atom.lengths[0]:.2f} A"
    return "has no neighbours"


def _oxygen(atom: _Atom, others: list[_Atom]) -> str:
    count = len(atom.atoms)
    if atom.left_alone or count > 1:
        return _ligand(atom)
    if count == 0:
        return "has no neighbours"
    element, length = int(atom.elements[0]), float(atom.lengths[0])
    if element == 1:
        return "has one hydrogen only"
    if element == 6 and _acid(atom, others[atom.atoms[0]], others):
        return f"has 1 neighbour at {length:.2f} A, as in an acid"
    limit = {6: 1.345, 7: 1.36, 8: 1.38}.get(element)  # phenolates, N-oxides and superoxides are shorter
    return f"has 1 neighbour at {length:.2f} A" if limit and length > limit else ""


def _acid(oxygen: _Atom, carbon: _Atom, others: list[_Atom]) -> bool:
    """Is this the longer C-O of a carboxyl group whose bonds are too unequal for an anion?"""
    ends = [k for k, z in enumerate(carbon.elements) if z == 8 and len(others[carbon.atoms[k]].atoms) == 1]
    if len(ends) != 2 or len(carbon.atoms) != 3 or (carbon.elements == 8).sum() != 2:
        return False
    short, length = float(carbon.lengths[ends].min()), float(oxygen.lengths[0])
    return length > 1.285 and length - short > 0.08


def _ligand(atom: _Atom) -> str:
    """Water or ammonia on a metal without its hydrogens: one neighbour only, and that a metal at ligand distance."""
    if len(atom.atoms) == 1 and is_metal(atom.elements)[0] and atom.lengths[0] > LIGAND:
        return f"has 1 neighbour, a metal at {atom.lengths[0]:.2f} A"
    return ""


_RULES: dict[int, Callable[[_Atom, list[_Atom]], str]] = {6: _carbon, 7: _nitrogen, 8: _oxygen}


def _x_ray_lengths(crystal: Crystal, bonds: Neighbours) -> list[Finding]:
    texts, sites = [], []
    numbers = crystal.numbers
    alone = np.bincount(bonds.first, minlength=len(numbers)) == 1
    for element, (shortest, neutron) in _XH_LENGTHS.items():
        of: BoolArray = (numbers[bonds.second] == 1) & (numbers[bonds.first] == element) & alone[bonds.second]
        short = of & (bonds.lengths < shortest)
        if short.any():
            low, high = bonds.lengths[short].min(), bonds.lengths[short].max()
            span = f"{low:.2f}" if high - low < 0.005 else f"{low:.2f} to {high:.2f}"
            symbol = {6: "C", 7: "N", 8: "O"}[element]
            texts.append(f"{short.sum()} of {of.sum()} {symbol}-H bonds are {span} A (neutron diffraction: {neutron:.2f})")
            sites += list(bonds.second[short])
    if not texts:
        return []
    return [finding("x-ray-hydrogens", crystal.sites(sites), f"{'; '.join(texts)}: relax the atoms first")]
