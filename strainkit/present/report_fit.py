"""Sections of a report about the fit: tensor, stress against strain, strain magnitude, energies."""

from __future__ import annotations

import numpy as np

from strainkit.fit.magnitude import Convergence
from strainkit.fit.regression import Regression
from strainkit.fit.result import Fit
from strainkit.present.figures_curves import expected_error, magnitude_shifts, shape_data, stress_strain
from strainkit.present.numbers import plain, uncertain
from strainkit.present.report_page import Block, Cell, Facts, Figures, Paragraph, Row, Section, Table, number
from strainkit.tensors.sixvectors import COMPONENTS, stress_to_voigt

__all__ = ["energy_section", "magnitude_section", "shapes_section", "tensor_section"]


def tensor_section(fit: Fit, frame: str) -> Section:
    """Constants with errors and intervals, the matrix in a frame, noise and reference stress."""
    data, chosen, r = fit.to_dict(frame), fit.plan.frames[frame], fit.regression
    header = ["constant", "GPa", "standard error", "95 % interval"] + (["finer settings"] if fit.finer else [])
    header += ["ions relaxed"] if fit.relaxed else []
    relaxed = data["relaxed_ion"]
    rows: list[Row] = []
    for i, constant in enumerate(data["constants"]):
        value, error, (low, high) = constant["value_GPa"], constant["standard_error_GPa"], constant["interval95_GPa"]
        known = bool(np.isfinite(value))
        row = [
            constant["name"] if known else f"{constant['name']} (undetermined)",
            number(value if known else None, error),
            Cell(f"{error:.2g}", float(error)) if np.isfinite(error) else Cell("-"),
            Cell(f"{plain(low, 2)} to {plain(high, 2)}", float(low)) if np.isfinite(low) else Cell("-"),
        ]
        if fit.finer is not None:
            spread = None if fit.finer.error is None else float(fit.finer.error[i])
            fixed = "" if fit.finer.determined[i] else "~"
            row.append(Cell(fixed + uncertain(float(fit.finer.change[i]), spread), float(fit.finer.change[i])))
        if relaxed is not None:
            row.append(number(relaxed["constants"][i]["value_GPa"], relaxed["constants"][i]["standard_error_GPa"]))
        rows.append(row)
    note = "; change at finer settings, ~ where the finer jobs do not fix it by themselves" if fit.finer else ""
    caption = f"Independent constants, named in IEEE axes ({fit.plan.frames['ieee'].axes}){note}"
    constants = Table.of("constants", caption, header, rows)
    matrix: list[Row] = [
        [c, *(_element(v, e) for v, e in zip(values, errors, strict=True))]
        for c, values, errors in zip(COMPONENTS, data["stiffness_GPa"], data["standard_error_GPa"], strict=True)
    ]
    held = " of clamped ions" if fit.plan.ions == "clamped" else ""
    caption = f"Stiffness{held}, GPa, with one standard error in the last digits; frame {chosen.name}: {chosen.axes}"
    whole = Table.of("stiffness", caption, ["", *COMPONENTS], matrix, sortable=False)
    dof = r.degrees_of_freedom
    source = "given" if dof is None else f"from {dof} spare degrees of freedom"
    stress = stress_to_voigt(chosen.rotation @ fit.reference_stress @ chosen.rotation.T)
    facts = Facts(
        (
            ("Jobs used", str(len(fit.jobs_used)), f"ions {fit.plan.ions}, order {fit.order}"),
            ("Stress noise", "unknown" if r.noise is None else f"{r.noise:.3g} GPa", "" if r.noise is None else source),
            ("Reference stress", " ".join(plain(x) for x in stress) + " GPa", f"{' '.join(COMPONENTS)}; tension positive"),
            ("Curvature", fit.checks.verdict, ""),
            ("Measure", data["measure"], "at the reference cell"),
        )
    )
    blocks: list[Block] = [whole, constants, facts]
    if fit.relaxed is not None:
        blocks = [*_relaxed(fit, frame), *blocks]
    if fit.checks.treatments:
        blocks.append(_readings(fit))
    return Section("tensor", "Stiffness tensor", tuple(blocks))


def _relaxed(fit: Fit, frame: str) -> list[Block]:
    """The matrix with the answer of the ions, and where it comes from."""
    assert fit.relaxed is not None
    chosen, found = fit.plan.frames[frame], fit.relaxed
    stiffness = found.stiffness.rotated(chosen.rotation, chosen.name)
    errors = stiffness.standard_errors
    rows: list[Row] = []
    for i, c in enumerate(COMPONENTS):
        spread = np.full(6, np.nan) if errors is None else errors[i]
        rows.append([c, *(_element(v, e) for v, e in zip(stiffness.voigt[i], spread, strict=True))])
    modes = found.frequencies
    text = (
        f"The jobs hold their ions; the answer of the ions is added, {found.origin}. Zone-centre modes from {modes[3]:.2f} to "
        f"{modes[-1]:.2f} THz. All that follows is derived from the tensor with relaxed ions."
    )
    caption = f"Stiffness with relaxed ions, GPa; frame {chosen.name}: {chosen.axes}"
    table = Table.of("relaxed-stiffness", caption, ["", *COMPONENTS], rows, sortable=False)
    return [Paragraph(text), table]


def _element(value: float, error: float) -> Cell:
    """An element of the matrix; plain zero where symmetry makes it vanish, error and all."""
    return Cell("0", 0.0) if abs(value) < 1e-9 and not error > 1e-9 else number(value, error)


def _readings(fit: Fit) -> Table:
    """Smallest and largest diagonal constants under each reading of the reference stress, given frame."""
    rows: list[Row] = [[t.name, *(number(float(t.voigt[i, i])) for i in range(6))] for t in fit.checks.treatments]
    caption = "Diagonal of the tensor, GPa, given frame, under each reading of the reference stress"
    return Table.of("readings", caption, ["reading", *COMPONENTS], rows, sortable=False)


def shapes_section(fit: Fit, frame: str) -> Section:
    """A figure for every strain shape, and the residuals of every job."""
    rows: list[Row] = []
    for shape in shape_data(fit, frame):
        for label, t, residual in zip(shape.labels, shape.strain, shape.residual, strict=True):
            if t == 0 and any(row[0] == label for row in rows):
                continue
            worst = int(np.abs(residual).argmax())
            size = 1e3 * float(residual[worst])
            text = f"{size:+.2g}" if abs(size) >= 1e-3 else "0"
            place = [label, shape.name if t else "-", COMPONENTS[worst] if text != "0" else "-"]
            rows.append([*place, Cell(f"{100 * t:g}", float(t)), Cell(text, size)])
    caption = "Largest residual of every job, MPa, and its component"
    table = Table.of("residuals", caption, ["job", "shape", "component", "strain, %", "residual, MPa"], rows, left=3)
    text = (
        "One panel for each strain shape. A straight row of points is a linear response; residuals that bend together are a "
        "nonlinear one; one that stands alone is a bad job."
    )
    return Section("shapes", "Stress against strain", (Paragraph(text), Figures(tuple(stress_strain(fit, frame))), table))


def magnitude_section(found: Convergence | None) -> Section:
    """Constants against the strain magnitude, or that there is one only."""
    title = "Strain magnitude"
    if found is None:
        return Section("magnitude", title, (Paragraph("Not examined: that needs every constant."),))
    words = found.findings[0].message if found.findings else "No doubt about the strain magnitude."
    blocks: list[Block] = [Paragraph(words[0].upper() + words[1:] + ("" if words.endswith(".") else "."))]
    drawings = tuple(d for d in (magnitude_shifts(found), expected_error(found)) if d is not None)
    if drawings:
        blocks.append(Figures(drawings))
    if len(found.magnitudes) > 1:
        blocks.append(_magnitudes(found))
    if found.p_value is not None:
        blocks.append(Paragraph(f"Test of no cubic response: p = {found.p_value:.3g}."))
    return Section("magnitude", title, tuple(blocks))


def _magnitudes(found: Convergence) -> Table:
    heads = [f"{100 * m:g} %" for m in found.magnitudes] + ["all jobs"] + (["zero strain"] if found.zero else [])
    fits: list[Regression | None] = [*found.each, found.common, *([found.zero] if found.zero else [])]
    rows: list[Row] = [[name, *(_constant(fit, i) for fit in fits)] for i, name in enumerate(found.names)]
    return Table.of("magnitudes", "Constants, GPa, from the jobs of each magnitude", ["constant", *heads], rows)


def _constant(fit: Regression | None, i: int) -> Cell:
    if fit is None or not fit.determined[i]:
        return Cell("-")
    return number(float(fit.values[i]), None if fit.covariance is None else float(fit.covariance[i, i]) ** 0.5)


def energy_section(fit: Fit) -> Section:
    """The stiffness seen by the energies of the same jobs."""
    title, check = "Energy check", fit.checks.energy
    if check.curvature_agrees is None:
        return Section("energies", title, (Paragraph("No energies to compare with."),))
    fine = check.curvature_agrees and check.slope_agrees
    text = (
        "The energies of the same jobs give the same stiffness as their stresses."
        if fine
        else "The energies of the same jobs do NOT give the same stiffness or reference stress as their stresses. Causes that "
        "cannot be told apart here: a basis-set (Pulay) stress, ions not fully relaxed, a term missing from the stress."
    )
    rows: list[Row] = []
    for p in check.pairs:
        away = p.curvature_energy - p.curvature_stress
        rows.append(
            [
                p.label,
                Cell(f"{100 * p.magnitude:g}", p.magnitude),
                number(p.curvature_energy),
                number(p.curvature_stress, p.curvature_error),
                Cell(f"{away:+.2g}", away),
                number(p.slope_energy, digits=4),
                number(p.slope_stress, digits=4),
            ]
        )
    header = ["job", "strain, %", "curvature, energies", "stresses", "difference", "slope, energies", "slope, stresses"]
    caption = "Second and first derivative of the energy along each shape, GPa: from energies, and from the fit of stresses"
    return Section("energies", title, (Paragraph(text), Table.of("energies", caption, header, rows)))
