"""The panes of the evidence page."""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

from bokeh.document import Document

from lozenge_dashboard.evidence_column import EvidenceControls
from lozenge_dashboard.evidence_standing import Mark
from lozenge_dashboard.evidence_text import COLUMNS, line_html, rows
from lozenge_dashboard.frames import WIDE, Frames, Sheet
from lozenge_dashboard.palette import Look
from lozenge_dashboard.records import EvidenceChoices, EvidenceScene
from lozenge_dashboard.views.evidence import EVIDENCE_VIEWS, RECORDS

__all__ = ["EvidenceBoard"]

SHEET = Sheet("Evidence", "Numbers as a table", "evidence.css", "off")


class EvidenceBoard(Frames):
    """All panes of one evidence page.

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
        self.controls = EvidenceControls(receive, state=state, **WIDE)
        super().__init__(
            SHEET,
            EVIDENCE_VIEWS,
            controls=self.controls,
            receive_view=receive_view,
            columns=COLUMNS,
            tall=True,
        )

    def show(
        self, name: str, scene: EvidenceScene, choices: EvidenceChoices, look: Look, doc: Document
    ) -> None:
        """Draw one view of a scene; without its record the blank figure."""
        if getattr(scene, RECORDS[name]) is None:
            self.frames[name].build(choices, doc)
        else:
            self.frames[name].show(scene, choices, look, doc, settled=True)

    def say(self, scene: EvidenceScene, doing: str) -> None:
        """Write the line on top and the table from all records that are there."""
        self.line.object = line_html(scene, doing)
        table = [list(row) for row in rows(scene)]
        if table != self.table.rows:
            self.table.rows = table

    def mark(self, name: str, mark: Mark) -> None:
        """Say in one view's head how it stands, and below it what else there is to say."""
        frame = self.frames[name]
        frame.head.param.update(stale=mark.stale, fresh=mark.fresh, action=mark.action)
        if mark.text:
            frame.say(mark.text, error=mark.error)
