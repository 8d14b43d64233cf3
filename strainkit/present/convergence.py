"""Convergence with strain magnitude on the terminal: a table and a small figure of the expected error."""

from __future__ import annotations

import numpy as np

from strainkit.fit.magnitude import Convergence
from strainkit.fit.regression import Regression
from strainkit.present.numbers import plain, uncertain
from strainkit.present.text import columns, findings_text, heading, paragraph

__all__ = ["convergence_text"]

_BAR = 44


def convergence_text(name: str, found: Convergence) -> str:
    """Constants per magnitude, common and at zero strain; shift; expected error against magnitude."""
    heads = [*(f"{100 * m:g} %" for m in found.magnitudes), "all"]
    fits: list[Regression | None] = [*found.each, found.common]
    if found.zero is not None:
        heads.append("zero strain")
        fits.append(found.zero)
    rows = []
    for i, constant in enumerate(found.names):
        cells = [_cell(fit, i) for fit in fits]
        if found.shift is not None:
            error = None if found.shift_error is None else float(found.shift_error[i])
            cells.append(uncertain(float(found.shift[i]), error))
        rows.append([constant, *cells])
    header = ["GPa", *heads, *(["shift"] if found.shift is not None else [])]
    lines = [heading(f"{name}: constants against strain magnitude"), columns(rows, header)]
    if found.zero is not None:
        lines.append(paragraph("shift: fit of all jobs less the value at zero strain", "  "))
    if found.p_value is not None:
        lines.append(f"  test of no cubic response: F = {plain(found.f_statistic, 2)}, p = {found.p_value:.3g}")
    lines += _figure(found)
    return "\n".join([*lines, "", findings_text(found.findings)])


def _cell(fit: Regression | None, i: int) -> str:
    if fit is None or not fit.determined[i]:
        return "-"
    error = None if fit.covariance is None else float(fit.covariance[i, i]) ** 0.5
    return uncertain(float(fit.values[i]), error)


def _figure(found: Convergence) -> list[str]:
    """Bars of the expected error of the worst constant over a range of magnitudes."""
    if np.isnan(found.noise_error).any():
        return []
    sizes = sorted({*found.magnitudes, *np.geomspace(0.25 * found.magnitudes[0], 4 * found.magnitudes[-1], 9)})
    errors = [float(found.expected_error(size).max()) for size in sizes]
    low, top = np.log(min(errors)), np.log(max(errors))
    title = "noise and bias" if found.bias is not None else "noise alone; bias unknown"
    lines = ["", heading(f"Expected error of the worst constant, GPa ({title}; logarithmic bars)")]
    for size, error in zip(sizes, errors, strict=True):
        bar = "#" * (1 + round(_BAR * (np.log(error) - low) / max(top - low, 1e-9)))
        mark = " <- here" if size in found.magnitudes else ""
        lines.append(f"  {100 * size:7.3g} %  {error:8.3g}  {bar}{mark}")
    if found.best is not None:
        lines.append(f"  smallest expected error over all constants near {100 * found.best:.2g} %")
    return lines
