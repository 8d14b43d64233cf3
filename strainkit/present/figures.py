"""A figure with its words: drawn by matplotlib without a display, shown in a page or a notebook, or written to a file."""

from __future__ import annotations

import io
import re
from collections.abc import Sequence
from dataclasses import dataclass
from html import escape
from typing import Any

from strainkit import __version__

__all__ = ["DARK_GROUND", "FORMATS", "INK", "LINE", "MUTED", "SERIES", "Drawing", "drawing", "new_figure"]

#: formats that figures are written in
FORMATS = ("png", "svg", "pdf")

#: ink of text and axes, of minor text, and of grids on a white page; inside a page they become its own colours
INK, MUTED, LINE = "#14181d", "#57606b", "#d3d8de"
#: curves: M. Okabe & K. Ito's colours for every kind of colour vision (2008), the ones that stand on white and on dark
SERIES = ("#0072b2", "#d55e00", "#009e73", "#cc79a7", "#7a6a00", "#56708a")
_SERIES_DARK = ("#4ea8e0", "#f08a3c", "#2bc596", "#e59cc4", "#cdb93a", "#9db4ca")
DARK_GROUND = dict(zip(SERIES, _SERIES_DARK, strict=True))

_PROPERTIES = {INK: "--ink", MUTED: "--muted", LINE: "--line", **{c: f"--series-{i}" for i, c in enumerate(SERIES)}}

_STYLE: dict[str, Any] = {
    "font.family": "DejaVu Sans",
    "font.size": 8.5,
    "mathtext.fontset": "dejavusans",
    "mathtext.default": "regular",
    "axes.facecolor": "none",
    "axes.edgecolor": MUTED,
    "axes.labelcolor": INK,
    "axes.linewidth": 0.7,
    "axes.spines.top": False,
    "axes.spines.right": False,
    "axes.titlesize": 9,
    "axes.titlecolor": INK,
    "axes.unicode_minus": True,
    "text.color": INK,
    "xtick.color": MUTED,
    "ytick.color": MUTED,
    "xtick.labelcolor": INK,
    "ytick.labelcolor": INK,
    "grid.color": LINE,
    "grid.linewidth": 0.6,
    "lines.linewidth": 1.3,
    "savefig.dpi": 200,
    "svg.fonttype": "path",
    "svg.hashsalt": "strainkit",
    "pdf.fonttype": 42,
}


def style() -> Any:
    """Context in which figures are made and written."""
    from matplotlib import rc_context

    return rc_context(_STYLE)


def new_figure(
    width: float, height: float, left: float = 0.62, right: float = 0.08, bottom: float = 0.5, top: float = 0.1
) -> Any:
    """An empty matplotlib figure of a size and margins in inches that no display ever sees; make it inside `style()`."""
    from matplotlib.backends.backend_agg import FigureCanvasAgg
    from matplotlib.figure import Figure

    figure = Figure(figsize=(width, height))
    FigureCanvasAgg(figure)
    edges = {"left": left / width, "right": 1 - right / width, "bottom": bottom / height, "top": 1 - top / height}
    figure.subplots_adjust(**edges, hspace=0.12)
    return figure


@dataclass(frozen=True)
class Drawing:
    """One figure.

    Attributes
    ----------
    name : str
        File name without ending; letters, digits and hyphens.
    title : str
    description : str
        What can be read off it, for those who cannot see it.
    caption : str
        How to read it.
    figure : matplotlib.figure.Figure
    """

    name: str
    title: str
    description: str
    caption: str
    figure: Any

    def __post_init__(self) -> None:
        if not re.fullmatch(r"[a-z0-9][a-z0-9-]*", self.name):
            raise ValueError(f"figure name {self.name!r} is not a plain file name")

    def to_bytes(self, format: str) -> bytes:
        """The figure as a file on white, with its title and description inside; `format` is one of `FORMATS`."""
        if format == "svg":
            return self._svg("white", 'role="img"', self.name, page=False).encode()
        words = {"Title": self.title, "Creator" if format == "pdf" else "Software": f"strainkit {__version__}"}
        words |= {"Subject" if format == "pdf" else "Description": self.description}
        out = io.BytesIO()
        dates = {"CreationDate": None, "ModDate": None} if format == "pdf" else {}
        with style():
            self.figure.savefig(out, format=format, facecolor="white", metadata={**words, **dates})
        return out.getvalue()

    def inline(self) -> str:
        """SVG element for an HTML page, in the page's own ink; widths are up to the page."""
        return self._svg("none", 'class="figure" role="img"', self.name, page=True)

    def _repr_html_(self) -> str:
        return f'<div style="max-width:34rem;background:white">{self._svg("white", "role=img", self.name, page=False)}</div>'

    def _svg(self, ground: str, attributes: str, prefix: str, page: bool) -> str:
        out = io.StringIO()
        with style():
            self.figure.savefig(out, format="svg", facecolor=ground, metadata={"Date": None, "Creator": None})
        body = re.sub(r"<!--.*?-->|<metadata>.*?</metadata>", "", out.getvalue(), flags=re.DOTALL)
        view = re.search(r'viewBox="([\d. ]+)"', body)
        assert view is not None
        body = body[body.index(">", body.index("<svg")) + 1 :]
        body = re.sub(r' d="([^"]*)"', lambda found: f' d="{_short_path(found[1])}"', body)
        body = re.sub(r' [xy]="[^"]*"|translate\([^)]*\)', lambda found: _rounded(found[0], 2), body)
        body = re.sub(r'<g id="[^"]*"', "<g", body).replace("xlink:href", "href")
        # several figures share one page: their ids must differ
        body = re.sub(r'( id="|href="#|url\(#)', rf"\g<1>{prefix}-", body)
        body = re.sub(r"\n\s*", "\n", body).strip()
        if page:
            for colour, name in _PROPERTIES.items():
                body = body.replace(colour, f"var({name})")
        width, height = view[1].split()[2:]
        size = "" if page else f' width="{width}pt" height="{height}pt"'
        words = (
            f'<title id="{prefix}-title">{escape(self.title)}</title><desc id="{prefix}-desc">{escape(self.description)}</desc>'
        )
        labels = f'aria-labelledby="{prefix}-title" aria-describedby="{prefix}-desc"'
        by = "" if page else f' data-generator="strainkit {__version__}"'
        return f'<svg xmlns="http://www.w3.org/2000/svg" viewBox="{view[1]}"{size}{by} {attributes} {labels}>{words}{body}'


def _short_path(path: str) -> str:
    """A path with its coordinates to a tenth of a point, and without the commands that need not be repeated."""
    kept, last = [], ""
    for token in _rounded(path, 1).split():
        if token.isalpha():
            if token == "L" and last in ("L", "M"):
                continue
            last = token
        kept.append(token)
    return " ".join(kept)


def _rounded(text: str, digits: int) -> str:
    """The text with its decimal numbers cut to some digits."""
    return re.sub(r"-?\d+\.\d+", lambda found: f"{float(found[0]):.{digits}f}".rstrip("0").rstrip("."), text)


def drawing(name: str, title: str, description: Sequence[str], caption: str, figure: Any) -> Drawing:
    """A drawing whose description is several sentences."""
    return Drawing(name, title, " ".join(description), caption, figure)
