"""A new page for every session, from what the server shares."""

from __future__ import annotations

import secrets
import threading
from collections import OrderedDict
from collections.abc import Callable
from pathlib import Path

import holoviews as hv
import panel as pn

from lozenge_dashboard.exchange import points_beside
from lozenge_dashboard.jobs import Workshop
from lozenge_dashboard.server import Server
from lozenge_dashboard.session import Session
from lozenge_dashboard.trail import Shelf
from lozenge_dashboard.views.catalogue import register_all
from lozenge_engine.pointfile import PointFile
from lozenge_engine.presets import Preset, ViewState
from lozenge_engine.stages import Stages

__all__ = ["pages"]

CAMPAIGN, EVIDENCE = "/campaign", "/evidence"
KEPT_SCREENS = 200
"""Pages of the bench that another page can be opened from."""
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
) -> tuple[dict[str, Callable[[], pn.Template]], Callable[[], None]]:
    """Make the factories of pages and the function that ends what they share.

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
    factories : dict of str to callable
        By the address of the page: the bench, the campaigns and the evidence; each returns a new
        page.
    close : callable
        Ends the worker processes.
    """
    pn.extension(sizing_mode="stretch_width")
    hv.extension("bokeh")
    # On WebGL, styles move to the wrong mark as soon as one of several kinds is out of sight.
    hv.renderer("bokeh").webgl = False
    register_all()
    points = points_beside(preset, path)
    server = Server(stages, Workshop(), shipped, preset, Shelf())
    server.shelf.put(points)
    screens = _Screens(preset, points)
    folder = Path.cwd()

    def campaigns_made() -> _Made:
        from lozenge_dashboard.campaign_page import campaign_pages

        return campaign_pages(folder, lambda key: screens.get(key)[0])

    def evidence_made() -> _Made:
        from lozenge_dashboard.evidence_page import evidence_pages

        return evidence_pages(folder, screens.get, stages)

    others = {CAMPAIGN: _Later(campaigns_made), EVIDENCE: _Later(evidence_made)}

    def page() -> pn.Template:
        session = Session(server, server.opening(_query()))
        key = screens.add(session)
        session.board.controls.param.update(
            campaign=f"{CAMPAIGN}?from={key}", evidence=f"{EVIDENCE}?from={key}"
        )

        def opened() -> None:
            session.open()
            loaded()

        def closed(_context: object) -> None:
            screens.freeze(key)
            session.close()

        pn.state.onload(opened)
        pn.state.on_session_destroyed(closed)
        ready.wait(FIRST_PATIENCE)
        return session.board.template(then=session.draw_ahead)

    def close() -> None:
        for other in others.values():
            other.close()
        server.workshop.close()

    return {"/": page, **{address: other.page for address, other in others.items()}}, close


def _query() -> str:
    """The query that the present page was asked for with."""
    context = getattr(pn.state.curdoc, "session_context", None)
    return str(getattr(getattr(context, "request", None), "query", None) or "")


_Screen = tuple[Preset, PointFile | None]
_Made = tuple[Callable[[], pn.Template], Callable[[], None]]


class _Screens:
    """What the pages of the bench show, by a key in the address of another page."""

    def __init__(self, first: Preset, points: PointFile | None) -> None:
        self._first = first, points
        self._now: OrderedDict[str, Callable[[], _Screen]] = OrderedDict()

    def add(self, session: Session) -> str:
        """Remember a page; gives its key."""
        key = secrets.token_urlsafe(8)

        def now() -> _Screen:
            view = ViewState(theme=session.theme, union_rule=session.choices.union_rule)
            return session.desk.as_preset(view, None), session.bench.file

        self._now[key] = now
        while len(self._now) > KEPT_SCREENS:
            self._now.popitem(last=False)
        return key

    def freeze(self, key: str) -> None:
        """Keep what a page showed last, and forget the page."""
        if key in self._now:
            last = self._now[key]()
            self._now[key] = lambda: last

    def get(self, key: str) -> _Screen:
        """What a page shows, with its imported points; the server's first for an unknown one."""
        return self._now[key]() if key in self._now else self._first


class _Later:
    """Pages of one kind, whose modules are imported when the first is asked for."""

    def __init__(self, make: Callable[[], _Made]) -> None:
        self._make = make
        self._made: _Made | None = None

    def page(self) -> pn.Template:
        """A new page."""
        if self._made is None:
            self._made = self._make()
        return self._made[0]()

    def close(self) -> None:
        """End what the pages have running."""
        if self._made is not None:
            self._made[1]()
