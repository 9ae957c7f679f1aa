"""The harmonic chain against printed values, its conformal limit and its own naive formula."""

from __future__ import annotations

import math

import numpy as np
import pytest
from scipy import linalg

from lozenge_engine.errors import InputError
from lozenge_engine.kernels.chain import (
    block_sites,
    chain_entropies,
    chain_entropy,
    chain_slopes,
    refined_limit,
)

SEVENTHS = [(1 / 7, 2 / 7), (3 / 7, 4 / 7), (5 / 7, 6 / 7)]


# Source: a throw-away computation of the project's own (fixed ends, lattice refined at fixed
# fractions), values to four digits; the limits are K/3 and, for the end block, 1/6.
@pytest.mark.parametrize(
    ("blocks", "first", "low", "high", "limit"),
    [
        ([(0.4, 0.6)], 40, 0.3286, 0.3330, 1 / 3),
        ([(0.2, 0.4), (0.6, 0.8)], 40, 0.6527, 0.6658, 2 / 3),
        (SEVENTHS, 56, 0.9847, 0.9991, 1.0),
        ([(0.0, 0.2)], 40, 0.1598, 0.1662, 1 / 6),
    ],
)
def test_local_slopes_are_those_computed_before(
    blocks: list[tuple[float, float]], first: int, low: float, high: float, limit: float
) -> None:
    slopes = chain_slopes(blocks, first=first, doublings=5).slopes
    assert slopes[0] == pytest.approx(low, abs=2e-4)
    assert slopes[-1] == pytest.approx(high, abs=2e-4)
    assert (np.diff(slopes) > 0).all()
    assert slopes[-1] == pytest.approx(limit, abs=1e-3)


def test_the_middle_block_passes_every_printed_slope() -> None:
    slopes = chain_slopes([(0.4, 0.6)], first=40, doublings=5).slopes
    assert slopes == pytest.approx([0.3286, 0.3310, 0.3322, 0.3328, 0.3330], abs=2e-4)


# Source: J. Phys. A 42 (2009) 504005, arXiv:0905.4013: (c/6)(1 + 1/q) for two ends.
@pytest.mark.parametrize("order", [2.0, 3.0])
def test_renyi_slopes_follow_the_conformal_law(order: float) -> None:
    slopes = chain_slopes([(0.4, 0.6)], first=80, doublings=5, order=order).slopes
    assert slopes[-1] == pytest.approx((1 + 1 / order) / 6, abs=5e-3)


# Source: arXiv:0905.4013: growth ends once the correlation length is resolved; common practice.
def test_a_mass_ends_the_growth_with_the_blocks_length() -> None:
    def growth(mass: float) -> float:
        small, large = [(0.45, 0.55)], [(0.3, 0.7)]
        return chain_entropy(large, sites=640, mass_over_sites=mass / 641) - chain_entropy(
            small, sites=640, mass_over_sites=mass / 641
        )

    assert growth(0.0) > 0.05  # the fixed ends already hold it back
    assert abs(growth(100.0)) < 1e-3


def test_correlators_are_those_of_the_coupling_matrix() -> None:
    """The naive route: X = V**(-1/2)/2, P = V**(1/2)/2, s**2 the eigenvalues of X P."""
    sites, mass = 24, 0.1
    v = (2 + mass**2) * np.eye(sites) - np.eye(sites, k=1) - np.eye(sites, k=-1)
    root = linalg.sqrtm(v).real
    rows = np.r_[4:10, 14:20]
    x, p = linalg.inv(root)[np.ix_(rows, rows)] / 2, root[np.ix_(rows, rows)] / 2
    s = np.sqrt(np.maximum(np.linalg.eigvals(x @ p).real, 0.25 + 1e-15))
    expected = np.sum((s + 0.5) * np.log(s + 0.5) - (s - 0.5) * np.log(s - 0.5))
    found = chain_entropy([(4 / 24, 10 / 24), (14 / 24, 20 / 24)], sites=24, mass_over_sites=mass)
    assert found == pytest.approx(expected, abs=1e-7)


def test_a_pure_chain_shares_as_much_from_either_side() -> None:
    left = chain_entropy([(0.0, 0.3)], sites=60)
    right = chain_entropy([(0.3, 1.0)], sites=60)
    assert left == pytest.approx(right, abs=1e-6)


def test_the_whole_chain_has_no_entropy() -> None:
    assert chain_entropy([(0.0, 1.0)], sites=50) == pytest.approx(0.0, abs=1e-5)


def test_the_mirrored_block_has_the_same_entropy() -> None:
    assert chain_entropy([(0.1, 0.4)], sites=80) == pytest.approx(
        chain_entropy([(0.6, 0.9)], sites=80), rel=1e-9
    )


@pytest.mark.parametrize(
    "blocks", [[(0.1, 0.33)], [(0.4, 0.2)], [(0.2, 0.6), (0.5, 0.8)], [(-0.1, 0.5)], [(0.5, 1.1)]]
)
def test_blocks_that_make_no_sense_are_refused(blocks: list[tuple[float, float]]) -> None:
    with pytest.raises(InputError, match="blocks"):
        block_sites(blocks, sites=40)


def test_too_many_sites_are_refused_with_the_limit() -> None:
    with pytest.raises(InputError, match="6000"):
        chain_entropy([(0.0, 1.0)], sites=7000)
    assert math.isfinite(chain_entropy([(0.0, 0.5)], sites=10))


# Source: J. Phys. A 42 (2009) 504005, arXiv:0905.4013: K/3 for 2 K ends, (c/6)(1 + 1/q) for Renyi.
@pytest.mark.parametrize(
    ("blocks", "first", "order", "limit"),
    [
        ([(0.4, 0.6)], 40, 1.0, 1 / 3),
        ([(0.2, 0.4), (0.6, 0.8)], 40, 1.0, 2 / 3),
        (SEVENTHS, 56, 1.0, 1.0),
        ([(0.0, 0.2)], 40, 1.0, 1 / 6),
        ([(0.45, 0.55)], 40, 1.0, 1 / 3),
        ([(0.4, 0.6)], 40, 2.0, 1 / 4),
        ([(0.4, 0.6)], 40, 3.0, 2 / 9),
    ],
)
def test_extrapolated_slopes_hold_the_limit_within_their_error(
    blocks: list[tuple[float, float]], first: int, order: float, limit: float
) -> None:
    slopes = chain_slopes(blocks, first=first, doublings=5, order=order).slopes
    found = refined_limit(slopes, order=order)
    assert abs(found.value - limit) < found.error
    assert found.error < 2e-4
    assert abs(slopes[-1] - limit) > found.error  # without the extrapolation it is not reached


def test_a_limit_needs_four_values() -> None:
    assert math.isnan(refined_limit(np.array([1.0, 2.0, 3.0])).value)


def test_a_sequence_with_two_powers_is_extrapolated_exactly() -> None:
    n = 10.0 * 2 ** np.arange(5)
    found = refined_limit(0.7 + 3 / n - 5 / n**2)
    assert found.value == pytest.approx(0.7, abs=1e-12)


def test_entropies_of_parts_are_those_of_parts_alone() -> None:
    blocks = [(0.1, 0.3), (0.5, 0.7), (0.8, 0.9)]
    found = chain_entropies(blocks, [(0, 1, 2), (1,), (0, 2)], sites=40, mass_over_sites=0.1)
    alone = [
        chain_entropy(some, sites=40, mass_over_sites=0.1)
        for some in (blocks, blocks[1:2], [blocks[0], blocks[2]])
    ]
    assert found == pytest.approx(alone, rel=1e-12)
