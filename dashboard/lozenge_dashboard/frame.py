"""A view on the page: built once, then fed."""

from __future__ import annotations

import html
from collections.abc import Callable, Iterator, Sequence
from typing import Any, ClassVar, NamedTuple, cast

import panel as pn
import param
from bokeh.core.property.descriptors import UnsetValueError
from bokeh.document import Document
from bokeh.models import (
    Axis,
    BasicTicker,
    BoxZoomTool,
    ColumnDataSource,
    FixedTicker,
    Grid,
    LogAxis,
    LogTicker,
    SaveTool,
)
from bokeh.models import Plot as BokehPlot
from bokeh.models.renderers import GlyphRenderer
from panel.custom import JSComponent

from lozenge_dashboard.controls import ASSETS
from lozenge_dashboard.palette import Look
from lozenge_dashboard.views.catalogue import Figure, View
from lozenge_dashboard.views.marks import FONT, Column, Layer, Limits

__all__ = ["Frame", "Head"]

LABEL_SIZE = "13px"
SHORT = 256
"""Columns up to this length go within the message; a longer one costs two messages of its own,
about 1 ms, which a list reaches near this length (measured)."""


class Head(JSComponent):
    """Question of a view as a button, its switch, and what is wrong with it now."""

    key = param.String(doc="Name of the view.")
    question = param.String()
    options = param.List()
    choice = param.String()
    toggles = param.List(doc="Name, label and hint of what may be shown beside.")
    shown = param.List(doc="Names of those that are.")
    focused = param.Boolean()
    stale = param.String(doc="Why the picture is not the present one; empty if it is.")
    fresh = param.Boolean(doc="Whether the picture is of the present state all the same.")
    tall = param.Boolean(doc="Whether the switch has a row of its own.")
    action = param.String(doc="What its button does, ``compute`` or ``cancel``; empty: no button.")

    _esm = ASSETS / "head.js"
    _stylesheets: ClassVar[list[str]] = [(ASSETS / "head.css").read_text(encoding="utf-8")]

    def __init__(self, receive: Callable[[dict[str, Any]], None], **params: Any) -> None:
        self._receive = receive
        super().__init__(**params)

    def _handle_msg(self, data: Any) -> None:
        self._receive(data)


class _Range(NamedTuple):
    """Ends of an axis that the page last set itself."""

    low: float
    high: float


def _packed(column: Column) -> Column | list[Any]:
    """A short column as a list, which Bokeh sends within the message."""
    return column.tolist() if column.size <= SHORT else column


def _place_ticks(axis: Axis, ticks: Sequence[tuple[float, str]] | None) -> None:
    """Give an axis ticks in words; its own come back with none, and None changes nothing."""
    if ticks is None:
        return
    if not ticks:
        if isinstance(axis.ticker, FixedTicker):
            axis.update(ticker=BasicTicker(), major_label_overrides={})
        return
    if not isinstance(axis.ticker, FixedTicker):
        axis.ticker = FixedTicker()
    axis.ticker.ticks = [at for at, _ in ticks]
    axis.major_label_overrides = dict(ticks)


class _Live:
    """One figure, built once by HoloViews and then fed through the data sources it made."""

    def __init__(self, figure: Figure) -> None:
        self.figure = figure
        self.look: Look | None = None
        self.pane = pn.pane.HoloViews(
            None,
            sizing_mode="stretch_both",
            min_height=120,
            margin=0,
            linked_axes=False,
        )
        self.limits: Limits | None = None
        self._exact: Limits | None = None
        self._bokeh: BokehPlot | None = None
        self._set: dict[str, _Range] = {}

    def build(self, document: Document) -> None:
        """Build the figure, the first time that it is shown."""
        if self.pane.object is None:
            self.pane.object = self.figure.draw(self.figure.blank)
            if self.look is not None:
                self.restyle(self.look, document)

    def bokeh(self, document: Document) -> BokehPlot | None:
        """The figure in a document, found once."""
        if self._bokeh is None:
            found = document.select_one({"type": BokehPlot, "name": self.figure.group})
            if isinstance(found, BokehPlot):
                self._bokeh = found
                for name in ("inner_width", "inner_height"):
                    found.on_change(name, self._resized)
        return self._bokeh

    def show(self, data: Any, document: Document, *, settled: bool) -> None:
        """Send columns; ranges widen at once and settle when `settled`."""
        plot = self.bokeh(document)
        if plot is None:
            return
        layers = (part for part in data if isinstance(part, Layer))
        # HoloViews draws each layer as glyphs of columns of its own.
        glyphs = cast(list[GlyphRenderer], plot.renderers)
        for renderer, layer in zip(glyphs, layers, strict=True):
            source = cast(ColumnDataSource, renderer.data_source)
            source.data = {name: _packed(column) for name, column in layer.source().items()}
        self._exact = data.limits
        keep = self.limits if not settled else None
        self.fit(data.limits if keep is None else data.limits.around(keep))
        axes = cast(Axis, plot.below[0]), cast(Axis, plot.left[0])
        for axis, name in zip(axes, ("x_ticks", "ticks"), strict=True):
            _place_ticks(axis, getattr(data, name, None))
        for axis, text in zip(axes, getattr(data, "labels", ()), strict=False):
            axis.axis_label = text

    def settle(self) -> None:
        """Let the ranges go back to what the columns need."""
        if self._exact is not None:
            self.fit(self._exact)

    def _resized(self, _name: str, _old: object, _new: object) -> None:
        """Fit again when the browser gives the figure another size."""
        self.fit(self.limits)

    def fit(self, limits: Limits | None) -> None:
        """Set both ranges, except one that the user has zoomed."""
        plot = self._bokeh
        if plot is None or limits is None:
            return
        self.limits = limits
        shown = self._squared(limits, plot) if self.figure.square else limits
        for name, low, high in (("x_range", *shown[:2]), ("y_range", *shown[2:])):
            axis, last = getattr(plot, name), self._set.get(name)
            zoomed = last is not None and (axis.start, axis.end) != last
            axis.update(reset_start=low, reset_end=high)
            if not zoomed:
                axis.update(start=low, end=high)
                self._set[name] = _Range(low, high)

    @staticmethod
    def _squared(limits: Limits, plot: BokehPlot) -> Limits:
        """Widen one axis so that light rays are at 45 degrees."""
        try:
            width, height = plot.inner_width, plot.inner_height
        except UnsetValueError:  # the browser has not drawn it yet
            return limits
        if not width or not height:
            return limits
        x, y = (limits.x_high - limits.x_low), (limits.y_high - limits.y_low)
        more_x = max(0.0, y * width / height - x) / 2
        more_y = max(0.0, x * height / width - y) / 2
        return Limits(
            limits.x_low - more_x,
            limits.x_high + more_x,
            limits.y_low - more_y,
            limits.y_high + more_y,
        )

    def give_tools(self, document: Document, *, shown: bool) -> None:
        """Show or hide the tools, and take them out of action when hidden."""
        plot = self.bokeh(document)
        if plot is None:
            return
        plot.toolbar.logo = None
        plot.toolbar_location = "right" if shown else None
        boxes = [tool for tool in plot.toolbar.tools if isinstance(tool, BoxZoomTool)]
        plot.toolbar.active_drag = boxes[0] if shown and boxes else None
        if not shown and self.limits is not None:
            self._set.clear()
            self.fit(self.limits)

    def restyle(self, look: Look, document: Document) -> None:
        """Give axes, grid and ground the colours of a theme."""
        self.look = look
        plot = self.bokeh(document)
        if plot is None:
            return
        plot.update(
            background_fill_color=look.panel,
            border_fill_color=look.panel,
            outline_line_color=None,
            border_line_color=look.panel,  # without one Bokeh draws it in some other colour
            min_border_right=12,
        )
        for axis in (*plot.below, *plot.left):
            axis.update(
                axis_label_text_color=look.ink,
                axis_label_text_font=FONT,
                axis_label_text_font_size=LABEL_SIZE,
                axis_label_text_font_style="normal",
                axis_line_color=look.muted,
                major_label_text_color=look.ink,
                major_label_text_font=FONT,
                major_label_text_font_size=LABEL_SIZE,
                major_tick_line_color=look.muted,
                minor_tick_line_color=None,
            )
            if isinstance(axis, LogAxis):
                axis.ticker = LogTicker(mantissas=[1])
        for grid in plot.center:
            if isinstance(grid, Grid):
                grid.grid_line_color = look.rule
                grid.grid_line_alpha = 0.5
        for tool in plot.toolbar.tools:
            if isinstance(tool, SaveTool):
                tool.filename = f"lozenge-{self.figure.group.lower()}"


class Frame:
    """A view with its head, its figures and the line below.

    Parameters
    ----------
    view : View
        What it shows.
    receive : callable
        Called with the view's name and a message of its head.
    tall : bool
        Whether the head has a second row for the switch.
    """

    def __init__(
        self, view: View, receive: Callable[[str, dict[str, Any]], None], *, tall: bool = False
    ) -> None:
        self.view = view
        self.head = Head(
            lambda message: receive(view.name, message),
            key=view.name,
            question=view.question,
            options=[list(option) for option in view.options],
            tall=tall,
            toggles=[list(toggle) for toggle in view.toggles],
            sizing_mode="stretch_width",
            margin=0,
        )
        self.foot = pn.pane.HTML(
            "",
            sizing_mode="stretch_width",
            margin=0,
            stylesheets=[(ASSETS / "foot.css").read_text(encoding="utf-8")],
        )
        self._live = {choice: _Live(figure) for choice, figure in view.figures.items()}
        self._drawn: tuple[Any, ...] = ()

    @property
    def panes(self) -> dict[str, pn.pane.HoloViews]:
        """The figures' panes by the group of their figure."""
        return {live.figure.group: live.pane for live in self._live.values()}

    def _shown(self, choices: Any) -> _Live:
        """The figure at the present switch; the others are hidden and not fed."""
        choice = getattr(choices, self.view.name, "")
        return self._live.get(choice) or self._live[""]

    def give_tools(self, focus: str | None, document: Document) -> None:
        """Show the tools of the view that has the room; the others cannot be zoomed."""
        for live in self._all():
            live.give_tools(document, shown=focus == self.view.name)

    def _all(self) -> Iterator[_Live]:
        yield from self._live.values()

    def arrange(self, choices: Any, focus: str | None) -> None:
        """Show the figure that the switch names, and whether this view has the room."""
        shown = self._shown(choices)
        if all(live.pane.object is None for live in self._all()):
            shown.pane.object = shown.figure.draw(shown.figure.blank)
        for live in self._all():
            live.pane.visible = live is shown
        self.head.param.update(
            choice=str(getattr(choices, self.view.name, "")),
            focused=focus == self.view.name,
            shown=[name for name, *_ in self.view.toggles if getattr(choices, name)],
        )

    def build(self, choices: Any, document: Document) -> None:
        """Build the figure at the present switch, blank before its first record."""
        self._shown(choices).build(document)

    def show(
        self, scene: Any, choices: Any, look: Look, document: Document, *, settled: bool
    ) -> None:
        """Draw a scene, unless what it would show is shown already."""
        live = self._shown(choices)
        live.build(document)
        drawn = (*self.view.parts(scene), choices, look)
        if len(drawn) == len(self._drawn) and all(
            a is b or (isinstance(a, float | bool) and a == b)
            for a, b in zip(drawn, self._drawn, strict=True)
        ):
            if settled:
                live.settle()
            return
        self._drawn = drawn
        live.show(live.figure.read(scene, choices, look), document, settled=settled)
        self.say(self.view.caution(scene, choices))

    def restyle(self, look: Look, document: Document) -> None:
        """Take the colours of a theme; the marks change with the next `show`."""
        for live in self._all():
            live.restyle(look, document)

    def say(self, text: str, *, error: bool = False) -> None:
        """Put a line below the view."""
        role = " class='refusal' role='alert'" if error else ""
        self.foot.object = f"<p{role}>{html.escape(text)}</p>"
