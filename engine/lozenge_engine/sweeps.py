"""What the readings of an average or a sweep say: means, curves and fits.

Density at fixed geometry and size at fixed density are different experiments and never share a
fit.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, replace
from typing import Literal

import numpy as np
from numpy.typing import NDArray

from lozenge_engine.averages import (
    Average,
    PairEstimate,
    Readings,
    average,
    column_of,
    count_done,
    rows_of,
)
from lozenge_engine.config import Setup
from lozenge_engine.draws import (
    Plan,
    average_draws,
    density_draws,
    placements,
    realisations,
    scaled,
    separation_draws,
    size_draws,
)
from lozenge_engine.geometry import Region
from lozenge_engine.kernels.laws import calabrese_cardy_slope
from lozenge_engine.kernels.scaling import (
    Estimate,
    Fit,
    estimate,
    fit_independent,
    fit_shared,
)
from lozenge_engine.pipeline import UNION_RULES
from lozenge_engine.placement import abscissa, gaps, with_separation
from lozenge_engine.samples import Reading

__all__ = [
    "Average",
    "PairEstimate",
    "Plan",
    "ScalingCurve",
    "SeparationCurve",
    "average",
    "average_draws",
    "density_curve",
    "density_draws",
    "ends_inside",
    "nearest_pair",
    "separation_curve",
    "separation_draws",
    "size_curve",
    "size_draws",
]

FloatArray = NDArray[np.float64]


@dataclass(frozen=True, slots=True, kw_only=True)
class ScalingCurve:
    """Entropy against ln(l/a), l = 2 half_width, a = density**(-1/2), nominal density.

    Parameters
    ----------
    axis : {"density", "size"}
        What is varied.
    values, x, elements_per_region : ndarray, shape (M,), float64
        Density or multiple of the half-width; ln(l/a), the mean over regions; expected elements
        of the smallest region.
    entropy : tuple of Estimate
        Of all regions together (support rule), in nats, length M.
    regions_entropy : ndarray, shape (M, K), float64
        Mean entropy of each region, in nats; NaN where nothing is known yet.
    used : ndarray, shape (M,), bool
        Which points the fit uses: those with readings and a large enough smallest region.
    fit : Fit or None
        None with fewer than three points, and until errors are known.
    note : str
        Why there is no fit; empty with one.
    reference_slope : float or None
        Calabrese-Cardy slope, for the massless density ladder only.
    done, planned : int
        Draws that are done, failed ones included, and all draws.
    left_out : tuple of str
        What cannot be drawn, and why.
    """

    axis: Literal["density", "size"]
    values: FloatArray
    x: FloatArray
    elements_per_region: FloatArray
    entropy: tuple[Estimate, ...]
    regions_entropy: FloatArray
    used: NDArray[np.bool_]
    fit: Fit | None
    note: str
    reference_slope: float | None
    done: int
    planned: int
    left_out: tuple[str, ...] = ()

    @property
    def window(self) -> tuple[float, float] | None:
        """Expected elements of the smallest region at the ends of the fit; None without points."""
        inside = self.elements_per_region[self.used]
        return (float(inside.min()), float(inside.max())) if inside.size else None


@dataclass(frozen=True, slots=True, kw_only=True)
class SeparationCurve:
    """Entropy of the union and mutual information of the nearest pair against separation.

    Parameters
    ----------
    separation : ndarray, shape (M,), float64
        Gap (mean gap of a list), in patch half-widths.
    pair : tuple of int
        The nearest pair at the present separation; (0, 0) for one region.
    union, mutual_information : mapping of str to tuple of Estimate
        In nats, per union rule, length M; of all regions, and of the nearest pair.
    cross_block : ndarray, shape (M,), float64
        Mean norm of the pair's cross block; NaN where nothing is known yet.
    done, planned : int
        Draws that are done, failed ones included, and all draws.
    note : str
        What was left out, and why; otherwise empty.
    """

    separation: FloatArray
    pair: tuple[int, int]
    union: Mapping[str, tuple[Estimate, ...]]
    mutual_information: Mapping[str, tuple[Estimate, ...]]
    cross_block: FloatArray
    done: int
    planned: int
    note: str


def ends_inside(regions: tuple[Region, ...]) -> int:
    """Left and right corners of regions inside the patch; shared corners do not count.

    Parameters
    ----------
    regions : tuple of Region
        One layout, K regions.

    Returns
    -------
    int
        From 0 to 2 K: the ends that `calabrese_cardy_slope` counts.
    """
    corners = [(r.corners[1], r.corners[3]) for r in regions]
    flat = [c for pair in corners for c in pair]
    inside = 0
    for i, (t, x) in enumerate(flat):
        on_edge = abs(t) + abs(x) > 1.0 - 1e-9
        shared = any(abs(t - s) + abs(x - y) < 1e-9 for j, (s, y) in enumerate(flat) if j != i)
        inside += not on_edge and not shared
    return inside


def density_curve(setup: Setup, readings: Readings) -> ScalingCurve:
    """Entropy against ln(l/a) along the density ladder, with its fit.

    Parameters
    ----------
    setup : Setup
        The setup that was drawn.
    readings : mapping of str to tuple of Reading
        Readings of `density_draws`; missing ones are not done yet.

    Returns
    -------
    ScalingCurve
        With the Calabrese-Cardy slope of the massless field, which is set at short distance and so
        holds in a curved patch too; without one for a massive field.
    """
    plan, regions = density_draws(setup), setup.regions()
    rungs: list[list[tuple[Reading, ...]]] = [[] for _ in plan.values]
    for draw, rung in zip(plan.draws, plan.point_of, strict=True):
        if readings.get(draw.key):
            rungs[rung].append(readings[draw.key])
    sources = [replace(setup.points, density=float(density)) for density in plan.values]
    places = [abscissa(regions, source) for source in sources]
    samples = [_finite(column_of(rows, "union_support", None)) for rows in rungs]
    elements = np.array([n for _, n in places])
    big = elements >= setup.sweeps.smallest_region
    used = big & np.array([s.size > 0 for s in samples], dtype=bool)
    x = np.array([value for value, _ in places])
    chosen = np.nonzero(used)[0]
    fit = fit_independent(x[chosen], [samples[i] for i in chosen]) if chosen.size else None
    return ScalingCurve(
        axis="density",
        values=plan.values,
        x=x,
        elements_per_region=elements,
        entropy=tuple(estimate(s) for s in samples),
        regions_entropy=_regions_means(rungs, len(regions)),
        used=used,
        fit=fit,
        note=_fit_note(fit, used, setup, done=count_done(readings, plan), planned=len(plan.draws)),
        reference_slope=calabrese_cardy_slope(ends_inside(regions), order=setup.order)
        if setup.mass == 0 and all(rule.kind != "none" for rule in setup.rules())
        else None,
        done=count_done(readings, plan),
        planned=len(plan.draws),
        left_out=plan.left_out,
    )


def _finite(samples: FloatArray) -> FloatArray:
    return samples[np.isfinite(samples)]


def _regions_means(rungs: list[list[tuple[Reading, ...]]], count: int) -> FloatArray:
    """Mean entropy of each region at each point; NaN where nothing is known yet."""
    means = np.full((len(rungs), count), np.nan)
    for i, rows in enumerate(rungs):
        for k in range(count):
            means[i, k] = estimate(column_of(rows, "entropy", k)).mean
    return means


def size_curve(setup: Setup, readings: Readings) -> ScalingCurve:
    """Entropy against ln(l/a) for scaled regions at fixed density, with its fit.

    Parameters
    ----------
    setup : Setup
        The setup that was drawn.
    readings : mapping of str to tuple of Reading
        Readings of `size_draws`; missing ones are not done yet.

    Returns
    -------
    ScalingCurve
        Without a reference slope: the infrared piece changes with the size.
    """
    plan, regions = size_draws(setup), setup.regions()
    rows = rows_of(readings, plan)
    sets = [scaled(regions, float(factor)) for factor in plan.values]
    images = [len(placements(setup, layout)) for layout in sets]
    ends = np.cumsum([0, *images])
    points = [[row[ends[i] : ends[i + 1]] for row in rows] for i in range(len(sets))]
    table = (
        np.array([column_of(p, "union_support", None) for p in points])
        .reshape(len(sets), len(rows))
        .T
    )
    places = [abscissa(layout, setup.points) for layout in sets]
    x, elements = (np.array([place[i] for place in places]) for i in (0, 1))
    used = (elements >= setup.sweeps.smallest_region) & bool(rows)
    complete = table[np.isfinite(table[:, used]).all(axis=1)][:, used]
    fit = fit_shared(x[used], complete) if used.any() else None
    return ScalingCurve(
        axis="size",
        values=plan.values,
        x=x,
        elements_per_region=elements,
        entropy=tuple(estimate(table[:, i]) for i in range(len(sets))),
        regions_entropy=_regions_means(points, len(regions)),
        used=used,
        fit=fit,
        note=_fit_note(fit, used, setup, done=count_done(readings, plan), planned=len(plan.draws)),
        reference_slope=None,
        done=count_done(readings, plan),
        planned=len(plan.draws),
        left_out=plan.left_out,
    )


def _fit_note(
    fit: Fit | None, used: NDArray[np.bool_], setup: Setup, *, done: int, planned: int
) -> str:
    """Why there is no fit yet."""
    if fit is not None:
        return ""
    if used.sum() < 3:
        return (
            f"no fit: {int(used.sum())} points with at least {setup.sweeps.smallest_region} "
            "elements in the smallest region, 3 needed"
        )
    if realisations(setup) < 2:
        return "no fit: one sprinkling, so no error is known; raise sprinklings"
    if done == planned:
        return "no fit: too few sprinklings gave a number at every point"
    return "no fit yet: waiting for more sprinklings"


def separation_curve(setup: Setup, readings: Readings) -> SeparationCurve:
    """Union entropy and nearest-pair mutual information against separation.

    Parameters
    ----------
    setup : Setup
        The setup that was drawn.
    readings : mapping of str to tuple of Reading
        Readings of `separation_draws`; missing ones are not done yet.

    Returns
    -------
    SeparationCurve
        Empty, with a note, for one region.
    """
    plan, regions = separation_draws(setup), setup.regions()
    rows = rows_of(readings, plan)
    count = len(regions)
    pair_list = [(a, b) for a in range(count) for b in range(a + 1, count)]
    nearest = nearest_pair(regions)
    index = pair_list.index(nearest) if pair_list else 0
    layouts = [with_separation(regions, float(d)) for d in plan.values]
    ends = np.cumsum([0, *(len(placements(setup, layout)) for layout in layouts)])
    points = [[row[ends[i] : ends[i + 1]] for row in rows] for i in range(len(layouts))]

    def curve(field: str, index: int | None) -> tuple[Estimate, ...]:
        return tuple(estimate(column_of(p, field, index)) for p in points)

    return SeparationCurve(
        separation=plan.values,
        pair=nearest,
        union={rule: curve(f"union_{rule}", None) for rule in UNION_RULES},
        mutual_information={rule: curve(f"pair_{rule}", index) for rule in UNION_RULES},
        cross_block=np.array([e.mean for e in curve("cross_block", index)]),
        done=count_done(readings, plan),
        planned=len(plan.draws),
        note="; ".join(plan.left_out),
    )


def nearest_pair(regions: tuple[Region, ...]) -> tuple[int, int]:
    """Indices of the two regions with the smallest gap in x; (0, 0) for one region.

    Parameters
    ----------
    regions : tuple of Region
        One layout.

    Returns
    -------
    tuple of int
        Ascending; of equal gaps the first in lexicographic order.
    """
    pairs = [(a, b) for a in range(len(regions)) for b in range(a + 1, len(regions))]
    return min(pairs, key=lambda p: gaps((regions[p[0]], regions[p[1]]))[0], default=(0, 0))
