"""What a campaign's samples say so far: means, fits and the error of its target."""

from __future__ import annotations

import math
from collections.abc import Sequence
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from lozenge_engine.config import Config
from lozenge_engine.design import Cell, Design
from lozenge_engine.kernels import gls
from lozenge_engine.kernels.laws import calabrese_cardy_slope, nominal_modes
from lozenge_engine.kernels.scaling import Estimate, estimate
from lozenge_engine.placement import gaps
from lozenge_engine.series import Series, fittable, groups_of, leading, series_of
from lozenge_engine.store import Results, Table
from lozenge_engine.sweeps import ends_inside, nearest_pair

__all__ = [
    "CellEstimate",
    "Estimates",
    "FitOf",
    "Regime",
    "estimates",
    "reference_slope",
    "target_error",
]

FloatArray = NDArray[np.float64]
BY_COUNT = ("root_count", "equal_share")
"""Rules of the regions that the Calabrese-Cardy law speaks of."""
STEPS = 24
"""Points of the curve of error against CPU time."""


class CellEstimate(NamedTuple):
    """One point in one placement class; entropies in nats.

    Attributes
    ----------
    cell : int
        Index of `Design.cells`.
    entropy, direct_sum : Estimate
        Of all regions together, by either union rule; of the region itself for one.
    regions : tuple of Estimate
        Entropy of each region.
    mutual_information, mutual_direct_sum : Estimate or None
        Of the nearest pair, by either union rule; None for one region.
    cross_block : float
        Mean norm of that pair's cross block; NaN for one region.
    kept_ratio : float
        Kept over nominal modes, mean over regions; NaN without samples.
    untrusted : int
        Samples that carry a mark; they are in the means.
    missing : int
        Samples without a number; the others are a selected sample then.
    """

    cell: int
    entropy: Estimate
    direct_sum: Estimate
    regions: tuple[Estimate, ...]
    mutual_information: Estimate | None
    mutual_direct_sum: Estimate | None
    cross_block: float
    kept_ratio: float
    untrusted: int
    missing: int


class Regime(NamedTuple):
    """Where a fit stands: what an asymptotic law assumes to be large or small.

    Attributes
    ----------
    elements, kept_ratio, size : (float, float)
        Least and largest over its cells: expected elements of the smallest region, kept over
        nominal modes, half-width of the largest region in patch half-widths.
    gap, gap_lengths : float
        Smallest gap between neighbours in patch half-widths, and the smallest in discreteness
        lengths a; NaN for one region.
    """

    elements: tuple[float, float]
    kept_ratio: tuple[float, float]
    size: tuple[float, float]
    gap: float
    gap_lengths: float


class FitOf(NamedTuple):
    """A fit of S against ln(l/a), or why there is none.

    Attributes
    ----------
    series : Series
        Its cells.
    report : SlopeReport or None
        The fit with its diagnostics.
    note : str
        Why there is no fit; empty with one.
    reference : float or None
        Calabrese-Cardy slope, for a density axis of a massless field cut by each region's count.
    no_reference : str
        Why there is none; empty with one.
    regime : Regime
        Where it stands.
    """

    series: Series
    report: gls.SlopeReport | None
    note: str
    reference: float | None
    no_reference: str
    regime: Regime

    @property
    def label(self) -> str:
        """Values of the other axis; empty if there is none."""
        return self.series.label

    @property
    def axis(self) -> str:
        """What is varied: ``density`` or ``half_width``."""
        return self.series.axis


class Estimates(NamedTuple):
    """What the samples say so far.

    Attributes
    ----------
    cells : tuple of CellEstimate
        In the order of `Design.cells`.
    fits : tuple of FitOf
        One for each value of the other axis; none without a density or half-width axis.
    done, failed : int
        Realisations, failed ones included; failed ones.
    failures : tuple of (str, int)
        Reasons, the most frequent first.
    cpu_seconds : float
        Of all realisations that did not fail.
    error : float
        Error of the target now; infinite while a part of it is unknown, NaN without a target.
    history : tuple of (float, float)
        CPU seconds, and the error of the target that they had bought; empty without a target.
    """

    cells: tuple[CellEstimate, ...]
    fits: tuple[FitOf, ...]
    done: int
    failed: int
    failures: tuple[tuple[str, int], ...]
    cpu_seconds: float
    error: float
    history: tuple[tuple[float, float], ...]


def estimates(results: Results) -> Estimates:
    """Read a results file.

    Parameters
    ----------
    results : Results
        Open; another process may be writing.

    Returns
    -------
    Estimates
        Errors are NaN with fewer than two realisations.
    """
    layout = results.design
    tables = tuple(results.table(g) for g in range(len(layout.sprinklings)))
    counts = results.counts()
    return Estimates(
        cells=_cells(layout, tables),
        fits=tuple(_fit(layout, tables, series) for series in series_of(layout)),
        done=sum(done for done, _ in counts),
        failed=sum(failed for _, failed in counts),
        failures=results.failures(),
        cpu_seconds=float(sum(table.seconds.sum() for table in tables)),
        error=target_error(layout, tables),
        history=_history(layout, tables),
    )


# ---------------------------------------------------------------- means


def _cells(layout: Design, tables: Sequence[Table]) -> tuple[CellEstimate, ...]:
    found: dict[int, CellEstimate] = {}
    for sprinkling, table in zip(layout.sprinklings, tables, strict=True):
        for column, i in enumerate(sprinkling.cells):
            found[i] = _cell(i, layout.cells[i], table, column)
    return tuple(found[i] for i in range(len(layout.cells)))


def _cell(index: int, cell: Cell, table: Table, column: int) -> CellEstimate:
    regions = cell.config.regions
    pair = _pair_column(cell.config)
    entropy = table.entropy[column]
    missing = ~np.isfinite(table.union_support[:, column])
    nominal = nominal_modes(1.0) * np.sqrt(np.maximum(table.region_elements[column], 1.0))
    ratio = table.kept[column] / nominal
    return CellEstimate(
        index,
        estimate(table.union_support[:, column]),
        estimate(table.union_direct_sum[:, column]),
        tuple(estimate(entropy[:, k]) for k in range(len(regions))),
        None if pair is None else estimate(table.pair_support[column][:, pair]),
        None if pair is None else estimate(table.pair_direct_sum[column][:, pair]),
        math.nan if pair is None else estimate(table.cross_block[column][:, pair]).mean,
        estimate(ratio.ravel()).mean,
        int((~table.trusted[:, column] & ~missing).sum()),
        int(missing.sum()),
    )


def _pair_column(config: Config) -> int | None:
    """Place of the nearest pair among all pairs a < b; None for one region."""
    count = len(config.regions)
    if count < 2:
        return None
    pairs = [(a, b) for a in range(count) for b in range(a + 1, count)]
    return pairs.index(nearest_pair(config.regions))


# ---------------------------------------------------------------- fits


def _fit(layout: Design, tables: Sequence[Table], series: Series) -> FitOf:
    smallest = layout.plan.smallest_region
    regime = _regime(layout, tables, series)
    reference, why_none = reference_slope(layout, series)
    if not fittable(layout, series):
        sizes = {round(layout.cells[i].x, 9) for i in series.used}
        note = (
            f"no fit: {len(sizes)} sizes with at least {smallest} elements in the smallest region, "
            "3 needed"
        )
        return FitOf(series, None, note, reference, why_none, regime)
    report = gls.report(tuple(groups_of(layout, tables, series).values()))
    if isinstance(report, gls.Refused):
        return FitOf(series, None, f"no fit: {report.reason}", reference, why_none, regime)
    return FitOf(series, report, "", reference, why_none, regime)


def reference_slope(layout: Design, series: Series) -> tuple[float | None, str]:
    """Slope of the Calabrese-Cardy law, or why it says nothing here.

    Parameters
    ----------
    layout : Design
        The campaign.
    series : Series
        One of its fits.

    Returns
    -------
    float or None
        Per ln(l/a), in nats; None where the law does not apply.
    str
        Why not; empty with a slope.
    """
    if series.axis != "density":
        return None, "region/patch changes along this axis"
    slopes = set()
    for i in series.used:
        config = layout.cells[i].config
        ends, a = ends_inside(config.regions), config.points.density**-0.5
        if config.mass > 0:
            return None, "the field has a mass"
        if config.patch_rule.kind != "root_count" or config.region_rule.kind not in BY_COUNT:
            return None, "the law is for a cut by each region's own count in both stages"
        if any(1e-9 < gap < a for gap in gaps(config.regions)):
            return None, "a gap is smaller than the discreteness length"
        if not ends:
            return None, "no end of a region lies inside the patch"
        slopes.add(calabrese_cardy_slope(ends, order=config.order))
    return (slopes.pop(), "") if len(slopes) == 1 else (None, "no cell is fitted")


def _regime(layout: Design, tables: Sequence[Table], series: Series) -> Regime:
    own = [layout.cells[i] for i in series.used or series.cells]
    numbers = _cells(layout, tables)
    ratios = [numbers[i].kept_ratio for i in series.used or series.cells]
    elements = [cell.elements for cell in own]
    sizes = [max(r.half_width for r in cell.config.regions) for cell in own]
    between = [gap for cell in own for gap in gaps(cell.config.regions)]
    lengths = [
        gap * math.sqrt(cell.config.points.density)
        for cell in own
        for gap in gaps(cell.config.regions)
    ]
    return Regime(
        (min(elements), max(elements)),
        (min(ratios), max(ratios)),
        (min(sizes), max(sizes)),
        max(0.0, min(between)) if between else math.nan,
        max(0.0, min(lengths)) if lengths else math.nan,
    )


# ---------------------------------------------------------------- the target


def target_error(layout: Design, tables: Sequence[Table]) -> float:
    """Largest error of what the campaign wants to know, in the target's own terms.

    Parameters
    ----------
    layout : Design
        Its plan has a target.
    tables : sequence of Table
        Samples of each sprinkling.

    Returns
    -------
    float
        Standard error in nats, or as a fraction of the value; infinite while a part of it is
        unknown; NaN without a target.
    """
    target = layout.plan.target
    if target is None:
        return math.nan
    if target.quantity == "slope":
        found = [
            _slope_error(layout, tables, series)
            for series in series_of(layout)
            if fittable(layout, series)
        ]
    else:
        found = [
            _ratio(e.error, e.mean) if target.relative else e.error
            for e in _wanted(layout, tables, target.quantity)
        ]
    return max((math.inf if math.isnan(e) else e for e in found), default=math.inf)


def _ratio(error: float, value: float) -> float:
    return error / abs(value) if value else math.inf


def _slope_error(layout: Design, tables: Sequence[Table], series: Series) -> float:
    fit = gls.fit(tuple(groups_of(layout, tables, series).values()))
    if isinstance(fit, gls.Refused):
        return math.inf
    target = layout.plan.target
    relative = target is not None and target.relative
    return _ratio(fit.slope_error, fit.slope) if relative else fit.slope_error


def _wanted(layout: Design, tables: Sequence[Table], quantity: str) -> list[Estimate]:
    """The estimates that a target speaks of."""
    cells = _cells(layout, tables)
    if quantity == "entropy":
        return [cell.entropy for cell in cells]
    return [c.mutual_information for c in cells if c.mutual_information is not None]


def _history(layout: Design, tables: Sequence[Table]) -> tuple[tuple[float, float], ...]:
    """Error of the target against CPU time, in the order of the realisations."""
    most = max((table.seconds.size for table in tables), default=0)
    if layout.plan.target is None or most < 2:
        return ()
    steps = np.unique(np.geomspace(2, most, STEPS).round().astype(int))
    curve = []
    for step in steps:
        # Every sprinkling as far as it had come when the longest had this many.
        parts = [leading(table, math.ceil(table.seconds.size * step / most)) for table in tables]
        error = target_error(layout, parts)
        if math.isfinite(error):
            curve.append((float(sum(part.seconds.sum() for part in parts)), error))
    return tuple(curve)
