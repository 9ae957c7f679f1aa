"""The controls of a new campaign: what the browser sends, put into a `Proposal`."""

from __future__ import annotations

import math
from collections.abc import Callable, Mapping
from types import MappingProxyType
from typing import Any

from lozenge_dashboard.proposal import PROPOSED_AXES, WANTED, Proposal, Wanted, checked_name
from lozenge_engine.errors import refuse
from lozenge_engine.workers import MAX_WORKERS

__all__ = ["put"]

MINUTES_HIGH = 1e6


def _number(name: str, value: object, *, low: float, high: float) -> float:
    """A number of the page within its ends."""
    number = isinstance(value, int | float) and not isinstance(value, bool)
    if not (number and math.isfinite(value) and low <= value <= high):  # type: ignore[arg-type, operator]
        raise refuse(
            name, given=value, allowed=f"a number from {low:g} to {high:g}", do="type such a number"
        )
    return float(value)  # type: ignore[arg-type]


def _whole(name: str, value: object, *, low: int, high: int) -> int:
    """A whole number of the page within its ends."""
    number = _number(name, value, low=low, high=high)
    if not number.is_integer():
        raise refuse(name, given=value, allowed="a whole number", do="leave out the decimals")
    return int(number)


def _word(name: str, value: object, words: tuple[str, ...]) -> Any:
    if value not in words:
        raise refuse(name, given=value, allowed=", ".join(words), do="choose one of them")
    return value


def _put_end(name: str) -> Callable[[Proposal, Any], Proposal]:
    def put_end(proposal: Proposal, value: Any) -> Proposal:
        ladder = proposal.ladder
        if ladder is None:
            return proposal
        if name == "points":
            changed = ladder._replace(points=_whole("points", value, low=1, high=60))
        else:
            end = _number(name, value, low=0.0, high=1e6)
            changed = ladder._replace(low=end) if name == "low" else ladder._replace(high=end)
        return proposal._replace(
            ladders=MappingProxyType({**proposal.ladders, proposal.axis: changed})
        )

    return put_end


def _put_wanted(proposal: Proposal, value: Any) -> Proposal:
    wanted: Wanted = _word("wanted", value, WANTED)
    return proposal._replace(wanted=wanted, relative=wanted == "slope")


def _put_minutes(proposal: Proposal, value: Any) -> Proposal:
    if isinstance(value, str) and not value.strip():
        return proposal._replace(minutes=None)
    return proposal._replace(minutes=_number("budget", value, low=1 / 60, high=MINUTES_HIGH))


def _put_placements(proposal: Proposal, value: Any) -> Proposal:
    rows = list(value)
    shifts = tuple(
        (
            _number("shift t", row[0], low=-2.0, high=2.0),
            _number("shift x", row[1], low=-2.0, high=2.0),
        )
        for row in rows
    )
    return proposal._replace(placements=shifts)


def _plain(
    name: str, check: Callable[..., Any], label: str, **limits: Any
) -> Callable[[Proposal, Any], Proposal]:
    def put_plain(proposal: Proposal, value: Any) -> Proposal:
        return proposal._replace(**{name: check(label, value, **limits)})

    return put_plain


_PUT: Mapping[str, Callable[[Proposal, Any], Proposal]] = MappingProxyType(
    {
        "wanted": _put_wanted,
        "relative": lambda p, value: p._replace(relative=value == "relative"),
        "percent": _plain("percent", _number, "error", low=1e-4, high=1000.0),
        "absolute": _plain("absolute", _number, "error", low=1e-6, high=10.0),
        "axis": _plain("axis", _word, "axis", words=PROPOSED_AXES),
        "low": _put_end("low"),
        "high": _put_end("high"),
        "points": _put_end("points"),
        "counts": lambda p, value: p._replace(counts=str(value)[:200]),
        "placements": _put_placements,
        "realisations": _plain("realisations", _whole, "realisations", low=1, high=1_000_000),
        "minutes": _put_minutes,
        "smallest_region": _plain("smallest_region", _whole, "least elements", low=0, high=100_000),
        "workers": _plain("workers", _whole, "workers", low=1, high=MAX_WORKERS),
        "file": lambda p, value: p._replace(file=checked_name(value), named=True),
    }
)


def put(proposal: Proposal, name: str, value: Any) -> Proposal:
    """Set one control.

    Parameters
    ----------
    proposal : Proposal
        Before.
    name : str
        The control.
    value : object
        What the browser sent.

    Returns
    -------
    Proposal
        Afterwards; whether it makes a plan says `Proposal.misfits`.

    Raises
    ------
    InputError
        If the value itself is refused.
    """
    return _PUT[name](proposal, value)
