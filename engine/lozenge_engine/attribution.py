"""One geometry's slopes side by side: data, continuum twin, chain, data minus twin; a verdict."""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from lozenge_engine.config import Config
from lozenge_engine.estimates import Regime
from lozenge_engine.geometry import Region
from lozenge_engine.kernels import departure as departures
from lozenge_engine.kernels.laws import nominal_modes
from lozenge_engine.kernels.scaling import estimate
from lozenge_engine.ladders import Ladder
from lozenge_engine.routes import ChainRoute
from lozenge_engine.twin import Twin
from lozenge_engine.twinslope import ladder_slope
from lozenge_engine.verdict import Slope, verdict

__all__ = ["DueRow", "row_of"]

FloatArray = NDArray[np.float64]


class DueRow(NamedTuple):
    """One geometry on its ladder of P cells; entropies of all regions by support, in nats.

    Attributes
    ----------
    label : str
        What tells it from the other rows; empty for the only one.
    axis : {"density", "half_width"}
        What is varied.
    regions : tuple of Region
        Of its first cell.
    mass, order : float, float
        In inverse patch half-widths; Renyi order.
    reference : float or None
        Calabrese-Cardy slope.
    no_reference : str
        Why there is none; empty with one.
    density, x : ndarray, shape (P,), float64
        Elements per unit area; ln(l/a).
    placement : ndarray, shape (P,), int64
        Placement class.
    used : ndarray, shape (P,), bool
        Which cells the fits use.
    data, data_error, twin, twin_error, minus, minus_error : ndarray, shape (P,), float64
        Means and errors; NaN where unknown.
    data_slope, twin_slope, chain_slope, minus_slope : Slope
        Slopes against ln(l/a); NaN where unknown, with the reason as note.
    constant : Slope
        Data minus twin if it has no slope, with the fit of a constant for each class.
    chain : ChainRoute or None
        None where it is not known.
    settled : bool
        Whether the data's own fit is.
    why : str
        Why it is or is not.
    verdict : str
        One sentence.
    regime : Regime or None
        Where the data's fit stands; None without a campaign's data.
    twin_kept : ndarray, shape (P,), float64
        Kept over nominal modes of the twin, mean over the regions; NaN where unknown.
    """

    label: str
    axis: str
    regions: tuple[Region, ...]
    mass: float
    order: float
    reference: float | None
    no_reference: str
    density: FloatArray
    x: FloatArray
    placement: NDArray[np.int64]
    used: NDArray[np.bool_]
    data: FloatArray
    data_error: FloatArray
    twin: FloatArray
    twin_error: FloatArray
    minus: FloatArray
    minus_error: FloatArray
    data_slope: Slope
    twin_slope: Slope
    chain_slope: Slope
    minus_slope: Slope
    constant: Slope
    chain: ChainRoute | None
    settled: bool
    why: str
    verdict: str
    regime: Regime | None = None
    twin_kept: FloatArray = np.empty(0)


def row_of(ladder: Ladder, found: Mapping[Config, Twin], chain: ChainRoute | None) -> DueRow:
    """One row of the table.

    Parameters
    ----------
    ladder : Ladder
        With or without data.
    found : mapping of Config to Twin
        What is known of the twins.
    chain : ChainRoute or None
        The chain at the same fractions.

    Returns
    -------
    DueRow
        With its verdict.
    """
    size, first = len(ladder.cells), ladder.cells[0]
    data, data_error = np.full((2, size), math.nan)
    for block in ladder.blocks:
        for column, k in enumerate(block.cells):
            one = estimate(block.samples[:, column])
            data[k], data_error[k] = one.mean, one.error
    known = [found.get(config) for config in ladder.cells]
    pairs = [(math.nan, math.nan) if t is None else tuple(t.union_support) for t in known]
    twin, twin_error = np.array(pairs, dtype=float).reshape(size, 2).T
    data_slope, settled, why = _data_slope(ladder)
    twins_slope = _twin_slope(ladder, known)
    minus_slope, constant = _minus(ladder, twin, twin_error)
    return DueRow(
        ladder.label,
        ladder.axis,
        first.regions,
        first.mass,
        first.order,
        ladder.reference,
        ladder.no_reference,
        np.array([config.points.density for config in ladder.cells]),
        ladder.x,
        ladder.placement,
        ladder.used,
        data,
        data_error,
        twin,
        twin_error,
        data - twin,
        np.hypot(data_error, twin_error),
        data_slope,
        twins_slope,
        _chain_slope(ladder, chain),
        minus_slope,
        constant,
        chain,
        settled,
        why,
        verdict(
            data_slope,
            twins_slope,
            minus_slope,
            reference=ladder.reference,
            settled=settled,
            why=why,
        ),
        ladder.regime,
        np.array([math.nan if t is None else _kept_ratio(t) for t in known]),
    )


def _kept_ratio(twin: Twin) -> float:
    """Kept over nominal modes, mean over the regions."""
    source = twin.config.points
    ratios = [
        kept.value / nominal_modes(source.elements(region))
        for kept, region in zip(twin.kept, twin.config.regions, strict=True)
    ]
    return float(np.mean(ratios))


def _data_slope(ladder: Ladder) -> tuple[Slope, bool, str]:
    if ladder.report is None:
        return Slope(note=ladder.note), False, ladder.note
    fit = ladder.report.fit
    slope = Slope(fit.slope, fit.slope_error, fit.chi2, fit.dof, fit.p_value, fit.method)
    return slope, ladder.report.settled, ladder.report.why


def _twin_slope(ladder: Ladder, known: Sequence[Twin | None]) -> Slope:
    """Mean over the placement classes; their errors are alike and do not average out."""
    slopes = []
    for placement in np.unique(ladder.placement):
        mine = (ladder.placement == placement) & ladder.used
        rungs = [t for t, own in zip(known, mine, strict=True) if own and t is not None]
        if len(rungs) < int(mine.sum()) or len(rungs) < 2:
            return Slope(note="no twin yet, or none at every size")
        if not all(math.isfinite(rung.union_support.value) for rung in rungs):
            return Slope(note="no number of the twin at some size")
        slopes.append(ladder_slope(rungs))
    value = float(np.mean([s.slope for s in slopes]))
    error = math.sqrt(float(np.mean([s.error**2 for s in slopes])))
    return Slope(value, error, note=slopes[0].method)


def _chain_slope(ladder: Ladder, chain: ChainRoute | None) -> Slope:
    if chain is None or ladder.axis != "density":
        return Slope(note="the chain is refined at fixed geometry: a density ladder only")
    return Slope(*chain.slope, note="limit of the local slopes, bound by experience")


def _minus(ladder: Ladder, twin: FloatArray, error: FloatArray) -> tuple[Slope, Slope]:
    """Slope of data minus twin, and its mean if there is none."""
    blocks = []
    for block in ladder.blocks:
        use = ladder.used[block.cells] & np.isfinite(twin[block.cells])
        mine = block.cells[use]
        if mine.size:
            blocks.append(
                departures.Block(
                    block.samples[:, use],
                    twin[mine],
                    error[mine],
                    ladder.x[mine],
                    ladder.placement[mine],
                )
            )
    there = sum(block.x.size for block in blocks)
    found = departures.departure(blocks) if there == int(ladder.used.sum()) else None
    if found is None:
        missing = Slope(note="data or twin are missing at some size")
        return missing, missing
    return (
        Slope(
            found.slope,
            found.slope_error,
            found.chi2,
            found.dof,
            found.p_value,
            "errors of data and twin together; the twin's independent between sizes",
        ),
        Slope(
            found.mean,
            found.mean_error,
            found.flat_chi2,
            found.flat_dof,
            found.flat_p,
            "mean of data minus twin; the twin's errors as common to all sizes",
        ),
    )
