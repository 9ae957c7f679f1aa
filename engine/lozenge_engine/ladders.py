"""The ladders that slopes are read from: of a results file, of a plan, of the bench."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import replace
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from lozenge_engine.config import Config, Setup
from lozenge_engine.design import Design
from lozenge_engine.draws import density_draws
from lozenge_engine.errors import InputError
from lozenge_engine.estimates import Regime, estimates, reference_slope
from lozenge_engine.kernels import gls
from lozenge_engine.placement import abscissa
from lozenge_engine.samples import Reading, take
from lozenge_engine.series import Series, groups_of, series_of
from lozenge_engine.stages import Stages
from lozenge_engine.store import Results
from lozenge_engine.sweeps import density_curve

__all__ = [
    "Block",
    "Ladder",
    "bench_ladder",
    "bench_readings",
    "planned_ladders",
    "recorded_ladders",
]

FloatArray = NDArray[np.float64]
Report = Callable[[str, float], None]


class Block(NamedTuple):
    """Samples of the cells that share their sprinklings.

    Attributes
    ----------
    sprinkling : int
        Which sprinkling of the campaign; ladders share them.
    cells : ndarray, shape (P,), int64
        Places of these cells in their ladder.
    samples : ndarray, shape (R, P), float64
        Entropy of all regions by support, in nats, one row for each realisation.
    """

    sprinkling: int
    cells: NDArray[np.int64]
    samples: FloatArray


class Ladder(NamedTuple):
    """One geometry at several densities (or sizes), in one or several placements.

    Attributes
    ----------
    label : str
        What tells it from the others; empty for the only one.
    axis : {"density", "half_width"}
        What is varied.
    cells : tuple of Config, length P
        What each cell computes.
    x : ndarray, shape (P,), float64
        Mean over the regions of ln(l/a).
    placement : ndarray, shape (P,), int64
        Placement class of each cell.
    used : ndarray, shape (P,), bool
        Which cells the fits use.
    blocks : tuple of Block
        Independent of each other; empty without data.
    report : SlopeReport or None
        The fit of the data.
    note : str
        Why there is none; empty with one.
    reference : float or None
        Calabrese-Cardy slope.
    no_reference : str
        Why there is none; empty with one.
    regime : Regime or None
        Where its fit stands; None without a campaign's data.
    """

    label: str
    axis: str
    cells: tuple[Config, ...]
    x: FloatArray
    placement: NDArray[np.int64]
    used: NDArray[np.bool_]
    blocks: tuple[Block, ...]
    report: gls.SlopeReport | None
    note: str
    reference: float | None
    no_reference: str
    regime: Regime | None = None


def planned_ladders(layout: Design) -> tuple[Ladder, ...]:
    """The ladders of a campaign, without its data.

    Parameters
    ----------
    layout : Design
        The campaign.

    Returns
    -------
    tuple of Ladder
        One for each fit that its axes allow.
    """
    return tuple(_ladder(layout, series) for series in series_of(layout))


def _ladder(layout: Design, series: Series) -> Ladder:
    """A series without data."""
    own = [layout.cells[i] for i in series.cells]
    used = set(series.used)
    reference, why_none = reference_slope(layout, series)
    return Ladder(
        series.label.replace("_", " "),
        series.axis,
        tuple(cell.config for cell in own),
        np.array([cell.x for cell in own]),
        np.array([cell.placement for cell in own], dtype=np.int64),
        np.array([i in used for i in series.cells]),
        (),
        None,
        "there are no data",
        reference,
        why_none,
    )


def recorded_ladders(results: Results) -> tuple[Ladder, ...]:
    """The ladders of a results file, with its samples and fits.

    Parameters
    ----------
    results : Results
        Open; another process may be writing.

    Returns
    -------
    tuple of Ladder
        One for each fit that the campaign's axes allow.
    """
    layout = results.design
    fits = estimates(results).fits
    tables = tuple(results.table(g) for g in range(len(layout.sprinklings)))
    found = []
    for plain, fit in zip(planned_ladders(layout), fits, strict=True):
        place = {i: k for k, i in enumerate(fit.series.cells)}
        everything = fit.series._replace(used=fit.series.cells)
        blocks = []
        for g, group in groups_of(layout, tables, everything).items():
            cells = [place[i] for i in layout.sprinklings[g].cells if i in place]
            blocks.append(Block(g, np.array(cells, dtype=np.int64), group.samples))
        found.append(
            plain._replace(
                blocks=tuple(blocks), report=fit.report, note=fit.note, regime=fit.regime
            )
        )
    return tuple(found)


def bench_readings(
    setup: Setup, *, stages: Stages | None = None, report: Report | None = None
) -> dict[str, tuple[Reading, ...]]:
    """Sprinkle the bench's density ladder anew.

    Parameters
    ----------
    setup : Setup
        Its geometry, rules, density ladder and number of sprinklings.
    stages : Stages or None
        Cache.
    report : callable or None
        Called as ``report("sprinklings", fraction)``; may raise `Cancelled`.

    Returns
    -------
    dict of str to tuple of Reading
        By the keys of `lozenge_engine.draws.density_draws`; empty readings have failed.

    Raises
    ------
    Cancelled
        If `report` raises it.
    """
    draws = density_draws(setup).draws
    readings: dict[str, tuple[Reading, ...]] = {}
    for k, draw in enumerate(draws):

        def tell(_stage: str, fraction: float, before: int = k) -> None:
            if report is not None:
                report("sprinklings", (before + fraction) / len(draws))

        try:
            readings[draw.key] = take(draw, stages=stages, report=tell)
        except InputError:
            readings[draw.key] = ()  # its rung has fewer sprinklings, as the errors tell
    return readings


def bench_ladder(setup: Setup, readings: Mapping[str, tuple[Reading, ...]]) -> Ladder:
    """The density ladder of the bench.

    Parameters
    ----------
    setup : Setup
        Its geometry, rules and density ladder.
    readings : mapping of str to tuple of Reading
        From `bench_readings`; empty for a ladder without data.

    Returns
    -------
    Ladder
        Of the rungs that can be drawn; those of imported points have no data.
    """
    plan = density_draws(setup)
    reference = density_curve(setup, {}).reference_slope
    rungs = [k for k, density in enumerate(plan.values) if _rung(setup, float(density))]
    cells = [_rung(setup, float(plan.values[k])) for k in rungs]
    configs = tuple(config for config in cells if config is not None)
    blocks = []
    for place, k in enumerate(rungs):
        pairs = zip(plan.draws, plan.point_of, strict=True)
        rows = [readings.get(draw.key, ()) for draw, rung in pairs if rung == k]
        means = [[np.mean([one.union_support for one in row])] for row in rows if row]
        if means:
            blocks.append(Block(place, np.array([place], dtype=np.int64), np.array(means)))
    smallest = setup.sweeps.smallest_region
    return _fitted(configs, tuple(blocks), smallest=smallest, reference=reference)


def _rung(setup: Setup, density: float) -> Config | None:
    """A rung's configuration, if that density is allowed."""
    try:
        return setup.with_(points=replace(setup.points, density=density)).config()
    except InputError:
        return None


def _fitted(
    cells: tuple[Config, ...],
    blocks: tuple[Block, ...],
    *,
    smallest: int,
    reference: float | None,
) -> Ladder:
    """The bench's ladder with the fit that a campaign would make."""
    places = [abscissa(cell.regions, cell.points) for cell in cells]
    x = np.array([place[0] for place in places])
    elements = np.array([place[1] for place in places])
    used = elements >= smallest
    classes = np.zeros(x.size, dtype=np.int64)
    groups = [
        gls.Group(block.samples, x[block.cells], classes[block.cells], elements[block.cells])
        for block in blocks
        if used[block.cells].all()
    ]
    found = gls.report(groups, resamples=0) if groups else gls.Refused("there are no data")
    return Ladder(
        "",
        "density",
        cells,
        x,
        classes,
        used,
        blocks,
        None if isinstance(found, gls.Refused) else found,
        f"no fit: {found.reason}" if isinstance(found, gls.Refused) else "",
        reference,
        "" if reference is not None else "not a massless density ladder cut by each region's count",
    )
