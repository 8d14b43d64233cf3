"""How a run is fitted: what the user chose, as stiffness.json keeps it, for whatever comes after the fit."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING, Any

from strainkit.errors import InputError

if TYPE_CHECKING:
    from strainkit.design.model import Order
    from strainkit.fit.residual import ReferenceStress
    from strainkit.fit.result import Fit
    from strainkit.run.plan import Plan

__all__ = ["FitOptions", "fit_with", "last_options", "recorded_options"]


@dataclass(frozen=True)
class FitOptions:
    """Options of a fit.

    Attributes
    ----------
    order : "linear" or "cubic"
    noise : float or None
        Known stress noise, GPa; None: estimated.
    reading : "real" or "offset"
        What a reference stress is taken for.
    frame : str
        Axes of printed tensors.
    drop : tuple of str
        Labels of jobs to leave out.
    force_constants : str
        phonopy.yaml for the answer of clamped ions; empty for none.
    """

    order: Order = "linear"
    noise: float | None = None
    reading: ReferenceStress = "real"
    frame: str = "ieee"
    drop: tuple[str, ...] = ()
    force_constants: str = ""


def recorded_options(saved: Mapping[str, Any], plan: Plan) -> FitOptions:
    """Options of the fit in a stiffness.json; jobs that the plan has no more are forgotten, and so are the axes of print.

    Raises
    ------
    InputError
        Where they are none.
    """
    labels = {job.label for job in plan.jobs}
    known = "degrees_of_freedom" in saved and saved["degrees_of_freedom"] is None
    order, reading = saved.get("order", "linear"), saved.get("reference_stress_reading", "real")
    noise, dropped = saved.get("noise_GPa") if known else None, saved.get("jobs_dropped") or []
    relaxed = saved.get("relaxed_ion") or {}
    file = (relaxed.get("force_constants_file") or "") if isinstance(relaxed, dict) else None
    sound = order in ("linear", "cubic") and reading in ("real", "offset") and isinstance(dropped, list)
    if not sound or not isinstance(file, str) or not (noise is None or (isinstance(noise, int | float) and noise > 0)):
        from strainkit.fit.result import FITTED

        raise InputError("its options are not those of a fit", FITTED, "Fit again: strainkit fit RUN.")
    drop = tuple(label for label in dropped if isinstance(label, str) and label in labels)
    return FitOptions(order=order, noise=noise, reading=reading, drop=drop, force_constants=file)


def last_options(run: Path, plan: Plan) -> FitOptions:
    """Options of the last fit of a run; the usual ones before the first.

    Raises
    ------
    InputError
        A stiffness.json that cannot be read.
    """
    from strainkit.fit.result import FITTED
    from strainkit.run.files import load_json

    if not (run / FITTED).is_file():
        return FitOptions()
    return recorded_options(load_json(run / FITTED, "strainkit/stiffness"), plan)


def fit_with(plan: Plan, run: Path, options: FitOptions) -> Fit:
    """Fit a run from its stress table.

    Raises
    ------
    InputError
        No stress table, or force constants that cannot be read.
    NoTensorError
        As `fit_run`.
    """
    from strainkit.collect.table import load_table
    from strainkit.fit.result import fit_run

    clamped = plan.ions == "clamped"
    table = load_table(run, ions=clamped)
    matrix, file = None, ""
    if clamped and options.force_constants:
        from strainkit.dynamics.phonons import gamma_constants, load_phonopy

        file = options.force_constants
        matrix = gamma_constants(load_phonopy(Path(file)), plan.crystal)
    return fit_run(plan, table, options.order, options.noise, options.drop, options.reading, matrix, file)
