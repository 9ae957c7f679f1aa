"""The chain beside the bench's regions, cross ratios, and mutual information by several routes."""

from __future__ import annotations

import math
from dataclasses import replace
from multiprocessing import Pipe

import numpy as np
import pytest

from lozenge_engine import crossratio
from lozenge_engine.config import PointSource, Setup
from lozenge_engine.crossratio import MutualRecord, mutual_record
from lozenge_engine.errors import Cancelled, InputError
from lozenge_engine.evidence import EvidencePlan
from lozenge_engine.geometry import Region, equal_row
from lozenge_engine.kernels.chain import chain_slopes
from lozenge_engine.mutualcurves import chain_mutual, cross_ratios, touching_growth
from lozenge_engine.pipeline import compute
from lozenge_engine.placement import with_separation
from lozenge_engine.routes import chain_route, fractions
from lozenge_engine.saturation import chain_sizes
from lozenge_engine.stages import Stages

SETUP = Setup(points=PointSource(density=60.0), half_width=0.25, separation=0.25)


def test_fractions_are_those_along_x_across_the_patch() -> None:
    regions = (Region(half_width=0.2, x0=0.3, t0=0.1), Region(half_width=0.1, x0=-0.9))
    found = fractions(regions)
    assert found[0] == pytest.approx((0.0, 0.1))
    assert found[1] == pytest.approx((0.55, 0.75))


# Source: the project's own throw-away computation, as in tests/outside/test_chain.py.
@pytest.mark.parametrize(
    ("regions", "first", "low", "high"),
    [
        (equal_row(1, 0.2, 0.0), 40, 0.3286, 0.3330),
        (equal_row(2, 0.2, 0.4), 40, 0.6527, 0.6658),
        (equal_row(3, 1 / 7, 2 / 7), 56, 0.9847, 0.9991),
        ((Region(half_width=0.2, x0=-0.8),), 40, 0.1598, 0.1662),
    ],
)
def test_regions_give_the_printed_slopes_at_their_fractions(
    regions: tuple[Region, ...], first: int, low: float, high: float
) -> None:
    route = chain_route(regions, first=first, doublings=5)
    assert route.slopes[[0, -1]] == pytest.approx([low, high], abs=2e-4)
    assert route.off < 1e-12
    assert abs(route.slope.value - route.reference) < route.slope.error


def test_four_rows_take_less_than_five_seconds() -> None:
    rows = (equal_row(1, 0.2, 0.0), equal_row(2, 0.2, 0.4), equal_row(3, 1 / 7, 2 / 7))
    routes = [chain_route(r) for r in (*rows, (Region(half_width=0.2, x0=-0.8),))]
    assert sum(route.seconds for route in routes) < 5.0


def test_fractions_that_meet_no_site_are_rounded_and_told() -> None:
    route = chain_route((Region(half_width=0.1 * math.pi, x0=0.1),), doublings=4)
    assert 0.0 < route.off < 0.5 / route.sites[0]
    taken = chain_slopes(route.fractions, first=int(route.sites[0]), doublings=4)
    assert route.entropy == pytest.approx(taken.entropy, rel=1e-12)


def test_touching_blocks_lose_the_ends_that_they_share() -> None:
    route = chain_route(equal_row(2, 0.2, 0.0), doublings=4)
    assert route.reference == pytest.approx(1 / 3)
    assert abs(route.slope.value - 1 / 3) < route.slope.error
    assert math.isnan(route.mutual.value)


def test_total_correlation_of_two_blocks_is_their_mutual_information() -> None:
    route = chain_route(equal_row(2, 0.2, 0.2), doublings=4)
    assert route.mutual.value == pytest.approx(-route.excess.value, rel=1e-9)
    assert route.mutual.value > 0


def test_what_the_chain_does_not_see_is_said() -> None:
    route = chain_route((Region(half_width=0.1, t0=0.2, boost=0.5),), doublings=4)
    assert len(route.notes) == 2
    assert chain_route((Region(half_width=0.1),), doublings=4).notes == ()


def test_a_region_too_small_for_its_neighbours_is_refused() -> None:
    with pytest.raises(InputError, match="smallest"):
        chain_route((Region(half_width=0.0005, x0=-0.9), Region(half_width=0.6, x0=0.1)))


def test_a_chain_stops_when_it_is_told() -> None:
    def stop(_stage: str, fraction: float) -> None:
        if fraction > 0:
            raise Cancelled

    with pytest.raises(Cancelled):
        chain_route(equal_row(1, 0.2, 0.0), report=stop)


# Source: arXiv:0905.4013, common knowledge: growth with l ends once m l > 1.
def test_a_mass_ends_the_growth_with_size_and_none_does_not() -> None:
    layouts = [equal_row(1, h, 0.0) for h in (0.05, 0.1, 0.2, 0.4)]
    heavy = chain_sizes(layouts, mass=20.0, sites=80)
    light = chain_sizes(layouts, mass=0.0, sites=80)
    assert heavy.saturation == pytest.approx(0.05)
    assert heavy.lengths == pytest.approx([0.1, 0.2, 0.4, 0.8])
    last = heavy.change[-1] - heavy.change[-2]
    assert abs(last) < 1e-3
    assert heavy.change[2] - heavy.change[1] < 0.01
    assert light.change[2] - light.change[1] > 0.05  # the fixed ends already hold it back
    assert light.saturation == math.inf


def test_cross_ratios_do_not_see_boosts_of_all() -> None:
    a, b = Region(half_width=0.1, x0=-0.2), Region(half_width=0.15, x0=0.2)
    gap = 0.15
    expected = 0.2 * 0.3 / ((0.2 + gap) * (0.3 + gap))
    assert cross_ratios(a, b) == pytest.approx((expected, expected))
    assert cross_ratios(b, a) == pytest.approx((expected, expected))


def test_touching_regions_have_cross_ratio_one() -> None:
    assert cross_ratios(*equal_row(2, 0.2, 0.0)) == pytest.approx((1.0, 1.0))


def test_times_apart_make_the_two_cross_ratios_differ() -> None:
    u, v = cross_ratios(Region(half_width=0.1, x0=-0.3), Region(half_width=0.1, x0=0.3, t0=0.1))
    assert abs(u - v) > 0.01


def test_chain_mutual_information_is_that_of_its_route() -> None:
    a, b = equal_row(2, 0.25, 0.25)
    eta, value, error = chain_mutual(a, b)
    route = chain_route((a, b), first=48, doublings=4)
    assert eta == pytest.approx((0.5 / 0.75) ** 2)
    assert abs(value - route.mutual.value) < error + route.mutual.error


def test_touching_chain_blocks_have_no_limit() -> None:
    assert math.isnan(chain_mutual(*equal_row(2, 0.25, 0.0))[1])


def test_touching_growth_is_that_of_two_ends() -> None:
    assert touching_growth() == pytest.approx(1 / 3)
    assert touching_growth(2.0) == pytest.approx(1 / 4)


@pytest.fixture(scope="module")
def record_and_parts() -> tuple[MutualRecord, list[MutualRecord]]:
    parts: list[MutualRecord] = []
    with pytest.MonkeyPatch.context() as patch:
        patch.setattr(crossratio, "CURRENT_GAPS", (1.0, 0.5))
        record = mutual_record(
            SETUP, EvidencePlan(realisations=2), stages=Stages(), publish=parts.append
        )
    return record, parts


def test_every_route_has_its_curve_and_its_algebra(
    record_and_parts: tuple[MutualRecord, list[MutualRecord]],
) -> None:
    record, _ = record_and_parts
    names = {(c.kind, c.rule) for c in record.curves}
    rules = ("support", "direct_sum")
    expected = {("chain", ""), ("currents", ""), ("far", "")}
    assert names == expected | {(kind, rule) for kind in ("data", "twin") for rule in rules}
    assert len({c.algebra for c in record.curves}) == 5
    for curve in record.curves:
        assert (np.diff(curve.eta) > 0).all()
        assert curve.value.shape == curve.error.shape == curve.eta.shape


def test_the_last_gap_is_none_and_size_is_kept(
    record_and_parts: tuple[MutualRecord, list[MutualRecord]],
) -> None:
    record, _ = record_and_parts
    assert record.eta[-1] == pytest.approx(1.0)
    assert record.separation[-1] == pytest.approx(0.0, abs=1e-12)
    assert record.lengths == pytest.approx((0.5, 0.5))
    assert record.present == pytest.approx((0.5 / 0.75) ** 2)
    expected = (0.5 / (0.5 + record.separation)) ** 2
    assert record.eta == pytest.approx(expected)


def test_parts_are_published_before_the_end_and_can_be_sent(
    record_and_parts: tuple[MutualRecord, list[MutualRecord]],
) -> None:
    record, parts = record_and_parts
    assert parts[0].curve("chain") is not None
    assert parts[0].curve("data", "support") is None
    assert parts[-1].done == record.done == 2
    here, there = Pipe()
    here.send(record)
    assert there.recv().eta == pytest.approx(record.eta)


def test_data_are_the_pairs_of_the_same_sprinklings(
    record_and_parts: tuple[MutualRecord, list[MutualRecord]],
) -> None:
    record, _ = record_and_parts
    for k in (0, 5, 9):
        layout = with_separation(SETUP.regions(), float(record.separation[k]))
        pairs = [
            compute(replace(SETUP.config(r), regions=layout), stages=Stages()).pairs[0]
            for r in range(2)
        ]
        for rule in ("support", "direct_sum"):
            data = record.curve("data", rule)
            assert data is not None
            values = [getattr(pair, rule) for pair in pairs]
            assert data.value[k] == pytest.approx(np.mean(values), abs=1e-9)
            assert data.error[k] == pytest.approx(np.ptp(values) / 2, abs=1e-9)


def test_one_region_has_no_partner() -> None:
    with pytest.raises(InputError, match="two or more"):
        mutual_record(Setup(region_count=1), EvidencePlan())
