"""Directional quantities on an equal-area projection of the upper hemisphere, as crystallographers draw directions.

J. H. Lambert's azimuthal projection (Schmidt net): a direction at the angle theta from Z lies at sin(theta/2) / sin(45 deg)
from the middle, so that equal solid angles are equal areas. X points down, Y to the right and Z at the reader, as in the
projections of the International Tables for Crystallography A. Directions and their opposites are alike.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np

from strainkit.derive.derived import Derived
from strainkit.derive.directional import linear_compressibility, shear_range, young
from strainkit.derive.elastic import ElasticCrystal
from strainkit.derive.extremes import Extreme
from strainkit.present.figures import MUTED, Drawing, drawing, new_figure, style
from strainkit.present.figures_poles import AXIS_LETTERS, Pole, Room, poles, projected
from strainkit.present.numbers import uncertain
from strainkit.present.rows import near_text
from strainkit.tensors.arrays import FloatArray

__all__ = ["QUANTITIES", "directional_values", "projection", "projections"]

#: part of the colour map that is used: dark ink can be read on all of it
_LIGHTEST, _DARKEST = 1.0, 0.32
#: times that a contour value is written
_LABELS = 2
#: a quantity that varies less than this, relative to its size, is the same in all directions
_EVEN = 1e-6


@dataclass(frozen=True)
class _Quantity:
    title: str
    unit: str
    extreme: str
    ends: tuple[int, ...]
    of_plane: bool


#: name of the figure -> what it shows; `ends` are those of the crystal's extremes that the map itself reaches
QUANTITIES = {
    "young-modulus": _Quantity("Young's modulus", "GPa", "young_GPa", (0, 1), False),
    "linear-compressibility": _Quantity("Linear compressibility", "1/TPa", "linear_compressibility_per_TPa", (0, 1), False),
    "shear-least": _Quantity("Smallest shear modulus on the plane", "GPa", "shear_GPa", (0,), True),
    "shear-most": _Quantity("Largest shear modulus on the plane", "GPa", "shear_GPa", (1,), True),
}


def directional_values(elastic: ElasticCrystal, name: str, directions: FloatArray) -> FloatArray:
    """Values (k,) of a quantity of `QUANTITIES`, in its unit, for unit vectors (k, 3) in the given frame."""
    s = elastic.compliance
    if name == "young-modulus":
        return young(s, directions)
    if name == "linear-compressibility":
        return 1e3 * linear_compressibility(s, directions)
    return shear_range(s, directions)[int(name == "shear-most")]


def projections(derived: Derived) -> list[Drawing]:
    """All quantities of a stable crystal that are not the same in every direction; none of an unstable one."""
    if derived.averages is None:
        return []
    return [found for name in QUANTITIES if (found := projection(derived, name)) is not None]


def projection(derived: Derived, name: str) -> Drawing | None:
    """One quantity over the hemisphere in the crystal's frame; None where every direction is alike.

    Parameters
    ----------
    derived : Derived
        Of a stable tensor.
    name : str
        A key of `QUANTITIES`.
    """
    elastic, quantity = derived.elastic, QUANTITIES[name]
    x, y, values = _grid(elastic, name)
    if np.ptp(values) <= _EVEN * np.abs(values).max():
        return None
    with style():
        figure = new_figure(4.3, 4.9)
        axes = figure.add_axes((0.01, 0.185, 0.98, 0.81))
        filled, lines = _contours(axes, x, y, values)
        room = Room(_mark_extremes(axes, derived, quantity))
        _rim(axes, derived, room)
        _label_contours(axes, lines, room)
        bar = figure.colorbar(filled, cax=figure.add_axes((0.11, 0.1, 0.78, 0.022)), orientation="horizontal")
        bar.outline.set_visible(False)
        bar.set_label(f"{quantity.title}, {quantity.unit}")
        figure.text(0.5, 0.15, _key(elastic.axes is not None), color=MUTED, fontsize=7, ha="center")
    what = "of the plane normal" if quantity.of_plane else "of the direction"
    caption = (
        f"{quantity.title} as a function {what}: equal-area projection of the upper hemisphere in frame "
        f"{elastic.frame.name} ({elastic.frame.axes}); X down, Y right, Z towards you."
    )
    return drawing(name, quantity.title, _words(derived, quantity, values), caption, figure)


def _grid(elastic: ElasticCrystal, name: str) -> tuple[FloatArray, FloatArray, FloatArray]:
    """Places in the disc (r, a) and the values there."""
    radius, turn = np.meshgrid(np.linspace(0.0, 1.0, 46), np.radians(np.linspace(0.0, 360.0, 145)), indexing="ij")
    height = 1.0 - radius**2
    across = np.sqrt(np.maximum(0.0, 1.0 - height**2))
    # the angle turns from X (down) to Y (right)
    vectors = np.stack([across * np.cos(turn), across * np.sin(turn), height], axis=-1).reshape(-1, 3)
    values = directional_values(elastic, name, vectors @ elastic.frame.rotation).reshape(radius.shape)
    return radius * np.sin(turn), -radius * np.cos(turn), values


def _contours(axes: Any, x: FloatArray, y: FloatArray, values: FloatArray) -> tuple[Any, Any]:
    """Filled contours and lines at round values."""
    from matplotlib import colormaps
    from matplotlib.colors import ListedColormap
    from matplotlib.ticker import MaxNLocator

    levels = MaxNLocator(8, steps=[1, 2, 2.5, 5, 10]).tick_values(values.min(), values.max())
    shades = ListedColormap(colormaps["viridis"](np.linspace(_DARKEST, _LIGHTEST, 256)))
    filled = axes.contourf(x, y, values, levels, cmap=shades)
    return filled, axes.contour(x, y, values, levels, colors=INK_ON_MAP, linewidths=0.55)


def _label_contours(axes: Any, lines: Any, room: Room) -> None:
    """Each line's value once or twice, where there is most room for it."""
    decimals = level_decimals(lines.levels)
    for level, path in zip(lines.levels, lines.get_paths(), strict=True):
        text = f"{level:.{decimals}f}"
        size = (0.0155 * len(text) + 0.012, 0.037)
        labelled = 0
        for segment in sorted(_pieces(path), key=len, reverse=True):
            inside = segment[np.hypot(*segment.T) < 0.95]
            if labelled == _LABELS or len(inside) < 6:
                continue
            gaps = room.clearance(inside, size)
            place = inside[int(gaps.argmax())]
            if gaps.max() > 0:
                _chip(axes, place, text)
                room.take(place, size)
                labelled += 1


def _pieces(path: Any) -> list[FloatArray]:
    """Vertices (k, 2) of each piece of a contour line; matplotlib's own splitting would leave most of them out."""
    return np.split(path.vertices, np.flatnonzero(path.codes == path.MOVETO)[1:]) if len(path.vertices) else []


def level_decimals(levels: FloatArray) -> int:
    """Decimals that tell neighbouring levels apart."""
    step = float(levels[1] - levels[0])
    return next((d for d in range(7) if abs(round(step, d) - step) < 1e-6 * step), 7)


#: dark ink on the map and the ground of its labels, the same on light and dark pages
INK_ON_MAP, GROUND = "#0b0e12", "#fbfaf5"


def _chip(axes: Any, place: FloatArray, text: str) -> None:
    ground = {"boxstyle": "round,pad=0.12", "facecolor": GROUND, "edgecolor": "none", "alpha": 0.78}
    axes.text(*place, text, fontsize=6.4, color=INK_ON_MAP, ha="center", va="center", bbox=ground, zorder=5)


def _rim(axes: Any, derived: Derived, room: Room) -> None:
    """The circle, the axes of the frame, and poles of low-index planes and directions."""
    from matplotlib.patches import Circle

    axes.add_patch(Circle((0, 0), 1.0, fill=False, linewidth=1.0, edgecolor=MUTED, clip_on=False))
    axes.set(aspect="equal", xlim=(-1.22, 1.22), ylim=(-1.18, 1.16), xticks=[], yticks=[])
    for spine in axes.spines.values():
        spine.set_visible(False)
    for letter, place in AXIS_LETTERS.items():
        start = place / np.hypot(*place)
        axes.plot(*np.transpose([start, 1.05 * start]), color=MUTED, linewidth=0.9, clip_on=False)
        axes.text(*place, letter, color=MUTED, ha="center", va="center", fontweight="bold", fontsize=8)
    if derived.elastic.axes is not None:
        for pole in poles(derived.elastic, room):
            _pole(axes, pole)


def _pole(axes: Any, pole: Pole) -> None:
    for colour, width in ((GROUND, 2.4), (INK_ON_MAP, 0.9)):
        hidden = {"color": colour, "markeredgewidth": width, "clip_on": False, "zorder": 4, "markerfacecolor": "none"}
        if "plane" in pole.kinds:
            axes.plot(*pole.place, "o", markersize=5, **hidden)
        if "direction" in pole.kinds:
            axes.plot(*pole.place, "+", markersize=6, **hidden)
    if pole.label:
        _chip(axes, pole.label_at, pole.label)


def _mark_extremes(axes: Any, derived: Derived, quantity: _Quantity) -> list[FloatArray]:
    """Triangles where the crystal's own least and most lie, and at the places that symmetry makes alike; those places."""
    elastic, found = derived.elastic, []
    for end in quantity.ends:
        vector = derived.extremes[quantity.extreme][end].along.vector
        alike = vector[None] if elastic.axes is None else elastic.axes.alike(vector[None])[:, 0]
        places = projected(alike @ elastic.frame.rotation.T)
        rim = places[np.hypot(*places.T) > 1.0 - 1e-6]
        spots = np.unique(np.round(np.concatenate([places, -rim]), 4), axis=0)
        mark = {"marker": "^" if end else "v", "linestyle": "none", "markersize": 5.5, "markeredgewidth": 0.9}
        axes.plot(*spots.T, color=GROUND, markeredgecolor=INK_ON_MAP, clip_on=False, zorder=6, **mark)
        found += list(spots)
    return found


def _key(indexed: bool) -> str:
    parts = ["\N{WHITE CIRCLE} normal of (hkl)   + direction [uvw]   no brackets: both"] if indexed else []
    return "   ".join([*parts, "\N{WHITE DOWN-POINTING TRIANGLE} least   \N{WHITE UP-POINTING TRIANGLE} most"])


def _words(derived: Derived, quantity: _Quantity, values: FloatArray) -> list[str]:
    """What the figure shows, in sentences."""
    rotation = derived.elastic.frame.rotation

    def where(end: Extreme) -> str:
        return near_text(end.along, rotation, as_plane=quantity.of_plane)

    sentences = [f"{quantity.title} over all directions, from {values.min():.4g} to {values.max():.4g} {quantity.unit}."]
    for end in quantity.ends:
        extreme = derived.extremes[quantity.extreme][end]
        value = uncertain(extreme.value.value, extreme.value.error)
        sentences.append(f"{('Least', 'Most')[end]} {value} {quantity.unit} at {where(extreme)}.")
    return sentences
