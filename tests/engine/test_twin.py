"""The continuum twin: its sets, its numbers with errors, its slope, data minus twin."""

from concurrent.futures import ThreadPoolExecutor
from dataclasses import replace
from functools import cache

import numpy as np
import pytest

from lozenge_engine.campaign import run
from lozenge_engine.config import Config, Rule, Setup
from lozenge_engine.errors import Cancelled, InputError
from lozenge_engine.geometry import Region
from lozenge_engine.kernels.twin import combined, line, normal_points
from lozenge_engine.pipeline import compute
from lozenge_engine.plan import Axis, CampaignPlan
from lozenge_engine.presets import Preset
from lozenge_engine.source import PointSource
from lozenge_engine.stages import Stages
from lozenge_engine.store import create
from lozenge_engine.twin import (
    LEVELS,
    QUANTITIES,
    TwinValue,
    difference,
    ladder_slope,
    quantity_of,
    slope_of,
    twin,
    twin_slope,
    twins,
)
from lozenge_engine.twinsets import chosen_sets

PAIR = (Region(half_width=0.3, x0=-0.4), Region(half_width=0.3, x0=0.4))
TRIPLE = tuple(Region(half_width=0.2, x0=x) for x in (-0.5, 0.0, 0.5))
DENSITY = 120.0


def config(regions=PAIR, density=DENSITY, **changes):
    return Config(points=PointSource(density=density), regions=regions, **changes)


@cache
def cached_twins():
    """Preview twins of a pair, one nested diamond and three regions, from the same sets."""
    layouts = (PAIR, (Region(half_width=0.5),), TRIPLE)
    return twins(config(), layouts, level="preview")


# ------------------------------------------------------------------------------- sets


def test_a_level_holds_the_sets_of_the_level_below():
    assert set(LEVELS["preview"]) < set(LEVELS["refined"]) < set(LEVELS["long"])
    assert max(points.oversampling for points in LEVELS["preview"]) <= 16


def test_every_set_is_cut_at_the_wavenumbers_of_the_geometry():
    # Eigenvalues are rho L/k: of f times the density and f times the cut, the same modes are kept.
    for reading in cached_twins()[0].readings:
        assert reading.numbers[0] == pytest.approx(2 * np.sqrt(2 * DENSITY), abs=2)
        assert reading.ratio == pytest.approx(reading.points.oversampling, rel=0.05)


def test_a_reading_is_the_pipeline_on_that_set():
    rule = Rule(kind="fixed_number", number=8)  # no threshold, so no mean over thresholds
    one = twin(config(region_rule=rule)).readings[1]
    source = PointSource(
        kind="lattice", density=DENSITY, oversampling=one.points.oversampling, seed=1
    )
    result = compute(
        Config(points=source, realisation=one.points.number, regions=PAIR, region_rule=rule)
    )
    assert one.numbers[3] == result.regions[0].entropy
    assert one.numbers[5] == result.unions["support"].entropy
    assert not one.unsharp.any()
    np.testing.assert_array_equal(one.patch, result.patch.eigenvalues / result.oversampling)


def test_a_mode_at_its_threshold_widens_the_error():
    for reading in cached_twins()[2].readings:
        kept, unsharp = reading.numbers[1:4], reading.unsharp[1:4]
        at_threshold = kept != np.round(kept)
        np.testing.assert_array_equal(unsharp > 0, at_threshold)
        assert (reading.unsharp[4:7][at_threshold] > 0).all()
    assert any(reading.unsharp.any() for reading in cached_twins()[2].readings)


def test_the_sprinkling_does_not_matter():
    other = replace(
        config(), points=PointSource(density=DENSITY, seed=77, kind="fixed"), realisation=5
    )
    first, second = twin(config()), twin(other)
    np.testing.assert_array_equal(first.patch, second.patch)
    assert first.union_support == second.union_support


def test_sets_that_need_too_much_memory_are_left_out():
    large = chosen_sets(config(density=8000.0), "long")
    assert 2 <= len(large) < len(LEVELS["long"])
    assert max(points.oversampling for points in large) < 32


@pytest.mark.parametrize(
    ("changes", "level", "words"),
    [
        ({"patch_rule": Rule(kind="none")}, "preview", "no wavenumber to share"),
        ({"patch_rule": Rule(kind="none")}, "exact", "no wavenumber to share"),
        ({}, "finest", "choose one of them"),
        ({"density": 200_000.0}, "preview", "lower the density"),
        ({"mass": 1.0}, "exact", "quasi-uniform"),
    ],
)
def test_what_has_no_twin_is_refused_in_words(changes, level, words):
    with pytest.raises(InputError, match=words):
        twin(config(**changes), level=level)


def test_the_exact_twin_of_a_curved_patch_is_refused():
    curved = PointSource(density=DENSITY, curvature="positive", radius=1.0)
    with pytest.raises(InputError, match="positive curvature"):
        twin(Config(points=curved, regions=PAIR), level="exact")


# ---------------------------------------------------------------------------- numbers


def test_layouts_together_are_the_layouts_one_by_one():
    for together in cached_twins():
        alone = twin(config(together.config.regions))
        assert alone.union_support == together.union_support
        assert alone.pair_direct_sum == together.pair_direct_sum
        np.testing.assert_array_equal(alone.regions[0], together.regions[0])


def test_one_region_is_its_own_union_and_three_have_three_pairs():
    _, nested, three = cached_twins()
    assert nested.union_support.value == nested.entropy[0].value
    assert nested.union_direct_sum == nested.union_support
    assert nested.pair_support == ()
    assert len(three.pair_support) == len(three.pair_direct_sum) == 3
    assert len(three.kept) == len(three.entropy) == len(three.regions) == 3


def test_mutual_information_is_what_its_entropies_say():
    pair = cached_twins()[0]
    sum_of_both = pair.entropy[0].value + pair.entropy[1].value
    assert pair.pair_support[0].value == pytest.approx(sum_of_both - pair.union_support.value)


@pytest.mark.parametrize("which", range(3))
def test_the_exact_twin_lies_within_two_errors_of_the_sets(which):
    found = cached_twins()[which]
    exact = twin(found.config, level="exact")
    for quantity in QUANTITIES:
        for index in range(len(getattr(found, quantity)) if "pair" in quantity else 1):
            value, error = quantity_of(found, quantity, index=index)
            assert error > 0
            assert abs(value - quantity_of(exact, quantity, index=index).value) < 2 * error
    assert exact.patch_kept.error == 0
    assert exact.sets == exact.oversampling == 0


def test_a_set_at_its_own_default_cut_is_no_twin():
    # Negative control: four times the density with the threshold of its own count.
    found = cached_twins()[0]
    source = PointSource(kind="lattice", density=4 * DENSITY, seed=1)
    wrong = compute(Config(points=source, regions=PAIR)).unions["support"].entropy
    assert abs(wrong - found.union_support.value) > 4 * found.union_support.error


def test_a_fixed_number_of_modes_is_kept_on_every_set():
    rule = Rule(kind="fixed_number", number=12)
    found = twin(config(patch_rule=rule))
    assert found.patch_kept == TwinValue(pytest.approx(12.0), pytest.approx(0.0, abs=1e-9))
    assert twin(config(patch_rule=rule), level="exact").patch_kept.value == 12


def test_without_a_cut_in_the_second_stage_no_entropy_is_given():
    # Every set has more points than the patch has modes: the state is pure by rank alone.
    bare = config(region_rule=Rule(kind="none"))
    for level in ("preview", "exact"):
        assert np.isnan(twin(bare, level=level).entropy[0].value)


def test_a_curved_patch_of_large_radius_has_the_twin_of_the_flat_one():
    flat = cached_twins()[0]
    source = PointSource(density=DENSITY, curvature="negative", radius=1000.0)
    curved = twin(Config(points=source, regions=PAIR))
    # Omega**2 = 1 + x**2/l**2 + ...: densities differ by up to 1e-6, and S moves with them.
    assert curved.union_support.value == pytest.approx(flat.union_support.value, abs=1e-4)
    bent = twin(Config(points=replace(source, radius=0.8), regions=PAIR))
    # Negative control: 4 l**2 (-ln cos(1/l)) of volume instead of 2 has more and larger modes.
    assert bent.patch[0] > 1.1 * flat.patch[0]
    assert bent.patch_kept.value > flat.patch_kept.value + 3


# ------------------------------------------------------------------ progress and cache


def test_progress_rises_to_one_and_a_cancelled_twin_stops():
    heard = []
    twin(config(), report=lambda stage, fraction: heard.append((stage, fraction)))
    fractions = [fraction for _, fraction in heard]
    assert {stage for stage, _ in heard} == {"twin"}
    assert fractions == sorted(fractions)
    assert fractions[-1] == 1.0

    def stop(stage, fraction):
        if fraction > 0.3:
            raise Cancelled

    with pytest.raises(Cancelled):
        twin(config(), report=stop)


def test_a_cache_serves_other_regions_without_a_search():
    stages = Stages()
    twin(config(), stages=stages)
    searched = []

    def hear(stage, fraction):
        searched.append(fraction)

    twin(config(TRIPLE), stages=stages, report=hear)
    # With every search skipped, a set reports only where it starts.
    assert len(set(searched)) <= len(LEVELS["preview"]) + 1


# --------------------------------------------------------------------------- statistics


def test_sets_weigh_with_the_square_of_their_density():
    values = np.array([[1.0, 2.0], [3.0, 2.0]])
    value, error = combined(values, ratios=np.array([1.0, 2.0]), floor=np.array([0.0, 0.9]))
    assert value == pytest.approx([2.6, 2.0])
    # Weights 1/5, 4/5: variance (1.6**2/5 + 0.4**2 4/5)/(1 - 17/25) = 2, times the root of 17/25;
    # mean ratio 9/5.
    assert error == pytest.approx([np.sqrt(2.0 * np.sqrt(0.68)), 0.5])


def test_errors_of_the_sets_themselves_are_added_in_squares():
    values = np.array([[1.0], [1.0]])
    own = np.array([[0.0], [2.0]])
    _, error = combined(values, own, ratios=np.array([1.0, 1.0]), floor=1.0)
    assert error == pytest.approx([np.sqrt(2.0 * np.sqrt(0.5) + 1.0)])


def test_error_shrinks_less_than_that_of_independent_sets():
    values = np.array([[0.0], [1.0]])
    once = combined(values, ratios=np.array([4.0, 4.0]))[1]
    often = combined(np.tile(values, (50, 1)), ratios=np.full(100, 4.0))[1]
    assert 1.5 * once * 50**-0.5 < often < once / 2


def test_line_is_weighted_least_squares():
    rng = np.random.default_rng(3)
    x, y, errors = np.sort(rng.random(6)), rng.random(6), 0.1 + rng.random(6)
    found = line(x, y, errors)
    coefficients, covariance = np.polyfit(x, y, 1, w=1 / errors, cov="unscaled")
    assert [found.slope, found.constant] == pytest.approx(list(coefficients))
    assert [found.slope_error**2, found.constant_error**2] == pytest.approx(np.diag(covariance))
    assert found.mean == pytest.approx(np.average(y, weights=errors**-2.0))
    assert found.chi2 <= found.flat_chi2
    assert found.dof == 4


# -------------------------------------------------------------------------------- slope


def test_slope_of_values_on_a_line_has_the_error_of_the_rungs():
    x = np.array([1.0, 2.0, 3.0])
    found = slope_of([TwinValue(0.3 * z + 1.0, 0.1) for z in x], x=x)
    assert found.slope == pytest.approx(0.3)
    assert found.error == pytest.approx(0.1 / np.sqrt(2))
    assert found.constant == pytest.approx(1.6)
    assert found.scatter == pytest.approx(0.0, abs=1e-12)
    assert found.low == pytest.approx(found.slope - 2 * found.error)


def test_slope_of_scattered_values_has_the_error_of_their_scatter():
    x = np.arange(4.0)
    y = np.array([0.0, 1.0, 0.0, 1.0])
    found = slope_of([TwinValue(z, 1e-6) for z in y], x=x)
    # Least squares by hand: slope 0.2, residual sum of squares 0.8, variance 0.4, over 5.
    assert found.slope == pytest.approx(0.2)
    assert found.error == pytest.approx(np.sqrt(0.4 / 5))
    assert "distances" in found.method


@pytest.fixture(scope="module")
def ladder():
    return [twin(config((Region(half_width=0.5),), density=d)) for d in (80.0, 130.0, 210.0)]


def test_slope_of_a_ladder_takes_configurations_or_twins(ladder):
    found = ladder_slope(ladder, quantity="entropy")
    mixed = twin_slope([ladder[0], ladder[1].config, ladder[2]], quantity="entropy")
    assert found.values == mixed.values
    assert (found.slope, found.error) == (mixed.slope, mixed.error)
    # ln(l/a) with l = 1 and a = rho**(-1/2).
    np.testing.assert_allclose(found.x, np.log([80.0, 130.0, 210.0]) / 2)


def test_slope_of_a_ladder_holds_that_of_the_exact_twin(ladder):
    found = ladder_slope(ladder)
    exact = twin_slope([rung.config for rung in ladder], level="exact")
    assert abs(found.slope - exact.slope) < 2 * found.error


def test_common_errors_of_one_set_do_not_hide_in_the_slope(ladder):
    # One set off by more and more along the ladder: only its own rungs show it.
    tilted = [
        rung._replace(
            readings=(
                rung.readings[0],
                rung.readings[1],
                rung.readings[2]._replace(numbers=rung.readings[2].numbers + j),
            )
        )
        for j, rung in enumerate(ladder)
    ]
    found = ladder_slope(tilted)
    assert found.error > 1.0
    assert found.error > 5 * ladder_slope(ladder).error
    assert found.method == "slopes of each set's own rungs"


@pytest.mark.parametrize("count", [0, 1])
def test_a_ladder_needs_two_densities(ladder, count):
    with pytest.raises(InputError, match="add a density"):
        ladder_slope(ladder[:count] * 2)


def test_a_quantity_that_is_not_there_is_refused(ladder):
    with pytest.raises(InputError, match="union_support"):
        quantity_of(ladder[0], "purity")
    with pytest.raises(InputError, match="two regions or more"):
        quantity_of(ladder[0], "pair_support")


# ---------------------------------------------------------------------- data minus twin


def test_data_minus_twin_is_a_constant_for_data_above_the_twin_by_one():
    x = np.array([1.0, 1.5, 2.0, 2.5])
    values = [TwinValue(z**2, 0.03) for z in x]
    found = difference(x**2 + 1.0, np.full(4, 0.04), values, x=x)
    assert found.mean == pytest.approx(1.0)
    assert found.slope == pytest.approx(0.0, abs=1e-12)
    assert [value.error for value in found.values] == pytest.approx([0.05] * 4)
    assert found.mean_error == pytest.approx(0.025)
    assert found.flat_chi2 == pytest.approx(0.0, abs=1e-12)
    assert found.flat_dof == found.dof + 1 == 3


def test_data_minus_twin_shows_a_slope_that_the_twin_has_not():
    x = np.array([1.0, 1.5, 2.0, 2.5])
    values = [TwinValue(0.3 * z, 0.0) for z in x]
    found = difference(0.5 * x, np.full(4, 0.01), values, x=x)
    assert found.slope == pytest.approx(0.2)
    assert found.slope > 10 * found.error
    assert found.flat_chi2 > 100


@pytest.mark.parametrize(
    ("means", "errors", "words"),
    [([1.0], [0.1, 0.1], "one of each"), ([1.0, 2.0], [0.0, 0.0], "more sprinklings")],
)
def test_data_that_do_not_fit_the_twin_are_refused(means, errors, words):
    values = [TwinValue(1.0, 0.0), TwinValue(2.0, 0.0)]
    with pytest.raises(InputError, match=words):
        difference(np.array(means), np.array(errors), values, x=np.array([1.0, 2.0]))


# ------------------------------------------------------------------------- smooth twin


def test_smooth_twin_is_the_mean_over_counts_near_the_exact_one():
    exact, smooth = (twin(config(), level=level) for level in ("exact", "smooth"))
    # A mode more or less: S moves by less than 0.1 on average, and the eigenvalues do not move.
    assert smooth.entropy[0].value == pytest.approx(exact.entropy[0].value, abs=0.1)
    assert 0 < smooth.entropy[0].error < 0.03
    assert smooth.kept[0].value == pytest.approx(2 * np.sqrt(0.18 * DENSITY), abs=2)
    np.testing.assert_array_equal(smooth.regions[0], exact.regions[0])


def test_smooth_twin_has_no_staircase():
    rungs = [config((Region(half_width=0.3),), density=d) for d in np.geomspace(300, 900, 6)]
    exact, smooth = (twin_slope(rungs, level=level) for level in ("exact", "smooth"))
    assert smooth.scatter < exact.scatter / 2
    assert abs(smooth.slope - exact.slope) < 2 * exact.error


def test_smooth_twin_reports_and_stops():
    heard = []

    def hear(stage, fraction):
        heard.append(fraction)
        if fraction > 0.5:
            raise Cancelled

    with pytest.raises(Cancelled):
        twin(config(), level="smooth", report=hear)
    assert heard == sorted(heard)


@pytest.mark.parametrize("dimensions", [1, 2, 4])
def test_normal_points_have_the_moments_of_the_normal_distribution(dimensions):
    generator = np.random.default_rng(5)
    points = normal_points(500, dimensions=dimensions, generator=generator)
    assert points.shape == (500, dimensions)
    np.testing.assert_allclose(points.mean(axis=0), 0.0, atol=1e-12)
    moments = points.T @ points / 500
    np.testing.assert_allclose(np.diag(moments), 1.0, rtol=1e-12)
    # Of 250 independent pairs: standard error 0.063; six of them within four errors.
    np.testing.assert_allclose(moments, np.eye(dimensions), atol=0.25)
    np.testing.assert_allclose(np.mean(points**4, axis=0), 3.0, rtol=0.05)


# --------------------------------------------------------------------------- campaigns


def test_a_long_twin_runs_as_a_campaign_over_lattices(tmp_path):
    densities = (80.0, 120.0, 180.0)
    setup = Setup(
        points=PointSource(kind="lattice", density=120.0, oversampling=9, seed=3),
        region_count=1,
        half_width=0.5,
    )
    plan = CampaignPlan(
        axes=(Axis(name="density", values=densities),), realisations=2, smallest_region=10
    )
    wanted = Preset(title="t", sentence="s", setup=setup, campaign=plan)
    with create(tmp_path / "twin.sqlite", wanted) as results:
        with ThreadPoolExecutor(1) as pool:
            assert run(results, executor=pool, capacity=1).reason == "finished"
        for j, density in enumerate(densities):
            found = results.table(j).union_support[:, 0]
            value, error = twin(config((Region(half_width=0.5),), density)).union_support
            assert found.shape == (2,)
            assert np.abs(found - value).max() < 3 * error
