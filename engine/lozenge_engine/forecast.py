"""What a campaign will take: realisations, seconds and bytes, before anything is computed."""

from __future__ import annotations

import functools
import math
from typing import NamedTuple

import numpy as np

from lozenge_engine.config import Setup
from lozenge_engine.cost import nominal
from lozenge_engine.design import Design, design
from lozenge_engine.errors import refuse
from lozenge_engine.notation import duration
from lozenge_engine.plan import Axis, CampaignPlan, Target
from lozenge_engine.presets import Preset
from lozenge_engine.realisation import realise
from lozenge_engine.schedule import first_round, nominal_seconds
from lozenge_engine.series import Series, check_target, fittable, series_of

__all__ = ["Forecast", "ForecastRow", "forecast", "needed"]

SCATTER = {"slope": 0.14, "entropy": 0.14, "mutual_information": 0.06}
"""Standard deviation of one sprinkling's S and I in nats, before anything is known (measured)."""
VALUES = {"slope": 1 / 3, "entropy": 2.3, "mutual_information": 0.35}
"""Values for one region or pair, to tell what a relative target asks for (measured)."""
PROCESS_BYTES = 150e6
"""The process that hands out the work."""


class ForecastRow(NamedTuple):
    """What a sprinkling will take.

    Attributes
    ----------
    density : float
        Elements per unit area.
    cells : int
        Points in placement classes that share it.
    elements : (float, float)
        Expected elements of the smallest region, least and largest over its cells.
    realisations : int
        Forecast number.
    seconds, peak_bytes : float
        Of one realisation in one thread; peak memory of the worker.
    """

    density: float
    cells: int
    elements: tuple[float, float]
    realisations: int
    seconds: float
    peak_bytes: float


class Forecast(NamedTuple):
    """What a campaign will take.

    Attributes
    ----------
    rows : tuple of ForecastRow
        One for each sprinkling.
    workers : int
        Realisations at a time.
    seconds : float
        Running time in all, before any budget ends it.
    peak_bytes : float
        Of all workers together, at most.
    left_out : tuple of str
        Points and placements that cannot be computed, and why.
    note : str
        That the budget or the realisations will not do, or that a fit is not possible; otherwise
        empty.
    """

    rows: tuple[ForecastRow, ...]
    workers: int
    seconds: float
    peak_bytes: float
    left_out: tuple[str, ...]
    note: str


def forecast(preset: Preset, *, workers: int) -> Forecast:
    """Predict what a campaign will take on this machine.

    Parameters
    ----------
    preset : Preset
        Its campaign.
    workers : int
        Realisations at a time, >= 1.

    Returns
    -------
    Forecast
        Counted costs times the speed of this machine, which one small realisation measures at
        first use (0.3 s).  With a target, the number of realisations follows from a scatter of
        0.14 nats of one sprinkling's S, a value that campaigns showed (DEVELOPERS.md).

    Raises
    ------
    InputError
        If the preset holds no campaign, nothing of it can be computed, or nothing of its target
        can ever be known.
    """
    plan = preset.campaign
    if plan is None:
        raise refuse(
            "campaign",
            given="a preset without a campaign",
            allowed="a preset with a section campaign",
            do="add one, or start from lozenge presets nested-diamond",
        )
    layout = design(preset.setup, plan)
    check_target(layout)
    speed = _speed()
    wanted = needed(layout)
    counts = [min(n, plan.realisations) for n in wanted]
    rows = []
    for g, (own, count) in enumerate(zip(layout.sprinklings, counts, strict=True)):
        cells = [layout.cells[i] for i in own.cells]
        elements = [cell.elements for cell in cells]
        rows.append(
            ForecastRow(
                own.density,
                len(cells),
                (min(elements), max(elements)),
                count,
                nominal_seconds(layout, g) * speed,
                max(nominal(cell.config).peak_bytes for cell in cells),
            )
        )
    seconds = sum(row.seconds * row.realisations for row in rows) / max(1, workers)
    peak = workers * max(row.peak_bytes for row in rows) + PROCESS_BYTES
    note = "; ".join(filter(None, (_shortfall(plan, seconds, max(wanted)), _no_fit(layout))))
    return Forecast(tuple(rows), workers, seconds, peak, layout.left_out, note)


def _shortfall(plan: CampaignPlan, seconds: float, count: int) -> str:
    """What the plan's own limits will probably not allow."""
    notes = []
    if count > plan.realisations:
        notes.append(
            f"the target will probably need {count} realisations of one sprinkling; "
            f"at most {plan.realisations} are planned"
        )
    if plan.budget is not None and seconds > plan.budget:
        what = "all realisations" if plan.target is None else "the target"
        notes.append(
            f"the budget of {duration(plan.budget)} will probably not do: {what} will take about "
            f"{duration(seconds)}"
        )
    return "; ".join(notes)


def _no_fit(layout: Design) -> str:
    """Which fits will not be possible, however many realisations there are."""
    without = [series for series in series_of(layout) if not fittable(layout, series)]
    if not without:
        return ""
    names = ", ".join(series.label for series in without if series.label)
    return (
        f"no fit{f' for {names}' if names else ''}: fewer than three sizes have "
        f"{layout.plan.smallest_region} elements or more in their smallest region"
    )


@functools.cache
def _speed() -> float:
    """Seconds of this machine for a counted second, from a small realisation."""
    setup = Setup(region_count=1, half_width=0.3)
    layout = design(setup, CampaignPlan(axes=(Axis(name="density", values=(1000.0,)),)))
    taken = min(realise(layout, 0, r).seconds for r in range(2))
    return taken / nominal_seconds(layout, 0)


def needed(layout: Design) -> tuple[int, ...]:
    """Realisations that a target will probably need.

    Parameters
    ----------
    layout : Design
        A campaign with or without a target.

    Returns
    -------
    tuple of int
        For each sprinkling, uncapped; the pilot's or the plan's number at least.

    Notes
    -----
    Cells count as independent and of one typical scatter.  For a slope, Var(b) = sum v_g/R_g is
    spread so that the cost is least: R_g proportional to sqrt(v_g/c_g).
    """
    target = layout.plan.target
    goals = first_round(layout).goals
    if target is None:
        return goals
    if target.quantity != "slope":
        value = target.error * (VALUES[target.quantity] if target.relative else 1.0)
        count = math.ceil((SCATTER[target.quantity] / value) ** 2)
        return tuple(max(goal, count) for goal in goals)
    found = list(goals)
    for series in series_of(layout):
        for g, count in enumerate(_for_slope(layout, series, target)):
            found[g] = max(found[g], count)
    return tuple(found)


def _for_slope(layout: Design, series: Series, target: Target) -> list[int]:
    """Realisations for one fit's slope."""
    own = [layout.cells[i] for i in series.used]
    if len({cell.x for cell in own}) < 2:
        return [0] * len(layout.sprinklings)
    classes = sorted({cell.placement for cell in own})
    columns = [[cell.x] + [float(cell.placement == k) for k in classes] for cell in own]
    weights = dict(zip(series.used, np.linalg.pinv(np.array(columns))[0], strict=True))
    count = len(own[0].config.regions)
    variances = [
        SCATTER["slope"] ** 2 * count * sum(weights.get(i, 0.0) ** 2 for i in sprinkling.cells)
        for sprinkling in layout.sprinklings
    ]
    costs = [nominal_seconds(layout, g) for g in range(len(variances))]
    wanted = target.error * (VALUES["slope"] * count if target.relative else 1.0)
    whole = sum(math.sqrt(v * c) for v, c in zip(variances, costs, strict=True))
    return [
        math.ceil(math.sqrt(v / c) * whole / wanted**2)
        for v, c in zip(variances, costs, strict=True)
    ]
