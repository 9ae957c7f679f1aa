"""Constants of entropies, only in combinations that the cutoff cannot change.

S of K regions grows by a constant when the cutoff is refined, and K times S of one of them by the
same: their difference has a limit, in which data, twin and chain may be set side by side.
"""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from dataclasses import replace
from typing import NamedTuple

import numpy as np

from lozenge_engine.config import Config
from lozenge_engine.geometry import Region
from lozenge_engine.kernels import departure as departures
from lozenge_engine.ladders import Block, Ladder
from lozenge_engine.routes import ChainRoute
from lozenge_engine.twin import Twin
from lozenge_engine.verdict import Slope

__all__ = ["Combination", "combinations"]

Cells = list[tuple[int, int]]
"""Places of a cell in the ladder of K regions and in that of one."""


class Combination(NamedTuple):
    """A combination of entropies that no cutoff changes, mean over its ladder.

    Attributes
    ----------
    label : str
        In symbols.
    data, twin, chain : Slope
        Values in nats; the data's fit is that of one constant for each placement class.
    """

    label: str
    data: Slope
    twin: Slope
    chain: Slope


def combinations(
    ladders: Sequence[Ladder],
    chains: Sequence[ChainRoute | None],
    found: Mapping[Config, Twin],
) -> tuple[Combination, ...]:
    """S of K equal regions minus K times S of one, for every ladder that has its one.

    Parameters
    ----------
    ladders : sequence of Ladder
        Of one campaign.
    chains : sequence of ChainRoute or None
        One for each ladder.
    found : mapping of Config to Twin
        What is known of the twins.

    Returns
    -------
    tuple of Combination
        Regions of one size only, at the same densities and placements; the single region stands
        where the row's centre is.
    """
    made = []
    for k, many in enumerate(ladders):
        count = len(many.cells[0].regions)
        for j, one in enumerate(ladders):
            cells = _shared(many, one) if count > 1 else []
            if cells:
                made.append(
                    Combination(
                        f"S({count}) - {count} S(1)"
                        + (f", {many.label}" if len({len(x.cells) for x in ladders}) > 1 else ""),
                        _data(many, one, cells, count),
                        _twin(many, one, cells, count, found),
                        _chain(chains[k], chains[j], count),
                    )
                )
    return tuple(made)


def _shared(many: Ladder, one: Ladder) -> Cells:
    """Cells of both that the fits use and that differ in the number of regions only."""
    sizes = {round(r.half_width, 12) for config in (many.cells[0], one.cells[0]) for r in
             config.regions}  # fmt: skip
    if len(one.cells[0].regions) != 1 or len(sizes) > 1 or many.axis != "density":
        return []
    places = {
        _key(config, int(p)): j
        for j, (config, p) in enumerate(zip(one.cells, one.placement, strict=True))
        if one.used[j]
    }
    pairs = [
        (k, places.get(_key(config, int(p)), -1))
        for k, (config, p) in enumerate(zip(many.cells, many.placement, strict=True))
        if many.used[k]
    ]
    return [(k, j) for k, j in pairs if j >= 0]


def _key(config: Config, placement: int) -> tuple[Config, int]:
    return replace(config, regions=(Region(half_width=0.5),)), placement


def _data(many: Ladder, one: Ladder, cells: Cells, count: int) -> Slope:
    """Paired on every sprinkling, which both share."""
    partner = dict(cells)
    others: dict[int, Block] = {block.sprinkling: block for block in one.blocks}
    blocks = []
    for block in many.blocks:
        other = others.get(block.sprinkling)
        use = [c for c, k in enumerate(block.cells) if int(k) in partner]
        if other is None or not use:
            continue
        column = {int(k): c for c, k in enumerate(other.cells)}
        matched = [column[partner[int(block.cells[c])]] for c in use]
        at = block.cells[use]
        blocks.append(
            departures.Block(
                block.samples[:, use] - count * other.samples[:, matched],
                np.zeros(len(use)),
                np.zeros(len(use)),
                many.x[at],
                many.placement[at],
            )
        )
    found = departures.departure(blocks)
    if found is None:
        return Slope(note="there are no data")
    note = "paired on every sprinkling; a constant for each placement class"
    return Slope(found.mean, found.mean_error, found.flat_chi2, found.flat_dof, found.flat_p, note)


def _twin(
    many: Ladder, one: Ladder, cells: Cells, count: int, found: Mapping[Config, Twin]
) -> Slope:
    """Mean over the cells, the errors as common to all of them."""
    pairs = [(found.get(many.cells[k]), found.get(one.cells[j])) for k, j in cells]
    values, errors = [], []
    for a, b in pairs:
        if a is None or b is None:
            return Slope(note="no twin yet")
        values.append(a.union_support.value - count * b.union_support.value)
        errors.append(math.hypot(a.union_support.error, count * b.union_support.error))
    return Slope(float(np.mean(values)), float(np.mean(errors)), note="errors as common to all")


def _chain(many: ChainRoute | None, one: ChainRoute | None, count: int) -> Slope:
    """The lattice's constants cancel: both count K times two ends."""
    if many is None or one is None or not math.isclose(many.reference, count * one.reference):
        return Slope(note="no chain with as many ends")
    return Slope(
        many.constant.value - count * one.constant.value,
        math.hypot(many.constant.error, count * one.constant.error),
        note="fixed ends: another infrared side, it need not be equal",
    )
