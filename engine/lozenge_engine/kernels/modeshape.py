"""Single modes of i Delta on the elements: lifted, fixed in phase, set beside the continuum's.

A mode is psi = (a + i b)/sqrt 2 with real orthonormal a, b, so that sum |psi|**2 = 1 and
sum psi**2 = 0: its real and imaginary part carry the same weight at any phase, and a phase has to
be fixed by a convention.
"""

from __future__ import annotations

import functools
import math
from collections.abc import Sequence
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from lozenge_engine.kernels.gaussian import restricted_spectrum
from lozenge_engine.kernels.laws import diamond_eigenvalues
from lozenge_engine.kernels.skew import SkewPairs

__all__ = [
    "CLEAR",
    "Splitting",
    "aligned",
    "anchored",
    "block_shares",
    "diamond_mode",
    "lifted_pairs",
    "overlaps",
    "splitting",
]

FloatArray = NDArray[np.float64]
ComplexArray = NDArray[np.complex128]

CLEAR = 0.9
"""Share on one region from which a mode counts as living there."""


class Splitting(NamedTuple):
    """How well the modes of a union's operator split by region.

    Attributes
    ----------
    mean_share : float
        Mean over the modes, each counted once, of the largest share on one region: 1 if every
        mode lives on one region, 1/K if all are spread evenly over K regions.
    clear : int
        Modes of which one region holds at least `CLEAR`.
    modes : int
        Modes counted.
    """

    mean_share: float
    clear: int
    modes: int


def lifted_pairs(factors: Sequence[FloatArray]) -> SkewPairs:
    """Eigenpairs of the cut i Delta restricted to some blocks of rows, on the rows themselves.

    Parameters
    ----------
    factors : sequence of ndarray, shape (n_k, 2 r), float64
        `gaussian.restricted` of each block.

    Returns
    -------
    SkewPairs
        floor(min(n, 2 r)/2) pairs, n the rows of all blocks together; vectors of shape
        (n, pairs), the blocks below each other.

    Notes
    -----
    Cost: 8 n r**2 flops and those of `gaussian.restricted_spectrum` with d = min(n, 2 r), then
    2 n d**2 to lift; 16 n d bytes.
    """
    factor = np.vstack(factors)
    if factor.shape[0] <= factor.shape[1]:
        return restricted_spectrum(factor).pairs
    isometry, small = np.linalg.qr(factor)
    pairs = restricted_spectrum(small).pairs
    return pairs._replace(a=isometry @ pairs.a, b=isometry @ pairs.b)


def block_shares(pairs: SkewPairs, blocks: Sequence[int]) -> FloatArray:
    """Squared norm of every mode on consecutive blocks of rows.

    Parameters
    ----------
    pairs : SkewPairs
        Vectors of shape (n, pairs).
    blocks : sequence of int
        Rows of each block, K of them, n in all.

    Returns
    -------
    ndarray, shape (pairs, K), float64
        Rows sum to 1.
    """
    weight = (pairs.a**2 + pairs.b**2) / 2.0
    starts = np.cumsum((0, *blocks))[:-1]
    return np.asarray(np.add.reduceat(weight, starts, axis=0).T, dtype=np.float64)


def splitting(shares: FloatArray, kept: NDArray[np.bool_]) -> Splitting:
    """How well the kept modes of a union's operator split by region.

    Parameters
    ----------
    shares : ndarray, shape (pairs, K), float64
        From `block_shares`.
    kept : ndarray, shape (pairs,), bool
        Which modes count.

    Returns
    -------
    Splitting
        NaN and zeros without a kept mode.
    """
    largest = shares[kept].max(axis=1)
    mean = float(largest.mean()) if largest.size else math.nan
    return Splitting(mean, int((largest >= CLEAR).sum()), largest.size)


@functools.cache
def _wavenumbers(count: int) -> FloatArray:
    """The first k L of the diamond's continuum spectrum, lambda = (elements/4)/(k L)."""
    return 0.25 / diamond_eigenvalues(count, elements=1.0)


def diamond_mode(u: FloatArray, v: FloatArray, *, rank: int) -> ComplexArray:
    """Positive mode of i Delta on a causal diamond, massless, continuum.

    Source: "A ground state for the causal diamond in 2 dimensions", JHEP 10 (2012) 088,
    arXiv:1205.1296: exp(-iku) - exp(-ikv) with k L = n pi, and exp(-iku) + exp(-ikv) - 2 cos(kL)
    with tan(kL) = 2 kL; here in the phase in which both are real on t = t0.

    Parameters
    ----------
    u, v : ndarray, shape (n,), float64
        Light-cone coordinates from the diamond's centre in units of its half-sides, -1 to 1.
    rank : int
        1 for the largest eigenvalue; even ranks are of the first family, odd ones of the second.

    Returns
    -------
    ndarray, shape (n,), complex128
        Not normalised.
    """
    k = float(_wavenumbers(-(-rank // 64) * 64)[rank - 1])
    if rank % 2 == 0:
        return np.asarray(1j * (np.exp(-1j * k * u) - np.exp(-1j * k * v)))
    return np.asarray(np.exp(-1j * k * u) + np.exp(-1j * k * v) - 2.0 * math.cos(k))


def overlaps(mode: ComplexArray, others: Sequence[ComplexArray]) -> FloatArray:
    """Overlap |<mode|other>| with functions sampled on the same elements.

    Parameters
    ----------
    mode : ndarray, shape (n,), complex128
        The mode.
    others : sequence of ndarray, shape (n,), complex128
        What it is compared with; each is normalised on the elements first.

    Returns
    -------
    ndarray, shape (len(others),), float64
        0 to 1, whatever the phases.
    """
    norm = float(np.linalg.norm(mode))
    return np.array(
        [abs(np.vdot(other, mode)) / (norm * float(np.linalg.norm(other))) for other in others]
    )


def aligned(mode: ComplexArray, reference: ComplexArray) -> ComplexArray:
    """Turn a mode's phase so that <reference|mode> is real and positive.

    Parameters
    ----------
    mode, reference : ndarray, shape (n,), complex128
        Functions on the same elements.

    Returns
    -------
    ndarray, shape (n,), complex128
        The mode times a phase; `anchored` where the two are orthogonal.
    """
    product = complex(np.vdot(reference, mode))
    return anchored(mode) if product == 0 else mode * (product.conjugate() / abs(product))


def anchored(mode: ComplexArray) -> ComplexArray:
    """Turn a mode's phase so that its largest value is real and positive.

    Parameters
    ----------
    mode : ndarray, shape (n,), complex128
        The mode.

    Returns
    -------
    ndarray, shape (n,), complex128
        The mode times a phase.
    """
    largest = complex(mode[np.argmax(np.abs(mode))])
    return mode * (largest.conjugate() / abs(largest))
