"""Records of single modes and of the state's checks."""

from __future__ import annotations

import math
from dataclasses import replace
from functools import cache

import numpy as np
import pytest

from lozenge_engine.config import Config, PointSource, Rule, Setup
from lozenge_engine.errors import Cancelled, InputError
from lozenge_engine.geometry import Region
from lozenge_engine.modeview import ModeRecord, mode_record
from lozenge_engine.pipeline import compute
from lozenge_engine.result import Result
from lozenge_engine.stages import Stages
from lozenge_engine.statecheck import StateRecord, state_record

STAGES = Stages()
TWO = Setup(
    points=PointSource(density=300.0, seed=5), region_count=2, half_width=0.35, separation=0.1
).config()
ONE = Setup(points=PointSource(density=400.0, seed=6), region_count=1, half_width=0.5).config()


@cache
def result() -> Result:
    return compute(TWO, stages=STAGES)


@cache
def checked() -> StateRecord:
    return state_record(ONE, stages=STAGES)


def mode(config: Config = TWO, **asked: object) -> ModeRecord:
    return mode_record(config, stages=STAGES, **asked)  # type: ignore[arg-type]


@pytest.mark.parametrize("rank", [1, 7, 40])
def test_a_patch_mode_has_the_numbers_of_the_result(rank: int) -> None:
    record, patch = mode(rank=rank), result().patch
    assert record.eigenvalue == patch.eigenvalues[rank - 1]
    assert record.kept == patch.kept[rank - 1]
    assert record.cut == patch.cut
    assert record.ranks == patch.eigenvalues.size
    assert record.t.size == result().elements
    assert record.empty_t.size == 0


@pytest.mark.parametrize("region", [0, 1])
def test_region_modes_have_the_eigenvalues_of_the_result(region: int) -> None:
    own = result().regions[region]
    for rank in (1, 5, own.kept_modes, own.kept_modes + 1):
        record = mode(operator="region", region=region, rank=rank)
        assert record.eigenvalue == pytest.approx(own.eigenvalues[rank - 1], rel=1e-9)
        assert record.kept == (rank <= own.kept_modes)
        assert record.cut == own.cut
        assert record.t.size == own.elements
        assert record.empty_t.size == result().elements - own.elements
        assert record.shares[region] == pytest.approx(1.0)


def test_union_modes_have_the_eigenvalues_and_marks_of_the_rule_by_support() -> None:
    union = result().unions["support"]
    for rank in (1, 4, 20, union.eigenvalues.size):
        record = mode(operator="union", rank=rank)
        assert record.eigenvalue == pytest.approx(union.eigenvalues[rank - 1], rel=1e-6)
        assert record.kept == union.kept[rank - 1]
        assert record.shares.sum() == pytest.approx(1.0)
        holder = int(record.shares.argmax())
        assert record.cut == result().regions[holder].cut
        assert record.kept == (record.eigenvalue > record.cut)


def test_a_mode_has_mean_square_one_and_no_mean_square_of_its_own_phase() -> None:
    for asked in ({}, {"operator": "region"}, {"operator": "union"}):
        values = mode(rank=3, **asked).values
        assert np.mean(np.abs(values) ** 2) == pytest.approx(1.0)
        assert abs(np.mean(values**2)) < 1e-9


def test_overlap_falls_from_one_as_modes_get_finer() -> None:
    overlaps = [mode(rank=k).continuum.overlap for k in (1, 8, 40)]  # type: ignore[union-attr]
    assert overlaps[0] > 0.995
    assert overlaps[0] > overlaps[1] > overlaps[2]


def test_phase_makes_the_overlap_with_the_continuum_real_and_positive() -> None:
    record = mode(rank=2)
    u, v = record.t + record.x, record.t - record.x  # in half-sides of the patch
    wave = 1j * (np.exp(-1j * math.pi * u) - np.exp(-1j * math.pi * v))
    product = np.vdot(wave, record.values)
    assert product.real > 0
    assert abs(product.imag) < 1e-9 * product.real


def test_a_boosted_region_has_the_diamonds_modes_in_its_own_coordinates() -> None:
    config = replace(
        ONE,
        points=replace(ONE.points, density=1000.0),
        regions=(Region(half_width=0.4, boost=0.5),),
    )
    record = mode(config, operator="region")
    assert record.continuum is not None
    assert record.continuum.overlap > 0.98
    t, x = np.array(config.regions[0].corners).T
    assert record.continuum.t.max() < t.max()
    assert record.continuum.x.min() > x.min()


@pytest.mark.parametrize(
    ("changes", "asked", "why"),
    [
        ({"mass": 2.0}, {}, "with a mass"),
        ({"points": PointSource(density=300.0, curvature="positive")}, {}, "curved"),
        ({}, {"operator": "union"}, "several regions"),
    ],
)
def test_no_continuum_mode_is_shown_where_none_is_known(changes, asked, why) -> None:
    record = mode(replace(TWO, **changes), **asked)
    assert record.continuum is None
    assert why in record.unknown
    largest = record.values[np.argmax(np.abs(record.values))]
    assert largest.real > 0
    assert abs(largest.imag) < 1e-12


def test_evenly_laid_points_in_a_curved_patch_show_the_function_and_not_its_weights() -> None:
    # The largest mode is smooth, and so the same on a sprinkling and on a lattice; its values on
    # the lattice would carry sqrt(Omega^2), 1.85 in the corners at this radius, if left in.
    source = PointSource(density=300.0, curvature="positive", radius=1.0)
    regions = (Region(half_width=0.3),)
    lattice = replace(source, kind="lattice", oversampling=4)
    means = []
    for points in (source, lattice):
        record = mode(Config(points=points, regions=regions))
        far = np.abs(record.t) > 0.7
        near = np.abs(record.t) + np.abs(record.x) < 0.3
        size = np.abs(record.values)
        means.append(size[far].mean() / size[near].mean())
    assert means[1] == pytest.approx(means[0], rel=0.1)


def test_splitting_and_cross_block_are_given_for_several_regions_only() -> None:
    record = mode()
    assert record.splitting is not None
    assert 0.5 <= record.splitting.mean_share <= 1.0
    assert record.splitting.modes == result().unions["support"].kept_modes
    assert record.cross_block == result().pairs[0].cross_block
    alone = mode(ONE)
    assert alone.splitting is None
    assert math.isnan(alone.cross_block)


def test_modes_split_better_when_regions_are_far_apart() -> None:
    shares = []
    for gap in (0.0, 0.9):
        config = Setup(points=TWO.points, region_count=2, half_width=0.25, separation=gap).config()
        found = mode(config).splitting
        assert found is not None
        shares.append(found.mean_share)
    assert shares[1] > shares[0]


def test_the_union_of_one_region_is_that_region() -> None:
    one, union = mode(ONE, operator="region", rank=2), mode(ONE, operator="union", rank=2)
    assert union.eigenvalue == one.eigenvalue
    assert union.operator == "union"


@pytest.mark.parametrize(
    ("asked", "words"),
    [
        ({"rank": 10_000}, "rank: given 10000; allowed is 1 to"),
        ({"operator": "region", "region": 4}, "region: given region E; allowed is A to B"),
    ],
)
def test_what_does_not_exist_is_refused(asked, words) -> None:
    with pytest.raises(InputError, match=words):
        mode(**asked)


def test_no_rank_is_stale_after_another_cut() -> None:
    # The lifted modes are cached: another first cut must not find those of the old one.
    looser = replace(TWO, patch_rule=Rule(alpha=2.0))
    first, second = (mode(c, operator="region", rank=20) for c in (TWO, looser))
    assert first.eigenvalue != second.eigenvalue
    assert second.ranks < first.ranks


def test_state_record_reads_what_the_engine_knows() -> None:
    record = checked()
    assert record.slope == pytest.approx(-0.159, abs=0.02)
    assert record.fits[0].slope == record.slope
    assert record.fits[0].slope_error == record.slope_error
    assert record.exact_rows
    assert record.lost_error == 0.0
    assert 0.0 < record.lost < 0.3
    assert record.purity is not None
    assert record.purity.worst <= record.purity.tolerance
    assert record.positivity is not None
    assert abs(record.positivity.lowest) <= record.positivity.tolerance
    assert record.loss.held.sum() == record.elements
    assert ((record.loss.value > 0) & (record.loss.value < 1)).all()
    assert record.bins.used.any()
    assert not record.bins.used.all()


def test_shares_lost_by_cell_average_to_the_loss_of_the_whole() -> None:
    record = checked()
    found = compute(ONE, stages=STAGES)
    counts = np.sum((found.u[:, None] < found.u) & (found.v[:, None] < found.v), axis=0)
    assert record.lost**2 == pytest.approx(
        1 - 2 * np.sum(found.patch.eigenvalues[found.patch.kept] ** 2) / (counts.sum() / 2)
    )
    assert record.loss.value.min() < record.lost**2 < record.loss.value.max()


def test_cells_near_the_centre_follow_the_law() -> None:
    record = checked()
    near = np.abs(record.deviation.t) + np.abs(record.deviation.x) < 0.2
    corners = np.abs(record.deviation.x) > 0.8
    assert np.abs(record.deviation.value[near]).max() < 0.03
    assert record.deviation.value[corners].max() < -0.05


def test_several_sprinklings_give_their_mean_and_its_error() -> None:
    shown: list[StateRecord] = []
    record = state_record(ONE, stages=STAGES, realisations=3, publish=shown.append)
    assert [len(r.fits) for r in shown] == [1]
    for name in ("slope", "law_constant"):
        values = [getattr(fit, name) for fit in record.fits]
        own = [getattr(fit, f"{name}_error") for fit in record.fits]
        between = np.std(values, ddof=1) / math.sqrt(3)
        within = math.sqrt(np.mean(np.square(own)) / 3)
        assert getattr(record, name) == pytest.approx(np.mean(values))
        assert getattr(record, f"{name}_error") == pytest.approx(max(between, within))
    again = state_record(replace(ONE, realisation=2), stages=STAGES)
    assert record.fits[2] == again.fits[0]


@pytest.mark.parametrize("curvature", ["flat", "negative", "positive"])
def test_a_lattice_obeys_the_law_of_a_sharp_cut_in_its_middle(curvature) -> None:
    points = PointSource(kind="lattice", density=300.0, oversampling=3, curvature=curvature)
    record = state_record(Config(points=points, regions=ONE.regions), stages=STAGES)
    # Conformal: |tau| of the coordinates in the logarithm, whatever Omega.  The bare logarithm
    # misses the cut's ripple, which moves its slope by 0.005 to 0.008 at this density (measured).
    assert record.softened.slope == pytest.approx(-1 / (2 * math.pi), abs=0.003)
    assert abs(record.slope + 1 / (2 * math.pi)) > 0.004


def test_too_few_elements_are_refused_with_what_is_needed() -> None:
    config = replace(ONE, points=PointSource(density=60.0))
    with pytest.raises(InputError, match="raise the density"):
        state_record(config, stages=STAGES)


@pytest.mark.parametrize("stage", ["pairs", "rows", "positivity", "purity", "sprinklings"])
def test_checks_can_be_stopped_at_every_stage(stage: str) -> None:
    def stop(now: str, _: float) -> None:
        if now == stage:
            raise Cancelled

    with pytest.raises(Cancelled):
        state_record(ONE, stages=STAGES, realisations=2, report=stop)
