"""Regions: their extents, what may stand together, and refusals that name the way out."""

from __future__ import annotations

import itertools
import math
import re
from dataclasses import replace

import numpy as np
import pytest
from hypothesis import assume, given
from hypothesis import strategies as st

from lozenge_engine.errors import InputError
from lozenge_engine.geometry import (
    PATCH_EXTENT,
    Region,
    check_regions,
    equal_row,
    largest_half_width,
    largest_separation,
    region_letter,
)
from lozenge_engine.placement import gaps, largest_mean_gap, mirror_images, with_separation

CORNERS = {
    "left": Region(x0=-0.7, half_width=0.3),
    "right": Region(x0=0.7, half_width=0.3),
    "future": Region(t0=0.7, half_width=0.3),
    "past": Region(t0=-0.7, half_width=0.3),
}


def refusal(*regions: Region) -> str:
    with pytest.raises(InputError) as caught:
        check_regions(regions)
    return str(caught.value)


def number_after(words: str, text: str) -> float:
    found = re.search(rf"{words} (-?[\d.]+(?:e-?\d+)?)", text)
    assert found, text
    return float(found[1].rstrip("."))


# ------------------------------------------------------------------- one region


@pytest.mark.parametrize("boost", [-1.3, 0.0, 0.4, 2.0])
def test_boost_stretches_u_by_exp_y_and_shrinks_v_by_exp_minus_y(boost: float) -> None:
    e = Region(t0=0.1, x0=-0.2, half_width=0.05, boost=boost).extent
    assert e.u_high - e.u_low == pytest.approx(0.1 * PATCH_EXTENT * math.exp(boost), rel=1e-13)
    assert e.v_high - e.v_low == pytest.approx(0.1 * PATCH_EXTENT * math.exp(-boost), rel=1e-13)


@pytest.mark.parametrize("boost", [-1.3, 0.0, 2.0])
def test_boost_keeps_centre_and_area(boost: float) -> None:
    region = Region(t0=0.1, x0=-0.2, half_width=0.05, boost=boost)
    e = region.extent
    assert (e.u_low + e.u_high) / 2 == pytest.approx((0.1 - 0.2) / math.sqrt(2), abs=1e-15)
    assert (e.v_low + e.v_high) / 2 == pytest.approx((0.1 + 0.2) / math.sqrt(2), abs=1e-15)
    area = (e.u_high - e.u_low) * (e.v_high - e.v_low)
    assert area == pytest.approx(region.area, rel=1e-13)


def test_corners_of_an_unboosted_diamond_are_future_right_past_left() -> None:
    corners = Region(t0=0.1, x0=0.2, half_width=0.3).corners
    expected = [(0.4, 0.2), (0.1, 0.5), (-0.2, 0.2), (0.1, -0.1)]
    np.testing.assert_allclose(corners, expected, atol=1e-15)


@pytest.mark.parametrize("boost", [0.0, 0.7, -1.1])
def test_reach_is_the_distance_in_x_to_the_right_and_left_corner(boost: float) -> None:
    region = Region(t0=0.05, x0=0.2, half_width=0.1, boost=boost)
    assert region.corners[1][1] == pytest.approx(0.2 + region.reach, abs=1e-14)
    assert region.corners[3][1] == pytest.approx(0.2 - region.reach, abs=1e-14)


@pytest.mark.parametrize(
    ("values", "word"),
    [
        ({"half_width": 0.0}, "half_width"),
        ({"half_width": -0.1}, "half_width"),
        ({"half_width": 1.0001}, "half_width"),
        ({"half_width": math.nan}, "half_width"),
        ({"half_width": "0.1"}, "half_width"),
        ({"half_width": True}, "half_width"),
        ({"half_width": 0.1, "t0": math.inf}, "t0"),
        ({"half_width": 0.1, "x0": None}, "x0"),
        ({"half_width": 0.1, "boost": 3.1}, "boost"),
    ],
)
def test_region_refuses_a_value_by_name(values: dict[str, object], word: str) -> None:
    with pytest.raises(InputError, match=f"region {word}"):
        Region(**values)  # type: ignore[arg-type]


def test_letters_run_from_a_to_h() -> None:
    assert "".join(region_letter(k) for k in range(8)) == "ABCDEFGH"


# --------------------------------------------------------- what stands together


@pytest.mark.parametrize("region", CORNERS.values(), ids=CORNERS)
def test_a_region_may_sit_at_a_corner_of_the_patch(region: Region) -> None:
    check_regions((region,))


def test_the_whole_patch_is_a_region() -> None:
    check_regions((Region(half_width=1.0),))


@pytest.mark.parametrize("count", range(2, 9))
def test_touching_regions_are_allowed(count: int) -> None:
    check_regions(equal_row(count, 1.0 / count, 0.0))


@pytest.mark.parametrize("boost", [0.5, -0.5])
def test_touching_boosted_regions_are_allowed(boost: float) -> None:
    a = Region(x0=-0.3, half_width=0.2, boost=boost)
    right = a.extent
    b_half = 0.1
    u0, v0 = right.u_high + b_half * PATCH_EXTENT, right.v_low - b_half * PATCH_EXTENT
    b = Region(t0=(u0 + v0) * PATCH_EXTENT, x0=(u0 - v0) * PATCH_EXTENT, half_width=b_half)
    check_regions((a, b))


@pytest.mark.parametrize("shift", [(0.0, -1e-6), (1e-6, 0.0), (-1e-6, 0.0)])
def test_an_overlap_of_a_millionth_is_refused(shift: tuple[float, float]) -> None:
    a = Region(x0=-0.2, half_width=0.2)
    b = Region(t0=shift[0], x0=0.2 + shift[1], half_width=0.2)
    assert "regions A and B" in refusal(a, b)


def test_timelike_regions_are_refused() -> None:
    assert "spacelike" in refusal(
        Region(t0=-0.4, half_width=0.2), Region(t0=0.4, half_width=0.2, x0=0.05)
    )


def test_the_refusal_names_the_two_regions_that_clash() -> None:
    text = refusal(
        Region(x0=-0.6, half_width=0.1),
        Region(x0=0.0, half_width=0.2),
        Region(x0=0.3, half_width=0.2),
    )
    assert "regions B and C" in text


def test_the_refusal_tells_by_how_much_two_regions_overlap() -> None:
    text = refusal(Region(x0=-0.2, half_width=0.25), Region(x0=0.2, half_width=0.25))
    assert number_after("spacelike by", text) == pytest.approx(0.1, abs=1e-6)


@pytest.mark.parametrize(
    ("a", "b"),
    [
        (Region(x0=-0.2, half_width=0.25), Region(x0=0.2, half_width=0.25)),
        (Region(x0=0.2, half_width=0.25), Region(x0=-0.2, half_width=0.25)),
        (Region(x0=-1 / 3, half_width=1 / 3), Region(x0=0.1, half_width=1 / 7)),
        (Region(x0=-0.4, half_width=0.2, boost=0.3), Region(t0=0.05, x0=-0.1, half_width=0.1)),
        (Region(x0=-0.4, half_width=1 / 6), Region(x0=-0.3, half_width=0.23456789)),
    ],
)
def test_the_centre_that_a_refusal_suggests_is_then_accepted(a: Region, b: Region) -> None:
    check_regions((a, replace(b, x0=number_after("x0 =", refusal(a, b)))))


@pytest.mark.parametrize(
    ("a", "b"),
    [
        (Region(x0=0.6, half_width=0.3), Region(x0=0.7, half_width=0.3)),
        (Region(x0=-0.6, half_width=0.3), Region(x0=-0.7, half_width=0.3)),
    ],
)
def test_a_suggested_centre_never_lies_outside_the_patch(a: Region, b: Region) -> None:
    text = refusal(a, b)
    if "x0 =" in text:
        check_regions((a, replace(b, x0=number_after("x0 =", text))))


@given(
    st.floats(-0.95, 0.95),
    st.floats(-0.95, 0.95),
    st.floats(0.01, 1.0),
    st.floats(-1.5, 1.5),
)
def test_the_half_width_that_a_refusal_suggests_is_then_accepted(
    t0: float, x0: float, half_width: float, boost: float
) -> None:
    assume(abs(t0) + abs(x0) < 0.999)
    region = Region(t0=t0, x0=x0, half_width=half_width, boost=boost)
    try:
        check_regions((region,))
    except InputError as error:
        fit = number_after("to at most", str(error))
        check_regions((replace(region, half_width=fit),))


def test_a_centre_outside_the_patch_is_told_to_move() -> None:
    assert "move its centre" in refusal(Region(t0=0.8, x0=0.5, half_width=0.1))


@pytest.mark.parametrize("count", [0, 9])
def test_none_and_nine_regions_are_refused(count: int) -> None:
    row = tuple(Region(x0=-0.8 + 0.2 * k, half_width=0.05) for k in range(count))
    assert "1 to 8" in refusal(*row)


# ------------------------------------------------------------------ equal rows


@pytest.mark.parametrize(("count", "half", "gap"), [(1, 0.5, 0.0), (2, 0.3, 0.2), (8, 0.1, 0.05)])
def test_an_equal_row_is_centred_with_the_gaps_asked_for(
    count: int, half: float, gap: float
) -> None:
    row = equal_row(count, half, gap)
    assert sum(r.x0 for r in row) == pytest.approx(0.0, abs=1e-14)
    np.testing.assert_allclose(gaps(row), [gap] * (count - 1), atol=1e-14)


@given(st.integers(2, 8), st.floats(0.01, 0.5), st.floats(0.0, 1.0))
def test_sizes_that_a_refused_row_suggests_are_then_accepted(
    count: int, half: float, gap: float
) -> None:
    try:
        check_regions(equal_row(count, half, gap))
    except InputError as error:
        text = str(error)
        offers = 0
        if "separation to at most" in text:
            check_regions(equal_row(count, half, number_after("separation to at most", text)))
            offers += 1
        if "half_width to at most" in text:
            check_regions(equal_row(count, number_after("half_width to at most", text), gap))
            offers += 1
        assert offers or text.endswith("lower both.")


@pytest.mark.parametrize("count", range(2, 9))
@pytest.mark.parametrize("half", [0.01, 0.1, 1 / 17])
def test_the_largest_separation_fits_and_a_little_more_does_not(count: int, half: float) -> None:
    room = largest_separation(count, half)
    check_regions(equal_row(count, half, room))
    with pytest.raises(InputError):
        equal_row(count, half, room + 1e-9)


@pytest.mark.parametrize("count", range(1, 9))
@pytest.mark.parametrize("gap", [0.0, 0.1, 1 / 7])
def test_the_largest_half_width_fits_and_a_little_more_does_not(count: int, gap: float) -> None:
    half = largest_half_width(count, gap)
    check_regions(equal_row(count, half, gap))
    with pytest.raises(InputError):
        equal_row(count, half + 1e-9, gap)


@pytest.mark.parametrize("count", [0, 9, 2.0, True, None])
def test_a_row_of_a_wrong_count_is_refused(count: object) -> None:
    with pytest.raises(InputError, match="region_count"):
        equal_row(count, 0.1, 0.1)  # type: ignore[arg-type]


@pytest.mark.parametrize("gap", [-1e-9, math.nan, math.inf])
def test_a_row_at_a_wrong_separation_is_refused(gap: float) -> None:
    with pytest.raises(InputError, match="separation"):
        equal_row(2, 0.1, gap)


# ------------------------------------------------------------- gaps of a list

UNEVEN = (
    Region(x0=0.5, half_width=0.1),
    Region(x0=-0.6, half_width=0.15),
    Region(t0=0.02, x0=-0.1, half_width=0.2, boost=0.1),
)


@pytest.mark.parametrize("separation", [0.05, 0.15, 0.2])
def test_separation_is_the_mean_gap_of_a_list(separation: float) -> None:
    assert np.mean(gaps(with_separation(UNEVEN, separation))) == pytest.approx(separation)


def test_separation_scales_all_gaps_of_a_list_alike() -> None:
    old, new = np.array(gaps(UNEVEN)), np.array(gaps(with_separation(UNEVEN, 0.1)))
    np.testing.assert_allclose(new / old, (new / old)[0], rtol=1e-12)


def test_separation_keeps_sizes_times_boosts_and_letters() -> None:
    for old, new in zip(UNEVEN, with_separation(UNEVEN, 0.1), strict=True):
        assert replace(new, x0=old.x0) == old


def test_separation_keeps_the_middle_of_the_row() -> None:
    def middle(regions: tuple[Region, ...]) -> float:
        return max(r.x0 + r.reach for r in regions) + min(r.x0 - r.reach for r in regions)

    assert middle(with_separation(UNEVEN, 0.03)) == pytest.approx(middle(UNEVEN), abs=1e-14)


def test_touching_regions_are_moved_apart_equally() -> None:
    moved = with_separation(equal_row(4, 0.2, 0.0), 0.05)
    np.testing.assert_allclose(gaps(moved), 0.05, atol=1e-13)


def test_scaling_the_gaps_of_one_region_is_refused() -> None:
    with pytest.raises(InputError, match="add a region"):
        with_separation((Region(half_width=0.1),), 0.1)


@pytest.mark.parametrize("separation", [-0.1, math.nan])
def test_scaling_gaps_to_a_wrong_separation_is_refused(separation: float) -> None:
    with pytest.raises(InputError, match="separation"):
        with_separation(UNEVEN, separation)


@pytest.mark.parametrize(
    "regions",
    [
        UNEVEN,
        equal_row(3, 0.2, 0.0),
        # At different times these need a gap: none below 0.6 is spacelike.
        (Region(t0=-0.3, x0=-0.3, half_width=0.1), Region(t0=0.3, x0=0.5, half_width=0.1)),
    ],
    ids=["uneven", "row", "at different times"],
)
def test_the_largest_mean_gap_fits_and_is_no_smaller_than_the_present_one(
    regions: tuple[Region, ...],
) -> None:
    room = largest_mean_gap(regions)
    check_regions(with_separation(regions, room))
    assert room >= np.mean(gaps(regions)) - 1e-9


def test_a_single_region_has_no_mean_gap() -> None:
    assert largest_mean_gap((Region(half_width=0.3),)) == 0.0


# --------------------------------------------------------------- mirror images


@pytest.mark.parametrize(
    ("regions", "count"),
    [
        ((Region(half_width=0.5),), 1),
        ((Region(half_width=0.3, boost=0.5),), 2),
        ((Region(x0=0.2, half_width=0.3),), 2),
        ((Region(t0=0.2, half_width=0.3),), 2),
        ((Region(t0=0.2, x0=0.1, half_width=0.3),), 4),
        (equal_row(3, 0.2, 0.1), 1),
        ((Region(x0=-0.5, half_width=0.2), Region(x0=0.5, half_width=0.1)), 2),
    ],
)
def test_mirror_images_are_counted_once_each(regions: tuple[Region, ...], count: int) -> None:
    assert len(mirror_images(regions)) == count


def test_the_first_mirror_image_is_the_layout_itself() -> None:
    assert mirror_images(UNEVEN)[0] == UNEVEN


def test_mirror_images_reflect_the_extents_exactly() -> None:
    region = Region(t0=0.2, x0=0.1, half_width=0.2, boost=0.4)
    e = region.extent
    found = {tuple(np.round(image[0].extent, 12)) for image in mirror_images((region,))}
    flipped = {  # x -> -x exchanges u and v; t -> -t sends (u, v) to (-v, -u)
        (e.u_low, e.u_high, e.v_low, e.v_high),
        (e.v_low, e.v_high, e.u_low, e.u_high),
        (-e.v_high, -e.v_low, -e.u_high, -e.u_low),
        (-e.u_high, -e.u_low, -e.v_high, -e.v_low),
    }
    assert found == {tuple(np.round(x, 12)) for x in flipped}


def test_every_mirror_image_is_allowed_with_the_same_gaps() -> None:
    for image in mirror_images(UNEVEN):
        check_regions(image)
        assert sorted(gaps(image)) == pytest.approx(sorted(gaps(UNEVEN)))


def test_gaps_of_spacelike_regions_are_never_negative() -> None:
    rng = np.random.default_rng(5)
    checked = 0
    for _ in range(400):
        t, x, h = rng.uniform(-0.5, 0.5, 2), rng.uniform(-0.8, 0.8, 2), rng.uniform(0.02, 0.2, 2)
        boost = rng.uniform(-1, 1, 2)
        pair = tuple(
            Region(t0=t[k].item(), x0=x[k].item(), half_width=h[k].item(), boost=boost[k].item())
            for k in (0, 1)
        )
        try:
            check_regions(pair)
        except InputError:
            continue
        checked += 1
        assert min(gaps(pair)) >= -1e-12
    assert checked > 30


def test_spacelike_is_the_relation_between_all_pairs_of_points() -> None:
    """The brute-force definition: no point of one region precedes a point of the other."""
    rng = np.random.default_rng(6)
    agreed = {True: 0, False: 0}
    for _ in range(300):
        a = Region(t0=0.0, x0=-0.3, half_width=0.15, boost=0.3)
        b = Region(
            t0=rng.uniform(-0.3, 0.3), x0=rng.uniform(-0.3, 0.5), half_width=0.12, boost=-0.4
        )
        precedes = False
        for (t, x), (s, y) in itertools.product(a.corners, b.corners):
            precedes |= abs(t - s) > abs(x - y) + 1e-9
        try:
            check_regions((a, b))
            spacelike = True
        except InputError as error:
            if "regions A and B" not in str(error):
                continue
            spacelike = False
        assert spacelike != precedes
        agreed[spacelike] += 1
    assert min(agreed.values()) > 20
