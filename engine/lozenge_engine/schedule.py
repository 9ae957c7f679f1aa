"""Which realisations come next: rounds, each decided by the finished rounds before it.

A round is a number of realisations for each sprinkling.  The next one follows from the samples of
the finished ones and from counted costs, which are the same on every machine; so the rows of a
results file depend neither on the number of workers, nor on their order, nor on interruptions.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from typing import NamedTuple

import numpy as np

from lozenge_engine.cost import nominal
from lozenge_engine.design import Design, Sprinkling
from lozenge_engine.estimates import target_error
from lozenge_engine.kernels import gls
from lozenge_engine.series import groups_of, leading, series_of
from lozenge_engine.store import Table

__all__ = ["PILOT", "Round", "advance", "first_round", "nominal_seconds"]

PILOT = 24
"""Realisations of each sprinkling before a target is looked at: with fewer, stopping on a target
makes intervals too short (DEVELOPERS.md)."""
GROWTH = 1.5
"""A round adds at most half of the cost so far, so that errors are looked at rarely."""
LEAST = 1.05
"""A round adds at least this, so that the end is reached."""

STEPS = 400
"""A round is handed out in about so many steps."""
LEAST_SHARE = 0.05
"""Every sprinkling has at least this share of the time: the best place for a slope's error is at
the ends of the ladder, but it takes the points between them to see whether the line fits."""


class Round(NamedTuple):
    """How far each sprinkling is to come, and what the rounds before it reached.

    Attributes
    ----------
    goals : tuple of int
        Realisations of each sprinkling.
    error : float
        Error of the target after the round before; infinite if unknown, NaN without a target.
    ended : {"", "target", "all"}
        Whether nothing more is to come: the target is reached, or all realisations are there.
    """

    goals: tuple[int, ...]
    error: float
    ended: str


def nominal_seconds(layout: Design, sprinkling: int) -> float:
    """Cost of one realisation on a processor of fixed speed.

    Parameters
    ----------
    layout : Design
        The campaign.
    sprinkling : int
        Which one.

    Returns
    -------
    float
        Seconds: the patch's modes once for each mass, and the second stage of every layout.
    """
    seconds = 0.0
    first: dict[float, float] = {}
    for i in layout.sprinklings[sprinkling].cells:
        cell = layout.cells[i]
        mass = cell.config.mass
        whole, _, second = nominal(cell.config)
        first[mass] = max(first.get(mass, 0.0), whole - second)  # the deepest search serves all
        seconds += second * len(cell.layouts)
    return seconds + sum(first.values())


def first_round(layout: Design) -> Round:
    """Where a campaign begins.

    Parameters
    ----------
    layout : Design
        The campaign.

    Returns
    -------
    Round
        All realisations without a target, the pilot with one.
    """
    plan = layout.plan
    if plan.target is None:
        return Round((plan.realisations,) * len(layout.sprinklings), math.nan, "")
    pilots = [PILOT] * len(layout.sprinklings)
    if plan.target.quantity == "slope":
        # A covariance that is to weigh P cells takes more rows than these.
        pilots = [max(PILOT, 2 * len(own.cells) + 6) for own in layout.sprinklings]
    return Round(tuple(min(n, plan.realisations) for n in pilots), math.inf, "")


def advance(layout: Design, goals: tuple[int, ...], tables: Sequence[Table]) -> Round:
    """Decide the round after a finished one.

    Parameters
    ----------
    layout : Design
        The campaign.
    goals : tuple of int
        The finished round's.
    tables : sequence of Table
        All samples there are; those beyond the goals are not looked at.

    Returns
    -------
    Round
        With larger goals unless it has ended.
    """
    target, most = layout.plan.target, layout.plan.realisations
    if target is None:
        return Round(goals, math.nan, "all")
    seen = [
        leading(table, int(np.searchsorted(table.realisation, goal)))
        for table, goal in zip(tables, goals, strict=True)
    ]
    error = target_error(layout, seen)
    if error <= target.error and min(goals) >= PILOT:
        return Round(goals, error, "target")
    if min(goals) >= most:
        return Round(goals, error, "all")
    if target.quantity == "slope":
        wanted = _for_slope(layout, goals, seen, excess=error / target.error)
    else:
        wanted = _for_each(layout, goals, seen, wanted=target.error)
    return Round(wanted, error, "" if wanted != goals else "all")


def _growth(excess: float) -> float:
    """By how much a number of realisations is to grow when an error is `excess` times too large."""
    return min(GROWTH, max(LEAST, 1.02 * excess**2))


def _for_slope(
    layout: Design, goals: tuple[int, ...], tables: Sequence[Table], *, excess: float
) -> tuple[int, ...]:
    """Spend the round where it lowers the slope's variance most per second."""
    costs = [nominal_seconds(layout, g) for g in range(len(goals))]
    left = (_growth(excess) - 1.0) * sum(c * n for c, n in zip(costs, goals, strict=True))
    variances = _slope_variances(layout, tables)
    counts = list(goals)
    while left > 0:
        more = [g for g, n in enumerate(counts) if n < layout.plan.realisations]
        if not more:
            break
        spent = [c * n for c, n in zip(costs, counts, strict=True)]
        behind = [g for g in more if spent[g] < LEAST_SHARE * sum(spent)]
        if behind:
            g = min(behind, key=lambda g: spent[g])
        else:
            g = max(more, key=lambda g: variances[g] / (counts[g] * (counts[g] + 1) * costs[g]))
        step = max(1, int(left / (STEPS * costs[g])))
        step = min(step, layout.plan.realisations - counts[g])
        counts[g] += step
        left -= step * costs[g]
    return tuple(counts)


def _slope_variances(layout: Design, tables: Sequence[Table]) -> list[float]:
    """Each sprinkling's v in Var(b) = sum v/R, over all fits; equal ones if none is known."""
    found = [0.0] * len(tables)
    for series in series_of(layout):
        groups = groups_of(layout, tables, series)
        shares = gls.slope_weights(tuple(groups.values()))
        for g, share in zip(groups, shares, strict=True):
            found[g] += float(share) if math.isfinite(share) else 0.0
    return found if any(found) else [1.0] * len(tables)


def _for_each(
    layout: Design, goals: tuple[int, ...], tables: Sequence[Table], *, wanted: float
) -> tuple[int, ...]:
    """Let every sprinkling grow that misses the target; it can be reached in no other way."""
    counts = []
    for own, table, goal in zip(layout.sprinklings, tables, goals, strict=True):
        error = target_error(_only(layout, own), [table])
        more = goal if error <= wanted else max(goal + 1, round(goal * _growth(error / wanted)))
        counts.append(min(more, layout.plan.realisations))
    return tuple(counts)


def _only(layout: Design, own: Sprinkling) -> Design:
    """The part of a campaign that one sprinkling serves."""
    kept = tuple(layout.cells[i] for i in own.cells)
    alone = own._replace(cells=tuple(range(len(kept))))
    return layout._replace(cells=kept, sprinklings=(alone,))
