"""Campaign plans and their layout: what is refused, what is shared, what is left out."""

from __future__ import annotations

import math
from typing import Any

import pytest

from lozenge_engine.config import MODES, PointSource, Rule, Setup
from lozenge_engine.design import child_seed, design, identity
from lozenge_engine.errors import InputError
from lozenge_engine.geometry import Region
from lozenge_engine.plan import Axis, CampaignPlan, Target
from lozenge_engine.realisation import realise

ONE = Setup(region_count=1, half_width=0.2)
LADDER = Axis(name="density", values=(1000.0, 2000.0, 4000.0))


def plan(*axes: Axis, **changes: Any) -> CampaignPlan:
    return CampaignPlan(axes=axes or (LADDER,), **changes)


@pytest.mark.parametrize(
    ("name", "values", "wrong"),
    [
        ("density", (math.nan,), "density"),
        ("density", (0.0,), "density"),
        ("half_width", (-0.1,), "half_width"),
        ("separation", ("wide",), "separation"),
        ("order", (0.2,), "order"),
        ("region_count", (2.0,), "region_count"),
        ("region_count", (9,), "region_count"),
        ("truncation_mode", ("best",), "two_stages"),
        ("density", (100.0, 100.0), "more than once"),
        ("density", (), "0 values"),
        ("density", tuple(range(1, 62)), "61 values"),
        ("phase", (1.0,), "one of them"),
    ],
)
def test_axes_that_make_no_sense_are_refused(name: Any, values: Any, wrong: str) -> None:
    with pytest.raises(InputError, match=wrong):
        Axis(name=name, values=values)


@pytest.mark.parametrize("error", [math.nan, -0.01, 0.0, math.inf, True, "small"])
def test_a_target_needs_an_error_above_zero(error: Any) -> None:
    with pytest.raises(InputError, match="target error"):
        Target(quantity="slope", error=error)


@pytest.mark.parametrize(
    "changes",
    [
        {"axes": ()},
        {"axes": (LADDER, LADDER)},
        {"axes": (LADDER, Axis(name="mass", values=(0.0,)), Axis(name="order", values=(1.0,)))},
        {"placements": ()},
        {"placements": ((0.0, 0.1), (0.0, 0.1))},
        {"placements": ((0.0, math.nan),)},
        {"realisations": 0},
        {"realisations": 2.0},
        {"budget": 0.0},
        {"budget": math.nan},
        {"smallest_region": -1},
    ],
)
def test_plans_that_make_no_sense_are_refused(changes: dict[str, Any]) -> None:
    with pytest.raises(InputError):
        CampaignPlan(**{"axes": (LADDER,)} | changes)


def test_seeds_of_realisations_differ_and_do_not_depend_on_regions() -> None:
    seeds = {
        child_seed(7, kind=kind, density=density, realisation=r)
        for kind in ("poisson", "fixed")
        for density in (1000.0, 1001.0)
        for r in range(100)
    }
    assert len(seeds) == 400
    assert all(0 <= seed < 2**53 for seed in seeds)


def test_the_seed_of_a_realisation_is_the_same_everywhere() -> None:
    # First 64 bits of: printf '[1,"poisson",1000.0,0]' | sha256sum; the upper 53 of them count.
    first = 0x2FDDC7BAB48877F7
    assert child_seed(1, kind="poisson", density=1000.0, realisation=0) == first >> 11


def test_regions_rules_masses_and_orders_share_their_sprinklings() -> None:
    for axis in (
        Axis(name="half_width", values=(0.1, 0.2)),
        Axis(name="mass", values=(0.0, 1.0)),
        Axis(name="region_count", values=(1, 2)),
        Axis(name="truncation_mode", values=("two_stages", "equal_share")),
        Axis(name="alpha", values=(1.0, 2.0)),
        Axis(name="order", values=(1.0, 2.0)),
    ):
        layout = design(ONE, plan(axis))
        assert len(layout.cells) == 2, axis
        assert len(layout.sprinklings) == 1, axis


def test_every_density_has_sprinklings_of_its_own() -> None:
    layout = design(ONE, plan(LADDER, Axis(name="region_count", values=(1, 2, 3))))
    assert [s.cells for s in layout.sprinklings] == [(0, 1, 2), (3, 4, 5), (6, 7, 8)]


def test_cells_that_share_a_sprinkling_are_paired() -> None:
    layout = design(ONE, plan(Axis(name="order", values=(1.0, 2.0))))
    record = realise(layout, 0, 0)
    one, two = (sample.elements for sample in record.samples)
    assert (one == two).all()


def test_a_half_width_axis_scales_sizes_and_gaps_together() -> None:
    setup = Setup(region_count=2, half_width=0.2, separation=0.1)
    layout = design(setup, plan(Axis(name="half_width", values=(0.1, 0.2))))
    small, large = (cell.config.regions for cell in layout.cells)
    assert small[0].half_width == pytest.approx(0.1)
    assert (small[1].x0 - small[0].x0) * 2 == pytest.approx(large[1].x0 - large[0].x0)


def test_a_half_width_axis_beside_a_separation_axis_leaves_the_gap_alone() -> None:
    setup = Setup(region_count=2, half_width=0.2, separation=0.1)
    axes = (Axis(name="half_width", values=(0.1,)), Axis(name="separation", values=(0.3,)))
    a, b = design(setup, plan(*axes)).cells[0].config.regions
    assert b.x0 - a.x0 - 0.2 == pytest.approx(0.3)


def test_a_half_width_axis_scales_a_list_by_its_smallest_region() -> None:
    regions = (Region(x0=-0.4, half_width=0.2), Region(x0=0.2, half_width=0.1))
    setup = Setup(region_list=regions, separation=0.3)
    a, b = design(setup, plan(Axis(name="half_width", values=(0.05,)))).cells[0].config.regions
    assert (a.half_width, b.half_width) == pytest.approx((0.1, 0.05))
    assert (a.x0, b.x0) == pytest.approx((-0.2, 0.1))


def test_placements_are_cells_of_their_own_and_mirror_images_are_not() -> None:
    layout = design(ONE, plan(placements=((0.0, 0.0), (0.0, 0.4), (0.3, 0.2))))
    assert [cell.placement for cell in layout.cells] == [0, 1, 2] * 3
    assert [len(cell.layouts) for cell in layout.cells[:3]] == [1, 2, 4]


def test_points_that_do_not_fit_are_left_out_by_name() -> None:
    setup = Setup(region_count=2, half_width=0.3, separation=0.1)
    layout = design(setup, plan(Axis(name="separation", values=(0.1, 0.5, 0.9, 1.5))))
    assert len(layout.cells) == 2
    assert [text.split(":")[0] for text in layout.left_out] == ["separation 0.9", "separation 1.5"]


def test_masses_beyond_the_density_are_left_out_by_name() -> None:
    axes = (LADDER, Axis(name="mass", values=(0.0, 10.0)))
    layout = design(ONE, plan(*axes))
    assert [text.split(":")[0] for text in layout.left_out] == ["density 1000, mass 10"]


def test_placements_that_leave_the_patch_are_left_out_by_name() -> None:
    layout = design(ONE, plan(placements=((0.0, 0.0), (0.0, 0.9))))
    assert len(layout.cells) == 3
    assert len(layout.left_out) == 3
    assert "placement 0, 0.9" in layout.left_out[0]


def test_a_plan_of_which_nothing_fits_is_refused() -> None:
    with pytest.raises(InputError, match="at least one point"):
        design(ONE, plan(Axis(name="mass", values=(20.0, 30.0))))


def test_imported_points_are_refused() -> None:
    own = Setup(points=PointSource(kind="file", file="a.csv", sha256="0" * 64))
    with pytest.raises(InputError, match="imported"):
        design(own, plan(Axis(name="separation", values=(0.1,))))


def test_an_axis_without_effect_is_refused() -> None:
    listed = Setup(region_list=(Region(half_width=0.2),))
    with pytest.raises(InputError, match="row"):
        design(listed, plan(Axis(name="region_count", values=(1, 2))))
    custom = Setup(truncation_mode="custom", patch_rule=Rule(), region_rule=Rule())
    with pytest.raises(InputError, match="alpha"):
        design(custom, plan(Axis(name="alpha", values=(1.0, 2.0))))


def test_every_named_mode_can_be_an_axis() -> None:
    layout = design(
        ONE.with_(points=PointSource(density=300.0)),
        plan(Axis(name="truncation_mode", values=tuple(MODES))),
    )
    assert [p.values["truncation_mode"] for p in layout.points] == list(MODES)


def test_what_the_samples_do_not_depend_on_does_not_change_the_identity() -> None:
    same = identity(ONE, plan())
    assert identity(ONE, plan(realisations=7, budget=5.0, smallest_region=3)) == same
    assert identity(ONE, plan(target=Target(quantity="slope", error=0.1))) == same
    assert identity(ONE.with_(mass=1.0), plan()) != same
    assert identity(ONE, plan(placements=((0.0, 0.1),))) != same
    assert identity(ONE.with_(points=PointSource(seed=2)), plan()) != same


def test_the_abscissa_is_the_mean_log_of_length_over_discreteness() -> None:
    cell = design(ONE, plan()).cells[0]
    assert cell.x == pytest.approx(math.log(0.4 * math.sqrt(1000)))
    assert cell.elements == pytest.approx(2 * 0.2**2 * 1000)


def test_a_realisation_is_the_same_to_the_bit_again() -> None:
    layout = design(ONE, plan(Axis(name="density", values=(300.0,))))
    one, two = realise(layout, 0, 3), realise(layout, 0, 3)
    assert one.seed == two.seed
    assert one.samples[0].union_support == two.samples[0].union_support
    assert realise(layout, 0, 4).samples[0].union_support != one.samples[0].union_support


def test_the_ordering_fraction_is_near_its_known_mean() -> None:
    # 1/2 in a sprinkled 1+1 diamond: the d = 2 value of the Myrheim-Meyer relation.
    layout = design(ONE, plan(Axis(name="density", values=(300.0,))))
    fractions = [realise(layout, 0, r).ordering_fraction for r in range(20)]
    assert sum(fractions) / 20 == pytest.approx(0.5, abs=0.02)
