"""A new page for every session, from what the server shares."""

from __future__ import annotations

import threading
from collections.abc import Callable
from pathlib import Path

import holoviews as hv
import panel as pn

from lozenge_dashboard.exchange import points_beside
from lozenge_dashboard.jobs import Workshop
from lozenge_dashboard.session import Server, Session
from lozenge_dashboard.views.catalogue import register_all
from lozenge_engine.presets import Preset
from lozenge_engine.stages import Stages

__all__ = ["pages"]

FIRST_PATIENCE = 2.0
"""Longest time (s) that a page waits for the picture it opens with; later it comes by itself."""


def pages(
    preset: Preset,
    shipped: dict[str, Preset],
    stages: Stages,
    *,
    path: Path | None,
    ready: threading.Event,
    loaded: Callable[[], None],
) -> tuple[Callable[[], pn.Template], Callable[[], None]]:
    """Make the factory of pages and the function that ends what they share.

    Parameters
    ----------
    preset : Preset
        The screen that every page opens with.
    shipped : dict of str to Preset
        For the menu.
    stages : Stages
        Cache of stage outputs.
    path : Path or None
        File of the preset.
    ready : Event
        Set when the modes of the first picture are in the cache, if they are computed ahead.
    loaded : callable
        Called whenever a browser has loaded a page.

    Returns
    -------
    factory, close : callable
        The first returns a new page; the second ends the worker process.
    """
    pn.extension(sizing_mode="stretch_width")
    hv.extension("bokeh")
    # On WebGL, styles move to the wrong mark as soon as one of several kinds is out of sight.
    hv.renderer("bokeh").webgl = False
    register_all()
    server = Server(stages, Workshop(), shipped)
    points = points_beside(preset, path)

    def page() -> pn.Template:
        session = Session(server, preset, points=points)

        def opened() -> None:
            session.open()
            loaded()

        pn.state.onload(opened)
        pn.state.on_session_destroyed(lambda _context: session.close())
        ready.wait(FIRST_PATIENCE)
        return session.board.template(then=session.draw_ahead)

    return page, server.workshop.close
