"""The twin on a density ladder: its slope, and data minus twin."""

from __future__ import annotations

import math
from collections.abc import Sequence
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from lozenge_engine.errors import refuse
from lozenge_engine.kernels.twin import combined, line
from lozenge_engine.placement import abscissa
from lozenge_engine.twinvalues import Quantity, Twin, TwinValue, column_of, quantity_of

__all__ = ["TwinDifference", "TwinSlope", "difference", "ladder_slope", "slope_of"]

FloatArray = NDArray[np.float64]


class TwinSlope(NamedTuple):
    """Twins of a density ladder at one geometry.

    Attributes
    ----------
    x : ndarray, shape (P,), float64
        ln(l/a) of each rung, as in the fits of the data (mean over the regions).
    values : tuple of TwinValue
        One for each rung.
    slope, error : float
        Against ln(l/a), every rung weighing the same.
    low, high : float
        Slope minus and plus two errors.
    constant, constant_error : float
        Value of the line at the mean of x.
    scatter : float
        Root mean square distance of the rungs from the line: modes enter one by one, so that even
        an exact twin is no straight line.
    method : str
        Which estimate of the error was the largest, and counts.
    """

    x: FloatArray
    values: tuple[TwinValue, ...]
    slope: float
    error: float
    low: float
    high: float
    constant: float
    constant_error: float
    scatter: float
    method: str


class TwinDifference(NamedTuple):
    """Data minus twin on a ladder.

    Attributes
    ----------
    x : ndarray, shape (P,), float64
        As in `TwinSlope`.
    values : tuple of TwinValue
        One for each rung, errors of data and twin added in squares.
    slope, error, constant, constant_error : float
        Straight line by weighted least squares, and its value at x = 0.
    mean, mean_error : float
        Weighted mean, which is the constant if there is no slope.
    chi2, dof : float, int
        Of the line.
    flat_chi2, flat_dof : float, int
        Of a constant.
    """

    x: FloatArray
    values: tuple[TwinValue, ...]
    slope: float
    error: float
    constant: float
    constant_error: float
    mean: float
    mean_error: float
    chi2: float
    dof: int
    flat_chi2: float
    flat_dof: int


def ladder_slope(
    rungs: Sequence[Twin], *, quantity: Quantity = "union_support", index: int = 0
) -> TwinSlope:
    """Slope of the twins of a density ladder against ln(l/a).

    Parameters
    ----------
    rungs : sequence of Twin
        Two or more that differ in density.
    quantity : str
        One of `lozenge_engine.twinvalues.QUANTITIES`.
    index : int
        Which region or pair.

    Returns
    -------
    TwinSlope
        Rungs share their kinds of sets, so their errors may be alike: the line is also fitted to
        each set's own rungs, and those slopes are combined as any other number of a twin.  The
        largest of that error and the two of `slope_of` counts.

    Raises
    ------
    InputError
        With fewer than two densities.
    """
    rungs = list(rungs)
    x = np.array([abscissa(r.config.regions, r.config.points)[0] for r in rungs])
    found = slope_of([quantity_of(rung, quantity, index=index) for rung in rungs], x=x)
    shared = _shared_error(rungs, x, column_of(len(rungs[0].config.regions), quantity, index=index))
    if not shared > found.error:
        return found
    return found._replace(
        error=shared,
        low=found.slope - 2.0 * shared,
        high=found.slope + 2.0 * shared,
        method="slopes of each set's own rungs",
    )


def slope_of(values: Sequence[TwinValue], *, x: FloatArray) -> TwinSlope:
    """Slope of twin values from the values alone.

    Parameters
    ----------
    values : sequence of TwinValue, length P
        One for each rung.
    x : ndarray, shape (P,), float64
        ln(l/a) of the rungs; P >= 2, not all equal.

    Returns
    -------
    TwinSlope
        Error: the rungs' own taken as independent, or what the rungs' distances from the line
        say, whichever is larger.

    Raises
    ------
    InputError
        With fewer than two different abscissae.
    """
    if len(values) != x.size or x.size < 2 or np.ptp(x) == 0.0:
        raise refuse(
            "ladder of twins",
            given=f"{len(values)} values at {np.unique(x).size} densities",
            allowed="one value for each of two or more different densities",
            do="add a density",
        )
    y, errors = np.array(values, dtype=np.float64).T
    lever = _lever(x)
    slope = float(lever @ y)
    residual = y - y.mean() - slope * (x - x.mean())
    scatter = float(np.sqrt(np.mean(residual**2)))
    independent = float(np.sqrt(np.sum((lever * errors) ** 2)))
    spread = float(np.sqrt(np.sum(residual**2) / max(1, x.size - 2) * np.sum(lever**2)))
    error = max(independent, spread)
    return TwinSlope(
        x=x,
        values=tuple(values),
        slope=slope,
        error=error,
        low=slope - 2.0 * error,
        high=slope + 2.0 * error,
        constant=float(y.mean()),
        constant_error=float(np.sqrt(np.mean(errors**2))),
        scatter=scatter,
        method="errors of the rungs" if independent >= spread else "distances from the line",
    )


def _lever(x: FloatArray) -> FloatArray:
    """What each rung's value adds to the slope, every rung weighing the same."""
    centred = x - x.mean()
    return np.asarray(centred / np.sum(centred**2), dtype=np.float64)


def _shared_error(rungs: list[Twin], x: FloatArray, column: int) -> float:
    """Error of the slope from the slopes of each set's own rungs; NaN without common sets."""
    by_set = [{r.points: r.numbers[column] for r in rung.readings} for rung in rungs]
    shared = [points for points in by_set[0] if all(points in one for one in by_set)]
    if len(shared) < 2:
        return math.nan
    slopes = np.array([[one[points] for one in by_set] for points in shared]) @ _lever(x)
    ratios = np.array([float(points.oversampling) for points in shared])
    return float(combined(slopes[:, None], ratios=ratios)[1][0])


def difference(
    means: FloatArray, errors: FloatArray, values: Sequence[TwinValue], *, x: FloatArray
) -> TwinDifference:
    """Data minus twin on a ladder, with its own line.

    Parameters
    ----------
    means, errors : ndarray, shape (P,), float64
        Of the data; rungs are independent.
    values : sequence of TwinValue, length P
        Of the twin at the same rungs.
    x : ndarray, shape (P,), float64
        ln(l/a) of the rungs, P >= 2, not all equal.

    Returns
    -------
    TwinDifference
        Errors of data and twin added in squares.

    Raises
    ------
    InputError
        If the lengths differ, there are fewer than two rungs, or a rung has no error at all.
    """
    sizes = {len(means), len(errors), len(values), len(x)}
    if len(sizes) != 1 or len(x) < 2 or np.ptp(x) == 0.0:
        raise refuse(
            "data minus twin",
            given=f"{len(means)} means, {len(errors)} errors, {len(values)} twins, {len(x)} rungs",
            allowed="as many of each, at two or more densities",
            do="give one of each for every rung",
        )
    y, own = np.array(values, dtype=np.float64).T
    gap = np.asarray(means - y, dtype=np.float64)
    both = np.hypot(errors, own)
    if not (both > 0).all():
        raise refuse(
            "data minus twin",
            given="a rung without an error",
            allowed="rungs whose data or twin has one",
            do="average more sprinklings",
        )
    fit = line(x, gap, both)
    return TwinDifference(
        x=x,
        values=tuple(TwinValue(float(a), float(b)) for a, b in zip(gap, both, strict=True)),
        slope=fit.slope,
        error=fit.slope_error,
        constant=fit.constant,
        constant_error=fit.constant_error,
        mean=fit.mean,
        mean_error=fit.mean_error,
        chi2=fit.chi2,
        dof=fit.dof,
        flat_chi2=fit.flat_chi2,
        flat_dof=fit.dof + 1,
    )
