"""Causal-diamond regions: their light-cone extents, rows of them, and what may stand together.

Light-cone coordinates are u = (t + x)/sqrt 2 and v = (t - x)/sqrt 2; the patch is
|u|, |v| <= 1/sqrt 2 (half-width 1, area 2).  Lengths are in patch half-widths.
"""

from __future__ import annotations

import itertools
import math
from dataclasses import dataclass, replace
from typing import Literal, NamedTuple

from lozenge_engine.errors import InputError, refuse

__all__ = [
    "MAX_REGIONS",
    "PATCH",
    "PATCH_AREA",
    "PATCH_EXTENT",
    "Curvature",
    "Extent",
    "Region",
    "check_regions",
    "equal_row",
    "largest_half_width",
    "largest_separation",
    "region_letter",
    "volume",
]

PATCH_EXTENT = 1.0 / math.sqrt(2.0)
"""Half the patch's extent in u and in v."""
PATCH_AREA = 2.0
MAX_REGIONS = 8
Curvature = Literal["flat", "positive", "negative"]
SLACK = 1e-12
"""Rounding allowed when corners touch, in patch half-widths."""


class Extent(NamedTuple):
    """Ranges of a region in the light-cone coordinates.

    Attributes
    ----------
    u_low, u_high, v_low, v_high : float
        Ends, in patch half-widths.
    """

    u_low: float
    u_high: float
    v_low: float
    v_high: float


PATCH = Extent(-PATCH_EXTENT, PATCH_EXTENT, -PATCH_EXTENT, PATCH_EXTENT)


def volume(extent: Extent, *, curvature: Curvature, radius: float) -> float:
    """Volume of a diamond with ds^2 = Omega^2 (dt^2 - dx^2), the integral of Omega^2 du dv.

    Omega^2 = 1/cos^2(t/l) (positive curvature, R = 2/l^2) or 1/cos^2(x/l) (negative, -2/l^2).
    Both depend on one sum w = u + v or u - v, and Omega^2 = f'' of f = -2 l^2 ln cos(w/(l sqrt 2)),
    so the integral is f at two corners less f at the other two (own derivation; tests compare it
    with a quadrature).

    Parameters
    ----------
    extent : Extent
        Of a region inside the patch.
    curvature : {"flat", "positive", "negative"}
        Which of the three.
    radius : float
        Curvature radius l > 2/pi in patch half-widths; unused when flat.

    Returns
    -------
    float
        In squared half-widths; the whole flat patch has 2, the curved ones 4 l^2 (-ln cos(1/l)).
    """
    e = extent
    if curvature == "flat":
        return (e.u_high - e.u_low) * (e.v_high - e.v_low)
    if curvature == "positive":  # t at the future and past corner, then at the other two
        outer, inner = (
            (e.u_high + e.v_high, e.u_low + e.v_low),
            (e.u_high + e.v_low, e.u_low + e.v_high),
        )
    else:  # x at the right and left corner, then at the other two
        outer, inner = (
            (e.u_high - e.v_low, e.u_low - e.v_high),
            (e.u_high - e.v_high, e.u_low - e.v_low),
        )

    def f(w: float) -> float:
        return -2.0 * radius**2 * math.log1p(-2.0 * math.sin(w * PATCH_EXTENT / radius / 2.0) ** 2)

    return f(outer[0]) + f(outer[1]) - f(inner[0]) - f(inner[1])


@dataclass(frozen=True, slots=True, kw_only=True)
class Region:
    """A causal diamond, possibly boosted.

    Parameters
    ----------
    t0, x0 : float
        Centre, in patch half-widths.
    half_width : float
        Half its width on t = t0 before the boost; its area is 2 half_width**2.
    boost : float
        Rapidity y: the u-extent is multiplied by exp(y), the v-extent by exp(-y).

    Raises
    ------
    InputError
        If a number is not finite, the half-width is not in (0, 1] or |boost| > 3.
    """

    t0: float = 0.0
    x0: float = 0.0
    half_width: float
    boost: float = 0.0

    def __post_init__(self) -> None:
        for name in ("t0", "x0", "half_width", "boost"):
            value = getattr(self, name)
            if isinstance(value, bool) or not isinstance(value, int | float):
                raise refuse(f"region {name}", given=value, allowed="a number", do="give a number")
            if not math.isfinite(value):
                raise refuse(
                    f"region {name}",
                    given=value,
                    allowed="a finite number",
                    do="give a finite number",
                )
            object.__setattr__(self, name, float(value) + 0.0)  # no -0.0
        if not 0.0 < self.half_width <= 1.0:
            raise refuse(
                "region half_width",
                given=self.half_width,
                allowed="0 < half_width <= 1 (the patch has half-width 1)",
                do="choose a smaller diamond",
            )
        if abs(self.boost) > 3.0:
            raise refuse(
                "region boost", given=self.boost, allowed="-3 <= boost <= 3", do="boost it less"
            )

    @property
    def extent(self) -> Extent:
        """Ranges in u and v."""
        u0, v0 = (self.t0 + self.x0) * PATCH_EXTENT, (self.t0 - self.x0) * PATCH_EXTENT
        du = self.half_width * math.exp(self.boost) * PATCH_EXTENT
        dv = self.half_width * math.exp(-self.boost) * PATCH_EXTENT
        return Extent(u0 - du, u0 + du, v0 - dv, v0 + dv)

    @property
    def area(self) -> float:
        """Area du dv = 2 half_width**2, which a boost does not change."""
        return 2.0 * self.half_width**2

    @property
    def reach(self) -> float:
        """Distance in x from the centre to the left or right corner."""
        return self.half_width * math.cosh(self.boost)

    @property
    def corners(self) -> tuple[tuple[float, float], ...]:
        """(t, x) of the future, right, past and left corner."""
        e = self.extent
        pairs = (
            (e.u_high, e.v_high),
            (e.u_high, e.v_low),
            (e.u_low, e.v_low),
            (e.u_low, e.v_high),
        )
        return tuple(((u + v) * PATCH_EXTENT, (u - v) * PATCH_EXTENT) for u, v in pairs)


def region_letter(index: int) -> str:
    """Name of a region.

    Parameters
    ----------
    index : int
        0 to 7.

    Returns
    -------
    str
        A to H.
    """
    return "ABCDEFGH"[index]


def _overshoot(region: Region) -> float:
    """How far the region sticks out of the patch, in patch half-widths (<= 0: inside)."""
    e = region.extent
    return max(-e.u_low, e.u_high, -e.v_low, e.v_high) / PATCH_EXTENT - 1.0


def _spacelike_gap(a: Region, b: Region) -> float:
    """Smallest light-cone clearance between two regions, in half-widths (>= 0: spacelike)."""
    ea, eb = a.extent, b.extent
    a_left = min(eb.u_low - ea.u_high, ea.v_low - eb.v_high)
    b_left = min(ea.u_low - eb.u_high, eb.v_low - ea.v_high)
    return max(a_left, b_left) / PATCH_EXTENT


def check_regions(regions: tuple[Region, ...]) -> None:
    """Check that regions lie in the patch and are pairwise spacelike, touching allowed.

    Parameters
    ----------
    regions : tuple of Region
        One to eight regions, in the order of their letters.

    Raises
    ------
    InputError
        Naming the regions, the offending number and the nearest allowed value.
    """
    if not 1 <= len(regions) <= MAX_REGIONS:
        raise refuse(
            "regions",
            given=f"{len(regions)} regions",
            allowed=f"1 to {MAX_REGIONS}",
            do="change the number of regions",
        )
    for i, region in enumerate(regions):
        over = _overshoot(region)
        if over > SLACK:
            raise _outside(i, region, over)
    for (i, a), (j, b) in itertools.combinations(enumerate(regions), 2):
        clearance = _spacelike_gap(a, b)
        if clearance < -SLACK:
            raise refuse(
                f"regions {region_letter(i)} and {region_letter(j)}",
                given=f"centres (t, x) = ({a.t0:g}, {a.x0:g}) and ({b.t0:g}, {b.x0:g}), which "
                f"overlap or are not spacelike by {-clearance:.6g} patch half-widths",
                allowed="regions that are spacelike to each other or touch",
                do=f"{_way_out(j, a, b)}shrink one of them",
            )


def _outside(i: int, region: Region, over: float) -> InputError:
    """Name the half-width that would fit with the same centre, or say that none does."""
    fit = min(
        (1.0 - abs(region.t0 + region.x0)) * math.exp(-region.boost),
        (1.0 - abs(region.t0 - region.x0)) * math.exp(region.boost),
    )
    if fit > 0:
        do = f"reduce its half_width from {region.half_width:g} to at most {_at_most(fit)}"
    else:
        do = "move its centre into the patch, |t0| + |x0| < 1"
    return refuse(
        f"region {region_letter(i)}",
        given=f"a diamond that leaves the patch by {over:.6g} half-widths",
        allowed="regions inside the patch |t| + |x| <= 1",
        do=do,
    )


def _at_most(value: float) -> str:
    """Six digits of a number > 0, rounded down so that what is named is allowed."""
    unit = 10.0 ** (math.floor(math.log10(value)) - 5)
    return f"{math.floor(value / unit) * unit:.6g}"


def _way_out(j: int, a: Region, b: Region) -> str:
    """Where region `b` just touches `a`, nearest to its present place, if that is in the patch."""
    ea, eb = a.extent, b.extent
    s = PATCH_EXTENT
    right = b.x0 + max(ea.u_high - eb.u_low, eb.v_high - ea.v_low) / s
    left = b.x0 - max(eb.u_high - ea.u_low, ea.v_high - eb.v_low) / s
    places = (math.ceil(right * 1e6) / 1e6, math.floor(left * 1e6) / 1e6)
    for x0 in sorted(places, key=lambda x: abs(x - b.x0)):
        if _overshoot(replace(b, x0=x0)) <= SLACK:
            return f"move region {region_letter(j)} to x0 = {x0:.6g} or "
    return ""


def equal_row(count: int, half_width: float, separation: float) -> tuple[Region, ...]:
    """Equal diamonds in a row on t = 0, centred in the patch.

    Parameters
    ----------
    count : int
        Number of regions, 1 to 8.
    half_width : float
        Half-width of each, in patch half-widths.
    separation : float
        Gap between neighbouring corners on t = 0; 0 lets them touch.

    Returns
    -------
    tuple of Region
        From left to right.

    Raises
    ------
    InputError
        If the row does not fit, with the largest separation and half-width that do.
    """
    if isinstance(count, bool) or not isinstance(count, int) or not 1 <= count <= MAX_REGIONS:
        raise refuse(
            "region_count",
            given=count,
            allowed=f"a whole number from 1 to {MAX_REGIONS}",
            do="change region_count",
        )
    if not math.isfinite(separation) or separation < 0:
        raise refuse(
            "separation",
            given=separation,
            allowed="a gap >= 0 in patch half-widths (0 = touching)",
            do="raise separation",
        )
    first = Region(half_width=half_width)
    width = count * 2 * first.half_width + (count - 1) * separation
    if width > 2.0 + SLACK:
        room = largest_separation(count, half_width)
        most = largest_half_width(count, separation)
        ways = []
        if count > 1 and room >= 0:
            ways.append(f"lower separation to at most {_at_most(room) if room > 0 else 0}")
        if most > 0:
            ways.append(f"lower half_width to at most {_at_most(most)}")
        raise refuse(
            "the row of regions",
            given=f"{count} regions of half-width {half_width:g} at separation {separation:g}, "
            f"{width:.6g} wide",
            allowed="a row at most 2 wide (the patch)",
            do=", or ".join(ways) or "lower both",
        )
    step = 2 * first.half_width + separation
    return tuple(replace(first, x0=(i - (count - 1) / 2) * step + 0.0) for i in range(count))


def largest_separation(count: int, half_width: float) -> float:
    """Largest gap at which equal regions fit in a row.

    Parameters
    ----------
    count, half_width : int, float
        Of the row, as in `equal_row`.

    Returns
    -------
    float
        In patch half-widths; negative where no gap fits, infinite for one region.
    """
    return math.inf if count == 1 else (2.0 - 2.0 * count * half_width) / (count - 1)


def largest_half_width(count: int, separation: float) -> float:
    """Largest half-width at which equal regions fit in a row.

    Parameters
    ----------
    count, separation : int, float
        Of the row, as in `equal_row`.

    Returns
    -------
    float
        In patch half-widths; not positive where none fits.
    """
    return (2.0 - (count - 1) * separation) / (2.0 * count)
