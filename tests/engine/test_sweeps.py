"""Averages and sweeps: what is drawn, and what is said of readings that are partly there."""

from __future__ import annotations

import math
from dataclasses import replace
from typing import Any

import numpy as np
import pytest

from lozenge_engine.config import Averaging, PointSource, Rule, Setup, SweepPlan
from lozenge_engine.draws import (
    Plan,
    average_draws,
    density_draws,
    placements,
    scaled,
    separation_draws,
    size_draws,
)
from lozenge_engine.geometry import Region, check_regions
from lozenge_engine.kernels.points import sprinkle
from lozenge_engine.placement import gaps, mirror_images
from lozenge_engine.samples import Reading, take
from lozenge_engine.stages import Stages
from lozenge_engine.sweeps import (
    average,
    density_curve,
    ends_inside,
    nearest_pair,
    separation_curve,
    size_curve,
)

PAIR = (Region(x0=-0.5, half_width=0.2), Region(x0=0.4, half_width=0.3))
IMPORTED = PointSource(kind="file", sha256="ab" * 32, file="own.csv")


def setup(**changes: Any) -> Setup:
    asked = {"averaging": Averaging(sprinklings=8), **changes}
    return Setup(**asked)


def reading(value: float, count: int = 2) -> Reading:
    """A made-up reading whose every entropy follows from one number."""
    pairs = count * (count - 1) // 2
    return Reading(
        elements=np.full(count, 100),
        kept=np.full(count, 20),
        entropy=np.full(count, value / 2),
        union_support=value,
        union_direct_sum=value + 0.1,
        pair_support=np.full(pairs, value / 10),
        pair_direct_sum=np.full(pairs, value / 10 + 0.01),
        cross_block=np.full(pairs, 0.1),
        trusted=True,
    )


def filled(plan: Plan, rng: np.random.Generator, line: Any) -> dict[str, tuple[Reading, ...]]:
    """Readings of every draw: line(density of the draw, layout) plus a scatter of 0.1."""
    return {
        draw.key: tuple(
            reading(line(draw, layout) + 0.1 * rng.standard_normal(), len(layout))
            for layout in draw.layouts
        )
        for draw in plan.draws
    }


def line(draw: Any, layout: tuple[Region, ...]) -> float:
    """Slope 0.6 against ln(l/a), whatever changes it."""
    return 0.6 * math.log(2 * layout[0].half_width * math.sqrt(draw.config.points.density)) + 2.0


# ------------------------------------------------------------------ what is drawn


def test_the_average_draws_one_sprinkling_for_each_realisation() -> None:
    plan = average_draws(setup())
    assert [draw.config.realisation for draw in plan.draws] == list(range(8))


def test_every_average_draw_reads_all_mirror_images() -> None:
    plan = average_draws(setup(region_list=PAIR, separation=gaps(PAIR)[0]))
    assert {draw.layouts for draw in plan.draws} == {mirror_images(PAIR)}


@pytest.mark.parametrize("draws", [average_draws, size_draws, separation_draws])
def test_imported_points_are_read_once_and_at_one_placement(draws: Any) -> None:
    plan = draws(setup(points=IMPORTED))
    assert len(plan.draws) == 1
    assert len(placements(setup(points=IMPORTED), PAIR)) == 1


def test_rungs_of_the_density_ladder_are_equally_spaced_in_the_logarithm() -> None:
    values = density_draws(setup()).values
    np.testing.assert_allclose(np.diff(np.log(values)), math.log(8) / 5)
    np.testing.assert_allclose(values[[0, -1]], [500.0, 4000.0])


def test_no_two_draws_of_the_ladder_share_a_sprinkling_nor_one_with_the_average() -> None:
    plan = density_draws(setup(averaging=Averaging(sprinklings=40)))
    streams = [draw.config.realisation for draw in plan.draws]
    assert len(set(streams)) == len(streams) == 6 * 40
    assert not set(streams) & set(range(10_000))


def test_rungs_share_no_element() -> None:
    plan = density_draws(setup(averaging=Averaging(sprinklings=1)))
    sets = [
        set(sprinkle(density=100.0, seed=1, realisation=d.config.realisation).u.tolist())
        for d in plan.draws
    ]
    assert len(set.union(*sets)) == sum(len(s) for s in sets)


def test_every_round_of_the_ladder_visits_all_rungs_before_the_next() -> None:
    assert density_draws(setup()).point_of[:12] == (0, 1, 2, 3, 4, 5) * 2


def test_the_ladder_keeps_the_geometry() -> None:
    wanted = setup().regions()
    assert all(draw.layouts[0] == wanted for draw in density_draws(setup()).draws)


def test_imported_points_have_no_density_ladder() -> None:
    plan = density_draws(setup(points=IMPORTED))
    assert plan.draws == ()
    assert plan.left_out == ("imported points have one density",)


def test_a_rung_too_dense_for_the_dense_route_is_left_out_with_the_reason() -> None:
    plan = density_draws(setup(truncation_mode="none"))
    assert set(plan.point_of) == {0, 1, 2, 3}
    assert len(plan.left_out) == 2
    assert all("over 4000 elements" in text for text in plan.left_out)


def test_a_rung_too_thin_for_the_mass_is_left_out_with_the_reason() -> None:
    plan = density_draws(setup(mass=8.0))
    assert 0 not in plan.point_of
    assert "mass" in plan.left_out[0]


def test_sizes_keep_the_ratio_of_gap_to_width_about_the_centre() -> None:
    for factor in (0.5, 0.8):
        row = scaled(PAIR, factor)
        np.testing.assert_allclose(gaps(row)[0], factor * gaps(PAIR)[0])
        np.testing.assert_allclose([r.x0 for r in row], [factor * r.x0 for r in PAIR])


@pytest.mark.parametrize(
    ("t", "x"),
    [(0.0, -1.0), (0.0, 1.0), (1.0, 0.0), (-1.0, 0.0)],
    ids=["left", "right", "up", "down"],
)
def test_sizes_keep_the_corner_of_the_patch_that_a_region_touches(t: float, x: float) -> None:
    region = Region(t0=0.6 * t, x0=0.6 * x, half_width=0.4)
    (smaller,) = scaled((region,), 0.5)
    assert any(abs(a - t) + abs(b - x) < 1e-12 for a, b in smaller.corners)
    check_regions((smaller,))


def test_every_size_is_read_from_the_sprinklings_of_the_average() -> None:
    plan = size_draws(setup())
    assert [d.config for d in plan.draws] == [d.config for d in average_draws(setup()).draws]
    assert len(plan.values) == 6


def test_a_size_that_does_not_fit_is_left_out_with_the_reason() -> None:
    plan = size_draws(setup(sweeps=SweepPlan(size_low=1.0, size_high=2.0)))
    assert 0 < plan.values.size < 6
    assert plan.values.size + len(plan.left_out) == 6
    assert all("leaves the patch" in text for text in plan.left_out)


def test_separations_run_from_touching_to_the_largest_that_fits() -> None:
    plan = separation_draws(setup())
    assert plan.values.size == 20
    assert plan.values[0] == 0.0
    assert plan.values[-1] == pytest.approx(0.8)
    for layout in plan.draws[0].layouts:
        check_regions(layout)


def test_every_separation_is_read_from_the_same_sprinkling() -> None:
    plan = separation_draws(setup())
    assert len(plan.draws) == 8
    assert len(plan.draws[0].layouts) == 20


def test_separations_of_a_list_are_its_mean_gap() -> None:
    plan = separation_draws(setup(region_list=PAIR, separation=gaps(PAIR)[0]))
    for value, layout in zip(plan.values, plan.draws[0].layouts[::2], strict=True):
        assert np.mean(gaps(layout)) == pytest.approx(value, abs=1e-12)


def test_one_region_has_no_separation() -> None:
    plan = separation_draws(setup(region_count=1))
    assert plan.draws == ()
    assert plan.left_out == ("one region has no separation",)


# ------------------------------------------------------------------- the average


def test_an_average_is_the_mean_over_sprinklings_of_the_mean_over_mirror_images() -> None:
    asked = setup(region_list=PAIR, separation=gaps(PAIR)[0], averaging=Averaging(sprinklings=3))
    plan = average_draws(asked)
    values = np.array([[1.0, 3.0], [2.0, 6.0], [5.0, 7.0]])
    readings = {
        draw.key: tuple(reading(v) for v in row)
        for draw, row in zip(plan.draws, values, strict=True)
    }
    found = average(asked, readings).unions["support"]
    assert found.mean == pytest.approx(4.0)
    assert found.error == pytest.approx(np.std([2, 4, 6], ddof=1) / math.sqrt(3))


def test_one_sprinkling_has_no_error() -> None:
    asked = setup(averaging=Averaging(sprinklings=1))
    found = average(asked, {average_draws(asked).draws[0].key: (reading(2.0),)})
    assert found.unions["support"].mean == 2.0
    assert math.isnan(found.unions["support"].error)
    assert (found.count, found.planned) == (1, 1)


def test_failed_and_missing_readings_are_left_out_of_the_average() -> None:
    plan = average_draws(setup())
    readings = {plan.draws[0].key: (reading(2.0),), plan.draws[1].key: ()}
    found = average(setup(), readings)
    assert (found.count, found.planned) == (1, 8)
    assert found.regions[0].mean == 1.0


def test_an_average_of_nothing_is_no_number_and_not_trusted() -> None:
    found = average(setup(), {})
    assert found.count == 0
    assert math.isnan(found.regions[0].mean)
    assert not found.trusted


def test_one_reading_that_is_not_trusted_makes_the_average_untrusted() -> None:
    plan = average_draws(setup())
    readings = {draw.key: (reading(2.0),) for draw in plan.draws}
    assert average(setup(), readings).trusted
    readings[plan.draws[3].key] = (reading(2.0)._replace(trusted=False),)
    assert not average(setup(), readings).trusted


def test_a_refused_entropy_of_one_sprinkling_is_left_out_of_the_mean() -> None:
    plan = average_draws(setup())
    readings = {draw.key: (reading(2.0),) for draw in plan.draws}
    readings[plan.draws[3].key] = (reading(math.nan),)
    found = average(setup(), readings).unions["support"]
    assert (found.mean, found[3]) == (2.0, 7)


def test_one_region_has_neither_union_nor_pairs() -> None:
    asked = setup(region_count=1)
    found = average(asked, {average_draws(asked).draws[0].key: (reading(2.0, 1),)})
    assert (dict(found.unions), found.pairs) == ({}, ())


# -------------------------------------------------------------- the density ladder


def test_the_density_fit_finds_the_slope_within_its_errors() -> None:
    readings = filled(density_draws(setup()), np.random.default_rng(1), line)
    curve = density_curve(setup(), readings)
    assert curve.fit is not None
    # 4 standard errors of a t law with 42 degrees: false alarm 3e-4, seed fixed.
    assert curve.fit.slope == pytest.approx(0.6, abs=4 * curve.fit.slope_error)
    assert (curve.done, curve.planned, curve.note) == (48, 48, "")


def test_the_abscissa_is_ln_of_length_over_nominal_spacing() -> None:
    curve = density_curve(setup(), {})
    np.testing.assert_allclose(curve.x, np.log(0.6 * np.sqrt(curve.values)))
    np.testing.assert_allclose(curve.elements_per_region, 2 * 0.3**2 * curve.values)


def test_the_abscissa_of_an_unequal_pair_is_the_mean_over_its_regions() -> None:
    curve = density_curve(setup(region_list=PAIR, separation=gaps(PAIR)[0]), {})
    expected = (np.log(0.4) + np.log(0.6)) / 2 + np.log(curve.values) / 2
    np.testing.assert_allclose(curve.x, expected)
    np.testing.assert_allclose(curve.elements_per_region, 2 * 0.2**2 * curve.values)


def test_small_regions_are_shown_and_not_fitted() -> None:
    asked = setup(half_width=0.2)
    curve = density_curve(asked, filled(density_draws(asked), np.random.default_rng(2), line))
    expected = curve.elements_per_region >= 80
    assert expected.sum() == 4
    assert np.array_equal(curve.used, expected)
    assert curve.fit is not None
    assert curve.fit.points == 4
    assert all(math.isfinite(e.mean) for e in curve.entropy)


def test_too_few_usable_rungs_say_how_many_are_needed() -> None:
    asked = setup(half_width=0.12)
    curve = density_curve(asked, filled(density_draws(asked), np.random.default_rng(2), line))
    assert curve.fit is None
    assert "3 needed" in curve.note


def test_one_sprinkling_at_every_rung_says_that_no_error_is_known() -> None:
    asked = setup(averaging=Averaging(sprinklings=1))
    curve = density_curve(asked, filled(density_draws(asked), np.random.default_rng(2), line))
    assert curve.fit is None
    assert "one sprinkling" in curve.note
    assert all(math.isnan(e.error) for e in curve.entropy)


def test_a_ladder_of_which_nothing_is_done_has_no_fit_and_no_numbers() -> None:
    curve = density_curve(setup(), {})
    assert curve.fit is None
    assert curve.done == 0
    assert not curve.used.any()
    assert np.isnan(curve.regions_entropy).all()


@pytest.mark.parametrize("bad", [(), (reading(math.nan),)], ids=["failed", "refused"])
def test_failed_and_refused_draws_of_the_ladder_are_tolerated(bad: tuple[Reading, ...]) -> None:
    plan = density_draws(setup())
    readings = filled(plan, np.random.default_rng(3), line)
    for draw in plan.draws[::5]:
        readings[draw.key] = bad
    curve = density_curve(setup(), readings)
    assert curve.fit is not None
    assert curve.done == 48


def test_a_rung_that_only_failed_is_not_fitted() -> None:
    plan = density_draws(setup())
    readings = filled(plan, np.random.default_rng(3), line)
    for draw, rung in zip(plan.draws, plan.point_of, strict=True):
        if rung == 2:
            readings[draw.key] = ()
    curve = density_curve(setup(), readings)
    assert not curve.used[2]
    assert curve.fit is not None
    assert curve.fit.points == 5


@pytest.mark.parametrize(
    ("changes", "slope"),
    [
        ({"region_count": 1}, 1 / 3),
        ({"region_count": 2}, 2 / 3),
        ({"region_count": 3, "half_width": 0.2}, 1.0),
        ({"region_count": 2, "separation": 0.0}, 1 / 3),
        ({"region_list": (Region(x0=-0.7, half_width=0.3),)}, 1 / 6),
        ({"region_count": 1, "half_width": 1.0}, 0.0),
        ({"region_count": 1, "order": 2.0}, 1 / 4),
    ],
    ids=["one", "two", "three", "touching", "corner", "patch", "Renyi"],
)
def test_the_reference_slope_counts_the_ends_inside_the_patch(
    changes: dict[str, Any], slope: float
) -> None:
    assert density_curve(setup(**changes), {}).reference_slope == pytest.approx(slope)


@pytest.mark.parametrize("mode", ["none", "patch_only", "regions_only"])
def test_without_both_cuts_there_is_no_reference_slope(mode: str) -> None:
    assert density_curve(setup(truncation_mode=mode), {}).reference_slope is None


def test_a_massive_field_has_no_reference_slope() -> None:
    assert density_curve(setup(mass=1.0), {}).reference_slope is None


def test_ends_of_boosted_touching_regions_are_shared() -> None:
    assert ends_inside(setup(region_count=4, half_width=0.2, separation=0.0).regions()) == 2


# ------------------------------------------------------------------ the size sweep


def test_the_size_fit_finds_the_slope_within_its_errors() -> None:
    asked = setup(points=PointSource(density=2000.0))
    curve = size_curve(asked, filled(size_draws(asked), np.random.default_rng(4), line))
    assert curve.fit is not None
    # 5.4 standard errors of a t law with 7 degrees: false alarm 1e-3, seed fixed.
    assert curve.fit.slope == pytest.approx(0.6, abs=5.4 * curve.fit.slope_error)
    assert curve.reference_slope is None


def test_a_common_shift_of_a_sprinkling_does_not_blur_the_size_slope() -> None:
    asked = setup(points=PointSource(density=2000.0))
    plan, rng = size_draws(asked), np.random.default_rng(5)
    readings = {}
    for draw in plan.draws:
        shift = rng.standard_normal()
        readings[draw.key] = tuple(
            reading(line(draw, layout) + shift + 0.001 * rng.standard_normal())
            for layout in draw.layouts
        )
    fit = size_curve(asked, readings).fit
    assert fit is not None
    assert fit.slope_error < 0.01 < fit.intercept_error


def test_a_size_curve_of_which_no_size_fits_is_empty_and_says_why() -> None:
    curve = size_curve(setup(sweeps=SweepPlan(size_low=5.0, size_high=10.0)), {})
    assert curve.values.size == 0
    assert curve.fit is None
    assert len(curve.left_out) == 6


@pytest.mark.parametrize("readings", [{}, None])
def test_a_size_curve_that_waits_or_failed_has_no_fit(readings: Any) -> None:
    if readings is None:
        readings = {draw.key: () for draw in size_draws(setup()).draws}
    curve = size_curve(setup(), readings)
    assert curve.fit is None
    assert np.isnan([e.mean for e in curve.entropy]).all()


def test_a_size_sweep_of_one_sprinkling_says_that_no_error_is_known() -> None:
    asked = setup(averaging=Averaging(sprinklings=1), points=PointSource(density=2000.0))
    curve = size_curve(asked, filled(size_draws(asked), np.random.default_rng(4), line))
    assert curve.fit is None
    assert "one sprinkling" in curve.note


def test_a_size_fit_that_waits_for_nothing_does_not_say_that_it_waits() -> None:
    asked = setup(points=PointSource(density=2000.0))
    readings = {
        draw.key: tuple(reading(math.nan) for _ in draw.layouts) for draw in size_draws(asked).draws
    }
    curve = size_curve(asked, readings)
    assert curve.done == curve.planned
    assert "waiting" not in curve.note


# ------------------------------------------------------------ the separation sweep


def test_a_separation_curve_has_both_rules_and_errors_at_every_point() -> None:
    readings = filled(separation_draws(setup()), np.random.default_rng(6), line)
    curve = separation_curve(setup(), readings)
    for rule in ("support", "direct_sum"):
        assert len(curve.union[rule]) == len(curve.mutual_information[rule]) == 20
        assert all(e.error > 0 for e in curve.union[rule])
    assert np.all(curve.cross_block == pytest.approx(0.1))
    assert (curve.pair, curve.note) == ((0, 1), "")


def test_a_separation_curve_of_one_region_is_empty_and_says_why() -> None:
    curve = separation_curve(setup(region_count=1), {})
    assert curve.separation.size == 0
    assert curve.note == "one region has no separation"


def test_the_nearest_pair_is_the_one_with_the_smallest_gap() -> None:
    regions = (
        Region(x0=0.8, half_width=0.1),
        Region(x0=-0.6, half_width=0.1),
        Region(x0=-0.35, half_width=0.1),
    )
    assert nearest_pair(regions) == (1, 2)


# -------------------------------------------------------------- real computations


def test_a_small_average_from_end_to_end() -> None:
    asked = setup(
        points=PointSource(density=100.0, seed=2),
        averaging=Averaging(sprinklings=3),
        truncation_mode="custom",
        region_rule=Rule(alpha=0.8),
    )
    stages = Stages()
    readings = {d.key: take(d, stages=stages) for d in average_draws(asked).draws}
    found = average(asked, readings)
    assert found.count == 3
    singles = [take(replace(d), stages=Stages())[0].entropy[0] for d in average_draws(asked).draws]
    assert found.regions[0].mean == pytest.approx(np.mean(singles), rel=1e-10)
    pair = found.pairs[0]
    expected = sum(r.mean for r in found.regions) - found.unions["support"].mean
    assert pair.support.mean == pytest.approx(expected, rel=1e-10)


def test_a_sprinkling_that_leaves_a_region_empty_can_fail_alone() -> None:
    from lozenge_engine.errors import InputError

    asked = setup(points=PointSource(density=20.0, seed=2), half_width=0.28)
    readings: dict[str, tuple[Reading, ...]] = {}
    for draw in average_draws(asked).draws:
        try:
            readings[draw.key] = take(draw)
        except InputError:
            readings[draw.key] = ()
    failed = sum(not r for r in readings.values())
    assert 0 < failed < 8
    assert average(asked, readings).count == 8 - failed
