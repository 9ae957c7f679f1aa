"""What a campaign's samples say: means, fits, the error of its target, and its forecast."""

from __future__ import annotations

import math
from collections.abc import Iterator
from concurrent.futures import Executor, Future
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from lozenge_engine.campaign import run
from lozenge_engine.config import PointSource, Setup
from lozenge_engine.design import design
from lozenge_engine.errors import InputError
from lozenge_engine.estimates import Estimates, estimates, target_error
from lozenge_engine.forecast import forecast, needed
from lozenge_engine.geometry import Region
from lozenge_engine.kernels import gls
from lozenge_engine.kernels.laws import nominal_modes
from lozenge_engine.plan import Axis, CampaignPlan, Target
from lozenge_engine.presets import Preset
from lozenge_engine.realisation import realise
from lozenge_engine.schedule import nominal_seconds
from lozenge_engine.series import groups_of, leading, series_of
from lozenge_engine.store import Results, create

LADDER = Axis(name="density", values=(150.0, 250.0, 400.0, 600.0))
COUNTS = Axis(name="region_count", values=(1, 2))


class Here(Executor):
    """Computes at once, in this process."""

    def submit(self, fn: Any, /, *args: Any, **kwargs: Any) -> Future[Any]:
        future: Future[Any] = Future()
        future.set_result(fn(*args, **kwargs))
        return future


def preset(setup: Setup | None = None, **changes: Any) -> Preset:
    plan: dict[str, Any] = {"axes": (LADDER,), "realisations": 12, "smallest_region": 20}
    return Preset(
        title="t",
        sentence="s",
        setup=setup or Setup(region_count=1, half_width=0.3, separation=0.1),
        campaign=CampaignPlan(**plan | changes),
    )


@pytest.fixture(scope="module")
def ladder(tmp_path_factory: pytest.TempPathFactory) -> Iterator[Results]:
    """A density ladder of one region and of two, finished."""
    target = Target(quantity="slope", error=1e-6)
    wanted = preset(axes=(LADDER, COUNTS), target=target)
    with create(tmp_path_factory.mktemp("campaign") / "a.sqlite", wanted) as results:
        run(results, executor=Here(), capacity=1)
        yield results


@pytest.fixture(scope="module")
def found(ladder: Results) -> Estimates:
    return estimates(ladder)


def test_means_are_means_of_the_table(ladder: Results, found: Estimates) -> None:
    samples = ladder.table(1).union_support[:, 0]
    own = found.cells[ladder.design.sprinklings[1].cells[0]]
    assert own.entropy.mean == pytest.approx(samples.mean(), rel=1e-14)
    assert own.entropy.error == pytest.approx(samples.std(ddof=1) / math.sqrt(12), rel=1e-12)
    assert own.entropy.count == 12


def test_mutual_information_is_the_sum_rule_of_the_means(found: Estimates) -> None:
    two = found.cells[1]
    assert two.mutual_information is not None
    assert two.mutual_information.mean == pytest.approx(
        two.regions[0].mean + two.regions[1].mean - two.entropy.mean, abs=1e-12
    )


def test_one_region_has_no_mutual_information(found: Estimates) -> None:
    assert found.cells[0].mutual_information is None
    assert math.isnan(found.cells[0].cross_block)


def test_kept_ratios_are_kept_over_nominal_modes(ladder: Results, found: Estimates) -> None:
    table = ladder.table(0)
    ratios = table.kept[0][:, 0] / [nominal_modes(n) for n in table.region_elements[0][:, 0]]
    assert found.cells[0].kept_ratio == pytest.approx(ratios.mean())


def test_every_value_of_the_other_axis_has_its_own_fit(found: Estimates) -> None:
    assert [fit.label for fit in found.fits] == ["region_count 1", "region_count 2"]
    assert [fit.reference for fit in found.fits] == pytest.approx([1 / 3, 2 / 3])
    assert all(fit.report is not None and not fit.note for fit in found.fits)


def test_points_with_too_few_elements_are_not_fitted(ladder: Results) -> None:
    for series in series_of(ladder.design):
        assert len(series.cells) == 4
        assert len(series.used) == 4
        elements = [ladder.design.cells[i].elements for i in series.used]
        assert min(elements) >= 20
    less = ladder.design._replace(plan=CampaignPlan(axes=(LADDER, COUNTS), smallest_region=50))
    assert [len(series.used) for series in series_of(less)] == [2, 2]


def test_a_fit_with_two_sizes_is_refused_with_the_reason(tmp_path: Path) -> None:
    with create(tmp_path / "a.sqlite", preset(smallest_region=50, realisations=2)) as results:
        run(results, executor=Here(), capacity=1)
        (fit,) = estimates(results).fits
    assert fit.report is None
    assert "2 sizes" in fit.note


@pytest.mark.parametrize("count", [0, 1])
def test_no_error_is_invented_without_two_realisations(tmp_path: Path, count: int) -> None:
    with create(tmp_path / "a.sqlite", preset(realisations=1)) as results:
        if count:
            run(results, executor=Here(), capacity=1)
        read = estimates(results)
    assert read.cells[0].entropy.count == count
    assert math.isnan(read.cells[0].entropy.error)
    assert read.fits[0].report is None
    assert read.fits[0].note


def test_the_regime_stands_beside_a_fit(found: Estimates) -> None:
    one, two = (fit.regime for fit in found.fits)
    assert one.elements == pytest.approx((27.0, 108.0))
    assert one.size == (0.3, 0.3)
    assert math.isnan(one.gap)
    assert two.gap == pytest.approx(0.1)
    assert 0.3 < one.kept_ratio[0] <= one.kept_ratio[1] < 1.2


def test_a_half_width_axis_has_no_reference_slope() -> None:
    axis = Axis(name="half_width", values=(0.2, 0.3, 0.4))
    layout = design(Setup(region_count=1), CampaignPlan(axes=(axis,)))
    (series,) = series_of(layout)
    assert series.axis == "half_width"


def test_a_separation_axis_alone_has_no_fit() -> None:
    axis = Axis(name="separation", values=(0.1, 0.2))
    assert series_of(design(Setup(), CampaignPlan(axes=(axis,)))) == ()


def test_cells_that_share_sprinklings_are_one_group(ladder: Results) -> None:
    tables = [ladder.table(g) for g in range(4)]
    one = groups_of(ladder.design, tables, series_of(ladder.design)[0])
    assert [group.samples.shape for group in one.values()] == [(12, 1)] * 4


def test_leading_rows_are_the_first_of_every_column(ladder: Results) -> None:
    table = ladder.table(2)
    part = leading(table, 5)
    assert part.realisation.tolist() == [0, 1, 2, 3, 4]
    assert all(
        (a[:5] == b).all()
        if isinstance(b, np.ndarray)
        else all((x[:5] == y).all() for x, y in zip(a, b, strict=True))
        for a, b in zip(table, part, strict=True)
    )


def test_the_error_of_a_slope_is_the_worst_of_its_fits(ladder: Results, found: Estimates) -> None:
    errors = [fit.report.fit.slope_error for fit in found.fits if fit.report is not None]
    tables = [ladder.table(g) for g in range(4)]
    assert target_error(ladder.design, tables) == pytest.approx(max(errors))


def test_the_error_falls_with_the_time_spent(found: Estimates) -> None:
    seconds, errors = zip(*found.history, strict=True)
    assert list(seconds) == sorted(seconds)
    assert seconds[-1] == pytest.approx(found.cpu_seconds)
    assert errors[-1] < errors[0]


def test_an_error_that_is_not_known_is_infinite(ladder: Results) -> None:
    empty = [leading(ladder.table(g), 1) for g in range(4)]
    assert target_error(ladder.design, empty) == math.inf


# ------------------------------------------------------------------ forecasts


def test_a_forecast_counts_every_sprinkling() -> None:
    told = forecast(preset(realisations=50), workers=2)
    assert [row.realisations for row in told.rows] == [50] * 4
    assert [row.density for row in told.rows] == [150.0, 250.0, 400.0, 600.0]
    seconds = [row.seconds for row in told.rows]
    assert seconds == sorted(seconds)
    assert told.seconds == pytest.approx(50 * sum(seconds) / 2)
    assert told.note == ""


def test_a_forecast_says_what_a_budget_or_a_number_will_not_do() -> None:
    target = Target(quantity="entropy", error=0.001)
    told = forecast(preset(target=target, realisations=100, budget=1.0), workers=1)
    assert "at most 100" in told.note
    assert "budget of 1" in told.note
    assert forecast(preset(target=target, realisations=100_000), workers=1).note == ""


def test_a_forecast_names_what_is_left_out() -> None:
    axis = Axis(name="half_width", values=(0.3, 0.6))
    told = forecast(preset(Setup(region_count=2, separation=0.1), axes=(axis,)), workers=1)
    assert len(told.left_out) == 1


def test_a_sharper_target_needs_more_realisations_by_its_square() -> None:
    def count(error: float) -> float:
        target = Target(quantity="slope", error=error)
        wanted = preset(target=target)
        assert wanted.campaign is not None
        return sum(needed(design(wanted.setup, wanted.campaign)))

    assert count(0.001) / count(0.01) == pytest.approx(100.0, rel=0.05)


def test_a_preset_without_a_campaign_has_no_forecast() -> None:
    with pytest.raises(InputError, match="campaign"):
        forecast(Preset(title="t", sentence="s"), workers=1)


# ------------------------------------------------- what must not pass unsaid


def finished(path: Path, wanted: Preset) -> Estimates:
    with create(path, wanted) as results:
        run(results, executor=Here(), capacity=1)
        return estimates(results)


def test_a_cell_without_numbers_does_not_select_the_others_sprinklings(tmp_path: Path) -> None:
    small = Axis(name="half_width", values=(0.1, 0.4))
    setup = Setup(region_count=1, points=PointSource(density=60.0))
    both = finished(tmp_path / "a.sqlite", preset(setup, axes=(small,), realisations=40))
    large = Axis(name="half_width", values=(0.4,))
    alone = finished(tmp_path / "b.sqlite", preset(setup, axes=(large,), realisations=40))
    assert 0 < both.cells[0].missing < 40
    assert both.failed == both.cells[1].missing == 0
    assert both.cells[1].entropy == alone.cells[0].entropy
    assert both.cells[0].entropy.count == 40 - both.cells[0].missing


def test_a_fit_of_a_selected_sample_is_never_settled(ladder: Results) -> None:
    tables = [ladder.table(g) for g in range(4)]
    groups = groups_of(ladder.design, tables, series_of(ladder.design)[0])
    holes = [group.samples.copy() for group in groups.values()]
    holes[1][3] = math.nan
    report = gls.report(
        tuple(g._replace(samples=s) for g, s in zip(groups.values(), holes, strict=True))
    )
    assert not isinstance(report, gls.Refused)
    assert report.fit.left_out == 1
    assert not report.settled


def test_cells_with_different_numbers_of_ends_have_fits_of_their_own() -> None:
    plan = CampaignPlan(axes=(LADDER,), placements=((0.0, 0.0), (0.0, -0.7)))
    found = series_of(design(Setup(region_count=1, half_width=0.3), plan))
    assert [series.label for series in found] == ["2 ends inside", "1 end inside"]
    assert [len(series.cells) for series in found] == [4, 4]


def test_a_half_width_axis_keeps_a_region_in_its_corner() -> None:
    corner = Setup(region_list=(Region(x0=-0.5, half_width=0.5),))
    axis = Axis(name="half_width", values=(0.2, 0.3, 0.5))
    layout = design(corner, CampaignPlan(axes=(axis,)))
    assert [cell.config.regions[0].x0 for cell in layout.cells] == pytest.approx([-0.8, -0.7, -0.5])
    assert len(series_of(layout)) == 1


@pytest.mark.parametrize(
    ("setup", "why"),
    [
        (Setup(region_count=1, half_width=0.3, mass=0.5), "mass"),
        (Setup(region_count=1, half_width=0.3, truncation_mode="fixed_number"), "own count"),
        (Setup(region_count=2, half_width=0.3, truncation_mode="union_count"), "own count"),
        (Setup(region_count=2, half_width=0.3, separation=1e-3), "discreteness"),
        (Setup(region_count=1, half_width=1.0), "no end"),
    ],
)
def test_no_reference_stands_where_the_law_says_nothing(
    tmp_path: Path, setup: Setup, why: str
) -> None:
    with create(tmp_path / "a.sqlite", preset(setup)) as results:
        (fit,) = estimates(results).fits
    assert fit.reference is None
    assert why in fit.no_reference


@pytest.mark.parametrize(
    ("axes", "target"),
    [
        ((LADDER,), "mutual_information"),
        ((Axis(name="mass", values=(0.0, 1.0)),), "slope"),
        ((Axis(name="density", values=(100.0, 200.0)),), "slope"),
    ],
)
def test_a_target_that_can_never_be_known_is_refused(
    tmp_path: Path, axes: tuple[Axis, ...], target: Any
) -> None:
    wanted = preset(axes=axes, target=Target(quantity=target, error=0.1))
    with pytest.raises(InputError, match="target"):
        forecast(wanted, workers=1)
    with create(tmp_path / "a.sqlite", wanted) as results, pytest.raises(InputError):
        run(results, executor=Here(), capacity=1)


def test_placements_that_mirror_each_other_are_one_class() -> None:
    plan = CampaignPlan(axes=(LADDER,), placements=((0.0, 0.0), (0.0, 0.3), (0.0, -0.3)))
    layout = design(Setup(region_count=1, half_width=0.3), plan)
    assert {cell.placement for cell in layout.cells} == {0, 1}
    assert "mirror image of the placement 0, 0.3" in layout.left_out[0]


def test_rules_share_one_search_whatever_their_order() -> None:
    def samples(values: tuple[float, ...]) -> dict[float, float]:
        plan = CampaignPlan(axes=(Axis(name="alpha", values=values),))
        layout = design(Setup(region_count=1, points=PointSource(density=300.0)), plan)
        record = realise(layout, 0, 0)
        order = layout.sprinklings[0].cells
        return {values[i]: s.union_support for i, s in zip(order, record.samples, strict=True)}

    assert samples((0.5, 1.0, 2.0)) == samples((2.0, 1.0, 0.5))


def test_costs_count_the_deepest_search_once() -> None:
    def seconds(values: tuple[float, ...]) -> float:
        plan = CampaignPlan(axes=(Axis(name="alpha", values=values),))
        return nominal_seconds(design(Setup(), plan), 0)

    assert seconds((0.5, 2.0)) == seconds((2.0, 0.5))
    assert seconds((0.5,)) < seconds((0.5, 2.0)) < seconds((0.5,)) + seconds((2.0,))


def test_a_forecast_says_that_no_fit_will_be_possible() -> None:
    axis = Axis(name="density", values=(100.0, 300.0, 600.0))
    told = forecast(preset(axes=(axis, COUNTS), smallest_region=50), workers=1)
    assert "no fit for region_count 1, region_count 2" in told.note
    assert "no fit" not in forecast(preset(), workers=1).note
