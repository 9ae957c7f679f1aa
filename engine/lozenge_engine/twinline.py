"""The continuum twin beside a setup's sweeps: lines over their points, and data minus twin."""

from __future__ import annotations

import itertools
import math
from collections.abc import Mapping
from typing import Any, NamedTuple

import numpy as np
from numpy.typing import NDArray

from lozenge_engine.averages import Readings, column_of, rows_of
from lozenge_engine.config import Setup
from lozenge_engine.draws import placements, scaled, size_draws
from lozenge_engine.entropies import UNION_RULES
from lozenge_engine.kernels.minus import fit_minus
from lozenge_engine.kernels.scaling import Fit
from lozenge_engine.sweeps import ScalingCurve, nearest_pair
from lozenge_engine.twin import Twin, TwinValue, difference, ladder_slope
from lozenge_engine.twinplan import TwinPlan

__all__ = [
    "Fit",
    "Minus",
    "Outcomes",
    "TwinLine",
    "TwinSeparation",
    "density_line",
    "front_twin",
    "separation_lines",
    "size_line",
]

FloatArray = NDArray[np.float64]
Outcomes = Mapping[str, tuple[Any, ...]]
"""What tasks gave, by their key: missing ones are not done yet, empty ones have failed."""


class Minus(NamedTuple):
    """Data minus twin.

    Attributes
    ----------
    value, error : ndarray, shape (M,), float64
        At each point of the sweep, errors of data and twin added in squares; NaN where not known.
    fit : Fit or None
        A line through the points that the data's own fit uses.
    """

    value: FloatArray
    error: FloatArray
    fit: Fit | None


class TwinLine(NamedTuple):
    """Entropy of all regions on the twin, by support, over the points of a sweep of scale.

    Attributes
    ----------
    value, error : ndarray, shape (M,), float64
        In nats; NaN where not known.
    oversampling : int
        The largest of the first point; 0 before it is known.
    slope, slope_error : float
        Against ln(l/a), through the points that the data's own fit uses; NaN until all are known.
    minus : Minus
        Data minus twin.
    """

    value: FloatArray
    error: FloatArray
    oversampling: int
    slope: float
    slope_error: float
    minus: Minus


class TwinSeparation(NamedTuple):
    """Union entropy and mutual information of the nearest pair on the twin, by separation.

    Attributes
    ----------
    union, mutual_information : mapping of str to tuple of ndarray
        Per union rule (values, errors), each of shape (M,), in nats.
    oversampling : int
        The largest.
    """

    union: Mapping[str, tuple[FloatArray, FloatArray]]
    mutual_information: Mapping[str, tuple[FloatArray, FloatArray]]
    oversampling: int


def front_twin(plan: TwinPlan, outcomes: Outcomes) -> Twin | None:
    """The twin of the present geometry, if it is known.

    Parameters
    ----------
    plan : TwinPlan
        Of the setup.
    outcomes : mapping of str to tuple
        What its tasks gave.

    Returns
    -------
    Twin or None
        None if it is not done, or failed.
    """
    found = outcomes.get(plan.front.key)
    return found[0] if found else None


def density_line(plan: TwinPlan, outcomes: Outcomes, curve: ScalingCurve) -> TwinLine:
    """The twin along the density ladder, whose rungs have sprinklings of their own.

    Parameters
    ----------
    plan : TwinPlan
        Of the setup.
    outcomes : mapping of str to tuple
        What its tasks gave.
    curve : ScalingCurve
        The data, from `lozenge_engine.sweeps.density_curve`.

    Returns
    -------
    TwinLine
        With a line through data minus twin once the data have one and the twin is known at the
        points that it uses; see `lozenge_engine.twin.difference`.
    """
    rungs = [None if t is None else (outcomes.get(t.key) or (None,))[0] for t in plan.density]
    value, error = _values(rungs)
    mean, spread = np.array([(e.mean, e.error) for e in curve.entropy], dtype=float).T
    pooled = _pooled(curve, spread)
    both = np.hypot(pooled, error)
    used = curve.used
    known = bool(used.sum() > 1 and np.isfinite(value[used]).all())
    slope = slope_error = math.nan
    fit = None
    if known:
        line = ladder_slope([t for t, u in zip(rungs, used, strict=True) if t is not None and u])
        slope, slope_error = line.slope, line.error
        if curve.fit is not None and used.sum() > 2:
            fit = _difference_fit(curve, mean, pooled, line.values)
    return TwinLine(
        value, error, _oversampling(rungs), slope, slope_error, Minus(mean - value, both, fit)
    )


def _pooled(curve: ScalingCurve, spread: FloatArray) -> FloatArray:
    """Errors of the means from the scatter that all rungs share, as the data's own fit has it."""
    counts = np.array([e.count for e in curve.entropy], dtype=float)
    scatter = np.array([e.scatter for e in curve.entropy], dtype=float)
    some = curve.used & (counts > 1)
    if not some.any():
        return spread
    variance = float(((counts - 1) * scatter**2)[some].sum() / (counts - 1)[some].sum())
    return np.asarray(np.sqrt(variance / np.maximum(counts, 1.0)), dtype=np.float64)


def _difference_fit(
    curve: ScalingCurve, mean: FloatArray, errors: FloatArray, values: tuple[TwinValue, ...]
) -> Fit:
    """The line through data minus twin, in the form of the data's own fit."""
    from scipy import special

    used = curve.used
    x = curve.x[used]
    found = difference(mean[used], errors[used], values, x=x)
    middle = float(np.average(x, weights=[1.0 / v.error**2 for v in found.values]))
    spare = int(sum(e.count - 1 for e, u in zip(curve.entropy, used, strict=True) if u))
    return Fit(
        found.slope,
        found.error,
        found.mean - found.slope * middle,
        math.hypot(found.mean_error, found.error * middle),
        found.chi2,
        found.dof,
        float(special.fdtrc(found.dof, spare, found.chi2 / found.dof)),
        int(used.sum()),
        "minus the twin; independent sprinklings at every point, one common scatter",
    )


def size_line(
    plan: TwinPlan, outcomes: Outcomes, curve: ScalingCurve, *, setup: Setup, readings: Readings
) -> TwinLine:
    """The twin along the size sweep, whose points share their sprinklings.

    Parameters
    ----------
    plan : TwinPlan
        Of the setup.
    outcomes : mapping of str to tuple
        What its tasks gave.
    curve : ScalingCurve
        The data, from `lozenge_engine.sweeps.size_curve`.
    setup, readings : Setup, mapping
        What the curve was read from.

    Returns
    -------
    TwinLine
        As in `density_line`; the fit of data minus twin is that of
        `lozenge_engine.kernels.minus.fit_minus`.
    """
    found: tuple[Any, ...] = (plan.size and outcomes.get(plan.size.key)) or ()
    points: list[Twin | None] = list(found) or [None] * curve.x.size
    value, error = _values(points)
    mean, spread = np.array([(e.mean, e.error) for e in curve.entropy], dtype=float).T
    used = curve.used
    slope = slope_error = math.nan
    fit = None
    if found and used.sum() > 2:
        centred = curve.x[used] - curve.x[used].mean()
        weight = centred / float(centred @ centred)
        slope, slope_error = (
            float(weight @ value[used]),
            float(np.hypot.reduce(weight * error[used])),
        )
        table = _size_table(setup, readings)[:, used]
        complete = table[np.isfinite(table).all(axis=1)]
        fit = fit_minus(curve.x[used], complete, value[used], error[used])
    return TwinLine(
        value,
        error,
        _oversampling(points),
        slope,
        slope_error,
        Minus(mean - value, np.hypot(spread, error), fit),
    )


def _size_table(setup: Setup, readings: Readings) -> FloatArray:
    """Union entropy by support of every sprinkling (rows) at every size (columns)."""
    plan, regions = size_draws(setup), setup.regions()
    rows = rows_of(readings, plan)
    images = [len(placements(setup, scaled(regions, float(f)))) for f in plan.values]
    ends = np.cumsum([0, *images])
    columns = [
        column_of([row[low:high] for row in rows], "union_support", None)
        for low, high in itertools.pairwise(ends)
    ]
    return np.array(columns).reshape(len(images), len(rows)).T


def separation_lines(plan: TwinPlan, outcomes: Outcomes, *, setup: Setup) -> TwinSeparation | None:
    """The twin along the separation sweep.

    Parameters
    ----------
    plan : TwinPlan
        Of the setup.
    outcomes : mapping of str to tuple
        What its tasks gave.
    setup : Setup
        Its regions decide which pair is the nearest.

    Returns
    -------
    TwinSeparation or None
        None if it is not done.
    """
    found = plan.separation and outcomes.get(plan.separation.key)
    if not found:
        return None
    count = len(setup.regions())
    pairs = [(a, b) for a in range(count) for b in range(a + 1, count)]
    index = pairs.index(nearest_pair(setup.regions()))

    def column(values: list[Any]) -> tuple[FloatArray, FloatArray]:
        value, error = np.array(values, dtype=float).T
        return value, error

    return TwinSeparation(
        {rule: column([getattr(t, f"union_{rule}") for t in found]) for rule in UNION_RULES},
        {rule: column([getattr(t, f"pair_{rule}")[index] for t in found]) for rule in UNION_RULES},
        found[0].oversampling,
    )


def _values(points: list[Twin | None]) -> tuple[FloatArray, FloatArray]:
    """Entropy of all regions by support, with errors; NaN where a twin is not known."""
    pairs = [(math.nan, math.nan) if t is None else tuple(t.union_support) for t in points]
    value, error = np.array(pairs, dtype=float).reshape(len(points), 2).T
    return value, error


def _oversampling(points: list[Twin | None]) -> int:
    """The least of those known."""
    return min((t.oversampling for t in points if t is not None), default=0)
