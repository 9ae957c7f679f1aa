"""Where a set of regions can stand: gaps, moved gaps, and equivalent mirror images."""

from __future__ import annotations

import itertools
import math
from dataclasses import replace

from lozenge_engine.errors import InputError, refuse
from lozenge_engine.geometry import SLACK, Region, check_regions
from lozenge_engine.source import PointSource

__all__ = [
    "abscissa",
    "gaps",
    "largest_mean_gap",
    "mirror_images",
    "outline",
    "scaled",
    "with_separation",
]


def gaps(regions: tuple[Region, ...]) -> tuple[float, ...]:
    """Gaps in x between the neighbouring corners of regions taken from left to right.

    Parameters
    ----------
    regions : tuple of Region
        In any order.

    Returns
    -------
    tuple of float
        One fewer than regions; >= 0 up to rounding where these are spacelike.
    """
    row = sorted(regions, key=lambda r: r.x0)
    return tuple((b.x0 - b.reach) - (a.x0 + a.reach) for a, b in itertools.pairwise(row))


def with_separation(regions: tuple[Region, ...], separation: float) -> tuple[Region, ...]:
    """Scale the gaps of a list of regions so that their mean is `separation`.

    Sizes, times, boosts, the order of the list and the middle of the whole row are kept.
    Gaps whose mean is zero all become `separation`.

    Parameters
    ----------
    regions : tuple of Region
        At least two regions.
    separation : float
        Wanted mean gap, in patch half-widths, >= 0.

    Returns
    -------
    tuple of Region
        The moved regions, in the order given.

    Raises
    ------
    InputError
        If there is only one region or the separation is negative or not finite.
    """
    if len(regions) < 2:
        raise refuse(
            "separation", given=separation, allowed="two or more regions", do="add a region"
        )
    if not math.isfinite(separation) or separation < 0:
        raise refuse(
            "separation", given=separation, allowed="a mean gap >= 0", do="raise separation"
        )
    order = sorted(range(len(regions)), key=lambda i: regions[i].x0)
    row = [regions[i] for i in order]
    old = gaps(regions)
    mean = sum(old) / len(old)
    new = [g * separation / mean for g in old] if mean > SLACK else [separation] * len(old)
    middle = (row[0].x0 - row[0].reach + row[-1].x0 + row[-1].reach) / 2
    left = middle - (sum(new) + sum(2 * r.reach for r in row)) / 2
    moved: dict[int, Region] = {}
    for i, region, gap in zip(order, row, [*new, 0.0], strict=True):
        moved[i] = replace(region, x0=left + region.reach)
        left += 2 * region.reach + gap
    return tuple(moved[i] for i in range(len(regions)))


def largest_mean_gap(regions: tuple[Region, ...]) -> float:
    """Largest mean gap of a list of regions that `check_regions` takes, by bisection.

    Parameters
    ----------
    regions : tuple of Region
        Regions that `check_regions` takes as they are.

    Returns
    -------
    float
        In patch half-widths; 0 for a single region.
    """
    if len(regions) < 2:
        return 0.0
    # The present gap fits; regions at different times may need one, so 0 need not fit.
    low, high = max(0.0, sum(gaps(regions)) / (len(regions) - 1)), 2.0
    for _ in range(40):
        middle = (low + high) / 2
        try:
            check_regions(with_separation(regions, middle))
            low = middle
        except InputError:
            high = middle
    return low * (1.0 - 1e-12)


def abscissa(regions: tuple[Region, ...], source: PointSource) -> tuple[float, float]:
    """Where a layout stands in a fit of S against ln(l/a).

    Parameters
    ----------
    regions : tuple of Region
        One layout.
    source : PointSource
        Density and metric.

    Returns
    -------
    tuple of float
        Mean over the regions of ln(l/a), l = 2 half_width in the coordinates, a = density**(-1/2);
        expected elements of the smallest region.
    """
    density = source.density
    x = sum(math.log(2 * r.half_width * math.sqrt(density)) for r in regions) / len(regions)
    return x, min(source.elements(r) for r in regions)


def outline(regions: tuple[Region, ...]) -> frozenset[tuple[float, ...]]:
    """The set of diamonds of a layout, up to rounding and letters.

    Parameters
    ----------
    regions : tuple of Region
        One layout.

    Returns
    -------
    frozenset of tuple of float
        Equal for layouts of the same diamonds.
    """
    return frozenset(
        (round(r.t0, 9), round(r.x0, 9), round(r.half_width, 9), round(r.boost, 9)) for r in regions
    )


def mirror_images(regions: tuple[Region, ...]) -> tuple[tuple[Region, ...], ...]:
    """All distinct mirror images (x -> -x, t -> -t) of a set of regions, itself first.

    A reflection keeps letters, so image i of region A is what A becomes; images whose sets of
    diamonds coincide are left out.

    Parameters
    ----------
    regions : tuple of Region
        One layout.

    Returns
    -------
    tuple of tuple of Region
        One to four layouts.
    """
    images: list[tuple[Region, ...]] = []
    seen: set[frozenset[tuple[float, ...]]] = set()
    for sx, st in ((1, 1), (-1, 1), (1, -1), (-1, -1)):
        image = tuple(
            Region(
                t0=st * r.t0 + 0.0,
                x0=sx * r.x0 + 0.0,
                half_width=r.half_width,
                boost=sx * st * r.boost + 0.0,
            )
            for r in regions
        )
        key = outline(image)
        if key not in seen:
            seen.add(key)
            images.append(image)
    return tuple(images)


def scaled(regions: tuple[Region, ...], factor: float) -> tuple[Region, ...]:
    """All regions scaled about the patch's centre, or about the corner that they touch.

    Parameters
    ----------
    regions : tuple of Region
        One layout; of several touched corners the first of left, right, future, past counts.
    factor : float
        Multiple of sizes and gaps, > 0.

    Returns
    -------
    tuple of Region
        In the order given; whether they fit in the patch is not checked.

    Raises
    ------
    InputError
        If a half-width leaves (0, 1].
    """
    fixed_t, fixed_x = 0.0, 0.0
    for t, x in ((0.0, -1.0), (0.0, 1.0), (1.0, 0.0), (-1.0, 0.0)):
        if any(abs(t - ct) + abs(x - cx) < 1e-9 for region in regions for ct, cx in region.corners):
            fixed_t, fixed_x = t, x
            break
    return tuple(
        replace(
            r,
            t0=fixed_t + factor * (r.t0 - fixed_t),
            x0=fixed_x + factor * (r.x0 - fixed_x),
            half_width=factor * r.half_width,
        )
        for r in regions
    )
