"""Views of one mode and of the state's checks: records in, columns out."""

from __future__ import annotations

import functools
import itertools
import math
from typing import Any, Literal

import holoviews as hv
import numpy as np
import pytest
from bokeh.palettes import Cividis256
from tests.dashboard.test_palette import EYES, lab
from tests.dashboard.test_views import layers

from lozenge_dashboard.palette import DARK, LIGHT, LOOKS, Look
from lozenge_dashboard.records import EvidenceChoices, EvidenceScene
from lozenge_dashboard.views import modeshape, statecheck
from lozenge_dashboard.views.marks import Marks, register
from lozenge_dashboard.views.ramp import scale, signed, sizes
from lozenge_engine.config import PointSource, Rule, Setup
from lozenge_engine.evidence import EvidencePlan
from lozenge_engine.modeview import ModeRecord, mode_record
from lozenge_engine.stages import Stages
from lozenge_engine.statecheck import state_record

STAGES = Stages()
SETUP = Setup(
    points=PointSource(density=400.0, seed=5), region_count=2, half_width=0.35, separation=0.1
)
PARTS: tuple[Literal["real", "imaginary", "modulus"], ...] = ("real", "imaginary", "modulus")
CHOICES = EvidenceChoices()
FIGURES = {
    modeshape.GROUP: (modeshape.read, modeshape.draw, modeshape.BLANK, modeshape.AXES),
    statecheck.GROUP: (statecheck.read, statecheck.draw, statecheck.BLANK, statecheck.AXES),
    statecheck.MAP_GROUP: (
        statecheck.read_deviation,
        statecheck.draw_map,
        statecheck.MAP_BLANK,
        statecheck.MAP_AXES,
    ),
    statecheck.LOSS_GROUP: (
        statecheck.read_loss,
        statecheck.draw_loss,
        statecheck.LOSS_BLANK,
        statecheck.LOSS_AXES,
    ),
}


@pytest.fixture(scope="module", autouse=True)
def bokeh() -> None:
    hv.extension("bokeh")
    for group, (*_, axes) in FIGURES.items():
        register(group, **axes)


@functools.cache
def scene(setup: Setup = SETUP, realisations: int = 1, **asked: Any) -> EvidenceScene:
    """The records of one geometry."""
    config = setup.config()
    return EvidenceScene(
        setup=setup,
        plan=EvidencePlan(),
        mode=mode_record(config, stages=STAGES, **asked),
        state=state_record(config, stages=STAGES, realisations=realisations),
    )


EMPTY = EvidenceScene(setup=SETUP, plan=EvidencePlan())


def seen(marks: Marks) -> np.ndarray:
    """Which rows are drawn at all."""
    return np.asarray(marks.x < 1e8)


@pytest.mark.parametrize("group", FIGURES)
def test_patched_sources_hold_what_holoviews_would_draw(group: str) -> None:
    read, draw, blank, _ = FIGURES[group]
    data = read(scene(), CHOICES, LIGHT)
    drawn, empty = hv.render(draw(data)), hv.render(draw(blank))
    assert len(drawn.renderers) == len(layers(data)) == len(empty.renderers)
    for renderer, before, layer in zip(drawn.renderers, empty.renderers, layers(data), strict=True):
        sent, slow = layer.source(), renderer.data_source.data
        assert set(sent) == set(slow) == set(before.data_source.data)
        for name, column in sent.items():
            assert list(column) == list(slow[name]), name


@pytest.mark.parametrize("group", FIGURES)
def test_nothing_is_shown_before_the_first_record(group: str) -> None:
    read, _, blank, _ = FIGURES[group]
    assert read(EMPTY, CHOICES, LIGHT) is blank


@pytest.mark.parametrize("group", FIGURES)
@pytest.mark.parametrize("asked", [{}, {"operator": "region"}, {"operator": "union", "rank": 4}])
def test_every_mark_and_word_lies_within_the_limits(group: str, asked: dict) -> None:
    data = FIGURES[group][0](scene(**asked), CHOICES, LIGHT)
    x_low, x_high, y_low, y_high = data.limits
    for part in (data.marks, data.words):
        some = part.x < 1e8
        assert some.any()
        assert ((part.x[some] >= x_low) & (part.x[some] <= x_high)).all()
        assert ((part.y[some] >= y_low) & (part.y[some] <= y_high)).all()


def test_a_patch_mode_colours_every_element_and_the_grid_beside_it() -> None:
    record = scene().mode
    data = modeshape.read(scene(), CHOICES, LIGHT)
    assert seen(data.marks).sum() == record.t.size + record.continuum.t.size
    right = data.marks.x[seen(data.marks)][record.t.size :]
    assert right.min() > record.x.max()
    assert data.dust.x.size == 0


def test_a_region_mode_shows_its_elements_only_and_a_union_mode_the_others_as_dust() -> None:
    asked = scene(operator="region", region=1)
    data = modeshape.read(asked, CHOICES, LIGHT)
    assert data.dust.x.size == 0
    assert LIGHT.regions[1] in data.lines.colour
    assert LIGHT.regions[0] not in data.lines.colour
    union = scene(operator="union")
    data = modeshape.read(union, CHOICES, LIGHT)
    assert data.dust.x.size > 0
    assert seen(data.marks).sum() == union.mode.t.size


@pytest.mark.parametrize("part", PARTS)
def test_colours_order_the_amounts_of_the_part_that_is_chosen(part: Any) -> None:
    record = scene().mode
    data = modeshape.read(scene(), CHOICES._replace(modeshape=part), LIGHT)
    drawn = data.marks.colour[seen(data.marks)][: record.t.size]
    amounts = {"real": record.values.real, "imaginary": record.values.imag}.get(
        part, np.abs(record.values)
    )
    both = {"real": record.continuum.values.real, "imaginary": record.continuum.values.imag}.get(
        part, np.abs(record.continuum.values)
    )
    every = np.concatenate([amounts, both])
    ramp = (sizes if part == "modulus" else signed)(every, LIGHT)
    ranks = {colour: k for k, colour in enumerate(ramp.colours)}
    painted = np.array([ranks[colour] for colour in drawn])
    steps = painted[np.argsort(amounts)]
    assert (np.diff(steps) >= 0).all()
    assert steps[-1] > steps[0]


def test_dropped_modes_are_hollow_and_kept_ones_filled() -> None:
    record: ModeRecord = scene().mode
    patch = mode_record(SETUP.config(), stages=STAGES, rank=record.ranks)
    assert not patch.kept
    for mode, fill in ((record, 1.0), (patch, 0.0)):
        data = modeshape.read(scene()._replace(mode=mode), CHOICES, LIGHT)
        assert set(data.marks.fill[seen(data.marks)][: mode.t.size]) == {fill}
        assert any(("kept" if fill else "dropped") in text for text in data.words.text)


def test_words_name_rank_eigenvalue_overlap_and_shares() -> None:
    record = scene(rank=3).mode
    text = " / ".join(modeshape.read(scene(rank=3), CHOICES, LIGHT).words.text[2:])
    assert f"rank 3, λ {record.eigenvalue:.3g}, kept" in text
    assert f"overlap {record.continuum.overlap:.3f}" in text
    assert f"A {record.shares[0]:.3f}, B {record.shares[1]:.3f}" in text


def test_ticks_of_the_second_picture_name_true_positions() -> None:
    data = modeshape.read(scene(), CHOICES, LIGHT)
    assert [text for _, text in data.x_ticks] == ["−1", "0", "−1", "0", "1"]
    places = [at for at, _ in data.x_ticks]
    assert places == sorted(places)


def test_fit_marks_say_which_pairs_are_fitted() -> None:
    record = scene().state
    data = statecheck.read(scene(), CHOICES, LIGHT)
    shown = seen(data.marks)
    assert (data.marks.fill[shown] == 1.0).sum() == record.bins.used.sum()
    assert (data.marks.fill[shown] == 0.0).sum() == (~record.bins.used).sum() > 0
    squares = data.marks.marker[shown] == "square"
    assert squares.sum() == record.bins.timelike.sum() > 0


def test_law_and_fit_are_lines_with_their_slopes() -> None:
    record = scene().state
    lines = statecheck.read(scene(), CHOICES, LIGHT).lines
    for colour, slope in ((LIGHT.accent, record.slope), (LIGHT.ink, -1 / (2 * math.pi))):
        (k,) = np.nonzero(lines.colour == colour)[0]
        drawn = (lines.y1[k] - lines.y0[k]) / (lines.x1[k] - lines.x0[k])
        assert drawn == pytest.approx(slope, rel=1e-9)


def test_maps_show_every_cell_and_leave_thin_ones_hollow() -> None:
    record = scene().state
    data = statecheck.read_deviation(scene(), CHOICES, LIGHT)
    shown = seen(data.marks)
    assert shown.sum() == record.deviation.t.size
    thin = record.deviation.held < statecheck.FEW
    assert np.array_equal(data.marks.fill[shown] == 0.0, thin)
    loss = statecheck.read_loss(scene(), CHOICES, LIGHT)
    assert seen(loss.marks).sum() == record.loss.t.size
    assert any(text.endswith("%") for text in loss.words.text)


@pytest.mark.parametrize(
    "asked",
    [
        {},
        {"rank": 40},
        {"operator": "region", "rank": 12},
        {"operator": "union"},
        {"realisations": 2},
        {"setup": SETUP.with_(region_count=1)},
        {"setup": SETUP.with_(mass=1.0, region_count=4, half_width=0.15, separation=0.1)},
        {"setup": SETUP.with_(points=PointSource(density=400.0, curvature="negative"))},
    ],
)
def test_caution_is_one_short_line(asked: dict) -> None:
    now = scene(**asked)
    checks: tuple[Literal["fit", "deviation", "loss"], ...] = ("fit", "deviation", "loss")
    lines = [modeshape.caution(now, CHOICES)]
    lines += [statecheck.caution(now, CHOICES._replace(statecheck=c)) for c in checks]
    for text in lines:
        assert text.endswith(".")
        assert len(text) <= 130, text


def test_cautions_name_what_is_missing() -> None:
    assert "No closed form for several regions" in modeshape.caution(
        scene(operator="union"), CHOICES
    )
    assert "without the first cut" in modeshape.caution(scene(operator="region"), CHOICES)
    assert "cross block" in modeshape.caution(scene(), CHOICES)
    assert "One sprinkling" in statecheck.caution(scene(), CHOICES)
    assert "Means of 2 sprinklings" in statecheck.caution(scene(realisations=2), CHOICES)
    massive = scene(SETUP.with_(mass=1.0, region_count=4, half_width=0.15, separation=0.1))
    assert "massless" in statecheck.caution(massive, CHOICES)
    assert "‖iΔ‖" in statecheck.caution(scene(), CHOICES._replace(statecheck="loss"))
    assert modeshape.caution(EMPTY, CHOICES) == statecheck.caution(EMPTY, CHOICES) == ""


def test_a_looser_cut_loses_more() -> None:
    looser = SETUP.with_(
        truncation_mode="custom", patch_rule=Rule(alpha=2.0), region_rule=Rule(alpha=2.0)
    )
    assert scene(looser).state.lost > 1.3 * scene().state.lost


def test_theme_changes_colours_and_nothing_else() -> None:
    light, dark = (modeshape.read(scene(), CHOICES, look) for look in (LIGHT, DARK))
    assert np.array_equal(light.marks.x, dark.marks.x)
    assert not set(light.marks.colour[2:]) & set(dark.marks.colour[2:])


@pytest.mark.parametrize("look", LOOKS.values(), ids=list(LOOKS))
@pytest.mark.parametrize("eye", EYES)
def test_signs_stay_apart_for_every_eye(look: Look, eye: str) -> None:
    colours = [lab(c, eye) for c in signed([-1.0, 1.0], look).colours[:: 128 // 8]]
    # Equal amounts of either sign, from a quarter of the largest on; 0.02 is a just noticeable
    # difference of large patches.
    for k in (0, 1, 2, 3):
        apart = float(np.linalg.norm(colours[k] - colours[8 - k]))
        assert apart >= (0.05 if k == 3 else 0.1)
    neighbours = [float(np.linalg.norm(a - b)) for a, b in itertools.pairwise(colours)]
    assert min(neighbours) > 0.02


@pytest.mark.parametrize("look", LOOKS.values(), ids=list(LOOKS))
def test_small_sizes_fade_into_the_ground(look: Look) -> None:
    ground = lab(look.panel, "normal")
    away = [
        float(np.linalg.norm(lab(c, "normal") - ground)) for c in sizes([0.0, 1.0], look).colours
    ]
    assert away[0] < away[-1]
    assert set(sizes([1.0], look).colours) <= set(Cividis256)


def test_a_scale_runs_from_end_to_end_with_three_numbers() -> None:
    limits = statecheck.read_loss(scene(), CHOICES, LIGHT).limits
    ramp = signed([-0.25, 0.1], LIGHT)
    pieces, words = scale(ramp, limits, LIGHT, at=1.2)
    assert [text for _, _, text, _ in words] == ["−0.25", "0", "0.25"]
    painted = pieces[0][4]
    first, last = (ramp.colours.index(painted[k]) for k in (0, -1))
    assert first < 3
    assert last > len(ramp.colours) - 4
    assert ramp.paint([0.0])[0] == ramp.colours[64]
    assert signed(np.empty(0), LIGHT).high == 1.0
