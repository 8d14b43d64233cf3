"""What a CIF says about its own model besides the sites: disorder, dummies, hydrogens not listed, the formula."""

from __future__ import annotations

import re
from collections import Counter, defaultdict
from collections.abc import Sequence
from pathlib import Path
from typing import TYPE_CHECKING

from strainkit.errors import InputError
from strainkit.findings import Finding, finding

if TYPE_CHECKING:
    import gemmi

__all__ = ["attached_hydrogens", "formula_claim", "refuse_alternatives", "refuse_unusable", "solvent_masks"]

_UNKNOWN = ("", ".", "?")


def refuse_unusable(structure: gemmi.SmallStructure, block: gemmi.cif.Block, path: Path) -> None:
    """Refuse sites that are partly occupied or more than full, dummies, or without an element.

    An occupancy that is not given, or given as ? or ., is 1: the default of the core CIF dictionary (from memory).
    """
    partial = [f"{s.label} ({s.occ:g})" for s in structure.sites if s.occ < 1.0]
    if partial:
        raise InputError(
            f"partly occupied sites: {', '.join(partial)}",
            path,
            "A periodic calculation needs an ordered cell: keep one component, or build a supercell with every site full.",
        )
    beyond = [f"{s.label} ({s.occ:g})" for s in structure.sites if s.occ > 1.0]
    if beyond:
        raise InputError(f"occupancies above 1: {', '.join(beyond)}", path, "A site holds one atom at most: correct the file.")
    dummies = [label for label, flag in _column(block, structure, "calc_flag").items() if flag.lower() == "dum"]
    if dummies:
        raise InputError(f"dummy sites that are no atoms: {', '.join(dummies)}", path, "Delete them, or give them positions.")
    unknown = [s.label for s in structure.sites if s.element.atomic_number == 0]
    if unknown:
        raise InputError(f"sites without a known element: {', '.join(unknown)}", path)


def refuse_alternatives(structure: gemmi.SmallStructure, block: gemmi.cif.Block, path: Path) -> list[Finding]:
    """Refuse fully occupied alternatives: two disorder groups of one assembly, or one about a special position.

    Returns
    -------
    findings : list of Finding
        A single group that is left of a disordered model is an ordered one, and said.
    """
    assemblies = _column(block, structure, "disorder_assembly")
    groups: dict[str, dict[str, list[str]]] = defaultdict(lambda: defaultdict(list))
    for label, group in _column(block, structure, "disorder_group").items():
        if group not in (*_UNKNOWN, "0"):
            groups[assemblies.get(label, "")][group].append(label)
    remarks = []
    for group_sites in groups.values():
        texts = [f"group {group}: {', '.join(labels)}" for group, labels in sorted(group_sites.items())]
        if len(group_sites) > 1 or any(group.startswith("-") for group in group_sites):
            raise InputError(
                f"disorder groups with full occupancy ({'; '.join(texts)})",
                path,
                "They are alternatives: keep one group, and lower the symmetry if the disorder is about a symmetry element.",
            )
        remarks.append(finding("disorder-group", texts[0].partition(": ")[2], f"only disorder {texts[0]}: read as ordered"))
    return remarks


def attached_hydrogens(structure: gemmi.SmallStructure, block: gemmi.cif.Block) -> list[Finding]:
    """Hydrogens that the file counts at their atom but does not list."""
    column = _column(block, structure, "attached_hydrogens")
    claimed = {label: int(text) for label, text in column.items() if text.isdigit() and int(text) > 0}
    if not claimed:
        return []
    text = ", ".join(f"{label} {count}" for label, count in claimed.items())
    return [finding("attached-hydrogens", ", ".join(claimed), f"hydrogens that the file counts but does not list: {text}")]


def solvent_masks(block: gemmi.cif.Block, path: Path) -> list[Finding]:
    """Voids whose solvent the refinement took out of the diffraction data (tags of PLATON and of smtbx, from memory)."""
    for tag in ("_platon_squeeze_void", "_smtbx_masks_void"):
        rows = [(row.str(0), row.str(1)) for row in block.find([f"{tag}_volume", f"{tag}_count_electrons"])]
        if rows:
            text = ", ".join(f"{volume} A^3 with {electrons} electrons" for volume, electrons in rows)
            return [finding("solvent-masked", str(path), f"the refinement took solvent out of {len(rows)} voids: {text}")]
    return []


def formula_claim(block: gemmi.cif.Block, symbols: Sequence[str], path: Path) -> list[Finding]:
    """Compare the atoms of the cell with _chemical_formula_sum, times _cell_formula_units_Z where that is given."""
    stated = _formula(block.find_value("_chemical_formula_sum") or "")
    if not stated:
        return []
    held = Counter(symbols)
    text = (block.find_value("_cell_formula_units_Z") or "").strip("'\" ")
    heavy = [element for element in stated if element != "H" and held[element]] or [e for e in stated if held[e]]
    if not heavy:
        return []
    anchor = max(heavy, key=lambda element: stated[element])
    units = float(text) if text.isdigit() and int(text) > 0 else held[anchor] / stated[anchor]
    wrong = {
        element: (held[element], units * stated.get(element, 0.0))
        for element in sorted({*held, *stated})
        if abs(held[element] - units * stated.get(element, 0.0)) > max(0.5, 0.02 * held[element])
    }
    if not wrong:
        return []
    shown = ", ".join(f"{element} {have} for {want:g}" for element, (have, want) in wrong.items())
    formula = " ".join(f"{element}{count:g}" for element, count in stated.items())
    return [finding("formula-differs", str(path), f"the file states {units:g} x {formula}, the cell holds {shown}")]


def _formula(text: str) -> dict[str, float]:
    """Elements and counts of a formula such as 'C6 H12 N4'; empty where it is none. Deuterium counts as hydrogen."""
    words = text.strip("'\"; \n").split()
    counts: dict[str, float] = defaultdict(float)
    for word in words:
        match = re.fullmatch(r"([A-Z][a-z]?)(\d*\.?\d*)", word)
        if not match:
            return {}
        counts["H" if match[1] == "D" else match[1]] += float(match[2] or 1)
    return dict(counts)


def _column(block: gemmi.cif.Block, structure: gemmi.SmallStructure, name: str) -> dict[str, str]:
    """Site label -> text of one column of the atom sites, for the sites that were read."""
    table = block.find(["_atom_site_label", f"_atom_site_{name}"])
    known = {site.label for site in structure.sites}
    values = {row.str(0): row.str(1) for row in table}
    return {label: text for label, text in values.items() if label in known}
