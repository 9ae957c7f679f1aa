"""Checks of the cut state, pairs of elements and single modes, each against the naive formula."""

from __future__ import annotations

import itertools
import math
from functools import cache
from typing import NamedTuple

import numpy as np
import pytest
from tests.outside.dense import causal_matrix, retarded

from lozenge_engine.errors import Cancelled
from lozenge_engine.geometry import PATCH_EXTENT
from lozenge_engine.kernels import pairs, state
from lozenge_engine.kernels.gaussian import restricted
from lozenge_engine.kernels.laws import root_count_cut
from lozenge_engine.kernels.modes import Modes, certified_modes
from lozenge_engine.kernels.modeshape import (
    aligned,
    anchored,
    block_shares,
    diamond_mode,
    lifted_pairs,
    overlaps,
    splitting,
)
from lozenge_engine.kernels.order import MassiveCommutator, MasslessCommutator
from lozenge_engine.kernels.points import Coordinates, sprinkle

EPS = float(np.finfo(float).eps)


class Cut(NamedTuple):
    """A sprinkling, its kept modes, and W = R + i Delta/2 and A as dense matrices."""

    points: Coordinates
    modes: Modes
    factor: np.ndarray
    r: np.ndarray
    delta: np.ndarray
    a: np.ndarray


@cache
def cut() -> Cut:
    """300 elements with the default cut of the first stage."""
    points = sprinkle(density=150.0, seed=3, fixed=True)
    operator = MasslessCommutator(points.u, points.v)
    found, certificate = certified_modes(operator, floor=root_count_cut(operator.size))
    assert certificate.met
    factor = restricted(found.values, found.vectors, np.arange(operator.size))
    c = causal_matrix(*points)
    turned = np.empty_like(factor)
    turned[:, 0::2], turned[:, 1::2] = factor[:, 1::2], -factor[:, 0::2]
    delta = turned @ factor.T  # F J F^T with J = (0, -1; 1, 0) on each pair
    return Cut(points, found, factor, factor @ factor.T / 2, delta, (c - c.T) / 2)


def test_rows_of_the_commutator_are_summed_exactly_on_small_sets() -> None:
    rows = state.row_norms(MasslessCommutator(*cut().points))
    assert rows.exact
    np.testing.assert_allclose(rows.values, np.sum(cut().a ** 2, axis=1), rtol=1e-13)


def test_rows_of_a_massive_commutator_are_those_of_its_green_function() -> None:
    u, v = cut().points
    g = retarded(causal_matrix(u, v), mass=2.0, density=150.0)
    rows = state.row_norms(MassiveCommutator(u, v, mass=2.0, density=150.0))
    np.testing.assert_allclose(rows.values, np.sum((g - g.T) ** 2, axis=1), rtol=1e-10)


def test_rows_of_large_sets_are_estimated_without_bias(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(state, "EXACT_ROWS", 100)
    rows = state.row_norms(MasslessCommutator(*cut().points))
    assert not rows.exact
    # The total is a quadratic form of signs: variance 2 (||M||^2 - sum M_ii^2) a probe, M = A^T A;
    # five standard errors, one false alarm in a million.
    m = cut().a.T @ cut().a
    error = math.sqrt(2 * (np.sum(m**2) - np.sum(np.diag(m) ** 2)) / state.PROBES)
    assert abs(rows.values.sum() - np.trace(m)) < 5 * error
    assert error < 0.1 * np.trace(m)


def test_what_the_cut_leaves_of_each_row_is_the_difference_of_the_squares() -> None:
    kept = state.kept_row_norms(cut().modes.values, cut().modes.vectors)
    left = np.sum(cut().a ** 2, axis=1) - kept
    dense = np.sum((cut().a - cut().delta) ** 2, axis=1)
    np.testing.assert_allclose(left, dense, atol=1e-9 * float(np.sum(cut().a ** 2)))


def projected(vectors: np.ndarray) -> state.Projected:
    """The kept space, or one that is meant to be it."""
    operator = MasslessCommutator(*cut().points)
    return state.projected_state(operator, cut().modes.values, vectors, residual=1e-9)


def test_ends_of_w_are_those_of_the_dense_matrix() -> None:
    found = state.positivity(projected(cut().modes.vectors))
    values = np.linalg.eigvalsh(cut().r + 0.5j * cut().delta)
    assert found.highest == pytest.approx(values[-1], rel=1e-12)
    assert abs(found.lowest) <= found.tolerance
    assert abs(values[0]) <= found.tolerance


def test_an_uncut_commutator_beside_a_cut_w_is_not_positive() -> None:
    # Negative control: what the check is there to see.
    lowest = float(np.linalg.eigvalsh(cut().r + 0.5j * cut().a)[0])
    assert lowest < -0.1


def test_the_whole_patch_is_pure() -> None:
    found = state.purity(projected(cut().modes.vectors))
    assert found.worst <= found.tolerance < 1e-6
    assert found.entropy < 1e-6


def test_vectors_that_are_no_modes_are_seen() -> None:
    # Negative control: one vector turned out of the kept space by a hundredth.
    vectors = cut().modes.vectors.copy()
    vectors[:, 0] += 0.01 * np.random.default_rng(3).standard_normal(300) / math.sqrt(300)
    wrong = projected(vectors)
    positive, pure = state.positivity(wrong), state.purity(wrong)
    assert pure.worst > 10 * pure.tolerance
    assert positive.lowest < -10 * positive.tolerance


def test_a_state_without_modes_is_pure_and_positive() -> None:
    operator = MasslessCommutator(*cut().points)
    none = state.projected_state(operator, np.empty(0), np.empty((300, 0)), residual=0.0)
    assert state.purity(none) == state.Purity(0.0, 0.0, 0.0)
    assert state.positivity(none) == state.Positivity(0.0, 0.0, 0.0)


def test_pairs_are_those_of_the_dense_matrix() -> None:
    u, v = cut().points
    rows = np.arange(0, 300, 7)
    found = pairs.pair_values(cut().factor[rows], u[rows], v[rows], shortest=0.05, longest=0.4)
    k = 0
    for i, j in itertools.combinations(rows, 2):
        du, dv = u[j] - u[i], v[j] - v[i]
        assert found.value[k] == pytest.approx(cut().r[i, j], abs=1e-12)
        assert found.distance[k] == pytest.approx(math.sqrt(2 * abs(du * dv)), rel=1e-12)
        assert found.timelike[k] == bool(cut().a[i, j])
        assert found.used[k] == (min(abs(du), abs(dv)) >= 0.05 and 2 * abs(du * dv) <= 0.16)
        k += 1
    assert k == found.value.size


def synthetic(noise: np.random.Generator, count: int = 80) -> pairs.PairValues:
    """An exact logarithm plus noise of the elements, not of the pairs."""
    u, v = np.random.default_rng(5).uniform(-0.2, 0.2, (2, count))
    i, j = np.triu_indices(count, k=1)
    distance = np.sqrt(2 * np.abs((u[i] - u[j]) * (v[i] - v[j])))
    e = 0.01 * noise.standard_normal(count)
    value = pairs.LAW_SLOPE * np.log(distance) - 0.02 + e[i] + e[j]
    every = np.ones(i.size, dtype=bool)
    return pairs.PairValues(distance, distance, value, every, distance > 0.02, i, j)


def test_a_sharp_cut_softens_the_logarithm_as_the_integral_over_wavenumbers_does() -> None:
    # ln x = integral of (1 - cos kx)/k up to K, less ln K + Euler's constant, K to infinity; cut
    # at K it is that integral itself.  Trapezoids of 2e5 steps: relative error below 1e-6.
    u, v = np.array([0.0, 0.1]), np.array([0.0, 0.25])
    some = pairs.pair_values(np.zeros((2, 2)), u, v, shortest=0.0, longest=1.0, wavenumber=40.0)
    k = np.linspace(1e-9, 40.0, 200_001)
    cut_logs = [
        np.trapezoid((1 - np.cos(k * x)) / k, k) - math.log(40.0) - np.euler_gamma
        for x in (0.1, 0.25)
    ]
    expected = (sum(cut_logs) + math.log(2.0)) / 2
    assert math.log(some.softened[0]) == pytest.approx(expected, abs=1e-5)
    assert abs(math.log(some.softened[0] / some.distance[0])) > 0.01


def test_fit_is_least_squares_on_the_pairs_in_the_window() -> None:
    some = synthetic(np.random.default_rng(1))
    fit = pairs.log_fit(some, elements=80)
    x, y = np.log(some.distance[some.used]), some.value[some.used]
    slope, constant = np.polyfit(x, y, 1)
    assert (fit.slope, fit.constant) == pytest.approx((slope, constant), rel=1e-9)
    assert fit.law_constant == pytest.approx(np.mean(y - pairs.LAW_SLOPE * x), rel=1e-9)
    assert fit.pairs == x.size < some.value.size


def test_fit_errors_are_those_of_repeated_noise_of_the_elements() -> None:
    rng = np.random.default_rng(2)
    fits = [pairs.log_fit(synthetic(rng), elements=80) for _ in range(300)]
    for name in ("slope", "constant", "law_constant"):
        values = np.array([getattr(fit, name) for fit in fits])
        errors = np.array([getattr(fit, f"{name}_error") for fit in fits])
        # 300 draws give the scatter to 4 %; a jackknife is biased upwards by some per cent.
        assert np.sqrt(np.mean(errors**2)) / values.std(ddof=1) == pytest.approx(1.1, abs=0.2)
    # Negative control: pairs taken as independent would make the constant's error far too small.
    naive = fits[0].scatter / math.sqrt(fits[0].pairs)
    scatter = np.std([fit.law_constant for fit in fits], ddof=1)
    assert naive < 0.3 * scatter


def test_too_few_pairs_give_no_fit() -> None:
    some = synthetic(np.random.default_rng(1), count=12)
    fit = pairs.log_fit(some, elements=12)
    assert math.isnan(fit.slope)
    assert math.isnan(fit.slope_error)
    assert fit.elements == 12


def test_deviation_is_the_mean_over_pairs_by_their_midpoint() -> None:
    u, v = cut().points
    bins, constant = 5, -0.02
    mean, count = pairs.deviation_map(
        cut().factor, u, v, constant=constant, shortest=0.06, longest=0.4, bins=bins
    )
    total, held = np.zeros((bins, bins)), np.zeros((bins, bins), dtype=int)
    for i, j in itertools.combinations(range(300), 2):
        du, dv = abs(u[j] - u[i]), abs(v[j] - v[i])
        if min(du, dv) < 0.06 or 2 * du * dv > 0.16:
            continue
        p, q = (int(((w[i] + w[j]) / 2 + PATCH_EXTENT) / (2 * PATCH_EXTENT) * bins) for w in (u, v))
        law = -math.log(math.sqrt(2 * du * dv)) / (2 * math.pi) + constant
        total[p, q] += cut().r[i, j] - law
        held[p, q] += 1
    assert np.array_equal(count, held)
    assert (held > 0).all()
    np.testing.assert_allclose(mean, total / held, rtol=1e-9, atol=1e-12)


def test_deviation_can_be_stopped() -> None:
    def stop(_: float) -> None:
        raise Cancelled

    with pytest.raises(Cancelled):
        pairs.deviation_map(
            cut().factor, *cut().points, constant=0, shortest=0.1, longest=1, bins=4, report=stop
        )


def test_cells_share_the_patch_and_hold_its_corners() -> None:
    edge = np.array([-PATCH_EXTENT, PATCH_EXTENT])
    assert state.cells(edge, edge, bins=4).tolist() == [0, 15]
    total, count = state.binned(*cut().points, np.ones(300), bins=4)
    assert total.sum() == count.sum() == 300


def rows_of_two() -> tuple[np.ndarray, np.ndarray]:
    """Elements of a diamond on the left and of one on the right."""
    u, v = cut().points
    x = (u - v) * PATCH_EXTENT
    near = np.abs(u + v) * PATCH_EXTENT + np.abs(np.abs(x) - 0.5) < 0.45
    return np.nonzero(near & (x < 0))[0], np.nonzero(near & (x > 0))[0]


@pytest.mark.parametrize("count", [1, 2])
def test_lifted_modes_are_eigenvectors_of_the_restricted_matrix(count: int) -> None:
    blocks = rows_of_two()[:count]
    rows = np.concatenate(blocks)
    found = lifted_pairs([cut().factor[own] for own in blocks])
    delta = cut().delta[np.ix_(rows, rows)]
    np.testing.assert_allclose(delta @ found.a, found.b * found.values, atol=1e-10)
    np.testing.assert_allclose(delta @ found.b, -found.a * found.values, atol=1e-10)
    both = np.hstack([found.a, found.b])
    np.testing.assert_allclose(both.T @ both, np.eye(both.shape[1]), atol=1e-10)
    assert found.values.size == min(rows.size, cut().factor.shape[1]) // 2


def test_more_rows_than_columns_are_lifted_too() -> None:
    few = cut().factor[:, :20]
    found = lifted_pairs([few])
    assert found.a.shape == (300, 10)
    turned = np.empty_like(few)
    turned[:, 0::2], turned[:, 1::2] = few[:, 1::2], -few[:, 0::2]
    delta = turned @ few.T
    np.testing.assert_allclose(delta @ found.a, found.b * found.values, atol=1e-10)


def test_shares_of_a_mode_sum_to_one_and_follow_its_norm() -> None:
    blocks = rows_of_two()
    found = lifted_pairs([cut().factor[own] for own in blocks])
    shares = block_shares(found, [own.size for own in blocks])
    np.testing.assert_allclose(shares.sum(axis=1), 1.0, rtol=1e-12)
    left = (found.a[: blocks[0].size] ** 2 + found.b[: blocks[0].size] ** 2).sum(axis=0) / 2
    np.testing.assert_allclose(shares[:, 0], left, rtol=1e-12)


def test_splitting_is_one_for_separate_modes_and_one_half_for_even_ones() -> None:
    kept = np.array([True, True, False])
    apart = np.array([[1.0, 0.0], [0.0, 1.0], [0.5, 0.5]])
    even = np.full((3, 2), 0.5)
    assert splitting(apart, kept) == (1.0, 2, 2)
    assert splitting(even, kept) == (0.5, 0, 2)
    none = splitting(even, np.zeros(3, dtype=bool))
    assert math.isnan(none.mean_share)
    assert none.modes == 0


def test_phase_is_fixed_by_the_reference_or_by_the_largest_value() -> None:
    rng = np.random.default_rng(7)
    mode, other = rng.standard_normal((2, 50)) + 1j * rng.standard_normal((2, 50))
    turned = aligned(mode * np.exp(0.7j), other)
    product = np.vdot(other, turned)
    assert abs(product.imag) < 50 * EPS * abs(product)
    assert product.real > 0
    np.testing.assert_allclose(aligned(mode, other), turned, rtol=1e-12)
    largest = anchored(mode)[np.argmax(np.abs(mode))]
    assert largest.real == pytest.approx(np.abs(mode).max())
    assert abs(largest.imag) < 1e-12
    orthogonal = aligned(np.array([1j, 0.0]), np.array([0.0, 1.0 + 0j]))
    np.testing.assert_allclose(orthogonal, [1.0, 0.0], atol=1e-15)


def test_overlap_does_not_see_phase_or_norm() -> None:
    mode = np.array([1.0, 1j, 0.5])
    assert overlaps(mode, [3j * mode])[0] == pytest.approx(1.0)
    assert overlaps(mode, [np.array([1.0, -1j, 0.0])])[0] == pytest.approx(0.0, abs=1e-15)


@pytest.mark.parametrize("rank", [1, 2, 5, 64, 65])
def test_continuum_modes_are_real_on_the_middle_time(rank: int) -> None:
    x = np.linspace(-0.9, 0.9, 21)
    values = diamond_mode(x, -x, rank=rank)
    assert np.abs(values.imag).max() < 1e-12
    assert np.abs(values.real).max() > 0.5
    parity = 1.0 if rank % 2 else -1.0
    np.testing.assert_allclose(values[::-1], parity * values, atol=1e-12)
