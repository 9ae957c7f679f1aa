"""Statistics of the continuum twin: quasi-uniform sets of several kinds and sizes, one value.

A twin is read on golden-rotated lattices and on scrambled Sobol sets, at several multiples of the
density, all cut at the same wavenumber.
"""

from __future__ import annotations

import math
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray
from scipy import special

__all__ = ["Line", "combined", "line", "normal_points"]

FloatArray = NDArray[np.float64]


class Line(NamedTuple):
    """A straight line through independent values with errors.

    Attributes
    ----------
    slope, slope_error : float
        Weighted least squares; the error follows from the given ones alone.
    constant, constant_error : float
        Value of the line at x = 0.
    mean, mean_error : float
        Weighted mean.
    chi2, flat_chi2 : float
        Weighted sums of squared distances from the line and from the mean.
    dof : int
        Points minus two, for the line.
    """

    slope: float
    slope_error: float
    constant: float
    constant_error: float
    mean: float
    mean_error: float
    chi2: float
    flat_chi2: float
    dof: int


def combined(
    values: FloatArray,
    own: FloatArray | float = 0.0,
    *,
    ratios: FloatArray,
    floor: FloatArray | float = 0.0,
) -> tuple[FloatArray, FloatArray]:
    """The value that quasi-uniform sets agree on, and how far off it may be.

    Deviations from the continuum fall with the density ratio f but follow no power of it: a
    lattice's reciprocal vectors come near a mode's wavenumber at some f and not at others, and a
    mode at the threshold is kept or not.  So there is no fit in 1/f; sets weigh f**2.

    Parameters
    ----------
    values : ndarray, shape (m, q), float64
        q numbers read on each of m >= 2 sets.
    own : ndarray, shape (m, q), or float
        Error that each number has on its set alone.
    ratios : ndarray, shape (m,), float64
        Density f of each set over the nominal one.
    floor : ndarray, shape (q,), or float
        Error that sets of ratio 1 would have if all of them agreed by chance.

    Returns
    -------
    value, error : ndarray, shape (q,), float64
        Weighted mean.  The variance between sets and that of the sets' own errors are multiplied
        by the root of the sum of squared weights, half way (in the logarithm) between sets that
        err alike and independent sets; the floor over the mean ratio is added in squares.
    """
    weight = ratios**2
    weight = weight / weight.sum()
    value = weight @ values
    variance = weight @ (values - value) ** 2 / (1.0 - float(weight @ weight))
    variance = variance + weight @ np.broadcast_to(own, values.shape) ** 2
    variance = variance * math.sqrt(float(weight @ weight))
    least = np.broadcast_to(floor, value.shape) / float(weight @ ratios)
    return value, np.hypot(np.sqrt(variance), least)


def line(x: FloatArray, y: FloatArray, errors: FloatArray) -> Line:
    """Straight line and mean by weighted least squares.

    Parameters
    ----------
    x, y : ndarray, shape (M,), float64
        Abscissae, not all equal, and values; M >= 2.
    errors : ndarray, shape (M,), float64
        Standard errors of independent values, > 0.

    Returns
    -------
    Line
        Slope and mean with errors.
    """
    weight = 1.0 / errors**2
    total = float(weight.sum())
    mean_x, mean = float(weight @ x) / total, float(weight @ y) / total
    spread = float(weight @ (x - mean_x) ** 2)
    slope = float(weight @ ((x - mean_x) * y)) / spread
    return Line(
        slope,
        1.0 / math.sqrt(spread),
        mean - slope * mean_x,
        math.sqrt(1.0 / total + mean_x**2 / spread),
        mean,
        1.0 / math.sqrt(total),
        float(weight @ (y - mean - slope * (x - mean_x)) ** 2),
        float(weight @ (y - mean) ** 2),
        int(x.size) - 2,
    )


def normal_points(count: int, *, dimensions: int, generator: np.random.Generator) -> FloatArray:
    """Standard normal numbers that fill each direction evenly, for averages.

    Parameters
    ----------
    count, dimensions : int
        Points, an even number >= 2, and numbers of each, >= 1.
    generator : numpy.random.Generator
        Decides how the directions are combined.

    Returns
    -------
    ndarray, shape (count, dimensions), float64
        A Latin hypercube: each column holds the middle of each of `count` equally probable
        intervals, scaled to variance 1; with every point comes its negative, so that odd moments
        vanish (common practice, no source).
    """
    middles = (np.arange(count // 2) + 0.5 * count + 0.5) / count
    upper = special.ndtri(middles)
    upper /= np.sqrt(np.mean(upper**2))
    half = np.stack(
        [
            generator.permutation(upper) * generator.choice([-1.0, 1.0], size=upper.size)
            for _ in range(dimensions)
        ],
        axis=1,
    )
    return np.asarray(np.stack([half, -half], axis=1).reshape(-1, dimensions), dtype=np.float64)
