"""Sprinklings that are the same everywhere, and what is refused of given points."""

from __future__ import annotations

import hashlib
import math
import struct

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy import stats

from lozenge_engine.errors import InputError
from lozenge_engine.geometry import PATCH_EXTENT, Region, equal_row
from lozenge_engine.kernels.points import (
    SLAB_MEAN,
    Coordinates,
    from_t_x,
    golden_lattice,
    in_natural_order,
    membership,
    points_hash,
    scrambled_sobol,
    sprinkle,
)

GOLDEN = [
    (
        {"density": 100.0, "seed": 1},
        186,
        ["-0x1.65b554bc9c733p-1", "-0x1.655164261cfa4p-1", "-0x1.629163fe96f4fp-1"],
        ["-0x1.47c4c1a5b58e6p-2", "0x1.5973b86c723a2p-3", "0x1.8fd205ee863dcp-5"],
        "b550a17f8a25c02941352db220f1d6251878bb23dfdc5c39fe556dcdcea0b4cc",
    ),
    (
        {"density": 1000.0, "seed": 2**53 - 1, "realisation": 7},
        2071,
        ["-0x1.69feefad1aed5p-1", "-0x1.6956f4c7dab86p-1", "-0x1.6942b92c79390p-1"],
        ["-0x1.4753011c21ddap-3", "0x1.a17d3b1f539dfp-4", "0x1.92e5d20d781fep-2"],
        "0cb8d583ef325bbabe324d6c4b9fcdfccd2a832257c710ac5ddca6046e4b788d",
    ),
    (
        {"density": 333.3, "seed": 42, "fixed": True},
        667,
        ["-0x1.6935008cdaf80p-1", "-0x1.67c450caa65e9p-1", "-0x1.670defeb42843p-1"],
        ["0x1.5b551e24f7269p-2", "-0x1.57bea4d5c2df1p-1", "0x1.6c130fc5605fbp-4"],
        "61bfbebf98ee20fe0de6539f0f364911617ab9d9c9b5ea4c9f3984db21b54734",
    ),
]


def as_set(points: Coordinates) -> set[tuple[float, float]]:
    return set(zip(points.u.tolist(), points.v.tolist(), strict=True))


# ------------------------------------------------------------------ repeatable


@pytest.mark.parametrize(("asked", "count", "u", "v", "sha256"), GOLDEN)
def test_a_sprinkling_has_the_bits_written_here(
    asked: dict[str, float], count: int, u: list[str], v: list[str], sha256: str
) -> None:
    points = sprinkle(**asked)  # type: ignore[arg-type]
    assert points.u.size == count
    assert [x.hex() for x in points.u[:3].tolist()] == u
    assert [x.hex() for x in points.v[:3].tolist()] == v
    assert points_hash(points) == sha256


@settings(max_examples=60)
@given(
    st.integers(0, 2**53 - 1),
    st.floats(1.0, 400.0),
    st.floats(1.0, 400.0),
    st.integers(0, 10**9),
    st.booleans(),
)
def test_raising_the_density_only_adds_elements(
    seed: int, one: float, other: float, realisation: int, fixed: bool
) -> None:
    low, high = sorted((one, other))
    few = sprinkle(density=low, seed=seed, realisation=realisation, fixed=fixed)
    many = sprinkle(density=high, seed=seed, realisation=realisation, fixed=fixed)
    assert as_set(few) <= as_set(many)


@pytest.mark.parametrize("density", [31.9, 32.0, 32.1, 64.0, 320.0])
def test_nesting_holds_across_the_slabs_of_the_density_axis(density: float) -> None:
    assert SLAB_MEAN == 64
    few = sprinkle(density=density, seed=9)
    assert as_set(few) <= as_set(sprinkle(density=density + 1e-9, seed=9))


@given(st.floats(1.0, 500.0), st.integers(0, 2**53 - 1))
@settings(max_examples=60)
def test_a_fixed_count_is_exact(density: float, seed: int) -> None:
    assert sprinkle(density=density, seed=seed, fixed=True).u.size == round(2 * density)


@pytest.mark.parametrize("other", [{"seed": 8}, {"realisation": 1}, {"seed": 7 + 2**32}])
def test_another_seed_or_realisation_shares_no_element(other: dict[str, int]) -> None:
    first = sprinkle(density=300.0, seed=7)
    second = sprinkle(**{"density": 300.0, "seed": 7, **other})  # type: ignore[arg-type]
    assert not as_set(first) & as_set(second)


# ------------------------------------------------------------------ statistics
# Bounds are 5 standard errors: one false alarm in 1.7 million, and the seeds are fixed.

COUNTS = np.array([sprinkle(density=40.0, seed=11, realisation=k).u.size for k in range(2000)])


def test_poisson_counts_have_the_poisson_mean() -> None:
    assert COUNTS.mean() == pytest.approx(80.0, abs=5 * math.sqrt(80.0 / COUNTS.size))


def test_poisson_counts_have_the_poisson_variance() -> None:
    # The variance of a sample variance of a Poisson law: (2 mean^2 + mean)/R.
    bound = 5 * math.sqrt((2 * 80.0**2 + 80.0) / COUNTS.size)
    assert COUNTS.var(ddof=1) == pytest.approx(80.0, abs=bound)


def test_counts_of_successive_realisations_are_uncorrelated() -> None:
    r = np.corrcoef(COUNTS[:-1], COUNTS[1:])[0, 1]
    assert abs(r) < 5 / math.sqrt(COUNTS.size)


def test_counts_of_successive_density_steps_are_uncorrelated() -> None:
    low = np.array([sprinkle(density=20.0, seed=11, realisation=k).u.size for k in range(2000)])
    r = np.corrcoef(low, COUNTS - low)[0, 1]
    assert abs(r) < 5 / math.sqrt(COUNTS.size)


@pytest.mark.parametrize("axis", [0, 1])
def test_coordinates_are_uniform(axis: int) -> None:
    values = sprinkle(density=20_000.0, seed=3)[axis]
    p = stats.kstest(values, stats.uniform(-PATCH_EXTENT, 2 * PATCH_EXTENT).cdf).pvalue
    assert p > 1e-5  # false alarm 1e-5, seed fixed


def test_u_and_v_are_independent() -> None:
    points = sprinkle(density=20_000.0, seed=3)
    counts = np.histogram2d(points.u, points.v, bins=10)[0]
    assert stats.chisquare(counts.ravel()).pvalue > 1e-5


def test_elements_lie_in_the_patch_and_in_natural_order() -> None:
    points = sprinkle(density=5000.0, seed=1)
    assert np.all(np.diff(points.u) > 0)
    assert max(np.abs(points.u).max(), np.abs(points.v).max()) <= PATCH_EXTENT


# ----------------------------------------------------------------- other sets


@pytest.mark.parametrize("count", [100, 1000, 5000])
def test_the_golden_lattice_has_about_the_number_asked_for(count: int) -> None:
    assert abs(golden_lattice(count).u.size - count) <= 2 * count ** (1 / 3)


def test_offsets_of_the_golden_lattice_give_other_points() -> None:
    one = golden_lattice(500)
    assert not as_set(one) & as_set(golden_lattice(500, offset=(0.6, 0.1)))


def test_a_sobol_set_has_a_power_of_two_points_inside_the_patch() -> None:
    points = scrambled_sobol(8, seed=1)
    assert points.u.size == 256
    assert np.abs(np.concatenate(points)).max() <= PATCH_EXTENT


# -------------------------------------------------------------- given points

T = np.array([0.0, 0.1, -0.2, 0.3])
X = np.array([0.5, 0.02, 0.21, -0.35])


def test_light_cone_coordinates_of_given_points() -> None:
    points = from_t_x(T, X)
    order = np.argsort(T + X)
    np.testing.assert_allclose(points.u, (T + X)[order] / math.sqrt(2), atol=1e-15)
    np.testing.assert_allclose(points.v, (T - X)[order] / math.sqrt(2), atol=1e-15)


@pytest.mark.parametrize("bad", [math.nan, math.inf, -math.inf])
@pytest.mark.parametrize("name", ["t", "x"])
def test_what_is_not_finite_is_refused_with_its_row(bad: float, name: str) -> None:
    columns = {"t": T.copy(), "x": X.copy()}
    columns[name][2] = bad
    with pytest.raises(InputError, match=rf"row 3: given {name} = "):
        from_t_x(columns["t"], columns["x"])


def test_a_point_outside_is_refused_with_its_row() -> None:
    with pytest.raises(InputError, match=r"row 2: .*1 outside the patch"):
        from_t_x(np.array([0.0, 0.7, 0.1]), np.array([0.1, 0.31, 0.0]))


def test_the_corners_of_the_patch_are_inside() -> None:
    assert from_t_x(np.array([0.0, 0.9, 0.01]), np.array([1.0, -0.1, 0.2])).u.size == 3


@pytest.mark.parametrize(
    ("u", "v", "name"), [((0.1, 0.1, 0.2), (0, 1, 2), "u"), ((0, 1, 2), (0.3, 0.1, 0.3), "v")]
)
def test_two_points_that_share_a_coordinate_are_refused(
    u: tuple[float, ...], v: tuple[float, ...], name: str
) -> None:
    with pytest.raises(InputError, match=f"2 points that share {name}"):
        in_natural_order(np.array(u, dtype=float), np.array(v, dtype=float))


def test_zero_and_minus_zero_are_the_same_coordinate() -> None:
    with pytest.raises(InputError, match="share u"):
        in_natural_order(np.array([0.0, -0.0]), np.array([0.1, 0.2]))


# ---------------------------------------------------------------- membership


def test_membership_is_the_naive_formula() -> None:
    points = sprinkle(density=500.0, seed=4)
    t, x = (points.u + points.v) / math.sqrt(2), (points.u - points.v) / math.sqrt(2)
    naive = np.full(t.size, -1)
    for k, centre in enumerate((-0.5, 0.0, 0.5)):
        naive[np.abs(t) + np.abs(x - centre) <= 0.2] = k
    assert np.array_equal(membership(points, equal_row(3, 0.2, 0.1)), naive)


def test_the_whole_patch_holds_every_element() -> None:
    points = sprinkle(density=500.0, seed=4)
    assert not membership(points, (Region(half_width=1.0),)).any()


def test_points_on_the_edge_of_a_region_belong_to_it() -> None:
    corners = np.array(Region(half_width=0.25, x0=0.1).corners)[::2]
    points = from_t_x(corners[:, 0], corners[:, 1] + [0.0, 1e-12])
    assert (membership(points, (Region(half_width=0.25 + 1e-11, x0=0.1),)) == 0).all()


@pytest.mark.parametrize("held", [0, 1])
def test_a_region_with_fewer_than_two_elements_is_refused_by_letter(held: int) -> None:
    t = np.array([-0.01, 0.015, 0.002][: 2 + held])
    x = np.array([-0.31, -0.29, 0.3][: 2 + held])
    with pytest.raises(InputError, match=f"region B: given {held} elements"):
        membership(from_t_x(t, x), equal_row(2, 0.2, 0.1))


# ---------------------------------------------------------------------- hash


def test_the_hash_is_of_little_endian_pairs_in_natural_order() -> None:
    points = from_t_x(T, X)
    data = b"".join(struct.pack("<2d", u, v) for u, v in zip(*points, strict=True))
    assert points_hash(points) == hashlib.sha256(data).hexdigest()


def test_the_hash_does_not_depend_on_the_order_of_the_rows() -> None:
    assert points_hash(from_t_x(T, X)) == points_hash(from_t_x(T[::-1], X[::-1]))


def test_the_hash_sees_the_last_bit() -> None:
    moved = T.copy()
    moved[1] = np.nextafter(moved[1], 1.0)
    assert points_hash(from_t_x(T, X)) != points_hash(from_t_x(moved, X))
