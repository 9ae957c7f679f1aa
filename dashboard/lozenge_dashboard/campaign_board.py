"""The panes of the campaign page: column, line of readings, four views, words, table."""

from __future__ import annotations

import html
from collections.abc import Callable
from typing import Any, cast

import panel as pn
from bokeh.document import Document

from lozenge_dashboard.board import NumbersTable, Page, page_css
from lozenge_dashboard.campaign_column import CampaignControls
from lozenge_dashboard.campaign_text import EMPTY, columns, line_html, rows, words_html
from lozenge_dashboard.campaigns import Status, Watch
from lozenge_dashboard.controls import ASSETS
from lozenge_dashboard.frame import Frame
from lozenge_dashboard.palette import Look
from lozenge_dashboard.records import CampaignChoices
from lozenge_dashboard.views.effort import CAMPAIGN_VIEWS

__all__ = ["CampaignBoard"]


def _css(name: str) -> str:
    return (ASSETS / name).read_text(encoding="utf-8")


class CampaignBoard:
    """All panes of one campaign page.

    Parameters
    ----------
    receive : callable
        Called with every message of the column.
    receive_view : callable
        Called with a view's name and a message of its head.
    state : dict
        First state of the column.
    """

    def __init__(
        self,
        receive: Callable[[dict[str, Any]], None],
        receive_view: Callable[[str, dict[str, Any]], None],
        *,
        state: dict[str, Any],
    ) -> None:
        wide: dict[str, Any] = {"sizing_mode": "stretch_width", "margin": 0}
        self.controls = CampaignControls(receive, state=state, **wide)
        self.line = pn.pane.HTML("", stylesheets=[_css("readings.css")], **wide)
        self.words = pn.pane.HTML("", stylesheets=[_css("words.css")], **wide)
        self.table = NumbersTable(columns=[], rows=[], **wide)
        self.frames = {view.name: Frame(view, receive_view) for view in CAMPAIGN_VIEWS}
        self._table_of: Watch | None = None

    def template(self, *, then: Callable[[], None]) -> Page:
        """Everything laid out as one page; `then` runs when the figures are in its document."""
        page = Page(then, _css("campaign.html"))
        page.add_variable("page_css", page_css() + "\n" + _css("campaign.css"))
        page.add_variable(
            "views",
            [
                {"name": name, "question": frame.view.question, "figures": list(frame.panes)}
                for name, frame in self.frames.items()
            ],
        )
        for name in ("controls", "line", "words", "table"):
            page.add_panel(name, getattr(self, name))
        for name, frame in self.frames.items():
            page.add_panel(f"head_{name}", frame.head)
            page.add_panel(f"foot_{name}", frame.foot)
            for group, pane in frame.panes.items():
                page.add_panel(f"figure_{group}", pane)
        return page

    def arrange(self, choices: CampaignChoices, focus: str | None, document: Document) -> None:
        """Set every view's switch and give one view the room and the tools."""
        for frame in self.frames.values():
            frame.arrange(choices, focus)
            frame.give_tools(focus, document)

    def restyle(self, look: Look, document: Document) -> None:
        """Take the colours of a theme."""
        for frame in self.frames.values():
            frame.restyle(look, document)

    def show(
        self,
        watch: Watch | None,
        status: Status,
        choices: CampaignChoices,
        look: Look,
        document: Document,
    ) -> None:
        """Draw what was read, or say that nothing is open."""
        self.say(watch, status)
        if watch is None:
            for frame in self.frames.values():
                frame.say(status.text or EMPTY, error=status.failed)
            return
        if watch is not self._table_of:
            self._table_of = watch
            table = [list(row) for row in rows(watch)]
            if table != self.table.rows:
                self.table.param.update(columns=columns(watch), rows=cast(Any, table))
        for frame in self.frames.values():
            frame.show(watch, choices, look, document, settled=True)

    def say(self, watch: Watch | None, status: Status) -> None:
        """Write the line of readings and the words below the figures."""
        self.line.object = line_html(watch, status)
        words = words_html(watch, status)
        self.words.object = f"<div class='words'>{words}</div>" if words else ""

    def stale(self, reason: str) -> None:
        """Mark every view that it does not show the present state."""
        for frame in self.frames.values():
            frame.head.stale = html.escape(reason)
