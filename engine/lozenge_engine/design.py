"""Which points a campaign has, which sprinklings they share, and which seed each of those has."""

from __future__ import annotations

import hashlib
import itertools
import json
from collections.abc import Mapping
from dataclasses import replace
from typing import Any, NamedTuple

from lozenge_engine.config import Config, Setup
from lozenge_engine.errors import InputError, refuse
from lozenge_engine.geometry import Region, check_regions
from lozenge_engine.kernels import cuts
from lozenge_engine.kernels.modes import DENSE_LIMIT
from lozenge_engine.placement import abscissa, mirror_images, outline, scaled, with_separation
from lozenge_engine.plan import AxisName, CampaignPlan
from lozenge_engine.sections import sections_of
from lozenge_engine.source import PointSource

__all__ = ["Cell", "Design", "Point", "Sprinkling", "child_seed", "design", "identity"]


class Point(NamedTuple):
    """One combination of the axes' values.

    Attributes
    ----------
    values : mapping of str to float, int or str
        By the name of the axis, in the plan's order.
    setup : Setup
        The campaign's setup with these values.
    """

    values: Mapping[AxisName, Any]
    setup: Setup


class Cell(NamedTuple):
    """One point in one placement class: what a realisation gives one sample of.

    Attributes
    ----------
    point, placement : int
        Indices of `Design.points` and of the plan's placements.
    config : Config
        Of the class's own placement, with the campaign's seed.
    layouts : tuple of tuple of Region
        The placement and its distinct mirror images, one to four.
    x : float
        Mean over the regions of ln(l/a), l = 2 half_width, a = density**(-1/2).
    elements : float
        Expected elements of the smallest region.
    """

    point: int
    placement: int
    config: Config
    layouts: tuple[tuple[Region, ...], ...]
    x: float
    elements: float


class Sprinkling(NamedTuple):
    """What fixes a point set, and the cells that share its realisations.

    Attributes
    ----------
    kind : {"poisson", "fixed", "lattice", "sobol"}
        How the elements are drawn, or laid out with a shift or scrambling for each realisation.
    density : float
        Elements per unit volume.
    cells : tuple of int
        Indices of `Design.cells`, those of one mass together, the deepest search first.
    """

    kind: str
    density: float
    cells: tuple[int, ...]


class Design(NamedTuple):
    """All of a campaign but its samples.

    Attributes
    ----------
    setup : Setup
        What the axes vary.
    plan : CampaignPlan
        The axes.
    points : tuple of Point
        In the order of the axes' values, the last axis fastest; those left out too.
    cells : tuple of Cell
        What is computed.
    sprinklings : tuple of Sprinkling
        Each of its own realisations, independent of the others'.
    left_out : tuple of str
        Points and placements that cannot be computed, and why.
    """

    setup: Setup
    plan: CampaignPlan
    points: tuple[Point, ...]
    cells: tuple[Cell, ...]
    sprinklings: tuple[Sprinkling, ...]
    left_out: tuple[str, ...]

    def seed(self, sprinkling: int, realisation: int) -> int:
        """Child seed of one realisation; see `child_seed`.

        Parameters
        ----------
        sprinkling, realisation : int
            Which one.

        Returns
        -------
        int
            0 <= seed < 2**53.
        """
        own = self.sprinklings[sprinkling]
        return child_seed(
            self.setup.points.seed, kind=own.kind, density=own.density, realisation=realisation
        )

    def source(self, sprinkling: int, realisation: int) -> PointSource:
        """The points of one realisation.

        Parameters
        ----------
        sprinkling, realisation : int
            Which one.

        Returns
        -------
        PointSource
            The setup's with the sprinkling's density and the child seed; its realisation 0.
        """
        seed = self.seed(sprinkling, realisation)
        return replace(self.setup.points, density=self.sprinklings[sprinkling].density, seed=seed)


def child_seed(seed: int, *, kind: str, density: float, realisation: int) -> int:
    """Seed of one realisation of a sprinkling.

    Parameters
    ----------
    seed : int
        The campaign's seed, 0 <= seed < 2**53.
    kind, density : str, float
        What fixes the point set; regions, rules, masses and orders share it.
    realisation : int
        From 0 on.

    Returns
    -------
    int
        0 <= seed < 2**53: the first 53 bits of SHA-256 of the four as JSON, the same everywhere.
    """
    text = json.dumps([seed, kind, float(density), realisation], separators=(",", ":"))
    return int.from_bytes(hashlib.sha256(text.encode()).digest()[:8], "big") >> 11


def identity(setup: Setup, plan: CampaignPlan) -> str:
    """Hash of all that the samples depend on: two campaigns that share it share their samples.

    Parameters
    ----------
    setup : Setup
        Points, mass, regions, truncation and order count; averages and the page's sweeps do not.
    plan : CampaignPlan
        Axes and placements count; realisations, target, budget and smallest region do not.

    Returns
    -------
    str
        SHA-256 in hexadecimal.
    """
    sections = sections_of(setup)
    parts = {key: sections[key] for key in ("points", "mass", "regions", "truncation", "order")}
    parts["axes"] = [[axis.name, axis.values] for axis in plan.axes]
    parts["placements"] = plan.placements
    text = json.dumps(parts, sort_keys=True, separators=(",", ":"), allow_nan=False)
    return hashlib.sha256(text.encode()).hexdigest()


def design(setup: Setup, plan: CampaignPlan) -> Design:
    """Lay out a campaign.

    Parameters
    ----------
    setup : Setup
        What the axes vary.
    plan : CampaignPlan
        The axes and placements.

    Returns
    -------
    Design
        With at least one cell.

    Raises
    ------
    InputError
        For imported points, of which there is one set; if nothing at all can be computed.
    """
    if setup.points.kind == "file":
        raise refuse(
            "points",
            given="imported points",
            allowed="sprinklings: a campaign repeats them",
            do="choose points of another kind",
        )
    points, cells, left_out = [], [], []
    for combination in itertools.product(*(axis.values for axis in plan.axes)):
        values = dict(zip((axis.name for axis in plan.axes), combination, strict=True))
        name = ", ".join(f"{key} {_shown(value)}" for key, value in values.items())
        try:
            changed = _applied(setup, values)
            _check_dense(changed)
        except InputError as error:
            left_out.append(f"{name}: {error}")
            continue
        points.append(Point(values, changed))
        own: list[Cell] = []
        for k, shift in enumerate(plan.placements):
            try:
                cell = _cell(changed, len(points) - 1, k, shift)
                _check_new(cell, own, plan)
            except InputError as error:
                left_out.append(f"{name}, placement {shift[0]:g}, {shift[1]:g}: {error}")
            else:
                own.append(cell)
        cells += own
    if not cells:
        raise refuse(
            "axes", given=left_out[0], allowed="at least one point that fits", do="change the axes"
        )
    return Design(setup, plan, tuple(points), tuple(cells), _shared(cells), tuple(left_out))


def _shown(value: object) -> str:
    return f"{value:.4g}" if isinstance(value, float) else str(value)


def _applied(setup: Setup, values: Mapping[AxisName, Any]) -> Setup:
    """The setup with the axes' values; the half-width last, since it scales the rest."""
    changes: dict[str, Any] = {
        k: v for k, v in values.items() if k not in ("density", "half_width")
    }
    if "density" in values:
        changes["points"] = replace(setup.points, density=values["density"])
    if "region_count" in values and setup.region_list is not None:
        raise refuse(
            "region_count",
            given="a list of regions",
            allowed="an equal row",
            do="choose another axis or a row",
        )
    count = setup.region_count if setup.region_list is None else len(setup.region_list)
    if "separation" in values and values.get("region_count", count) < 2:
        raise refuse(
            "separation",
            given="one region, which has none",
            allowed="two or more regions",
            do="choose another axis or add a region",
        )
    if "truncation_mode" not in changes and "alpha" in changes and _rules_without_alpha(setup):
        raise refuse(
            "alpha",
            given=f"truncation mode {setup.truncation_mode}, which has no alpha",
            allowed="modes that cut by a count",
            do="choose another axis or mode",
        )
    if "half_width" not in values:
        return setup.with_(**changes)
    return _resized(setup.with_(**changes), values["half_width"], keep_gap="separation" in values)


def _rules_without_alpha(setup: Setup) -> bool:
    return setup.truncation_mode in ("custom", "none")


def _resized(setup: Setup, half_width: float, *, keep_gap: bool) -> Setup:
    """All regions scaled so that the smallest has this half-width, touched corners kept."""
    regions = setup.regions()
    factor = half_width / min(region.half_width for region in regions)
    if setup.region_list is None:
        gap = setup.separation if keep_gap else factor * setup.separation
        return setup.with_(half_width=half_width, separation=gap)
    layout = scaled(regions, factor)
    if keep_gap and len(layout) > 1:
        layout = with_separation(layout, setup.separation)
    check_regions(layout)
    mean = setup.list_separation()
    gap = setup.separation if keep_gap or mean is None else factor * setup.separation
    return setup.with_(region_list=layout, separation=gap)


def _check_dense(setup: Setup) -> None:
    elements = setup.points.expected_points()
    if setup.rules()[0].kind == "none" and elements > DENSE_LIMIT:
        raise refuse(
            "truncation",
            given=f"no cut in the first stage with {elements:.0f} elements",
            allowed=f"at most {DENSE_LIMIT} elements",
            do="lower the density or cut in the first stage",
        )


def _cell(setup: Setup, point: int, placement: int, shift: tuple[float, float]) -> Cell:
    """One point in one placement class."""
    t, x = shift
    regions = setup.regions()
    if t or x:
        regions = tuple(replace(r, t0=r.t0 + t, x0=r.x0 + x) for r in regions)
        check_regions(regions)
    x, elements = abscissa(regions, setup.points)
    return Cell(
        point,
        placement,
        replace(setup.config(), regions=regions),
        mirror_images(regions),
        x,
        elements,
    )


def _check_new(cell: Cell, others: list[Cell], plan: CampaignPlan) -> None:
    """Refuse a placement that is a mirror image of another one: one class has both."""
    images = _sets(cell)
    for other in others:
        if images & _sets(other):
            t, x = plan.placements[other.placement]
            raise refuse(
                "placement",
                given=f"a mirror image of the placement {t:g}, {x:g}",
                allowed="placements that are no mirror images of each other",
                do="take one of them out",
            )


def _sets(cell: Cell) -> set[frozenset[tuple[float, ...]]]:
    """The sets of diamonds of a cell's layouts, up to rounding."""
    return {outline(layout) for layout in cell.layouts}


def _shared(cells: list[Cell]) -> tuple[Sprinkling, ...]:
    """Cells by what fixes their point set, in the order in which that first appears."""
    groups: dict[tuple[str, float], list[int]] = {}
    for i, cell in enumerate(cells):
        source = cell.config.points
        groups.setdefault((source.kind, source.density), []).append(i)
    return tuple(
        Sprinkling(kind, density, tuple(sorted(own, key=lambda i: (*_depth(cells[i]), i))))
        for (kind, density), own in groups.items()
    )


def _depth(cell: Cell) -> tuple[float, float]:
    """Mass and floor of the patch's search: the deepest one comes first and serves the others."""
    elements = round(cell.config.points.elements())
    return cell.config.mass, cuts.needed_floor(cell.config.patch_rule, elements=elements)
