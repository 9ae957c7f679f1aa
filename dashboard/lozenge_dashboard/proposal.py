"""A campaign as it is being put together on its page: what it is, and the preset it makes."""

from __future__ import annotations

import math
import re
from collections.abc import Callable, Mapping
from dataclasses import replace
from pathlib import Path
from typing import Literal, NamedTuple, get_args

import numpy as np

from lozenge_dashboard.exchange import file_name
from lozenge_engine.config import Setup
from lozenge_engine.errors import InputError, refuse
from lozenge_engine.geometry import MAX_REGIONS, largest_separation
from lozenge_engine.placement import largest_mean_gap
from lozenge_engine.plan import Axis, AxisName, CampaignPlan, Quantity, Target
from lozenge_engine.presets import Preset
from lozenge_engine.workers import MAX_WORKERS

__all__ = [
    "PROPOSED_AXES",
    "SUFFIX",
    "WANTED",
    "Ladder",
    "Proposal",
    "ProposedAxis",
    "Wanted",
    "checked_name",
    "free_name",
    "suggest",
]

SUFFIX = ".sqlite"
LONGEST_NAME = 100

ProposedAxis = Literal["density", "half_width", "separation", "preset"]
Wanted = Literal["slope", "entropy", "mutual_information", "count"]
PROPOSED_AXES: tuple[ProposedAxis, ...] = get_args(ProposedAxis)
WANTED: tuple[Wanted, ...] = get_args(Wanted)


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
                "ends of the axis",
                given=f"{self.low:g} to {self.high:g}",
                allowed="a lower end from 0 on, below the upper end",
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
                given=f"the slope b along {', '.join(names)}",
                allowed="a density or half-width axis for b",
                do="want S or I at each point, or change the axis",
            )
        counts = [k for axis in self.axes() if axis.name == "region_count" for k in axis.values]
        if self.wanted == "mutual_information" and 1 in (
            counts or [len(self.base.setup.regions())]
        ):
            raise refuse(
                "wanted",
                given="mutual information of one region",
                allowed="two regions or more",
                do="want S, or change the regions",
            )

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
        parts: tuple[tuple[str, Callable[[], object]], ...] = (
            ("low", self.axes),
            ("counts", lambda: _counts(self.counts)),
            ("percent" if self.relative else "absolute", self.target),
            ("wanted", self._check_wanted),
            ("file", lambda: checked_name(self.file)),
        )
        found: dict[str, str] = {}
        for name, part in parts:
            try:
                part()
            except InputError as error:
                found[name] = str(error)
        if "counts" in found:
            found.pop("low", None)
        if "low" in found or "counts" in found:
            found.pop("wanted", None)
        if not found:
            try:
                self.preset()
            except InputError as error:
                place = str(error).partition(":")[0].split()[0]
                found[_PLACES.get(place, "low")] = str(error)
        return found


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
            given=text,
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


def checked_name(text: object) -> str:
    """A bare file name with the suffix of results files.

    Parameters
    ----------
    text : object
        What was typed.

    Returns
    -------
    str
        The name.

    Raises
    ------
    InputError
        If it is no bare name: results files lie in the folder where the server was started.
    """
    name = text.strip() if isinstance(text, str) else ""
    bare = name and not name.startswith(".") and not re.search(r"[/\\:\x00-\x1f]", name)
    if not bare or len(name) > LONGEST_NAME:
        raise refuse(
            "results file",
            given=text,
            allowed="a name without a folder, in the folder where the server was started",
            do="leave out slashes and colons",
        )
    return name if name.endswith(SUFFIX) else name + SUFFIX
