"""The numbers of a scene in words: readings, table, and what carries a mark."""

from __future__ import annotations

import html
import math
from collections.abc import Sequence
from typing import TYPE_CHECKING, NamedTuple, TypedDict

from lozenge_dashboard.records import RULE_NAMES, Scene
from lozenge_engine.geometry import region_letter
from lozenge_engine.notation import NO_NUMBER, thousands, with_error
from lozenge_engine.result import Pair, Result

if TYPE_CHECKING:
    from lozenge_engine.kernels.scaling import Estimate
    from lozenge_engine.sweeps import Average

__all__ = ["COLUMNS", "Value", "readings_html", "table_rows", "values"]

NAN = math.nan
GAP_TOLERANCE = 1e-9
"""Pairs whose gaps differ by less count as equally near, in patch half-widths."""


class Value(NamedTuple):
    """One number of the page: an entropy or a mutual information.

    Attributes
    ----------
    name, label : str
        ``S(A)`` and a name for an axis; the label carries the union rule.
    members : tuple of int
        Indices of the regions.
    rule : str or None
        Union rule, None for a single region.
    mean, error, scatter : float
        In nats, over `count` sprinklings; NaN where not known.  With one sprinkling the mean is
        that sprinkling's value.
    present : float
        Value of the sprinkling in front.
    kept, nominal : int or None, float
        Modes kept and their nominal number, for an entropy.
    note : str
        Why the number is not to be trusted, or empty.
    cross_block : float
        For a mutual information, else NaN.
    far : bool
        Whether another pair is nearer.
    """

    name: str
    label: str
    members: tuple[int, ...]
    rule: str | None
    mean: float
    error: float
    scatter: float
    count: int  # type: ignore[assignment]  # hides tuple.count, which nobody needs here
    present: float
    kept: int | None
    nominal: float
    note: str = ""
    cross_block: float = NAN
    far: bool = False

    @property
    def text(self) -> str:
        """The number with the digits that its error allows."""
        return with_error(self.mean, self.error)


class _Averaged(TypedDict):
    """The fields of a value that come from averaging."""

    mean: float
    error: float
    scatter: float
    count: int
    present: float


def _spread(estimate: Estimate | None, present: float) -> _Averaged:
    """The fields of a value that come from averaging."""
    if estimate is None or estimate.count < 2:
        return {"mean": present, "error": NAN, "scatter": NAN, "count": 1, "present": present}
    return {
        "mean": float(estimate.mean),
        "error": float(estimate.error),
        "scatter": float(estimate.scatter),
        "count": int(estimate.count),
        "present": present,
    }


def _regions(result: Result, average: Average | None) -> list[Value]:
    return [
        Value(
            name=f"S({region_letter(i)})",
            label=f"S({region_letter(i)})",
            members=(i,),
            rule=None,
            kept=r.kept_modes,
            nominal=r.nominal_modes,
            note="" if r.status == "ok" else f"{r.status.replace('_', ' ')}: {r.note}",
            **_spread(average.regions[i] if average else None, r.entropy),
        )
        for i, r in enumerate(result.regions)
    ]


def _unions(result: Result, average: Average | None) -> list[Value]:
    letters = "".join(region_letter(i) for i in range(len(result.regions)))
    nominal = sum(r.nominal_modes for r in result.regions)
    return [
        Value(
            name=f"S({letters})",
            label=f"S({letters}) {RULE_NAMES[rule]}",
            members=union.members,
            rule=rule,
            kept=union.kept_modes,
            nominal=nominal,
            note="" if union.status == "ok" else f"{union.status.replace('_', ' ')}: {union.note}",
            **_spread(average.unions[rule] if average else None, union.entropy),
        )
        for rule, union in result.unions.items()
    ]


def _pairs(result: Result, average: Average | None) -> list[Value]:
    nearest = min((p.gap for p in result.pairs), default=0.0)
    means = {(p.a, p.b): p for p in average.pairs} if average else {}
    return [
        _pair(pair, rule, means.get((pair.a, pair.b)), far=pair.gap > nearest + GAP_TOLERANCE)
        for pair in result.pairs
        for rule in RULE_NAMES
    ]


def _pair(pair: Pair, rule: str, mean: object, *, far: bool) -> Value:
    name = f"I({region_letter(pair.a)}:{region_letter(pair.b)})"
    return Value(
        name=name,
        label=f"{name} {RULE_NAMES[rule]}",
        members=(pair.a, pair.b),
        rule=rule,
        kept=None,
        nominal=NAN,
        note="" if pair.status == "ok" else f"{pair.status.replace('_', ' ')}: see the entropies",
        cross_block=pair.cross_block,
        far=far,
        **_spread(getattr(mean, rule, None), getattr(pair, rule)),
    )


def values(scene: Scene) -> list[Value]:
    """All numbers of a scene: S of the regions, S of the union, I of the pairs.

    Parameters
    ----------
    scene : Scene
        What is shown.

    Returns
    -------
    list of Value
        In the order of the page.
    """
    result, average = scene.result, scene.average
    return [*_regions(result, average), *_unions(result, average), *_pairs(result, average)]


# ---------------------------------------------------------------- the line of readings


def _tile(title: str, number: str, small: str, hue: str = "", mark: str = "") -> str:
    """One reading; everything is escaped here."""
    style = f' style="--hue: var({hue})"' if hue else ""
    badge = f'<span class="mark">{html.escape(mark)}</span>' if mark else ""
    return (
        f"<div{style}><dt>{html.escape(title)}</dt><dd>{html.escape(number)}</dd>"
        f"<dd class='small'>{html.escape(small)}{badge}</dd></div>"
    )


def _modes(value: Value) -> str:
    """Kept of nominal."""
    if value.kept is None:
        return ""
    return f"kept {value.kept}/{value.nominal:.1f} ({value.kept / value.nominal:.2f})"


def _both_rules(pair: Sequence[Value], title: str) -> str:
    """A reading under both union rules."""
    number = " | ".join(v.text for v in pair)
    small = " | ".join(RULE_NAMES[str(v.rule)] for v in pair)
    return _tile(title, number, small, mark=_mark(pair))


def _mark(shown: Sequence[Value]) -> str:
    """The first word of the first note."""
    noted = [v.note.split(":")[0] for v in shown if v.note]
    return f" {noted[0]}" if noted else ""


def readings_html(scene: Scene) -> str:
    """The line of readings as the inside of a definition list.

    Parameters
    ----------
    scene : Scene
        What is shown.

    Returns
    -------
    str
        HTML without anything that a preset or a file could have put there.
    """
    shown = values(scene)
    tiles = [
        _tile(v.name, v.text, _modes(v), f"--region-{v.members[0]}", _mark([v]))
        for v in shown
        if v.rule is None
    ]
    union = [v for v in shown if len(v.members) > 1 and v.kept is not None]
    near = [v for v in shown if v.kept is None and not v.far][:2]
    tiles += [_both_rules(group, group[0].name) for group in (union, near) if group]
    patch = scene.result.patch
    held = "points" if scene.setup.points.quasi_uniform else "elements"
    tiles.append(
        _tile(
            "kept/nominal",
            f"{patch.kept_modes}/{patch.nominal_modes:.1f}",
            f"patch, {thousands(scene.result.elements)} {held}",
            mark="" if scene.result.certificate.met else " certificate not met",
        )
    )
    count = max(v.count for v in shown)
    small = "mean (standard error)" if count > 1 else "no error is known"
    asked = scene.setup.averaging.sprinklings
    tiles.append(_tile("sprinklings", f"{count} of {max(asked, count)}", small))
    return f"<dl class='readings'>{''.join(tiles)}</dl>"


# ---------------------------------------------------------------- the table

COLUMNS = (
    "quantity",
    "union rule",
    "value (nats)",
    "scatter of one",
    "sprinklings",
    "this sprinkling",
    "kept",
    "nominal",
    "kept/nominal",
    "note",
)
"""Headings of the table of numbers."""


def table_rows(scene: Scene) -> list[tuple[str, ...]]:
    """The numbers as rows of text under `COLUMNS`.

    Parameters
    ----------
    scene : Scene
        What is shown.

    Returns
    -------
    list of tuple of str
        One row per value.
    """
    return [
        (
            v.name,
            RULE_NAMES[v.rule] if v.rule else "",
            v.text,
            f"{v.scatter:.2g}" if math.isfinite(v.scatter) else "not known",
            str(v.count),
            f"{v.present:.6f}" if math.isfinite(v.present) else NO_NUMBER,
            "" if v.kept is None else str(v.kept),
            "" if v.kept is None else f"{v.nominal:.1f}",
            "" if v.kept is None else f"{v.kept / v.nominal:.2f}",
            v.note or (f"cross block {v.cross_block:.3f}" if math.isfinite(v.cross_block) else ""),
        )
        for v in values(scene)
    ]
