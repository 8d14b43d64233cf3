"""Sections of a report about what the tensor means: moduli, planes and directions."""

from __future__ import annotations

import numpy as np

from strainkit.derive.acoustic import AcousticCheck
from strainkit.derive.derived import Derived
from strainkit.derive.extremes import Extreme
from strainkit.derive.planes import Along, OnPlane
from strainkit.derive.spread import WithError
from strainkit.present.derived import AVERAGED, places
from strainkit.present.figures_projection import projections
from strainkit.present.planes import PLASTICITY
from strainkit.present.report_page import Block, Cell, Facts, Figures, Paragraph, Row, Section, Table, number
from strainkit.present.rows import indices_text, near_text, value_text
from strainkit.tensors.averages import AVERAGES, SCHEMES

__all__ = ["directions_section", "moduli_section"]

_EXTREMES = {
    "young_GPa": ("Young's modulus, GPa", 2),
    "linear_compressibility_per_TPa": ("linear compressibility, 1/TPa", 2),
    "shear_GPa": ("shear modulus, GPa", 2),
    "poisson": ("Poisson's ratio", 3),
    "sound_m_per_s": ("speed of sound, m/s", 0),
}


def moduli_section(derived: Derived | None) -> Section:
    """Averages, anisotropy, extremes, Debye temperatures; or why there are none."""
    title = "Derived moduli"
    missing = _missing(derived)
    if missing is not None or derived is None or derived.averages is None:
        return Section("moduli", title, (Paragraph(missing or ""),))
    means = derived.averages
    rows: list[Row] = []
    for i, name in enumerate(AVERAGES):
        errors = [None] * 3 if means.errors is None else means.errors[i]
        digits = 3 if name == "poisson" else 2
        label = AVERAGED[name] + ("" if name == "poisson" else ", GPa")
        rows.append([label, *(number(v, e, digits) for v, e in zip(means.values[i], errors, strict=True))])
    caption = "A solid of fine grains in all orientations: bounds of Voigt and Reuss, and Hill's mean"
    blocks: list[Block] = [Table.of("averages", caption, ["", *(s.capitalize() for s in SCHEMES)], rows, sortable=False)]
    blocks.append(_extremes(derived))
    index = WithError(means.anisotropy, means.anisotropy_error)
    facts = [("Universal anisotropy index", value_text(index), "zero for an isotropic solid")]
    facts.append(("K/G (Hill)", value_text(WithError(means.pugh, means.pugh_error)), ""))
    for name, value in derived.cauchy.items():
        facts.append((name.replace("-", " - "), f"{value_text(value)} GPa", "zero for central forces (Cauchy)"))
    heat = derived.heat
    if heat is not None and heat.atoms is not None:
        note = "counting atoms; exact average of the speeds of sound"
        facts.append(("Debye temperature", f"{value_text(heat.atoms, 1)} K", note))
    if heat is not None and heat.molecules is not None:
        note = f"counting molecules, {heat.molecules_in_cell} in the cell"
        facts.append(("", f"{value_text(heat.molecules, 1)} K", note))
    blocks.append(Facts(tuple(facts)))
    if derived.acoustic is not None:
        blocks.append(_acoustic(derived.acoustic))
    return Section("moduli", title, tuple(blocks))


def _acoustic(check: AcousticCheck) -> Table:
    """Speeds of the force constants beside those of the stiffness."""
    rows: list[Row] = []
    for i, indices in enumerate(check.directions):
        errors = [None] * 3 if check.errors is None else check.errors[i]
        own = [number(float(v), None if e is None else float(e)) for v, e in zip(check.elastic[i], errors, strict=True)]
        rows.append([indices_text(indices, False), *own, *(number(float(v), digits=3) for v in check.phonons[i])])
    worst = 100 * float(np.abs(check.difference).max())
    caption = f"Speeds of sound, km/s, from the stiffness and from force constants (largest difference {worst:.1f} %)"
    header = ["along", *(f"{word} {k}" for word in ("stiffness", "phonons") for k in ("slow", "middle", "fast"))]
    return Table.of("acoustic", caption, header, rows)


def _missing(derived: Derived | None) -> str | None:
    if derived is None:
        return "None: they need every constant."
    if derived.averages is None:
        return "None: moduli of a crystal that is not stable have no meaning."
    return None


def _extremes(derived: Derived) -> Table:
    rows: list[Row] = []
    for name, (label, digits) in _EXTREMES.items():
        if name not in derived.extremes:
            continue
        for word, end in zip(("least", "most"), derived.extremes[name], strict=True):
            rows.append([label, word, _where(derived, name, end), number(end.value.value, end.value.error, digits)])
    header = ["quantity", "", "where", "value"]
    return Table.of("extremes", "Least and most over all directions", header, rows, left=3, sortable=False)


def _where(derived: Derived, name: str, end: Extreme) -> str:
    r = derived.elastic.frame.rotation
    first = near_text(end.along, r, as_plane=name == "shear_GPa")
    if name == "shear_GPa" and end.side is not None:
        return f"plane {first}, along {near_text(end.side, r)}"
    if name == "poisson" and end.side is not None:
        return f"pull {first}, width {near_text(end.side, r)}"
    return first


def directions_section(derived: Derived | None) -> Section:
    """Maps over the hemisphere, directions, and low-index planes."""
    title = "Planes and directions"
    missing = _missing(derived)
    if missing is not None or derived is None:
        return Section("directions", title, (Paragraph(missing or ""),))
    words = derived.elastic.axes.words if derived.elastic.axes is not None else "no cell"
    text = (
        "Maps of directions: the middle is the Z axis, the rim is everything at right angles to it, and equal areas are equal "
        f"solid angles. (hkl) and [uvw] refer to {words}."
    )
    blocks: list[Block] = [Paragraph(text), Figures(tuple(projections(derived)))]
    if derived.averages is not None:
        rows: list[Row] = [_direction(name, note, what) for name, note, what in places(derived)]
        header = ["along", "", "E, GPa", "compressibility, 1/TPa", "Poisson, least", "Poisson, most", "sound, m/s"]
        blocks.append(Table.of("directions", "Along cell axes, and along what was asked for", header, rows, left=2))
    planes = (*derived.planes, *derived.low_index_planes)
    if planes:
        blocks += [_planes(planes), Paragraph(PLASTICITY)]
    return Section("directions", title, tuple(blocks))


def _direction(name: str, note: str, what: Along) -> list[Cell | str]:
    fastest = what.speeds[2] if what.speeds else None
    return [
        name,
        note,
        number(what.young.value, what.young.error),
        number(what.compressibility.value, what.compressibility.error),
        number(what.poisson_least.value, what.poisson_least.error, 3),
        number(what.poisson_most.value, what.poisson_most.error, 3),
        "-" if fastest is None else number(fastest.value, fastest.error, 0),
    ]


def _planes(planes: tuple[OnPlane, ...]) -> Table:
    rows: list[Row] = []
    for plane in planes:
        cut, slip = plane.cut, plane.least_indices
        along = "any" if slip is None else indices_text(slip[0], False) + (f" {slip[1]:.0f} deg" if slip[1] >= 0.5 else "")
        rows.append(
            [
                indices_text(plane.indices, True),
                number(plane.lattice_spacing, digits=3),
                "-" if cut is None else number(cut.bonds_per_nm2, digits=1),
                "-" if cut is None else number(cut.gap),
                number(plane.shear_least.value, plane.shear_least.error),
                along,
                number(plane.shear_most.value, plane.shear_most.error),
                number(plane.along_normal.young.value, plane.along_normal.young.error),
            ]
        )
    caption = (
        "Planes. d: distance of lattice planes; bonds: covalent bonds (near neighbours in metals and salts) a nm^2 that the "
        "easiest flat cut crosses; gap: distance of the atoms on its two sides, negative where molecules interlock; G: shear "
        "modulus on the plane, least (and the lattice direction nearest to its own) and most; E: Young's modulus across"
    )
    header = ["plane", "d, A", "bonds, 1/nm^2", "gap, A", "least G, GPa", "along", "most G, GPa", "E across, GPa"]
    return Table.of("planes", caption, header, rows)
