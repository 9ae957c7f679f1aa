"""What a slope is due to: data, continuum twin, chain, and data minus twin on the same ladder."""

from __future__ import annotations

import time
from collections.abc import Callable, Sequence
from dataclasses import replace
from functools import partial
from pathlib import Path
from typing import NamedTuple

from lozenge_engine import store
from lozenge_engine.attribution import DueRow, row_of
from lozenge_engine.config import Averaging, Config, Setup
from lozenge_engine.constants import Combination, combinations
from lozenge_engine.design import Design
from lozenge_engine.errors import InputError
from lozenge_engine.evidence import EvidencePlan
from lozenge_engine.geometry import Region
from lozenge_engine.ladders import (
    Ladder,
    bench_ladder,
    bench_readings,
    planned_ladders,
    recorded_ladders,
)
from lozenge_engine.pointfile import PointFile
from lozenge_engine.routes import ChainRoute, chain_route
from lozenge_engine.stages import Stages
from lozenge_engine.twin import Level, Twin, twins
from lozenge_engine.verdict import Slope

__all__ = [
    "Combination",
    "DueRecord",
    "DueRow",
    "Slope",
    "due_of_ladders",
    "due_of_plan",
    "due_of_results",
    "due_record",
]

Report = Callable[[str, float], None]


class DueRecord(NamedTuple):
    """The table.

    Attributes
    ----------
    source : str
        Where the data come from.
    level : str
        Of the twin.
    rows : tuple of DueRow
        One for each geometry.
    combinations : tuple of Combination
        What can be said of constants; empty without several region counts.
    notes : tuple of str
        What has to be said beside it.
    complete : bool
        Whether nothing more is to come.
    seconds : float
        Wall time so far.
    """

    source: str
    level: str
    rows: tuple[DueRow, ...]
    combinations: tuple[Combination, ...]
    notes: tuple[str, ...]
    complete: bool
    seconds: float


Publish = Callable[[DueRecord], None]


def due_record(
    setup: Setup,
    plan: EvidencePlan,
    *,
    results: Path | None = None,
    points: PointFile | None = None,
    stages: Stages | None = None,
    report: Report | None = None,
    publish: Publish | None = None,
) -> DueRecord:
    """The table for the page: from a results file, or from the bench's density ladder.

    Parameters
    ----------
    setup : Setup
        Whose ladder is sprinkled, without a results file.
    plan : EvidencePlan
        Level of the twin, and sprinklings of each density.  ``exact`` is read as ``smooth``: the
        steps in which modes enter are not in data averaged over sprinklings.
    results : Path or None
        A results file, also one that is being written.
    points : PointFile or None
        Imported points, which have one density and so no ladder: then there are no data.
    stages : Stages or None
        Cache.
    report : callable or None
        Called with a stage and a fraction; may raise `Cancelled`.
    publish : callable or None
        Called with the table as far as it is.

    Returns
    -------
    DueRecord
        Complete.

    Raises
    ------
    InputError
        If the results file cannot be read.
    Cancelled
        If `report` raises it.
    """
    level: Level = "smooth" if plan.level == "exact" else plan.level
    if results is not None:
        with store.inspect(results) as opened:
            return due_of_results(
                opened, level=level, stages=stages, report=report, publish=publish
            )
    asked = setup.with_(averaging=Averaging(sprinklings=plan.realisations))
    known: dict[Config, Twin] = {}
    bare = due_of_ladders(
        (bench_ladder(asked, {}),),
        source="no data yet" if points is None else "no data: imported points have one density",
        level=level,
        known=known,
        stages=stages,
        report=report,
        publish=publish,
    )
    if points is not None:
        return bare
    if publish is not None:
        publish(bare._replace(complete=False))
    readings = bench_readings(asked, stages=stages, report=report)
    return due_of_ladders(
        (bench_ladder(asked, readings),),
        source=f"the bench's density ladder, {plan.realisations} sprinklings of each density",
        level=level,
        known=known,
        stages=stages,
        report=report,
    )


def due_of_results(
    results: store.Results,
    *,
    level: Level = "preview",
    stages: Stages | None = None,
    report: Report | None = None,
    publish: Publish | None = None,
) -> DueRecord:
    """The table of a results file.

    Parameters
    ----------
    results : Results
        Open; another process may be writing.
    level : str
        Level of the twin.
    stages, report, publish : Stages or None, callable or None, callable or None
        As in `due_record`.

    Returns
    -------
    DueRecord
        Without rows where neither density nor half_width is an axis.

    Raises
    ------
    Cancelled
        If `report` raises it.
    """
    counts = [done for done, _ in results.counts()]
    several = f"{min(counts)} to {max(counts)}" if min(counts) < max(counts) else f"{max(counts)}"
    source = f"{results.path.name}, {several} realisations of each sprinkling"
    ladders = recorded_ladders(results)
    return due_of_ladders(
        ladders,
        source=source,
        level=level,
        left_out=results.design.left_out,
        stages=stages,
        report=report,
        publish=publish,
    )


def due_of_plan(
    layout: Design,
    *,
    level: Level = "preview",
    stages: Stages | None = None,
    report: Report | None = None,
) -> DueRecord:
    """Twin and chain of a campaign that has not run.

    Parameters
    ----------
    layout : Design
        The campaign.
    level : str
        Level of the twin.
    stages, report : Stages or None, callable or None
        As in `due_record`.

    Returns
    -------
    DueRecord
        Without data.

    Raises
    ------
    Cancelled
        If `report` raises it.
    """
    return due_of_ladders(
        planned_ladders(layout),
        source="no data: the campaign has not run",
        level=level,
        left_out=layout.left_out,
        stages=stages,
        report=report,
    )


def due_of_ladders(
    ladders: Sequence[Ladder],
    *,
    source: str,
    level: Level = "preview",
    known: dict[Config, Twin] | None = None,
    left_out: Sequence[str] = (),
    stages: Stages | None = None,
    report: Report | None = None,
    publish: Publish | None = None,
) -> DueRecord:
    """The table of some ladders.

    Parameters
    ----------
    ladders : sequence of Ladder
        With or without data.
    source : str
        Where the data come from.
    level : str
        Level of the twin.
    known : dict of Config to Twin or None
        Twins of this level that are there already; what is computed is added.
    left_out : sequence of str
        What has no cell, and why.
    stages, report, publish : Stages or None, callable or None, callable or None
        As in `due_record`.

    Returns
    -------
    DueRecord
        One row for each ladder.

    Raises
    ------
    Cancelled
        If `report` raises it.

    Notes
    -----
    Cost: the twin's sets once for each density, mass and pair of rules, whatever the regions; a
    chain for each ladder.
    """
    begun = time.perf_counter()
    tell = report or (lambda _stage, _fraction: None)
    notes = [f"left out: {text}" for text in left_out]
    chains: list[ChainRoute | None] = [None] * len(ladders)
    found: dict[Config, Twin] = {} if known is None else known

    def made(*, complete: bool) -> DueRecord:
        rows = tuple(row_of(a, found, b) for a, b in zip(ladders, chains, strict=True))
        return DueRecord(
            source,
            level,
            rows,
            combinations(ladders, chains, found),
            tuple(dict.fromkeys(notes)),
            complete,
            time.perf_counter() - begun,
        )

    for k, ladder in enumerate(ladders):
        chains[k] = _chain(ladder, notes, tell)
    if publish is not None:
        publish(made(complete=False))
    for config, layouts, part in _densities(ladders):
        if all(replace(config, regions=layout) in found for layout in layouts):
            continue
        try:
            several = twins(
                config,
                layouts,
                level=level,
                points_cache=stages,
                report=partial(_along, tell, part),
            )
        except InputError as error:
            notes.append(f"no twin: {error}")
            continue
        found |= {one.config: one for one in several}
        if publish is not None:
            publish(made(complete=False))
    return made(complete=True)


# ---------------------------------------------------------------- twin and chain


def _along(report: Report, part: tuple[float, float], _stage: str, fraction: float) -> None:
    """A fraction of one density's sets as a fraction of all."""
    report("twin", part[0] + part[1] * fraction)


def _densities(
    ladders: Sequence[Ladder],
) -> list[tuple[Config, list[tuple[Region, ...]], tuple[float, float]]]:
    """Layouts that share the twin's sets, with each one's part of the whole work."""
    groups: dict[Config, list[tuple[Region, ...]]] = {}
    for ladder in ladders:
        for config in ladder.cells:
            plain = replace(config, regions=(Region(half_width=0.5),))
            own = groups.setdefault(plain, [])
            if config.regions not in own:
                own.append(config.regions)
    order = sorted(groups, key=lambda config: config.points.density)
    whole = sum(config.points.density**1.5 for config in order) or 1.0
    found, before = [], 0.0
    for config in order:
        share = config.points.density**1.5 / whole
        found.append((config, groups[config], (before, share)))
        before += share
    return found


def _chain(ladder: Ladder, notes: list[str], report: Report) -> ChainRoute | None:
    """The chain at the fractions of the ladder's first cell."""
    first = ladder.cells[0]
    try:
        route = chain_route(first.regions, mass=first.mass, order=first.order, report=report)
    except InputError as error:
        notes.append(f"no chain: {error}")
        return None
    notes += route.notes
    if first.points.curvature != "flat":
        notes.append("the chain is flat: only its slope can be set beside a curved patch")
    return route
