"""The section on shear of the page of `strainkit derive`: extremes, planes that were asked for, low-index planes."""

from __future__ import annotations

from collections.abc import Sequence

from strainkit.derive.derived import Derived
from strainkit.derive.planes import OnPlane
from strainkit.present.rows import indices_text, near_text, row, value_text
from strainkit.present.text import columns, heading, paragraph

__all__ = ["PLASTICITY", "sheared_text"]

#: planes of the table that are printed; JSON has them all
_PRINTED = 8

PLASTICITY = (
    "Slip is looked for first on a widely spaced plane between flat layers that shears softly, cleavage where such a plane "
    "also pulls apart softly. Elastic constants indicate and do not decide: dislocations, surfaces and neighbouring grains do. "
    "None of this is a tablet strength or a milling limit."
)


def sheared_text(derived: Derived) -> list[str]:
    """Lines of the section."""
    r = derived.elastic.frame.rotation
    lines = [heading("Sheared on a plane"), "  shear modulus, GPa"]
    for word, end in zip(("least", "most"), derived.extremes["shear_GPa"], strict=True):
        assert end.side is not None
        where = f"plane {near_text(end.along, r, as_plane=True)}, along {near_text(end.side, r)}"
        lines.append(row(f"  {word} of all", value_text(end.value), where))
    for plane in derived.planes:
        lines += _one_plane(plane)
    if derived.low_index_planes:
        lines += ["", _plane_table(derived.low_index_planes), ""]
        lines += [paragraph(_table_note(derived.low_index_planes), "  "), paragraph(PLASTICITY, "  ")]
    return [*lines, ""]


def _one_plane(plane: OnPlane) -> list[str]:
    name = indices_text(plane.indices, True)
    lines = []
    ends = (("least", plane.shear_least, plane.least_indices), ("most", plane.shear_most, plane.most_indices))
    for word, value, where in ends:
        lines.append(row(f"  on {name} {word}", value_text(value), _in_plane(where)))
    slip, length = plane.shortest
    where_to = f"{indices_text(slip, False)}, shortest lattice vector, {length:.3f} A"
    lines.append(row(f"  on {name} along", value_text(plane.shear_shortest), where_to))
    cut = plane.cut
    if cut is not None:
        bonds = "no bonds" if cut.bonds_per_nm2 == 0 else f"{cut.bonds_per_nm2:.1f} bonds a nm^2"
        gap = f"a gap of {cut.gap:.2f} A" if cut.gap > 0 else f"molecules interlocked by {-cut.gap:.2f} A"
        apart = f"{plane.lattice_spacing:.3f} A apart"
        if abs(plane.spacing - plane.lattice_spacing) > 1e-6 * plane.spacing:
            apart += f" (centring counted; by the indices alone {plane.spacing:.3f} A)"
        where_to = f"lattice planes {apart}; the easiest flat cut crosses {bonds}, {gap}"
        lines.append(paragraph(where_to, "    "))
    return lines


def _in_plane(where: tuple[tuple[int, ...], float] | None) -> str:
    if where is None:
        return "any direction"
    name = indices_text(where[0], False)
    return f"along {name}" if where[1] < 0.05 else f"{where[1]:.1f} deg from {name}"


def _plane_table(rows: Sequence[OnPlane]) -> str:
    table = []
    for plane in rows[:_PRINTED]:
        c = plane.cut
        cut = ["-"] * 3 if c is None else [f"{c.bonds_per_nm2:.1f}", f"{c.gap:.2f}", str(c.layers or "-")]
        where = plane.least_indices
        slip = "any" if where is None else indices_text(where[0], False) + (f" {where[1]:.0f} deg" if where[1] >= 0.5 else "")
        table.append(
            [
                indices_text(plane.indices, True),
                f"{plane.lattice_spacing:.3f}",
                *cut,
                value_text(plane.shear_least),
                slip,
                value_text(plane.along_normal.young),
            ]
        )
    return columns(table, ["plane", "d, A", "bonds", "gap, A", "layers", "least G", "along", "E across"])


def _table_note(rows: Sequence[OnPlane]) -> str:
    hidden = f"; {len(rows) - _PRINTED} more in --json" if len(rows) > _PRINTED else ""
    molecular = "Widest gap first" if any(row.cut is not None and row.cut.layers for row in rows) else "Widest d first"
    return (
        "d: distance of lattice planes (centring counted). bonds: covalent bonds (near neighbours in metals and salts) a nm^2 "
        "that the easiest flat cut crosses. gap: distance of the atoms on its two sides; negative: molecules of neighbouring "
        "layers interlock by that much. layers: flat layers in one d. least G, along: smallest shear modulus on the plane, "
        "GPa, and the lattice direction in it nearest to its own; G is the same when normal and direction change places. "
        f"E across: Young's modulus along the normal, GPa. {molecular}{hidden}."
    )
