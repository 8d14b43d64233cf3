"""The page of `strainkit derive`: one section a question, in the order a crystal engineer asks them."""

from __future__ import annotations

import re
import textwrap
from collections.abc import Sequence

import numpy as np

from strainkit.derive.averages import Averages
from strainkit.derive.derived import Derived, Direction
from strainkit.derive.elastic import ElasticCrystal
from strainkit.derive.extremes import Extreme, Near, ratio
from strainkit.derive.planes import Along, OnPlane
from strainkit.derive.spread import WithError
from strainkit.present.numbers import plain, uncertain
from strainkit.present.text import WIDTH, columns, findings_text, heading, paragraph
from strainkit.tensors.arrays import FloatArray
from strainkit.tensors.averages import AVERAGES, SCHEMES
from strainkit.tensors.sixvectors import COMPONENTS, stiffness_to_voigt, to_mandel

__all__ = ["derived_text"]

_AVERAGED = {
    "bulk_GPa": "bulk modulus",
    "shear_GPa": "shear modulus",
    "young_GPa": "Young's modulus",
    "poisson": "Poisson's ratio",
}
#: planes of the table that are printed; JSON has them all
_PRINTED = 8

PLASTICITY = (
    "Slip is looked for first on a widely spaced plane that cuts no bonds and shears softly, cleavage where such a plane also "
    "pulls apart softly. Elastic constants indicate and do not decide: dislocations, surfaces and neighbouring grains do. "
    "None of this is a tablet strength or a milling limit."
)


def derived_text(derived: Derived, blind_spot: str = "") -> str:
    """The whole page, 80 columns; `blind_spot` is what the error bars cannot see."""
    e = derived.elastic
    lines = [heading(f"{e.name}: what the tensor means"), paragraph(e.origin, "  "), ""]
    lines += _believed(derived, blind_spot)
    if derived.averages is not None:
        lines += _squeezed(derived, derived.averages)
        lines += _stretched(derived)
        lines += _sheared(derived)
        lines += _uneven(derived, derived.averages)
        lines += _sound(derived)
    else:
        lines += ["Nothing else is derived: moduli of an unstable crystal have no meaning.", ""]
    return "\n".join([*lines, *_axes(e)])


def _row(label: str, value: str, note: str = "") -> str:
    """Label, number and a note, which goes on below itself where the line is full."""
    together = re.sub(r"[(\[][^)\]]*[)\]]", lambda found: found[0].replace(" ", "_"), note)  # indices stay on one line
    notes = [line.replace("_", " ") for line in textwrap.wrap(together, WIDTH - 45, break_on_hyphens=False)] or [""]
    first = f"  {label:<30}{value:>11}  {notes[0]}".rstrip()
    return "\n".join([first, *(" " * 45 + more for more in notes[1:])])


def _value(value: WithError, digits: int = 2) -> str:
    return uncertain(value.value, value.error, digits)


def indices_text(indices: Sequence[int], plane: bool) -> str:
    """(1 0 -2) or [1 0 -2]."""
    inside = " ".join(map(str, indices))
    return f"({inside})" if plane else f"[{inside}]"


def _near(near: Near, frame: FloatArray, as_plane: bool = False) -> str:
    """A direction by the low-index plane or direction next to it, or by its components without a cell."""
    if near.direction is None or near.plane is None:
        return "(" + " ".join(plain(x) for x in frame @ near.vector) + ")"
    gain = near.direction[1] - near.plane[1]
    plane = as_plane or gain > 0.05
    indices, angle = near.plane if plane else near.direction
    name = ("normal of " if plane and not as_plane else "") + indices_text(indices, plane)
    return name if angle < 0.05 else f"{angle:.1f} deg from {name}"


def _believed(derived: Derived, blind_spot: str) -> list[str]:
    s, e = derived.stability, derived.elastic
    if s.probability is None:
        chance = "no error estimate: no probability"
    elif s.probability == 1.0:
        chance = "probability above 99.9 %"
    else:
        chance = f"probability {100 * s.probability:.1f} %"
    lines = [heading("Can it be believed"), _row("stable", "yes" if s.stable else "NO", chance)]
    smallest = WithError(float(s.eigenvalues[0]), None if s.errors is None else float(s.errors[0]))
    lines.append(_row("smallest eigenvalue, GPa", _value(smallest), _softest(derived)))
    push = float(np.abs(np.linalg.eigvalsh(e.stress)).max())
    if push > 0:
        change = np.abs(stiffness_to_voigt(e.moduli.mandel - e.waves.mandel)).max()
        lines.append(_row("reference stress, GPa", f"{push:.2g}", f"moduli use B, up to {change:.2g} off C"))
    if blind_spot and e.moduli.covariance is not None:
        lines.append(paragraph(blind_spot, "  "))
    return [*lines, findings_text(derived.findings), ""]


def _softest(derived: Derived) -> str:
    """The strain of the smallest eigenvalue, where it is one strain."""
    s, r = derived.stability, derived.elastic.frame.rotation
    if s.eigenvalues[1] - s.eigenvalues[0] < 1e-4 * s.eigenvalues[-1]:
        return ""
    share = to_mandel(r @ s.softest @ r.T) ** 2
    named = [f"{COMPONENTS[i]} {100 * share[i]:.0f} %" for i in np.argsort(-share) if share[i] > 0.15]
    return f"softest strain: {', '.join(named)}"


def _squeezed(derived: Derived, means: Averages) -> list[str]:
    error = None if means.errors is None else float(means.errors[0, 1])
    bulk = WithError(float(means.values[0, 1]), error)
    lines = [
        heading("Squeezed"),
        _row("bulk modulus, GPa", _value(bulk), "of the crystal itself: Reuss"),
        "  linear compressibility, 1/TPa",
    ]
    lines += [_row(f"  along {n}", _value(a.compressibility), note) for n, note, a in _places(derived)]
    least, most = derived.extremes["linear_compressibility_per_TPa"]
    lines += _ends(derived, least, most)
    if least.value.value < 0:
        lines.append("  negative: the crystal grows in that direction when it is squeezed from all sides")
    return [*lines, ""]


def _places(derived: Derived) -> list[tuple[str, str, Along]]:
    """Cell axes, then the directions and plane normals that were asked for."""
    rows = [(indices_text(axis.indices, False), letters, axis.along) for letters, axis in _alike_axes(derived)]
    rows += [(indices_text(d.indices, False), f"asked for; {d.length:.3f} A long", d.along) for d in derived.directions]
    rows += [
        (f"normal of {indices_text(p.indices, True)}", f"asked for; d-spacing {p.spacing:.3f} A", p.along_normal)
        for p in derived.planes
    ]
    return rows


def _alike_axes(derived: Derived) -> list[tuple[str, Direction]]:
    """Cell axes that symmetry makes alike together: "a, b" and the first of them."""
    axes = derived.elastic.axes
    found: list[tuple[str, Direction]] = []
    for letter, axis in zip("abc", derived.cell_axes, strict=False):
        for i, (letters, first) in enumerate(found):
            assert axes is not None
            if np.abs(axes.rotations @ first.along.direction @ axis.along.direction).max() > 1.0 - 1e-9:
                found[i] = (f"{letters}, {letter}", first)
                break
        else:
            found.append((letter, axis))
    return found


def _ends(derived: Derived, least: Extreme, most: Extreme, digits: int = 2) -> list[str]:
    r = derived.elastic.frame.rotation
    if most.value.value - least.value.value < 1e-9 * abs(most.value.value):
        return [_row("  least and most", _value(most.value, digits), "the same in every direction")]
    return [
        _row("  least", _value(least.value, digits), _near(least.along, r)),
        _row("  most", _value(most.value, digits), _near(most.along, r)),
    ]


def _stretched(derived: Derived) -> list[str]:
    lines = [heading("Stretched or bent"), "  Young's modulus, GPa (a needle bends with that of its own axis)"]
    lines += [_row(f"  along {n}", _value(a.young), note) for n, note, a in _places(derived)]
    return [*lines, *_ends(derived, *derived.extremes["young_GPa"]), ""]


def _sheared(derived: Derived) -> list[str]:
    r = derived.elastic.frame.rotation
    lines = [heading("Sheared on a plane"), "  shear modulus, GPa"]
    for word, end in zip(("least", "most"), derived.extremes["shear_GPa"], strict=True):
        assert end.side is not None
        where = f"plane {_near(end.along, r, as_plane=True)}, along {_near(end.side, r)}"
        lines.append(_row(f"  {word} of all", _value(end.value), where))
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
        lines.append(_row(f"  on {name} {word}", _value(value), _in_plane(where)))
    slip, length = plane.shortest
    where_to = f"{indices_text(slip, False)}, shortest lattice vector, {length:.3f} A"
    lines.append(_row(f"  on {name} along", _value(plane.shear_shortest), where_to))
    cut = plane.cut
    if cut is not None:
        bonds = "no bonds" if cut.bonds_per_nm2 == 0 else f"{cut.bonds_per_nm2:.1f} bonds a nm^2"
        where_to = (
            f"lattice planes {plane.lattice_spacing:.3f} A apart; the easiest flat cut, between atoms {cut.gap:.2f} A apart"
        )
        lines.append(paragraph(f"{where_to}, crosses {bonds}", "    "))
    return lines


def _in_plane(where: tuple[tuple[int, ...], float] | None) -> str:
    if where is None:
        return "any direction"
    name = indices_text(where[0], False)
    return f"along {name}" if where[1] < 0.05 else f"{where[1]:.1f} deg from {name}"


def _plane_table(rows: Sequence[OnPlane]) -> str:
    table = []
    for row in rows[:_PRINTED]:
        c = row.cut
        cut = ["-"] * 3 if c is None else [f"{c.bonds_per_nm2:.1f}", f"{c.gap:.2f}", str(c.layers or "-")]
        where = row.least_indices
        slip = "any" if where is None else indices_text(where[0], False) + (f" {where[1]:.0f} deg" if where[1] >= 0.5 else "")
        table.append(
            [
                indices_text(row.indices, True),
                f"{row.lattice_spacing:.3f}",
                *cut,
                _value(row.shear_least),
                slip,
                _value(row.along_normal.young),
            ]
        )
    return columns(table, ["plane", "d, A", "bonds", "gap, A", "layers", "least G", "along", "E across"])


def _table_note(rows: Sequence[OnPlane]) -> str:
    hidden = f"; {len(rows) - _PRINTED} more in --json" if len(rows) > _PRINTED else ""
    return (
        "d: distance of lattice planes (centring counted). bonds, gap: covalent bonds (near neighbours in metals and salts) a "
        "nm^2 that the easiest flat cut crosses, and the distance of the atoms on its two sides. layers: cuts without bonds in "
        "one d. least G, along: smallest shear modulus on the plane, GPa, and the lattice direction in it nearest to its "
        "direction; G is the same when normal and direction change places. E across: Young's modulus along the normal, GPa. "
        f"Planes that cut no bonds come first, softest in shear first, then the others by d{hidden}."
    )


def _uneven(derived: Derived, means: Averages) -> list[str]:
    r = derived.elastic.frame.rotation
    lines = [heading("How uneven"), _row("universal anisotropy index", uncertain(means.anisotropy, means.anisotropy_error))]
    for name, words in (("young_GPa", "Young's modulus"), ("shear_GPa", "shear modulus")):
        lines.append(_row(f"{words}, most/least", _value(ratio(*derived.extremes[name]))))
    for word, end in zip(("least", "most"), derived.extremes["poisson"], strict=True):
        assert end.side is not None
        where = f"pull {_near(end.along, r)}, width {_near(end.side, r)}"
        lines.append(_row(f"Poisson's ratio, {word}", _value(end.value, 3), where))
    for name, value in derived.cauchy.items():
        lines.append(_row(f"{name.replace('-', ' - ')}, GPa", _value(value), "zero for central forces (Cauchy)"))
    lines += ["", "  As a solid of fine grains in all orientations"]
    table = []
    for i, name in enumerate(AVERAGES):
        errors = [None] * 3 if means.errors is None else means.errors[i]
        cells = [uncertain(v, s, 3 if name == "poisson" else 2) for v, s in zip(means.values[i], errors, strict=True)]
        table.append([_AVERAGED[name] + ("" if name == "poisson" else ", GPa"), *cells])
    lines.append(columns(table, ["", *(scheme.capitalize() for scheme in SCHEMES)]))
    lines.append(_row("K/G (Hill)", uncertain(means.pugh, means.pugh_error)))
    return [*lines, ""]


def _sound(derived: Derived) -> list[str]:
    e, heat, r = derived.elastic, derived.heat, derived.elastic.frame.rotation
    lines = [heading("Sound")]
    if heat is None or e.density is None:
        return [*lines, "  no density, no speeds: give --density or --cell", ""]
    table = []
    for name, _, a in _places(derived):
        tilt = np.degrees(np.arccos(min(1.0, abs(float(a.polarisations[2] @ a.direction)))))
        table.append([name, *(_value(v, 0) for v in a.speeds), f"{tilt:.0f}"])
    if table:
        lines.append(columns(table, ["speeds, m/s", "slowest", "middle", "fastest", "tilt, deg"]))
        lines.append("  tilt: of the fastest wave's displacement against its direction")
    for word, end in zip(("slowest", "fastest"), derived.extremes["sound_m_per_s"], strict=True):
        lines.append(_row(f"{word} of all, m/s", _value(end.value, 0), _near(end.along, r)))
    lines.append(_row("Debye speed, m/s", _value(heat.speed, 0), f"at a density of {e.density:.0f} kg/m^3"))
    if heat.atoms is not None:
        lines.append(_row("Debye temperature, K", _value(heat.atoms, 1), "counting atoms; exact average"))
    if heat.molecules is not None:
        count = heat.molecules_in_cell
        lines.append(_row("", _value(heat.molecules, 1), f"counting molecules, {count} in the cell"))
    if heat.shortcut is not None:
        lines.append(_row("", plain(heat.shortcut, 1), "Anderson's shortcut, counting atoms"))
    return [*lines, ""]


def _axes(e: ElasticCrystal) -> list[str]:
    r = e.frame.rotation
    lines = [heading("Axes"), paragraph(f"components in frame {e.frame.name}: {e.frame.axes}", "  ")]
    if np.abs(r - np.eye(3)).max() > 1e-12:
        rows = "; ".join(f"{axis} = ({' '.join(plain(x, 4) for x in row)})" for axis, row in zip("XYZ", r, strict=True))
        lines.append(paragraph(f"in the given frame {rows}", "  "))
    if e.axes is not None:
        lines.append(paragraph(f"(hkl) and [uvw] refer to {e.axes.words}", "  "))
        if e.axes.revolution is not None:
            lines.append(paragraph("hexagonal: every direction at the same angle to c is elastically alike", "  "))
    moduli = e.moduli.rotated(r, e.frame.name)
    letter = "B (symmetric part)" if np.abs(e.stress).max() > 0 else "stiffness"
    lines.append(f"  {letter}, GPa")
    lines.append(columns([[f"  {c}", *(plain(x, 2) for x in row)] for c, row in zip(COMPONENTS, moduli.voigt, strict=True)]))
    return lines
