"""The page of `strainkit derive`: one section a question, in the order a crystal engineer asks them."""

from __future__ import annotations

from collections import Counter

import numpy as np

from strainkit.derive.acoustic import AcousticCheck
from strainkit.derive.averages import Averages
from strainkit.derive.derived import Derived, Direction
from strainkit.derive.elastic import ElasticCrystal
from strainkit.derive.extremes import Extreme, ratio
from strainkit.derive.planes import Along
from strainkit.derive.spread import WithError
from strainkit.fit.judge import undecided
from strainkit.present.numbers import plain, uncertain
from strainkit.present.planes import sheared_text
from strainkit.present.rows import indices_text, near_text, row, value_text
from strainkit.present.text import columns, findings_text, heading, paragraph
from strainkit.tensors.averages import AVERAGES, SCHEMES
from strainkit.tensors.sixvectors import COMPONENTS, stiffness_to_voigt, to_mandel

__all__ = ["AVERAGED", "derived_text", "places"]

AVERAGED = {
    "bulk_GPa": "bulk modulus",
    "shear_GPa": "shear modulus",
    "young_GPa": "Young's modulus",
    "poisson": "Poisson's ratio",
}


def derived_text(derived: Derived, blind_spot: str = "") -> str:
    """The whole page, 80 columns; `blind_spot` is what the error bars cannot see."""
    e = derived.elastic
    lines = [heading(f"{e.name}: what the tensor means"), paragraph(e.origin, "  "), ""]
    lines += _believed(derived, blind_spot)
    if derived.averages is not None:
        lines += _squeezed(derived, derived.averages)
        lines += _stretched(derived)
        lines += sheared_text(derived)
        lines += _uneven(derived, derived.averages)
        lines += _sound(derived)
    else:
        lines += ["Nothing else is derived: moduli need a stable tensor.", ""]
    return "\n".join([*lines, *_axes(e), "", findings_text(derived.findings)])


def _believed(derived: Derived, blind_spot: str) -> list[str]:
    s, e = derived.stability, derived.elastic
    if s.probability is None:
        chance = "no error estimate: no probability"
    elif s.probability == 1.0:
        chance = "probability above 99.9 %"
    else:
        chance = f"probability {100 * s.probability:.1f} %"
    lines = [
        heading("Can it be believed"),
        row("stable", "yes" if s.stable else "undecided" if undecided(e.moduli) else "NO", chance),
    ]
    smallest = WithError(float(s.eigenvalues[0]), None if s.errors is None else float(s.errors[0]))
    lines.append(row("smallest eigenvalue, GPa", value_text(smallest), _softest(derived)))
    push = float(np.abs(np.linalg.eigvalsh(e.stress)).max())
    if push > 0:
        change = np.abs(stiffness_to_voigt(e.moduli.mandel - e.waves.mandel)).max()
        lines.append(row("reference stress, GPa", f"{push:.2g}", f"moduli use B, up to {change:.2g} off C"))
    if blind_spot and e.moduli.covariance is not None:
        lines.append(paragraph(blind_spot, "  "))
    counts = Counter(f.severity for f in derived.findings)
    doubts = ", ".join(f"{counts[s]} {s}{'s' * (counts[s] > 1)}" for s in ("error", "warning") if counts[s])
    return [*lines, row("doubts", doubts or "none", "at the end of this page" if doubts else ""), ""]


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
        row("bulk modulus, GPa", value_text(bulk), "of the crystal itself: Reuss"),
        "  linear compressibility, 1/TPa",
    ]
    lines += [row(f"  along {n}", value_text(a.compressibility), note) for n, note, a in places(derived)]
    least, most = derived.extremes["linear_compressibility_per_TPa"]
    lines += _ends(derived, least, most)
    if least.value.value < 0:
        lines.append("  negative: the crystal grows in that direction when it is squeezed from all sides")
    return [*lines, ""]


def places(derived: Derived) -> list[tuple[str, str, Along]]:
    """Cell axes, then the directions and plane normals that were asked for."""
    rows = [(indices_text(axis.indices, False), letters, axis.along) for letters, axis in _alike_axes(derived)]
    rows += [(indices_text(d.indices, False), f"asked for; {d.length:.3f} A long", d.along) for d in derived.directions]
    rows += [
        (f"normal of {indices_text(p.indices, True)}", f"asked for; d {p.lattice_spacing:.3f} A", p.along_normal)
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
        return [row("  least and most", value_text(most.value, digits), "the same in every direction")]
    return [
        row("  least", value_text(least.value, digits), near_text(least.along, r)),
        row("  most", value_text(most.value, digits), near_text(most.along, r)),
    ]


def _stretched(derived: Derived) -> list[str]:
    lines = [heading("Stretched or bent"), "  Young's modulus, GPa (a needle bends with that of its own axis)"]
    lines += [row(f"  along {n}", value_text(a.young), note) for n, note, a in places(derived)]
    return [*lines, *_ends(derived, *derived.extremes["young_GPa"]), ""]


def _uneven(derived: Derived, means: Averages) -> list[str]:
    r = derived.elastic.frame.rotation
    lines = [heading("How uneven"), row("universal anisotropy index", uncertain(means.anisotropy, means.anisotropy_error))]
    for name, words in (("young_GPa", "Young's modulus"), ("shear_GPa", "shear modulus")):
        lines.append(row(f"{words}, most/least", value_text(ratio(*derived.extremes[name]))))
    for word, end in zip(("least", "most"), derived.extremes["poisson"], strict=True):
        assert end.side is not None
        where = f"pull {near_text(end.along, r)}, width {near_text(end.side, r)}"
        lines.append(row(f"Poisson's ratio, {word}", value_text(end.value, 3), where))
    for name, value in derived.cauchy.items():
        lines.append(row(f"{name.replace('-', ' - ')}, GPa", value_text(value), "zero for central forces (Cauchy)"))
    lines += ["", "  As a solid of fine grains in all orientations"]
    table = []
    for i, name in enumerate(AVERAGES):
        errors = [None] * 3 if means.errors is None else means.errors[i]
        cells = [uncertain(v, s, 3 if name == "poisson" else 2) for v, s in zip(means.values[i], errors, strict=True)]
        table.append([AVERAGED[name] + ("" if name == "poisson" else ", GPa"), *cells])
    lines.append(columns(table, ["", *(scheme.capitalize() for scheme in SCHEMES)]))
    lines.append(row("K/G (Hill)", uncertain(means.pugh, means.pugh_error)))
    return [*lines, ""]


def _sound(derived: Derived) -> list[str]:
    e, heat, r = derived.elastic, derived.heat, derived.elastic.frame.rotation
    lines = [heading("Sound")]
    if heat is None or e.density is None:
        return [*lines, "  no density, no speeds: give --density or --cell", ""]
    table = []
    for name, _, a in places(derived):
        tilt = np.degrees(np.arccos(min(1.0, abs(float(a.polarisations[2] @ a.direction)))))
        table.append([name, *(value_text(v, 0) for v in a.speeds), f"{tilt:.0f}"])
    if table:
        lines.append(columns(table, ["speeds, m/s", "slowest", "middle", "fastest", "tilt, deg"]))
        lines.append("  tilt: of the fastest wave's displacement against its direction")
    for word, end in zip(("slowest", "fastest"), derived.extremes["sound_m_per_s"], strict=True):
        lines.append(row(f"{word} of all, m/s", value_text(end.value, 0), near_text(end.along, r)))
    lines.append(row("Debye speed, m/s", value_text(heat.speed, 0), f"at a density of {e.density:.0f} kg/m^3"))
    if heat.atoms is not None:
        lines.append(row("Debye temperature, K", value_text(heat.atoms, 1), "counting atoms; exact average"))
    if heat.molecules is not None:
        count = heat.molecules_in_cell
        lines.append(row("", value_text(heat.molecules, 1), f"counting molecules, {count} in the cell"))
    if heat.shortcut is not None:
        lines.append(row("", plain(heat.shortcut, 1), "Anderson's shortcut, counting atoms"))
    return [*lines, *_acoustic(derived.acoustic), ""]


def _acoustic(check: AcousticCheck | None) -> list[str]:
    """Speeds of the force constants beside those of the stiffness."""
    if check is None:
        return []
    table = []
    for i, indices in enumerate(check.directions):
        errors = [None] * 3 if check.errors is None else check.errors[i]
        own = [uncertain(float(v), None if e is None else float(e)) for v, e in zip(check.elastic[i], errors, strict=True)]
        table.append([f"[{' '.join(map(str, indices))}]", *own, *(plain(v, 3) for v in check.phonons[i])])
    worst = 100 * float(np.abs(check.difference).max())
    verdict = "agree" if not check.findings else "do NOT agree: see the findings"
    return [
        "",
        "  against force constants, at zero electric field, km/s",
        columns(table, ["", "from the stiffness", "", "", "from phonons", "", ""]),
        f"  they {verdict} (largest difference {worst:.1f} %)",
    ]


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
