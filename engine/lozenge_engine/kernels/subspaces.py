"""Entropies of many kept spaces of one state: spans of some columns of one projected block.

`gaussian.symplectic` starts from the columns; a study that keeps more and more of them starts
from their Gram matrices, made once, of which every kept space is a principal block.
"""

from __future__ import annotations

from typing import NamedTuple

import numpy as np
import scipy.linalg
from numpy.typing import NDArray

from lozenge_engine.kernels.gaussian import contributions

__all__ = ["Gram", "Spanned", "gram", "nested_entropies", "spanned"]

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.intp]
EPS = float(np.finfo(np.float64).eps)


class Gram(NamedTuple):
    """What a projected block says about every span of its columns.

    Attributes
    ----------
    r, delta : ndarray, shape (d, d), float64
        G^T G/2 and G^T J G, scaled to unit diagonal of `r` (a congruence, which changes no
        symplectic value); a column of zeros stays zero.
    """

    r: FloatArray
    delta: FloatArray


class Spanned(NamedTuple):
    """Entropy of the state on a span.

    Attributes
    ----------
    entropy : float
        In nats; NaN if R is not positive definite there.
    lowest : float
        Smallest symplectic value; NaN likewise.
    tolerance : float
        How far below 1/2 rounding can bring it: 8 d eps cond(R); infinite likewise.
    """

    entropy: float
    lowest: float
    tolerance: float

    @property
    def trouble(self) -> str:
        """Why the entropy cannot be trusted; empty if it can."""
        if not np.isfinite(self.entropy) or self.tolerance > 1e-6:
            return "the kept modes reach into the kernel of the cut Delta"
        if self.lowest < 0.5 - self.tolerance:
            return f"a symplectic value is {self.lowest:.9f}, below 1/2"
        return ""


def gram(g: FloatArray) -> Gram:
    """Gram matrices of all columns of a projected block.

    Parameters
    ----------
    g : ndarray, shape (2 r, d), float64
        From `gaussian.projected`, or several side by side.

    Returns
    -------
    Gram
        Of its columns in their order.

    Notes
    -----
    Cost: 8 r d**2 flops.
    """
    turned = np.empty_like(g)
    turned[0::2], turned[1::2] = -g[1::2], g[0::2]
    norms = np.sqrt(np.sum(g * g, axis=0) / 2.0)
    scale = np.divide(1.0, norms, out=np.zeros_like(norms), where=norms > 0)
    delta = g.T @ turned
    both = scale[:, None] * scale
    return Gram(g.T @ g / 2.0 * both, (delta - delta.T) / 2.0 * both)


def spanned(block: Gram, columns: IntArray, *, order: float = 1.0) -> Spanned:
    """Entropy of the state on the span of some columns.

    Parameters
    ----------
    block : Gram
        Of all columns.
    columns : ndarray of int, shape (d,)
        Which to take, an even number.
    order : float
        Renyi order, >= 0.5.

    Returns
    -------
    Spanned
        As `gaussian.symplectic` and `gaussian.contributions` would have it (arXiv:1205.2953).

    Notes
    -----
    With R = L L^T the values 1/s are the singular values of L^-1 Delta L^-T, in equal pairs; their
    squares are eigenvalues of a symmetric matrix, exact to rounding since 1/s <= 2.  Cost: about
    5 d**3 flops.
    """
    d = columns.size
    if d == 0:
        return Spanned(0.0, 0.5, 0.0)
    inner, condition = _inner(block, columns)
    if inner is None:
        return Spanned(np.nan, np.nan, np.inf)
    s = _values(inner)
    entropy = float(contributions(s, order=order).sum())
    return Spanned(entropy, float(s.min()), 8.0 * d * EPS * condition)


def _inner(block: Gram, columns: IntArray) -> tuple[FloatArray | None, float]:
    """L^-1 Delta L^-T on some columns, None if R is not definite, and the condition of R."""
    at = np.ix_(columns, columns)
    r = block.r[at]
    try:
        lower = np.linalg.cholesky(r)
    except np.linalg.LinAlgError:
        return None, np.inf
    norm = float(np.abs(r).sum(axis=0).max())
    inverse, _ = scipy.linalg.lapack.dpocon(lower, norm, uplo="L")
    half = scipy.linalg.solve_triangular(lower, block.delta[at], lower=True, check_finite=False)
    inner = scipy.linalg.solve_triangular(lower, half.T, lower=True, check_finite=False)
    return (inner - inner.T) / 2.0, 1.0 / max(float(inverse), EPS)


def _values(inner: FloatArray) -> FloatArray:
    """Symplectic values of a whitened commutator, ascending."""
    squares = scipy.linalg.eigvalsh(inner.T @ inner, check_finite=False, driver="evd")
    pairs = squares[inner.shape[0] % 2 :].reshape(-1, 2).mean(axis=1)
    return np.asarray(1.0 / np.sqrt(np.maximum(pairs, EPS))[::-1], dtype=np.float64)


def nested_entropies(block: Gram, *, order: float = 1.0) -> FloatArray:
    """Entropy of the spans of the first pair of columns, the first two pairs, and so on.

    Parameters
    ----------
    block : Gram
        Of d columns: the a vectors of all pairs, then their b vectors, as `gaussian.projected`
        lays them.
    order : float
        Renyi order, >= 0.5.

    Returns
    -------
    ndarray, shape (d // 2,), float64
        In nats; NaN from where R is not positive definite.

    Notes
    -----
    One Cholesky factor serves all: its leading blocks are those of the leading spans.  Cost:
    about d**4/8 flops.
    """
    pairs = block.r.shape[0] // 2
    columns = np.column_stack([np.arange(pairs), pairs + np.arange(pairs)]).ravel()
    found = np.full(pairs, np.nan)
    size = pairs
    while size:
        inner, _ = _inner(block, columns[: 2 * size])
        if inner is not None:
            break
        size -= max(1, size // 8)
    else:
        return found
    for k in range(1, size + 1):
        found[k - 1] = contributions(_values(inner[: 2 * k, : 2 * k]), order=order).sum()
    return found
