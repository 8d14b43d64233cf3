"""What finer settings change: one or two pairs once more, against the same pairs of the set.

The difference of the odd parts is (C_finer - C):e, free of the reference stress. One or two pairs rarely fix every constant;
the change is then the one closest to a common relative change of all constants, and what the pairs do not determine is said.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np

from strainkit.collect.table import StressTable
from strainkit.design.model import build_model
from strainkit.findings import Finding, finding
from strainkit.fit.regression import Regression, second_stresses
from strainkit.run.plan import Plan
from strainkit.tensors.arrays import BoolArray, FloatArray
from strainkit.tensors.leastsquares import factorise

__all__ = ["FinerChange", "finer_change"]

#: a change above this part of the constant, or of a tenth of the largest where that is more, matters
MATTERS = 0.01
_CHEAP = 1e3


@dataclass(frozen=True)
class FinerChange:
    """Change of the constants at finer settings.

    Attributes
    ----------
    labels : tuple of str
        Finer jobs that were compared.
    change : (n,)
        C_finer - C, GPa.
    error : (n,) or None
        Standard error, GPa, of the part that is determined.
    determined : (n,) bool
        Whether the pairs fix this constant's change by themselves.
    """

    labels: tuple[str, ...]
    change: FloatArray
    error: FloatArray | None
    determined: BoolArray

    def findings(self, names: Sequence[str], values: FloatArray) -> list[Finding]:
        """A warning when the change is larger than two standard errors and one percent of the constants (n,), GPa."""
        scale = np.maximum(np.abs(values), 0.1 * np.abs(values).max())
        real = np.abs(self.change) > (0.0 if self.error is None else 2.0 * self.error)
        part = np.where(real, np.abs(self.change) / scale, 0.0)
        worst = int(part.argmax())
        if part[worst] <= MATTERS:
            return []
        moved = f"{names[worst]} by {self.change[worst]:+.3g} GPa ({100 * part[worst]:.2g} %)"
        text = f"finer settings move {moved}: the set is not converged"
        return [finding("finer-settings-matter", ", ".join(self.labels), text)]

    def to_dict(self, names: Sequence[str]) -> dict[str, Any]:
        """JSON-ready."""
        errors = [None] * len(names) if self.error is None else self.error.tolist()
        return {
            "jobs": list(self.labels),
            "changes": [
                {"name": name, "change_GPa": float(change), "standard_error_GPa": error, "determined": bool(fixed)}
                for name, change, error, fixed in zip(names, self.change, errors, self.determined, strict=True)
            ],
        }


def finer_change(plan: Plan, table: StressTable, regression: Regression) -> FinerChange | None:
    """Change at finer settings; None when no finer pair has come back, or the fit itself is incomplete.

    Parameters
    ----------
    plan : Plan
    table : StressTable
    regression : Regression
        The fit of the strain set.
    """
    usable = {record.label: record.stress for record in table.usable if record.stress is not None}
    jobs = [job for job in plan.jobs if job.kind == "finer" and job.label in usable and _twin(job.label) in usable]
    if not jobs or not regression.determined.all():
        return None
    gradients = np.array([job.gradient for job in jobs])
    model = build_model(np.array([job.strain for job in jobs]), plan.symmetry.rotations, plan.basis.matrices)
    finer, coarse = (
        model.rows(second_stresses(gradients, np.array([usable[label] for label in labels])))
        for labels in ([job.label for job in jobs], [_twin(job.label) for job in jobs])
    )
    odd = model.odd_part(model.matrix[:, model.constants])
    if not np.abs(odd).max() > 1e-9:
        return None
    solver = _common_first(odd, regression.values)
    error = None if regression.noise is None else 2**0.5 * regression.noise * np.linalg.norm(solver, axis=1)
    change = solver @ model.odd_part(finer - coarse)
    return FinerChange(tuple(job.label for job in jobs), change, error, factorise(odd).determined)


def _common_first(odd: FloatArray, values: FloatArray) -> FloatArray:
    """Solver (n, rows) of the change that is closest to one common relative change of all constants (n,)."""
    scaled = odd * np.maximum(np.abs(values), 1e-3 * np.abs(values).max())
    common = scaled @ np.sign(values)
    # a column that costs next to nothing takes the common part; the smallest deviations from it explain the rest
    wide = np.column_stack([_CHEAP * common, scaled])
    found = np.linalg.pinv(wide, rcond=1e-9)
    relative = found[1:] + np.outer(_CHEAP * np.sign(values), found[0])
    return np.asarray(np.maximum(np.abs(values), 1e-3 * np.abs(values).max())[:, None] * relative)


def _twin(label: str) -> str:
    return label.removesuffix("-finer")
