"""Which pictures there are of a computation: every view at every value of its switch."""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from typing import Any, NamedTuple

import numpy as np

from lozenge_dashboard.campaigns import Watch
from lozenge_dashboard.palette import LIGHT
from lozenge_dashboard.records import (
    CampaignChoices,
    Choices,
    EvidenceChoices,
    EvidenceScene,
    Scene,
)
from lozenge_dashboard.views.catalogue import VIEWS, Figure, View
from lozenge_dashboard.views.effort import CAMPAIGN_VIEWS
from lozenge_dashboard.views.evidence import EVIDENCE_VIEWS
from lozenge_dashboard.views.marks import FAR, Dust, Marks, Words
from lozenge_engine.presets import ViewState

__all__ = [
    "BENCH",
    "CAMPAIGN",
    "EVIDENCE",
    "Shot",
    "bench_shots",
    "campaign_shots",
    "evidence_shots",
]

BENCH = tuple(view.name for view in VIEWS)
CAMPAIGN = tuple(view.name for view in CAMPAIGN_VIEWS)
EVIDENCE = tuple(view.name for view in EVIDENCE_VIEWS)
"""Names of the views."""


class Shot(NamedTuple):
    """One picture.

    Attributes
    ----------
    name : str
        Stem of its files.
    question, caution : str
        What the view asks, and what to be careful about.
    figure : Figure
        How it is drawn.
    data : NamedTuple
        Its columns in the light theme.
    letters : bool
        Whether hues are regions, whose letters have to be on it.
    """

    name: str
    question: str
    caution: str
    figure: Figure
    data: Any
    letters: bool = False

    @property
    def empty(self) -> bool:
        """Whether there is nothing to see."""
        if any(_seen(part) for part in self.data if isinstance(part, Dust | Marks)):
            return False
        words = any(_seen(part) for part in self.data if isinstance(part, Words))
        return not words or self.data.limits == self.figure.blank.limits


def _seen(layer: Dust | Marks | Words) -> bool:
    """Whether a layer has a row that is not far outside every axis."""
    return bool((np.abs(layer.x.astype(float)) < 0.5 * FAR).any())


def _shots(
    views: Sequence[View],
    record: Any,
    choices: Any,
    *,
    chosen: Sequence[str],
    switches: dict[str, str],
) -> Iterator[Shot]:
    """The chosen views at every value of their switch."""
    for view in views:
        if view.name not in chosen:
            continue
        for value, _ in view.options or (("", ""),):
            field = switches.get(view.name, view.name)
            now = choices._replace(**{field: value}) if value else choices
            figure = view.figures.get(value) or view.figures[""]
            yield Shot(
                f"{view.name}-{value.replace('_', '-')}" if value else view.name,
                view.question,
                view.caution(record, now),
                figure,
                figure.read(record, now, LIGHT),
            )


def bench_shots(scene: Scene, view: ViewState, *, chosen: Sequence[str]) -> list[Shot]:
    """Pictures of the bench.

    Parameters
    ----------
    scene : Scene
        What was computed.
    view : ViewState
        Union rule and references of the preset.
    chosen : sequence of str
        Names of views.

    Returns
    -------
    list of Shot
        Empty ones too.
    """
    choices = Choices(
        union_rule=view.union_rule, twin=view.twin, chain=view.chain, difference=view.difference
    )
    found = _shots(VIEWS, scene, choices, chosen=chosen, switches={})
    return [shot._replace(letters=True) for shot in found]


def campaign_shots(watch: Watch, *, chosen: Sequence[str]) -> list[Shot]:
    """Pictures of a campaign.

    Parameters
    ----------
    watch : Watch
        A results file.
    chosen : sequence of str
        Names of views.

    Returns
    -------
    list of Shot
        Empty ones too.
    """
    switches = {"quantity": "quantity"}
    return list(_shots(CAMPAIGN_VIEWS, watch, CampaignChoices(), chosen=chosen, switches=switches))


def evidence_shots(scene: EvidenceScene, view: ViewState, *, chosen: Sequence[str]) -> list[Shot]:
    """Pictures of the evidence page.

    Parameters
    ----------
    scene : EvidenceScene
        With the records of the chosen views.
    view : ViewState
        Union rule of the preset.
    chosen : sequence of str
        Names of views.

    Returns
    -------
    list of Shot
        Empty ones too.
    """
    choices = EvidenceChoices(union_rule=view.union_rule)
    return list(_shots(EVIDENCE_VIEWS, scene, choices, chosen=chosen, switches={}))
