"""The evidence pages: one new page for every session, with one process that computes for all."""

from __future__ import annotations

from collections.abc import Callable
from pathlib import Path

import panel as pn

from lozenge_dashboard.errands import Errands
from lozenge_dashboard.evidence_session import Asked, EvidenceSession
from lozenge_dashboard.views.evidence import register_evidence
from lozenge_engine.pointfile import PointFile
from lozenge_engine.presets import Preset
from lozenge_engine.stages import Stages

__all__ = ["evidence_pages"]

UNKNOWN = (
    "The bench page that this address names is not known to this server: this is the preset that "
    "it started with. Open the evidence from the bench again."
)


def evidence_pages(
    folder: Path,
    screen: Callable[[str], tuple[Preset, PointFile | None]],
    stages: Stages,
) -> tuple[Callable[[], pn.Template], Callable[[], None]]:
    """Make the factory of evidence pages and the function that ends their process.

    Parameters
    ----------
    folder : Path
        Where results files lie.
    screen : callable
        Gives the preset of a page of the bench, and its imported points, by its key.
    stages : Stages
        The server's cache of stage outputs.

    Returns
    -------
    factory, close : callable
        The first returns a new page.
    """
    register_evidence()
    errands = Errands()

    def page() -> pn.Template:
        session = EvidenceSession(errands, _asked(screen), folder=folder, stages=stages)
        pn.state.onload(session.open)
        pn.state.on_session_destroyed(lambda _context: session.close())
        return session.board.template(then=session.draw_ahead)

    return page, errands.close


def _asked(screen: Callable[[str], tuple[Preset, PointFile | None]]) -> Asked:
    """Read the address; what it does not name is as the server began."""

    def argument(name: str) -> str:
        return b"".join(pn.state.session_args.get(name, [])[:1]).decode("utf-8", "replace")

    key = argument("from")
    preset, points = screen(key)
    # For a key that it does not know, `screen` gives what it gives for none.
    note = UNKNOWN if key and preset is screen("")[0] else ""
    imported = points if preset.setup.points.kind == "file" else None
    return Asked(preset, imported, argument("file"), note)
