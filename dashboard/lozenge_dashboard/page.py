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
from lozenge_dashboard.session import Server, Session
from lozenge_dashboard.views.catalogue import register_all
from lozenge_engine.presets import Preset, ViewState
from lozenge_engine.stages import Stages

__all__ = ["pages"]

CAMPAIGN = "/campaign"
KEPT_SCREENS = 200
"""Pages of the bench that a campaign page can be opened from."""
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
        By the address of the page: the bench and the campaigns; each returns a new page.
    close : callable
        Ends the worker processes.
    """
    pn.extension(sizing_mode="stretch_width")
    hv.extension("bokeh")
    # On WebGL, styles move to the wrong mark as soon as one of several kinds is out of sight.
    hv.renderer("bokeh").webgl = False
    register_all()
    server = Server(stages, Workshop(), shipped)
    points = points_beside(preset, path)
    screens = _Screens(preset)
    campaigns = _Campaigns(Path.cwd(), screens.get)

    def page() -> pn.Template:
        session = Session(server, preset, points=points)
        key = screens.add(session)
        session.board.controls.campaign = f"{CAMPAIGN}?from={key}"

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
        campaigns.close()
        server.workshop.close()

    return {"/": page, CAMPAIGN: campaigns.page}, close


class _Screens:
    """What the pages of the bench show, by a key in the address of the campaign page."""

    def __init__(self, first: Preset) -> None:
        self._first = first
        self._now: OrderedDict[str, Callable[[], Preset]] = OrderedDict()

    def add(self, session: Session) -> str:
        """Remember a page; gives its key."""
        key = secrets.token_urlsafe(8)

        def now() -> Preset:
            view = ViewState(theme=session.theme)
            return session.desk.as_preset(view, None)

        self._now[key] = now
        while len(self._now) > KEPT_SCREENS:
            self._now.popitem(last=False)
        return key

    def freeze(self, key: str) -> None:
        """Keep what a page showed last, and forget the page."""
        if key in self._now:
            last = self._now[key]()
            self._now[key] = lambda: last

    def get(self, key: str) -> Preset:
        """What a page shows; the server's first preset for one that is not known."""
        return self._now[key]() if key in self._now else self._first


class _Campaigns:
    """The campaign pages, whose modules are imported when the first is asked for."""

    def __init__(self, folder: Path, screen: Callable[[str], Preset]) -> None:
        self._folder, self._screen = folder, screen
        self._made: tuple[Callable[[], pn.Template], Callable[[], None]] | None = None

    def page(self) -> pn.Template:
        """A new campaign page."""
        if self._made is None:
            from lozenge_dashboard.campaign_page import campaign_pages

            self._made = campaign_pages(self._folder, self._screen)
        return self._made[0]()

    def close(self) -> None:
        """End the campaigns that run."""
        if self._made is not None:
            self._made[1]()
