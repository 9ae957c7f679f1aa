"""The fits that a campaign's axes allow, and the samples that belong to each."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Literal, NamedTuple

import numpy as np
from numpy.typing import NDArray

from lozenge_engine.design import Cell, Design
from lozenge_engine.errors import refuse
from lozenge_engine.kernels import gls
from lozenge_engine.store import Table
from lozenge_engine.sweeps import ends_inside

__all__ = ["Series", "check_target", "fittable", "groups_of", "leading", "series_of"]

FloatArray = NDArray[np.float64]
FIT_AXES = ("density", "half_width")
LEAST_SIZES = 3
"""Fewer sizes lie on a line whatever they are."""


class Series(NamedTuple):
    """The cells of one fit.

    Attributes
    ----------
    label : str
        Values of the other axis and, where they differ, the ends of regions inside the patch;
        empty if there is nothing to tell apart.
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
        One for each value of the other axis, in its order, and for each number of ends inside
        the patch, since the slope goes with that; none without a density or half-width axis.  Of
        two such axes the first is varied.
    """
    names = [axis.name for axis in layout.plan.axes]
    varied = next((name for name in names if name in FIT_AXES), None)
    if varied is None:
        return ()
    others = [name for name in names if name != varied]
    groups: dict[tuple[str, int], list[int]] = {}
    for i, cell in enumerate(layout.cells):
        values = layout.points[cell.point].values
        label = ", ".join(f"{name} {values[name]}" for name in others)
        groups.setdefault((label, ends_inside(cell.config.regions)), []).append(i)
    labels = [label for label, _ in groups]
    smallest = layout.plan.smallest_region
    axis: Literal["density", "half_width"] = "density" if varied == "density" else "half_width"
    return tuple(
        Series(
            _labelled(label, ends if labels.count(label) > 1 else None),
            axis,
            tuple(own),
            tuple(i for i in own if _large(layout.cells[i], smallest)),
        )
        for (label, ends), own in groups.items()
    )


def _labelled(label: str, ends: int | None) -> str:
    told = "" if ends is None else f"{ends} end{'' if ends == 1 else 's'} inside"
    return ", ".join(filter(None, (label, told)))


def fittable(layout: Design, series: Series) -> bool:
    """Whether a series has the three sizes that a fit takes.

    Parameters
    ----------
    layout : Design
        The campaign.
    series : Series
        One of its fits.

    Returns
    -------
    bool
        Counting sizes with enough elements only.
    """
    return len({round(layout.cells[i].x, 9) for i in series.used}) >= LEAST_SIZES


def check_target(layout: Design) -> None:
    """Refuse a target of which nothing can ever be known.

    Parameters
    ----------
    layout : Design
        The campaign.

    Raises
    ------
    InputError
        For a slope that no fit can give, or a mutual information of one region.
    """
    target = layout.plan.target
    if target is None:
        return
    if target.quantity == "slope" and not any(fittable(layout, s) for s in series_of(layout)):
        raise refuse(
            "target",
            given="a slope, with no fit of three sizes",
            allowed="a density or half_width axis with at least three sizes of "
            f"{layout.plan.smallest_region} elements or more in the smallest region",
            do="add points, lower smallest_region, or choose another target",
        )
    if target.quantity == "mutual_information" and all(
        len(cell.config.regions) < 2 for cell in layout.cells
    ):
        raise refuse(
            "target",
            given="mutual information of one region",
            allowed="two or more regions",
            do="add a region or choose another target",
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
