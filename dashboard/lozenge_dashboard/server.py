"""What all pages of the bench share."""

from __future__ import annotations

from typing import NamedTuple

from lozenge_dashboard.jobs import Workshop
from lozenge_dashboard.trail import Opening, Shelf, Trail, named, opening_of
from lozenge_engine.presets import Preset
from lozenge_engine.stages import Stages

__all__ = ["Server"]


class Server(NamedTuple):
    """What all pages share.

    Attributes
    ----------
    stages : Stages
        Cache of stage outputs.
    workshop : Workshop
        Processes for what is computed behind the pictures.
    shipped : dict of str to Preset
        For the menu.
    first : Preset
        What a page opens with whose address says nothing.
    shelf : Shelf
        Imported points.
    """

    stages: Stages
    workshop: Workshop
    shipped: dict[str, Preset]
    first: Preset
    shelf: Shelf

    def opening(self, query: str) -> Opening:
        """What an address opens."""
        origins = named((self.first, *self.shipped.values()))
        return opening_of(query, self.first, origins=origins, shelf=self.shelf)

    def trail(self, opening: Opening) -> Trail:
        """The list of states of a page that opens so."""
        return Trail(opening, self.first, origins=self.shipped.values(), shelf=self.shelf)
