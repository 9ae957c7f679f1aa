"""Harmonic chain with fixed ends: entropies of blocks by a route without sprinkling or cut.

H = sum_j [p_j**2 + (q_{j+1} - q_j)**2 + m**2 q_j**2]/2 with q_0 = q_{N+1} = 0.  Sources: J. Phys.
A 42 (2009) 504007, arXiv:0905.2562 (entropy from position and momentum correlators).
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray
from scipy import linalg

from lozenge_engine.errors import refuse
from lozenge_engine.kernels.gaussian import contributions

__all__ = [
    "MAX_SITES",
    "Blocks",
    "ChainSlopes",
    "Limit",
    "block_sites",
    "chain_entropies",
    "chain_entropy",
    "chain_slopes",
    "refined_limit",
]

FloatArray = NDArray[np.float64]
Blocks = Sequence[tuple[float, float]]
"""Blocks (a, b] as fractions of the chain, from left to right, not overlapping."""

MAX_SITES = 6000
"""Most sites of a block's correlators, two dense matrices."""


class ChainSlopes(NamedTuple):
    """Entropy of the same blocks while the lattice is refined.

    Attributes
    ----------
    sites : ndarray, shape (M,), int64
        Sites N of the whole chain, doubled from one to the next.
    entropy : ndarray, shape (M,), float64
        Of all blocks together, in nats.
    slopes : ndarray, shape (M - 1,), float64
        [S(2 N) - S(N)]/ln 2, the local slope against ln(1/lattice constant).
    """

    sites: NDArray[np.int64]
    entropy: FloatArray
    slopes: FloatArray


class Limit(NamedTuple):
    """What a sequence tends to as the lattice is refined.

    Attributes
    ----------
    value : float
        The extrapolated value; NaN without four values.
    error : float
        The larger of its last two moves: a bound by experience, not a standard error.
    """

    value: float
    error: float


def refined_limit(values: FloatArray, *, order: float = 1.0) -> Limit:
    """Extrapolate values of lattices whose sites are doubled each time.

    Parameters
    ----------
    values : ndarray, shape (M,), float64
        From the coarsest lattice to the finest, M >= 4; corrections in powers N**(-p) with
        p = 1, 2, and for q > 2 with p = 2/q, min(1, 4/q).
    order : float
        Renyi order q of the entropies that they are made of.

    Returns
    -------
    Limit
        By eliminating the two leading powers, (2**p v(2 N) - v(N))/(2**p - 1) for each.

    Notes
    -----
    The exponent 2/q is common knowledge of the chains' parity effects, written from memory; the
    fixed-end chain at q = 3 follows it (its slopes' deviations fall by 0.62 a doubling, and
    2**(-2/3) is 0.63).
    """
    if values.size < 4:
        return Limit(math.nan, math.nan)
    powers = (1.0, 2.0) if order <= 2.0 else (2.0 / order, min(1.0, 4.0 / order))
    once, twice = values, values
    for power in powers:
        once, ratio = twice, 2.0**power
        twice = (ratio * once[1:] - once[:-1]) / (ratio - 1.0)
    moves = (twice[-1] - once[-1], twice[-1] - twice[-2])
    return Limit(float(twice[-1]), float(np.abs(moves).max()))


def block_sites(blocks: Blocks, *, sites: int) -> NDArray[np.intp]:
    """Sites of blocks: a N + 1, ..., b N, counted from 1.

    Parameters
    ----------
    blocks : sequence of (float, float)
        Fractions 0 <= a < b <= 1.
    sites : int
        Sites N of the whole chain; a N and b N are whole numbers.

    Returns
    -------
    ndarray, shape (n,), intp
        Ascending, counted from 0.

    Raises
    ------
    InputError
        If blocks leave the chain, overlap, or do not end between two sites.
    """
    chosen: list[NDArray[np.intp]] = []
    last = 0
    for low, high in sorted(blocks):
        ends = [low * sites, high * sites]
        first, final = (round(end) for end in ends)
        if any(not math.isclose(e, round(e), rel_tol=0.0, abs_tol=1e-6) for e in ends):
            raise refuse(
                "blocks",
                given=f"({low:g}, {high:g}] of {sites} sites",
                allowed="ends between two sites",
                do="change the number of sites to a multiple of the fractions' denominator",
            )
        if not last <= first < final <= sites:
            raise refuse(
                "blocks",
                given=f"({low:g}, {high:g}]",
                allowed="0 <= a < b <= 1, one after the other",
                do="change the fractions",
            )
        chosen.append(np.arange(first, final))
        last = final
    return np.concatenate(chosen) if chosen else np.empty(0, dtype=np.intp)


def chain_entropy(
    blocks: Blocks, *, sites: int, mass_over_sites: float = 0.0, order: float = 1.0
) -> float:
    """Entropy of blocks of a harmonic chain with fixed ends, in its ground state.

    Parameters
    ----------
    blocks : sequence of (float, float)
        As in `block_sites`; together at most 6 000 sites.
    sites : int
        Sites N of the whole chain, at least 1.
    mass_over_sites : float
        Mass in units of the lattice, m a >= 0: for a chain of length L the mass m is
        (m L)/(N + 1).
    order : float
        Renyi order q, 0.5 to 50; 1 the von Neumann entropy.

    Returns
    -------
    float
        In nats.

    Raises
    ------
    InputError
        As for `block_sites`, or if the blocks are too large.

    Notes
    -----
    Cost: as for `chain_entropies` with one subset.
    """
    together = (tuple(range(len(blocks))),)
    found = chain_entropies(
        blocks, together, sites=sites, mass_over_sites=mass_over_sites, order=order
    )
    return float(found[0])


def chain_entropies(
    blocks: Blocks,
    subsets: Sequence[tuple[int, ...]],
    *,
    sites: int,
    mass_over_sites: float = 0.0,
    order: float = 1.0,
) -> FloatArray:
    """Entropies of several unions of blocks of one chain, from one set of correlators.

    Parameters
    ----------
    blocks : sequence of (float, float)
        As in `block_sites`, from left to right; together at most 6 000 sites.
    subsets : sequence of tuple of int
        Blocks of each union, by their place in `blocks`.
    sites, mass_over_sites, order : int, float, float
        As in `chain_entropy`.

    Returns
    -------
    ndarray, shape (len(subsets),), float64
        In nats.

    Raises
    ------
    InputError
        As for `chain_entropy`.

    Notes
    -----
    X = <q q> and P = <p p> on the blocks; the symplectic values s are the roots of the eigenvalues
    of X P, found as those of L^T P L with X = L L^T (arXiv:0905.2562).  The fixed ends leave no
    zero mode.  The modes are sines, so X_ij = f(i - j) - f(i + j) with f the cosine transform of
    1/(2 omega).  Cost: a transform of length 2 N, about 4 n**3 flops and 32 n**2 bytes for the n
    sites of each union.
    """
    rows = block_sites(blocks, sites=sites)
    if not 1 <= rows.size <= MAX_SITES:
        raise refuse(
            "blocks",
            given=f"{rows.size} sites",
            allowed=f"1 to {MAX_SITES} sites in all blocks",
            do="change the number of sites",
        )
    angle = np.arange(1, sites + 1) * math.pi / (sites + 1)
    omega = np.hypot(2.0 * np.sin(angle / 2.0), mass_over_sites)
    f, g = _transformed(0.5 / omega), _transformed(0.5 * omega)
    parts = [block_sites([block], sites=sites) for block in blocks]
    found = []
    for members in subsets:
        own = np.concatenate([parts[k] for k in members]) + 1
        apart, sums = np.abs(own[:, None] - own), own[:, None] + own
        found.append(_entropy(f[apart] - f[sums], g[apart] - g[sums], order))
    return np.array(found)


def _transformed(weights: FloatArray) -> FloatArray:
    """(1/(N + 1)) sum_k w_k cos(pi k n/(N + 1)) for n = 0 ... 2 N + 1."""
    spectrum = np.concatenate([[0.0], weights, [0.0]])
    return np.asarray(np.fft.irfft(spectrum, 2 * (weights.size + 1)), dtype=np.float64)


def _entropy(x: FloatArray, p: FloatArray, order: float) -> float:
    lower = linalg.cholesky(x, lower=True)
    squares = linalg.eigvalsh(lower.T @ p @ lower)
    values = np.sqrt(np.maximum(squares, 0.25))  # s >= 1/2 up to rounding
    return float(contributions(values, order=order).sum())


def chain_slopes(
    blocks: Blocks, *, first: int, doublings: int, mass: float = 0.0, order: float = 1.0
) -> ChainSlopes:
    """Local slopes of the entropy while the lattice is refined at fixed geometry.

    Parameters
    ----------
    blocks : sequence of (float, float)
        As in `block_sites`.
    first, doublings : int
        Sites of the coarsest chain, and how often they are doubled, at least once.
    mass : float
        Mass times the length of the whole chain, >= 0.
    order : float
        As in `chain_entropy`.

    Returns
    -------
    ChainSlopes
        With one more entropy than slopes.

    Raises
    ------
    InputError
        As for `chain_entropy`.
    """
    sites = np.array([first * 2**j for j in range(doublings + 1)], dtype=np.int64)
    entropy = np.array(
        [
            chain_entropy(blocks, sites=int(n), mass_over_sites=mass / (n + 1), order=order)
            for n in sites
        ]
    )
    return ChainSlopes(sites, entropy, np.diff(entropy) / math.log(2.0))
