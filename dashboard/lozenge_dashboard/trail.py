"""The states of one page as addresses: what an address opens, and how the browser's follows.

The browser's history is the only list of states: back, forward, undo and redo all walk along it,
so that it outlives a reload and the server.  The server counts the entries that it added.
"""

from __future__ import annotations

from collections import OrderedDict
from collections.abc import Callable, Iterable, Mapping
from typing import Any, NamedTuple

from lozenge_engine.address import query_of, read_query
from lozenge_engine.errors import InputError
from lozenge_engine.pointfile import PointFile
from lozenge_engine.presets import Preset

__all__ = ["Opening", "Shelf", "Trail", "named", "opening_of"]

POINT_FILES = 20
"""Imported points that a reload finds again without their file."""
HASH_SHOWN = 12
REST = "What was not taken is as in the first shipped preset; everything else in it holds."
Name = tuple[str, str]
"""Title and sentence."""


class Opening(NamedTuple):
    """What a page is to show.

    Attributes
    ----------
    preset : Preset
        The state to show.
    origin : Preset
        The preset that differences are marked from; `preset` itself where none is known.
    points : PointFile or None
        Imported points that the state asks for, if they are at hand.
    reason : str
        What was wrong with the address that it came from.
    given : str or None
        That address's query; None if it came from elsewhere.
    """

    preset: Preset
    origin: Preset
    points: PointFile | None = None
    reason: str = ""
    given: str | None = None

    @property
    def missing(self) -> str:
        """What to open before this state can be shown; empty if nothing is missing."""
        source = self.preset.setup.points
        if source.kind != "file" or self.points is not None:
            return ""
        return (
            f"This screen is computed from the points of {source.file} "
            f"(hash {(source.sha256 or '')[:HASH_SHOWN]} …), which are not here: open that file "
            "with “Open points”, and the screen appears."
        )


class Shelf:
    """Imported points by their hash, the newest few, for all pages of a server."""

    def __init__(self) -> None:
        self._held: OrderedDict[str, PointFile] = OrderedDict()

    def put(self, file: PointFile | None) -> None:
        """Keep a file's points; None is nothing to keep."""
        if file is not None:
            self._held[file.sha256] = file
            self._held.move_to_end(file.sha256)
            while len(self._held) > POINT_FILES:
                self._held.popitem(last=False)

    def of(self, preset: Preset) -> PointFile | None:
        """The points that a preset asks for, if they are here."""
        sha256 = preset.setup.points.sha256
        return None if sha256 is None else self._held.get(sha256)


def named(presets: Iterable[Preset]) -> dict[Name, Preset]:
    """Presets by the title and the sentence that an address carries; the first of equal ones."""
    return {(one.title, one.sentence): one for one in reversed(list(presets))}


def opening_of(
    query: str, first: Preset, *, origins: Mapping[Name, Preset], shelf: Shelf
) -> Opening:
    """What the query of an address opens.

    Parameters
    ----------
    query : str
        Without the question mark, from anywhere; empty for none.
    first : Preset
        What opens without an address, or with one that cannot be read at all.
    origins : mapping of (title, sentence) to Preset
        Those that an address may have started from.
    shelf : Shelf
        Imported points at hand.

    Returns
    -------
    Opening
        With the reason for every value that could not be taken.
    """
    if not query:
        return Opening(first, first, shelf.of(first))
    try:
        preset, faults = read_query(query)
    except InputError as error:
        reason = f"{error} Nothing of it was taken."
        return Opening(first, first, shelf.of(first), reason, query)
    origin = origins.get((preset.title, preset.sentence), preset)
    words = " ".join(faults)
    reason = f"From the address: {words} {REST}" if faults else ""
    return Opening(preset, origin, shelf.of(preset), reason, query)


class Trail:
    """Where one page is on the browser's list of states.

    Parameters
    ----------
    opening : Opening
        What the page opened with.
    first, origins, shelf
        As for `opening_of`.
    """

    def __init__(
        self, opening: Opening, first: Preset, *, origins: Iterable[Preset], shelf: Shelf
    ) -> None:
        self._first = first
        self._origins = named((opening.origin, first, *origins))
        self._shelf = shelf
        self._seen: object = None
        self.step = 0
        self.query = opening.given or ""
        self.refusal = ""

    def note(self, key: object, preset: Callable[[], Preset]) -> None:
        """Take the state that is shown; a new one becomes the next step.

        Parameters
        ----------
        key : object
            Equal as long as the state is; compared before anything is written.
        preset : callable
            Gives the state.
        """
        if key == self._seen:
            return
        before, self._seen = self._seen, key
        try:
            query, self.refusal = query_of(preset()), ""
        except InputError as error:
            self.refusal = f"This screen has no address: {error}"
            return
        if query != self.query:
            self.step += before is not None
            self.query = query

    def stay(self, key: object, opening: Opening) -> None:
        """Take the state that is shown for what an address opened, whatever it says."""
        self._seen = key
        self.query = opening.given or self.query

    def opened(self, preset: Preset, points: PointFile | None) -> None:
        """Remember a preset as one to return to, and the points that are in use."""
        self._origins[preset.title, preset.sentence] = preset
        self._shelf.put(points)

    def go(self, message: dict[str, Any]) -> Opening:
        """Follow the browser to another entry of its list.

        Parameters
        ----------
        message : dict
            `step`, a whole number, and `query`.

        Returns
        -------
        Opening
            What is to be shown there.
        """
        self.step = int(message["step"])
        self.query = query = str(message["query"])
        self._seen = None
        return opening_of(query, self._first, origins=self._origins, shelf=self._shelf)

    def state(self) -> dict[str, Any]:
        """For the browser: the step, its query, and why there is none."""
        return {"step": self.step, "query": self.query, "refusal": self.refusal}
