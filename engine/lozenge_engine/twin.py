"""Continuum twin: the same geometry on quasi-uniform sets cut at the same wavenumber.

A sprinkling's entropy differs from K/3 by geometry (size, place, neighbours), by the cut and by
discreteness.  The twin has the geometry and the cut and, as far as its error says, no
discreteness: golden-rotated lattices and scrambled Sobol sets of several times the density, every
threshold times that ratio, since eigenvalues are rho L/k.  Where the modes are known in closed
form (massless, flat) the levels ``exact`` and ``smooth`` need no sets.
"""

from __future__ import annotations

import time
from collections.abc import Callable, Sequence
from dataclasses import replace

from lozenge_engine.config import Config
from lozenge_engine.geometry import Region
from lozenge_engine.stages import ONE_THREAD, Stages
from lozenge_engine.twinexact import exact_twin
from lozenge_engine.twinsets import LEVELS, Level, SetReading, chosen_sets, read_set
from lozenge_engine.twinslope import (
    TwinDifference,
    TwinSlope,
    difference,
    ladder_slope,
    slope_of,
)
from lozenge_engine.twinvalues import (
    QUANTITIES,
    Quantity,
    Twin,
    TwinValue,
    quantity_of,
    together,
)

__all__ = [
    "LEVELS",
    "QUANTITIES",
    "Level",
    "Quantity",
    "Twin",
    "TwinDifference",
    "TwinSlope",
    "TwinValue",
    "difference",
    "ladder_slope",
    "quantity_of",
    "slope_of",
    "twin",
    "twin_slope",
    "twins",
]

Report = Callable[[str, float], None]


def twin(
    config: Config,
    *,
    level: Level = "preview",
    stages: Stages | None = None,
    report: Report | None = None,
) -> Twin:
    """The continuum twin of a configuration; see `twins`.

    Parameters
    ----------
    config : Config
        Geometry, density, mass and rules; its kind of points, seed and realisation do not matter.
    level : {"preview", "refined", "long", "exact", "smooth"}
        Which sets; ``exact`` and ``smooth`` need none, see `lozenge_engine.twinexact.exact_twin`.
    stages : Stages or None
        Cache of the sets' modes.
    report : callable or None
        Called as ``report("twin", fraction)``; may raise `Cancelled`.

    Returns
    -------
    Twin
        Its numbers with errors.

    Raises
    ------
    InputError
        If the configuration has no twin.
    Cancelled
        If `report` raises it.
    """
    return twins(config, (config.regions,), level=level, points_cache=stages, report=report)[0]


def twins(
    config: Config,
    layouts: Sequence[tuple[Region, ...]],
    *,
    level: Level = "preview",
    points_cache: Stages | None = None,
    report: Report | None = None,
) -> tuple[Twin, ...]:
    """Twins of several layouts of regions, which share the sets and their modes.

    Parameters
    ----------
    config : Config
        Density, mass and rules; each layout in turn replaces its regions.
    layouts : sequence of tuple of Region
        One or more.
    level : {"preview", "refined", "long", "exact", "smooth"}
        Which sets; those that would need more than 2 GB are left out.  ``exact`` and ``smooth``
        need none, see `lozenge_engine.twinexact.exact_twin`.
    points_cache : Stages or None
        Cache of the sets' modes: a second call with other regions only reads them.
    report : callable or None
        Called as ``report("twin", fraction)``; may raise `Cancelled`.

    Returns
    -------
    tuple of Twin
        One for each layout.

    Raises
    ------
    InputError
        If nothing is cut in the first stage, or the sets would be too large.
    Cancelled
        If `report` raises it.

    Notes
    -----
    Cost: as `lozenge_engine.pipeline.compute` on f N elements with the modes of N, for the f of
    each set: linear in f.
    """
    if level in ("exact", "smooth"):
        return tuple(
            exact_twin(replace(config, regions=layout), smooth=level == "smooth", report=report)
            for layout in layouts
        )
    start = time.perf_counter()
    chosen = chosen_sets(config, level)
    tell = _Progress(report, [one.oversampling for one in chosen])
    found: list[list[SetReading]] = [[] for _ in layouts]
    for one in chosen:
        cache = points_cache or Stages(threads_from=ONE_THREAD)
        for readings, layout in zip(found, layouts, strict=True):
            at = replace(config, regions=layout)
            readings.append(read_set(at, one, stages=cache, report=tell))
        tell.finished(one.oversampling)
    seconds = time.perf_counter() - start
    return tuple(
        together(replace(config, regions=layout), tuple(readings), seconds=seconds)
        for layout, readings in zip(layouts, found, strict=True)
    )


class _Progress:
    """Fraction of all sets done, by their sizes: a set's time goes into its modes."""

    def __init__(self, report: Report | None, sizes: list[int]) -> None:
        self.report = report or (lambda _stage, _fraction: None)
        self.sizes = sizes
        self.done = 0
        self.shown = 0.0

    def __call__(self, stage: str, fraction: float) -> None:
        """Pass on the progress of one stage of one set, which never falls."""
        own = self.sizes[0] * fraction if stage == "modes" and self.sizes else 0.0
        total = self.done + sum(self.sizes)
        self.shown = max(self.shown, (self.done + own) / total)
        self.report("twin", self.shown)

    def finished(self, size: int) -> None:
        """Count a set."""
        self.sizes = self.sizes[1:]
        self.done += size
        self("sets", 0.0)


def twin_slope(
    ladder: Sequence[Config | Twin],
    *,
    quantity: Quantity = "union_support",
    index: int = 0,
    level: Level = "preview",
    stages: Stages | None = None,
    report: Report | None = None,
) -> TwinSlope:
    """Slope of a twin against ln(l/a) on a density ladder at one geometry.

    Parameters
    ----------
    ladder : sequence of Config or Twin
        Two or more rungs that differ in density; twins are used as they are.
    quantity : str
        One of `lozenge_engine.twinvalues.QUANTITIES`.
    index : int
        Which region or pair.
    level : {"preview", "refined", "long", "exact", "smooth"}
        Sets for the rungs given as Config.
    stages : Stages or None
        Cache of the sets' modes.
    report : callable or None
        Called as ``report("twin", fraction)``; may raise `Cancelled`.

    Returns
    -------
    TwinSlope
        See `lozenge_engine.twinslope.ladder_slope`.

    Raises
    ------
    InputError
        With fewer than two densities, or if a rung has no twin.
    Cancelled
        If `report` raises it.
    """
    return ladder_slope(_rungs(ladder, level, stages, report), quantity=quantity, index=index)


def _rungs(
    ladder: Sequence[Config | Twin], level: Level, stages: Stages | None, report: Report | None
) -> list[Twin]:
    """Twins of all rungs."""
    rungs = []
    for j, rung in enumerate(ladder):

        def tell(stage: str, fraction: float, *, before: int = j) -> None:
            if report is not None:
                report(stage, (before + fraction) / len(ladder))

        if isinstance(rung, Twin):
            rungs.append(rung)
        else:
            rungs.append(twin(rung, level=level, stages=stages, report=tell))
    return rungs
