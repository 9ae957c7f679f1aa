"""Eigenpairs of real skew matrices in real arithmetic.

For a real skew A, the Hermitian i A has eigenvalues +-lambda.  A positive one belongs to
u = (a + i b)/sqrt 2 with real orthonormal a, b and A a = lambda b, A b = -lambda a.  Every
routine here returns such pairs, never complex vectors.
"""

from __future__ import annotations

from typing import NamedTuple

import numpy as np
import scipy.linalg
from numpy.typing import NDArray

__all__ = ["SkewPairs", "dense_pairs", "singular_values_of_pairs", "tridiagonal_pairs"]

FloatArray = NDArray[np.float64]


class SkewPairs(NamedTuple):
    """Positive eigenvalues of i A and their real vector pairs.

    Attributes
    ----------
    values : ndarray, shape (r,), float64
        Descending, >= 0.
    a, b : ndarray, shape (n, r), float64
        Orthonormal columns with A a = lambda b and A b = -lambda a.
    """

    values: FloatArray
    a: FloatArray
    b: FloatArray


def _phases(count: int) -> FloatArray:
    """Signs 1, 1, -1, -1, ...: real and imaginary part of i**k, whichever is not zero."""
    return np.resize(np.array([1.0, 1.0, -1.0, -1.0]), count)


def tridiagonal_pairs(coupling: FloatArray, *, above: float) -> SkewPairs:
    """Pairs of a skew tridiagonal matrix whose eigenvalue exceeds a bound.

    Up to the phases i**k the matrix is symmetric tridiagonal with zero diagonal, which LAPACK's
    ``stebz`` (bisection) and ``stein`` (inverse iteration) solve for the wanted part of the
    spectrum only.

    Parameters
    ----------
    coupling : ndarray, shape (m - 1,), float64
        Entries T[k + 1, k] = -T[k, k + 1].
    above : float
        Bound > 0; small against the norm the pairs lose orthogonality between a and b.

    Returns
    -------
    SkewPairs
        Vectors of shape (m, r).  Odd rows of `a` and even rows of `b` are zero.

    Notes
    -----
    Cost: O(m r) flops while the eigenvalues are well apart, up to O(m r**2) in clusters, which
    ``stein`` orthogonalises; 16 m r bytes.
    """
    m = coupling.size + 1
    # Every eigenvalue is below twice the largest coupling (Gershgorin).
    top = 2.0 * float(np.abs(coupling).max(initial=0.0)) + 1.0
    if top <= above:
        return SkewPairs(np.empty(0), np.empty((m, 0)), np.empty((m, 0)))
    values, z = scipy.linalg.eigh_tridiagonal(
        np.zeros(m), coupling, select="v", select_range=(above, top), check_finite=False
    )
    z = z[:, ::-1] * (_phases(m)[:, None] * np.sqrt(2.0))
    a, b = z.copy(), z
    a[1::2], b[0::2] = 0.0, 0.0
    return SkewPairs(np.asarray(values[::-1], dtype=np.float64), a, b)


def dense_pairs(matrix: FloatArray) -> SkewPairs:
    """All pairs of a dense real skew matrix.

    Householder reduction (a skew Hessenberg matrix is tridiagonal), then the singular value
    decomposition of the bidiagonal matrix between even and odd rows: backward stable, absolute
    error of order eps times the norm.

    Parameters
    ----------
    matrix : ndarray, shape (n, n), float64
        Real and skew.

    Returns
    -------
    SkewPairs
        floor(n/2) pairs; for odd n the zero mode is left out.

    Notes
    -----
    Cost: about 7 n**3 flops, 40 n**2 bytes.
    """
    n = matrix.shape[0]
    if n < 2:
        return SkewPairs(np.empty(0), np.empty((n, 0)), np.empty((n, 0)))
    reduced, q = scipy.linalg.hessenberg(matrix, calc_q=True, check_finite=False)
    coupling = np.diag(reduced, -1)
    q = q * _phases(n)
    even, odd = (n + 1) // 2, n // 2
    bidiagonal = np.zeros((even, odd))
    bidiagonal[np.arange(odd), np.arange(odd)] = coupling[0::2]
    bidiagonal[np.arange(1, even), np.arange(even - 1)] = coupling[1::2]
    left, values, right = scipy.linalg.svd(bidiagonal, full_matrices=False, check_finite=False)
    return SkewPairs(values, q[:, 0::2] @ left, q[:, 1::2] @ right.T)


def singular_values_of_pairs(matrix: FloatArray) -> FloatArray:
    """Positive eigenvalues of i A alone, descending: every second singular value.

    Parameters
    ----------
    matrix : ndarray, shape (n, n), float64
        Real and skew; its singular values come in equal pairs.

    Returns
    -------
    ndarray, shape (n // 2,), float64
        The mean of each pair, descending.
    """
    n = matrix.shape[0] // 2
    values = scipy.linalg.svdvals(matrix, check_finite=False)[: 2 * n]
    return np.asarray(values.reshape(n, 2).mean(axis=1), dtype=np.float64)
