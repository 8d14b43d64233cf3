"""strainkit demo: the whole path on sample cells, with local engines."""

from __future__ import annotations

from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING, Annotated, Any

import typer

from strainkit.cli.options import Json, Quiet, deliver, note, progress

if TYPE_CHECKING:
    from strainkit.fit.result import Fit

#: silicon on the Tersoff potential: npj Comput. Mater. 10, 218 (2024), Table 2; J. Tersoff, Phys. Rev. B 39, 5566 (1989)
#: gives 143, 75 and 69 GPa
PUBLISHED = {"C11": 142.5, "C12": 75.4, "C44": 69.0}

SCENARIO = (
    "An invented question: a foundry cleans its moulds with a blast of pellets pressed from a frozen gas. Would pellets of "
    "solid ammonia be stiffer than the dry ice in use? The crystals are real; the numbers below are those of a fast "
    "tight-binding model (GFN1-xTB, one cell, Gamma point) of static crystals at 0 K. They show the path, not the answer."
)


@dataclass(frozen=True)
class _Crystal:
    cell: str
    engine: str
    magnitude: float


SILICON = _Crystal("silicon", "tersoff", 0.5)
FROZEN = (_Crystal("carbon_dioxide", "gfn1-xtb", 1.0), _Crystal("ammonia", "gfn1-xtb", 1.0))


def demo(
    out: Annotated[Path, typer.Option(help="Folder for the run folders; run again to see what is kept.")] = Path(
        "strainkit-demo"
    ),
    json: Json = False,
    quiet: Quiet = False,
) -> None:
    """The whole path on a sample cell, here and now."""
    import importlib.util

    from strainkit.derive.averages import averages
    from strainkit.present.numbers import uncertain
    from strainkit.present.terminal import BLIND_SPOT
    from strainkit.present.text import columns, findings_text, heading, paragraph

    fits = {SILICON.cell: _path(SILICON, out, quiet)}
    has_xtb = importlib.util.find_spec("tblite") is not None
    if has_xtb:
        fits |= {crystal.cell: _path(crystal, out, quiet) for crystal in FROZEN}
    results = {name: fit.to_dict() for name, fit in fits.items()}

    def text() -> str:
        rows = [
            [c["name"], uncertain(c["value_GPa"], c["standard_error_GPa"]), f"{PUBLISHED[c['name']]:.1f}"]
            for c in results[SILICON.cell]["constants"]
        ]
        lines = [heading("Silicon on the Tersoff potential, GPa"), columns(rows, ["", "strainkit", "published"])]
        if has_xtb:
            lines += ["", heading("Pellets of frozen gas"), paragraph(SCENARIO, "  "), ""]
            table = []
            for crystal in FROZEN:
                fit = fits[crystal.cell]
                constants = zip(fit.plan.basis.names, _pairs(fit), strict=True)
                means = averages(fit.effective)
                errors = means.errors if means.errors is not None else [[None] * 3] * 4
                row = [crystal.cell, *(uncertain(*pair) for _, pair in constants)]
                table.append([*row, *(uncertain(means.values[i, 2], errors[i][2]) for i in range(3))])
            lines.append(columns(table, ["GPa", "C11", "C12", "C44", "bulk K", "shear G", "Young E"]))
            lines.append("  averages by Hill, standard errors of the last digits in brackets")
        else:
            lines += ["", paragraph("Install strainkit[xtb] to see two molecular crystals on a tight-binding engine.")]
        doubts = [f for fit in fits.values() for f in fit.findings if f.severity != "info"]
        lines += ["", paragraph(BLIND_SPOT), "", f"Everything is in {out}/ to look at.", "", findings_text(doubts)]
        return "\n".join(lines)

    deliver(lambda: {"schema": "strainkit/demo/1", "fits": results, "published_GPa": PUBLISHED}, text, json)


def _pairs(fit: Fit) -> list[tuple[float, float | None]]:
    covariance = fit.regression.covariance
    errors = [None] * len(fit.regression.values) if covariance is None else [float(v) ** 0.5 for v in covariance.diagonal()]
    return list(zip(map(float, fit.regression.values), errors, strict=True))


def _path(crystal: _Crystal, out: Path, quiet: bool) -> Fit:
    """Relax, prepare, evaluate, collect and fit one sample cell, saying which commands do the same."""
    from strainkit.collect.gather import collect_run
    from strainkit.crystal.read import read_crystal
    from strainkit.evaluate.engines import Engine
    from strainkit.evaluate.reference import relax_reference
    from strainkit.evaluate.runset import evaluate_run
    from strainkit.fit.result import fit_run
    from strainkit.prepare.runfolder import plan_run, write_run
    from strainkit.prepare.writers import FORMATS
    from strainkit.run.files import atomic_write
    from strainkit.shipped import shipped_folder

    engine = Engine(crystal.engine)
    source = shipped_folder("sample_cells") / f"{crystal.cell}.cif"
    relaxed, run = out / f"{crystal.cell}.extxyz", out / crystal.cell
    note(f"$ strainkit relax {source.name} --engine {crystal.engine} --out {relaxed}", quiet)
    if not relaxed.exists():
        found: Any = relax_reference(read_crystal(source), engine, fmax=1e-4)
        atomic_write(relaxed, FORMATS["extxyz"].write(found.crystal, f"{crystal.cell} relaxed with {crystal.engine}"))
    note(f"$ strainkit prepare {relaxed} --magnitude {crystal.magnitude:g} --out {run}", quiet)
    plan, _ = write_run(plan_run(read_crystal(relaxed), [crystal.magnitude / 100]), run)
    note(f"$ strainkit evaluate {run} --engine {crystal.engine}", quiet)
    with progress(crystal.cell, quiet) as report:
        evaluate_run(run, plan, engine, report=report)
    note(f"$ strainkit collect {run}\n$ strainkit fit {run}\n$ strainkit derive {run}", quiet)
    table = collect_run(run, plan)
    table.save(run)
    fit = fit_run(plan, table)
    fit.save(run)
    return fit
