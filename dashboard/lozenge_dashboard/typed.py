"""What is typed on the campaign page: checked, and put into a `Proposal` or `Changes`."""

from __future__ import annotations

import math
from collections.abc import Callable, Mapping
from types import MappingProxyType
from typing import Any, Literal

from lozenge_dashboard.campaign_column import Changes
from lozenge_dashboard.campaigns import Campaigns, Status, Watch, checked_name
from lozenge_dashboard.proposal import (
    PROPOSED_AXES,
    WANTED,
    Proposal,
    Wanted,
    checked_end,
    shown,
)
from lozenge_engine.errors import InputError, refuse
from lozenge_engine.notation import duration, thousands
from lozenge_engine.plan import MAX_REALISATIONS, CampaignPlan
from lozenge_engine.schedule import first_round
from lozenge_engine.workers import MAX_WORKERS

__all__ = ["HIDDEN_BY", "idle", "put", "put_more", "refusals", "standing"]

MINUTES_HIGH = 1e6
HIDDEN_BY = {
    "axis": ("low", "high", "points", "counts"),
    "wanted": ("percent", "absolute"),
    "relative": ("percent", "absolute"),
}
"""What was refused there is forgotten when the control before is set."""


def _number(name: str, value: object, *, low: float, high: float, allowed: str = "") -> float:
    """A number of the page within its ends."""
    number = isinstance(value, int | float) and not isinstance(value, bool)
    if not (number and math.isfinite(value) and low <= value <= high):  # type: ignore[arg-type, operator]
        raise refuse(
            name,
            given=shown(value),
            allowed=allowed or f"a number from {low:g} to {thousands(round(high))}",
            do="type such a number",
        )
    return float(value)  # type: ignore[arg-type]


def _whole(name: str, value: object, *, low: int, high: int) -> int:
    """A whole number of the page within its ends."""
    allowed = f"a whole number from {low} to {thousands(high)}"
    number = _number(name, value, low=low, high=high, allowed=allowed)
    if not number.is_integer():
        raise refuse(name, given=shown(value), allowed=allowed, do="leave out the decimals")
    return int(number)


def _error(value: object, *, relative: bool, label: str = "error to reach") -> float:
    """A standard error in the units of its box."""
    low, high = (1e-4, 1000.0) if relative else (1e-6, 10.0)
    allowed = f"a number from {low:f}".rstrip("0") + f" to {high:g} {'%' if relative else 'nats'}"
    return _number(label, value, low=low, high=high, allowed=allowed)


def _minutes(value: object, *, label: str = "budget") -> float:
    """A budget as it is typed; 0 for none."""
    if isinstance(value, str) and not value.strip():
        return 0.0
    allowed = "a number of minutes from 1/60 to 1 000 000, or nothing for no limit"
    return _number(label, value, low=1 / 60, high=MINUTES_HIGH, allowed=allowed)


def _word(name: str, value: object, words: tuple[str, ...]) -> Any:
    if value not in words:
        raise refuse(name, given=value, allowed=", ".join(words), do="choose one of them")
    return value


def _put_end(name: Literal["low", "high", "points"]) -> Callable[[Proposal, Any], Proposal]:
    def put_end(proposal: Proposal, value: Any) -> Proposal:
        ladder = proposal.ladder
        if ladder is None:
            return proposal
        if name == "points":
            changed = ladder._replace(points=_whole("values", value, low=1, high=60))
        else:
            end = checked_end(name, value, axis=proposal.axis)
            changed = ladder._replace(low=end) if name == "low" else ladder._replace(high=end)
        return proposal._replace(
            ladders=MappingProxyType({**proposal.ladders, proposal.axis: changed})
        )

    return put_end


def _put_wanted(proposal: Proposal, value: Any) -> Proposal:
    wanted: Wanted = _word("wanted", value, WANTED)
    return proposal._replace(wanted=wanted, relative=wanted == "slope")


def _put_minutes(proposal: Proposal, value: Any) -> Proposal:
    return proposal._replace(minutes=_minutes(value) or None)


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
    name: str, check: Callable[..., Any], *label: str, **limits: Any
) -> Callable[[Proposal, Any], Proposal]:
    def put_plain(proposal: Proposal, value: Any) -> Proposal:
        return proposal._replace(**{name: check(*label, value, **limits)})

    return put_plain


_PUT: Mapping[str, Callable[[Proposal, Any], Proposal]] = MappingProxyType(
    {
        "wanted": _put_wanted,
        "relative": lambda p, value: p._replace(relative=value == "relative"),
        "percent": _plain("percent", _error, relative=True),
        "absolute": _plain("absolute", _error, relative=False),
        "axis": _plain("axis", _word, "axis", words=PROPOSED_AXES),
        "low": _put_end("low"),
        "high": _put_end("high"),
        "points": _put_end("points"),
        "counts": lambda p, value: p._replace(counts=str(value)[:200]),
        "placements": _put_placements,
        "realisations": _plain(
            "realisations", _whole, "realisations, most", low=1, high=MAX_REALISATIONS
        ),
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


def refusals(
    proposal: Proposal, own: Mapping[str, str], campaigns: Campaigns, *, acting: bool
) -> dict[str, str]:
    """Why the controls make no new campaign.

    Parameters
    ----------
    proposal : Proposal
        What they say.
    own : mapping of str to str
        What was refused when it was typed, by control.
    campaigns : Campaigns
        Of the folder, whose files are not written again.
    acting : bool
        Whether something is being done, so that the new file may have come up.

    Returns
    -------
    dict
        By control; empty if they do.
    """
    found = {**proposal.misfits(), **{k: v for k, v in own.items() if not k.startswith("more_")}}
    if "file" not in found and not acting:
        try:
            campaigns.check_new(checked_name(proposal.file))
        except InputError as error:
            found["file"] = str(error)
    return found


# ---------------------------------------------------------------- the open campaign


def put_more(changes: Changes, name: str, value: Any, watch: Watch) -> Changes:
    """Take a number for the open campaign.

    Parameters
    ----------
    changes : Changes
        Before.
    name : str
        Which of them.
    value : object
        What the browser sent.
    watch : Watch
        The open results file.

    Returns
    -------
    Changes
        Afterwards; what the file has already is no change.

    Raises
    ------
    InputError
        If the value is refused, also for what is there already.
    """
    plan, new = watch.plan, None
    if name == "realisations":
        label = "most realisations, this file"
        count = _whole(label, value, low=1, high=MAX_REALISATIONS)
        there = max(done for done, _ in watch.counts)
        if count <= there and count != plan.realisations:
            raise refuse(
                label,
                given=f"{count}, and {there} realisations of a sprinkling are there already",
                allowed="a larger number",
                do="type one",
            )
        new = float(count) if count != plan.realisations else None
    elif name == "minutes":
        label = "budget, this file"
        minutes = _minutes(value, label=label)
        if 0 < 60 * minutes <= watch.elapsed:
            raise refuse(
                label,
                given=f"{shown(value)} min, and {duration(watch.elapsed)} are used already",
                allowed="a longer time, or nothing for no limit",
                do="type one",
            )
        new = minutes if minutes != (plan.budget or 0.0) / 60 else None
    elif plan.target is not None:
        relative = plan.target.relative
        error = _error(value, relative=relative, label="error to reach, this file")
        same = math.isclose(error, (100 if relative else 1) * plan.target.error, rel_tol=1e-6)
        new = None if same else error
    return changes._replace(**{name: new})


def idle(watch: Watch, plan: CampaignPlan) -> str:
    """Why going on with a plan would end at once.

    Parameters
    ----------
    watch : Watch
        The open results file.
    plan : CampaignPlan
        Its own, or one of the same samples.

    Returns
    -------
    str
        The reason and the way out; empty if there is something to do.
    """
    counts = [done for done, _ in watch.counts]
    begun = first_round(watch.design._replace(plan=plan)).goals
    if all(done >= plan.realisations for done in counts):
        return (
            f"all {thousands(plan.realisations)} of each sprinkling are there: type a larger number"
        )
    piloted = all(done >= goal for done, goal in zip(counts, begun, strict=True))
    if plan.target is not None and piloted and watch.estimates.error <= plan.target.error:
        return "target reached: ask for a smaller error"
    if plan.budget is not None and watch.elapsed >= plan.budget:
        return f"the budget of {duration(plan.budget)} is used up: type a longer one"
    return ""


def standing(
    watch: Watch | None, status: Status, changes: Changes, *, refused: bool, acting: bool
) -> dict[str, Any]:
    """Which buttons of the open campaign act, and why the others do not.

    Parameters
    ----------
    watch, status : Watch or None, Status
        The open results file and how it stands.
    changes : Changes
        What was typed for it.
    refused, acting : bool
        Whether a number of it is refused; whether something is being done.

    Returns
    -------
    dict
        `can_pause`, `can_resume`, `can_more`, `why_resume` and `why_more`.
    """
    why_resume = why_more = "one moment" if acting or watch is None else ""
    if watch is not None and not acting:
        refusal = "a number above is refused" if refused else ""
        idling = refusal or idle(watch, changes.applied(watch.plan))
        why_resume = "it runs already" if status.running else idling
        untouched = changes == Changes() and not refused
        why_more = "type another number above first" if untouched else idling
    return {
        "can_pause": status.running and not status.stopping,
        "can_resume": not why_resume,
        "can_more": not why_more,
        "why_resume": why_resume,
        "why_more": why_more,
    }
