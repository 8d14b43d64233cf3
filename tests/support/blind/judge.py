"""Judging what `collect` and `fit` say of a faulty set, through the command line alone (in this process, for speed)."""

from __future__ import annotations

import io
import json
import re
import sys
import tempfile
from contextlib import redirect_stderr, redirect_stdout
from dataclasses import dataclass, field
from pathlib import Path

import numpy as np

from strainkit.cli.main import main
from support.blind.faults import NUMBERS, Injected
from support.blind.sets import StrainSet
from support.blind.trace import trace

#: codes that only say that something does not fit
DOES_NOT_FIT = {
    "outlier", "set-inconsistent", "energy-jump", "energy-mismatch", "energy-slope-mismatch", "not-positive-definite"
}  # fmt: skip
#: codes of `fit` that blame the crystal's response: a wrong cause, but no match for a finding that points at the right job
WEAK = {"curved", "magnitude-matters"}
#: codes that follow from a job being refused, or that are about the cell and the set and not about what came back
CONSEQUENCES = {
    "jobs-not-used", "lone-partner", "few-spare-degrees", "no-error-estimate", "undetermined-constants", "reference-missing",
    "reference-stress-unknown", "reference-stress-reading", "no-dispersion", "symmetry-depends-on-tolerance", "atoms-too-close",
    "residual-stress", "clamped-ions", "ions-unanswered",
}  # fmt: skip
#: relative shift that counts where the clean set has no error estimate
WITHOUT_ERRORS = 0.01


@dataclass
class Seen:
    """What the two commands said of one run folder.

    Attributes
    ----------
    findings : set of (code, severity, where, message)
        Warnings and errors of both commands; `collected` those of `collect`.
    constants, errors : dict
        Name -> GPa; a constant without a value is absent.
    used : set of str
        Jobs of the fit; where there is none, those that `collect` left usable.
    trouble : str
        Message of a command that ended with a code that is not 0 or 4, or with a traceback.
    """

    findings: set[tuple[str, str, str, str]] = field(default_factory=set)
    collected: set[tuple[str, str, str, str]] = field(default_factory=set)
    constants: dict[str, float] = field(default_factory=dict)
    errors: dict[str, float] = field(default_factory=dict)
    used: set[str] = field(default_factory=set)
    trouble: str = ""

    @property
    def codes(self) -> set[str]:
        """Codes of the findings."""
        return {finding[0] for finding in self.findings}


def command(*words: object) -> tuple[int, str, str]:
    """Exit code, standard output and standard error of one command."""
    out, err, old = io.StringIO(), io.StringIO(), sys.argv
    sys.argv, code = ["strainkit", *map(str, words)], 0
    try:
        with redirect_stdout(out), redirect_stderr(err):
            main()
    except SystemExit as stop:
        code = int(stop.code or 0)
    finally:
        sys.argv = old
    return code, out.getvalue(), err.getvalue()


def look(work: StrainSet, drop: tuple[str, ...] = (), more: tuple[str, ...] = (), keep: Path | None = None) -> Seen:
    """Write the set, collect it and fit it."""
    seen = Seen()
    with tempfile.TemporaryDirectory() as place:
        folder = keep or Path(place) / "run"
        code, out, err = command("collect", folder, "--json", *work.write(folder), *more)
        if code not in (0, 4):
            seen.trouble = f"collect, exit {code}: {err.strip()[:300]}"
            return seen
        table = json.loads(out)
        said = [f for record in table["records"] for f in record["findings"]] + table["findings"]
        seen.collected = {(f["code"], f["severity"], f["where"], f["message"]) for f in said if f["severity"] != "info"}
        seen.used = {record["label"] for record in table["records"] if record["status"] == "done"}
        code, out, err = command("fit", folder, "--json", *(x for label in drop for x in ("--drop", label)))
        if code in (0, 4, 5) and out.startswith("{"):
            fit = json.loads(out)
            said += fit["findings"]
            values = [c for c in fit["constants"] if c["value_GPa"] is not None]
            seen.constants = {c["name"]: c["value_GPa"] for c in values}
            seen.errors = {c["name"]: c["standard_error_GPa"] for c in values if c["standard_error_GPa"] is not None}
            seen.used = set(fit["jobs_used"])
        elif code not in (0, 4, 5):
            seen.trouble = f"fit, exit {code}: {err.strip()[:300]}"
    seen.findings = {(f["code"], f["severity"], f["where"], f["message"]) for f in said if f["severity"] != "info"}
    return seen


def moved(clean: Seen, faulty: Seen) -> tuple[float, str]:
    """Largest shift of a constant in standard errors of the clean fit, and the shift in words."""
    worst, words = 0.0, "nothing moves"
    for name, value in clean.constants.items():
        if name not in faulty.constants:
            return np.inf, f"{name} is lost"
        error = clean.errors.get(name) or WITHOUT_ERRORS * abs(value) or 1e-9
        own = faulty.errors.get(name)
        shift = faulty.constants[name] - value
        if abs(shift) / error > worst:
            worst = abs(shift) / error
            part = f"{100 * shift / value:+.2g} %" if value else f"{shift:+.2g} GPa"
            words = f"{name} {part}, {worst:.2g} s.e. of the clean fit, {abs(shift) / own if own else np.nan:.2g} of its own"
    return worst, words


@dataclass
class Verdict:
    """ "named", "outlier", "mislabelled", "missed", "no trace" or "no effect", with the reasons."""

    word: str
    injected: Injected
    seen: Seen
    shift: str
    blamed: tuple[str, ...] = ()
    said: tuple[str, ...] = ()


def touches(finding: tuple[str, str, str, str], injected: Injected, work: StrainSet) -> bool:
    """Does a finding speak of the right job, or of the set without naming another job?"""
    _, _, where, message = finding
    names = {x for x in work.labels if re.search(rf"(?<![\w.-]){re.escape(x)}(?![\w-]|\.\d)", f"{where} {message}")}
    shapes = {f"s{job.shape}" for job in work.plan.strain_set if job.label in injected.labels}
    right = bool(names & set(injected.labels)) or bool(shapes & set(re.findall(r"\bs\d+\b(?!-)", where)))
    if finding[0] in DOES_NOT_FIT | WEAK:  # the right pair will do
        right = right or bool(shapes & {f"s{job.shape}" for job in work.plan.strain_set if job.label in names})
    return right or not names or injected.whole


def judge(
    work: StrainSet, injected: Injected, seen: Seen, clean: Seen, expected: Seen, others: tuple[Injected, ...]
) -> Verdict:
    """Class of one fault in one set.

    `expected` is the clean set fitted to the jobs that the faulty fit used, so that a shift is what the fault left behind and
    not what a refused job takes with it; `others` are further faults of the set, whose jobs are not held against it.
    """
    size, shift = moved(expected, seen)
    known = {(f[0], f[2]) for f in clean.findings}
    allowed = CONSEQUENCES - injected.codes
    new = [f for f in seen.findings if (f[0], f[2]) not in known and f[0] not in allowed]
    guilty = {x for i in (injected, *others) for x in i.labels}
    whole = any(i.whole for i in (injected, *others))
    blamed = (
        () if whole else tuple(sorted({f[2] for f in new if f[1] == "error" and f[2] in work.labels and f[2] not in guilty}))
    )
    mine = [f for f in new if touches(f, injected, work)]
    elsewhere = {x for i in others for x in i.labels} - (set() if injected.whole else set(injected.labels))
    foreign = frozenset[str]().union(*(i.codes for i in others)) - injected.codes
    mine = [f for f in mine if not (f[2] in elsewhere and not injected.whole)]
    mine = [f for f in mine if not (f[0] in foreign and (f[2] in elsewhere or f[2] not in injected.labels))]
    said = tuple(sorted(f"{f[0]} ({f[2]}): {f[3]}" for f in (mine or new)))
    if seen.trouble:  # a table that is refused with its line, column and reason
        refused = "is not a number" in seen.trouble
        word = "named" if refused and "job-broken" in injected.codes else "no effect" if refused else "mislabelled"
    elif any(f[0] in injected.codes for f in mine):
        word = "named"
    elif any(f[0] not in DOES_NOT_FIT | WEAK for f in mine) or (blamed and not mine):
        word = "mislabelled"
    elif any(f[0] in DOES_NOT_FIT for f in mine):
        word = "outlier"
    elif mine or (new and not others):
        word = "mislabelled"
    elif size <= 1.0:
        word = "no effect"
    else:
        left = trace(work, seen.used) if injected.numbers_only else "not looked for"
        word, shift = ("missed" if left else "no trace"), f"{shift}; trace in the numbers: {left or 'none'}"
    return Verdict(word, injected, seen, shift, blamed, said or ((seen.trouble,) if seen.trouble else ()))


def mends(work: StrainSet, injected: Injected, seen: Seen, clean: Seen) -> str:
    """For a named fault of a whole table: what is wrong with the option that the message offers; empty when it mends."""
    messages = " ".join(f[3] for f in seen.findings if f[0] in injected.codes)
    found = re.search(r"(--stress-(?:unit|sign|order))[ =]+(\"[^\"]+\"|'[^']+'|[\w/^]+)", messages)
    if not found:
        return "the message offers no option"
    again = look(work, more=(found[1], found[2].strip("\"'")))
    size, shift = moved(clean, again)
    return "" if size < 1.0 and not again.trouble else f"{found[0]} does not mend: {again.trouble or shift}"


def kinds_of(work: StrainSet) -> str:
    """ "real" for outputs of a program, else how the synthetic set is returned."""
    return "real" if work.real else work.kind


def inject(work: StrainSet, names: tuple[str, ...], rng: np.random.Generator) -> tuple[StrainSet, tuple[Injected, ...]] | None:
    """One or two faults in a copy of a set, on jobs of their own; None where they cannot be made there."""
    bad, done = work.copy(), []
    for name in names:
        function, kinds = NUMBERS[name]
        if kinds_of(work) not in kinds:
            return None
        taken = frozenset(x for i in done for x in i.labels if len(i.labels) < len(work.labels))
        made = function(bad, rng, taken)
        if made is None:
            return None
        done.append(made)
    return bad, tuple(done)


__all__ = ["Seen", "Verdict", "command", "inject", "judge", "kinds_of", "look", "mends", "moved"]
