"""Checks of the cut state of the patch: what the cut takes from i Delta, positivity, purity.

The state is W = R + i Delta/2 with R = F F^T/2 and Delta = F J F^T, F the factor of
`gaussian.restricted` on all elements.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from lozenge_engine.kernels.gaussian import contributions
from lozenge_engine.kernels.order import Commutator

__all__ = [
    "Positivity",
    "Projected",
    "Purity",
    "RowNorms",
    "binned",
    "cells",
    "kept_row_norms",
    "positivity",
    "projected_state",
    "purity",
    "row_norms",
]

FloatArray = NDArray[np.float64]
Report = Callable[[float], None]

EXACT_ROWS = 4000
"""Most elements for which the rows of the commutator are summed exactly."""
PROBES = 64
EPS = float(np.finfo(np.float64).eps)
BLOCK = 256


class RowNorms(NamedTuple):
    """Squared norms of the rows of the commutator A.

    Attributes
    ----------
    values : ndarray, shape (n,), float64
        sum_j A_ij**2.
    exact : bool
        False where random signs estimated them, to sqrt(2/64) = 18 % each.
    """

    values: FloatArray
    exact: bool


class Projected(NamedTuple):
    """W on the span of the kept modes' vectors Y, with the commutator applied afresh.

    Attributes
    ----------
    r : ndarray, shape (2 r, 2 r), float64
        Y^T R Y, R from the factor.
    delta : ndarray, shape (2 r, 2 r), float64
        Y^T A Y, A the operator itself: equal to the factor's Delta only if Y holds its modes.
    tolerance : float
        How far rounding and the modes' residuals can move an eigenvalue of r + i delta/2.
    """

    r: FloatArray
    delta: FloatArray
    tolerance: float


class Positivity(NamedTuple):
    """Ends of the spectrum of W = R + i Delta/2 on the span of the kept modes.

    Attributes
    ----------
    lowest, highest : float
        Smallest and largest eigenvalue; half of them are 0 where the modes are exact.
    tolerance : float
        How far below 0 rounding and residuals can bring the smallest.
    """

    lowest: float
    highest: float
    tolerance: float


class Purity(NamedTuple):
    """Entropy of the whole patch after the cut.

    Attributes
    ----------
    entropy : float
        In nats; 0 for a pure state.
    worst : float
        Largest |s - 1/2| over the symplectic values.
    tolerance : float
        What rounding and residuals can make of it.
    """

    entropy: float
    worst: float
    tolerance: float


def cells(u: FloatArray, v: FloatArray, *, bins: int) -> NDArray[np.intp]:
    """Cell of the patch that holds each point.

    Parameters
    ----------
    u, v : ndarray, shape (n,), float64
        Light-cone coordinates, in patch half-widths.
    bins : int
        Cells along u and along v, from edge to edge.

    Returns
    -------
    ndarray, shape (n,), intp
        Cell of u times `bins` plus cell of v.
    """
    edge = 1.0 / math.sqrt(2.0)
    i, j = (
        np.clip(((w + edge) / (2.0 * edge) * bins).astype(np.intp), 0, bins - 1) for w in (u, v)
    )
    return i * bins + j


def binned(
    u: FloatArray, v: FloatArray, values: FloatArray, *, bins: int
) -> tuple[FloatArray, NDArray[np.intp]]:
    """Sum of a quantity over the elements of each cell of the patch.

    Parameters
    ----------
    u, v : ndarray, shape (n,), float64
        Light-cone coordinates, in patch half-widths.
    values : ndarray, shape (n,), float64
        What is summed.
    bins : int
        Cells along u and along v.

    Returns
    -------
    total : ndarray, shape (bins, bins), float64
        By (cell of u, cell of v).
    count : ndarray, shape (bins, bins), intp
        Elements in each.
    """
    cell = cells(u, v, bins=bins)
    total = np.bincount(cell, weights=values, minlength=bins**2).astype(np.float64)
    count = np.bincount(cell, minlength=bins**2)
    return total.reshape(bins, bins), count.reshape(bins, bins)


def row_norms(operator: Commutator, *, report: Report = lambda _: None) -> RowNorms:
    """Squared norm of every row of A: exact on small sets, by random signs on large ones.

    For signs z, E (A z)_i**2 is the squared norm of row i (common practice, no source).

    Parameters
    ----------
    operator : Commutator
        Applies the real skew A of size n.
    report : callable
        Called with a fraction in [0, 1] for each panel; may raise to stop.

    Returns
    -------
    RowNorms
        Exact up to `EXACT_ROWS` elements.

    Notes
    -----
    Cost: n applications of A up to `EXACT_ROWS` elements, 64 beyond; 2048 n bytes.
    """
    n = operator.size
    exact = n <= EXACT_ROWS
    columns, generator = (n, None) if exact else (PROBES, np.random.default_rng(n))
    total = np.zeros(n)
    for low in range(0, columns, BLOCK):
        report(low / columns)
        width = min(BLOCK, columns - low)
        panel = np.zeros((n, width), order="F")
        if generator is None:
            panel[low + np.arange(width), np.arange(width)] = 1.0
        else:
            panel[:] = generator.choice((-1.0, 1.0), size=(n, width))
        total += np.sum(operator.apply(panel) ** 2, axis=1)
    report(1.0)
    return RowNorms(total if exact else total / PROBES, exact)


def kept_row_norms(values: FloatArray, vectors: FloatArray) -> FloatArray:
    """Squared norm of every row of the cut commutator.

    A_kept = sum lambda (b a^T - a b^T), so that row i has sum lambda**2 (a_i**2 + b_i**2); the
    rest of A is orthogonal to it row by row, and the squared norms subtract.

    Parameters
    ----------
    values : ndarray, shape (r,), float64
        Kept positive eigenvalues.
    vectors : ndarray, shape (n, 2 r or more), float64
        Columns a_0, b_0, a_1, ... of `Modes`.

    Returns
    -------
    ndarray, shape (n,), float64
        Of the rows.
    """
    weights = np.repeat(values**2, 2)
    return np.asarray(vectors[:, : weights.size] ** 2 @ weights, dtype=np.float64)


def projected_state(
    operator: Commutator, values: FloatArray, vectors: FloatArray, *, residual: float
) -> Projected:
    """W on the span of the kept modes, with the commutator applied afresh.

    The factor alone makes W positive and the patch pure whatever its columns are; with A itself
    both hold only for eigenvectors of A, so that they check something.

    Parameters
    ----------
    operator : Commutator
        Applies A, of size n.
    values : ndarray, shape (r,), float64
        Kept positive eigenvalues, descending.
    vectors : ndarray, shape (n, 2 r or more), float64
        Columns a_0, b_0, a_1, ... of `Modes`.
    residual : float
        Largest residual that their certificate found.

    Returns
    -------
    Projected
        Of size 2 r.

    Notes
    -----
    Cost: 2 r applications of A and 16 n r**2 flops; 32 n r bytes.
    """
    columns = vectors[:, : 2 * values.size]
    gram = columns.T @ columns
    r = (gram * np.repeat(values, 2)) @ gram / 2.0
    delta = columns.T @ operator.apply(np.asfortranarray(columns))
    d, top = columns.shape[1], float(values[0]) if values.size else 0.0
    return Projected(
        (r + r.T) / 2.0,
        (delta - delta.T) / 2.0,
        8.0 * d * EPS * top + math.sqrt(d) * residual,
    )


def positivity(projected: Projected) -> Positivity:
    """Ends of the spectrum of W on the span of the kept modes.

    Parameters
    ----------
    projected : Projected
        From `projected_state`.

    Returns
    -------
    Positivity
        Zeros without a mode.

    Notes
    -----
    Cost: a Hermitian problem of size 2 r, eigenvalues only.
    """
    if not projected.r.size:
        return Positivity(0.0, 0.0, 0.0)
    values = np.linalg.eigvalsh(projected.r + 0.5j * projected.delta)
    return Positivity(float(values[0]), float(values[-1]), projected.tolerance)


def purity(projected: Projected) -> Purity:
    """Entropy of the cut state of the whole patch, which is pure.

    The symplectic values are those of i Delta v = (1/s) R v (arXiv:1205.2953).

    Parameters
    ----------
    projected : Projected
        From `projected_state`.

    Returns
    -------
    Purity
        Zeros without a mode.

    Notes
    -----
    Cost: about 10 (2 r)**3 flops.
    """
    if not projected.r.size:
        return Purity(0.0, 0.0, 0.0)
    lower = np.linalg.cholesky(projected.r)
    inner = np.linalg.solve(lower, np.linalg.solve(lower, projected.delta).T)
    singular = np.linalg.svd(inner, compute_uv=False)
    s = 1.0 / singular.reshape(-1, 2).mean(axis=1)
    smallest = 2.0 * float(np.diag(projected.r).min())
    return Purity(
        float(contributions(s).sum()),
        float(np.abs(s - 0.5).max()),
        projected.tolerance / smallest,
    )
