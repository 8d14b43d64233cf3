"""The verdict of a report in sentences: how precise, what it cannot see, whether finer settings were tried, is it stable."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from strainkit.collect.table import StressTable
from strainkit.derive.derived import Derived
from strainkit.errors import counted
from strainkit.findings import Finding, worst
from strainkit.fit.finer import FinerChange
from strainkit.fit.judge import undecided
from strainkit.fit.result import Fit
from strainkit.present.report_page import Tone
from strainkit.tensors.arrays import FloatArray

__all__ = ["Verdict", "precision", "verdict"]

#: what no error bar of a fit sees
_BLIND = "errors that are smooth in strain (cutoff, k-mesh, grid, functional, ions not fully relaxed)"


@dataclass(frozen=True)
class Verdict:
    """Sentences, their tone, and the precision in percent (None when unknown)."""

    tone: Tone
    sentences: tuple[str, ...]
    precision_percent: float | None


def precision(fit: Fit) -> tuple[float, str] | None:
    """Largest standard error of a constant and its name; with relaxed ions where these are known.

    In percent of that constant, or of a tenth of the largest one where that is more. None without an error estimate.
    """
    found = fit.regression if fit.relaxed is None else fit.relaxed
    if found.covariance is None:
        return None
    part = np.sqrt(np.diag(found.covariance)) / _scale(found.values)
    at = int(np.nanargmax(part))
    return 100.0 * float(part[at]), fit.plan.basis.names[at]


def _scale(values: FloatArray) -> FloatArray:
    return np.asarray(np.maximum(np.abs(values), 0.1 * np.nanmax(np.abs(values))))


def verdict(fit: Fit | None, derived: Derived | None, table: StressTable, why: str, findings: Sequence[Finding]) -> Verdict:
    """Verdict on a run.

    Parameters
    ----------
    fit : Fit or None
        None when the jobs give no tensor; `why` says why.
    derived : Derived or None
        None without a whole tensor.
    table : StressTable
    why : str
    findings : sequence of Finding
        Those of the page.
    """
    came = f"{len(table.usable)} of {len(table.records)} jobs are usable."
    if fit is None:
        return Verdict("bad", (f"No tensor: {why}.", came), None)
    known = precision(fit)
    tail = _precise(fit, known)
    percent = None if known is None else known[0]
    if fit.undetermined:
        names = ", ".join(fit.undetermined)
        head = f"Incomplete: the jobs that came back do not determine {names}."
        return Verdict("bad", (head, came, *tail), percent)
    assert derived is not None
    if not derived.stability.stable:
        smallest = f"{derived.stability.eigenvalues[0]:.3g} GPa"
        head = f"Not mechanically stable: the smallest eigenvalue of the stiffness is {smallest}. It has no moduli."
        if undecided(derived.elastic.moduli):
            words = f"{smallest}, and zero is within two of its standard errors. No moduli are derived"
            head = f"Stability undecided: the smallest eigenvalue of the stiffness is {words}."
        return Verdict("bad", (head, *tail), percent)
    sentences = [*tail, _stable(derived)]
    if fit.relaxed is not None:
        sentences.append(f"The jobs hold their ions; the answer of the ions is added, {fit.relaxed.origin}.")
    elif fit.plan.ions == "clamped":
        sentences.append("Ions are clamped: this is stiffer than the crystal, whose ions relax.")
    gravest = worst(findings)
    return Verdict("good" if gravest in (None, "info") and known is not None else "doubt", tuple(sentences), percent)


def _precise(fit: Fit, known: tuple[float, str] | None) -> tuple[str, ...]:
    """One sentence on precision, its limits and finer settings, and what the percentage is."""
    if known is None:
        head = "The precision of the fit is unknown, for want of spare degrees of freedom"
        return (f"{head}; it cannot see {_BLIND} anyway, and {_finer(fit)}.",)
    percent, name = known
    subject = "What is determined" if fit.undetermined else "The fit"
    return (
        f"{subject} is precise to {_percent(percent)} %; it cannot see {_BLIND}, and {_finer(fit)}.",
        f"{_percent(percent)} % is one standard error of the worst constant, {name}, relative to it or, where that is more, "
        "to a tenth of the largest constant.",
    )


def _percent(value: float) -> str:
    return f"{value:.0f}" if value >= 9.5 else f"{value:.1f}" if value >= 0.1 else f"{value:.1g}"


def _finer(fit: Fit) -> str:
    if fit.finer is None:
        return "finer settings were not tried"
    return f"finer settings, tried on {counted(len(fit.finer.labels), 'job')}, move {_largest_change(fit.finer, fit)}"


def _largest_change(finer: FinerChange, fit: Fit) -> str:
    part = np.abs(finer.change) / _scale(fit.regression.values)
    at = int(part.argmax())
    name = fit.plan.basis.names[at]
    return f"no constant by more than {_percent(100 * float(part[at]))} % ({name}, {finer.change[at]:+.2g} GPa)"


def _stable(derived: Derived) -> str:
    chance = derived.stability.probability
    if chance is None:
        return "Mechanically stable."
    words = "above 99.9 %" if chance > 0.999 else f"{100 * chance:.1f} %"
    return f"Mechanically stable (probability {words} under the error bars)."
