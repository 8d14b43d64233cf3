"""Plain-text building blocks: aligned columns, wrapped lines, findings last and coloured by severity on a terminal."""

from __future__ import annotations

import os
import sys
import textwrap
from collections.abc import Iterable, Sequence

from strainkit.findings import Finding

__all__ = ["WIDTH", "columns", "findings_text", "heading", "paragraph"]

#: columns of a line
WIDTH = 80

_COLOURS = {"error": "31", "warning": "33", "info": "36"}


def _coloured() -> bool:
    return sys.stdout.isatty() and "NO_COLOR" not in os.environ and os.environ.get("TERM") != "dumb"


def heading(text: str) -> str:
    """A heading, bold on a terminal."""
    return f"\033[1m{text}\033[0m" if _coloured() else text


def paragraph(text: str, indent: str = "") -> str:
    """Text wrapped to the width of a terminal, continuation lines indented by four more."""
    return textwrap.fill(text, WIDTH, initial_indent=indent, subsequent_indent=indent + "    ", break_on_hyphens=False)


def columns(rows: Iterable[Sequence[str]], header: Sequence[str] = (), left: int = 1) -> str:
    """Rows of cells, aligned: the first `left` columns to the left, the others to the right."""
    table = [list(row) for row in ([header] if header else []) + list(rows)]
    if not table:
        return ""
    widths = [max(len(row[i]) for row in table) for i in range(len(table[0]))]
    lines = []
    for row in table:
        cells = [c.ljust(w) if i < left else c.rjust(w) for i, (c, w) in enumerate(zip(row, widths, strict=True))]
        lines.append("  " + "  ".join(cells).rstrip())
    return "\n".join(lines)


def findings_text(findings: Sequence[Finding]) -> str:
    """Findings, the gravest first."""
    if not findings:
        return "No findings."
    order = ("error", "warning", "info")
    lines = [heading("Findings")]
    for found in sorted(findings, key=lambda f: order.index(f.severity)):
        word = f"{found.severity} {found.code}"
        text = paragraph(f"{word}: {found.message} [{found.where}]", "  ")
        if _coloured():
            text = text.replace(word, f"\033[{_COLOURS[found.severity]}m{word}\033[0m", 1)
        lines.append(text)
    return "\n".join(lines)
