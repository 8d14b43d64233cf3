"""Checks of a whole set of records against each other. A job that they refuse becomes "suspect": the fit leaves it out."""

from __future__ import annotations

from collections import Counter, defaultdict
from collections.abc import Callable, Sequence
from dataclasses import replace

import numpy as np

from strainkit.collect.paths import energy_jumps, ions_elsewhere, left_over_forces
from strainkit.collect.proofs import prove
from strainkit.collect.table import StressRecord
from strainkit.design.jobs import REFERENCE, StrainJob
from strainkit.findings import Finding, finding
from strainkit.run.plan import Plan
from strainkit.tensors.arrays import FloatArray
from strainkit.tensors.sixvectors import stress_from_voigt, stress_to_voigt

__all__ = ["judge_set", "unjudged"]

#: settings that must be the same in every job of a set -> words for them
SETTINGS = {
    "functional": "functional",
    "dispersion": "dispersion correction",
    "cutoff_eV": "cutoff (eV)",
    "kpoints": "k-points",
    "kpoint_total": "points of the k-mesh",
    "smearing": "smearing",
    "spin": "spin",
    "pseudopotentials": "pseudopotentials",
}
#: of these, the ones that all files of a program print alike
NUMBERS = ("cutoff_eV", "kpoints")
#: codes that belong to the set, not to a job's own files: found anew each time
SET_CODES = frozenset(
    (
        "mixed-settings",
        "mixed-versions",
        "identical-outputs",
        "stress-sign",
        "stress-unit",
        "stress-order",
        "stress-frame",
        "stress-exchanged",
        "set-inconsistent",
        "energy-jump",
        "ions-elsewhere",
        "forces-left",
        "reference-missing",
    )
)
#: share of the jobs that makes their value the one that the others ought to have
_MAJORITY = 2 / 3


def unjudged(record: StressRecord) -> StressRecord:
    """A record as it was before its set was judged."""
    status = "done" if record.status == "suspect" else record.status
    return replace(record, status=status, findings=tuple(f for f in record.findings if f.code not in SET_CODES))


def judge_set(plan: Plan, records: Sequence[StressRecord]) -> tuple[list[StressRecord], list[Finding]]:
    """Hold the finished records of a run against each other.

    Returns
    -------
    records : list of StressRecord
        In the same order; refused ones are "suspect" and carry the finding.
    findings : list of Finding
        About the set as a whole.
    """
    judged = list(records)
    whole: list[Finding] = []
    checks: tuple[Callable[..., list[tuple[Finding, tuple[str, ...]]]], ...] = (_settings, _identical, prove)
    for check in checks:
        for found, refused in check(plan, _finished(plan, judged)):
            judged, whole = _apply(judged, whole, found, refused)
    for softly in (energy_jumps, ions_elsewhere, left_over_forces):
        for found in softly(plan, _finished(plan, judged)):
            judged, whole = _apply(judged, whole, found, ())
    whole += _reference(plan, judged)
    return judged, whole


def _finished(plan: Plan, records: Sequence[StressRecord]) -> list[tuple[StrainJob, StressRecord]]:
    pairs = zip(plan.jobs, records, strict=True)
    return [(job, record) for job, record in pairs if record.status == "done" and record.stress is not None]


def _apply(
    records: list[StressRecord], whole: list[Finding], found: Finding, refused: tuple[str, ...]
) -> tuple[list[StressRecord], list[Finding]]:
    """Mark the refused jobs; a finding about one job goes to its record, any other to the set."""
    marked = [replace(r, status="suspect") if r.label in refused else r for r in records]
    at = next((i for i, r in enumerate(marked) if r.label == found.where), None)
    if at is None:
        return marked, [*whole, found]
    marked[at] = replace(marked[at], findings=(*marked[at].findings, found))
    return marked, whole


def _settings(plan: Plan, done: list[tuple[StrainJob, StressRecord]]) -> list[tuple[Finding, tuple[str, ...]]]:
    found = []
    for finer in (False, True):
        records = [record for job, record in done if (job.kind == "finer") is finer]
        programs = {r.label: _program(r) for r in records}
        found += _mixed("mixed-settings", "program", {label: name for label, name in programs.items() if name})
        # words differ between the files of one program, numbers do not
        kinds = sorted({r.program for r in records})
        for key, word in SETTINGS.items():
            groups = [records] if key in NUMBERS else [[r for r in records if r.program == kind] for kind in kinds]
            for group in groups:
                said = {r.label: r.settings.get(key) for r in group}
                found += _mixed("mixed-settings", word, {label: _plain(v) for label, v in said.items() if v not in (None, "")})
        for kind in kinds:
            versions = {r.label: f"{r.program} {r.version}" for r in records if r.version and r.program == kind}
            found += [(f, ()) for f, _ in _mixed("mixed-versions", "version", versions)]
    # a mesh gives the same number of points in every job of one shape: its strained cells have one symmetry
    shapes: dict[tuple[int, bool], dict[str, str]] = defaultdict(dict)
    for job, record in done:
        if "kpoint_count" in record.settings and job.shape and not job.moved:
            shapes[job.shape, job.kind == "finer"][record.label] = _plain(record.settings["kpoint_count"])
    for values in shapes.values():
        found += _mixed("mixed-settings", "number of k-points", values)
    return found


def _program(record: StressRecord) -> str:
    """The program behind a file; empty for formats that any program's results can be in."""
    first = record.program.split(" ")[0]
    return "" if first in ("extended", "ASE", "table") else record.program if first == "Quantum" else first


def _plain(value: object) -> str:
    return f"{value:.6g}" if isinstance(value, float | int) and not isinstance(value, bool) else str(value)


def _mixed(code: str, word: str, values: dict[str, str]) -> list[tuple[Finding, tuple[str, ...]]]:
    """Jobs whose value is not that of most; without a clear majority one finding, refusing what the reference has not."""
    counts = Counter(values.values()).most_common()
    if len(counts) < 2:
        return []
    usual, number = counts[0]
    if number >= _MAJORITY * len(values):
        odd = [label for label, value in values.items() if value != usual]
        return [
            (finding(code, label, f"{word} {values[label]}, but {usual} in {number} of {len(values)} jobs"), (label,))
            for label in odd
        ]
    text = "; ".join(f"{value} in {_some([k for k, v in values.items() if v == value])}" for value, _ in counts[:4])
    if REFERENCE not in values:
        return [(finding(code, "strain set", f"{word}: {text}"), ())]
    others = tuple(label for label, value in values.items() if value != values[REFERENCE])
    text += "; what the reference has counts, the others are to be run again, or fitted in a run of their own"
    return [(finding(code, "strain set", f"{word}: {text}"), others)]


def _some(labels: Sequence[str]) -> str:
    return ", ".join(labels[:3]) + (f" and {len(labels) - 3} more" if len(labels) > 3 else "")


def _identical(plan: Plan, done: list[tuple[StrainJob, StressRecord]]) -> list[tuple[Finding, tuple[str, ...]]]:
    """Different calculations cannot give the same numbers to the last digit."""
    groups: dict[tuple[object, ...], list[StrainJob]] = defaultdict(list)
    for job, record in done:
        if record.file_sha256 and record.file.startswith("jobs/"):
            groups["the same file, byte for byte", record.file_sha256].append(job)
        printed = _printed(record)
        distinct = len(set(np.abs(printed[np.abs(printed) > 1e-6]).tolist()))
        if (
            distinct > 1 and job.kind != "finer"
        ):  # one number, a pressure, may repeat by chance; finer settings may change little
            groups["the same stress to the last digit", *printed.tolist()].append(job)
        if distinct and record.energy is not None:
            groups["the same stress and energy to the last digit", round(record.energy, 7), *printed.tolist()].append(job)
    found = []
    seen: set[tuple[str, ...]] = set()
    for (what, *_), jobs in groups.items():
        labels = tuple(job.label for job in jobs)
        strained = any(np.abs(job.gradient - jobs[0].gradient).max() > 1e-7 or job.moved for job in jobs)
        finer = tuple(job.label for job in jobs if job.kind == "finer")
        if len(labels) > 1 and labels not in seen and (strained or 0 < len(finer) < len(labels)):
            seen.add(labels)
            text = f"{what}: one of them is a copy"
            found.append((finding("identical-outputs", " and ".join(labels[:3]), text), labels if strained else finer))
    return found


def _printed(record: StressRecord) -> FloatArray:
    """A stress (6,), Voigt, GPa, in the axes of its file, to seven decimals."""
    assert record.stress is not None
    turn = np.eye(3) if record.rotation is None else record.rotation
    return np.asarray(np.round(stress_to_voigt(turn @ stress_from_voigt(record.stress) @ turn.T), 7) + 0.0)


def _reference(plan: Plan, records: Sequence[StressRecord]) -> list[Finding]:
    came = ("done", "suspect")
    missing = [r for job, r in zip(plan.jobs, records, strict=True) if job.kind == "reference" and r.status not in came]
    if not missing or not any(r.status in came for r in records):
        return []
    text = "no usable reference job: its stress and energy are what the others are compared with"
    return [finding("reference-missing", missing[0].label, text)]
