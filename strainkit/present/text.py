"""Plain-text building blocks: aligned columns, wrapped lines, findings last and coloured by severity on a terminal."""

from __future__ import annotations

import os
import re
import sys
import textwrap
from collections.abc import Iterable, Sequence

from strainkit.findings import Finding

__all__ = ["WIDTH", "columns", "findings_text", "heading", "paragraph", "printable"]

#: columns of a line
WIDTH = 80

_COLOURS = {"error": "31", "warning": "33", "info": "36"}


def _coloured() -> bool:
    return sys.stdout.isatty() and not os.environ.get("NO_COLOR") and os.environ.get("TERM") != "dumb"


def heading(text: str) -> str:
    """A heading, bold on a terminal; a long one takes several lines."""
    text = textwrap.fill(text, WIDTH, break_on_hyphens=False)
    return f"\033[1m{text}\033[0m" if _coloured() else text


def paragraph(text: str, indent: str = "") -> str:
    """Text wrapped to the width of a terminal, continuation lines indented by four more."""
    return textwrap.fill(text, WIDTH, initial_indent=indent, subsequent_indent=indent + "    ", break_on_hyphens=False)


def columns(rows: Iterable[Sequence[str]], header: Sequence[str] = (), left: int = 1) -> str:
    """Rows of cells, aligned: the first `left` columns to the left, the others to the right.

    A table that is wider than the terminal is cut into several below each other, each beginning with the first column.
    """
    table = [list(row) for row in ([header] if header else []) + list(rows)]
    if not table:
        return ""
    widths = [max(len(row[i]) for row in table) for i in range(len(table[0]))]
    parts = _fitting(widths)
    if len(parts) > 1:
        return "\n\n".join(columns([[row[i] for i in part] for row in table], left=left) for part in parts)
    lines = []
    for row in table:
        cells = [c.ljust(w) if i < left else c.rjust(w) for i, (c, w) in enumerate(zip(row, widths, strict=True))]
        lines.append("  " + "  ".join(cells).rstrip())
    return "\n".join(lines)


def _fitting(widths: Sequence[int]) -> list[list[int]]:
    """Indices of the columns of each part of a table, so that every part fits a line if it can."""
    parts = [[0]]
    for i in range(1, len(widths)):
        if len(parts[-1]) > 1 and sum(2 + widths[k] for k in [*parts[-1], i]) > WIDTH:
            parts.append([0])
        parts[-1].append(i)
    return parts


#: what may not reach a terminal from a name in a file: controls, line separators, changes of writing direction, half characters
_UNPRINTABLE = r"[\x00-\x08\x0b-\x1f\x7f-\x9f\u061c\u200e\u200f\u2028-\u202e\u2066-\u2069\ud800-\udfff]"
_OWN_CODES = r"\x1b\[(?:0|1|31|33|36)m"


def printable(text: str, as_json: bool = False) -> str:
    """The text with every character that could steer a terminal spelt out; strainkit's own colours stay.

    With `as_json` the text is JSON and stays the same JSON.
    """
    own = "(?!)" if as_json else _OWN_CODES
    return re.sub(f"({own})|{_UNPRINTABLE}", lambda found: found[1] or _spelt(ord(found[0]), as_json), text)


def _spelt(code: int, as_json: bool) -> str:
    return f"\\x{code:02x}" if code < 256 and not as_json else f"\\u{code:04x}"


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
