"""What every page is laid out from: a column, a line on top, views, words, a table."""

from __future__ import annotations

from collections.abc import Callable, Iterable
from typing import Any, ClassVar, NamedTuple, cast

import panel as pn
import param
from bokeh.document import Document
from panel.custom import JSComponent

from lozenge_dashboard.controls import ASSETS
from lozenge_dashboard.frame import Frame
from lozenge_dashboard.palette import DARK, LIGHT, Look
from lozenge_dashboard.views.catalogue import View

__all__ = ["WIDE", "Frames", "NumbersTable", "Page", "Sheet", "css"]

WIDE: dict[str, Any] = {"sizing_mode": "stretch_width", "margin": 0}
"""How a pane lies in its place on the page."""


def css(name: str) -> str:
    """Text of an asset."""
    return (ASSETS / name).read_text(encoding="utf-8")


def page_css(views: Iterable[View], more: str = "") -> str:
    """The page's own style sheet, with the colours of both themes.

    Parameters
    ----------
    views : iterable of View
        One of them may be given the room.
    more : str
        Name of an asset that this page adds.
    """
    themes = (f":root[data-theme='{look.name}'] {{ {look.css()} }}" for look in (LIGHT, DARK))
    room = ", ".join(f"html[data-focus='{view.name}'] #view-{view.name}" for view in views)
    parts = (f":root {{ {LIGHT.css()} }}", *themes, css("page.css"))
    return "\n".join((*parts, f"{room} {{ display: flex; }}", css(more) if more else ""))


class NumbersTable(JSComponent):
    """The numbers as a table that copies as text."""

    columns = param.List()
    rows = param.List()

    _esm = ASSETS / "table.js"
    _stylesheets: ClassVar[list[str]] = [css("table.css")]


class Page(pn.Template):
    """The page's layout; built under one freeze of its document and without descriptions.

    Panel describes all panels again whenever one is added, and Bokeh walks all models after
    every root: together a second of the 2.5 s that a first page otherwise takes (measured).
    """

    def __init__(self, then: Callable[[], None], template: str) -> None:
        self._then = then
        super().__init__(template)

    def __repr__(self, *_: object) -> str:
        """A short name."""
        return type(self).__name__

    def server_doc(
        self, doc: Document | None = None, title: str | None = None, location: Any = True
    ) -> Document:
        """Attach the page to a document; Panel itself keeps no state in the address."""
        del location
        document = doc or cast(Document, pn.state.curdoc)
        with document.models.freeze():
            super().server_doc(document, title or "Lozenge", location=False)
        # The figures are found only once the first freeze has ended.
        with document.models.freeze():
            self._then()
        return document


class Sheet(NamedTuple):
    """What differs between the layouts of pages.

    Attributes
    ----------
    column, numbers : str
        Names of the column of controls and of the table.
    style : str
        Asset with the page's own style; empty for none.
    live : str
        Whether the line on top is read out: ``polite`` or ``off``.
    unfolded : bool
        Whether the table is open at first.
    """

    column: str
    numbers: str
    style: str = ""
    live: str = "polite"
    unfolded: bool = False


class Frames:
    """All panes of one page but what is said in them.

    Parameters
    ----------
    sheet : Sheet
        What this page is called.
    views : tuple of View
        In their order.
    controls : JSComponent
        The column.
    receive_view : callable
        Called with a view's name and a message of its head.
    columns : tuple of str
        Heads of the table.
    words : bool
        Whether there is text below the views.
    tall : bool
        Whether the views' heads have a second row for their switch.
    """

    def __init__(
        self,
        sheet: Sheet,
        views: tuple[View, ...],
        *,
        controls: JSComponent,
        receive_view: Callable[[str, dict[str, Any]], None],
        columns: tuple[str, ...] = (),
        words: bool = False,
        tall: bool = False,
    ) -> None:
        self.sheet = sheet
        self.column = controls
        self.line = pn.pane.HTML("", stylesheets=[css("readings.css")], **WIDE)
        self.words = pn.pane.HTML("", stylesheets=[css("words.css")], **WIDE) if words else None
        self.table = NumbersTable(columns=list(columns), rows=[], **WIDE)
        self.frames = {view.name: Frame(view, receive_view, tall=tall) for view in views}

    def template(self, *, then: Callable[[], None]) -> Page:
        """Everything laid out as one page; `then` runs when the figures are in its document."""
        page = Page(then, css("page.html"))
        views = [frame.view for frame in self.frames.values()]
        page.add_variable("page_css", page_css(views, self.sheet.style))
        page.add_variable("sheet", self.sheet._asdict())
        page.add_variable(
            "views",
            [
                {"name": name, "question": frame.view.question, "figures": list(frame.panes)}
                for name, frame in self.frames.items()
            ],
        )
        page.add_panel("controls", self.column)
        page.add_panel("line", self.line)
        page.add_panel("table", self.table)
        page.add_variable("words", self.words is not None)
        if self.words is not None:
            page.add_panel("text", self.words)
        for name, frame in self.frames.items():
            page.add_panel(f"head_{name}", frame.head)
            page.add_panel(f"foot_{name}", frame.foot)
            for group, pane in frame.panes.items():
                page.add_panel(f"figure_{group}", pane)
        return page

    def arrange(self, choices: Any, focus: str | None, document: Document) -> None:
        """Set every view's switch and give one view the room and the tools."""
        for frame in self.frames.values():
            frame.arrange(choices, focus)
            frame.give_tools(focus, document)

    def stale(self, reasons: dict[str, str]) -> None:
        """Mark the views that do not show the present state, with the reason."""
        for name, frame in self.frames.items():
            frame.head.stale = reasons.get(name, "")

    def stale_all(self, reason: str) -> None:
        """Mark every view, for one reason."""
        self.stale(dict.fromkeys(self.frames, reason))

    def restyle(self, look: Look, document: Document) -> None:
        """Take the colours of a theme."""
        for frame in self.frames.values():
            frame.restyle(look, document)
