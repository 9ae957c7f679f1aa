"""Currents on a lattice: mutual information of two blocks of the chiral current's algebra.

[f_i, f_(i+1)] = i, and in the vacuum F_ij = <{f_i, f_j}>/2 = 2/(pi (1 - (i - j)**2)) for even
i - j, 0 for odd: the Fourier transform of |sin k|, half of the commutator's modulus |2 sin k|, so
that the whole lattice is pure.  Both chiralities live on it (k near 0 and near pi), so results are
halved.  Source: a throw-away computation of the project's own, done twice; a closed form is in
arXiv:1809.00026.
"""

from __future__ import annotations

import math
from functools import lru_cache
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from lozenge_engine.errors import refuse
from lozenge_engine.kernels.chain import Limit, refined_limit
from lozenge_engine.kernels.gaussian import contributions

__all__ = [
    "CURRENT_GAPS",
    "CurrentCurve",
    "cross_ratio",
    "current_curve",
    "current_mutual",
    "current_mutual_of_length",
    "small_eta",
]

FloatArray = NDArray[np.float64]

LENGTHS = (64, 128, 256, 512)
"""Sites of each block, doubled each time."""
CURRENT_GAPS = (8.0, 4.0, 2.0, 1.5, 1.0, 0.75, 0.5, 0.25, 0.125, 0.0625)
"""Gaps of the curve in units of the blocks' length: multiples of 1/32, so an even number of
sites at every length from 64 on."""


class CurrentCurve(NamedTuple):
    """Mutual information of two equal blocks of the chiral current.

    Attributes
    ----------
    eta : ndarray, shape (M,), float64
        Cross ratios, ascending.
    mutual : ndarray, shape (M,), float64
        Per chirality, in nats.
    error : ndarray, shape (M,), float64
        How far the extrapolation in the length may be off.
    """

    eta: FloatArray
    mutual: FloatArray
    error: FloatArray


def cross_ratio(first: float, second: float, gap: float) -> float:
    """Cross ratio l1 l2/((l1 + d)(l2 + d)) of two intervals.

    Parameters
    ----------
    first, second : float
        Their lengths l1, l2 > 0.
    gap : float
        Distance d >= 0 between them, in the same unit.

    Returns
    -------
    float
        0 < eta <= 1, 1 where they touch.
    """
    return first * second / ((first + gap) * (second + gap))


def small_eta(eta: FloatArray) -> FloatArray:
    """Mutual information far apart, eta**2/60 per chirality (from memory).

    Parameters
    ----------
    eta : ndarray
        Cross ratios, well below 1.

    Returns
    -------
    ndarray
        Same shape, in nats.
    """
    return np.asarray(eta**2 / 60.0, dtype=np.float64)


def current_mutual_of_length(*, length: int, gap: int) -> float:
    """Mutual information of two equal blocks of one lattice, per chirality.

    Parameters
    ----------
    length : int
        Sites of each block, even, 2 to 2 000.
    gap : int
        Sites between them, even, >= 0.

    Returns
    -------
    float
        In nats: half of S_A + S_B - S_AB.

    Raises
    ------
    InputError
        If a number is odd or out of range: an odd block has a centre, and no entropy of its own.

    Notes
    -----
    Cost: about 30 length**3 flops, 40 length**2 bytes.
    """
    if length % 2 or gap % 2 or not 2 <= length <= 2000 or gap < 0:
        raise refuse(
            "blocks of currents",
            given=f"{length} sites each, {gap} between them",
            allowed="even numbers, 2 to 2000 sites each",
            do="make them even",
        )
    block = np.arange(length)
    union = np.concatenate([block, block + length + gap])
    return _block_entropy(length) - _entropy(union) / 2.0


@lru_cache(maxsize=16)
def _block_entropy(length: int) -> float:
    return _entropy(np.arange(length))


def _entropy(sites: NDArray[np.intp]) -> float:
    """Entropy of the currents on some sites, as many even ones as odd ones.

    F joins sites of one parity only and the commutator neighbours only, so that 1/s are the
    singular values of L_e**-1 C_eo L_o**-T with F = L L^T on either parity.
    """
    even, odd = sites[sites % 2 == 0], sites[sites % 2 == 1]
    lower = [np.linalg.cholesky(_correlator(own)) for own in (even, odd)]
    apart = odd - even[:, None]
    commutator = (apart == 1).astype(float) - (apart == -1)
    inner = np.linalg.solve(lower[1], np.linalg.solve(lower[0], commutator).T)
    s = 1.0 / np.linalg.svd(inner, compute_uv=False)
    return float(contributions(s).sum())


def _correlator(sites: NDArray[np.intp]) -> FloatArray:
    """F between sites of one parity."""
    apart = (sites[:, None] - sites).astype(float)
    return np.asarray(2.0 / (math.pi * (1.0 - apart**2)))


@lru_cache(maxsize=64)
def current_mutual(gap: float) -> Limit:
    """Mutual information per chirality in the limit of long blocks.

    Parameters
    ----------
    gap : float
        Between the blocks, in units of their length; a multiple of 1/32, so that 64 sites have an
        even number between them.

    Returns
    -------
    Limit
        In nats, from 64 to 512 sites.

    Raises
    ------
    InputError
        As for `current_mutual_of_length`.
    """
    found = [current_mutual_of_length(length=n, gap=round(gap * n)) for n in LENGTHS]
    return refined_limit(np.array(found))


def current_curve(gaps: tuple[float, ...] = CURRENT_GAPS) -> CurrentCurve:
    """Mutual information per chirality against the cross ratio.

    Parameters
    ----------
    gaps : tuple of float
        In units of the blocks' length, as for `current_mutual`.

    Returns
    -------
    CurrentCurve
        One value for each gap.

    Notes
    -----
    Cost: 5e9 flops a gap the first time; then it is remembered.
    """
    order = sorted(gaps, reverse=True)
    limits = [current_mutual(gap) for gap in order]
    return CurrentCurve(
        np.array([cross_ratio(1.0, 1.0, gap) for gap in order]),
        np.array([limit.value for limit in limits]),
        np.array([limit.error for limit in limits]),
    )
