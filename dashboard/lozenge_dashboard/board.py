"""The bench's page: control column, readings, six views, table."""

from __future__ import annotations

from collections.abc import Callable, Iterable
from typing import Any

from bokeh.document import Document

from lozenge_dashboard.controls import Controls
from lozenge_dashboard.frames import WIDE, Frames, Sheet
from lozenge_dashboard.palette import Look
from lozenge_dashboard.readings import COLUMNS, readings_html, table_rows
from lozenge_dashboard.records import Choices, Scene
from lozenge_dashboard.views.catalogue import VIEWS

__all__ = ["Board"]

SHEET = Sheet("Controls", "Numbers as a table")


class Board(Frames):
    """All panes of one page of the bench.

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
            receive, shipped=[list(pair) for pair in shipped], state=state, **WIDE
        )
        super().__init__(
            SHEET, VIEWS, controls=self.controls, receive_view=receive_view, columns=COLUMNS
        )
        self._status = ""
        self._said = ""

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
        self._said = readings_html(scene)
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
        line = self._said or "<dl class='readings'></dl>"
        self.line.object = line.removesuffix("</dl>") + self._status + "</dl>"
