"""The fits that a campaign's axes allow, and the samples that belong to each."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Literal, NamedTuple

import numpy as np
from numpy.typing import NDArray

from lozenge_engine.design import Cell, Design
from lozenge_engine.kernels import gls
from lozenge_engine.store import Table

__all__ = ["Series", "groups_of", "leading", "series_of"]

FloatArray = NDArray[np.float64]
FIT_AXES = ("density", "half_width")


class Series(NamedTuple):
    """The cells of one fit.

    Attributes
    ----------
    label : str
        Values of the other axis; empty if there is none.
    axis : {"density", "half_width"}
        What is varied.
    cells : tuple of int
        All cells, those that a fit leaves out for their size too.
    used : tuple of int
        Those that it uses.
    """

    label: str
    axis: Literal["density", "half_width"]
    cells: tuple[int, ...]
    used: tuple[int, ...]


def series_of(layout: Design) -> tuple[Series, ...]:
    """The fits that a campaign's axes allow.

    Parameters
    ----------
    layout : Design
        The campaign.

    Returns
    -------
    tuple of Series
        One for each value of the other axis, in its order; none without a density or half-width
        axis.  Of two such axes the first is varied.
    """
    names = [axis.name for axis in layout.plan.axes]
    varied = next((name for name in names if name in FIT_AXES), None)
    if varied is None:
        return ()
    others = [name for name in names if name != varied]
    groups: dict[str, list[int]] = {}
    for i, cell in enumerate(layout.cells):
        values = layout.points[cell.point].values
        label = ", ".join(f"{name} {values[name]}" for name in others)
        groups.setdefault(label, []).append(i)
    smallest = layout.plan.smallest_region
    axis: Literal["density", "half_width"] = "density" if varied == "density" else "half_width"
    return tuple(
        Series(label, axis, tuple(own), tuple(i for i in own if _large(layout.cells[i], smallest)))
        for label, own in groups.items()
    )


def _large(cell: Cell, smallest: int) -> bool:
    """Whether the smallest region expects enough elements, up to rounding."""
    return cell.elements >= smallest * (1 - 1e-9)


def groups_of(layout: Design, tables: Sequence[Table], series: Series) -> dict[int, gls.Group]:
    """The samples of a fit by what shares its sprinklings.

    Parameters
    ----------
    layout : Design
        The campaign.
    tables : sequence of Table
        Samples of each sprinkling.
    series : Series
        The fit.

    Returns
    -------
    dict of int to Group
        By sprinkling; those without a cell of the fit are not in it.
    """
    used = set(series.used)
    groups = {}
    for g, (sprinkling, table) in enumerate(zip(layout.sprinklings, tables, strict=True)):
        columns = [c for c, i in enumerate(sprinkling.cells) if i in used]
        if not columns:
            continue
        own = [layout.cells[sprinkling.cells[c]] for c in columns]
        groups[g] = gls.Group(
            samples=table.union_support[:, columns],
            x=np.array([cell.x for cell in own]),
            placement=np.array([cell.placement for cell in own]),
            elements=np.array([cell.elements for cell in own]),
        )
    return groups


def leading(table: Table, count: int) -> Table:
    """The first rows of a table.

    Parameters
    ----------
    table : Table
        R realisations.
    count : int
        How many of them.

    Returns
    -------
    Table
        Views of min(count, R) rows.
    """

    def first(arrays: tuple[FloatArray, ...]) -> tuple[FloatArray, ...]:
        return tuple(array[:count] for array in arrays)

    return Table(
        realisation=table.realisation[:count],
        seconds=table.seconds[:count],
        elements=table.elements[:count],
        ordering_fraction=table.ordering_fraction[:count],
        trusted=table.trusted[:count],
        entropy=first(table.entropy),
        kept=first(table.kept),
        region_elements=first(table.region_elements),
        union_support=table.union_support[:count],
        union_direct_sum=table.union_direct_sum[:count],
        pair_support=first(table.pair_support),
        pair_direct_sum=first(table.pair_direct_sum),
        cross_block=first(table.cross_block),
    )
