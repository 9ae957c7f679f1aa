"""Views: records in, columns out, and figures that show exactly those columns."""

from __future__ import annotations

import math
from dataclasses import replace

import holoviews as hv
import numpy as np
import pytest
from tests.dashboard.scenes import SMALL, bare, full

from lozenge_dashboard.palette import DARK, LIGHT, MARKERS
from lozenge_dashboard.records import Choices
from lozenge_dashboard.views import counts, entropies, scaling, separation, spectrum, sprinkling
from lozenge_dashboard.views.catalogue import VIEWS, Figure, register_all
from lozenge_dashboard.views.marks import Dust, Layer, Marks
from lozenge_engine.config import PointSource, Setup

CHOICES = Choices()
FIGURES = [figure for view in VIEWS for figure in view.figures.values()]


@pytest.fixture(scope="module", autouse=True)
def bokeh() -> None:
    """The plotting backend, as the page sets it up."""
    hv.extension("bokeh")
    register_all()


def layers(data: tuple[object, ...]) -> list[Layer]:
    """The layers of a figure's columns."""
    return [part for part in data if isinstance(part, Layer)]


@pytest.mark.parametrize("figure", FIGURES, ids=lambda f: f.group)
def test_patched_sources_hold_what_holoviews_would_draw(figure: Figure) -> None:
    data = figure.read(full(), CHOICES, LIGHT)
    drawn = hv.render(figure.draw(data))
    assert len(drawn.renderers) == len(layers(data))
    for renderer, layer in zip(drawn.renderers, layers(data), strict=True):
        sent, slow = layer.source(), renderer.data_source.data
        assert set(sent) == set(slow)
        for name, column in sent.items():
            assert list(column) == list(slow[name]), name


@pytest.mark.parametrize("figure", FIGURES, ids=lambda f: f.group)
def test_blank_figure_has_the_columns_that_are_patched_later(figure: Figure) -> None:
    blank = hv.render(figure.draw(figure.blank))
    data = figure.read(full(), CHOICES, DARK)
    for renderer, layer in zip(blank.renderers, layers(data), strict=True):
        assert set(renderer.data_source.data) == set(layer.source())


@pytest.mark.parametrize("figure", FIGURES, ids=lambda f: f.group)
def test_every_mark_in_sight_lies_within_the_limits(figure: Figure) -> None:
    data = figure.read(full(), CHOICES, LIGHT)
    low_x, high_x, low_y, high_y = data.limits
    assert low_x < high_x
    assert low_y < high_y
    for layer in layers(data):
        if isinstance(layer, Marks | Dust):
            seen = layer.x < 1e8
            assert seen.any()
            assert (layer.x[seen] >= low_x).all()
            assert (layer.x[seen] <= high_x).all()


def test_sprinkling_shows_every_element_once() -> None:
    data = sprinkling.read(bare(), CHOICES, LIGHT)
    inside = data.inside.x < 1e8
    assert data.dust.x.size + inside.sum() == bare().result.elements
    a = bare().result.regions[0].elements
    assert (data.inside.colour == LIGHT.regions[0]).sum() == a
    assert (data.inside.marker == MARKERS[0]).sum() == a


def test_spectrum_fills_kept_and_leaves_dropped_hollow() -> None:
    scene = bare()
    data = spectrum.read(scene, CHOICES, LIGHT)
    filled = (data.eigenvalues.fill == 1.0).sum()
    hollow = (data.eigenvalues.fill == 0.0).sum()
    result = scene.result
    kept = result.patch.kept_modes + sum(r.kept_modes for r in result.regions)
    found = result.patch.eigenvalues.size + sum(r.eigenvalues.size for r in result.regions)
    assert (filled, hollow) == (kept, found - kept)
    assert hollow > 0


def test_counts_stand_beside_nominal_for_patch_regions_and_union() -> None:
    table = counts.rows(bare().result, LIGHT)
    assert [row.name for row in table] == [
        "patch",
        "A",
        "B",
        "union by support",
        "union direct sum",
    ]
    assert table[1].nominal == pytest.approx(2 * math.sqrt(bare().result.regions[0].elements))
    assert table[3].nominal == pytest.approx(table[1].nominal + table[2].nominal)


def test_one_sprinkling_says_that_no_error_is_known() -> None:
    assert "no error is known" in entropies.caution(bare(), CHOICES)
    assert "standard error of 3" in entropies.caution(full(), CHOICES)


def test_kept_reference_is_grey_in_every_figure_with_marks() -> None:
    scene = full()._replace(reference=full())
    for figure in FIGURES:
        data = figure.read(scene, CHOICES, LIGHT)
        colours = {c for part in layers(data) if hasattr(part, "colour") for c in part.colour}
        assert LIGHT.kept in colours, figure.group


def test_scaling_leaves_small_regions_hollow() -> None:
    setup = SMALL.with_(sweeps=replace(SMALL.sweeps, smallest_region=90))
    scene = full()._replace(
        density=replace(full().density, used=full().density.elements_per_region >= 90), setup=setup
    )
    data = scaling.read(scene, CHOICES, LIGHT)
    shown = data.marks.x < 1e8
    assert set(data.marks.fill[shown]) == {0.0, 1.0}
    assert "under 90 elements" in scaling.caution(scene, CHOICES)


def test_reference_slope_is_drawn_for_the_density_sweep_only() -> None:
    density = scaling.read(full(), CHOICES, LIGHT)
    size = scaling.read(full(), CHOICES._replace(scaling="size"), LIGHT)
    assert LIGHT.accent in density.lines.colour
    assert LIGHT.accent not in size.lines.colour


def test_separation_marks_the_present_separation() -> None:
    data = separation.read(full(), CHOICES, LIGHT)
    upright = data.lines.colour == LIGHT.accent
    assert data.lines.x0[upright] == pytest.approx([SMALL.separation])


def test_one_region_has_no_separation_to_vary() -> None:
    scene = bare(Setup(points=SMALL.points, region_count=1, half_width=0.5))
    assert "One region" in separation.caution(scene, CHOICES)


@pytest.mark.parametrize("view", VIEWS, ids=lambda v: v.name)
def test_caution_is_one_short_line(view) -> None:
    for scene in (bare(), full()):
        text = view.caution(scene, CHOICES)
        assert text.endswith(".")
        assert len(text) < 130


def test_theme_changes_colours_and_nothing_else() -> None:
    light, dark = (spectrum.read(bare(), CHOICES, look) for look in (LIGHT, DARK))
    assert np.array_equal(light.eigenvalues.y, dark.eigenvalues.y)
    assert not set(light.eigenvalues.colour[2:]) & set(dark.eigenvalues.colour[2:])


SET = PointSource(kind="lattice", oversampling=4, density=120.0, seed=5)
OTHER_SETS = [
    SET,
    replace(SET, kind="sobol", curvature="positive", radius=1.2),
    replace(SET, kind="poisson", oversampling=1, curvature="negative"),
]


@pytest.mark.parametrize("points", OTHER_SETS, ids=lambda p: f"{p.kind}, {p.curvature}")
def test_other_point_sets_are_named_and_drawn(points: PointSource) -> None:
    scene = bare(SMALL.with_(points=points))
    text = sprinkling.caution(scene, CHOICES)
    assert ("points" in text) == points.quasi_uniform
    assert ("Curvature" in text) == points.curved
    for view in VIEWS:
        assert len(view.caution(scene, CHOICES)) < 130
    data = spectrum.read(scene, CHOICES, LIGHT)
    assert (data.eigenvalues.fill == 1.0).any()
    # Without a closed form there is no line, and the caution claims none.
    exact = [w for w in ("Line: exact", "No exact line") if w in spectrum.caution(scene, CHOICES)]
    assert exact == (["No exact line"] if points.curved else ["Line: exact"])
    assert (scene.continuum.size == 0) == points.curved
