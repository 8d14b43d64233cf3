"""CIF through gemmi: labels, occupancies and every setting; symmetry copies are made here.

gemmi parses; the copies are made from the symmetry operations that the file lists (or from its space-group name), and
sites on special positions are moved onto them, so that 0.3333 becomes 1/3.
"""

from __future__ import annotations

from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from strainkit.crystal.cifclaims import attached_hydrogens, formula_claim, refuse_alternatives, refuse_unusable, solvent_masks
from strainkit.crystal.crystal import Crystal
from strainkit.errors import InputError
from strainkit.findings import Finding, finding
from strainkit.tensors.arrays import FloatArray

if TYPE_CHECKING:
    import gemmi

__all__ = ["crystal_from_cif"]

#: a site closer than this to its own symmetry copy sits on a special position (A)
SPECIAL_POSITION = 0.05


def crystal_from_cif(text: str, path: Path) -> Crystal:
    """Crystal of the one structure in a CIF.

    The Cartesian frame is x along a, y in the plane of a and b.

    Raises
    ------
    InputError
        No or several structures, partial occupancy, unknown elements, no symmetry.
    """
    import gemmi

    block, structure = _only_structure(gemmi, text, path)
    refuse_unusable(structure, block, path)
    remarks = refuse_alternatives(structure, block, path)
    lost = [s.label for s in structure.sites if not all(np.isfinite(s.fract.tolist()))]
    if lost:
        raise InputError(f"sites without coordinates: {', '.join(lost)}", path)
    cell = structure.cell
    if not cell.is_crystal():
        raise InputError("no unit cell (_cell_length_a and the five others)", path)
    lattice = np.array(cell.orth.mat.tolist()).T
    rotations, translations, doubts = _operations(gemmi, structure, path)
    positions, sites = _expand(structure, rotations, translations, lattice)
    elements = [structure.sites[i].element for i in sites]
    symbols = ["H" if element.name == "D" else element.name for element in elements]
    remarks += [*doubts, *attached_hydrogens(structure, block), *solvent_masks(block, path)]
    remarks += formula_claim(block, symbols, path)
    deuterium = sorted({site.label for site in structure.sites if site.element.name == "D"})
    if deuterium:
        remarks.append(finding("deuterium", ", ".join(deuterium), "deuterium is treated as hydrogen"))
    return Crystal(
        lattice=lattice,
        positions=positions,
        numbers=np.array([element.atomic_number for element in elements]),
        labels=tuple(structure.sites[i].label for i in sites),
        name=path.name.split(".")[0] or block.name,
        source=str(path),
        remarks=tuple(remarks),
    )


def _only_structure(gemmi: Any, text: str, path: Path) -> tuple[gemmi.cif.Block, gemmi.SmallStructure]:
    try:
        blocks = list(gemmi.cif.read_string(text))
    except (RuntimeError, ValueError) as error:
        raise InputError(f"not a readable CIF: {' '.join(str(error).split())}", path) from None
    found = [(b, gemmi.make_small_structure_from_block(b)) for b in blocks]
    found = [(block, structure) for block, structure in found if len(structure.sites)]
    if not found:
        raise InputError("no atom sites in this CIF", path, "It needs _atom_site_fract_x, _y, _z and _atom_site_label.")
    if len(found) > 1:
        names = ", ".join(block.name for block, _ in found)
        raise InputError(f"{len(found)} structures in one CIF ({names})", path, "Keep one data block a file.")
    block, structure = found[0]
    return block, structure


def _operations(gemmi: Any, structure: gemmi.SmallStructure, path: Path) -> tuple[FloatArray, FloatArray, list[Finding]]:
    """Rotations (m, 3, 3) and translations (m, 3) acting on fractional columns, and what to say about them."""
    remarks: list[Finding] = []
    if structure.symops:
        try:
            operations = [gemmi.Op(text) for text in structure.symops]
        except (RuntimeError, ValueError) as error:
            raise InputError(f"unreadable symmetry operation: {error}", path) from None
    else:
        structure.determine_and_set_spacegroup("H2")
        if structure.spacegroup is None:
            name = structure.spacegroup_hm or structure.spacegroup_hall
            if name:
                raise InputError(
                    f"unknown space group {name!r}", path, "List the operations under _space_group_symop_operation_xyz."
                )
            remarks.append(finding("no-symmetry-in-file", str(path), "no space group in the file: read as P1"))
            operations = [gemmi.Op("x,y,z")]
        else:
            operations = list(structure.spacegroup.operations())
    rotations = np.array([np.array(op.rot) / op.DEN for op in operations])
    translations = np.array([np.array(op.tran) / op.DEN for op in operations])
    return rotations, translations, remarks


def _expand(
    structure: gemmi.SmallStructure, rotations: FloatArray, translations: FloatArray, lattice: FloatArray
) -> tuple[FloatArray, list[int]]:
    """All atoms of the cell: fractional positions (n, 3) and the index of the site each came from."""
    positions: list[FloatArray] = []
    sites: list[int] = []
    for index, site in enumerate(structure.sites):
        start = np.array(site.fract.tolist())
        images = rotations @ start + translations
        shift = images - start
        shift -= np.round(shift)
        same = np.linalg.norm(shift @ lattice, axis=1) < SPECIAL_POSITION
        start = start + shift[same].mean(axis=0) if same.any() else start
        images = (rotations @ start + translations) % 1.0
        between = images[:, None] - images
        near = np.linalg.norm((between - np.round(between)) @ lattice, axis=-1) <= 0.5 * SPECIAL_POSITION
        kept: list[int] = []
        for image, others in enumerate(near):
            if not others[kept].any():
                kept.append(image)
        positions += list(images[kept])
        sites += [index] * len(kept)
    return np.array(positions), sites
