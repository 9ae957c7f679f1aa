"""How one view of the evidence page stands: shown, waiting, running, offered, stopped, failed."""

from __future__ import annotations

from typing import Any, Literal, NamedTuple

__all__ = ["Mark", "Standing"]


class Mark(NamedTuple):
    """What a view says of how it stands.

    Attributes
    ----------
    stale : str
        In its head; empty if nothing is to be said.
    action : str
        What its button does: ``compute``, ``cancel`` or nothing.
    text : str
        Below it; empty to leave what is there.
    error : bool
        Whether the text is a refusal.
    fresh : bool
        Whether the picture is of what is asked, if not finished.
    """

    stale: str = ""
    action: str = ""
    text: str = ""
    error: bool = False
    fresh: bool = False


class Standing(NamedTuple):
    """How one view stands.

    Attributes
    ----------
    state : str
        ``idle`` (nothing is wanted that is not shown), ``offered``, ``waiting``, ``running``,
        ``cancelled`` or ``failed``.
    wanted, shown : tuple or None
        Keys of what is to be shown, and of what is; an empty one for a part of what is asked.
    text : str
        Progress, the error, or why nothing can be shown.
    rough : bool
        Whether a few sprinklings come first, before those that are wanted.
    """

    state: Literal["idle", "offered", "waiting", "running", "cancelled", "failed"] = "idle"
    wanted: tuple[Any, ...] | None = None
    shown: tuple[Any, ...] | None = None
    text: str = ""
    rough: bool = False

    @property
    def busy(self) -> bool:
        """Whether the process has it or will."""
        return self.state in ("waiting", "running")

    def mark(self, offer: str) -> Mark:
        """What the view's head and foot say.

        Parameters
        ----------
        offer : str
            Why it is not computed without being asked for.

        Returns
        -------
        Mark
            Empty if the view shows what is asked.
        """
        there, fresh = self.shown is not None, self.shown == ()
        if self.state == "running":
            words = f"computing … {self.text}"
            return Mark(words, "cancel", "" if there else "Computing …", fresh=fresh)
        if self.state == "waiting":
            foot = "" if there else "Waits for the views that are computed before it."
            words = "more to come" if fresh else "waiting"
            return Mark(words, "cancel", foot, fresh=fresh)
        if self.state == "failed":
            return Mark("earlier" if there else "no result", "compute", self.text, error=True)
        if self.state == "offered":
            return Mark("earlier" if there else "", "compute", "" if there else offer)
        if self.state == "cancelled":
            foot = "" if there else "Cancelled: Compute starts it again."
            words = "not finished" if fresh else "earlier" if there else "cancelled"
            return Mark(words, "compute", foot, fresh=fresh)
        return Mark(text=self.text)
