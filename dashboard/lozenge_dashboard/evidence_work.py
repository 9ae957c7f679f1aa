"""What the process of the evidence pages does: one task for each view."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import replace
from pathlib import Path
from types import MappingProxyType
from typing import Any, NamedTuple

from lozenge_dashboard.errands import Task
from lozenge_engine.config import Setup
from lozenge_engine.evidence import EvidencePlan
from lozenge_engine.pointfile import PointFile
from lozenge_engine.stages import Stages

__all__ = ["ORDER", "TASKS", "Ask", "first_plan", "has_closed_form", "lacking"]

Report = Callable[[str, float], None]
Publish = Callable[[Any], None]

ORDER = ("modeshape", "statecheck", "cutstudy", "mutual", "thresholds", "due")
"""Views in the order in which they are computed: the quick ones first."""
FEW = 2
"""Sprinklings of the first look; the least that show an error."""
DEPENDS: Mapping[str, tuple[str, ...]] = MappingProxyType(
    {
        "cutstudy": (
            "alpha_low",
            "alpha_high",
            "alphas",
            "stage",
            "rules",
            "uncut_space",
            "realisations",
            "level",
        ),
        "thresholds": ("delta", "realisations", "level"),
        "modeshape": ("operator", "region", "rank"),
        "statecheck": ("realisations",),
        "mutual": ("realisations", "level"),
        "due": ("realisations", "level"),
    }
)
"""Fields of the plan that each view depends on."""


class Ask(NamedTuple):
    """What a page asks.

    Attributes
    ----------
    setup : Setup
        The geometry that the bench sent.
    plan : EvidencePlan
        What is asked about it.
    points : PointFile or None
        Imported points.
    results : Path or None
        Results file that slopes from data are read from.
    """

    setup: Setup
    plan: EvidencePlan
    points: PointFile | None = None
    results: Path | None = None

    def rough(self) -> Ask:
        """The same of a few sprinklings, to show something early."""
        return self._replace(plan=replace(self.plan, realisations=FEW))

    def takes_more(self, view: str) -> bool:
        """Whether a view wants more sprinklings than a few."""
        return "realisations" in DEPENDS[view] and self.plan.realisations > FEW

    def key(self, view: str) -> tuple[Any, ...]:
        """What a view depends on: equal keys, equal pictures."""
        asked = tuple(getattr(self.plan, name) for name in DEPENDS[view])
        if view == "cutstudy":
            return self.setup, *asked, self.plan.cut_quantity == "slope"
        return (self.setup, *asked, self.results) if view == "due" else (self.setup, *asked)


def has_closed_form(setup: Setup) -> bool:
    """Whether the continuum's modes are known."""
    return setup.mass == 0 and setup.points.curvature == "flat"


def first_plan(setup: Setup) -> EvidencePlan:
    """What is asked where a preset says nothing: the twin in closed form where there is one."""
    return EvidencePlan(level="exact" if has_closed_form(setup) else "preview")


def lacking(view: str, setup: Setup) -> str:
    """Why a geometry has nothing for a view; empty if it has."""
    if view == "mutual" and len(setup.regions()) < 2:
        return "One region has no mutual information: add a region on the bench."
    return ""


def cuts(ask: Ask, *, stages: Stages, report: Report, publish: Publish) -> Any:
    """The cut study."""
    from lozenge_engine.cutrecord import cut_record

    return cut_record(
        ask.setup, ask.plan, points=ask.points, cache=stages, report=report, publish=publish
    )


def thresholds(ask: Ask, *, stages: Stages, report: Report, publish: Publish) -> Any:
    """The derived thresholds."""
    from lozenge_engine.thresholds import threshold_record

    return threshold_record(
        ask.setup, ask.plan, points=ask.points, cache=stages, report=report, publish=publish
    )


def mode(ask: Ask, *, stages: Stages, report: Report, **_: Any) -> Any:
    """The mode that was picked."""
    from lozenge_engine.modeview import mode_record

    plan = ask.plan
    return mode_record(
        ask.setup.config(),
        stages=stages,
        operator=plan.operator,
        region=plan.region,
        rank=plan.rank,
        points=ask.points,
        report=report,
    )


def state(ask: Ask, *, stages: Stages, report: Report, publish: Publish) -> Any:
    """The checks of the state."""
    from lozenge_engine.statecheck import state_record

    return state_record(
        ask.setup.config(),
        stages=stages,
        realisations=ask.plan.realisations,
        points=ask.points,
        report=report,
        publish=publish,
    )


def mutual(ask: Ask, *, stages: Stages, report: Report, publish: Publish) -> Any:
    """The mutual information against the cross ratio."""
    from lozenge_engine.crossratio import mutual_record

    return mutual_record(
        ask.setup, ask.plan, points=ask.points, stages=stages, report=report, publish=publish
    )


def due(ask: Ask, *, stages: Stages, report: Report, publish: Publish) -> Any:
    """The slopes of data, twin and chain."""
    from lozenge_engine.due import due_record

    return due_record(
        ask.setup,
        ask.plan,
        results=ask.results,
        points=ask.points,
        stages=stages,
        report=report,
        publish=publish,
    )


TASKS: Mapping[str, Task] = MappingProxyType(
    {
        "modeshape": mode,
        "cutstudy": cuts,
        "statecheck": state,
        "thresholds": thresholds,
        "mutual": mutual,
        "due": due,
    }
)
