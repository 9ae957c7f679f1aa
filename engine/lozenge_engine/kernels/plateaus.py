"""Where a curve stays level: the widest interval within its errors or a stated tolerance."""

from __future__ import annotations

import math
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

__all__ = ["LEAST_POINTS", "LEAST_WIDTH", "Plateau", "plateau"]

FloatArray = NDArray[np.float64]

LEAST_POINTS = 4
"""Fewer points than this are no plateau."""
LEAST_WIDTH = math.log(1.5)
"""Nor is an interval of ln(alpha) narrower than this: thresholds that differ by half."""


class Plateau(NamedTuple):
    """A level stretch of a curve.

    Attributes
    ----------
    low, high : float
        Ends, in units of the abscissa.
    value : float
        Plain mean of the points in it.
    spread : float
        Largest distance of a point from that mean.
    allowed : float
        The widest band that any of its points was allowed: its error or the tolerance.
    points : int
        Points in it.
    """

    low: float
    high: float
    value: float
    spread: float
    allowed: float
    points: int

    @property
    def width(self) -> float:
        """Length along the abscissa."""
        return self.high - self.low


def plateau(
    x: FloatArray,
    y: FloatArray,
    error: FloatArray,
    *,
    tolerance: float = 0.0,
    width: float = LEAST_WIDTH,
    points: int = LEAST_POINTS,
) -> Plateau | None:
    """Find the widest interval in which every value lies within its band around the mean.

    Parameters
    ----------
    x : ndarray, shape (M,), float64
        Abscissae, increasing; ln(alpha) in a cut study.
    y, error : ndarray, shape (M,), float64
        Values and standard errors.  A value that is not finite ends an interval; an error that is
        not finite counts as 0, so that only the tolerance is left.
    tolerance : float
        Least half-width of the band, >= 0, in units of y: a point's band is the larger of this and
        its error.
    width : float
        Least length of the interval, > 0.
    points : int
        Least number of points in it, >= 2.

    Returns
    -------
    Plateau or None
        None where nothing is level for long enough, which is a valid answer.

    Notes
    -----
    Of equally wide intervals the one with the smaller spread.  Neighbouring values that share
    their samples move together: a curve that drifts slowly stays within its errors for longer
    than independent values would.  Common practice, no source.  Cost: O(M**3) at most.
    """
    finite = np.isfinite(y)
    bands = np.maximum(np.where(np.isfinite(error), error, 0.0), tolerance)
    best: Plateau | None = None
    for i in range(x.size):
        for j in range(x.size - 1, i + points - 2, -1):
            if x[j] - x[i] < width or (best is not None and x[j] - x[i] < best.width - 1e-12):
                break
            if not finite[i : j + 1].all():
                continue
            own = y[i : j + 1]
            away = np.abs(own - own.mean())
            if not (away <= bands[i : j + 1]).all():
                continue
            found = Plateau(
                float(x[i]),
                float(x[j]),
                float(own.mean()),
                float(away.max()),
                float(bands[i : j + 1].max()),
                j - i + 1,
            )
            wider = best is None or found.width > best.width + 1e-12
            if wider or (best is not None and found.spread < best.spread):
                best = found
            break
    return best
