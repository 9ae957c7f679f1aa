"""The control column of the campaign page: what it offers, and what it shows."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import replace
from typing import Any, ClassVar, NamedTuple

import param
from panel.custom import JSComponent

from lozenge_dashboard.controls import ASSETS, FIELDS_JS, Field, Group, as_plain
from lozenge_dashboard.proposal import Proposal
from lozenge_engine.errors import InputError
from lozenge_engine.notation import thousands
from lozenge_engine.plan import Axis, CampaignPlan

__all__ = [
    "CampaignControls",
    "Changes",
    "column_state",
    "label_of",
]

WANTED = Group(
    "What is wanted",
    (
        Field(
            "wanted",
            "choice",
            "wanted",
            "What the campaign ends at: an error of b, of S or I at every point, or a count.",
            options=(
                ("slope", "slope b"),
                ("entropy", "S at each point"),
                ("mutual_information", "I at each point"),
                ("count", "fixed number"),
            ),
        ),
        Field(
            "relative",
            "radio",
            "error counted",
            "Whether the standard error to reach is a fraction of the value or in nats.",
            options=(("relative", "in per cent"), ("absolute", "in nats")),
        ),
        Field("percent", "number", "error to reach", "Standard error to reach.", unit="%"),
        Field("absolute", "number", "error to reach", "Standard error to reach.", unit="nats"),
    ),
)
POINTS = Group(
    "Points",
    (
        Field(
            "axis",
            "choice",
            "axis",
            "What differs from point to point; all else stays as on the bench, but half-width "
            "scales sizes and gaps together.",
            options=(
                ("density", "density"),
                ("half_width", "half-width"),
                ("separation", "separation"),
                ("preset", "as in the preset"),
            ),
        ),
        Field("low", "number", "from", "Lowest value of the axis."),
        Field("high", "number", "to", "Highest value of the axis."),
        Field("points", "number", "values", "Number of values, both ends included.", whole=True),
        Field(
            "counts",
            "text",
            "region counts",
            "Region counts as a second axis, such as 1, 2, 3: each has a fit of its own.",
        ),
        Field(
            "placements",
            "placements",
            "placements",
            "Shifts (t, x) of all regions together: each is a class with its own constant.",
        ),
        Field(
            "smallest_region",
            "number",
            "least elements",
            "Points whose smallest region expects fewer are left out of fits.",
            whole=True,
        ),
    ),
)
EFFORT = Group(
    "Effort",
    (
        Field(
            "realisations",
            "number",
            "realisations, most",
            "Most realisations of each sprinkling; all of them where a fixed number is wanted.",
            whole=True,
        ),
        Field("minutes", "number", "budget", "Running time to end at; empty: none.", unit="min"),
        Field("workers", "number", "workers", "Realisations computed side by side.", whole=True),
        Field(
            "file",
            "text",
            "results file",
            "Name of the new results file, in the folder where the server was started.",
        ),
    ),
)
MORE = (
    Field(
        "more_realisations",
        "number",
        "most realisations, this file",
        "Raises or lowers the most of each sprinkling; what is finished stays.",
        whole=True,
    ),
    Field(
        "more_minutes",
        "number",
        "budget, this file",
        "Running time, all runs together.",
        unit="min",
    ),
    Field("more_error", "number", "error to reach, this file", "Standard error at which it ends."),
)
LABELS = {field.name: field.label for group in (WANTED, POINTS, EFFORT) for field in group.fields}
LISTED = 8
"""Most values of an axis that are all written out."""
AXIS_UNITS = {
    "density": "per area",
    "half_width": "half-widths",
    "separation": "half-widths",
}


class Changes(NamedTuple):
    """What was typed for the open campaign; None where nothing was.

    Attributes
    ----------
    realisations : float or None
        Most of each sprinkling.
    minutes : float or None
        Budget; 0 for no limit.
    error : float or None
        In the target's own terms: per cent where it is relative.
    """

    realisations: float | None = None
    minutes: float | None = None
    error: float | None = None

    def applied(self, plan: CampaignPlan) -> CampaignPlan:
        """The open campaign's plan with what was typed.

        Raises
        ------
        InputError
            If that makes no plan.
        """
        new: dict[str, Any] = {}
        if self.realisations is not None:
            whole = float(self.realisations).is_integer()
            new["realisations"] = int(self.realisations) if whole else self.realisations
        if self.minutes is not None:
            new["budget"] = 60 * self.minutes if self.minutes else None
        if self.error is not None and plan.target is not None:
            scale = 100 if plan.target.relative else 1
            new["target"] = replace(plan.target, error=self.error / scale)
        return replace(plan, **new)


class CampaignControls(JSComponent):
    """The column in the browser, fed from one `state`; messages go to `receive`."""

    groups = param.List(doc="The groups, as plain values; they do not change.")
    more = param.List(doc="Controls of the open campaign.")
    state = param.Dict(doc="`fields` by name, `page`, `open`, `forecast` and `start`.")

    _esm: ClassVar[str] = FIELDS_JS + (ASSETS / "campaign.js").read_text(encoding="utf-8")
    _stylesheets: ClassVar[list[str]] = [
        (ASSETS / "controls.css").read_text(encoding="utf-8"),
        (ASSETS / "campaign_column.css").read_text(encoding="utf-8"),
    ]

    def __init__(self, receive: Callable[[dict[str, Any]], None], **params: Any) -> None:
        self._receive = receive
        super().__init__(
            groups=[as_plain(group) for group in (WANTED, POINTS, EFFORT)],
            more=[field._asdict() for field in MORE],
            **params,
        )

    def _handle_msg(self, data: Any) -> None:
        self._receive(data)


# ---------------------------------------------------------------- what it shows


def _new_fields(proposal: Proposal) -> dict[str, dict[str, Any]]:
    """States of the controls of a new campaign."""
    ladder = proposal.ladder
    aimed = proposal.wanted != "count"
    unit = AXIS_UNITS.get(proposal.axis, "")
    closed = {}
    if "separation" not in proposal.ladders:
        closed["separation"] = "one region has no separation"
    if proposal.base.campaign is None:
        closed["preset"] = "the preset holds no campaign"
    fields: dict[str, dict[str, Any]] = {
        "wanted": {"value": proposal.wanted},
        "relative": {"value": "relative" if proposal.relative else "absolute"},
        "percent": {"value": proposal.percent, "hidden": not (aimed and proposal.relative)},
        "absolute": {"value": proposal.absolute, "hidden": not aimed or proposal.relative},
        "axis": {"value": proposal.axis, "closed": closed},
        "counts": {"value": proposal.counts},
        "placements": {"value": [list(shift) for shift in proposal.placements]},
        "smallest_region": {"value": proposal.smallest_region},
        "realisations": {"value": proposal.realisations},
        "minutes": {"value": "" if proposal.minutes is None else round(proposal.minutes, 6)},
        "workers": {"value": proposal.workers},
        "file": {"value": proposal.file},
    }
    fields["relative"]["hidden"] = not aimed
    if proposal.axis == "preset" and proposal.base.campaign is not None:
        fields["axis"]["note"] = "; ".join(map(_axis_words, proposal.base.campaign.axes))
    for name in ("low", "high", "points"):
        value = getattr(ladder, name) if ladder is not None else 0
        fields[name] = {"value": value, "hidden": ladder is None, "unit": unit}
    fields["points"]["unit"] = ""
    fields["high"]["note"], fields["points"]["note"] = _spread(proposal)
    if proposal.axis == "half_width":
        fields["axis"]["note"] = (
            "Sizes and gaps scale together; centre and touched corners stay. The number is the "
            "smallest region's."
        )
    fields["counts"]["hidden"] = ladder is None
    if proposal.base.setup.region_list is not None:
        fields["counts"]["disabled"] = "a list of regions has its own count"
    return fields


def label_of(name: str) -> str:
    """What stands on screen at a control of the new campaign."""
    return LABELS[name]


def _short(number: float) -> str:
    """Four significant digits."""
    return f"{float(f'{number:.4g}'):.12g}"


def _spread(proposal: Proposal) -> tuple[str, str]:
    """The elements between the ends of a density axis; the values of an axis and their spacing."""
    ladder = proposal.ladder
    if ladder is None:
        return "", ""
    even = proposal.axis == "separation"
    try:
        values = ladder.values(even=even)
    except InputError:
        return "", ""
    elements = ""
    if proposal.axis == "density":
        source = proposal.base.setup.points
        volume = source.elements() / source.density
        low, high = (thousands(round(volume * end)) for end in (values[0], values[-1]))
        span = low if len(values) == 1 else f"{low} to {high}"
        elements = f"N = {volume:.4g} × density: {span} elements expected"
    said = [_short(value) for value in values]
    if len(said) > LISTED:
        said = [*said[: LISTED - 2], "…", said[-1]]
    spacing = "equally spaced" if even else "equally spaced in the logarithm"
    return elements, ", ".join(said) + (f"; {spacing}" if len(values) > 2 else "")


def _axis_words(axis: Axis) -> str:
    """An axis with its values."""
    values = ", ".join(_short(v) if isinstance(v, float) else str(v) for v in axis.values)
    name = axis.name.replace("half_width", "half-width").replace("_", " ")
    return f"{name} {values}"


def _more_fields(plan: CampaignPlan | None, changes: Changes) -> dict[str, dict[str, Any]]:
    """States of the controls of the open campaign."""
    if plan is None:
        return {field.name: {"value": "", "hidden": True} for field in MORE}
    target = plan.target
    scale = 100 if target is not None and target.relative else 1
    minutes = changes.minutes
    if minutes is None and plan.budget is not None:
        minutes = plan.budget / 60
    error = changes.error
    if error is None and target is not None:
        error = float(f"{scale * target.error:.6g}")
    return {
        "more_realisations": {
            "value": plan.realisations if changes.realisations is None else changes.realisations
        },
        "more_minutes": {"value": round(minutes, 6) if minutes else ""},
        "more_error": {
            "value": error,
            "hidden": target is None,
            "unit": "%" if scale == 100 else "nats",
        },
    }


def column_state(
    proposal: Proposal,
    *,
    plan: CampaignPlan | None,
    changes: Changes,
    errors: Mapping[str, str],
    page: Mapping[str, Any],
    opened: Mapping[str, Any],
    forecast: Mapping[str, Any],
    start: str,
) -> dict[str, Any]:
    """Everything that the column shows.

    Parameters
    ----------
    proposal : Proposal
        The new campaign.
    plan, changes : CampaignPlan or None, Changes
        The open campaign's plan, and what was typed for it.
    errors : mapping of str to str
        By control.
    page, opened, forecast : mapping
        Head of the column, the open campaign, the prediction.
    start : str
        Why the new campaign cannot start; empty if it can.

    Returns
    -------
    dict
        For `CampaignControls.state`.
    """
    fields = {**_new_fields(proposal), **_more_fields(plan, changes)}
    for name, text in errors.items():
        if name in fields:
            fields[name]["error"] = text
    return {
        "fields": fields,
        "page": dict(page),
        "open": dict(opened),
        "forecast": dict(forecast),
        "start": start,
    }
