"""Where the mean spectrum of sprinklings leaves that of the continuum, paired by rank."""

from __future__ import annotations

from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

__all__ = ["Departure", "Ratio", "departure", "merged", "ratio"]

FloatArray = NDArray[np.float64]

RESAMPLES = 200
"""Draws of the realisations; the error of an error is about 5 %."""


class Ratio(NamedTuple):
    """Mean sprinkled spectrum over the reference, rank by rank.

    Attributes
    ----------
    value, error : ndarray, shape (r,), float64
        Ratio of the mean and its standard error; NaN without a second realisation.
    """

    value: FloatArray
    error: FloatArray


class Departure(NamedTuple):
    """The first rank from which the mean stays away from the reference by more than delta.

    Attributes
    ----------
    rank : float
        Counted from 1; NaN if the spectra do not part within the ranks that are known.
    rank_error : float
        Standard deviation over resampled realisations; NaN with fewer than two realisations or
        when the spectra part in fewer than two thirds of the resamples.
    threshold : float
        The reference's eigenvalue at that rank: keeping what lies above it keeps the ranks
        before the departure.
    threshold_error : float
        As for the rank.
    parted : float
        Share of the resamples in which the spectra part within the known ranks; NaN with fewer
        than two realisations.
    ranks : int
        Ranks known in every realisation.
    """

    rank: float
    rank_error: float
    threshold: float
    threshold_error: float
    parted: float
    ranks: int


def ratio(samples: FloatArray, reference: FloatArray) -> Ratio:
    """Divide the mean of sprinkled spectra by a reference, rank by rank.

    Parameters
    ----------
    samples : ndarray, shape (R, r), float64
        Positive eigenvalues of R realisations, descending.
    reference : ndarray, shape (at least r,), float64
        The continuum's, descending, in the same units.

    Returns
    -------
    Ratio
        At the first r ranks.
    """
    known = reference[: samples.shape[1]]
    if samples.shape[0] < 2:
        error = np.full(known.size, np.nan)
    else:
        error = samples.std(axis=0, ddof=1) / np.sqrt(samples.shape[0]) / known
    return Ratio(samples.mean(axis=0) / known, error)


def _first_for_good(away: NDArray[np.bool_]) -> NDArray[np.intp]:
    """Index of the first rank from which a row is true to its end; the length if there is none."""
    near = ~away[..., ::-1]
    behind = np.where(near.any(axis=-1), near.argmax(axis=-1), away.shape[-1])
    return np.asarray(away.shape[-1] - behind)


def departure(
    samples: FloatArray,
    reference: FloatArray,
    *,
    delta: float,
    seed: int = 0,
    resamples: int = RESAMPLES,
) -> Departure:
    """Find the first rank from which ``|mean/reference - 1| > delta`` for good.

    Parameters
    ----------
    samples : ndarray, shape (R, r), float64
        Positive eigenvalues of R realisations by rank, descending.
    reference : ndarray, shape (at least r,), float64
        The continuum's by rank, descending, in the same units.
    delta : float
        Relative departure, > 0.
    seed : int
        Of the resampling.
    resamples : int
        Draws of R realisations with replacement, >= 2.

    Returns
    -------
    Departure
        "For good" reaches to the last rank that is known.

    Notes
    -----
    The error is the bootstrap's over whole realisations (textbook method), which keeps the
    correlation between ranks.  Cost: R r flops for each resample, 8 r bytes each.
    """
    count, ranks = samples.shape
    known = reference[:ranks]
    first = int(_first_for_good(np.abs(samples.mean(axis=0) / known - 1.0) > delta))
    rank, threshold = (first + 1.0, float(known[first])) if first < ranks else (np.nan, np.nan)
    if count < 2:
        return Departure(rank, np.nan, threshold, np.nan, np.nan, ranks)
    rng = np.random.default_rng(seed)
    times = rng.multinomial(count, np.full(count, 1.0 / count), size=resamples) / count
    firsts = _first_for_good(np.abs(times @ samples / known - 1.0) > delta)
    there = firsts < ranks
    parted = float(there.mean())
    if first >= ranks or parted < 2.0 / 3.0:
        return Departure(rank, np.nan, threshold, np.nan, parted, ranks)
    found = firsts[there]
    return Departure(
        rank,
        float(found.std(ddof=1)),
        threshold,
        float(known[found].std(ddof=1)),
        parted,
        ranks,
    )


def merged(spectra: tuple[FloatArray, ...], *, above: float) -> FloatArray:
    """Spectrum of operators that do not touch each other: all their eigenvalues, descending.

    Parameters
    ----------
    spectra : tuple of ndarray, float64
        Positive eigenvalues of each, known above `above`.
    above : float
        Where the least known of them ends.

    Returns
    -------
    ndarray, float64
        Those above it.
    """
    joined = np.concatenate(spectra)
    return np.sort(joined[joined > above])[::-1]
