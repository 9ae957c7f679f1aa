"""A campaign as it is being put together on its page: what it is, and the preset it makes."""

from __future__ import annotations

import math
import re
from collections.abc import Callable, Mapping
from dataclasses import replace
from pathlib import Path
from types import MappingProxyType
from typing import Literal, NamedTuple, get_args

import numpy as np

from lozenge_dashboard.campaigns import LONGEST_NAME, SUFFIX, checked_name
from lozenge_dashboard.exchange import file_name
from lozenge_engine.config import MAX_ELEMENTS, Setup
from lozenge_engine.errors import InputError, refuse
from lozenge_engine.geometry import MAX_REGIONS, PATCH_AREA, check_regions, largest_separation
from lozenge_engine.placement import largest_mean_gap, scaled
from lozenge_engine.plan import Axis, AxisName, CampaignPlan, Quantity, Target
from lozenge_engine.presets import Preset
from lozenge_engine.workers import MAX_WORKERS

__all__ = [
    "PROPOSED_AXES",
    "WANTED",
    "Ladder",
    "Proposal",
    "ProposedAxis",
    "Wanted",
    "checked_end",
    "free_name",
    "shown",
    "suggest",
]

ProposedAxis = Literal["density", "half_width", "separation", "preset"]
Wanted = Literal["slope", "entropy", "mutual_information", "count"]
PROPOSED_AXES: tuple[ProposedAxis, ...] = get_args(ProposedAxis)
WANTED: tuple[Wanted, ...] = get_args(Wanted)
ENDS: Mapping[str, tuple[float, float, str]] = MappingProxyType(
    {
        "density": (1.0, MAX_ELEMENTS / PATCH_AREA, "a number from 1 to 500 000 per area"),
        "half_width": (1e-9, 1.0, "a number above 0, at most 1"),
        "separation": (0.0, 2.0, "a number from 0 to 2"),
    }
)
"""What the ends of each axis may be."""


class Ladder(NamedTuple):
    """Values of an axis: its ends and how many."""

    low: float
    high: float
    points: int

    def values(self, *, even: bool) -> tuple[float, ...]:
        """The values, equally spaced if `even` and otherwise in the logarithm.

        Raises
        ------
        InputError
            If the ends do not span a range.
        """
        if self.points == 1:
            return (self.low,)
        if not (0.0 if even else 1e-12) <= self.low < self.high:
            raise refuse(
                "from",
                given=f"{self.low:.12g}, and {self.high:.12g} in “to”",
                allowed="a smaller number than in “to”",
                do="change one of them",
            )
        make = np.linspace if even else np.geomspace
        return tuple(float(f"{x:.12g}") for x in make(self.low, self.high, self.points))


class Proposal(NamedTuple):
    """What the page's controls say.

    Attributes
    ----------
    base : Preset
        The setup that the axes vary.
    wanted : str
        ``slope``, ``entropy``, ``mutual_information``, or ``count`` for a fixed number.
    relative : bool
        Whether the error to reach is a fraction of the value.
    percent, absolute : float
        Error to reach, in per cent of the value or as it is (nats; a number for the slope).
    axis : str
        What is varied; ``preset`` for the axes of the preset's own campaign.
    ladders : mapping of str to Ladder
        The values of each axis that can be chosen.
    counts : str
        Region counts as a second axis, such as ``1, 2, 3``; empty for none.
    placements : tuple of (float, float)
        Shifts (t, x).
    realisations, smallest_region, workers : int
        As in the plan; worker processes.
    minutes : float or None
        Budget; None for no limit.
    file : str
        Name of the results file.
    named : bool
        Whether the user has named it.
    """

    base: Preset
    wanted: Wanted
    relative: bool
    percent: float
    absolute: float
    axis: ProposedAxis
    ladders: Mapping[str, Ladder]
    counts: str
    placements: tuple[tuple[float, float], ...]
    realisations: int
    minutes: float | None
    smallest_region: int
    workers: int
    file: str
    named: bool = False

    @property
    def ladder(self) -> Ladder | None:
        """The values of the axis; None for the preset's own."""
        return self.ladders.get(self.axis)

    def axes(self) -> tuple[Axis, ...]:
        """The axes of the plan."""
        own = self.base.campaign
        if self.axis == "preset":
            return () if own is None else own.axes
        name: AxisName = self.axis
        ladder = self.ladders[name]
        axes = [Axis(name=name, values=ladder.values(even=name == "separation"))]
        counts = _counts(self.counts)
        if counts:
            axes.append(Axis(name="region_count", values=counts))
        return tuple(axes)

    def target(self) -> Target | None:
        """What the campaign ends at, if it has a target."""
        if self.wanted == "count":
            return None
        quantity: Quantity = self.wanted
        error = self.percent / 100 if self.relative else self.absolute
        return Target(quantity=quantity, error=error, relative=self.relative)

    def _check_wanted(self) -> None:
        """Refuse to want what these axes do not give."""
        names = [axis.name for axis in self.axes()]
        if self.wanted == "slope" and not {"density", "half_width"} & set(names):
            raise refuse(
                "wanted",
                given=f"slope b along {', '.join(names).replace('_', ' ')}",
                allowed="a density or half-width axis for b",
                do="choose S or I at each point, or change the axis",
            )
        counts = [k for axis in self.axes() if axis.name == "region_count" for k in axis.values]
        if self.wanted == "mutual_information" and 1 in (
            counts or [len(self.base.setup.regions())]
        ):
            raise refuse(
                "wanted",
                given="I at each point, with one region",
                allowed="I of two regions or more",
                do="choose S at each point, or change the regions",
            )

    def _check_placements(self) -> None:
        """Refuse shifts none of which leaves the regions in the patch."""
        regions = self.base.setup.regions()
        ladder = self.ladder
        if self.axis == "half_width" and ladder is not None:
            try:
                regions = scaled(regions, ladder.low / min(region.half_width for region in regions))
            except InputError:
                return  # a point that is left out
        elif self.axis != "density" or self.counts.strip():
            return
        first = ""
        for t, x in self.placements:
            try:
                check_regions(tuple(replace(r, t0=r.t0 + t, x0=r.x0 + x) for r in regions))
            except InputError as error:
                first = first or f"shift t {t:g}, shift x {x:g}, {error}"
            else:
                return
        raise InputError(first.replace("half_width", "half-width"))

    def preset(self) -> Preset:
        """The preset with this campaign.

        Raises
        ------
        InputError
            If the values do not make a plan.
        """
        plan = CampaignPlan(
            axes=self.axes(),
            placements=self.placements,
            realisations=self.realisations,
            target=self.target(),
            budget=None if self.minutes is None else 60 * self.minutes,
            smallest_region=self.smallest_region,
        )
        return replace(self.base, campaign=plan, sender=None)

    def misfits(self) -> dict[str, str]:
        """Why the values do not make a plan, by control; empty if they do."""
        parts: list[tuple[str, Callable[[], object]]] = [
            ("percent" if self.relative else "absolute", self.target),
            ("wanted", self._check_wanted),
            ("file", lambda: checked_name(self.file)),
            ("placements", self._check_placements),
        ]
        ladder = self.ladder
        if ladder is not None:
            parts = [
                ("low", lambda: checked_end("low", ladder.low, axis=self.axis)),
                ("high", lambda: checked_end("high", ladder.high, axis=self.axis)),
                ("low", lambda: ladder.values(even=self.axis == "separation")),
                ("counts", lambda: _counts(self.counts)),
                *parts,
            ]
        found: dict[str, str] = {}
        for name, part in parts:
            try:
                part()
            except InputError as error:
                found.setdefault(name, str(error))
        if {"low", "high", "counts"} & set(found):
            found.pop("wanted", None)
            found.pop("placements", None)
        if not found:
            try:
                self.preset()
            except InputError as error:
                place = str(error).partition(":")[0].split()[0]
                found[_PLACES.get(place, "low")] = str(error)
        return found


def shown(value: object) -> str:
    """A refused value as it stands in its box."""
    if isinstance(value, float):
        return f"{value:.12g}"
    text = str(value).strip()
    return (text if len(text) <= 60 else f"{text[:57]} …") or "nothing"


def checked_end(name: Literal["low", "high"], value: object, *, axis: str) -> float:
    """An end of an axis.

    Parameters
    ----------
    name : {"low", "high"}
        Which.
    value : object
        What was typed.
    axis : str
        Of the axes that have ends.

    Returns
    -------
    float
        The end.

    Raises
    ------
    InputError
        If it is no number that the axis can have.
    """
    low, high, allowed = ENDS[axis]
    number = isinstance(value, int | float) and not isinstance(value, bool)
    if not (number and low <= value <= high):  # type: ignore[operator]
        raise refuse(
            {"low": "from", "high": "to"}[name],
            given=shown(value),
            allowed=allowed,
            do="type such a number",
        )
    return float(value)  # type: ignore[arg-type]


_PLACES = {
    "placement": "placements",
    "placements": "placements",
    "realisations": "realisations",
    "smallest_region": "smallest_region",
    "budget": "minutes",
}


def _counts(text: str) -> tuple[int, ...]:
    """Region counts from ``1, 2, 3``."""
    parts = [part for part in re.split(r"[\s,;]+", text) if part]
    if not all(part.isdecimal() and 1 <= int(part) <= MAX_REGIONS for part in parts):
        raise refuse(
            "region counts",
            given=shown(text),
            allowed=f"whole numbers from 1 to {MAX_REGIONS}, or nothing",
            do="write them as 1, 2, 3",
        )
    return tuple(int(part) for part in parts)


# ---------------------------------------------------------------- first values


def _ladders(setup: Setup) -> dict[str, Ladder]:
    """The axes with the values that the setup's sweeps have."""
    plan = setup.sweeps
    own = min(region.half_width for region in setup.regions())
    ladders = {
        "density": Ladder(plan.density_low, plan.density_high, plan.density_points),
        "half_width": Ladder(
            float(f"{plan.size_low * own:.6g}"),
            float(f"{plan.size_high * own:.6g}"),
            plan.size_points,
        ),
    }
    regions = setup.regions()
    if len(regions) > 1:
        row = setup.region_list is None
        widest = (
            largest_separation(len(regions), setup.half_width) if row else largest_mean_gap(regions)
        )
        high = math.floor(1e6 * max(widest, 1e-6)) / 1e6
        ladders["separation"] = Ladder(0.0, high, min(plan.separation_points, 8))
    return ladders


def suggest(base: Preset, *, cores: int, folder: Path) -> Proposal:
    """The campaign that the page opens with.

    Parameters
    ----------
    base : Preset
        The present setup; its own campaign, if it has one, gives the first values.
    cores : int
        Processors of this machine: one worker each.
    folder : Path
        Where results files are.

    Returns
    -------
    Proposal
        That makes a plan, unless the preset's own campaign does not.
    """
    plan = base.campaign
    target = plan.target if plan else Target(quantity="slope", error=0.02, relative=True)
    proposal = Proposal(
        base=base,
        wanted="count" if target is None else target.quantity,
        relative=target is None or target.relative,
        percent=100 * target.error if target is not None and target.relative else 2.0,
        absolute=target.error if target is not None and not target.relative else 0.01,
        axis="preset" if plan else "density",
        ladders=_ladders(base.setup),
        counts="",
        placements=plan.placements if plan else ((0.0, 0.0),),
        realisations=plan.realisations if plan else 1000,
        minutes=(None if plan.budget is None else plan.budget / 60) if plan else 15.0,
        smallest_region=plan.smallest_region if plan else base.setup.sweeps.smallest_region,
        workers=min(cores, MAX_WORKERS),
        file="",
    )
    return proposal._replace(file=free_name(proposal, folder))


def free_name(proposal: Proposal, folder: Path) -> str:
    """A name for the results file that no file of the folder has."""
    stem = Path(file_name(proposal.base)).stem[: LONGEST_NAME - 30]
    axis = "" if proposal.axis == "preset" else f"-{proposal.axis.replace('_', '-')}"
    name, k = f"{stem}{axis}{SUFFIX}", 1
    while (folder / name).exists():
        k += 1
        name = f"{stem}{axis}-{k}{SUFFIX}"
    return name
