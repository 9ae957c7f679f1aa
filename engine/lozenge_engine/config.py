"""Frozen, checked values: what is computed (`Config`) and what a user sets (`Setup`).

Each is checked when it is built: `InputError` for what is out of range or does not fit.
"""

from __future__ import annotations

import hashlib
import json
import math
from collections.abc import Mapping
from dataclasses import asdict, dataclass, field, replace
from types import MappingProxyType
from typing import Any, Literal, get_args

from lozenge_engine.checks import checked_number, checked_whole
from lozenge_engine.errors import refuse
from lozenge_engine.geometry import MAX_REGIONS, PATCH_AREA, Region, check_regions, equal_row
from lozenge_engine.placement import gaps, with_separation
from lozenge_engine.source import MAX_ELEMENTS, MAX_SEED, PointSource

__all__ = [
    "MAX_ELEMENTS",
    "MAX_SEED",
    "MODES",
    "RULE_KINDS",
    "Averaging",
    "Config",
    "PointSource",
    "Rule",
    "Setup",
    "SweepPlan",
    "TruncationMode",
]

RuleKind = Literal["none", "root_count", "union_count", "equal_share", "fixed_number"]
RULE_KINDS: tuple[RuleKind, ...] = get_args(RuleKind)
TruncationMode = Literal[
    "two_stages",
    "patch_only",
    "regions_only",
    "none",
    "union_count",
    "equal_share",
    "fixed_number",
    "custom",
]


@dataclass(frozen=True, slots=True, kw_only=True)
class Rule:
    """Which modes of one stage count.

    Parameters
    ----------
    kind : str
        ``none``; ``root_count``: |lambda| > alpha sqrt(n)/(4 pi), n the elements of the
        operator's own region; ``union_count``: n is the union's count for every region;
        ``equal_share``: n is the union's count over the number of regions;
        ``fixed_number``: the `number` largest positive modes of each region.
    alpha, number : float, int
        Multiple of the threshold, 0.05 to 20, for the three kinds with a count; positive modes to
        keep, 1 to 100 000, for ``fixed_number``.
    """

    kind: RuleKind = "root_count"
    alpha: float = 1.0
    number: int = 20

    def __post_init__(self) -> None:
        if self.kind not in RULE_KINDS:
            raise refuse(
                "rule", given=self.kind, allowed=", ".join(RULE_KINDS), do="choose one of them"
            )
        alpha = checked_number("alpha", self.alpha, low=0.05, high=20.0, allowed="0.05 to 20")
        # What a kind does not use is set to its default, so that equal rules hash equally.
        scaled = self.kind in ("root_count", "union_count", "equal_share")
        object.__setattr__(self, "alpha", alpha if scaled else 1.0)
        checked_whole("number", self.number, low=1, high=100_000)
        object.__setattr__(self, "number", self.number if self.kind == "fixed_number" else 20)


MODES: Mapping[str, tuple[RuleKind, RuleKind]] = MappingProxyType(
    {
        "two_stages": ("root_count", "root_count"),
        "patch_only": ("root_count", "none"),
        "regions_only": ("none", "root_count"),
        "none": ("none", "none"),
        "union_count": ("root_count", "union_count"),
        "equal_share": ("root_count", "equal_share"),
        "fixed_number": ("root_count", "fixed_number"),
    }
)
"""Named combinations: the kind of the patch's rule and of the regions' rule."""


@dataclass(frozen=True, slots=True, kw_only=True)
class Config:
    """One computation on one sprinkling: all that its numbers depend on.

    Parameters
    ----------
    points, realisation : PointSource, int
        The elements: realisation 0 is the sprinkling of the seed itself, then 1, ..., 10**9.
    mass : float
        In inverse patch half-widths, 0 <= mass <= 0.3 sqrt(density).
    regions : tuple of Region
        One to eight, in the order of their letters.
    patch_rule, region_rule, order : Rule, Rule, float
        The two stages of the truncation; Renyi order q, 0.5 to 50, 1 the von Neumann entropy.
    """

    points: PointSource = field(default_factory=PointSource)
    realisation: int = 0
    mass: float = 0.0
    regions: tuple[Region, ...] = (Region(half_width=0.5),)
    patch_rule: Rule = field(default_factory=Rule)
    region_rule: Rule = field(default_factory=Rule)
    order: float = 1.0

    def __post_init__(self) -> None:
        checked_whole("realisation", self.realisation, low=0, high=10**9)
        if self.points.kind == "file" and self.realisation:
            raise refuse(
                "realisation",
                given=self.realisation,
                allowed="0 for imported points: there is one such set",
                do="set sprinklings to 1",
            )
        high = 0.3 * math.sqrt(self.points.density)
        mass = checked_number(
            "mass",
            self.mass,
            low=0.0,
            high=high,
            allowed=f"0 to 0.3 sqrt(density) = {high:.6g} inverse half-widths",
        )
        object.__setattr__(self, "mass", mass)
        if mass > 0 and self.points.curved:
            raise refuse(
                "mass",
                given=f"{mass:g} with {self.points.curvature} curvature",
                allowed="0: curved patches are massless only",
                do="set the mass to 0 or the curvature to flat",
            )
        object.__setattr__(self, "regions", tuple(self.regions))
        check_regions(self.regions)
        if self.patch_rule.kind in ("union_count", "equal_share"):
            raise refuse(
                "patch rule",
                given=self.patch_rule.kind,
                allowed="none, root_count or fixed_number: the patch is one region",
                do="use that rule for the regions",
            )
        q = checked_number("order", self.order, low=0.5, high=50.0, allowed="0.5 to 50")
        object.__setattr__(self, "order", q)

    def canonical_json(self) -> str:
        """The configuration as JSON with sorted keys and no spaces."""
        plain = asdict(self) | {"points": self.points.plain()}
        return json.dumps(plain, sort_keys=True, separators=(",", ":"), allow_nan=False)

    @property
    def digest(self) -> str:
        """SHA-256 of the canonical JSON, in hexadecimal."""
        return hashlib.sha256(self.canonical_json().encode()).hexdigest()


@dataclass(frozen=True, slots=True, kw_only=True)
class Averaging:
    """How many sprinklings the numbers are averaged over.

    Parameters
    ----------
    sprinklings : int
        1 to 10 000.
    """

    sprinklings: int = 8

    def __post_init__(self) -> None:
        checked_whole("sprinklings", self.sprinklings, low=1, high=10_000)


@dataclass(frozen=True, slots=True, kw_only=True)
class SweepPlan:
    """The three sweeps of the page; each is a range and a number of points.

    Parameters
    ----------
    density_low, density_high, density_points : float, float, int
        Density ladder at fixed geometry, 10 to 500 000 elements per unit area; 3 to 40 rungs.
    size_low, size_high, size_points : float, float, int
        Size sweep at fixed density, 0.05 to 20 times the half-widths; 3 to 40 points.  Both are
        equally spaced in the logarithm.
    separation_points, smallest_region : int
        2 to 100 separations, from touching to the largest that fits; fits leave out points whose
        smallest region expects fewer elements than this, 0 to 100 000.
    """

    density_low: float = 500.0
    density_high: float = 4000.0
    density_points: int = 6
    size_low: float = 0.5
    size_high: float = 1.0
    size_points: int = 6
    separation_points: int = 20
    smallest_region: int = 80

    def __post_init__(self) -> None:
        high = MAX_ELEMENTS / PATCH_AREA
        for name in ("density_low", "density_high"):
            value = checked_number(
                name, getattr(self, name), low=10.0, high=high, allowed=f"10 to {high:g}"
            )
            object.__setattr__(self, name, value)
        for name in ("size_low", "size_high"):
            value = checked_number(
                name, getattr(self, name), low=0.05, high=20.0, allowed="0.05 to 20"
            )
            object.__setattr__(self, name, value)
        checked_whole("density_points", self.density_points, low=3, high=40)
        checked_whole("size_points", self.size_points, low=3, high=40)
        checked_whole("separation_points", self.separation_points, low=2, high=100)
        checked_whole("smallest_region", self.smallest_region, low=0, high=100_000)
        for name in ("density", "size"):
            low, top = getattr(self, f"{name}_low"), getattr(self, f"{name}_high")
            if not low < top:
                raise refuse(
                    f"{name} sweep",
                    given=f"{low:g} to {top:g}",
                    allowed="a lower end below the upper end",
                    do=f"lower {name}_low",
                )


@dataclass(frozen=True, slots=True, kw_only=True)
class Setup:
    """What a user sets: the engine part of a preset, which compiles to a `Config`.

    Parameters
    ----------
    points, mass : PointSource, float
        As in `Config`.
    region_count, half_width, separation, region_list : int, float, float, tuple or None
        The equal row, or a list of Region instead, of which `separation` sets the mean gap.
    truncation_mode, alpha, number : str, float, int
        A key of `MODES` with the alpha and number of its rules, or ``custom``.
    patch_rule, region_rule : Rule
        The stages of the mode ``custom``; otherwise ignored.
    order, averaging, sweeps : float, Averaging, SweepPlan
        Renyi order as in `Config`, number of sprinklings, the three sweeps.
    """

    points: PointSource = field(default_factory=PointSource)
    mass: float = 0.0
    region_count: int = 2
    half_width: float = 0.3
    separation: float = 0.2
    region_list: tuple[Region, ...] | None = None
    truncation_mode: TruncationMode = "two_stages"
    alpha: float = 1.0
    number: int = 20
    patch_rule: Rule = field(default_factory=Rule)
    region_rule: Rule = field(default_factory=Rule)
    order: float = 1.0
    averaging: Averaging = field(default_factory=Averaging)
    sweeps: SweepPlan = field(default_factory=SweepPlan)

    def __post_init__(self) -> None:
        if self.truncation_mode != "custom" and self.truncation_mode not in MODES:
            raise refuse(
                "truncation_mode",
                given=self.truncation_mode,
                allowed=", ".join((*MODES, "custom")),
                do="choose one of them",
            )
        # Also what is idle now: it is kept, and acts when a control is turned back.
        checked_whole("region_count", self.region_count, low=1, high=MAX_REGIONS)
        checked_number(
            "half_width", self.half_width, low=1e-9, high=1.0, allowed="0 < half_width <= 1"
        )
        checked_number(
            "separation", self.separation, low=0.0, high=2.0, allowed="0 to 2 half-widths"
        )
        checked_number("alpha", self.alpha, low=0.05, high=20.0, allowed="0.05 to 20")
        checked_whole("number", self.number, low=1, high=100_000)
        self.config()

    def regions(self) -> tuple[Region, ...]:
        """The regions: the list with its gaps scaled to `separation`, or the equal row."""
        if self.region_list is None:
            return equal_row(self.region_count, self.half_width, self.separation)
        mean = self.list_separation()
        if mean is None or math.isclose(mean, self.separation, rel_tol=1e-9, abs_tol=1e-12):
            return self.region_list
        return with_separation(self.region_list, self.separation)

    def list_separation(self) -> float | None:
        """Mean gap of the list as it was given; None for a row or a single region."""
        if self.region_list is None or len(self.region_list) < 2:
            return None
        old = gaps(self.region_list)
        return max(0.0, sum(old) / len(old))

    def rules(self) -> tuple[Rule, Rule]:
        """The rules of the two stages."""
        if self.truncation_mode == "custom":
            return self.patch_rule, self.region_rule
        patch, region = MODES[self.truncation_mode]
        return (
            Rule(kind=patch, alpha=self.alpha, number=self.number),
            Rule(kind=region, alpha=self.alpha, number=self.number),
        )

    def config(self, realisation: int = 0) -> Config:
        """Compile to the configuration of one sprinkling.

        Parameters
        ----------
        realisation : int
            0 for the seed's own, then 1, 2, ...; 0 for imported points.

        Returns
        -------
        Config
            Checked.
        """
        patch_rule, region_rule = self.rules()
        return Config(
            points=self.points,
            realisation=realisation,
            mass=self.mass,
            regions=self.regions(),
            patch_rule=patch_rule,
            region_rule=region_rule,
            order=self.order,
        )

    def with_(self, **changes: Any) -> Setup:
        """Make a copy with some values changed.

        Parameters
        ----------
        **changes : Any
            New values by the names of their fields.

        Returns
        -------
        Setup
            Checked again.
        """
        return replace(self, **changes)
