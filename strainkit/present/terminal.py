"""What each command prints: plans, job states, tensors, moduli."""

from __future__ import annotations

from collections import Counter

from strainkit.collect.table import STATUSES, StressTable
from strainkit.crystal.crystal import Crystal
from strainkit.crystal.symmetry import Symmetry
from strainkit.fit.result import Fit
from strainkit.present.numbers import plain, uncertain
from strainkit.present.text import columns, findings_text, heading, paragraph
from strainkit.run.plan import Plan
from strainkit.tensors.sixvectors import COMPONENTS, strain_to_voigt, stress_to_voigt

__all__ = ["BLIND_SPOT", "cell_text", "fit_text", "plan_text", "table_text"]

#: what every fit says about its error bars
BLIND_SPOT = (
    "Error bars are the precision of the fit. They cannot see errors that are smooth in strain: cutoff, k-mesh, grid, "
    "functional, ions that are not fully relaxed."
)


def cell_text(crystal: Crystal, symmetry: Symmetry) -> str:
    """What the cell is."""
    a, b, c, alpha, beta, gamma = crystal.cell_lengths_angles
    lines = [
        heading(f"{crystal.name}: {crystal.formula}, {len(crystal.numbers)} atoms"),
        f"  cell      {a:.4f} {b:.4f} {c:.4f} A  {alpha:.3f} {beta:.3f} {gamma:.3f} deg",
        f"  volume    {crystal.volume:.2f} A^3, density {crystal.density:.0f} kg/m^3",
        f"  symmetry  {symmetry.space_group} (No. {symmetry.number}), Laue class {symmetry.laue_class}, "
        f"within {symmetry.tolerance:g} A",
    ]
    return "\n".join(lines)


def plan_text(plan: Plan, jobs: bool = True) -> str:
    """The plan of a run: constants, jobs, expected errors."""
    expected = plan.expectation
    names = ", ".join(plan.basis.names)
    lines = [
        cell_text(plan.crystal, plan.symmetry),
        paragraph(f"IEEE axes: {plan.frames['ieee'].axes}", "  "),
        paragraph(f"{len(plan.basis.names)} independent constants: {names}", "  "),
        "",
        heading(f"{len(plan.jobs) - 1} strained jobs and the reference, ions {plan.ions}"),
    ]
    if jobs:
        rows = [
            [job.label, f"{100 * abs(job.magnitude):g}", *(plain(100 * x) for x in strain_to_voigt(job.strain))]
            for job in plan.jobs
        ]
        lines.append(columns(rows, ["job", "size %", *(f"{c} %" for c in COMPONENTS)]))
        lines.append("  Green-Lagrange strain, engineering shear, in the frame of the input cell")
    errors = [f"{name} {'undetermined' if e is None else f'{e:.2g}'}" for name, e in expected.standard_errors.items()]
    lines += [
        paragraph(f"expected standard errors for a stress noise of {expected.noise:g} GPa, in GPa: {', '.join(errors)}", "  "),
        f"  spare degrees of freedom {expected.spare}; cost by lost symmetry about {expected.relative_cost:g} reference jobs",
        "",
        findings_text(plan.findings),
    ]
    return "\n".join(lines)


def table_text(table: StressTable, every: bool = False) -> str:
    """States of the jobs by class, and what is wrong with the ones that cannot be used."""
    counts = Counter(record.status for record in table.records)
    lines = [heading(f"{len(table.usable)} of {len(table.records)} jobs usable")]
    lines.append(columns([[s, str(counts[s]), meaning] for s, meaning in STATUSES.items() if counts[s]], left=3))
    if every:
        rows = [
            [r.label, r.status, *(plain(None if r.stress is None else r.stress[i]) for i in range(6))] for r in table.records
        ]
        lines += ["", columns(rows, ["job", "status", *COMPONENTS], left=2), "  Cauchy stress, GPa, positive in tension"]
    bad = [f for record in table.records for f in record.findings]
    again = [record.label for record in table.records if record.status != "done"]
    if again:
        lines.append(paragraph(f"to run again: {' '.join(again)}", "  "))
    return "\n".join([*lines, "", findings_text(bad)])


def fit_text(fit: Fit, frame: str = "ieee") -> str:
    """Constants with errors, the matrix in a frame, residual stress, findings."""
    data = fit.to_dict(frame)
    rows = []
    for constant in data["constants"]:
        low, high = constant["interval95_GPa"]
        rows.append(
            [
                constant["name"],
                uncertain(constant["value_GPa"], constant["standard_error_GPa"]),
                f"{plain(low, 2)} to {plain(high, 2)}",
            ]
        )
    noise, dof = fit.regression.noise, fit.regression.degrees_of_freedom
    source = "given" if dof is None else f"from {dof} degrees of freedom"
    chosen = fit.plan.frames[frame]
    stress = stress_to_voigt(chosen.rotation @ fit.reference_stress @ chosen.rotation.T)
    lines = [
        heading(f"{fit.plan.crystal.name}: stiffness, {len(fit.jobs_used)} jobs, ions {fit.plan.ions}, order {fit.order}"),
        columns(rows, ["IEEE axes", "GPa", "95 % interval"]),
        "",
        paragraph(f"6x6 in GPa, frame {chosen.name}: {chosen.axes}", "  "),
        columns([[f"  {c}", *(plain(x, 2) for x in row)] for c, row in zip(COMPONENTS, data["stiffness_GPa"], strict=True)]),
        "",
        f"  stress noise      {'unknown' if noise is None else f'{noise:.3g} GPa, {source}'}",
        f"  reference stress  {' '.join(plain(x) for x in stress)} GPa (xx yy zz yz xz xy)",
        "",
        paragraph(BLIND_SPOT, "  "),
        "",
        findings_text(fit.findings),
    ]
    return "\n".join(lines)
