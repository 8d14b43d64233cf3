"""What a campaign does with one run folder, in a worker process. Each writes its own files whole and returns a summary.

A summary is a small dictionary; "problem" says why a crystal has no result, "disk" holds an error that stops everything.
"""

from __future__ import annotations

from collections import Counter
from collections.abc import Callable, Sequence
from dataclasses import replace
from functools import wraps
from pathlib import Path
from typing import TYPE_CHECKING, Any

from strainkit.errors import DiskError, IncompleteError, NoTensorError, StrainkitError

if TYPE_CHECKING:
    from strainkit.findings import Finding
    from strainkit.fit.options import FitOptions
    from strainkit.run.queues import Queued

__all__ = ["collect_one", "derive_one", "fit_one", "progress_one", "report_one"]

Summary = dict[str, Any]


def _guarded(work: Callable[..., Summary]) -> Callable[..., Summary]:
    """One crystal never stops the others; a disk that cannot be written does."""

    @wraps(work)
    def guarded(*arguments: Any) -> Summary:
        try:
            return work(*arguments)
        except DiskError as error:
            return {"disk": error}
        except StrainkitError as error:
            # what concerns the crystal as a whole is said of it by name already
            place = "" if isinstance(error, NoTensorError | IncompleteError) or not error.where else f" ({error.where})"
            return {"problem": error.what + place, "exit": error.exit_code}
        except OSError as error:
            return {"problem": f"{error.strerror} ({error.filename})", "exit": 3}
        except Exception as error:
            return {"problem": f"unexpected {type(error).__name__}: {error}", "exit": 1}

    return guarded


@_guarded
def collect_one(again: bool, run: Path) -> Summary:
    """Stress table of a run; kept when nothing in its job folders has changed since."""
    from strainkit.collect.gather import collect_run
    from strainkit.collect.table import TABLE
    from strainkit.run.files import in_a_hurry
    from strainkit.run.plan import load_plan
    from strainkit.run.state import collected_before, mark_collected, output_signature

    signature = output_signature(run)
    before = None if again else collected_before(run, signature, run / TABLE)
    if before is not None and "findings" in before:
        return before | {"kept": True}
    table = collect_run(run, load_plan(run))
    with in_a_hurry():
        table.save(run)
    counts = Counter(record.status for record in table.records)
    codes = _codes([*table.findings, *(f for record in table.records for f in record.findings)])
    summary = {"statuses": dict(counts), "usable": len(table.usable), "expected": len(table.records), "findings": codes}
    mark_collected(run, signature, run / TABLE, summary)
    return summary | {"kept": False}


@_guarded
def fit_one(options: FitOptions, again: bool, run: Path) -> Summary:
    """Stiffness of a run; kept when table, plan and options are those it was made from.

    Jobs that `strainkit fit RUN --drop` left out of the fit that is there stay left out, its force constants stay in.
    """
    from strainkit import __version__
    from strainkit.fit.options import fit_with, recorded_options
    from strainkit.fit.result import FITTED
    from strainkit.run.files import atomic_write, checksum, dump_json, in_a_hurry
    from strainkit.run.plan import load_plan
    from strainkit.run.state import INPUTS

    digest = checksum(_inputs(run) + f"{options} {__version__}".encode())
    path = run / FITTED
    saved = _saved(run)
    if not again and saved.get(INPUTS) == digest:
        return _fitted(saved, run) | {"kept": True}
    plan = load_plan(run)
    own = recorded_options(saved, plan)
    result = fit_with(plan, run, replace(options, drop=own.drop, force_constants=own.force_constants))
    data = result.to_dict(options.frame) | {INPUTS: digest}
    with in_a_hurry():  # half a file would not be JSON, and is made again
        atomic_write(path, dump_json(data))
    return _fitted(data, run) | {"kept": False}


def _codes(findings: Sequence[Finding]) -> list[str]:
    """Codes of warnings and errors, each once."""
    return sorted({f.code for f in findings if f.severity != "info"})


def _inputs(run: Path) -> bytes:
    """Everything that a fit of this run is made from; the table holds the checksums of the outputs behind ions.json."""
    from strainkit.collect.table import TABLE
    from strainkit.run.plan import MANIFEST

    return b"".join((run / name).read_bytes() for name in (MANIFEST, TABLE) if (run / name).is_file())


def _saved(run: Path) -> dict[str, Any]:
    """The fit that is there; empty when there is none that can be used."""
    from strainkit.fit.result import FITTED
    from strainkit.run.files import load_json

    try:
        return load_json(run / FITTED, "strainkit/stiffness")
    except StrainkitError:
        return {}


def _fitted(data: dict[str, Any], run: Path) -> Summary:
    changed = {f.code for f in _changed(run)}
    codes = sorted(changed.union(f["code"] for f in data["findings"] if f["severity"] != "info"))
    return {"undetermined": data["undetermined"], "findings": codes, "jobs_used": len(data["jobs_used"])}


def _changed(run: Path) -> list[Finding]:
    """A finding when outputs changed since they were collected; plan and table are loaded only where times say so."""
    from strainkit.collect.stale import outputs_changed
    from strainkit.collect.table import TABLE, load_table
    from strainkit.run.plan import load_plan
    from strainkit.run.state import collected_before, output_signature

    if collected_before(run, output_signature(run), run / TABLE) is not None:
        return []
    return outputs_changed(run, load_plan(run), load_table(run))


@_guarded
def progress_one(queued: dict[str, dict[str, Queued]] | None, run: Path) -> Summary:
    """States of the jobs of a run; `queued` holds what the scheduler says, by run folder."""
    from strainkit.collect.progress import read_progress
    from strainkit.run.plan import job_folder, load_plan

    found = read_progress(run, load_plan(run), None if queued is None else queued.get(run.name, {}))
    return {
        "states": found.counts,
        "usable": len(found.table.usable),
        "expected": len(found.jobs),
        "resubmit": [job_folder(label) for label in found.resubmit],
        "core_hours_used": found.core_hours_used,
        "core_hours_left": found.core_hours_left,
    }


@_guarded
def derive_one(options: dict[str, Any], run: Path) -> Summary:
    """Row of the screening table of a run, fitted as last but for the options; one without a tensor has its descriptors."""
    from strainkit.derive.screen import screening_row
    from strainkit.errors import InputError
    from strainkit.fit.options import fit_with, last_options
    from strainkit.run.plan import load_plan

    plan = load_plan(run)
    try:
        fit = fit_with(plan, run, replace(last_options(run, plan), **options))
    except (InputError, NoTensorError) as error:
        return {"row": screening_row(plan, None, error.what), "problem": error.what, "exit": error.exit_code}
    fit = replace(fit, findings=(*_changed(run), *fit.findings))
    row = screening_row(plan, fit)
    return {"row": row, "problem": row["problem"], "findings": _codes(fit.findings)}


@_guarded
def report_one(options: dict[str, Any], frame: str, force: bool, again: bool, run: Path) -> Summary:
    """Report of a run, fitted as last but for the options; kept when younger than plan, table and fit, and as usual."""
    from strainkit.collect.table import TABLE, load_table
    from strainkit.fit.options import fit_with, last_options
    from strainkit.fit.result import FITTED
    from strainkit.present.report import REPORT, refuse_foreign, report_run
    from strainkit.run.plan import MANIFEST, load_plan

    path = run / REPORT
    usual = not again and not options and frame == "ieee" and path.is_file()
    sources = [run / TABLE, run / MANIFEST, *([run / FITTED] if (run / FITTED).is_file() else [])]
    if usual and path.stat().st_mtime_ns > max(source.stat().st_mtime_ns for source in sources):
        return {"kept": True}
    refuse_foreign(path, force)
    plan, fit, why = load_plan(run), None, ""
    try:
        fit = fit_with(plan, run, replace(last_options(run, plan), **options))
    except NoTensorError as error:
        why = error.what
    table = load_table(run)
    table = replace(table, findings=(*_changed(run), *table.findings))
    report_run(plan, table, fit, frame, run=run, why=why).save(path, force)
    return {"kept": False} | ({"problem": why} if why else {})
