"""The real part of W on pairs of elements, set beside the logarithm of flat space.

In two-dimensional Minkowski space a massless field has Re W = -(1/2 pi) ln |tau| + constant, the
constant set by whatever is done about the infrared; in the middle of a diamond the state of
"A ground state for the causal diamond in 2 dimensions", JHEP 10 (2012) 088, arXiv:1205.1296,
approaches it.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray
from scipy import special

from lozenge_engine.kernels.state import cells

__all__ = [
    "GROUPS",
    "LAW_SLOPE",
    "LogFit",
    "PairValues",
    "deviation_map",
    "log_fit",
    "pair_values",
]

FloatArray = NDArray[np.float64]
Report = Callable[[float], None]

LAW_SLOPE = -1.0 / (2.0 * math.pi)
"""Slope of Re W against ln |tau| in two-dimensional Minkowski space, massless (arXiv:1205.1296)."""
GROUPS = 20
"""Groups of elements that the jackknife leaves out in turn."""
BLOCK = 256
"""Rows taken at once."""


class PairValues(NamedTuple):
    """Re W on pairs of elements.

    Attributes
    ----------
    distance : ndarray, shape (M,), float64
        |tau| = sqrt(2 |du dv|) in patch half-widths, of timelike and spacelike pairs.
    softened : ndarray, shape (M,), float64
        What stands for |tau| in the logarithm when it is cut sharply in the wavenumber.
    value : ndarray, shape (M,), float64
        Re W_ij.
    timelike : ndarray, shape (M,), bool
        Whether the pair is related.
    used : ndarray, shape (M,), bool
        Whether it lies in the window of the fit.
    first, second : ndarray, shape (M,), intp
        The elements, as rows of what was given.
    """

    distance: FloatArray
    softened: FloatArray
    value: FloatArray
    timelike: NDArray[np.bool_]
    used: NDArray[np.bool_]
    first: NDArray[np.intp]
    second: NDArray[np.intp]


class LogFit(NamedTuple):
    """Least squares line of Re W against ln |tau|.

    Attributes
    ----------
    slope, slope_error : float
        Per unit of ln |tau|, to be set beside `LAW_SLOPE`; the error by leaving out groups of
        elements.
    constant, constant_error : float
        Of the fitted line at |tau| = 1 patch half-width.
    law_constant, law_constant_error : float
        Constant of the line with the slope `LAW_SLOPE`.
    scatter : float
        Standard deviation of the pairs about the fitted line.
    pairs, elements : int
        How many were used.
    """

    slope: float
    slope_error: float
    constant: float
    constant_error: float
    law_constant: float
    law_constant_error: float
    scatter: float
    pairs: int
    elements: int


def pair_values(
    factor: FloatArray,
    u: FloatArray,
    v: FloatArray,
    *,
    shortest: float,
    longest: float,
    wavenumber: float = math.inf,
) -> PairValues:
    """Re W on all pairs, and which of them lie in a window of separations.

    The logarithm is the integral of (1 - cos kx)/k over wavenumbers in u and in v alike; cut
    sharply at K, ln |x| becomes ln |x| - Ci(K |x|) (DLMF 6.2.13), and so in

        Re W = -(1/4 pi) [ln |du| - Ci(K |du|) + ln |dv| - Ci(K |dv|)] + constant.

    Parameters
    ----------
    factor : ndarray, shape (n, 2 r), float64
        F on the elements considered.
    u, v : ndarray, shape (n,), float64
        Their light-cone coordinates, in patch half-widths.
    shortest : float
        The window asks |du| and |dv| to be at least this: below the shortest kept wavelength the
        cut has smoothed the logarithm, also along the light cone.
    longest : float
        Largest |tau| of the window.
    wavenumber : float
        K, of the cut; infinite without one.

    Returns
    -------
    PairValues
        Each pair once.

    Notes
    -----
    Cost: 2 n**2 r flops, about 40 n**2 bytes.
    """
    first, second = np.triu_indices(u.size, k=1)
    du, dv = u[second] - u[first], v[second] - v[first]
    distance = np.sqrt(2.0 * np.abs(du * dv))
    used = (np.minimum(np.abs(du), np.abs(dv)) >= shortest) & (distance <= longest)
    value = (factor @ factor.T)[first, second] / 2.0
    cosine = sum(special.sici(wavenumber * np.abs(d))[1] for d in (du, dv))
    softened = distance * np.exp(-0.5 * cosine)
    return PairValues(distance, softened, value, du * dv > 0, used, first, second)


def log_fit(pairs: PairValues, *, elements: int) -> LogFit:
    """Fit Re W = slope ln |tau| + constant, with jackknife errors over groups of elements.

    Pairs share elements, so that their scatter says nothing about the errors; leaving out one of
    `GROUPS` groups of elements in turn does, for what changes from element to element (common
    practice, no source).  What all pairs of one sprinkling share is not in it.

    Parameters
    ----------
    pairs : PairValues
        From `pair_values`.
    elements : int
        Elements n that the pairs were made of.

    Returns
    -------
    LogFit
        Of the pairs in the window; all NaN if they are fewer than 100, or with fewer than 2
        elements in each group.

    Notes
    -----
    Cost: O(M).
    """
    x, y = np.log(pairs.distance[pairs.used]), pairs.value[pairs.used]
    if x.size < 100 or elements < 2 * GROUPS:
        return LogFit(*(math.nan,) * 7, x.size, elements)
    # Neighbours in u fall into different groups; sums of each pair of groups, then their margins.
    cell = (pairs.first % GROUPS * GROUPS + pairs.second % GROUPS)[pairs.used]
    sums = np.stack(
        [
            np.bincount(cell, weights=w, minlength=GROUPS**2).reshape(GROUPS, GROUPS)
            for w in (np.ones_like(x), x, y, x * x, x * y)
        ]
    )
    whole = sums.sum(axis=(1, 2))
    without = whole[:, None] - sums.sum(axis=1) - sums.sum(axis=2) + np.einsum("kgg->kg", sums)
    best, each = _lines(whole), _lines(without)
    spread = np.sqrt((GROUPS - 1) * ((each - each.mean(axis=1)[:, None]) ** 2).mean(axis=1))
    slope, constant, law = (float(value) for value in best)
    scatter = float(np.std(y - slope * x - constant))
    errors = [float(e) for e in spread]
    return LogFit(slope, errors[0], constant, errors[1], law, errors[2], scatter, x.size, elements)


def _lines(sums: FloatArray) -> FloatArray:
    """Slope, constant and constant at the law's slope from n, Sx, Sy, Sxx, Sxy."""
    n, sx, sy, sxx, sxy = sums
    slope = (n * sxy - sx * sy) / (n * sxx - sx**2)
    return np.stack([slope, (sy - slope * sx) / n, (sy - LAW_SLOPE * sx) / n])


def deviation_map(
    factor: FloatArray,
    u: FloatArray,
    v: FloatArray,
    *,
    constant: float,
    shortest: float,
    longest: float,
    bins: int,
    report: Report = lambda _: None,
) -> tuple[FloatArray, NDArray[np.intp]]:
    """Mean of Re W - (-(1/2 pi) ln |tau| + constant) by the midpoint of the pair.

    Parameters
    ----------
    factor : ndarray, shape (n, 2 r), float64
        F on the elements considered.
    u, v : ndarray, shape (n,), float64
        Their light-cone coordinates, in patch half-widths.
    constant : float
        Of the law.
    shortest, longest : float
        Window of the pairs, as for `pair_values`.
    bins : int
        Cells along u and along v, from edge to edge of the patch.
    report : callable
        Called with a fraction in [0, 1] for each block of rows; may raise to stop.

    Returns
    -------
    mean : ndarray, shape (bins, bins), float64
        By (cell of u, cell of v); NaN where there is no pair.
    count : ndarray, shape (bins, bins), intp
        Pairs in each.

    Notes
    -----
    Cost: 2 n**2 r flops and about 12 n**2 others; 50 n bytes times 256.
    """
    total = np.zeros(bins * bins)
    count = np.zeros(bins * bins, dtype=np.intp)
    for low in range(0, u.size, BLOCK):
        report(low / u.size)
        rows = slice(low, min(low + BLOCK, u.size))
        block = factor[rows] @ factor[low:].T / 2.0
        du, dv = u[low:] - u[rows, None], v[low:] - v[rows, None]
        area = np.abs(du * dv)
        taken = (du > 0) & (np.minimum(du, np.abs(dv)) >= shortest)
        taken &= 2.0 * area <= longest**2
        i, j = np.nonzero(taken)
        law = LAW_SLOPE * 0.5 * np.log(2.0 * area[i, j]) + constant
        cell = cells(u[low + i] + du[i, j] / 2.0, v[low + i] + dv[i, j] / 2.0, bins=bins)
        total += np.bincount(cell, weights=block[i, j] - law, minlength=bins**2)
        count += np.bincount(cell, minlength=bins**2)
    report(1.0)
    mean = np.divide(total, count, out=np.full(bins**2, math.nan), where=count > 0)
    return mean.reshape(bins, bins), count.reshape(bins, bins)
