"""What a campaign is to find out: axes, placements, realisations, target and budget, checked."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from types import MappingProxyType
from typing import Any, Literal, get_args

from lozenge_engine.checks import checked_number, checked_whole
from lozenge_engine.config import MAX_ELEMENTS, MODES
from lozenge_engine.errors import refuse
from lozenge_engine.geometry import MAX_REGIONS, PATCH_AREA

__all__ = ["AXES", "QUANTITIES", "Axis", "AxisName", "CampaignPlan", "Quantity", "Target"]

AxisName = Literal[
    "density",
    "half_width",
    "separation",
    "mass",
    "region_count",
    "truncation_mode",
    "alpha",
    "order",
]
AXES: tuple[AxisName, ...] = get_args(AxisName)
Quantity = Literal["slope", "entropy", "mutual_information"]
QUANTITIES: tuple[Quantity, ...] = get_args(Quantity)

MAX_VALUES = 60
"""Most values of one axis."""
MAX_REALISATIONS = 1_000_000
_RANGES: Mapping[str, tuple[float, float, str]] = MappingProxyType(
    {
        "density": (1.0, MAX_ELEMENTS / PATCH_AREA, "1 to 500 000 elements per unit area"),
        "half_width": (1e-9, 1.0, "0 < half_width <= 1"),
        "separation": (0.0, 2.0, "0 to 2 half-widths"),
        "mass": (0.0, 1e4, "0 to 0.3 sqrt(density)"),
        "alpha": (0.05, 20.0, "0.05 to 20"),
        "order": (0.5, 50.0, "0.5 to 50"),
    }
)


@dataclass(frozen=True, slots=True, kw_only=True)
class Axis:
    """One thing that is varied, and its values.

    Parameters
    ----------
    name : str
        One of `AXES`.  ``density`` is at fixed geometry; ``half_width`` is at fixed density: the
        half-width of the smallest region, all sizes and gaps scaled together.
    values : tuple
        One to sixty values, each once: floats; whole numbers for ``region_count``; keys of
        `lozenge_engine.config.MODES` for ``truncation_mode``.
    """

    name: AxisName
    values: tuple[Any, ...]

    def __post_init__(self) -> None:
        if self.name not in AXES:
            raise refuse("axis", given=self.name, allowed=", ".join(AXES), do="choose one of them")
        values = tuple(self._checked(value) for value in self.values)
        if not 1 <= len(values) <= MAX_VALUES:
            raise refuse(
                f"axis {self.name}",
                given=f"{len(values)} values",
                allowed=f"1 to {MAX_VALUES}",
                do="change their number",
            )
        twice = sorted({str(v) for v in values if values.count(v) > 1})
        if twice:
            raise refuse(
                f"axis {self.name}",
                given=f"{twice[0]} more than once",
                allowed="each value once",
                do="take one of them out",
            )
        object.__setattr__(self, "values", values)

    def _checked(self, value: object) -> object:
        where = f"axis {self.name}"
        if self.name == "truncation_mode":
            if value not in MODES:
                raise refuse(where, given=value, allowed=", ".join(MODES), do="choose among them")
            return value
        if self.name == "region_count":
            return checked_whole(where, value, low=1, high=MAX_REGIONS)
        low, high, allowed = _RANGES[self.name]
        return checked_number(where, value, low=low, high=high, allowed=allowed)


@dataclass(frozen=True, slots=True, kw_only=True)
class Target:
    """What is wanted, and how well.

    Parameters
    ----------
    quantity : {"slope", "entropy", "mutual_information"}
        The slope b of S against ln(l/a); or, at every point, the entropy of all regions together
        or the mutual information of the nearest pair (support rule).
    error : float
        Standard error to reach, 1e-6 to 10: in nats, or as a fraction of the value.
    relative : bool
        Whether `error` is a fraction of the value.
    """

    quantity: Quantity
    error: float
    relative: bool = False

    def __post_init__(self) -> None:
        if self.quantity not in QUANTITIES:
            raise refuse(
                "target",
                given=self.quantity,
                allowed=", ".join(QUANTITIES),
                do="choose one of them",
            )
        error = checked_number(
            "target error", self.error, low=1e-6, high=10.0, allowed="a number from 1e-6 to 10"
        )
        object.__setattr__(self, "error", error)


@dataclass(frozen=True, slots=True, kw_only=True)
class CampaignPlan:
    """What a campaign runs over, and when it stops.

    Parameters
    ----------
    axes : tuple of Axis
        One or two, of different names; all combinations are points.
    placements : tuple of (float, float)
        Shifts (t, x) of all regions together, one to sixteen, each a class of its own with its
        own constant in a fit; mirror images (x -> -x, t -> -t) belong to the same class.
    realisations : int
        Most realisations of each sprinkling, 1 to 1 000 000; all of them without a target.
    target : Target or None
        Where to stop before.
    budget : float or None
        Seconds of running time, resumed runs together, 1 to 1e8.
    smallest_region : int
        Points whose smallest region expects fewer elements are left out of fits, 0 to 100 000.
    """

    axes: tuple[Axis, ...]
    placements: tuple[tuple[float, float], ...] = ((0.0, 0.0),)
    realisations: int = 200
    target: Target | None = None
    budget: float | None = None
    smallest_region: int = 80

    def __post_init__(self) -> None:
        object.__setattr__(self, "axes", tuple(self.axes))
        names = [axis.name for axis in self.axes]
        if not 1 <= len(names) <= 2 or len(set(names)) < len(names):
            raise refuse(
                "axes",
                given=", ".join(names) or "none",
                allowed="one axis, or two of different names",
                do="change the axes",
            )
        object.__setattr__(self, "placements", self._checked_placements())
        checked_whole("realisations", self.realisations, low=1, high=MAX_REALISATIONS)
        checked_whole("smallest_region", self.smallest_region, low=0, high=100_000)
        if self.budget is not None:
            budget = checked_number(
                "budget", self.budget, low=1.0, high=1e8, allowed="1 to 1e8 seconds"
            )
            object.__setattr__(self, "budget", budget)

    def _checked_placements(self) -> tuple[tuple[float, float], ...]:
        shifts = []
        for shift in self.placements:
            t, x = (
                checked_number("placement", s, low=-2.0, high=2.0, allowed="shifts -2 to 2")
                for s in shift
            )
            shifts.append((t, x))
        if not 1 <= len(shifts) <= 16 or len(set(shifts)) < len(shifts):
            raise refuse(
                "placements",
                given=f"{len(shifts)}, {len(set(shifts))} of them different",
                allowed="1 to 16 different shifts (t, x)",
                do="change the list",
            )
        return tuple(shifts)
