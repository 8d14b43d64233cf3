"""The report on a run: one page, its figures and its tables, from Python objects; on the command line and in a notebook."""

from __future__ import annotations

from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass
from functools import cached_property
from html import escape
from pathlib import Path
from typing import TYPE_CHECKING, Any

from strainkit.collect.table import StressTable
from strainkit.derive.derived import Derived, derive_properties
from strainkit.derive.elastic import from_fit
from strainkit.errors import InputError, NoTensorError
from strainkit.findings import Finding
from strainkit.fit.magnitude import Convergence, converge
from strainkit.fit.result import Fit, fit_run, usable_jobs
from strainkit.present.figures import FORMATS, Drawing
from strainkit.present.report_derived import directions_section, moduli_section
from strainkit.present.report_fit import energy_section, magnitude_section, shapes_section, tensor_section
from strainkit.present.report_page import Page, Paragraph, Section, Table, render
from strainkit.present.report_provenance import cautions_section, provenance_section
from strainkit.present.report_verdict import Verdict, verdict
from strainkit.run.files import atomic_write
from strainkit.run.outputs import check_output
from strainkit.run.plan import Plan

if TYPE_CHECKING:
    from phonopy import Phonopy

__all__ = ["REPORT", "Report", "refuse_foreign", "report_run", "write_figures"]

#: name of the report in its run folder
REPORT = "report.html"

Indices = tuple[int, ...]


@dataclass(frozen=True)
class Report:
    """A report.

    In a notebook it shows itself; `figures` and `tables` hold its parts by name, which show themselves too.

    Attributes
    ----------
    plan : Plan
    fit : Fit or None
        None when the jobs give no tensor.
    derived : Derived or None
        None without a whole tensor.
    verdict : Verdict
    page : Page
    """

    plan: Plan
    fit: Fit | None
    derived: Derived | None
    verdict: Verdict
    page: Page

    @property
    def figures(self) -> Mapping[str, Drawing]:
        """Figures by name: "young-modulus", "stress-strain-s1" and so on; each holds a matplotlib figure."""
        return self.page.drawings

    @property
    def tables(self) -> Mapping[str, Table]:
        """Tables by name: "constants", "stiffness", "averages" and so on."""
        return self.page.tables

    @cached_property
    def html(self) -> str:
        """The page as one self-contained HTML file."""
        return render(self.page)

    @property
    def exit_code(self) -> int:
        """0; 4 when constants are undetermined; 5 when there is no tensor, or none of a stable crystal."""
        if self.fit is None:
            return 5
        if self.fit.undetermined:
            return 4
        return 0 if self.derived is not None and self.derived.stability.stable else 5

    def to_dict(self) -> dict[str, Any]:
        """JSON-ready: verdict, findings, and names of sections, figures and tables."""
        return {
            "schema": "strainkit/report/1",
            "name": self.plan.crystal.name,
            "verdict": list(self.verdict.sentences),
            "tone": self.verdict.tone,
            "precision_percent": self.verdict.precision_percent,
            "finer_settings_tried": self.fit is not None and self.fit.finer is not None,
            "stable": None if self.derived is None else self.derived.stability.stable,
            "undetermined": [] if self.fit is None else list(self.fit.undetermined),
            "sections": [section.name for section in self.page.sections],
            "figures": list(self.figures),
            "tables": list(self.tables),
            "findings": [f.to_dict() for f in self.page.findings],
        }

    def save(self, path: Path | str, force: bool = False) -> None:
        """Write the page; a file that is no page of strainkit's is replaced only with `force`, those of runs never."""
        save_own(Path(path), self.html.encode(), force)

    def _repr_html_(self) -> str:
        frame = 'width="100%" height="720" style="border:0" title="strainkit report"'
        return f'<iframe {frame} srcdoc="{escape(self.html)}"></iframe>'


def report_run(
    plan: Plan,
    table: StressTable,
    fit: Fit | None = None,
    frame: str = "ieee",
    planes: Sequence[Indices] = (),
    directions: Sequence[Indices] = (),
    given_indices: bool = False,
    study: Phonopy | None = None,
    run: Path | None = None,
    why: str = "",
) -> Report:
    """Report on a run.

    Parameters
    ----------
    plan : Plan
    table : StressTable
    fit : Fit, optional
        Made with the default options when left out.
    frame : str
        Axes of tensors and maps: "given", "ieee" or "crystal".
    planes, directions : sequences of (h, k, l) and [u, v, w]
        What to look at besides the cell axes and the low-index planes.
    given_indices : bool
        Take (hkl) and [uvw] in the cell as given even when that is not a conventional one.
    study : Phonopy, optional
        Force constants of the same cell, whose sound speeds are compared.
    run : Path, optional
        The run folder, for the checksums of its files.
    why : str
        Why there is no fit: nothing is fitted then, and the report says so.
    """
    if fit is None and not why:
        try:
            fit = fit_run(plan, table)
        except NoTensorError as error:
            why = error.what
    derived = found = None
    if fit is not None and not fit.undetermined:
        derived = derive_properties(from_fit(fit, frame, given_indices), planes, directions, study)
        jobs, stresses = usable_jobs(plan, table, fit.dropped)
        found = converge(plan, jobs, stresses, fit.regression.noise if fit.regression.degrees_of_freedom is None else None)
    findings = _findings(plan, table, fit, derived, found)
    said = verdict(fit, derived, table, why, findings)
    sections = [*_fitted(fit, frame), magnitude_section(found), *_energies(fit), moduli_section(derived)]
    sections += [directions_section(derived), provenance_section(plan, table, run), cautions_section()]
    symmetry = plan.symmetry
    subtitle = (
        f"{plan.crystal.formula}, {symmetry.space_group}, Laue class {symmetry.laue_class}: {len(plan.basis.names)} constants"
    )
    title = f"{plan.crystal.name}: elastic stiffness"
    return Report(plan, fit, derived, said, Page(title, subtitle, said.tone, said.sentences, findings, tuple(sections)))


def _fitted(fit: Fit | None, frame: str) -> list[Section]:
    if fit is not None:
        return [tensor_section(fit, frame), shapes_section(fit, frame)]
    nothing = (Paragraph("None: there is no fit."),)
    return [Section("tensor", "Stiffness tensor", nothing), Section("shapes", "Stress against strain", nothing)]


def _energies(fit: Fit | None) -> list[Section]:
    if fit is not None:
        return [energy_section(fit)]
    return [Section("energies", "Energy check", (Paragraph("None: there is no fit."),))]


def _findings(
    plan: Plan, table: StressTable, fit: Fit | None, derived: Derived | None, found: Convergence | None
) -> tuple[Finding, ...]:
    """Everything that the cell, the jobs, the fit, the magnitude and the tensor have to say, gravest first, each once."""
    parts: list[Iterable[Finding]] = [f.findings for f in (derived, fit, found) if f is not None]
    parts += [plan.findings, table.findings, *(record.findings for record in table.records)]
    unique = dict.fromkeys(f for part in parts for f in part)
    order = ("error", "warning", "info")
    return tuple(sorted(unique, key=lambda f: order.index(f.severity)))


def write_figures(drawings: Iterable[Drawing], folder: Path, format: str, force: bool = False) -> list[Path]:
    """Write figures as folder/NAME.format; other files are replaced only with `force`, those of runs never."""
    if format not in FORMATS:
        raise InputError(f"figures are not written as {format!r}", folder, f"Use one of {', '.join(FORMATS)}.")
    written = []
    for drawing in drawings:
        path = folder / f"{drawing.name}.{format}"
        check_output(path, _is_figure, "a figure", force)
        atomic_write(path, drawing.to_bytes(format))
        written.append(path)
    return written


def save_own(path: Path, content: bytes, force: bool) -> None:
    """Write a page where `refuse_foreign` lets it."""
    refuse_foreign(path, force)
    atomic_write(path, content)


def refuse_foreign(path: Path, force: bool) -> None:
    """Raise InputError where a page must not be written: see `check_output`."""
    check_output(path, _is_page, "a page", force)


def _is_page(path: Path) -> bool:
    return b'<meta name="generator" content="strainkit' in path.read_bytes()[:2000]


def _is_figure(path: Path) -> bool:
    """Does the file bear strainkit's name in the form of one of `FORMATS`, and is no page?"""
    content = path.read_bytes()
    return b"strainkit" in content and content.startswith((b"<?xml", b"<svg", b"\x89PNG", b"%PDF"))
