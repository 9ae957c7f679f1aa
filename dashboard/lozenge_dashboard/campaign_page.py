"""The campaign pages: one new page for every session, from campaigns that all of them share."""

from __future__ import annotations

from collections.abc import Callable
from pathlib import Path

import panel as pn

from lozenge_dashboard.campaign_session import Asked, CampaignSession
from lozenge_dashboard.campaigns import Campaigns
from lozenge_dashboard.views.effort import register_campaign
from lozenge_engine.presets import Preset

__all__ = ["campaign_pages"]

UNKNOWN = (
    "The bench page that this address names is not known to this server: this is the preset that "
    "it started with. Open the campaign from the bench again."
)


def campaign_pages(
    folder: Path, screen: Callable[[str], Preset]
) -> tuple[Callable[[], pn.Template], Callable[[], None]]:
    """Make the factory of campaign pages and the function that ends the campaigns.

    Parameters
    ----------
    folder : Path
        Where results files lie.
    screen : callable
        Gives the preset of a page of the bench by its key.

    Returns
    -------
    factory, close : callable
        The first returns a new page.
    """
    register_campaign()
    campaigns = Campaigns(folder)

    def page() -> pn.Template:
        session = CampaignSession(campaigns, _asked(screen))
        pn.state.onload(session.open)
        pn.state.on_session_destroyed(lambda _context: session.close())
        return session.board.template(then=session.draw_ahead)

    return page, campaigns.close


def _asked(screen: Callable[[str], Preset]) -> Asked:
    """Read the address; what it does not name is as the server began."""

    def argument(name: str) -> str:
        return b"".join(pn.state.session_args.get(name, [])[:1]).decode("utf-8", "replace")

    key = argument("from")
    preset = screen(key)
    # For a key that it does not know, `screen` gives what it gives for none.
    note = UNKNOWN if key and preset is screen("") else ""
    return Asked(preset, argument("file"), preset.view.theme, note)
