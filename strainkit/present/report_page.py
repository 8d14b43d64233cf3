"""A page as data, and its one HTML file: sections of text, facts, tables and figures under a verdict and its findings.

The template escapes everything but the figures, whose text is outlines; the page loads nothing, and its policy says so to the
browser. Other pages (comparisons) are made of the same parts.
"""

from __future__ import annotations

import base64
import hashlib
from collections.abc import Iterable, Sequence
from dataclasses import dataclass
from html import escape
from typing import Any, ClassVar, Literal

from strainkit import __version__
from strainkit.findings import Finding
from strainkit.present.figures import DARK_GROUND, SERIES, Drawing
from strainkit.present.numbers import uncertain

__all__ = ["GENERATOR", "Block", "Cell", "Facts", "Figures", "Page", "Paragraph", "Row", "Section", "Table", "number", "render"]

#: what the page says it was made by
GENERATOR = f"strainkit {__version__}"

Tone = Literal["good", "doubt", "bad"]


@dataclass(frozen=True)
class Cell:
    """Text of a table's cell, what it is sorted by (its text when None), and the whole of it where the text is cut."""

    text: str
    key: float | None = None
    whole: str = ""


def number(value: float | None, error: float | None = None, digits: int = 2) -> Cell:
    """A number with its standard error in the last digits, sorted by its value."""
    return Cell(uncertain(value, error, digits), None if value is None else float(value))


@dataclass(frozen=True)
class Paragraph:
    """Text."""

    kind: ClassVar[str] = "paragraph"
    text: str


@dataclass(frozen=True)
class Facts:
    """Labels with their values, and a note to each (empty for none)."""

    kind: ClassVar[str] = "facts"
    rows: tuple[tuple[str, str, str], ...]


@dataclass(frozen=True)
class Table:
    """A table.

    Attributes
    ----------
    name : str
        Letters, digits and hyphens.
    caption : str
    header : tuple of str
    rows : tuple of tuples of Cell
    left : int
        Columns of text, to the left; the others are numbers.
    sortable : bool
    """

    kind: ClassVar[str] = "table"
    name: str
    caption: str
    header: tuple[str, ...]
    rows: tuple[tuple[Cell, ...], ...]
    left: int = 1
    sortable: bool = True

    @classmethod
    def of(cls, name: str, caption: str, header: Sequence[str], rows: Iterable[Row], **more: Any) -> Table:
        """Table of cells and plain texts."""
        cells = tuple(tuple(c if isinstance(c, Cell) else Cell(c) for c in row) for row in rows)
        return cls(name, caption, tuple(header), cells, **more)

    def _repr_html_(self) -> str:
        head = "".join(f"<th>{escape(text)}</th>" for text in self.header)
        body = "".join("<tr>" + "".join(f"<td>{escape(c.text)}</td>" for c in row) + "</tr>" for row in self.rows)
        return f"<table><caption>{escape(self.caption)}</caption><thead><tr>{head}</tr></thead><tbody>{body}</tbody></table>"


@dataclass(frozen=True)
class Figures:
    """Figures side by side."""

    kind: ClassVar[str] = "figures"
    drawings: tuple[Drawing, ...]


Row = Sequence[Cell | str]
Block = Paragraph | Facts | Table | Figures


@dataclass(frozen=True)
class Section:
    """A section with its anchor and heading."""

    name: str
    title: str
    blocks: tuple[Block, ...]


@dataclass(frozen=True)
class Page:
    """A whole page.

    Attributes
    ----------
    title, subtitle : str
    tone : "good", "doubt" or "bad"
        Of the verdict.
    verdict : tuple of str
        Sentences, the most important first.
    findings : tuple of Finding
        Gravest first.
    sections : tuple of Section
    """

    title: str
    subtitle: str
    tone: Tone
    verdict: tuple[str, ...]
    findings: tuple[Finding, ...]
    sections: tuple[Section, ...]

    @property
    def tables(self) -> dict[str, Table]:
        """All tables by name."""
        return {b.name: b for section in self.sections for b in section.blocks if isinstance(b, Table)}

    @property
    def drawings(self) -> dict[str, Drawing]:
        """All figures by name."""
        groups = [b for section in self.sections for b in section.blocks if isinstance(b, Figures)]
        return {drawing.name: drawing for group in groups for drawing in group.drawings}


def render(page: Page) -> str:
    """The page as one HTML file that loads nothing."""
    import jinja2

    from strainkit.shipped import shipped_folder

    folder = shipped_folder("templates") / "report"
    environment = jinja2.Environment(
        loader=jinja2.FileSystemLoader(folder),
        autoescape=True,
        undefined=jinja2.StrictUndefined,
        trim_blocks=True,
        lstrip_blocks=True,
    )
    script = (folder / "page.js").read_text(encoding="utf-8").strip()
    digest = base64.b64encode(hashlib.sha256(script.encode()).digest()).decode()
    return environment.get_template("page.html").render(
        page=page,
        generator=GENERATOR,
        style=(folder / "page.css").read_text(encoding="utf-8"),
        script=script,
        script_digest=digest,
        series=list(SERIES),
        series_dark=[DARK_GROUND[colour] for colour in SERIES],
    )
