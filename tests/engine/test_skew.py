"""Eigenpairs of real skew matrices: A a = lambda b, A b = -lambda a."""

from __future__ import annotations

import numpy as np
import pytest
from numpy.typing import NDArray

from lozenge_engine.kernels.skew import (
    SkewPairs,
    dense_pairs,
    singular_values_of_pairs,
    tridiagonal_pairs,
)

FloatArray = NDArray[np.float64]
EPS = np.finfo(float).eps
SIZES = [2, 3, 4, 5, 8, 31, 60]


def skew(n: int, seed: int = 0) -> FloatArray:
    m = np.random.default_rng([n, seed]).standard_normal((n, n))
    return m - m.T


def skew_tridiagonal(coupling: FloatArray) -> FloatArray:
    return np.diag(coupling, -1) - np.diag(coupling, 1)


def reference(matrix: FloatArray) -> FloatArray:
    """Positive half of the Hermitian spectrum, by the complex dense solver."""
    return np.linalg.eigvalsh(1j * matrix)[::-1][: matrix.shape[0] // 2]


def check_pairs(matrix: FloatArray, pairs: SkewPairs) -> None:
    bound = 50 * EPS * matrix.shape[0] * max(np.linalg.norm(matrix, 2), 1e-300)
    np.testing.assert_allclose(matrix @ pairs.a, pairs.b * pairs.values, rtol=0, atol=bound)
    np.testing.assert_allclose(matrix @ pairs.b, -pairs.a * pairs.values, rtol=0, atol=bound)
    basis = np.hstack([pairs.a, pairs.b])
    unit = np.eye(basis.shape[1])
    np.testing.assert_allclose(basis.T @ basis, unit, atol=50 * EPS * matrix.shape[0])


@pytest.mark.parametrize("n", SIZES)
def test_dense_pairs_are_eigenpairs(n: int) -> None:
    check_pairs(skew(n), dense_pairs(skew(n)))


@pytest.mark.parametrize("n", SIZES)
def test_dense_values_are_those_of_the_hermitian_solver(n: int) -> None:
    a = skew(n)
    np.testing.assert_allclose(dense_pairs(a).values, reference(a), atol=1e-13 * n)


@pytest.mark.parametrize("n", [0, 1])
def test_a_matrix_below_two_rows_has_no_pairs(n: int) -> None:
    pairs = dense_pairs(np.zeros((n, n)))
    assert pairs.values.shape == (0,)
    assert pairs.a.shape == pairs.b.shape == (n, 0)


@pytest.mark.parametrize("n", [2, 3, 6])
def test_the_zero_matrix_has_orthonormal_pairs_of_value_zero(n: int) -> None:
    pairs = dense_pairs(np.zeros((n, n)))
    assert not pairs.values.any()
    check_pairs(np.zeros((n, n)), pairs)


@pytest.mark.parametrize("scale", [1e-150, 1e-8, 1e150])
def test_dense_pairs_scale_with_the_matrix(scale: float) -> None:
    a = skew(12)
    np.testing.assert_allclose(
        dense_pairs(scale * a).values, scale * dense_pairs(a).values, rtol=1e-12
    )


def test_an_ill_scaled_matrix_keeps_its_error_relative_to_the_norm() -> None:
    d = 10.0 ** np.linspace(-6, 6, 20)
    a = skew(20) * d[:, None] * d
    pairs = dense_pairs(a)
    check_pairs(a, pairs)
    np.testing.assert_allclose(pairs.values, reference(a), atol=100 * EPS * np.linalg.norm(a, 2))


def test_degenerate_pairs_are_all_found_and_orthonormal() -> None:
    block = np.kron(np.eye(4), np.array([[0.0, -2.0], [2.0, 0.0]]))
    q = np.linalg.qr(np.random.default_rng(1).standard_normal((9, 9)))[0]
    a = q[:, :8] @ block @ q[:, :8].T
    a = (a - a.T) / 2
    pairs = dense_pairs(a)
    np.testing.assert_allclose(pairs.values, 2.0, atol=1e-13)
    check_pairs(a, pairs)


@pytest.mark.parametrize("n", [2, 3, 7, 40, 41])
@pytest.mark.parametrize("above", [0.3, 1.0])
def test_tridiagonal_pairs_are_the_eigenpairs_above_the_bound(n: int, above: float) -> None:
    coupling = np.random.default_rng(n).uniform(0.2, 2.0, n - 1)
    matrix = skew_tridiagonal(coupling)
    pairs = tridiagonal_pairs(coupling, above=above)
    expected = reference(matrix)
    np.testing.assert_allclose(pairs.values, expected[expected > above], atol=1e-13)
    check_pairs(matrix, pairs)


def test_tridiagonal_pairs_alternate_in_parity() -> None:
    pairs = tridiagonal_pairs(np.ones(20), above=0.1)
    assert not pairs.a[1::2].any()
    assert not pairs.b[0::2].any()


@pytest.mark.parametrize("coupling", [np.zeros(0), np.zeros(4), np.full(3, 0.2)])
def test_nothing_above_the_bound_gives_no_pairs(coupling: FloatArray) -> None:
    pairs = tridiagonal_pairs(coupling, above=0.5)
    assert pairs.values.shape == (0,)
    assert pairs.a.shape == (coupling.size + 1, 0)


@pytest.mark.parametrize("n", [2, 3, 10, 11])
def test_singular_values_come_in_equal_pairs(n: int) -> None:
    a = skew(n)
    np.testing.assert_allclose(singular_values_of_pairs(a), reference(a), atol=1e-12)


def test_negative_control_a_matrix_that_is_not_skew_fails_the_check() -> None:
    a = skew(8)
    a[0, 1] += 0.1
    with pytest.raises(AssertionError):
        check_pairs(a, dense_pairs(a))
