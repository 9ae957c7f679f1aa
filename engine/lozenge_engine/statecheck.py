"""Checks of the cut state: the logarithm near the centre, the edges, the loss, purity."""

from __future__ import annotations

import math
import time
from collections.abc import Callable
from dataclasses import replace
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from lozenge_engine.config import Config
from lozenge_engine.errors import refuse
from lozenge_engine.geometry import PATCH_EXTENT
from lozenge_engine.kernels import pairs as near
from lozenge_engine.kernels import state as checks
from lozenge_engine.kernels.pairs import LogFit, PairValues
from lozenge_engine.kernels.state import Positivity, Purity
from lozenge_engine.patchstate import PatchState, patch_state, positions
from lozenge_engine.pointfile import PointFile
from lozenge_engine.stages import Stages
from lozenge_engine.threads import blas_threads

__all__ = [
    "CENTRE",
    "LAW_SLOPE",
    "PURITY_LIMIT",
    "PairBins",
    "PatchMap",
    "StateRecord",
    "state_record",
]

FloatArray = NDArray[np.float64]
Report = Callable[[str, float], None]

LAW_SLOPE = near.LAW_SLOPE
CENTRE = 0.3
"""Half-width of the diamond in the middle whose pairs are fitted, and their largest |tau|."""
CENTRE_MOST, MAP_MOST = 1500, 3000
"""Most elements whose pairs are taken; of more, every second, third, ... in the order of u."""
BINS = 12
"""Cells of the maps along u and along v."""
STEPS = 14
"""Bins of ln |tau|."""
CLOUD = 1500
"""Most pairs shown one by one."""
PURITY_LIMIT = 1500
"""Real vectors above which positivity and purity are left out: dense problems of that size."""


class PairBins(NamedTuple):
    """Pairs near the centre, gathered by ln |tau|, timelike or spacelike, in the fit or not.

    Attributes
    ----------
    distance : ndarray, shape (M,), float64
        Geometric mean of |tau| in the bin.
    value, scatter : ndarray, shape (M,), float64
        Mean of Re W, and the standard deviation of the pairs (not the error of the mean: pairs
        share elements).
    timelike, used : ndarray, shape (M,), bool
        Kind of the pairs, and whether the fit uses them.
    pairs : ndarray, shape (M,), intp
        How many.
    """

    distance: FloatArray
    value: FloatArray
    scatter: FloatArray
    timelike: NDArray[np.bool_]
    used: NDArray[np.bool_]
    pairs: NDArray[np.intp]


class PatchMap(NamedTuple):
    """A quantity by cells of the patch.

    Attributes
    ----------
    t, x : ndarray, shape (M,), float64
        Centres of the cells that hold anything, in patch half-widths.
    value : ndarray, shape (M,), float64
        The quantity.
    held : ndarray, shape (M,), intp
        Pairs or elements in each.
    bins : int
        Cells along u and along v.
    """

    t: FloatArray
    x: FloatArray
    value: FloatArray
    held: NDArray[np.intp]
    bins: int


class StateRecord(NamedTuple):
    """Checks of the cut state of the patch.

    Attributes
    ----------
    config : Config
        The geometry.
    elements : int
        Of the sprinkling that the maps are of.
    shortest, longest : float
        Window of the fit: least |du| and |dv|, largest |tau|, in patch half-widths.
    fits : tuple of LogFit
        Of every sprinkling asked for; the first is that of the maps.
    slope, slope_error, constant, constant_error : float
        Of Re W = slope ln |tau| + constant: means over the sprinklings with their standard errors,
        not below those of the fits; for one sprinkling its own fit, whose errors leave out what
        all its pairs share.
    law_constant, law_constant_error : float
        The same for the constant of -(1/2 pi) ln |tau| + constant.
    softened : LogFit
        Fit of the first sprinkling to the logarithm as a sharp cut in the wavenumber leaves it.
    bins : PairBins
        What the fit is made of.
    cloud : ndarray, shape (2, M), float64
        |tau| and Re W of some pairs near the centre.
    deviation : PatchMap
        Re W minus the law by the midpoint of the pair, mean over pairs in the window.
    lost, lost_error : float
        Frobenius norm of what the cut takes from i Delta, relative to all of it; the error is 0
        where the total is exact.
    loss : PatchMap
        Share of the squared row norms that is lost, by cell.
    exact_rows : bool
        Whether the rows were summed exactly.
    positivity : Positivity or None
        Ends of the spectrum of W, with the operator itself as the commutator.
    purity : Purity or None
        Entropy of the whole patch, likewise; both None above `PURITY_LIMIT` real vectors.
    seconds : float
        From call to record.
    """

    config: Config
    elements: int
    shortest: float
    longest: float
    fits: tuple[LogFit, ...]
    slope: float
    slope_error: float
    constant: float
    constant_error: float
    law_constant: float
    law_constant_error: float
    softened: LogFit
    bins: PairBins
    cloud: FloatArray
    deviation: PatchMap
    lost: float
    lost_error: float
    loss: PatchMap
    exact_rows: bool
    positivity: Positivity | None
    purity: Purity | None
    seconds: float


def state_record(
    config: Config,
    *,
    stages: Stages,
    realisations: int = 1,
    points: PointFile | None = None,
    report: Report | None = None,
    publish: Callable[[StateRecord], None] | None = None,
) -> StateRecord:
    """Check the cut state of the patch.

    Parameters
    ----------
    config : Config
        The geometry; its realisation is the first.
    stages : Stages
        Cache to use and fill.
    realisations : int
        Sprinklings whose fits are averaged, >= 1; imported points are one.
    points : PointFile or None
        The imported points, when the configuration asks for them.
    report : callable or None
        As for `lozenge_engine.pipeline.compute`.
    publish : callable or None
        Called with the record of the first sprinkling before further ones are computed.

    Returns
    -------
    StateRecord
        Maps, loss, positivity and purity of the first sprinkling, fits of all.

    Raises
    ------
    InputError
        If the middle of the patch holds too few elements for a fit.
    Cancelled
        If `report` raises it.

    Notes
    -----
    Cost beyond the modes: 2 M**2 r flops for the pairs of M <= 3000 elements, N applications of
    the operator up to 4000 elements, and 20 (2 r)**3 flops for positivity and purity.
    """
    start = time.perf_counter()
    tell: Report = report or (lambda _stage, _fraction: None)
    first = patch_state(config, stages=stages, points=points, report=tell)
    with blas_threads(1):
        fit, pairs = _fit(first)
        record = _checked(first, fit, pairs, tell)
    record = record._replace(seconds=time.perf_counter() - start)
    if publish is not None:
        publish(record)
    fits = [fit]
    for k in range(1, 1 if config.points.kind == "file" else realisations):
        tell("sprinklings", k / realisations)
        again = replace(config, realisation=config.realisation + k)
        more = patch_state(again, stages=stages, report=lambda _, f: tell("sprinklings", f))
        with blas_threads(1):
            fits.append(_fit(more)[0])
    return _averaged(record, fits)._replace(seconds=time.perf_counter() - start)


def _thinned(rows: NDArray[np.intp], most: int) -> NDArray[np.intp]:
    """Every second, third, ... of some rows, so that at most so many are left."""
    return rows[:: -(-rows.size // most)] if rows.size else rows


def _wavenumber(first: PatchState) -> float:
    """Largest kept wavenumber in u and in v, rho L/lambda; infinite without a cut."""
    cut = first.result.patch.cut
    return first.density * PATCH_EXTENT / cut if cut > 0 else math.inf


def _shortest(first: PatchState) -> float:
    """Shortest kept wavelength, or without a cut the discreteness length."""
    return max(1.0 / math.sqrt(first.density), 2.0 * math.pi / _wavenumber(first))


def _fit(first: PatchState) -> tuple[LogFit, PairValues]:
    """The fit near the centre, and its pairs."""
    u, v = first.result.u, first.result.v
    middle = np.nonzero(np.maximum(np.abs(u), np.abs(v)) <= CENTRE * PATCH_EXTENT)[0]
    rows = _thinned(middle, CENTRE_MOST)
    factor = first.factor(rows) / first.weight_roots(rows)[:, None]
    pairs = near.pair_values(
        factor,
        u[rows],
        v[rows],
        shortest=_shortest(first),
        longest=CENTRE,
        wavenumber=_wavenumber(first),
    )
    fit = near.log_fit(pairs, elements=rows.size)
    if not math.isfinite(fit.slope):
        raise refuse(
            "elements",
            given=f"{fit.elements} near the centre with {fit.pairs} pairs farther apart than the "
            f"shortest kept wavelength, {_shortest(first):.3g}",
            allowed=f"at least {2 * near.GROUPS} elements within {CENTRE:g} of the centre and "
            "100 such pairs",
            do="raise the density, or cut less",
        )
    return fit, pairs


def _gathered(pairs: PairValues) -> PairBins:
    """Pairs by ln |tau| and kind."""
    x = np.log(pairs.distance)
    edges = np.linspace(math.log(CENTRE) - 3.5, math.log(2.0 * CENTRE), STEPS + 1)
    step = np.digitize(x, edges) - 1
    kind = 2 * pairs.timelike + pairs.used
    inside = (step >= 0) & (step < STEPS)
    cell = (step * 4 + kind)[inside]
    n, sx, sy, syy = (
        np.bincount(cell, weights=w[inside], minlength=4 * STEPS)
        for w in (np.ones_like(x), x, pairs.value, pairs.value**2)
    )
    some = np.nonzero(n >= 5)[0]
    n, mean = n[some], sy[some] / n[some]
    return PairBins(
        np.exp(sx[some] / n),
        mean,
        np.sqrt(np.maximum(syy[some] / n - mean**2, 0.0)),
        some % 4 >= 2,
        some % 2 == 1,
        n.astype(np.intp),
    )


def _map(values: FloatArray, count: NDArray[np.intp]) -> PatchMap:
    """The cells that hold anything."""
    i, j = np.nonzero(count > 0)
    centre = ((np.arange(BINS) + 0.5) / BINS * 2.0 - 1.0) * PATCH_EXTENT
    t, x = positions(centre[i], centre[j])
    return PatchMap(t, x, values[i, j], count[i, j], BINS)


def _checked(first: PatchState, fit: LogFit, pairs: PairValues, report: Report) -> StateRecord:
    """All checks of one sprinkling."""
    result, kept = first.result, first.kept
    everywhere = np.arange(result.elements)
    some = _thinned(everywhere, MAP_MOST)
    shortest = _shortest(first)
    deviation = near.deviation_map(
        first.factor(some) / first.weight_roots(some)[:, None],
        result.u[some],
        result.v[some],
        constant=fit.law_constant,
        shortest=shortest,
        longest=CENTRE,
        bins=BINS,
        report=lambda fraction: report("pairs", fraction),
    )
    rows = checks.row_norms(first.operator, report=lambda fraction: report("rows", fraction))
    left = rows.values - checks.kept_row_norms(kept, first.modes.vectors)
    whole, count = checks.binned(result.u, result.v, rows.values, bins=BINS)
    gone, _ = checks.binned(result.u, result.v, left, bins=BINS)
    lost, lost_error = _lost(first)
    report("positivity", 0.0)
    projected = checks.projected_state(
        first.operator, kept, first.modes.vectors, residual=result.certificate.residual
    )
    small = 2 * kept.size <= PURITY_LIMIT
    positivity = checks.positivity(projected) if small else None
    report("purity", 0.0)
    return StateRecord(
        config=result.config,
        elements=result.elements,
        shortest=shortest,
        longest=CENTRE,
        fits=(fit,),
        slope=fit.slope,
        slope_error=fit.slope_error,
        constant=fit.constant,
        constant_error=fit.constant_error,
        law_constant=fit.law_constant,
        law_constant_error=fit.law_constant_error,
        softened=near.log_fit(pairs._replace(distance=pairs.softened), elements=fit.elements),
        bins=_gathered(pairs),
        cloud=_cloud(pairs),
        deviation=_map(*deviation),
        lost=lost,
        lost_error=lost_error,
        loss=_map(np.divide(gone, whole, out=np.zeros_like(gone), where=whole > 0), count),
        exact_rows=rows.exact,
        positivity=positivity,
        purity=checks.purity(projected) if small else None,
        seconds=0.0,
    )


def _cloud(pairs: PairValues) -> FloatArray:
    """Some pairs, evenly taken from all of them."""
    every = slice(None, None, max(1, -(-pairs.value.size // CLOUD)))
    return np.stack([pairs.distance[every], pairs.value[every]])


def _lost(first: PatchState) -> tuple[float, float]:
    """Relative Frobenius norm of what the cut takes from i Delta, and its error."""
    certificate = first.result.certificate
    total = certificate.square_sum_total
    kept = float(np.sum(first.kept**2))
    lost = math.sqrt(max(0.0, 1.0 - kept / total))
    error = kept / total**2 * certificate.square_sum_error / (2.0 * lost) if lost > 0 else 0.0
    return lost, error


def _averaged(record: StateRecord, fits: list[LogFit]) -> StateRecord:
    """The record with means over several sprinklings and their standard errors."""
    record = record._replace(fits=tuple(fits))
    if len(fits) < 2:
        return record
    slope, slope_error = _mean([(f.slope, f.slope_error) for f in fits])
    constant, constant_error = _mean([(f.constant, f.constant_error) for f in fits])
    law_constant, law_constant_error = _mean([(f.law_constant, f.law_constant_error) for f in fits])
    return record._replace(
        slope=slope,
        slope_error=slope_error,
        constant=constant,
        constant_error=constant_error,
        law_constant=law_constant,
        law_constant_error=law_constant_error,
    )


def _mean(fits: list[tuple[float, float]]) -> tuple[float, float]:
    """Mean and standard error; never below what the fits' own errors give, which two may do."""
    values, errors = np.array(fits).T
    between = float(np.std(values, ddof=1)) / math.sqrt(values.size)
    within = math.sqrt(float(np.mean(errors**2)) / values.size)
    return float(np.mean(values)), max(between, within)
