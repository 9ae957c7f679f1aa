"""The three things a figure is made of: strokes, marks and words, as columns.

All styles are columns, so that a whole figure is three or four elements however many regions it
shows.  HoloViews builds each figure once; after that its columns are sent straight to the data
sources it made (`Layer.source`), which takes a millisecond per figure where a new frame of a
DynamicMap takes 40 (measured; a test holds both against each other).

HoloViews turns a style column of equal values into one value and drops the column.  So all columns
begin with two unseen rows, far outside every axis, whose styles differ.
"""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from typing import Any, NamedTuple

import holoviews as hv
import numpy as np
from holoviews import opts
from numpy.typing import ArrayLike, NDArray

__all__ = [
    "FONT",
    "Dust",
    "Layer",
    "Limits",
    "Marks",
    "Strokes",
    "Words",
    "overlay",
    "polyline",
    "register",
]

Column = NDArray[Any]
WORD_SIZE = "13px"
FONT = "'Segoe UI', 'Helvetica Neue', 'Liberation Sans', Arial, sans-serif"
FAR = 1e9
DUST = "#8d959d"
UNSEEN = ("#010101", "#020202")
"""Colours of the rows that are never drawn."""


class Limits(NamedTuple):
    """Ends of the two axes."""

    x_low: float
    x_high: float
    y_low: float
    y_high: float

    def around(self, other: Limits) -> Limits:
        """The smallest limits that hold both."""
        return Limits(
            min(self.x_low, other.x_low),
            max(self.x_high, other.x_high),
            min(self.y_low, other.y_low),
            max(self.y_high, other.y_high),
        )


def _columns(names: Sequence[str], parts: Iterable[Sequence[ArrayLike]]) -> list[Column]:
    """Broadcast each part's values to one length and join the parts."""
    joined: list[list[Column]] = [[] for _ in names]
    for part in parts:
        for column, value in zip(
            joined, np.broadcast_arrays(*map(np.atleast_1d, part)), strict=True
        ):
            column.append(value)
    return [
        np.concatenate([c.astype(object) if c.dtype.kind in "OU" else c for c in column])
        for column in joined
    ]


class Marks(NamedTuple):
    """Data: symbols at (x, y), filled for kept and hollow for dropped; (M,) columns."""

    x: Column
    y: Column
    colour: Column
    marker: Column
    size: Column
    fill: Column

    @classmethod
    def of(cls, *parts: Sequence[ArrayLike]) -> Marks:
        """Join parts (x, y, colour, marker, size, fill), each broadcast to one length."""
        unseen = (FAR, FAR, UNSEEN, ("dash", "dot"), (0.5, 0.6), (0.4, 0.5))
        return cls(*_columns(cls._fields, (unseen, *parts)))

    def element(self, group: str) -> hv.Points:
        """As a HoloViews element, with the options of `register`."""
        return hv.Points(self._asdict(), ["x", "y"], list(self._fields[2:]), group=group)

    def source(self) -> dict[str, Column]:
        """As HoloViews names the columns of its data source."""
        names = ("x", "y", "color", "marker", "size", "fill_alpha")
        return dict(zip(names, self, strict=True))


class Dust(NamedTuple):
    """Many small marks of one kind, in a grey for both grounds; (M,) columns."""

    x: Column
    y: Column

    def element(self, group: str) -> hv.Points:
        """As a HoloViews element, with the options of `register`."""
        return hv.Points(self._asdict(), ["x", "y"], group=f"{group}Dust")

    def source(self) -> dict[str, Column]:
        """As HoloViews names the columns of its data source."""
        return self._asdict()


class Strokes(NamedTuple):
    """Straight pieces from (x0, y0) to (x1, y1): predictions, cuts, error bars; (M,) columns."""

    x0: Column
    y0: Column
    x1: Column
    y1: Column
    colour: Column
    width: Column
    dash: Column

    @classmethod
    def of(cls, *parts: Sequence[ArrayLike]) -> Strokes:
        """Join parts (x0, y0, x1, y1, colour, width, dash), each broadcast to one length."""
        unseen = (FAR, FAR, FAR, FAR, UNSEEN, (0.5, 0.6), ("dotdash", "dashdot"))
        return cls(*_columns(cls._fields, (unseen, *parts)))

    def element(self, group: str) -> hv.Segments:
        """As a HoloViews element."""
        return hv.Segments(
            self._asdict(), ["x0", "y0", "x1", "y1"], list(self._fields[4:]), group=group
        )

    def source(self) -> dict[str, Column]:
        """As HoloViews names the columns of its data source."""
        names = ("x0", "y0", "x1", "y1", "color", "line_width", "line_dash")
        return dict(zip(names, self, strict=True))


class Words(NamedTuple):
    """Text that starts (or ends) at (x, y); (M,) columns."""

    x: Column
    y: Column
    text: Column
    colour: Column

    @classmethod
    def of(cls, *parts: Sequence[ArrayLike]) -> Words:
        """Join parts (x, y, text, colour), each broadcast to one length."""
        return cls(*_columns(cls._fields, ((FAR, FAR, ("", " "), UNSEEN), *parts)))

    def element(self, group: str) -> hv.Labels:
        """As a HoloViews element."""
        return hv.Labels(self._asdict(), ["x", "y"], ["text", "colour"], group=group)

    def source(self) -> dict[str, Column]:
        """As HoloViews names the columns of its data source."""
        names = ("x", "y", "text", "text_color")
        return dict(zip(names, self, strict=True))


Layer = Dust | Marks | Strokes | Words


def polyline(x: ArrayLike, y: ArrayLike, colour: str, width: float, dash: str) -> tuple[Any, ...]:
    """A part of `Strokes` that joins the points (x, y) in their order."""
    a, b = np.asarray(x, dtype=float), np.asarray(y, dtype=float)
    return a[:-1], b[:-1], a[1:], b[1:], colour, width, dash


def overlay(group: str, *layers: Layer) -> hv.Overlay:
    """Lay columns over each other, the first at the bottom."""
    return hv.Overlay([layer.element(group) for layer in layers], group=group)


def _name(plot: Any, element: Any) -> None:
    """Give the Bokeh figure the name of its group, by which it is found in the document."""
    plot.state.name = element.group


def register(
    group: str,
    *,
    x: str,
    y: str,
    log: bool = False,
    align: str = "left",
    offset: tuple[float, float] = (0.0, 0.0),
) -> None:
    """Register everything about a figure that no frame changes.

    Parameters
    ----------
    group : str
        Name of the figure, the group of its elements.
    x, y : str
        Axis labels: words, symbol, unit.
    log : bool
        Whether both axes are logarithmic; HoloViews cannot change this later.
    align : str
        Side of the words that stands at their place.
    offset : tuple of float
        Shift of the words, in pixels to the right and up.
    """
    free = {"apply_ranges": False}
    opts.defaults(
        opts.Points(group, color="colour", marker="marker", size="size", fill_alpha="fill", **free),
        opts.Points(f"{group}Dust", color=DUST, alpha=0.45, line_alpha=0, size=3, **free),
        opts.Segments(group, color="colour", line_width="width", line_dash="dash", **free),
        opts.Labels(
            group,
            text_color="colour",
            text_align=align,
            text_baseline="middle",
            text_font_size=WORD_SIZE,
            backend_opts={
                "glyph.text_font": {"value": FONT},
                "glyph.x_offset": offset[0],
                "glyph.y_offset": -offset[1],
            },
            **free,
        ),
        opts.Overlay(
            group,
            xlabel=x,
            ylabel=y,
            logx=log,
            logy=log,
            responsive=True,
            show_legend=False,
            show_title=False,
            toolbar=None,
            default_tools=["pan", "box_zoom", "wheel_zoom", "reset", "save"],
            active_tools=[],
            hooks=[_name],
            **free,
        ),
    )
