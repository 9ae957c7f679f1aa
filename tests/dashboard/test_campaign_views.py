"""What a campaign's views and words say where a reader could be misled."""

from __future__ import annotations

import math
from concurrent.futures import Executor, Future
from pathlib import Path
from typing import Any

import holoviews as hv
import numpy as np
import pytest

from lozenge_dashboard.campaign_text import (
    EMPTY,
    columns,
    complete,
    drift,
    error_words,
    line_html,
    out_of_reach,
    rows,
    words_html,
)
from lozenge_dashboard.campaigns import Campaigns, Status, Watch
from lozenge_dashboard.palette import LIGHT, MARKERS
from lozenge_dashboard.records import CampaignChoices
from lozenge_dashboard.views.campaign import caution, read
from lozenge_dashboard.views.effort import (
    CAMPAIGN_VIEWS,
    counts_caution,
    error_caution,
    read_error,
    register_campaign,
)
from lozenge_dashboard.views.pieces import NO_TICKS
from lozenge_dashboard.views.slope import read_slope, slope_caution
from lozenge_engine import campaign, store
from lozenge_engine.campaign import Progress
from lozenge_engine.config import PointSource, Setup
from lozenge_engine.estimates import FitOf
from lozenge_engine.kernels.gls import SlopeReport
from lozenge_engine.plan import Axis, CampaignPlan, Target
from lozenge_engine.presets import Preset

ONE = Setup(region_count=1, half_width=0.3, points=PointSource(density=100.0))
TWO = Setup(region_count=2, half_width=0.3, separation=0.2, points=PointSource(density=100.0))
LADDER = Axis(name="density", values=(90.0, 130.0, 190.0, 270.0))
GAPS = Axis(name="separation", values=(0.0, 0.2, 0.4))
SLOPE = Target(quantity="slope", error=0.01, relative=True)
ENTROPY, MUTUAL = CampaignChoices(), CampaignChoices(quantity="mutual")


class Here(Executor):
    """Calls at once, in this thread."""

    def submit(self, fn: Any, /, *args: Any, **kwargs: Any) -> Future[Any]:
        future: Future[Any] = Future()
        future.set_result(fn(*args, **kwargs))
        return future


def watched(folder: Path, name: str, setup: Setup, **plan: Any) -> Watch:
    """A results file that was run to its end."""
    values: dict[str, Any] = {"axes": (LADDER,), "realisations": 5, "smallest_region": 25} | plan
    wanted = Preset(title="Try", sentence="Invented.", setup=setup, campaign=CampaignPlan(**values))
    path = folder / f"{name}.sqlite"
    axes = {axis.name: axis.values for axis in values["axes"]}
    predicted = [(0.01, 1e6)] * len(axes.get("density", (0,)))
    with store.create(path, wanted, predicted=predicted) as results:
        campaign.run(results, executor=Here(), capacity=1)
    return Campaigns(folder).watch(path.name)


@pytest.fixture(scope="module", autouse=True)
def bokeh() -> None:
    hv.extension("bokeh")
    register_campaign()


@pytest.fixture(scope="module")
def folder(tmp_path_factory: pytest.TempPathFactory) -> Path:
    return tmp_path_factory.mktemp("views")


@pytest.fixture(scope="module")
def slope(folder: Path) -> Watch:
    """Four densities, of which 30 realisations never reach one per cent."""
    return watched(folder, "slope", ONE, target=SLOPE, realisations=30, smallest_region=10)


@pytest.fixture(scope="module")
def small(folder: Path) -> Watch:
    """Densities with too few elements for a fit, without a target, finished."""
    return watched(folder, "small", ONE, realisations=2, smallest_region=80)


@pytest.fixture(scope="module")
def gaps(folder: Path) -> Watch:
    """Separations in two placement classes."""
    target = Target(quantity="mutual_information", error=0.001)
    return watched(
        folder, "gaps", TWO, axes=(GAPS,), placements=((0.0, 0.0), (0.1, 0.0)), target=target
    )


def running(watch: Watch, **changes: Any) -> Status:
    """A run that has some time left."""
    done = sum(n for n, _ in watch.counts)
    base = Progress(done, 0, done + 9, 2, 60.0, 30.0, watch.estimates.error, 0.01)
    return Status(running=True, progress=base._replace(**changes))


def with_report(watch: Watch, **changes: Any) -> tuple[Watch, SlopeReport]:
    """The same file with another report of its first fit."""
    fit: FitOf = watch.estimates.fits[0]
    assert fit.report is not None
    report = fit.report._replace(**changes)
    fits = (fit._replace(report=report),)
    return watch._replace(estimates=watch.estimates._replace(fits=fits)), report


# ---------------------------------------------------------------- no fit


def test_a_fit_that_is_impossible_is_not_awaited_but_advised_on(small: Watch) -> None:
    said = words_html(small, Status())
    assert "no fit yet" not in line_html(small, Status())
    assert "<dt>b</dt>" not in line_html(small, Status())
    for part in ("more sizes", "larger densities", "fewer least elements"):
        assert part in said
    assert [row[-1] for row in rows(small)] == ["left out"] * 4
    assert "too few for a fit" in caution(small, ENTROPY)


def test_without_a_fit_a_wanted_slope_says_no_fit(small: Watch) -> None:
    design = small.design._replace(plan=small.plan.__class__(axes=(LADDER,), target=SLOPE))
    asked = small._replace(design=design)
    assert "no fit<" in line_html(asked, Status())
    assert "no fit<" in line_html(asked, running(small))


def test_large_enough_points_of_no_fit_are_not_said_to_be_in_it(folder: Path) -> None:
    two = watched(folder, "two", ONE, realisations=2, smallest_region=30)
    assert two.estimates.fits[0].report is None
    assert [row[-1] for row in rows(two)] == ["left out"] * 2 + ["no fit"] * 2


# ---------------------------------------------------------------- reach


def test_a_target_beyond_the_plan_is_said_with_the_number_it_takes(slope: Watch) -> None:
    error = slope.estimates.error
    assert error > 0.01
    need = out_of_reach(slope)
    assert need == math.ceil(30 * (error / 0.01) ** 2)
    for status in (Status(), running(slope)):
        said = words_html(slope, status)
        assert "At most 30 realisations of a sprinkling are planned" in said
        assert "will probably need about" in said
    assert "too few for the target" in counts_caution(slope, ENTROPY)
    assert "the target needs more" in error_caution(slope, ENTROPY)


def test_the_worst_point_counts_for_a_target_of_every_point(gaps: Watch) -> None:
    found = [c.mutual_information for c in gaps.estimates.cells]
    worst = max(e.count * (e.error / 0.001) ** 2 for e in found if e is not None)
    assert out_of_reach(gaps) == math.ceil(worst)


def test_a_target_within_reach_is_not_doubted(slope: Watch) -> None:
    near = slope._replace(estimates=slope.estimates._replace(error=0.0099))
    assert out_of_reach(near) == 0
    assert complete(near)
    assert "are planned" not in words_html(near, Status())
    assert "the target is reached" in error_caution(near, ENTROPY)


@pytest.mark.parametrize(
    ("changes", "words"),
    [
        ({"error": math.inf}, "of this round"),
        ({}, "to the last one planned"),
    ],
)
def test_time_left_says_what_it_leads_to(slope: Watch, changes: dict[str, Any], words: str) -> None:
    assert f"<dd class='small'>{words}</dd>" in line_html(slope, running(slope, **changes))


def test_time_left_to_a_target_within_reach(slope: Watch) -> None:
    near = slope._replace(estimates=slope.estimates._replace(error=0.0099))
    assert "to the target, if scatter stays" in line_html(near, running(near))
    assert "in this round" in line_html(near, running(near))


# ---------------------------------------------------------------- cautions


def test_a_line_that_does_not_fit_and_drifts_is_warned_of(slope: Watch) -> None:
    fit = slope.estimates.fits[0].report
    assert fit is not None
    bad = fit.fit._replace(p_value=0.01, slope_error=1.0, slope=0.3, aicc=9.0)
    other = bad._replace(model="log_root", aicc=2.0)
    far = fit.fit._replace(slope=2.8)
    watch, report = with_report(
        slope, fit=bad, models=(other, bad), by_smallest=((10.0, bad), (20.0, far))
    )
    assert drift(report) == pytest.approx(2.5)
    said = words_html(watch, Status())
    assert "The line does not fit, p = 0.01" in said
    assert "b moves by up to 2.5 of the full fit&#x27;s error" in said
    assert "S = b x + d/sqrt(n) + c, by 7.0 in AICc" in said
    assert "b moves by up to 2.5 of its error" in slope_caution(watch, ENTROPY)


def test_a_good_fit_is_not_warned_of(slope: Watch) -> None:
    fit = slope.estimates.fits[0].report
    assert fit is not None
    good = fit.fit._replace(p_value=0.6, slope_error=0.1, aicc=2.0)
    near = good._replace(slope=good.slope + 0.05)
    other = good._replace(model="log_root", aicc=0.0)
    watch, _ = with_report(
        slope, fit=good, models=(other, good), by_smallest=((10.0, good), (20.0, near))
    )
    careful = words_html(watch, Status()).split("To be careful about")[1]
    for part in ("does not fit", "moves", "AICc"):
        assert part not in careful


def test_settled_is_provisional_while_it_runs(slope: Watch) -> None:
    watch, _ = with_report(slope, settled=True, why="p = 0.6")
    assert "settled so far<" in line_html(watch, running(watch))
    assert "settled<" in line_html(watch, Status())
    assert "Settled so far: p = 0.6" in words_html(watch, running(watch))
    assert "Settled: p = 0.6" in words_html(watch, Status())


def test_errors_of_few_realisations_are_doubted(small: Watch, gaps: Watch, slope: Watch) -> None:
    assert "two realisations" in words_html(small, Status())
    # 1/sqrt(2 (5 - 1)) is 35 %.
    assert "Points with 5 realisations" in words_html(gaps, Status())
    assert "about 35 %" in words_html(gaps, Status())
    assert "uncertain" not in words_html(slope, Status())


def test_cpu_time_stands_beside_running_time(slope: Watch) -> None:
    said = words_html(slope, Status())
    assert "CPU time of 120 realisations" in said
    assert "predicted for as many 1.2 s" in said
    assert "running time, all runs together" in said


# ---------------------------------------------------------------- numbers and words


def test_errors_have_units_and_show_on_which_side_of_the_goal_they_lie(slope: Watch) -> None:
    nats = Target(quantity="entropy", error=0.02)
    assert error_words(0.0468, SLOPE, digits=2) == "4.7 % of b"
    assert error_words(0.0198, nats) == "0.0198 nats"
    assert error_words(math.inf, nats) == "–"
    line = line_html(slope._replace(estimates=slope.estimates._replace(error=0.0468)), Status())
    assert "4.7 % of b" in line
    assert "wanted 1 % of b" in line
    line = line_html(slope._replace(estimates=slope.estimates._replace(error=0.00998)), Status())
    assert "0.998 % of b" in line


def test_b_has_the_same_digits_everywhere(slope: Watch) -> None:
    report = slope.estimates.fits[0].report
    assert report is not None
    shown = report.explain().splitlines()[0].split(",")[0]
    assert f">{shown.removeprefix('b = ')}<" in line_html(slope, Status())
    assert any(str(text).startswith(shown) for text in read(slope, ENTROPY, LIGHT).words.text)


def test_one_region_is_spoken_of_as_one(slope: Watch, gaps: Watch) -> None:
    assert read(slope, ENTROPY, LIGHT).labels[1] == "entropy S (nats)"
    assert read(gaps, ENTROPY, LIGHT).labels[1] == "entropy S, all regions (nats)"
    assert "support" not in caution(slope, ENTROPY)
    assert "support" in caution(gaps, ENTROPY)
    assert "S" in columns(slope)
    assert "S by support" in columns(gaps)
    assert "half-width 0.3 (" in words_html(slope, Status())


def test_separations_say_what_is_another_regime(gaps: Watch) -> None:
    said = caution(gaps, MUTUAL)
    for part in ("touching regions", "edge", "direct sum: table", "side by side", "near the patch"):
        assert part in said


# ---------------------------------------------------------------- figures


def test_placement_classes_do_not_hide_each_other(gaps: Watch) -> None:
    data = read(gaps, MUTUAL, LIGHT)
    width = data.limits.x_high - data.limits.x_low
    x = {
        marker: np.sort(
            [
                float(x)
                for x, c, m in zip(data.marks.x, data.marks.colour, data.marks.marker, strict=True)
                if c == LIGHT.ink and m == marker and x > 0.04
            ]
        )
        for marker in MARKERS[:2]
    }
    apart = x[MARKERS[1]][-2:] - x[MARKERS[0]][-2:]
    assert np.all(apart > 0.01 * width)
    assert np.all(apart < 0.1)


def bare_axes(data: Any) -> bool:
    return bool(data.ticks == NO_TICKS == data.x_ticks and data.labels == ("", ""))


def test_figures_with_nothing_to_show_have_no_scale(small: Watch, gaps: Watch) -> None:
    assert bare_axes(read_error(small, ENTROPY, LIGHT))
    assert bare_axes(read_slope(gaps, ENTROPY, LIGHT))
    assert bare_axes(read(small, MUTUAL, LIGHT))
    assert not bare_axes(read(small, ENTROPY, LIGHT))
    assert not bare_axes(read_error(gaps, ENTROPY, LIGHT))
    for view in CAMPAIGN_VIEWS:
        for figure in view.figures.values():
            assert bare_axes(figure.blank)
            drawn = hv.render(figure.draw(figure.blank))
            for axis in (*drawn.below, *drawn.left):
                assert list(axis.ticker.ticks) == [-1.0]
                assert not axis.axis_label
            assert (drawn.x_range.start, drawn.y_range.start) == (0.0, 0.0)


def test_that_nothing_is_open_is_said_once() -> None:
    assert EMPTY == ""
    assert line_html(None, Status()).count("No results file is open") == 1
