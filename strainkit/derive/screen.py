"""One row a crystal: what a screening sorts by. Constants with errors, averages, findings, and what the crystal looks like."""

from __future__ import annotations

from collections import Counter
from typing import Any

import numpy as np

from strainkit.crystal.crystal import Crystal
from strainkit.crystal.hydrogenbonds import count_hydrogen_bonds
from strainkit.crystal.lattice import index_axes
from strainkit.crystal.molecules import Molecules
from strainkit.crystal.symmetry import Symmetry
from strainkit.crystal.voids import find_voids
from strainkit.derive.averages import averages
from strainkit.derive.layers import bonds_and_molecules, easiest_cut
from strainkit.errors import NoTensorError
from strainkit.fit.judge import instability
from strainkit.fit.result import Fit
from strainkit.run.plan import Plan
from strainkit.tensors.averages import SCHEMES
from strainkit.tensors.constants import ALL_NAMES

__all__ = ["COLUMNS", "describe", "screening_row"]

_CELL = (
    "name",
    "run",
    "formula",
    "space_group",
    "laue_class",
    "atoms",
    "volume_A3",
    "density_kg_per_m3",
    "packing_coefficient",
    "molecules",
    "molecule_formulas",
    "hydrogen_bonds",
    "layer_plane",
    "layer_gap_A",
    "layers",
)
_AVERAGED = {"bulk_GPa": "K", "shear_GPa": "G", "young_GPa": "E"}
#: columns of the table, in order; a number is followed by its standard error
COLUMNS = (
    *_CELL,
    "jobs_used",
    "jobs",
    *(f"{name}_GPa{end}" for name in ALL_NAMES for end in ("", "_error")),
    *(f"{word}_{scheme}_GPa{end}" for word in _AVERAGED.values() for scheme in SCHEMES for end in ("", "_error")),
    "poisson_hill",
    "poisson_hill_error",
    "anisotropy_index",
    "anisotropy_index_error",
    "smallest_eigenvalue_GPa",
    "noise_GPa",
    "undetermined",
    "findings",
    "problem",
)


def describe(crystal: Crystal, symmetry: Symmetry, molecules: Molecules | None = None) -> dict[str, Any]:
    """Descriptors of a cell.

    Parameters
    ----------
    crystal : Crystal
    symmetry : Symmetry
    molecules : Molecules, optional
        When they are known already.

    Returns
    -------
    dict
        Density (kg/m^3), packing coefficient (part of the cell inside van der Waals radii), molecules and hydrogen bonds a
        cell; for molecular crystals the low-index plane with the widest flat gap between molecules, that gap (angstrom)
        and the flat layers in one lattice spacing; None where there is none.
    """
    bonds, whole = bonds_and_molecules(crystal)
    found = molecules or whole
    formulas = [] if found is None else [f"{count} {formula}" for kind, formula, count in found.counts if kind == "molecule"]
    plane = gap = layers = None
    if whole is not None:
        axes = index_axes(symmetry)
        cuts = [
            (indices, easiest_cut(crystal, bonds, whole, axes.lattice_planes(np.array(indices))[0]))
            for indices in axes.families[:12]
        ]
        flat = [(indices, cut) for indices, cut in cuts if cut.bonds_per_nm2 == 0.0]
        if flat:
            indices, cut = max(flat, key=lambda pair: round(pair[1].gap, 3))
            plane, gap, layers = " ".join(map(str, indices)), cut.gap, cut.layers
    return {
        "formula": crystal.formula,
        "space_group": symmetry.space_group,
        "laue_class": symmetry.laue_class,
        "atoms": len(crystal.numbers),
        "volume_A3": crystal.volume,
        "density_kg_per_m3": crystal.density,
        "packing_coefficient": find_voids(crystal).packing,
        "molecules": 0 if found is None else sum(kind == "molecule" for kind in found.kinds),
        "molecule_formulas": ", ".join(formulas),
        "hydrogen_bonds": count_hydrogen_bonds(crystal),
        "layer_plane": plane,
        "layer_gap_A": gap,
        "layers": layers,
    }


def screening_row(plan: Plan, fit: Fit | None, problem: str = "") -> dict[str, Any]:
    """All columns of one crystal but "name" and "run"; None where there is nothing to say.

    Parameters
    ----------
    plan : Plan
    fit : Fit or None
        None where there is no tensor.
    problem : str
        Why not.
    """
    row: dict[str, Any] = dict.fromkeys(COLUMNS) | describe(plan.crystal, plan.symmetry, plan.molecules)
    row |= {"jobs": len(plan.strain_set), "jobs_used": 0, "problem": problem or None}
    if fit is None:
        return row
    row |= {"jobs_used": len(fit.jobs_used), "noise_GPa": fit.regression.noise}
    row["undetermined"] = " ".join(fit.undetermined) or None
    codes = Counter(f.code for f in fit.findings if f.severity != "info")
    row["findings"] = " ".join(codes) or None
    data = fit.to_dict("ieee")
    for name in ALL_NAMES:
        i, j = int(name[1]) - 1, int(name[2]) - 1
        row[f"{name}_GPa"], row[f"{name}_GPa_error"] = (
            round(float(data[key][i][j]), 9) + 0.0 for key in ("stiffness_GPa", "standard_error_GPa")
        )
    if fit.undetermined:
        return row | {"problem": f"undetermined: {row['undetermined']}"}
    row["smallest_eigenvalue_GPa"] = float(fit.effective.eigenvalues[0])
    try:
        means = averages(fit.effective).to_dict()
    except NoTensorError:
        return row | {"problem": instability(fit.effective)}
    for name, word in _AVERAGED.items():
        for scheme in SCHEMES:
            row[f"{word}_{scheme}_GPa"] = means[name][scheme]
            row[f"{word}_{scheme}_GPa_error"] = means[name]["standard_error"][scheme]
    row["poisson_hill"], row["poisson_hill_error"] = means["poisson"]["hill"], means["poisson"]["standard_error"]["hill"]
    row["anisotropy_index"], row["anisotropy_index_error"] = means["anisotropy_index"], means["anisotropy_index_standard_error"]
    return row
