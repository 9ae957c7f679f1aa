"""Views of the cut study and of the thresholds: columns, figures, what they say."""

from __future__ import annotations

import functools
import math
from typing import Any

import holoviews as hv
import numpy as np
import pytest

from lozenge_dashboard.palette import DARK, LIGHT
from lozenge_dashboard.records import EvidenceChoices, EvidenceScene
from lozenge_dashboard.views import cutmodes, cutstudy, thresholds
from lozenge_dashboard.views.marks import Layer, Marks, Words, register
from lozenge_engine.config import PointSource, Setup, SweepPlan
from lozenge_engine.cutrecord import cut_record
from lozenge_engine.evidence import EvidencePlan
from lozenge_engine.stages import Stages
from lozenge_engine.thresholds import threshold_record

SETUP = Setup(
    points=PointSource(density=120.0, seed=5),
    half_width=0.4,
    separation=0.1,
    sweeps=SweepPlan(density_low=80.0, density_high=120.0, density_points=3),
)
PLAN = EvidencePlan(alphas=6, alpha_low=0.5, realisations=2, uncut_space=True, cut_quantity="slope")
CHOICES = EvidenceChoices()
FIGURES = (
    (cutstudy.GROUP, cutstudy.AXES, cutstudy.read, cutstudy.draw, cutstudy.ENTROPY_BLANK),
    (
        cutstudy.MUTUAL_GROUP,
        cutstudy.MUTUAL_AXES,
        cutstudy.read_mutual,
        cutstudy.draw_mutual,
        cutstudy.BLANK,
    ),
    (
        cutstudy.SLOPE_GROUP,
        cutstudy.SLOPE_AXES,
        cutstudy.read_slope,
        cutstudy.draw_slope,
        cutstudy.BLANK,
    ),
    (
        cutstudy.KEPT_GROUP,
        cutstudy.KEPT_AXES,
        cutstudy.read_kept,
        cutstudy.draw_kept,
        cutstudy.BLANK,
    ),
    (
        cutmodes.MODES_GROUP,
        cutmodes.MODES_AXES,
        cutmodes.read_modes,
        cutmodes.draw_modes,
        cutmodes.MODES_BLANK,
    ),
    (thresholds.GROUP, thresholds.AXES, thresholds.read, thresholds.draw, thresholds.BLANK),
)
names = pytest.mark.parametrize("figure", FIGURES, ids=lambda f: f[0])


@pytest.fixture(scope="module", autouse=True)
def bokeh() -> None:
    """The plotting backend, as the page sets it up."""
    hv.extension("bokeh")
    for group, axes, *_ in FIGURES:
        register(group, **axes)


@functools.cache
def scene() -> EvidenceScene:
    """A small geometry with both records."""
    cache = Stages()
    return EvidenceScene(
        setup=SETUP,
        plan=PLAN,
        cuts=cut_record(SETUP, PLAN, cache=cache),
        thresholds=threshold_record(SETUP, PLAN, cache=cache),
    )


def layers(data: Any) -> list[Layer]:
    """The layers of a figure's columns."""
    return [part for part in data if isinstance(part, Layer)]


def said(data: Any) -> str:
    """Everything that stands in the figure."""
    return "; ".join(str(text) for part in data if isinstance(part, Words) for text in part.text)


@names
@pytest.mark.parametrize("look", [LIGHT, DARK], ids=["light", "dark"])
def test_sources_hold_what_holoviews_would_draw(figure: Any, look: Any) -> None:
    _, _, read, draw, blank = figure
    data = read(scene(), CHOICES, look)
    drawn = hv.render(draw(data))
    for renderer, layer in zip(drawn.renderers, layers(data), strict=True):
        sent, slow = layer.source(), renderer.data_source.data
        for name, column in sent.items():
            assert list(column) == list(slow[name]), name
    for renderer, layer in zip(hv.render(draw(blank)).renderers, layers(data), strict=True):
        assert set(renderer.data_source.data) == set(layer.source())


@names
def test_every_mark_in_sight_lies_within_the_limits(figure: Any) -> None:
    data = figure[2](scene(), CHOICES, LIGHT)
    for layer in layers(data):
        if isinstance(layer, Marks):
            seen = layer.x < 1e8
            assert seen.any()
            assert (layer.x[seen] >= data.limits.x_low).all()
            assert (layer.x[seen] <= data.limits.x_high).all()
            assert np.isfinite(layer.y[seen].astype(float)).all()


@names
def test_view_without_a_record_is_blank(figure: Any) -> None:
    empty = EvidenceScene(setup=SETUP, plan=PLAN)
    assert figure[2](empty, CHOICES, LIGHT).limits == figure[4].limits


def test_entropy_marks_stand_at_the_means() -> None:
    data = cutstudy.read(scene(), CHOICES, LIGHT)
    record = scene().cuts
    own = next(c for c in record.averages if c.key == ("both", "root_count", False))
    ink = (data.marks.colour == LIGHT.ink) & (data.marks.marker == "diamond")
    assert set(np.round(np.log10(own.mean.union_support), 9)) <= set(
        np.round(data.marks.y[ink].astype(float), 9)
    )


def test_a_plateau_is_marked_with_its_width_and_its_absence_is_said() -> None:
    words = said(cutstudy.read(scene(), CHOICES, LIGHT))
    assert "plateau" in words
    record = scene().cuts._replace(plateaus=())
    assert "no plateau" in said(cutstudy.read(scene()._replace(cuts=record), CHOICES, LIGHT))


def test_modes_are_filled_where_kept_and_hollow_where_dropped() -> None:
    data = cutmodes.read_modes(scene(), CHOICES, LIGHT)
    record = scene().cuts.front.carried
    filled = sum(int((c.kept & np.isfinite(c.gain)).sum()) for c in record)
    seen = (data.marks.x < 1e8) & (data.marks.x >= 1.0) & (data.marks.size == 7.0)
    assert int((data.marks.fill[seen] == 1.0).sum()) == filled
    assert "would add" in said(data)


def test_thresholds_of_a_union_show_both_counts() -> None:
    choices = CHOICES._replace(thresholds="union")
    words = said(thresholds.read(scene(), choices, LIGHT))
    assert "union's count" in words
    assert "equal share" in words


def test_region_thresholds_have_the_regions_hues() -> None:
    choices = CHOICES._replace(thresholds="regions")
    data = thresholds.read(scene(), choices, LIGHT)
    assert set(LIGHT.regions[:2]) <= set(data.marks.colour)


def test_caution_says_what_moves_and_that_the_derived_threshold_does_not_grow() -> None:
    assert "both stages" in cutstudy.caution(scene(), CHOICES)
    text = thresholds.caution(scene(), CHOICES._replace(thresholds="regions"))
    assert "scaled to the expected count" in text
    shown = [o for o in scene().thresholds.operators if o.kind == "region"]
    assert ("hardly grows" in text) == any(math.isfinite(o.meets) for o in shown)
