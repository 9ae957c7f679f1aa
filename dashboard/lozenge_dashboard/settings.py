"""The page's controls as views of a `Setup`: how each is read from one, and put into one."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import replace
from types import MappingProxyType
from typing import Any, NamedTuple

from lozenge_engine.config import Setup
from lozenge_engine.errors import refuse
from lozenge_engine.geometry import PATCH_AREA, Region, region_letter
from lozenge_engine.source import QUASI_UNIFORM

__all__ = ["SETTINGS", "Setting"]

WIDEST_NEW = 0.1
"""Half-width of a region that is added to a list, if there is room."""


class Setting(NamedTuple):
    """One control: its value in a setup, and a setup with another value."""

    get: Callable[[Setup], Any]
    put: Callable[[Setup, Any], Setup]


def _number(name: str, value: object) -> float:
    """A number from the page, or a refusal in the words of the engine."""
    if isinstance(value, bool) or not isinstance(value, int | float):
        raise refuse(name, given=value, allowed="a number", do="type a number such as 0.25")
    return float(value)


def _whole(name: str, value: object) -> int:
    """A whole number from the page; 3.0 counts as 3."""
    number = _number(name, value)
    if not number.is_integer():
        raise refuse(name, given=value, allowed="a whole number", do="leave out the decimals")
    return int(number)


def _plain(name: str, kind: Callable[[str, object], Any]) -> Setting:
    """A field of the setup itself."""
    return Setting(
        lambda s: getattr(s, name), lambda s, x: s.with_(**{name: kind(name.replace("_", " "), x)})
    )


def _within(part: str, name: str, kind: Callable[[str, object], Any]) -> Setting:
    """A field of one of the setup's parts."""

    def put(setup: Setup, value: Any) -> Setup:
        changed = replace(getattr(setup, part), **{name: kind(name.replace("_", " "), value)})
        return setup.with_(**{part: changed})

    return Setting(lambda s: getattr(getattr(s, part), name), put)


def _word(_name: str, value: object) -> object:
    """A word from a list, which the engine checks."""
    return value


def _put_elements(setup: Setup, value: Any) -> Setup:
    density = _number("elements", value) / PATCH_AREA
    return setup.with_(points=replace(setup.points, density=density))


def _put_kind(setup: Setup, value: Any) -> Setup:
    points = setup.points
    times = points.oversampling if value in QUASI_UNIFORM else 1
    changed = replace(points, kind=value, file=None, sha256=None, oversampling=times)
    return setup.with_(points=changed)


def _put_count(setup: Setup, value: Any) -> Setup:
    """Change the number of equal regions; a list is given up for a row."""
    return setup.with_(region_count=_whole("region count", value), region_list=None)


def _get_regions(setup: Setup) -> list[list[float]] | None:
    if setup.region_list is None:
        return None
    return [[r.t0, r.x0, r.half_width, r.boost] for r in setup.regions()]


def _put_regions(setup: Setup, value: Any) -> Setup:
    """Take ``"list"`` (the present row as a list), ``"row"``, or rows of four numbers."""
    if value == "row":
        return setup.with_(region_list=None)
    if value == "list":
        listed = setup.regions()
    else:
        listed = tuple(_region(i, row) for i, row in enumerate(value) if row is not None)
        if None in value:
            listed = (*listed, _room(listed))
    return _listed(setup, listed)


def _listed(setup: Setup, listed: tuple[Region, ...]) -> Setup:
    """A setup with a list as it is, its separation the list's own."""
    given = setup.with_(region_list=None, region_count=1, half_width=0.1)
    gap = _mean_gap(listed)
    return given.with_(
        region_list=listed,
        region_count=len(listed),
        half_width=min((r.half_width for r in listed), default=0.1),
        separation=setup.separation if gap is None else gap,
    )


def _mean_gap(listed: tuple[Region, ...]) -> float | None:
    """The separation that leaves a list as it is."""
    from lozenge_engine.placement import gaps

    if len(listed) < 2:
        return None
    between = gaps(listed)
    return max(0.0, sum(between) / len(between))


def _region(index: int, row: Any) -> Region:
    """A region from a row of the table."""
    names = ("t0", "x0", "half_width", "boost")
    letter = region_letter(index) if index < 8 else str(index + 1)
    numbers = {
        name: _number(f"{name} of region {letter}", x) for name, x in zip(names, row, strict=True)
    }
    return Region(**numbers)


def _room(listed: tuple[Region, ...]) -> Region:
    """A region on t = 0 in the widest free stretch between the corners of the others."""
    ends = sorted((r.x0 - r.reach, r.x0 + r.reach) for r in listed)
    low, best = -1.0, (0.0, 0.0)
    for left, right in (*ends, (1.0, 1.0)):
        best = max(best, (left - low, (left + low) / 2))
        low = max(low, right)
    width, centre = best
    if width <= 0.02:
        raise refuse(
            "regions",
            given="one more region",
            allowed="regions that do not overlap",
            do="make room on t = 0 by shrinking or moving a region",
        )
    return Region(x0=round(centre, 6), half_width=min(WIDEST_NEW, round(0.4 * width, 6)))


def _rule(part: str) -> dict[str, Setting]:
    """The three settings of one stage's rule."""
    stage = part.removesuffix("_rule")
    return {
        f"{stage}_kind": _within(part, "kind", _word),
        f"{stage}_alpha": _within(part, "alpha", _number),
        f"{stage}_number": _within(part, "number", _whole),
    }


SETTINGS: Mapping[str, Setting] = MappingProxyType(
    {
        "elements": Setting(lambda s: round(s.points.density * PATCH_AREA, 6), _put_elements),
        "kind": Setting(lambda s: s.points.kind, _put_kind),
        "oversampling": _within("points", "oversampling", _whole),
        "seed": _within("points", "seed", _whole),
        "curvature": _within("points", "curvature", _word),
        "radius": _within("points", "radius", _number),
        "mass": _plain("mass", _number),
        "region_count": Setting(lambda s: len(s.regions()), _put_count),
        "half_width": _plain("half_width", _number),
        "separation": _plain("separation", _number),
        "regions": Setting(_get_regions, _put_regions),
        "truncation_mode": _plain("truncation_mode", _word),
        "alpha": _plain("alpha", _number),
        "number": _plain("number", _whole),
        **_rule("patch_rule"),
        **_rule("region_rule"),
        "order": _plain("order", _number),
        "sprinklings": _within("averaging", "sprinklings", _whole),
        **{
            name: _within("sweeps", name, _number)
            for name in ("density_low", "density_high", "size_low", "size_high")
        },
        **{
            name: _within("sweeps", name, _whole)
            for name in ("density_points", "size_points", "separation_points", "smallest_region")
        },
    }
)
"""Every control that changes the setup, by name."""
