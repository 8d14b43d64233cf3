"""What each command prints: plans, job states, tensors, moduli."""

from __future__ import annotations

from collections import Counter
from collections.abc import Sequence
from pathlib import Path
from typing import Any

from strainkit.collect.table import STATUSES, StressTable
from strainkit.crystal.crystal import Crystal
from strainkit.crystal.molecules import Molecules
from strainkit.crystal.symmetry import Symmetry
from strainkit.design.cost import JobCost
from strainkit.errors import counted
from strainkit.fit.finer import FinerChange
from strainkit.fit.result import Fit
from strainkit.present.calculation import calculation_lines, finer_lines
from strainkit.present.numbers import plain, uncertain
from strainkit.present.text import columns, findings_text, heading, paragraph
from strainkit.run.plan import Plan
from strainkit.tensors.rotations import rotate_matrix
from strainkit.tensors.sixvectors import (
    COMPONENTS,
    stiffness_from_voigt,
    stiffness_to_voigt,
    strain_to_voigt,
    stress_to_voigt,
)

__all__ = ["BLIND_SPOT", "cell_text", "fit_text", "inspection_text", "molecules_text", "plan_text", "table_text"]

#: what every fit says about its error bars
BLIND_SPOT = (
    "Error bars are the precision of the fit. They cannot see errors that are smooth in strain: cutoff, k-mesh, grid, "
    "functional, ions that are not fully relaxed."
)

_MOVES = {"rigid": "molecules moved as bodies", "affine": "atoms moved with the lattice"}


def cell_text(crystal: Crystal, symmetry: Symmetry, molecules: Molecules | None = None) -> str:
    """What the cell is."""
    a, b, c, alpha, beta, gamma = crystal.cell_lengths_angles
    lines = [
        heading(f"{crystal.name}: {crystal.formula}, {len(crystal.numbers)} atoms"),
        f"  cell      {a:.4f} {b:.4f} {c:.4f} A  {alpha:.3f} {beta:.3f} {gamma:.3f} deg",
        f"  volume    {crystal.volume:.2f} A^3, density {crystal.density:.0f} kg/m^3",
        f"  symmetry  {symmetry.space_group} (No. {symmetry.number}), Laue class {symmetry.laue_class}, "
        f"within {symmetry.tolerance:g} A",
    ]
    if molecules is not None:
        lines.append(paragraph(molecules_text(molecules), "  "))
    return "\n".join(lines)


def molecules_text(molecules: Molecules) -> str:
    """The molecules of a cell, and what else its bonds make, on one line."""
    found = [f"{count} {formula}" for kind, formula, count in molecules.counts if kind == "molecule"]
    others = [
        f"{count} {kind}{'s' if count > 1 and kind != 'unbonded' else ''} {'of ' if kind != 'unbonded' else ''}{formula}"
        for kind, formula, count in molecules.counts
        if kind != "molecule"
    ]
    return "; ".join(
        [f"molecules {', '.join(found) if found else 'none'}", *([", ".join(others) + " a cell"] if others else [])]
    )


def _head(plan: Plan) -> list[str]:
    names = ", ".join(plan.basis.names)
    return [
        cell_text(plan.crystal, plan.symmetry, plan.molecules),
        paragraph(f"IEEE axes: {plan.frames['ieee'].axes}", "  "),
        paragraph(f"{len(plan.basis.names)} independent constants: {names}", "  "),
    ]


def _promise(plan: Plan) -> str:
    expected = plan.expectation
    errors = {**expected.standard_errors, "K": expected.averages["bulk"], "G": expected.averages["shear"]}
    words = [f"{name} {'undetermined' if e is None else f'{e:.2g}'}" for name, e in errors.items()]
    return paragraph(f"expected standard errors at a stress noise of {expected.noise:g} GPa, in GPa: {', '.join(words)}", "  ")


def plan_text(plan: Plan, out: Path | None = None, costs: Sequence[JobCost] = ()) -> str:
    """The plan of a run: constants, jobs, expected errors, and how its jobs are computed and submitted."""
    known = {cost.label: cost for cost in costs}
    pointed = any(cost.kpoints for cost in costs)
    more = [*(["class"] if known else []), *(["k"] if pointed else [])]
    rows = [
        [
            job.label,
            f"{100 * abs(job.magnitude):.4g}",
            *(plain(100 * x) for x in strain_to_voigt(job.strain)),
            *([known[job.label].laue_class] if known else []),
            *([str(known[job.label].kpoints or "")] if pointed else []),
        ]
        for job in plan.strain_set
    ]
    lines = [
        *_head(plan),
        "",
        heading(f"{counted(len(plan.strain_set) - 1, 'strained job')} and the reference, aim {plan.aim}, ions {plan.ions}"),
        columns(rows, ["job", "size %", *(f"{c} %" for c in COMPONENTS), *more]),
        *_kpoints(plan, costs),
        *_beyond(plan),
        paragraph(f"starting cells: {_moves(plan)}", "  "),
        "  Green-Lagrange strain, engineering shear, in the frame of the input cell",
        _promise(plan),
        f"  spare degrees of freedom {plan.expectation.spare}; cost by lost symmetry about "
        f"{plan.expectation.relative_cost:g} reference jobs",
        *calculation_lines(plan.calculation, out),
        *finer_lines(plan.calculation, plan.finer),
        "",
        findings_text(plan.findings),
    ]
    return "\n".join(lines)


def _moves(plan: Plan) -> str:
    """Where the ions of the jobs start."""
    known = sum(job.label in plan.starts for job in plan.jobs)
    others = sum(bool(job.shape) for job in plan.jobs) - known
    words = [f"{_MOVES[plan.atoms]} in {counted(others, 'job')}" if known else _MOVES[plan.atoms]] if others else []
    return ", ".join([*words, *([f"ions where they are expected to go in {counted(known, 'job')}"] if known else [])])


def _kpoints(plan: Plan, costs: Sequence[JobCost]) -> list[str]:
    """Irreducible points of all strained jobs against the reference."""
    points = {cost.label: cost.kpoints for cost in costs if cost.kpoints}
    rest = points.get(plan.jobs[0].label)
    if not rest:
        return []
    total = sum(points.get(job.label) or 0 for job in plan.strain_set if job.shape)
    return [paragraph(f"k: irreducible k-points; {total} in the strained jobs, {total / rest:.3g} times the reference's", "  ")]


def _beyond(plan: Plan) -> list[str]:
    """Jobs beyond the strain set."""
    counts = Counter(job.kind for job in plan.jobs)
    words = []
    if counts["displaced"]:
        words.append(f"  and {counted(counts['displaced'], 'displaced cell')}, for the answer of the ions")
    if counts["finer"]:
        words.append(f"  and {counts['finer']} of the jobs above again at finer settings")
    return words


def inspection_text(
    plans: Sequence[Plan],
    costs: Sequence[Sequence[JobCost]],
    rungs: Sequence[tuple[float, str, str]],
    mesh: tuple[int, int, int] | None,
) -> str:
    """The cell, its symmetry over tolerances, and what each aim would take."""
    first = plans[0]
    ladder = columns([[f"{t:g} A", g, laue] for t, g, laue in rungs], ["tolerance", "space group", "Laue class"], 3)
    rows, classes = [], []
    for plan, cost in zip(plans, costs, strict=True):
        e = plan.expectation
        points = [] if mesh is None else [str(sum(c.kpoints or 0 for c in cost[1:]))]
        sharp = [f"{x:.2g}" if x is not None else "-" for x in (e.largest, e.averages["bulk"], e.averages["shear"])]
        rows.append([plan.aim, str(len(plan.strain_set) - 1), str(e.spare), f"{e.relative_cost:g}", *points, *sharp])
        kinds = Counter(c.laue_class for c in cost[1:])
        classes.append(f"  {plan.aim}: cells of Laue class {', '.join(f'{n} x {k}' for k, n in kinds.items())}")
    header = ["aim", "jobs", "spare", "cost", *(["k-points"] if mesh else []), "worst C", "K", "G"]
    lines = [
        *_head(first),
        "",
        ladder,
        "",
        heading(f"Strain sets at {100 * max(abs(j.magnitude) for j in first.jobs):g} %"),
        columns(rows, header),
        paragraph(
            f"cost: strained jobs in reference jobs by lost symmetry; the last three: expected standard errors in GPa "
            f"at a stress noise of {first.expectation.noise:g} GPa; spare: degrees of freedom for the noise",
            "  ",
        ),
        *classes,
    ]
    if mesh is not None:
        words = " x ".join(map(str, mesh))
        lines.append(f"  k-mesh {words} (Gamma-centred): {costs[0][0].kpoints} irreducible points in the reference")
    return "\n".join([*lines, _promise(first), "", findings_text(first.findings)])


def table_text(table: StressTable, every: bool = False) -> str:
    """States of the jobs by class, and what is wrong with the ones that cannot be used."""
    counts = Counter((record.status, record.meaning) for record in table.records)
    ordered = sorted(counts.items(), key=lambda item: list(STATUSES).index(item[0][0]))
    lines = [heading(f"{len(table.usable)} of {len(table.records)} jobs usable")]
    lines.append(columns([[s, str(n), meaning] for (s, meaning), n in ordered], left=3))
    if every:
        rows = [
            [r.label, r.status, *(plain(None if r.stress is None else r.stress[i]) for i in range(6))] for r in table.records
        ]
        lines += ["", columns(rows, ["job", "status", *COMPONENTS], left=2), "  Cauchy stress, GPa, positive in tension"]
    bad = [*table.findings, *(f for record in table.records for f in record.findings)]
    again = [record.label for record in table.records if record.status not in ("done", "mismatch", "suspect")]
    if again:
        lines.append(paragraph(f"to run again: {' '.join(again)}", "  "))
    return "\n".join([*lines, "", findings_text(bad)])


def fit_text(fit: Fit, frame: str = "ieee") -> str:
    """Constants with errors, the matrix in a frame, residual stress, findings."""
    data = fit.to_dict(frame)
    rows = []
    changes = [""] * len(data["constants"]) if fit.finer is None else _changes(fit.finer)
    for constant, change in zip(data["constants"], changes, strict=True):
        low, high = constant["interval95_GPa"]
        value = uncertain(constant["value_GPa"], constant["standard_error_GPa"])
        rows.append([constant["name"], value, f"{plain(low, 2)} to {plain(high, 2)}", change])
    noise, dof = fit.regression.noise, fit.regression.degrees_of_freedom
    source = "given" if dof is None else f"from {counted(dof, 'degree')} of freedom"
    chosen = fit.plan.frames[frame]
    stress = stress_to_voigt(chosen.rotation @ fit.reference_stress @ chosen.rotation.T)
    lines = [
        heading(
            f"{fit.plan.crystal.name}: stiffness, {counted(len(fit.jobs_used), 'job')}, ions {fit.plan.ions}, order {fit.order}"
        ),
        columns(rows, ["IEEE axes", "GPa", "95 % interval", "" if fit.finer is None else "finer settings"]),
        *_relaxed_ions(fit, data["relaxed_ion"]),
        "",
        paragraph(f"6x6 in GPa, frame {chosen.name}: {chosen.axes}", "  "),
        columns([[f"  {c}", *(plain(x, 2) for x in row)] for c, row in zip(COMPONENTS, data["stiffness_GPa"], strict=True)]),
        "",
        f"  stress noise      {'unknown' if noise is None else f'{noise:.3g} GPa, {source}'}",
        paragraph(f"reference stress  {' '.join(plain(x) for x in stress)} GPa (xx yy zz yz xz xy)", "  "),
        f"  energies          {_energy_words(fit)}",
        f"  curvature         {fit.checks.verdict}",
        f"  finer settings    {_finer_words(fit)}",
        *_readings(fit, frame),
        "",
        paragraph(BLIND_SPOT, "  "),
        "",
        findings_text(fit.findings),
    ]
    return "\n".join(lines)


def _relaxed_ions(fit: Fit, data: dict[str, Any] | None) -> list[str]:
    """Constants with the answer of the ions, the matrix, and the modes at the zone centre."""
    if fit.relaxed is None or data is None:
        return []
    rows = [[c["name"], uncertain(c["value_GPa"], c["standard_error_GPa"])] for c in data["constants"]]
    modes = fit.relaxed.frequencies
    noise = "unknown" if fit.relaxed.force_noise is None else f"{fit.relaxed.force_noise:.2g} eV/A"
    return [
        "",
        heading(f"with the answer of the ions, {fit.relaxed.origin}"),
        columns(rows, ["IEEE axes", "GPa"]),
        columns([[f"  {c}", *(plain(x, 2) for x in row)] for c, row in zip(COMPONENTS, data["stiffness_GPa"], strict=True)]),
        f"  zone-centre modes  {modes[3]:.2f} to {modes[-1]:.2f} THz; noise of a force component {noise}",
    ]


def _changes(finer: FinerChange) -> list[str]:
    """Change of each constant at finer settings; a tilde where the pairs do not fix it by themselves."""
    errors = [None] * len(finer.change) if finer.error is None else finer.error
    rows = zip(finer.change, errors, finer.determined, strict=True)
    return [f"{'' if fixed else '~'}{uncertain(float(c), None if e is None else float(e))}" for c, e, fixed in rows]


def _finer_words(fit: Fit) -> str:
    """Whether finer settings were tried."""
    if fit.finer is None:
        return "not tried (strainkit prepare --extend RUN --finer FILE)"
    return f"{counted(len(fit.finer.labels), 'job')} compared; ~ marks what they do not fix by themselves"


def _energy_words(fit: Fit) -> str:
    """The energy check in a line."""
    check = fit.checks.energy
    if check.curvature_agrees is None:
        return "none to compare with"
    worst = max(check.pairs, key=lambda p: abs(p.curvature_energy - p.curvature_stress))
    values = f"{worst.curvature_energy:.2f} against {worst.curvature_stress:.2f} GPa at worst"
    if check.curvature_agrees and check.slope_agrees:
        return f"agree with the stresses ({values})"
    if check.curvature_agrees:
        worst = max(check.pairs, key=lambda p: abs(p.slope_energy - p.slope_stress))
        values = f"reference stress {worst.slope_energy:.3f} against {worst.slope_stress:.3f} GPa at worst"
    return f"do NOT agree with the stresses ({values})"


def _readings(fit: Fit, frame: str) -> list[str]:
    """The constants under each reading of the reference stress, when that matters."""
    if not fit.checks.treatments:
        return []
    rotation = fit.plan.frames[frame].rotation
    names = fit.plan.basis.names
    rows = []
    for treatment in fit.checks.treatments:
        turned = stiffness_to_voigt(rotate_matrix(rotation, stiffness_from_voigt(treatment.voigt)))
        rows.append([treatment.name, *(plain(turned[int(n[1]) - 1, int(n[2]) - 1], 1) for n in names[:7])])
    return ["", "  readings of the reference stress, GPa", columns(rows, ["", *names[:7]])]
