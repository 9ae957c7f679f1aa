"""The page: control column, readings, six views, table; one document's worth of panes."""

from __future__ import annotations

from collections.abc import Callable, Iterable
from typing import Any, ClassVar, cast

import panel as pn
import param
from bokeh.document import Document
from panel.custom import JSComponent

from lozenge_dashboard.controls import ASSETS, Controls
from lozenge_dashboard.frame import Frame
from lozenge_dashboard.palette import DARK, LIGHT, Look
from lozenge_dashboard.readings import COLUMNS, readings_html, table_rows
from lozenge_dashboard.records import Choices, Scene
from lozenge_dashboard.views.catalogue import VIEWS

__all__ = ["Board", "page_css"]


class NumbersTable(JSComponent):
    """The numbers as a table that copies as text."""

    columns = param.List()
    rows = param.List()

    _esm = ASSETS / "table.js"
    _stylesheets: ClassVar[list[str]] = [(ASSETS / "table.css").read_text(encoding="utf-8")]


def page_css() -> str:
    """The page's own style sheet, with the colours of both themes."""
    themes = (f":root[data-theme='{look.name}'] {{ {look.css()} }}" for look in (LIGHT, DARK))
    first = f":root {{ {LIGHT.css()} }}"
    return "\n".join((first, *themes, (ASSETS / "page.css").read_text(encoding="utf-8")))


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
        """Attach the page to a document; the address of the page carries no state."""
        del location
        document = doc or cast(Document, pn.state.curdoc)
        with document.models.freeze():
            super().server_doc(document, title or "Lozenge", location=False)
        # The figures are found only once the first freeze has ended.
        with document.models.freeze():
            self._then()
        return document


class Board:
    """All panes of one page.

    Parameters
    ----------
    receive : callable
        Called with every message of the controls.
    receive_view : callable
        Called with a view's name and a message of its head.
    shipped : list of (str, str)
        Names and titles of the presets in the menu.
    state : dict
        First state of the controls.
    """

    def __init__(
        self,
        receive: Callable[[dict[str, Any]], None],
        receive_view: Callable[[str, dict[str, Any]], None],
        *,
        shipped: list[tuple[str, str]],
        state: dict[str, Any],
    ) -> None:
        self.controls = Controls(
            receive,
            shipped=[list(pair) for pair in shipped],
            state=state,
            sizing_mode="stretch_width",
            margin=0,
        )
        self.readings = pn.pane.HTML(
            "",
            sizing_mode="stretch_width",
            margin=0,
            stylesheets=[(ASSETS / "readings.css").read_text(encoding="utf-8")],
        )
        self.table = NumbersTable(
            columns=list(COLUMNS), rows=[], sizing_mode="stretch_width", margin=0
        )
        self.frames = {view.name: Frame(view, receive_view) for view in VIEWS}
        self._status = ""
        self._line = ""

    def template(self, *, then: Callable[[], None]) -> Page:
        """Everything laid out as one page; `then` runs when the figures are in its document."""
        page = Page(then, (ASSETS / "page.html").read_text(encoding="utf-8"))
        page.add_variable("page_css", page_css())
        page.add_variable(
            "views",
            [
                {
                    "name": name,
                    "question": frame.view.question,
                    "figures": list(frame.panes),
                }
                for name, frame in self.frames.items()
            ],
        )
        page.add_panel("controls", self.controls)
        page.add_panel("readings", self.readings)
        page.add_panel("table", self.table)
        for name, frame in self.frames.items():
            page.add_panel(f"head_{name}", frame.head)
            page.add_panel(f"foot_{name}", frame.foot)
            for group, pane in frame.panes.items():
                page.add_panel(f"figure_{group}", pane)
        return page

    def arrange(self, choices: Choices, focus: str | None, document: Document) -> None:
        """Set every view's switch and give one view the room and the tools."""
        for frame in self.frames.values():
            frame.arrange(choices, focus)
            frame.give_tools(focus, document)

    def show(
        self,
        scene: Scene,
        choices: Choices,
        look: Look,
        document: Document,
        *,
        names: Iterable[str],
        settled: bool,
    ) -> None:
        """Draw a scene in the named views, the readings and the table."""
        self._line = readings_html(scene)
        self.table.rows = [list(row) for row in table_rows(scene)]
        self._write()
        for name in names:
            self.frames[name].show(scene, choices, look, document, settled=settled)

    def status(self, text: str, *, busy: bool = False) -> None:
        """Say in the line of readings what is being computed."""
        kind = "status busy" if busy else "status"
        self._status = f"<div class='{kind}' role='status'>{text}</div>" if text else ""
        self._write()

    def _write(self) -> None:
        line = self._line or "<dl class='readings'></dl>"
        self.readings.object = line.removesuffix("</dl>") + self._status + "</dl>"

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
