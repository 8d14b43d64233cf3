"""Stress against strain for every shape with its residuals, and how the constants depend on the strain magnitude."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np

from strainkit.errors import counted
from strainkit.fit.magnitude import Convergence
from strainkit.fit.regression import Regression
from strainkit.fit.result import Fit
from strainkit.present.figures import INK, LINE, MUTED, SERIES, Drawing, drawing, new_figure, style
from strainkit.present.numbers import plain
from strainkit.tensors.arrays import FloatArray, IntArray
from strainkit.tensors.rotations import rotation6
from strainkit.tensors.sixvectors import COMPONENTS, from_mandel, strain_to_voigt, stress_to_voigt

__all__ = ["ShapeData", "expected_error", "magnitude_shifts", "shape_data", "stress_strain"]

_MARKS = ("o", "s", "^", "D", "v", "P")
#: a component of stress below this part of the largest is not drawn
_NOTHING = 1e-6


@dataclass(frozen=True)
class ShapeData:
    """Stress of one shape, as it came back and as the model has it.

    Attributes
    ----------
    name : str
        What the labels of its jobs begin with.
    unit : (6,)
        Strain per unit of magnitude, Voigt with engineering shear, in the frame drawn.
    labels : tuple of str
        Jobs, the reference first where it is there.
    strain : (jobs,)
        Signed magnitudes.
    stress, residual : (jobs, 6)
        Second Piola-Kirchhoff, Voigt, GPa, in the frame drawn, every job turned onto the shape's own orientation; data less
        model.
    drawn : tuple of int
        Components that the shape's symmetry allows.
    curve : (n,), (n, 6)
        Strains and stresses of the model.
    """

    name: str
    unit: FloatArray
    labels: tuple[str, ...]
    strain: FloatArray
    stress: FloatArray
    residual: FloatArray
    drawn: tuple[int, ...]
    curve: tuple[FloatArray, FloatArray]


def shape_data(fit: Fit, frame: str = "ieee") -> list[ShapeData]:
    """Every shape of a fit, components in one of the plan's frames."""
    r = fit.regression
    model = r.estimator.model
    turn = rotation6(fit.plan.frames[frame].rotation)
    found = []
    for index, shape in enumerate(model.shapes):
        jobs = np.flatnonzero((model.shape_of_job == index) | (model.shape_of_job < 0))
        data, model_stress = _in_shape(r, index, jobs)
        reach = 1.15 * np.abs(model.signed_magnitudes[jobs]).max()
        grid = np.linspace(-reach, reach, 41)
        stresses = [stress_to_voigt(from_mandel(s @ turn.T)) for s in (data, data - model_stress, _model(r, index, grid))]
        size = np.abs(stresses[0]).max(axis=0)
        labels = tuple(fit.jobs_used[i] for i in jobs)
        found.append(
            ShapeData(
                name=next(label for label, i in zip(labels, jobs, strict=True) if model.shape_of_job[i] == index).split("-")[0],
                unit=strain_to_voigt(from_mandel(turn @ shape.unit)),
                labels=labels,
                strain=model.signed_magnitudes[jobs],
                stress=stresses[0],
                residual=stresses[1],
                drawn=tuple(int(i) for i in np.flatnonzero(size > _NOTHING * max(size.max(), 1e-30))),
                curve=(grid, stresses[2]),
            )
        )
    return found


def _in_shape(r: Regression, index: int, jobs: IntArray) -> tuple[FloatArray, FloatArray]:
    """Data and model (jobs, 6), Mandel, GPa, in the space that the shape allows and in its own orientation."""
    model = r.estimator.model
    shape = model.shapes[index]
    data, fitted = np.zeros((len(jobs), 6)), np.zeros((len(jobs), 6))
    for row, job in enumerate(jobs):
        rows, weight = model.job_of_row == job, model.weights[job] ** 0.5
        prediction = model.matrix[rows] @ r.parameters / weight
        basis = shape.allowed if model.shape_of_job[job] >= 0 else model.reference_basis
        fitted[row] = basis @ prediction
        # the projection of a job is the shape's own basis, turned with the job
        data[row] = basis @ (prediction + model.projections[job].T @ r.residuals[job])
    return data, fitted


def _model(r: Regression, index: int, strains: FloatArray) -> FloatArray:
    """Stress (n, 6), Mandel, GPa, of the model for one shape at signed magnitudes (n,)."""
    model = r.estimator.model
    shape = model.shapes[index]
    job = int(np.flatnonzero(model.shape_of_job == index)[0])
    rows, t = model.job_of_row == job, float(model.signed_magnitudes[job])
    weight = model.weights[job] ** 0.5

    def part(columns: slice) -> FloatArray:
        return np.asarray(shape.allowed @ (model.matrix[rows, columns] @ r.parameters[columns]) / weight)

    ratio = strains[:, None] / t
    out = part(model.reference) + ratio * part(model.constants) + ratio**2 * part(model.even)
    if model.cubic_of_shape:
        out = out + ratio**3 * part(model.cubic)
    return np.asarray(out)


def stress_strain(fit: Fit, frame: str = "ieee") -> list[Drawing]:
    """One figure a shape: stress against strain above, data less model below."""
    noise = fit.regression.noise
    return [_one_shape(shape, noise, fit.plan.frames[frame].name) for shape in shape_data(fit, frame)]


def _one_shape(shape: ShapeData, noise: float | None, frame: str) -> Drawing:
    with style():
        figure = new_figure(4.3, 3.9, left=0.74, top=0.32)
        above, below = figure.subplots(2, 1, sharex=True, height_ratios=[2.6, 1])
        percent = 100 * shape.strain
        if noise is not None:
            below.axhspan(-1e3 * noise, 1e3 * noise, color=LINE, alpha=0.6, linewidth=0)
        for axes in (above, below):
            axes.axhline(0, color=MUTED, linewidth=0.6)
        for i in shape.drawn:
            colour, mark = SERIES[i], _MARKS[i]
            above.plot(100 * shape.curve[0], shape.curve[1][:, i], color=colour, linewidth=1.1)
            above.plot(percent, shape.stress[:, i], mark, color=colour, markersize=4, label=COMPONENTS[i])
            below.plot(percent, 1e3 * shape.residual[:, i], mark, color=colour, markersize=4)
        below.set_xlabel("strain along the shape, %")
        above.set_ylabel("stress, GPa")
        below.set_ylabel("residual, MPa")
        above.margins(x=0.02)
        figure.legend(loc="upper center", ncols=6, frameon=False, handletextpad=0.1, columnspacing=1.2)
        for axes in (above, below):
            axes.yaxis.set_label_coords(-0.17, 0.5)
    strains = ", ".join(f"{c} {plain(x, 2)}" for c, x in zip(COMPONENTS, shape.unit, strict=True) if abs(x) > 5e-3)
    largest = 1e3 * float(np.abs(shape.residual).max())
    words = [
        f"Stress against strain for shape {shape.name} ({strains}), {counted(len(shape.labels), 'job')}.",
        f"Largest residual {largest:.2g} MPa.",
    ]
    caption = (
        f"Shape {shape.name}: {strains}, per unit of magnitude, frame {frame}. Points: jobs, turned onto one orientation; "
        "curves: the fit (second Piola-Kirchhoff stress, Green-Lagrange strain). Below: data less fit"
        + ("." if noise is None else "; the band is one standard deviation of the noise.")
    )
    return drawing(f"stress-strain-{shape.name.lower()}", f"Stress against strain, shape {shape.name}", words, caption, figure)


def magnitude_shifts(found: Convergence) -> Drawing | None:
    """Constants at each magnitude less those at zero strain; None with one magnitude."""
    if found.zero is None:
        return None
    fits = [(f"{100 * m:g} %", fit) for m, fit in zip(found.magnitudes, found.each, strict=True) if fit is not None]
    fits.append(("all", found.common))
    rows = np.arange(len(found.names))[::-1]
    with style():
        figure = new_figure(4.3, 1.0 + 0.2 * len(rows), left=0.5, top=0.34)
        axes = figure.add_subplot()
        axes.axvline(0, color=MUTED, linewidth=0.7)
        for k, (label, fit) in enumerate(fits):
            shift = fit.values - found.zero.values
            error = None if fit.covariance is None else np.sqrt(np.diag(fit.covariance))
            place = rows + 0.5 * (0.5 - (k + 0.5) / len(fits))
            axes.errorbar(
                shift, place, xerr=error, fmt=_MARKS[k % 6], color=SERIES[k % 6], markersize=3.6, elinewidth=0.9, label=label
            )
        axes.set_yticks(rows, found.names)
        axes.set_xlabel("constant less its value at zero strain, GPa")
        axes.grid(axis="y")
        figure.legend(loc="upper center", ncols=len(fits), frameon=False)
        axes.set_ylim(-0.7, len(rows) - 0.3)
    worst = int(np.abs(found.common.values - found.zero.values).argmax())
    shift = found.common.values[worst] - found.zero.values[worst]
    words = [
        f"Shift of {len(rows)} constants from zero strain.",
        f"Largest for all jobs: {found.names[worst]}, {shift:+.3g} GPa.",
    ]
    caption = (
        "Each constant from the jobs of one magnitude, and from all jobs, less its value at zero strain (fit with cubic "
        "terms). Bars: one standard error of the fit at that magnitude."
    )
    return drawing("magnitude-shifts", "Constants against strain magnitude", words, caption, figure)


def expected_error(found: Convergence) -> Drawing | None:
    """Expected error of the worst constant over a range of magnitudes; None without a noise estimate."""
    if np.isnan(found.noise_error).any() or not found.noise_error.max() > 0:
        return None
    sizes = np.geomspace(0.2 * found.magnitudes[0], 3 * found.magnitudes[-1], 61)
    ratio = sizes[:, None] / found.magnitudes[-1]
    noise = (found.noise_error / ratio).max(axis=1)
    total = np.array([found.expected_error(size).max() for size in sizes])
    with style():
        figure = new_figure(4.3, 3.0)
        axes = figure.add_subplot()
        axes.plot(100 * sizes, noise, "--", color=SERIES[0], label="noise")
        if found.bias is not None:
            axes.plot(100 * sizes, np.abs(found.bias).max() * ratio[:, 0] ** 2, ":", color=SERIES[1], label="bias")
            axes.plot(100 * sizes, total, color=INK, label="both, worst constant")
        at = np.array(found.magnitudes)
        axes.plot(100 * at, np.interp(at, sizes, total), "o", color=INK, markersize=4.5, label="this set")
        _log_axes(axes)
        axes.set(xlabel="strain magnitude, %", ylabel="expected error, GPa", ylim=(0.4 * total.min(), 1.5 * total.max()))
        axes.legend(frameon=False)
    words = ["Expected error of the worst constant against strain magnitude, both axes logarithmic."]
    if found.best is not None:
        words.append(f"Smallest over all constants near {100 * found.best:.2g} %.")
    caption = "Expected error of the worst constant: noise falls as one over the magnitude, bias grows as its square." + (
        " The bias is unknown: there is one magnitude only." if found.bias is None else ""
    )
    return drawing("expected-error", "Expected error against strain magnitude", words, caption, figure)


def _log_axes(axes: Any) -> None:
    from matplotlib.ticker import FuncFormatter, LogLocator, NullFormatter

    axes.set(xscale="log", yscale="log")
    for axis in (axes.xaxis, axes.yaxis):
        axis.set_major_locator(LogLocator(10, subs=(1.0, 2.0, 5.0)))
        axis.set_major_formatter(FuncFormatter(lambda value, _: f"{value:g}"))
        axis.set_minor_formatter(NullFormatter())
    axes.grid(alpha=0.8)
