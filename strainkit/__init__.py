"""strainkit: from one relaxed crystal to the fewest strained cells, and from their stresses to a stiffness tensor.

The whole job from a notebook; in a script under ``if __name__ == "__main__":``, as evaluate_run starts processes::

    crystal = strainkit.read_crystal("cell.cif")
    plan, _ = strainkit.write_run(strainkit.plan_run(crystal, [0.01]), Path("run"))
    strainkit.evaluate_run(Path("run"), plan, strainkit.Engine("gfn1-xtb"))
    table = strainkit.collect_run(Path("run"), plan)
    fit = strainkit.fit_run(plan, table)
    report = strainkit.report_run(plan, table, fit)  # shows itself in a notebook; report.figures, report.tables, report.save
    fit.stiffness, strainkit.averages(fit.effective), strainkit.derive_properties(fit, planes=[(0, 0, 1)])
    strainkit.comparison_page(strainkit.compare_crystals([fit, other_fit])).tables["moduli"]
"""

from __future__ import annotations

from importlib import import_module
from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    from strainkit.collect.gather import collect_run
    from strainkit.crystal.crystal import Crystal
    from strainkit.crystal.read import read_crystal
    from strainkit.crystal.symmetry import find_symmetry
    from strainkit.derive.averages import averages
    from strainkit.derive.comparison import compare_crystals
    from strainkit.derive.derived import derive_properties
    from strainkit.errors import StrainkitError
    from strainkit.evaluate.engines import Engine
    from strainkit.evaluate.reference import relax_reference
    from strainkit.evaluate.runset import evaluate_run
    from strainkit.findings import Finding
    from strainkit.fit.result import fit_run
    from strainkit.prepare.runfolder import plan_run, write_run
    from strainkit.present.comparison_page import comparison_page
    from strainkit.present.report import report_run
    from strainkit.run.plan import load_plan
    from strainkit.tensors.stiffness import Stiffness

__version__ = "0.1.0"

__all__ = [
    "Crystal",
    "Engine",
    "Finding",
    "Stiffness",
    "StrainkitError",
    "averages",
    "collect_run",
    "compare_crystals",
    "comparison_page",
    "derive_properties",
    "evaluate_run",
    "find_symmetry",
    "fit_run",
    "load_plan",
    "plan_run",
    "read_crystal",
    "relax_reference",
    "report_run",
    "write_run",
]

_HOME = {
    "Crystal": "crystal.crystal",
    "Engine": "evaluate.engines",
    "Finding": "findings",
    "Stiffness": "tensors.stiffness",
    "StrainkitError": "errors",
    "averages": "derive.averages",
    "collect_run": "collect.gather",
    "compare_crystals": "derive.comparison",
    "comparison_page": "present.comparison_page",
    "derive_properties": "derive.derived",
    "evaluate_run": "evaluate.runset",
    "find_symmetry": "crystal.symmetry",
    "fit_run": "fit.result",
    "load_plan": "run.plan",
    "plan_run": "prepare.runfolder",
    "read_crystal": "crystal.read",
    "relax_reference": "evaluate.reference",
    "report_run": "present.report",
    "write_run": "prepare.runfolder",
}


def __getattr__(name: str) -> Any:
    """Import a public name when it is first used, so that the command line starts quickly."""
    if name in _HOME:
        return getattr(import_module(f"strainkit.{_HOME[name]}"), name)
    raise AttributeError(f"module 'strainkit' has no attribute {name!r}")
