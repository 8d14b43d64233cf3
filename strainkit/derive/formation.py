"""Energies of crystals against each other: a crystal formed from others, and forms of one composition.

Everything is per formula unit and static: reference cells at 0 K, no zero-point motion, no entropy. Stoichiometry is solved
exactly, in rational numbers, from the compositions of the cells.
"""

from __future__ import annotations

from collections import Counter
from collections.abc import Sequence
from dataclasses import dataclass
from fractions import Fraction
from functools import reduce
from itertools import combinations
from math import gcd
from typing import Any

from strainkit.crystal.crystal import Crystal, formula_of
from strainkit.crystal.molecules import find_molecules
from strainkit.derive.member import Member
from strainkit.findings import Finding, finding
from strainkit.units import EV_IN_KJ_PER_MOL

__all__ = ["Composition", "Reaction", "composition_of", "energies_of", "solve_exactly"]

Counts = dict[str, int]
_Key = tuple[tuple[str, int], ...]
#: a crystal is sought among combinations of at most so many others
_MOST_PARENTS = 4


@dataclass(frozen=True)
class Composition:
    """What one cell holds.

    Attributes
    ----------
    unit : dict
        Element -> atoms of one formula unit: the smallest whole share of the cell, in molecules where all atoms belong to
        some, else in atoms.
    units : int
        Formula units in the cell.
    molecules : tuple of (formula, count)
        Of one formula unit; empty when some atoms belong to no molecule.
    """

    unit: Counts
    units: int
    molecules: tuple[tuple[str, int], ...] = ()

    @property
    def formula(self) -> str:
        """Of one formula unit: C7H6O2, or (C2H2O4)2(CH4N2O) of several molecules."""
        if len(self.molecules) > 1:
            return "".join(f"({name}){count if count > 1 else ''}" for name, count in self.molecules)
        return formula_of([s for s, count in self.unit.items() for _ in range(count)])

    @property
    def reduced(self) -> _Key:
        """Smallest whole numbers of atoms: the same for all crystals of one composition."""
        divisor = reduce(gcd, self.unit.values())
        return tuple(sorted((symbol, count // divisor) for symbol, count in self.unit.items()))


@dataclass(frozen=True)
class Reaction:
    """Members turned into one formula unit of another, with the energy of it, or the reason why there is none.

    Attributes
    ----------
    product : int
        Number of the member that is formed.
    formula : str
        Of its formula unit.
    parents : tuple of (int, Fraction)
        Member and its formula units for one of the product's; one parent of the same composition is another form.
    energy : float or None
        Energy of the product less that of the parents, eV for each formula unit of the product.
    reason : str
        Why there is no energy.
    """

    product: int
    formula: str
    parents: tuple[tuple[int, Fraction], ...]
    energy: float | None
    reason: str = ""

    def to_dict(self, labels: Sequence[str]) -> dict[str, Any]:
        """JSON-ready."""
        return {
            "product": labels[self.product],
            "formula_unit": self.formula,
            "parents": [{"crystal": labels[i], "formula_units": str(share)} for i, share in self.parents],
            "energy_eV": self.energy,
            "energy_kJ_per_mol": None if self.energy is None else self.energy * EV_IN_KJ_PER_MOL,
            "reason": self.reason or None,
        }


def composition_of(crystal: Crystal) -> Composition:
    """Formula unit of a cell."""
    molecules = find_molecules(crystal)
    atoms = Counter(crystal.symbols)
    if molecules.molecular:
        kinds = Counter(molecules.formulas)
        units = reduce(gcd, kinds.values())
        return Composition(
            {s: n // units for s, n in atoms.items()}, units, tuple(sorted((f, n // units) for f, n in kinds.items()))
        )
    units = reduce(gcd, atoms.values())
    return Composition({s: n // units for s, n in atoms.items()}, units)


def solve_exactly(target: Counts, parents: Sequence[Counts]) -> list[Fraction] | None:
    """Amounts of the parents that have exactly the atoms of the target; None when there are none, or not one solution only."""
    symbols = sorted({*target, *(s for parent in parents for s in parent)})
    rows = [[Fraction(parent.get(s, 0)) for parent in parents] + [Fraction(target.get(s, 0))] for s in symbols]
    for column in range(len(parents)):
        pivot = next((r for r in range(column, len(rows)) if rows[r][column]), None)
        if pivot is None:
            return None
        rows[column], rows[pivot] = rows[pivot], rows[column]
        rows[column] = [x / rows[column][column] for x in rows[column]]
        for r in range(len(rows)):
            if r != column and rows[r][column]:
                factor = rows[r][column]
                rows[r] = [x - factor * y for x, y in zip(rows[r], rows[column], strict=True)]
    if any(row[-1] for row in rows[len(parents) :]):
        return None
    return [rows[k][-1] for k in range(len(parents))]


def energies_of(members: Sequence[Member]) -> tuple[list[Composition | None], list[Reaction], list[Finding]]:
    """Compositions (None for typed tensors and bare fits), every reaction among the runs, and doubts about their energies."""
    made = [composition_of(m.crystal) if m.method is not None and m.crystal is not None else None for m in members]
    classes: dict[_Key, list[int]] = {}
    for i, composition in enumerate(made):
        if composition is not None:
            classes.setdefault(composition.reduced, []).append(i)
    reactions: list[Reaction] = []
    doubts: dict[str, None] = {}
    for forms in classes.values():
        for reaction in [*_other_forms(members, made, forms), *(_formed(members, made, classes, i) for i in forms)]:
            if reaction is None:
                continue
            reactions.append(reaction)
            if reaction.energy is not None:
                for i, _ in reaction.parents:
                    for text in _doubts(members, reaction.product, i):
                        doubts[text] = None
    found = [finding("settings-unverified", "energies", text) for text in doubts]
    return made, sorted(reactions, key=lambda r: (len(r.parents) == 1, r.product)), found


def _doubts(members: Sequence[Member], product: int, parent: int) -> list[str]:
    one, other = members[product].method, members[parent].method
    return [] if one is None or other is None else one.doubts(other)


def _other_forms(members: Sequence[Member], made: Sequence[Composition | None], forms: Sequence[int]) -> list[Reaction]:
    """Every form of one composition against the lowest of those computed alike."""

    def lowest(of: Sequence[int]) -> int:
        return min(of, key=lambda j: (_per_atom(members, made, j), j))

    alike = {i: [j for j in forms if j == i or not _obstacle(members, i, [j])] for i in forms}
    if all(len(others) == 1 for others in alike.values()):
        return [_reaction(members, made, i, forms[:1]) for i in forms[1:]]
    shared = [i for i in forms if len(alike[i]) > 1]
    against = {i: lowest(alike[i] if i in shared else shared) for i in forms}
    return [_reaction(members, made, i, [j]) for i, j in against.items() if i != j]


def _per_atom(members: Sequence[Member], made: Sequence[Composition | None], i: int) -> float:
    composition, energy = made[i], members[i].energy
    assert composition is not None
    return float("inf") if energy is None else energy / (composition.units * sum(composition.unit.values()))


def _formed(
    members: Sequence[Member],
    made: Sequence[Composition | None],
    classes: dict[_Key, list[int]],
    product: int,
) -> Reaction | None:
    """The product from two or more crystals that are not made of the others themselves; None when these do not make it."""
    target = made[product]
    assert target is not None
    others = [key for key in classes if key != target.reduced]
    ways = _ways(target.unit, [key for key in others if not _ways(dict(key), [k for k in classes if k != key])])
    if not ways:
        return None
    if len(ways) > 1:
        return Reaction(
            product, target.formula, (), None, "several combinations of the others make it: compare it with its parents alone"
        )
    parents = []
    for key in ways[0]:
        forms = classes[key]
        kinds = {u.molecules for u in (made[i] for i in forms) if u is not None}
        if len(kinds) > 1:
            names = " and ".join(members[i].label for i in forms)
            return Reaction(
                product,
                target.formula,
                (),
                None,
                f"{names} hold the same elements in the same ratio: compare it with one of them",
            )
        alike = [i for i in forms if not _obstacle(members, product, [i])] or forms
        parents.append(min(alike, key=lambda i: _per_atom(members, made, i)))
    return _reaction(members, made, product, parents)


def _ways(target: Counts, keys: Sequence[_Key]) -> list[tuple[_Key, ...]]:
    """Sets of two or more compositions that make the target in positive amounts, each in one way only."""
    inside = [key for key in keys if {symbol for symbol, _ in key} <= set(target)]
    return [
        chosen
        for size in range(2, _MOST_PARENTS + 1)
        for chosen in combinations(inside, size)
        if (amounts := solve_exactly(target, [dict(key) for key in chosen])) and all(x > 0 for x in amounts)
    ]


def _reaction(members: Sequence[Member], made: Sequence[Composition | None], product: int, parents: Sequence[int]) -> Reaction:
    target, *units = [u for u in (made[i] for i in (product, *parents)) if u is not None]
    amounts = solve_exactly(target.unit, [u.unit for u in units])
    assert amounts is not None
    sides = tuple(zip(parents, amounts, strict=True))
    reason = _obstacle(members, product, parents)
    own, *others = [members[i].energy for i in (product, *parents)]
    if reason or own is None:
        return Reaction(product, target.formula, sides, None, reason)
    spent = sum(float(x) * e / u.units for x, e, u in zip(amounts, others, units, strict=True) if e is not None)
    return Reaction(product, target.formula, sides, own / target.units - spent)


def _obstacle(members: Sequence[Member], product: int, parents: Sequence[int]) -> str:
    """Why the energies of these runs cannot be subtracted; empty when they can."""
    missing = [members[i].label for i in (product, *parents) if members[i].energy is None]
    if missing:
        return f"no energy of the reference of {', '.join(missing)}"
    own = members[product].method
    for i in parents:
        other = members[i].method
        if own is not None and other is not None and (unlike := own.differences(other)):
            return f"computed differently from {members[i].label}: {unlike[0]}"
    return ""
