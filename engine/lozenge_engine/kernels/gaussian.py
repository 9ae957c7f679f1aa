"""Restricted correlators of the cut state, their symplectic spectrum and the entropies.

The cut state is held as a factor F of shape (rows, 2 r): with the columns f_a = a sqrt(lambda),
f_b = b sqrt(lambda) of the r kept modes, interleaved,

    R = Re W = F F^T / 2,      Delta = F J F^T,      J = (0, -1; 1, 0) on each pair,

so that W = R + i Delta/2 and i Delta = W - W* hold on any set of rows by construction.  A
projection on orthonormal columns V only needs G = F^T V: R = G^T G / 2 and Delta = G^T J G.
"""

from __future__ import annotations

import itertools
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from lozenge_engine.kernels.skew import SkewPairs, dense_pairs

__all__ = [
    "LOWEST_ORDER",
    "Spectrum",
    "Symplectic",
    "compressed",
    "contributions",
    "cross_block",
    "projected",
    "restricted",
    "restricted_spectrum",
    "shares",
    "symplectic",
]

FloatArray = NDArray[np.float64]
EPS = float(np.finfo(np.float64).eps)
LOWEST_ORDER = 0.5
"""Renyi orders below this let the rounding of pure modes take over."""


class Spectrum(NamedTuple):
    """Positive spectrum of i Delta restricted to some rows.

    Attributes
    ----------
    pairs : SkewPairs
        Eigenvalues, descending, and their vectors in the coordinates of `factor`.
    factor : ndarray, shape (d, 2 r), float64
        The state on the rows, up to an isometry when d < number of rows.
    """

    pairs: SkewPairs
    factor: FloatArray


class Symplectic(NamedTuple):
    """Symplectic values of a projected state.

    Attributes
    ----------
    values : ndarray, shape (k,), float64
        s >= 1/2 up to rounding, descending.
    tolerance : float
        How far below 1/2 rounding can bring a value: 8 d eps cond(R), R scaled to unit diagonal.
    lowest : float
        The smallest value found, before anything was done to it.
    """

    values: FloatArray
    tolerance: float
    lowest: float


def restricted(values: FloatArray, vectors: FloatArray, rows: NDArray[np.intp]) -> FloatArray:
    """Factor of the cut state on some rows.

    Parameters
    ----------
    values : ndarray, shape (r,), float64
        Kept positive eigenvalues of i Delta on the patch.
    vectors : ndarray, shape (N, 2 r), float64
        Columns a_0, b_0, a_1, ... of `Modes`.
    rows : ndarray of int, shape (n,)
        Elements of the region.

    Returns
    -------
    ndarray, shape (n, 2 r), float64
        F.
    """
    columns = vectors[rows, : 2 * values.size]
    return np.asarray(columns * np.repeat(np.sqrt(values), 2), dtype=np.float64)


def compressed(factor: FloatArray) -> FloatArray:
    """The same state in fewer coordinates: the triangular factor when there are more rows.

    Parameters
    ----------
    factor : ndarray, shape (n, 2 r), float64
        F of a region.

    Returns
    -------
    ndarray, shape (min(n, 2 r), 2 r), float64
        Equal to Q^T F for an isometry Q onto the range of F.

    Notes
    -----
    Cost: 8 n r**2 flops.
    """
    n, columns = factor.shape
    return factor if n <= columns else np.asarray(np.linalg.qr(factor, mode="r"))


def _turned(g: FloatArray) -> FloatArray:
    """J g: exchanges the rows of each pair with a sign."""
    turned = np.empty_like(g)
    turned[0::2], turned[1::2] = -g[1::2], g[0::2]
    return turned


def restricted_spectrum(factor: FloatArray) -> Spectrum:
    """Eigenpairs of i Delta restricted to the rows of a factor.

    Parameters
    ----------
    factor : ndarray, shape (d, 2 r), float64
        F, best compressed.

    Returns
    -------
    Spectrum
        floor(d/2) pairs.

    Notes
    -----
    Cost: 7 d**3 + 4 d**2 r flops.
    """
    delta = factor @ _turned(factor.T)
    return Spectrum(dense_pairs((delta - delta.T) / 2.0), factor)


def projected(spectrum: Spectrum, kept: NDArray[np.bool_]) -> FloatArray:
    """G = F^T V for the kept eigenvectors V.

    Parameters
    ----------
    spectrum : Spectrum
        Of a region or of a union.
    kept : ndarray, shape (pairs,), bool
        Which pairs are kept.

    Returns
    -------
    ndarray, shape (2 r, 2 k), float64
        Columns of the a vectors, then of the b vectors.

    Notes
    -----
    Cost: 8 d r k flops, d rows of the factor.
    """
    basis = np.hstack([spectrum.pairs.a[:, kept], spectrum.pairs.b[:, kept]])
    return np.asarray(spectrum.factor.T @ basis, dtype=np.float64)


def shares(spectrum: Spectrum, blocks: tuple[int, ...]) -> FloatArray:
    """Squared norm of every eigenvector on consecutive blocks of rows.

    Parameters
    ----------
    spectrum : Spectrum
        Of a union whose factor stacks the blocks.
    blocks : tuple of int
        Rows of each block, K of them.

    Returns
    -------
    ndarray, shape (pairs, K), float64
        Rows sum to 1.
    """
    ends = np.cumsum((0, *blocks))
    weight = (spectrum.pairs.a**2 + spectrum.pairs.b**2) / 2.0
    return np.stack(
        [weight[low:high].sum(axis=0) for low, high in itertools.pairwise(ends)],
        axis=1,
    )


def symplectic(g: FloatArray) -> Symplectic:
    """Symplectic values of the state projected on a kept space.

    i Delta v = (1/s) R v is Hermitian-definite; with R = L L^T its eigenvalues +-1/s are those of
    the skew L^-1 Delta L^-T ("Expressing entropy globally in terms of (4D) field-correlations",
    arXiv:1205.2953, in real arithmetic).

    Parameters
    ----------
    g : ndarray, shape (2 r, d), float64
        From `projected`, or several of them side by side.

    Returns
    -------
    Symplectic
        d // 2 values.

    Raises
    ------
    numpy.linalg.LinAlgError
        If R is not positive definite, that is, if the columns lie in its kernel.

    Notes
    -----
    Cost: about 6 r d**2 + 10 d**3 flops.
    """
    d = g.shape[1]
    if d == 0:
        return Symplectic(np.empty(0), 0.0, 0.5)
    r = g.T @ g / 2.0
    delta = g.T @ _turned(g)
    # Scaling to unit diagonal is a congruence: it changes no s and improves the condition.
    scale = 1.0 / np.sqrt(np.diag(r))
    r *= scale[:, None] * scale
    delta *= scale[:, None] * scale
    lower = np.linalg.cholesky(r)
    inner = np.linalg.solve(lower, np.linalg.solve(lower, (delta - delta.T) / 2.0).T)
    singular = np.linalg.svd(inner, compute_uv=False)[: 2 * (d // 2)]
    s = 1.0 / singular.reshape(-1, 2).mean(axis=1)
    ends = np.linalg.eigvalsh(r)[[0, -1]]
    tolerance = 8.0 * d * EPS * float(ends[1] / max(ends[0], EPS))
    return Symplectic(s[::-1], tolerance, float(s.min()))


def contributions(values: FloatArray, *, order: float = 1.0) -> FloatArray:
    """Entropy of each symplectic value.

    (s + 1/2) ln(s + 1/2) - (s - 1/2) ln(s - 1/2), arXiv:1205.2953 with lambda = 1/2 +- s; for
    Renyi order q: ln[(s + 1/2)**q - (s - 1/2)**q]/(q - 1).

    Parameters
    ----------
    values : ndarray, shape (k,), float64
        Symplectic values; what rounding has put below 1/2 counts as 1/2 (pure), which the
        caller reports when it exceeds the tolerance.
    order : float
        q >= `LOWEST_ORDER`; 1 is the von Neumann entropy.

    Returns
    -------
    ndarray, shape (k,), float64
        In nats, >= 0.
    """
    above = np.maximum(values - 0.5, 0.0)
    if order == 1.0:
        logarithm = np.log(above, out=np.zeros_like(above), where=above > 0)
        return np.asarray((above + 1.0) * np.log1p(above) - above * logarithm)
    # With p = x/(1 + x), ln[(1 + x)^q - x^q] = (q - 1) ln(1 + x) + ln[1 - x (p^(q-1) - 1)]:
    # no difference of nearly equal numbers as q -> 1.
    step = order - 1.0
    logarithm = np.log(above / (1.0 + above), out=np.zeros_like(above), where=above > 0)
    bracket = np.log1p(-above * np.expm1(step * logarithm))
    return np.asarray(np.log1p(above) + bracket / step)


def cross_block(g_a: FloatArray, g_b: FloatArray) -> float:
    """Spectral norm of the commutator's block between two kept spaces, scaled by both diagonals.

    Parameters
    ----------
    g_a, g_b : ndarray, shape (2 r, 2 k_a) and (2 r, 2 k_b), float64
        From `projected`, in the same basis of the patch's modes.

    Returns
    -------
    float
        0 if the two kept spaces commute; of order 0.1 after the first cut.
    """
    if not (g_a.shape[1] and g_b.shape[1]):
        return 0.0
    scaled = [g / np.sqrt(_pair_eigenvalues(g)) for g in (g_a, g_b)]
    return float(np.linalg.norm(scaled[0].T @ _turned(scaled[1]), 2))


def _pair_eigenvalues(g: FloatArray) -> FloatArray:
    """Eigenvalue of the restricted operator that belongs to each column of a projected block."""
    k = g.shape[1] // 2
    mu = np.abs(np.sum(g[:, k:] * _turned(g)[:, :k], axis=0))
    return np.concatenate([mu, mu])
