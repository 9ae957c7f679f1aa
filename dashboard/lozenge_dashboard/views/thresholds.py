"""The mean sprinkled spectrum over the continuum's, rank by rank, and the derived threshold."""

from __future__ import annotations

import math
from typing import TYPE_CHECKING, Any, NamedTuple

import holoviews as hv
import numpy as np

from lozenge_dashboard.palette import MARKERS, PATCH_MARKER, UNION_MARKERS, Look
from lozenge_dashboard.records import EvidenceChoices, EvidenceScene
from lozenge_dashboard.views.marks import Limits, Marks, Strokes, Words, overlay, polyline
from lozenge_dashboard.views.pieces import Line, bars, written
from lozenge_engine.notation import with_error

if TYPE_CHECKING:
    from lozenge_engine.thresholds import OperatorRecord, ThresholdRecord

__all__ = ["AXES", "BLANK", "GROUP", "Thresholds", "caution", "draw", "read"]

GROUP = "Thresholds"
AXES = {
    "x": "rank of the mode k",
    "y": "eigenvalue, sprinkled over continuum",
    "offset": (6.0, 0.0),
}
KINDS = {"": "patch", "patch": "patch", "regions": "region", "union": "union"}
"""The operators that each value of the switch shows."""
RULE_WORDS = {
    "root_count": "√n/4π",
    "union_count": "√n/4π, union's count",
    "equal_share": "√n/4π, equal share",
}


class Thresholds(NamedTuple):
    """Ratios with errors by the logarithm of the rank, the band, thresholds as upright lines."""

    lines: Strokes
    marks: Marks
    words: Words
    limits: Limits
    x_ticks: tuple[tuple[float, str], ...]


BLANK = Thresholds(
    Strokes.of(),
    Marks.of(),
    Words.of(),
    Limits(0.0, 2.5, 0.7, 1.2),
    ((0.0, "1"), (1.0, "10"), (2.0, "100")),
)
"""The view before its first record."""


def _shown(record: ThresholdRecord, choices: EvidenceChoices) -> list[OperatorRecord]:
    """The operators that the switch names; the patch where there is no union."""
    kind = KINDS.get(choices.thresholds, "patch")
    found = [each for each in record.operators if each.kind == kind]
    return found or [each for each in record.operators if each.kind == "patch"]


def _style(each: OperatorRecord, look: Look) -> tuple[str, str]:
    """Colour and marker of an operator."""
    if each.kind == "region":
        return look.regions[each.region], MARKERS[each.region]
    if each.kind == "union":
        return look.ink, UNION_MARKERS["support"]
    return look.muted, PATCH_MARKER


def _thinned(count: int) -> np.ndarray:
    """Indices of ranks that stand apart on a logarithmic axis."""
    steps = np.unique(np.round(np.geomspace(1, count, 60)).astype(int)) - 1
    return steps if count > 1 else np.arange(count)


def _upright(
    each: OperatorRecord, low: float, high: float, look: Look, colour: str
) -> tuple[list[tuple[Any, ...]], list[Line]]:
    """Derived threshold with its error, and what the rules cut at, as upright lines by rank."""
    parting = each.departure
    parts: list[tuple[Any, ...]] = []
    said: list[Line] = []
    if math.isfinite(parting.rank):
        at = math.log10(parting.rank)
        parts.append((at, low, at, high, colour, 2.0, "solid"))
        if math.isfinite(parting.rank_error):
            ends = [
                math.log10(max(parting.rank + s * parting.rank_error, 1.0)) for s in (-1.0, 1.0)
            ]
            y = low + 0.06 * (high - low)
            parts.append((ends[0], y, ends[1], y, colour, 4.0, "solid"))
        said.append(
            (
                f"{each.name}: parts at λ = "
                f"{with_error(parting.threshold, parting.threshold_error)}, "
                f"rank {with_error(parting.rank, parting.rank_error)}",
                colour,
                None,
            )
        )
    else:
        said.append((f"{each.name}: does not part within {parting.ranks} ranks", colour, None))
    for rule, value in each.thresholds.items():
        at = math.log10(each.rank_of(value))
        dash = "dashed" if rule != "union_count" else "dotted"
        parts.append((at, low, at, high, look.accent, 1.5, dash))
        kind = "dashed" if dash == "dashed" else "dotted"
        said.append((f"{kind}: {RULE_WORDS[rule]} = {value:.3g}", look.accent, None))
    return parts, said


def read(scene: EvidenceScene, choices: EvidenceChoices, look: Look) -> Thresholds:
    """Lay out the operators that the switch names."""
    record: ThresholdRecord | None = scene.thresholds
    if record is None or not record.operators:
        return BLANK
    shown = _shown(record, choices)
    ranks = max(each.ratio.value.size for each in shown)
    if not ranks:
        return BLANK
    picked = [(each, _thinned(each.ratio.value.size)) for each in shown]
    least = min(float(each.ratio.value.min()) for each in shown if each.ratio.value.size)
    low = min(least, 1.0 - 2.5 * record.delta) - 0.02
    top = max(float(each.ratio.value.max()) for each in shown if each.ratio.value.size)
    high = max(top, 1.0 + 2.0 * record.delta) + 0.02
    strokes: list[tuple[Any, ...]] = []
    said: list[Line] = []
    for each in shown:
        parts, lines = _upright(each, low, high, look, _style(each, look)[0])
        strokes += parts
        said += [line for line in lines if line not in said]
    said = said[:5]
    tall = high + 0.11 * len(said) * (high - low)
    limits = Limits(-0.08, math.log10(ranks) + 0.12, low, tall)
    for y, dash in ((1.0, "solid"), (1.0 - record.delta, "dotted"), (1.0 + record.delta, "dotted")):
        strokes.append((limits.x_low, y, limits.x_high, y, look.ink, 1.0, dash))
    if record.twin is not None and shown[0].kind == "patch":
        known = min(record.twin.value.size, ranks)
        at = np.log10(np.arange(1, known + 1.0))
        strokes.append(polyline(at, record.twin.value[:known], look.accent, 1.5, "solid"))
    marks = []
    for each, at in picked:
        colour, marker = _style(each, look)
        x, y, e = np.log10(at + 1.0), each.ratio.value[at], each.ratio.error[at]
        strokes += bars(x, y, e, colour, 0.0)[:1]
        beyond = at + 1 < each.departure.rank if math.isfinite(each.departure.rank) else at >= 0
        marks.append((x, y, colour, marker, 6.0, beyond.astype(float)))
    keys, words = written(limits, said, look)
    ticks = tuple(
        (math.log10(v), f"{v}")
        for v in (1, 2, 5, 10, 20, 50, 100, 200, 500, 1000, 2000, 5000)
        if v <= ranks
    )
    return Thresholds(Strokes.of(*strokes), Marks.of(*marks, *keys), words, limits, ticks)


def draw(data: Thresholds) -> hv.Overlay:
    """Draw it."""
    return overlay(GROUP, data.lines, data.marks, data.words)


def caution(scene: EvidenceScene, choices: EvidenceChoices) -> str:
    """Say what the reference is, how many sprinklings, and what the threshold depends on."""
    record: ThresholdRecord | None = scene.thresholds
    if record is None:
        return "Not computed yet."
    parts = [f"reference: {record.reference}"]
    if record.done < record.planned:
        parts.append(f"{record.done} of {record.planned} sprinklings")
    elif record.done == 1:
        parts.append("one sprinkling: no error is known")
    else:
        parts.append(f"mean of {record.done}, each scaled to the expected count")
    meets = [each.meets for each in _shown(record, choices) if math.isfinite(each.meets)]
    if meets:
        parts.append(
            "at fixed δ the derived threshold hardly grows with n: "
            f"it is √n/4π near n = {meets[0]:.0f} only"
        )
    parts.extend(record.notes[:1])
    text = "; ".join(parts) + "."
    return text[0].upper() + text[1:]
