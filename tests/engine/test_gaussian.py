"""Symplectic values and entropies of restricted, cut states."""

from __future__ import annotations

import math

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from numpy.typing import NDArray

from lozenge_engine.kernels import gaussian
from lozenge_engine.kernels.gaussian import (
    LOWEST_ORDER,
    compressed,
    contributions,
    cross_block,
    projected,
    restricted,
    restricted_spectrum,
    shares,
    symplectic,
)

FloatArray = NDArray[np.float64]
RNG = np.random.default_rng(20)
POINTS, MODES = 60, 12
BASIS = np.linalg.qr(RNG.standard_normal((POINTS, 2 * MODES)))[0]
VALUES = np.sort(RNG.uniform(0.5, 5.0, MODES))[::-1]
ALL = np.arange(POINTS)
SOME = np.arange(15)  # fewer rows than 2 MODES
MOST = np.arange(40)  # more rows than 2 MODES


def wightman(rows: NDArray[np.intp]) -> NDArray[np.complex128]:
    """W of the kept modes, by its definition: sum of lambda u u*."""
    u = (BASIS[:, 0::2] + 1j * BASIS[:, 1::2]) / math.sqrt(2)
    return ((u * VALUES) @ u.conj().T)[np.ix_(rows, rows)]


def naive(w: NDArray[np.complex128]) -> FloatArray:
    """Symplectic values by the generalised eigenproblem of the definition, kernel left out."""
    i_delta = w - w.conj()
    mu, vectors = np.linalg.eigh(i_delta)
    v = vectors[:, np.abs(mu) > 1e-10 * np.abs(mu).max()]
    ratio = np.linalg.eigvals(np.linalg.solve(v.conj().T @ i_delta @ v, v.conj().T @ w @ v))
    return np.sort(ratio.real[ratio.real > 0.5] - 0.5)[::-1]


def values_on(rows: NDArray[np.intp], *, compress: bool = True) -> FloatArray:
    factor = restricted(VALUES, BASIS, rows)
    spectrum = restricted_spectrum(compressed(factor) if compress else factor)
    kept = spectrum.pairs.values > 1e-10 * spectrum.pairs.values[0]
    return symplectic(projected(spectrum, kept)).values


def test_the_factor_holds_w_and_its_commutator() -> None:
    f = restricted(VALUES, BASIS, SOME)
    turned = np.empty_like(f.T)
    turned[0::2], turned[1::2] = -f.T[1::2], f.T[0::2]
    # W = R + i Delta/2 up to the sign of i, which no entropy sees.
    w = wightman(SOME)
    np.testing.assert_allclose(f @ f.T / 2, w.real, atol=1e-13)
    np.testing.assert_allclose(np.abs(f @ turned / 2), np.abs(w.imag), atol=1e-13)


@pytest.mark.parametrize("rows", [ALL, MOST, np.arange(2 * MODES)], ids=["all", "most", "just"])
def test_rows_that_see_every_mode_hold_a_pure_state(rows: NDArray[np.intp]) -> None:
    np.testing.assert_allclose(values_on(rows), 0.5, atol=1e-10)


@pytest.mark.parametrize("n", [2, 3, 8, 15, 22])
def test_symplectic_values_are_those_of_the_definition(n: int) -> None:
    rows = np.arange(n)
    np.testing.assert_allclose(values_on(rows), naive(wightman(rows)), rtol=1e-8)


@pytest.mark.parametrize("rows", [SOME, MOST], ids=["few rows", "many rows"])
def test_compression_changes_nothing(rows: NDArray[np.intp]) -> None:
    np.testing.assert_allclose(values_on(rows), values_on(rows, compress=False), rtol=1e-9)


def test_compression_keeps_the_spectrum_of_the_commutator() -> None:
    factor = restricted(VALUES, BASIS, MOST)
    few = restricted_spectrum(compressed(factor)).pairs.values
    many = restricted_spectrum(factor).pairs.values
    np.testing.assert_allclose(many[: few.size], few, atol=1e-12)
    np.testing.assert_allclose(many[few.size :], 0.0, atol=1e-12)


def test_an_orthogonal_change_of_the_points_basis_changes_nothing() -> None:
    q = np.linalg.qr(RNG.standard_normal((SOME.size, SOME.size)))[0]
    factor = restricted(VALUES, BASIS, SOME)
    one, other = restricted_spectrum(factor), restricted_spectrum(q @ factor)
    everything = np.ones(one.pairs.values.size, dtype=bool)
    np.testing.assert_allclose(one.pairs.values, other.pairs.values, atol=1e-12)
    np.testing.assert_allclose(
        symplectic(projected(one, everything)).values,
        symplectic(projected(other, everything)).values,
        rtol=1e-9,
    )


def test_a_turn_of_phase_of_each_mode_changes_nothing() -> None:
    turned = BASIS.copy()
    for k, angle in enumerate(RNG.uniform(0, 2 * np.pi, MODES)):
        c, s = np.cos(angle), np.sin(angle)
        a, b = BASIS[:, 2 * k], BASIS[:, 2 * k + 1]
        turned[:, 2 * k], turned[:, 2 * k + 1] = c * a - s * b, s * a + c * b
    spectrum = restricted_spectrum(restricted(VALUES, turned, SOME))
    everything = np.ones(spectrum.pairs.values.size, dtype=bool)
    found = symplectic(projected(spectrum, everything)).values
    np.testing.assert_allclose(found, values_on(SOME), rtol=1e-9)


def test_symplectic_values_do_not_depend_on_the_basis_of_the_kept_space() -> None:
    spectrum = restricted_spectrum(restricted(VALUES, BASIS, SOME))
    g = projected(spectrum, spectrum.pairs.values > 0.5)
    mix = RNG.standard_normal((g.shape[1], g.shape[1])) + 3 * np.eye(g.shape[1])
    np.testing.assert_allclose(symplectic(g @ mix).values, symplectic(g).values, rtol=1e-9)


def test_the_scale_of_the_kept_columns_does_not_matter() -> None:
    spectrum = restricted_spectrum(restricted(VALUES, BASIS, SOME))
    g = projected(spectrum, spectrum.pairs.values > 0.5)
    scale = 10.0 ** RNG.uniform(-6, 6, g.shape[1])
    np.testing.assert_allclose(symplectic(g * scale).values, symplectic(g).values, rtol=1e-9)


@pytest.mark.parametrize("squeezing", [0.0, 0.1, 0.7, 2.0])
def test_half_of_a_two_mode_squeezed_state_has_s_cosh_2r_over_2(squeezing: float) -> None:
    # Modes a cosh r + b* sinh r and b cosh r + a* sinh r, on rows (q_a, p_a, q_b, p_b).
    c, s = math.cosh(squeezing), math.sinh(squeezing)
    factor = np.array([[c, 0, s, 0], [0, c, 0, -s], [s, 0, c, 0], [0, -s, 0, c]])
    spectrum = restricted_spectrum(factor[:2])
    found = symplectic(projected(spectrum, np.array([True])))
    np.testing.assert_allclose(found.values, [math.cosh(2 * squeezing) / 2], rtol=1e-12)


def test_nothing_kept_gives_no_values_and_no_entropy() -> None:
    found = symplectic(np.empty((8, 0)))
    assert found.values.size == 0
    assert found.lowest == 0.5
    assert contributions(found.values).sum() == 0.0


def test_columns_in_the_kernel_are_an_error_and_not_a_number() -> None:
    g = RNG.standard_normal((6, 4))
    with pytest.raises(np.linalg.LinAlgError):
        symplectic(np.hstack([g, g[:, :2] + 0.0]))


def test_an_uncut_commutator_beside_a_cut_state_breaks_the_bound() -> None:
    """Negative control for the rule that the same operator enters both sides."""
    w = wightman(SOME)
    delta = 1.5 * 2 * w.imag
    lower = np.linalg.cholesky(w.real)
    inner = np.linalg.solve(lower, np.linalg.solve(lower, delta).T)
    assert 1 / np.linalg.norm(inner, 2) < 0.5


def test_the_tolerance_covers_the_rounding_of_a_pure_state() -> None:
    spectrum = restricted_spectrum(compressed(restricted(VALUES, BASIS, ALL)))
    found = symplectic(projected(spectrum, np.ones(MODES, dtype=bool)))
    assert found.lowest >= 0.5 - found.tolerance
    assert found.tolerance < 1e-9


# --------------------------------------------------------------------- shares


def test_shares_of_every_eigenvector_sum_to_one() -> None:
    spectrum = restricted_spectrum(restricted(VALUES, BASIS, SOME))
    np.testing.assert_allclose(shares(spectrum, (5, 7, 3)).sum(axis=1), 1.0, atol=1e-12)


def test_modes_of_regions_that_commute_belong_to_one_region_each() -> None:
    factor = np.zeros((8, 8))
    factor[:4, :4] = np.diag([2.0, 2.0, 1.0, 1.0])
    factor[4:, 4:] = np.diag([1.5, 1.5, 0.5, 0.5])
    spectrum = restricted_spectrum(factor)
    np.testing.assert_allclose(spectrum.pairs.values, [4.0, 2.25, 1.0, 0.25])
    np.testing.assert_allclose(
        shares(spectrum, (4, 4)), [[1, 0], [0, 1], [1, 0], [0, 1]], atol=1e-14
    )


# ---------------------------------------------------------------- cross block


def test_the_cross_block_is_the_norm_of_the_scaled_commutator() -> None:
    spectra = [restricted_spectrum(restricted(VALUES, BASIS, rows)) for rows in (SOME, SOME + 20)]
    kept = [s.pairs.values > 0.3 for s in spectra]
    ga, gb = (projected(s, k) for s, k in zip(spectra, kept, strict=True))
    w = (BASIS * np.repeat(np.sqrt(VALUES), 2)) @ gaussian._turned(
        (BASIS * np.repeat(np.sqrt(VALUES), 2)).T
    )
    block = w[np.ix_(SOME, SOME + 20)]
    left, right = (
        np.hstack([s.pairs.a[:, k], s.pairs.b[:, k]]) / np.sqrt(np.tile(s.pairs.values[k], 2))
        for s, k in zip(spectra, kept, strict=True)
    )
    expected = np.linalg.norm(left.T @ block @ right, 2)
    assert cross_block(ga, gb) == pytest.approx(expected, rel=1e-10)


def test_the_cross_block_with_nothing_kept_is_zero() -> None:
    assert cross_block(np.empty((4, 0)), np.ones((4, 2))) == 0.0


def test_the_cross_block_is_symmetric_in_the_regions() -> None:
    spectra = [restricted_spectrum(restricted(VALUES, BASIS, rows)) for rows in (SOME, SOME + 20)]
    ga, gb = (projected(s, s.pairs.values > 0.3) for s in spectra)
    assert cross_block(ga, gb) == pytest.approx(cross_block(gb, ga), rel=1e-12)


# ------------------------------------------------------------------ entropies

S = np.array([0.5, 0.5 + 1e-12, 0.5001, 0.6, 1.0, 3.0, 50.0])


def renyi(s: float, q: float) -> float:
    """The formula of the source, as it stands."""
    return math.log((s + 0.5) ** q - (s - 0.5) ** q) / (q - 1)


def test_von_neumann_entropy_is_the_formula_of_the_source() -> None:
    for s, found in zip(S[2:], contributions(S[2:]), strict=True):
        expected = (s + 0.5) * math.log(s + 0.5) - (s - 0.5) * math.log(s - 0.5)
        assert found == pytest.approx(expected, rel=1e-11)


def test_von_neumann_entropy_is_that_of_lambda_and_one_minus_lambda() -> None:
    for s, found in zip(S[2:], contributions(S[2:]), strict=True):
        lambdas = np.array([0.5 + s, 0.5 - s])
        assert found == pytest.approx(np.sum(lambdas * np.log(np.abs(lambdas))), rel=1e-11)


@pytest.mark.parametrize("q", [0.5, 0.9, 1.5, 2.0, 3.0, 50.0])
def test_renyi_entropy_is_the_formula_of_the_source(q: float) -> None:
    for s, found in zip(S[3:6], contributions(S[3:6], order=q), strict=True):
        assert found == pytest.approx(renyi(float(s), q), rel=1e-10)


@pytest.mark.parametrize("step", [1e-3, 1e-6, 1e-9, 1e-12, 2.3e-16])
@pytest.mark.parametrize("sign", [-1, 1])
def test_renyi_entropy_tends_to_von_neumann_entropy_smoothly(step: float, sign: int) -> None:
    q = 1.0 + sign * step
    if q == 1.0:
        q = math.nextafter(1.0, 1.0 + sign)
    # |dS_q/dq| at q = 1 is half the variance of ln(eigenvalue): below 1/2 for each mode here.
    np.testing.assert_allclose(
        contributions(S, order=q), contributions(S), rtol=0, atol=step + 1e-11
    )


@pytest.mark.parametrize("q", [0.5, 1.0, 2.0, 7.0])
def test_a_pure_mode_adds_exactly_nothing(q: float) -> None:
    assert contributions(np.array([0.5, 0.5 - 1e-15]), order=q).tolist() == [0.0, 0.0]


@given(st.floats(0.5, 1e4), st.floats(LOWEST_ORDER, 50.0), st.floats(LOWEST_ORDER, 50.0))
def test_renyi_entropy_falls_with_its_order(s: float, q: float, p: float) -> None:
    low, high = sorted((q, p))
    at_low, at_high = (contributions(np.array([s]), order=x)[0] for x in (low, high))
    assert at_high <= at_low + 1e-9 * max(1.0, at_low)


@given(st.floats(0.5, 1e4), st.floats(LOWEST_ORDER, 50.0))
def test_no_entropy_is_negative(s: float, q: float) -> None:
    assert contributions(np.array([s]), order=q)[0] >= 0.0


def test_at_the_lowest_order_the_rounding_of_a_pure_mode_stays_below_a_millionth() -> None:
    # S_(1/2) of s = 1/2 + x is 2 sqrt(x) to first order: x = 1e-15 gives 6e-8.
    found = contributions(np.array([0.5 + 1e-15]), order=LOWEST_ORDER)[0]
    assert 1e-8 < found < 1e-6
