"""What `strainkit report` prints: the verdict of the page and its findings."""

from __future__ import annotations

from pathlib import Path

from strainkit.present.report import Report
from strainkit.present.text import findings_text, heading, paragraph

__all__ = ["report_text"]


def report_text(report: Report, path: Path) -> str:
    """The verdict, where the page is, and the findings."""
    first, *others = report.verdict.sentences
    return "\n".join(
        [
            heading(report.page.title),
            paragraph(first, "  "),
            *(paragraph(sentence, "  ") for sentence in others),
            "",
            f"  figures: {len(report.figures)}, tables: {len(report.tables)}, in {path}",
            "",
            findings_text(report.page.findings),
        ]
    )
