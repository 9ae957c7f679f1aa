"""How mutual information and the union's entropy depend on separation."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any, NamedTuple

import holoviews as hv
import numpy as np

from lozenge_dashboard.palette import UNION_MARKERS, Look
from lozenge_dashboard.records import RULE_NAMES, Choices, Scene, Spread, spread
from lozenge_dashboard.views.beside import TWIN_WIDTH, barred
from lozenge_dashboard.views.marks import Column, Limits, Marks, Strokes, Words, overlay

if TYPE_CHECKING:
    from lozenge_engine.sweeps import SeparationCurve

__all__ = ["BLANK", "Separation", "caution", "draw", "draw_union", "read"]

GROUP = "Separation"
UNION_GROUP = "UnionSeparation"
EMPTY = Limits(0.0, 1.0, 0.0, 1.0)


class Separation(NamedTuple):
    """Means with errors against separation, and the present separation."""

    lines: Strokes
    marks: Marks
    words: Words
    limits: Limits


BLANK = Separation(Strokes.of(), Marks.of(), Words.of(), EMPTY)
"""The view before its first record."""


def _estimates(curve: SeparationCurve, choices: Choices) -> dict[str, Spread]:
    """The quantity that the switch names, per union rule."""
    mutual = choices.separation == "mutual"
    chosen = curve.mutual_information if mutual else curve.union
    return {rule: spread(estimates) for rule, estimates in chosen.items()}


def _limits(curve: SeparationCurve, choices: Choices) -> Limits:
    """Around everything known, with zero in it for the mutual information."""
    ends = []
    for estimate in _estimates(curve, choices).values():
        error = np.nan_to_num(estimate.error)
        ends += [estimate.mean - error, estimate.mean + error]
    known = np.concatenate(ends) if ends else np.empty(0)
    known = known[np.isfinite(known)]
    if not known.size:
        return EMPTY
    low, high = float(known.min()), float(known.max())
    if choices.separation == "mutual":
        low = min(low, 0.0)
    pad = max(0.1 * (high - low), 0.02)
    x_high = float(curve.separation.max())
    return Limits(-0.04 * x_high, 1.04 * x_high, low - pad, high + 2.5 * pad)


def _curves(scene: Scene) -> list[tuple[SeparationCurve, bool]]:
    """The kept curve, if any, and the present one."""
    found = []
    if scene.reference is not None and scene.reference.separation is not None:
        found.append((scene.reference.separation, True))
    if scene.separation is not None:
        found.append((scene.separation, False))
    return found


def _twins(scene: Scene, choices: Choices) -> dict[str, tuple[Column, Column]]:
    """Values and errors of the twin, per union rule, as far as wanted and known."""
    company = scene.beside if choices.twin else None
    if company is None or company.separation is None or scene.separation is None:
        return {}
    lines = company.separation
    chosen = lines.mutual_information if choices.separation == "mutual" else lines.union
    size = scene.separation.separation.size
    return {rule: line for rule, line in chosen.items() if line[0].size == size}


def _around(limits: Limits, twins: dict[str, tuple[Column, Column]]) -> Limits:
    """Limits that hold the twin too."""
    for value, error in twins.values():
        ends = np.concatenate([value - error, value + error])
        ends = ends[np.isfinite(ends)]
        if ends.size:
            low, high = float(ends.min()), float(ends.max())
            pad = 0.25 * (high - low)
            limits = limits.around(limits._replace(y_low=low, y_high=high + pad))
    return limits


def read(scene: Scene, choices: Choices, look: Look) -> Separation:
    """Lay out the sweep; the union rule that the page follows is drawn in full ink."""
    strokes: list[tuple[Any, ...]] = []
    marks: list[tuple[Any, ...]] = []
    words: list[tuple[Any, ...]] = []
    limits = EMPTY
    for curve, grey in _curves(scene):
        around = _limits(curve, choices)
        limits = around if limits is EMPTY else limits.around(around)
        for rule, estimate in _estimates(curve, choices).items():
            some = np.isfinite(estimate.mean)
            leading = rule == choices.union_rule
            colour = look.kept if grey else look.ink if leading else look.muted
            x, y = curve.separation[some], estimate.mean[some]
            error = np.nan_to_num(estimate.error[some])
            strokes.append((x, y - error, x, y + error, colour, 2.0 if leading else 1.0, "solid"))
            marks.append((x, y, colour, UNION_MARKERS[rule], 7.0, 1.0))
            if not grey:
                words.append((x[-1:], y[-1:], RULE_NAMES[rule], colour))
    twins = _twins(scene, choices)
    if twins and limits is not EMPTY:
        limits = _around(limits, twins)
    for rule, (value, error) in twins.items():
        width = TWIN_WIDTH if rule == choices.union_rule else 0.5 * TWIN_WIDTH
        line = barred(scene.separation.separation, value, error, look.accent, width=width)  # type: ignore[union-attr]
        strokes.extend(line)
    if twins:
        words.append(([0.0], [0.0], "lines: twin, thin for the other rule", look.accent))
    present = scene.setup.separation
    if scene.separation is not None:
        strokes.append((present, limits.y_low, present, limits.y_high, look.accent, 1.5, "dashed"))
    strokes.append((limits.x_low, 0.0, limits.x_high, 0.0, look.rule, 1.0, "solid"))
    return Separation(Strokes.of(*strokes), Marks.of(*marks), _apart(words, limits), limits)


def _apart(words: list[tuple[Any, ...]], limits: Limits) -> Words:
    """Names of the rules in the upper right corner, one below the other."""
    step = 0.09 * (limits.y_high - limits.y_low)
    return Words.of(
        *(
            (limits.x_high, limits.y_high - step * (i + 0.7), text, colour)
            for i, (_, _, text, colour) in enumerate(words)
        )
    )


def draw(data: Separation) -> hv.Overlay:
    """Draw it as mutual information."""
    return overlay(GROUP, data.lines, data.marks, data.words)


def draw_union(data: Separation) -> hv.Overlay:
    """Draw it as entropy of the union."""
    return overlay(UNION_GROUP, data.lines, data.marks, data.words)


def caution(scene: Scene, choices: Choices) -> str:
    """Say how far the sweep is and what the errors mean."""
    curve = scene.separation
    if len(scene.result.regions) < 2:
        return "One region: there is no separation to vary."
    if curve is None:
        return "Waiting for the first sprinklings of this sweep."
    parts = []
    if curve.done < curve.planned:
        parts.append(f"{curve.done} of {curve.planned} sprinklings")
    if curve.note:
        parts.append(curve.note)
    parts.append("dashed: present")
    parts.append(
        "points share sprinklings: errors are correlated"
        if curve.planned > 1
        else "one sprinkling: no error is known"
    )
    return "; ".join(parts) + "."
