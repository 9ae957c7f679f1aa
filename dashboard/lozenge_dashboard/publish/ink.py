"""Columns of a view as HoloViews elements for print: the page's colours and symbols, in points.

The page draws strokes, marks and words whose styles are columns.  On paper a symbol, a dash and a
fill belong to a whole element, so the rows of a layer are gathered by them here, in the order in
which they first appear.
"""

from __future__ import annotations

import itertools
from collections.abc import Iterator
from typing import Any

import holoviews as hv
import numpy as np
from matplotlib.path import Path
from matplotlib.transforms import Affine2D
from numpy.typing import NDArray

from lozenge_dashboard.publish.wording import typeset
from lozenge_dashboard.views.marks import DUST, FAR, Dust, Layer, Marks, Strokes, Words

__all__ = ["POINTS_PER_PIXEL", "SYMBOLS", "TEXT_SIZE", "elements"]

TEXT_SIZE = 7.0
"""Words in a figure, in points; nothing is smaller."""
POINTS_PER_PIXEL = TEXT_SIZE / 13.0
"""The page's words have 13 pixels: everything else keeps its size beside them."""
THINNEST = 0.4
"""Line width (points) below which printers lose it."""
EDGE = 1.0
"""Width of a mark's edge, in the page's pixels."""
DUST_SIZE = 3.0
DUST_ALPHA = 0.45
MANY = 12
"""Colours of alike strokes above which they are a colour scale, one element with a column."""

DASHES: dict[str, Any] = {
    "solid": "solid",
    "dashed": (0, (4.0, 2.0)),
    "dotted": (0, (1.0, 1.6)),
    "dotdash": (0, (1.0, 1.6, 4.0, 1.6)),
    "dashdot": (0, (4.0, 1.6, 1.0, 1.6)),
}


def _pin(corners: int, turn: float, depth: float) -> Path:
    """A polygon whose sides bend in, within the unit circle."""
    angles = turn + 2.0 * np.pi * np.arange(corners + 1) / corners
    middles = angles[:-1] + np.pi / corners
    points = [(np.cos(angles[0]), np.sin(angles[0]))]
    codes = [Path.MOVETO]
    for middle, corner in zip(middles, angles[1:], strict=True):
        points += [
            (depth * np.cos(middle), depth * np.sin(middle)),
            (np.cos(corner), np.sin(corner)),
        ]
        codes += [Path.CURVE3, Path.CURVE3]
    return Path(0.5 * np.array(points), np.array(codes, dtype=Path.code_type))


def _lines(*ends: tuple[float, float, float, float]) -> Path:
    """Straight lines from end to end, within the unit square."""
    points = [point for a, b, c, d in ends for point in ((a, b), (c, d))]
    return Path(0.5 * np.array(points), [Path.MOVETO, Path.LINETO] * len(ends))


ACROSS = ((-1.0, -1.0, 1.0, 1.0), (-1.0, 1.0, 1.0, -1.0))
UPRIGHT = ((-1.0, 0.0, 1.0, 0.0), (0.0, -1.0, 0.0, 1.0))


def _outline(corners: int, turn: float) -> Path:
    """A regular polygon within the unit circle."""
    angles = turn + 2.0 * np.pi * np.arange(corners + 1) / corners
    return Path(0.5 * np.column_stack([np.cos(angles), np.sin(angles)]), closed=True)


OUTLINES = {
    "circle": Path.circle(radius=0.5),
    "square": Path.unit_regular_polygon(4).transformed(Affine2D().rotate_deg(45).scale(0.7)),
    "diamond": _outline(4, 0.0),
    "triangle": _outline(3, np.pi / 2),
    "inverted_triangle": _outline(3, -np.pi / 2),
    "hex": _outline(6, np.pi / 2),
}
INSIDE = {
    "cross": _lines(*UPRIGHT),
    "x": _lines(*(0.7 * np.array(ACROSS)).tolist()),
    "dot": Path.circle(radius=0.1),
}
LINED = {
    f"{outline}_{mark}": Path.make_compound_path(around, within)
    for outline, around in OUTLINES.items()
    for mark, within in INSIDE.items()
}
"""Markers that are an outline with something in it."""
SYMBOLS: dict[str, Any] = {
    "circle": "o",
    "square": "s",
    "triangle": "^",
    "inverted_triangle": "v",
    "hex": "h",
    "star": "*",
    "square_pin": _pin(4, np.pi / 4, 0.25),
    "triangle_pin": _pin(3, np.pi / 2, 0.15),
    "diamond": "D",
    "x": _lines(*ACROSS),
    "cross": _lines(*UPRIGHT),
    "asterisk": _lines(*ACROSS, *UPRIGHT),
    "plus": "P",
    **LINED,
}
"""The page's markers as those of print."""
STROKED = {"x", "cross", "asterisk", *LINED}
"""Markers that are lines: they have no inside to fill."""
SLIM = {"diamond": 0.72, "star": 1.35, "square_pin": 1.5, "triangle_pin": 1.5}
"""Sizes of some, so that all look equally large."""


def elements(layer: Layer, *, align: str) -> Iterator[hv.Element]:
    """A layer of a view as elements with the options of print.

    Parameters
    ----------
    layer : Dust, Marks, Strokes or Words
        From a view's `read`; rows far outside every axis are left out.
    align : {"left", "center", "right"}
        Side of the words that stands at their place.

    Yields
    ------
    hv.Element
        From the bottom up.
    """
    if isinstance(layer, Dust):
        yield from _dust(layer)
    elif isinstance(layer, Marks):
        yield from _marks(layer)
    elif isinstance(layer, Strokes):
        yield from _strokes(layer)
    elif isinstance(layer, Words):
        yield from _words(layer, align)


def _printed(element: hv.Element, **style: Any) -> hv.Element:
    return element.opts(backend="matplotlib", **style)


def _groups(*columns: NDArray[Any]) -> Iterator[tuple[tuple[Any, ...], NDArray[np.intp]]]:
    """Equal combinations with the indices of their rows, in order of appearance."""
    found: dict[tuple[Any, ...], list[int]] = {}
    for i, key in enumerate(zip(*columns, strict=True)):
        found.setdefault(key, []).append(i)
    for key, rows in found.items():
        yield key, np.array(rows)


def _width(pixels: float) -> float:
    return max(THINNEST, POINTS_PER_PIXEL * float(pixels))


def _area(pixels: float, marker: str = "circle") -> float:
    """What a scatter takes for a size: the square of the diameter in points."""
    return float((POINTS_PER_PIXEL * float(pixels) * SLIM.get(marker, 1.0)) ** 2)


def _dust(layer: Dust) -> Iterator[hv.Element]:
    if layer.x.size:
        yield _printed(
            hv.Points((layer.x, layer.y), group="Print"),
            color=DUST,
            alpha=DUST_ALPHA,
            s=_area(DUST_SIZE),
            linewidth=0.0,
        )


def _marks(layer: Marks) -> Iterator[hv.Element]:
    """Gathered by symbol, size and fill; colours stay a column where there are many."""
    near = np.isfinite(layer.x) & np.isfinite(layer.y) & (np.abs(layer.x) < 0.5 * FAR)
    kept = Marks(*(column[near] for column in layer))
    shown = kept.fill.astype(float) > 0.5
    for (marker, size, filled), rows in _groups(kept.marker, kept.size, shown):
        x, y, colour = (column[rows] for column in (kept.x, kept.y, kept.colour))
        style: dict[str, Any] = {"s": _area(size, marker), "marker": SYMBOLS[marker]}
        style["linewidth"] = _width(1.5 * EDGE if marker in STROKED else EDGE)
        if len(set(colour)) == 1:
            yield _printed(
                hv.Points((x, y), group="Print"),
                **_painted(colour[0], filled and marker not in STROKED),
                **style,
            )
            continue
        points = hv.Points((x, y, colour), ["x", "y"], ["colour"], group="Print")
        yield _printed(
            points, **_painted(hv.dim("colour"), filled and marker not in STROKED), **style
        )


def _painted(colour: Any, filled: bool) -> dict[str, Any]:
    """Kept is filled, dropped is hollow."""
    if filled:
        return {"color": colour}
    return {"facecolors": "none", "edgecolors": colour}


def _strokes(layer: Strokes) -> Iterator[hv.Element]:
    """Gathered by style into paths, so that a dash runs on through a broken line."""
    ends = np.column_stack([layer.x0, layer.y0, layer.x1, layer.y1]).astype(float)
    near = np.isfinite(ends).all(axis=1) & (np.abs(ends[:, 0]) < 0.5 * FAR)
    ends = ends[near]
    style = [column[near] for column in (layer.colour, layer.width, layer.dash)]
    for (width, dash), alike in _groups(*style[1:]):
        pen = {"linewidth": _width(width), "linestyle": DASHES[dash]}
        colours = style[0][alike]
        if len(set(colours)) > MANY:
            pieces = (*ends[alike].T, colours)
            names = ["x0", "y0", "x1", "y1"]
            scale = hv.Segments(pieces, names, ["colour"], group="Print")
            yield _printed(scale, color=hv.dim("colour"), **pen)
            continue
        for (colour,), rows in _groups(colours):
            paths = list(_joined(ends[alike[rows]]))
            yield _printed(hv.Path(paths, group="Print"), color=colour, **pen)


def _joined(ends: NDArray[np.float64]) -> Iterator[NDArray[np.float64]]:
    """Pieces that follow each other as one path."""
    starts = [0]
    starts += [
        i + 1
        for i, (one, next_) in enumerate(itertools.pairwise(ends))
        if not np.array_equal(one[2:], next_[:2])
    ]
    for low, high in itertools.pairwise([*starts, len(ends)]):
        yield np.vstack([ends[low, :2], ends[low:high, 2:]])


def _words(layer: Words, align: str) -> Iterator[hv.Element]:
    near = np.abs(layer.x.astype(float)) < 0.5 * FAR
    kept = Words(*(column[near] for column in layer))
    for (colour,), rows in _groups(kept.colour):
        x, y = kept.x[rows], kept.y[rows]
        text = [typeset(words) for words in kept.text[rows]]
        yield _printed(
            hv.Labels((x, y, text), ["x", "y"], ["text"], group="Print"),
            color=colour,
            size=TEXT_SIZE,
            horizontalalignment=align,
            verticalalignment="center",
        )
