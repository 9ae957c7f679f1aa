"""Which sprinklings to draw for an average or a sweep, and at which placements.

Rungs of the density ladder use sprinklings of their own; sizes and separations share the
sprinklings (and the patch modes) of the average.
"""

from __future__ import annotations

from dataclasses import replace
from functools import lru_cache
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from lozenge_engine.config import Setup
from lozenge_engine.errors import InputError
from lozenge_engine.geometry import Region, check_regions, largest_separation
from lozenge_engine.pipeline import DENSE_LIMIT
from lozenge_engine.placement import largest_mean_gap, mirror_images, scaled, with_separation
from lozenge_engine.samples import Draw

__all__ = [
    "Plan",
    "average_draws",
    "density_draws",
    "placements",
    "realisations",
    "scaled",
    "separation_draws",
    "size_draws",
]

FloatArray = NDArray[np.float64]

BRANCH = 10_000
"""Realisations set aside for each rung of the density ladder."""
RECENT = 16
"""Plans kept: curves are read again with every finished draw, and planning took half of that."""


class Plan(NamedTuple):
    """What an average or a sweep draws.

    Attributes
    ----------
    values : ndarray, shape (M,), float64
        Densities, multiples of the half-width, or separations; empty for an average.
    draws : tuple of Draw
        Units of work, in the order in which they help most.
    point_of : tuple of int
        For the density ladder: the rung of each draw; otherwise empty.
    left_out : tuple of str
        What cannot be drawn, and why.
    """

    values: FloatArray
    draws: tuple[Draw, ...]
    point_of: tuple[int, ...]
    left_out: tuple[str, ...]


def realisations(setup: Setup) -> int:
    """Sprinklings to draw.

    Parameters
    ----------
    setup : Setup
        Its point source and its averaging count.

    Returns
    -------
    int
        From 1 to 10 000; 1 for imported points, of which there is one set.
    """
    return 1 if setup.points.kind == "file" else setup.averaging.sprinklings


def placements(setup: Setup, regions: tuple[Region, ...]) -> tuple[tuple[Region, ...], ...]:
    """The regions and their distinct mirror images, which are equivalent on a sprinkling.

    Parameters
    ----------
    setup : Setup
        Its kind of points decides.
    regions : tuple of Region
        One layout.

    Returns
    -------
    tuple of tuple of Region
        One to four layouts, the given one first; it alone for imported points.
    """
    return (regions,) if setup.points.kind == "file" else mirror_images(regions)


@lru_cache(maxsize=RECENT)
def average_draws(setup: Setup) -> Plan:
    """Draws of the average at the present geometry.

    Parameters
    ----------
    setup : Setup
        What is averaged.

    Returns
    -------
    Plan
        One draw for each sprinkling, with all placements.
    """
    layouts = placements(setup, setup.regions())
    draws = tuple(Draw(config=setup.config(r), layouts=layouts) for r in range(realisations(setup)))
    return Plan(np.empty(0), draws, (), ())


@lru_cache(maxsize=RECENT)
def density_draws(setup: Setup) -> Plan:
    """Draws of the density ladder at fixed geometry, one sprinkling each.

    Every rung has sprinklings of its own, so that its points are independent.

    Parameters
    ----------
    setup : Setup
        Its geometry, rules and density ladder.

    Returns
    -------
    Plan
        The first sprinkling of every rung, then the second, ...; rungs that the mass or the dense
        route refuses are left out, and imported points have none.
    """
    plan = setup.sweeps
    ladder = np.geomspace(plan.density_low, plan.density_high, plan.density_points)
    if setup.points.kind == "file":
        return Plan(ladder, (), (), ("imported points have one density",))
    draws, rungs, left_out = [], [], []
    for j, density in enumerate(ladder):
        dense = setup.rules()[0].kind == "none"
        try:
            rung = setup.with_(points=replace(setup.points, density=float(density)))
        except InputError as error:
            left_out.append(f"density {density:.4g}: {error}")
            continue
        if dense and rung.points.expected_points() > DENSE_LIMIT:
            left_out.append(f"density {density:.4g}: no cut, over {DENSE_LIMIT} elements")
            continue
        layouts = placements(setup, rung.regions())
        for r in range(realisations(setup)):
            draws.append(Draw(config=rung.config(BRANCH * (j + 1) + r), layouts=layouts))
            rungs.append(j)
    order = sorted(
        range(len(draws)), key=lambda i: (draws[i].config.realisation % BRANCH, rungs[i])
    )
    return Plan(
        ladder,
        tuple(draws[i] for i in order),
        tuple(rungs[i] for i in order),
        tuple(left_out),
    )


@lru_cache(maxsize=RECENT)
def size_draws(setup: Setup) -> Plan:
    """Draws of the size sweep at fixed density: the whole set of regions is scaled.

    The scaling keeps the patch's centre, or the patch's corner when a region touches one, so that
    ratios of sizes and gaps do not change; every sprinkling serves all sizes.

    Parameters
    ----------
    setup : Setup
        Its geometry and its range of sizes.

    Returns
    -------
    Plan
        One draw for each sprinkling, with the placements of every size in turn; sizes that do not
        fit in the patch are left out.
    """
    plan, regions = setup.sweeps, setup.regions()
    kept, left_out = [], []
    for factor in np.geomspace(plan.size_low, plan.size_high, plan.size_points):
        try:
            layout = scaled(regions, float(factor))
            check_regions(layout)
        except InputError as error:
            left_out.append(f"size x {factor:.3g}: {error}")
            continue
        kept.append((float(factor), placements(setup, layout)))
    draws = tuple(
        Draw(
            config=setup.config(r),
            layouts=tuple(image for _, images in kept for image in images),
        )
        for r in range(realisations(setup))
        if kept
    )
    return Plan(np.array([factor for factor, _ in kept]), draws, (), tuple(left_out))


@lru_cache(maxsize=RECENT)
def separation_draws(setup: Setup) -> Plan:
    """Draws of the separation sweep at fixed density and size, from touching to what fits.

    Parameters
    ----------
    setup : Setup
        Its regions and its number of separations.

    Returns
    -------
    Plan
        One draw for each sprinkling, with the placements of every separation in turn; separations
        at which the regions do not fit are left out, and one region has none.
    """
    regions = setup.regions()
    if len(regions) < 2:
        return Plan(np.empty(0), (), (), ("one region has no separation",))
    if setup.region_list is None:
        widest = largest_separation(len(regions), setup.half_width)
    else:
        widest = largest_mean_gap(regions)
    values = np.linspace(0.0, max(0.0, widest * (1 - 1e-12)), setup.sweeps.separation_points)
    kept, left_out = [], []
    for value in values:
        try:
            layout = with_separation(regions, float(value))
            check_regions(layout)
        except InputError as error:
            left_out.append(f"separation {value:.3g}: {error}")
            continue
        kept.append((float(value), placements(setup, layout)))
    draws = tuple(
        Draw(
            config=setup.config(r),
            layouts=tuple(image for _, images in kept for image in images),
        )
        for r in range(realisations(setup))
        if kept
    )
    return Plan(np.array([value for value, _ in kept]), draws, (), tuple(left_out))
