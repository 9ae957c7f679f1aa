"""Krylov spaces of a skew operator, grown in panels and orthogonal to rounding.

The space of A from one vector has a skew tridiagonal projection: A q_k = beta_k q_(k+1) -
beta_(k-1) q_(k-1).  New vectors come from this recurrence in panels, projected at once on the few
vectors that hold the dominant modes; a finished panel meets everything in two matrix products.
"""

from __future__ import annotations

from collections.abc import Callable
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from lozenge_engine.kernels.order import Commutator
from lozenge_engine.kernels.skew import SkewPairs, tridiagonal_pairs

__all__ = [
    "EPS",
    "PANEL",
    "Report",
    "Space",
    "begin",
    "grown",
    "lifted",
    "residual_goal",
    "ritz_values",
    "settled",
    "start_vector",
]

FloatArray = NDArray[np.float64]
Report = Callable[[float], None]

EPS = float(np.finfo(np.float64).eps)
SMALL_PROJECTION = 64
"""Leading vectors against which every new Krylov vector is projected at once."""
PANEL = 8
"""Vectors generated between two projections against everything, to begin with."""
PANEL_OVERLAP = 1e-3
"""Overlap with the earlier vectors above which a panel is projected twice."""


class Space(NamedTuple):
    """A Krylov space of a skew A, and room to grow.

    Attributes
    ----------
    basis : ndarray, shape (n, capacity), float64, Fortran order
        Orthonormal columns q_k in the first `size`; the rest is not set.
    coupling : ndarray, shape (capacity,), float64
        beta_k > 0 in the first size - 1: A q_k = beta_k q_(k+1) - beta_(k-1) q_(k-1).
    size : int
        Dimension.
    exhausted : bool
        Whether the space is invariant under A, up to rounding.
    """

    basis: FloatArray
    coupling: FloatArray
    size: int
    exhausted: bool


def start_vector(n: int, seed: int) -> FloatArray:
    """Deterministic vector with entries uniform in [-1/2, 1/2), from raw 64-bit output.

    Parameters
    ----------
    n : int
        Number of entries.
    seed : int
        Seed of the generator, >= 0.

    Returns
    -------
    ndarray, shape (n,), float64
        Bit-identical on every platform; not normalised.
    """
    raw = np.random.PCG64(np.random.SeedSequence([seed, 0x4B52])).random_raw(n)
    return np.asarray((raw >> np.uint64(11)) * 2.0**-53 - 0.5, dtype=np.float64)


def _orthogonalised(x: FloatArray, *blocks: FloatArray) -> FloatArray:
    """`x` minus its projection on orthonormal blocks, twice, normalised."""
    for _ in range(2):
        for block in blocks:
            x = x - block @ (block.T @ x)
        x = x / np.linalg.norm(x)
    return x


def begin(n: int, deflate: FloatArray, *, capacity: int, seed: int) -> Space:
    """Space of dimension 1 from a fresh vector.

    Parameters
    ----------
    n : int
        Size of the operator.
    deflate : ndarray, shape (n, d), float64
        Orthonormal columns that the space stays orthogonal to; d < n, 0 allowed.
    capacity : int
        Vectors to make room for, >= 1: 8 n capacity bytes.
    seed : int
        Of `start_vector`.

    Returns
    -------
    Space
        Its one vector is orthogonal to `deflate`.
    """
    basis = np.empty((n, capacity), order="F")
    basis[:, 0] = _orthogonalised(start_vector(n, seed), deflate)
    return Space(basis, np.zeros(capacity), 1, exhausted=False)


def _panel(
    operator: Commutator, run: Space, deflate: FloatArray, width: int
) -> tuple[FloatArray, FloatArray]:
    """Next vectors by the three-term recurrence, projected on the dominant part only.

    Rounding brings the dominant modes back within a few steps; the leading deflated modes and
    Krylov vectors hold them, so this keeps a panel usable until it meets the whole space.
    """
    k = run.size
    x = np.empty((run.basis.shape[0], width), order="F")
    norms = np.empty(width)
    known = deflate[:, :SMALL_PROJECTION]
    lead = run.basis[:, : min(k, max(0, SMALL_PROJECTION - known.shape[1]))]
    old, new = run.basis[:, k - 2] if k > 1 else None, run.basis[:, k - 1]
    beta = run.coupling[k - 2] if k > 1 else 0.0
    for i in range(width):
        w = operator.apply(new)
        if old is not None:
            w += beta * old  # A q_k = beta_k q_(k+1) - beta_(k-1) q_(k-1)
        for block in (known, lead):
            if block.shape[1]:
                w -= block @ (block.T @ w)
        beta = float(np.linalg.norm(w))
        norms[i] = beta
        if beta == 0.0:
            return x[:, :i], norms[: i + 1]
        np.divide(w, beta, out=x[:, i])
        old, new = new, x[:, i]
    return x, norms


def _attach(
    run: Space, x: FloatArray, norms: FloatArray, deflate: FloatArray
) -> tuple[Space | None, float]:
    """Orthogonalise a panel against everything and inside itself, and append it.

    Returns None instead of the longer space when the panel has to be made again, shorter.
    """
    k, width = run.size, x.shape[1]
    scale = np.ones(width)
    overlap = 0.0
    for attempt in range(3):
        worst = 0.0
        for block in (deflate, run.basis[:, :k]):
            if block.shape[1]:
                p = block.T @ x
                x -= block @ p
                worst = max(worst, float(np.abs(p).max()))
        overlap = max(overlap, worst)
        if attempt == 0 and worst > 0.3 and width > 1:
            return None, overlap
        try:
            lower = np.linalg.cholesky(x.T @ x)
        except np.linalg.LinAlgError:
            return None, overlap
        # The factor is close to 1 and 8 to 16 wide: its inverse is as good as a solve.
        x = x @ np.linalg.inv(lower).T
        scale *= np.diag(lower)
        if worst < PANEL_OVERLAP and float(np.diag(lower).min()) > 0.1:
            break
    # A q_i = beta_i R_(i+1)/R_i q_(i+1) + earlier ones, from the panel's triangular factor.
    run.coupling[k - 1 : k - 1 + width] = norms[:width] * scale / np.append(1.0, scale[:-1])
    run.basis[:, k : k + width] = x
    return run._replace(size=k + width), overlap


def grown(
    operator: Commutator, run: Space, deflate: FloatArray, *, to: int, report: Report
) -> Space:
    """Extend a Krylov space to dimension `to`, or until it is invariant.

    Parameters
    ----------
    operator : Commutator
        Applies A, of size n.
    run : Space
        The space; its arrays are written to and may be shared with the result.
    deflate : ndarray, shape (n, d), float64
        As in `begin`.
    to : int
        Wanted dimension m; at most n - d is reached.
    report : callable
        Called with the fraction done after every panel; may raise to stop.

    Returns
    -------
    Space
        Of dimension m, or exhausted.

    Notes
    -----
    Cost from dimension 1: m applications of A and about n (2 m**2 + 4 m d + 256 m) flops: the
    panel against everything (once more when the overlap exceeds 1e-3), and each vector against
    the 64 leading ones.
    """
    n = run.basis.shape[0]
    to = min(to, n - deflate.shape[1])
    run = _with_capacity(run, to)
    tiny = 1e3 * EPS * max(float(np.abs(run.coupling).max(initial=0.0)), 1e-300)
    start, width = run.size, PANEL
    while run.size < to and not run.exhausted:
        x, norms = _panel(operator, run, deflate, min(width, to - run.size))
        tiny = max(tiny, 1e3 * EPS * float(norms.max()))
        stop = np.nonzero(norms <= tiny)[0]
        if stop.size and stop[0] == 0:
            return run._replace(exhausted=True)
        x = x[:, : stop[0]] if stop.size else x
        longer, overlap = _attach(run, x, norms, deflate)
        if longer is None:
            if x.shape[1] == 1:
                return run._replace(exhausted=True)
            width = max(1, x.shape[1] // 2)
            continue
        run = longer
        width = _next_width(width, overlap)
        report((run.size - start) / max(1, to - start))
    return run._replace(exhausted=run.exhausted or run.size >= n - deflate.shape[1])


def _next_width(width: int, overlap: float) -> int:
    """Widen panels while they stay nearly orthogonal to the space, narrow them otherwise."""
    if overlap > PANEL_OVERLAP:
        return max(1, width // 2)
    if overlap > 1e-2 * PANEL_OVERLAP:
        return max(1, width - 1)
    return min(2 * PANEL, width + 1) if overlap < 1e-4 * PANEL_OVERLAP else width


def _with_capacity(run: Space, size: int) -> Space:
    """Room for `size` vectors and one coupling more."""
    if size <= run.basis.shape[1]:
        return run
    basis = np.empty((run.basis.shape[0], size + size // 4), order="F")
    basis[:, : run.size] = run.basis[:, : run.size]
    coupling = np.zeros(basis.shape[1])
    coupling[: run.coupling.size] = run.coupling
    return Space(basis, coupling, run.size, run.exhausted)


def _ritz(run: Space, last: float, floor: float) -> tuple[SkewPairs, FloatArray]:
    """Ritz pairs above the floor and their residual norms; `last` couples to the rest."""
    pairs = tridiagonal_pairs(run.coupling[: run.size - 1], above=floor)
    tail = np.hypot(pairs.a[-1], pairs.b[-1])
    return pairs, last * tail


def _last_coupling(operator: Commutator, run: Space) -> float:
    """Norm of what A adds to the space."""
    if run.exhausted:
        return 0.0
    k = run.size
    w = operator.apply(run.basis[:, k - 1])
    if k > 1:
        w += run.coupling[k - 2] * run.basis[:, k - 2]
    return float(np.linalg.norm(w))


def settled(
    operator: Commutator,
    run: Space,
    deflate: FloatArray,
    *,
    floor: float,
    dimension: int,
    report: Report,
) -> tuple[Space, SkewPairs]:
    """Grow a space until every Ritz pair above the floor has converged.

    Parameters
    ----------
    operator : Commutator
        Applies A, of size n.
    run : Space
        The space; its arrays are written to.
    deflate : ndarray, shape (n, d), float64
        As in `begin`.
    floor : float
        Bound > 0 on the eigenvalues of i A.
    dimension : int
        Dimension to look at first; then 5 % and at least 16 more at a time.
    report : callable
        As in `grown`.

    Returns
    -------
    run : Space
        The grown space.
    pairs : SkewPairs
        Ritz pairs above the floor, in the coordinates of the space; each residual is at most
        `residual_goal`, unless the space is exhausted.
    """
    while True:
        run = grown(operator, run, deflate, to=dimension, report=report)
        pairs, residuals = _ritz(run, _last_coupling(operator, run), floor)
        top = float(pairs.values[0]) if pairs.values.size else floor
        if run.exhausted or residuals.max(initial=0.0) <= residual_goal(floor, top):
            return run, pairs
        dimension = run.size + max(2 * PANEL, run.size // 20)


def residual_goal(floor: float, top: float) -> float:
    """Residual at which a pair counts as converged: 1e-10 of the floor, or rounding.

    Parameters
    ----------
    floor : float
        Lowest eigenvalue looked for.
    top : float
        Largest eigenvalue found.

    Returns
    -------
    float
        The larger of 1e-10 floor and 30 eps top.
    """
    return max(1e-10 * floor, 30.0 * EPS * top)


def lifted(run: Space, pairs: SkewPairs) -> FloatArray:
    """Ritz vectors on the points; a lives on even Krylov vectors and b on odd ones.

    Parameters
    ----------
    run : Space
        Of dimension m, on n points.
    pairs : SkewPairs
        r pairs from `settled`.

    Returns
    -------
    ndarray, shape (n, 2 r), float64, Fortran order
        Columns a_0, b_0, a_1, ...

    Notes
    -----
    Cost: 2 n m r flops, 16 n r bytes.
    """
    n, r = run.basis.shape[0], pairs.values.size
    vectors = np.empty((n, 2 * r), order="F")
    even, odd = run.basis[:, 0 : run.size : 2], run.basis[:, 1 : run.size : 2]
    za, zb = np.ascontiguousarray(pairs.a[0::2]), np.ascontiguousarray(pairs.b[1::2])
    for low in range(0, n, 8192):
        rows = slice(low, min(n, low + 8192))
        vectors[rows, 0::2] = even[rows] @ za
        vectors[rows, 1::2] = odd[rows] @ zb
    return vectors


def ritz_values(space: Space, *, above: float) -> FloatArray:
    """Ritz values above a bound, converged or not.

    Parameters
    ----------
    space : Space
        Of dimension m.
    above : float
        Bound > 0.

    Returns
    -------
    ndarray, float64
        Descending.
    """
    return tridiagonal_pairs(space.coupling[: space.size - 1], above=above).values
