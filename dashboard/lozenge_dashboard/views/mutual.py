"""Mutual information of the nearest pair against its cross ratio, by every route there is."""

from __future__ import annotations

import math
from typing import TYPE_CHECKING, Any, NamedTuple

import holoviews as hv
import numpy as np

from lozenge_dashboard.palette import UNION_MARKERS, Look
from lozenge_dashboard.records import RULE_NAMES, EvidenceChoices, EvidenceScene
from lozenge_dashboard.views.marks import Limits, Marks, Strokes, Words, overlay, polyline
from lozenge_engine.notation import with_error

if TYPE_CHECKING:
    from lozenge_engine.crossratio import MutualCurve, MutualRecord

__all__ = [
    "AXES",
    "BLANK",
    "GROUP",
    "LOG_AXES",
    "LOG_GROUP",
    "Mutual",
    "caution",
    "draw",
    "draw_log",
    "read",
]

GROUP = "CrossRatio"
LOG_GROUP = "LogCrossRatio"
_LABELS = {"x": "cross ratio η", "y": "mutual information I (nats)"}
AXES: dict[str, Any] = {**_LABELS, "offset": (6.0, 0.0)}
"""Fixed words and options of the figure with linear axes."""
LOG_AXES: dict[str, Any] = {**_LABELS, "offset": (6.0, 0.0), "log": True}
"""The same for the one with logarithmic axes."""

LINE, LINES = 0.085, 5.3
"""Height of a line of words as a fraction of the figure, and how many there are at most."""
KEY = 0.07
"""Width of the piece of line before a word."""
LEAST = 1e-4
"""Smallest mutual information on a logarithmic axis, in nats."""
ORDER = {"data": 0, "twin": 1, "chain": 2, "currents": 3, "far": 4}
DASHES = {"twin": "solid", "chain": "dashed", "currents": "dotdash", "far": "dotted"}


class Mutual(NamedTuple):
    """References as lines, data as marks with error bars, and words."""

    lines: Strokes
    marks: Marks
    words: Words
    limits: Limits


BLANK = Mutual(Strokes.of(), Marks.of(), Words.of(), Limits(0.01, 1.0, 0.001, 1.0))
"""The view before its first record."""


class _Frame(NamedTuple):
    """Limits, and whether their axes are logarithmic."""

    limits: Limits
    log: bool

    def at(self, x: float, y: float) -> tuple[float, float]:
        """Place at fractions of the width from the left and of the height from the top."""
        own = self.limits
        if self.log:
            return (
                own.x_low * (own.x_high / own.x_low) ** x,
                own.y_high * (own.y_low / own.y_high) ** y,
            )
        return (
            own.x_low + x * (own.x_high - own.x_low),
            own.y_high - y * (own.y_high - own.y_low),
        )


def _said(curve: MutualCurve) -> str:
    """What a curve is of, in the room that a figure has."""
    rule = RULE_NAMES.get(curve.rule, "")
    return {
        "data": f"data: cut field, {rule}",
        "twin": f"twin: cut field, {rule} (thin: other rule)",
        "chain": "chain: q and p, fixed ends",
        "currents": "currents: smaller algebra (dotted: η²/30)",
        "far": "",
    }[curve.kind]


def _leading(curve: MutualCurve, choices: EvidenceChoices) -> bool:
    return curve.rule in ("", choices.union_rule)


def _colour(curve: MutualCurve, choices: EvidenceChoices, look: Look) -> str:
    """Ink for the rule that the page follows, blue for the twin, grey for the rest."""
    if curve.kind == "data":
        return look.ink if _leading(curve, choices) else look.muted
    if curve.kind == "twin":
        return look.accent
    return look.muted


def _limits(record: MutualRecord, *, log: bool) -> Limits:
    """Around all curves at the regions' cross ratios; with room above for words if logarithmic."""
    ends = [np.array([0.1])]
    for curve in record.curves:
        inside = curve.eta >= 0.5 * record.eta[0]
        error = np.zeros_like(curve.value) if log else np.nan_to_num(curve.error)
        ends += [(curve.value - error)[inside], (curve.value + error)[inside]]
    known = np.concatenate(ends)
    known = known[np.isfinite(known)]
    high = float(known.max())
    if log:
        low = 0.7 * float(known[known > LEAST].min())
        top = low * (1.3 * high / low) ** (1.0 / (1.0 - LINE * LINES))
        return Limits(0.7 * float(record.eta[0]), 1.15, low, top)
    low = min(0.0, float(known.min()))
    pad = 0.06 * (high - low)
    return Limits(0.0, 1.03, low - pad, high + pad)


def _points(curve: MutualCurve, *, log: bool) -> tuple[Any, Any, Any, Any]:
    """Abscissae, values and ends of the error bars that can be drawn."""
    some = np.isfinite(curve.value) & ((curve.value > LEAST) | (not log))
    x, y, error = curve.eta[some], curve.value[some], np.nan_to_num(curve.error[some])
    low = np.maximum(y - error, LEAST) if log else y - error
    return x, y, low, y + error


def read(scene: EvidenceScene, choices: EvidenceChoices, look: Look) -> Mutual:
    """Lay out all curves; the union rule that the page follows is drawn in full ink."""
    record = scene.mutual
    if record is None:
        return BLANK
    log = choices.mutual == "log"
    frame = _Frame(_limits(record, log=log), log)
    own = frame.limits
    strokes: list[tuple[Any, ...]] = [
        (record.present, own.y_low, record.present, own.y_high, look.accent, 1.0, "dotted")
    ]
    marks: list[tuple[Any, ...]] = []
    words: list[tuple[Any, ...]] = []
    for curve in sorted(record.curves, key=lambda c: (ORDER[c.kind], not _leading(c, choices))):
        colour = _colour(curve, choices, look)
        width = 2.0 if _leading(curve, choices) else 1.0
        x, y, low, high = _points(curve, log=log)
        said = _said(curve) if curve.kind == "data" or _leading(curve, choices) else ""
        place = LINE * (len(words) + 0.7)
        if curve.kind == "data":
            strokes.append((x, low, x, high, colour, width, "solid"))
            marker = UNION_MARKERS[curve.rule]
            marks.append((x, y, colour, marker, 8.0, 1.0))
            marks.append((*frame.at(0.5 * KEY, place), colour, marker, 8.0, 1.0))
        else:
            strokes.append(polyline(x, y, colour, width, DASHES[curve.kind]))
            if curve.kind == "twin":
                strokes.append((x, low, x, high, colour, 1.0, "solid"))
            if said:
                ends = (*frame.at(0.015, place), *frame.at(KEY - 0.01, place))
                strokes.append((*ends, colour, width, DASHES[curve.kind]))
        if said:
            words.append((*frame.at(KEY, place), said, colour))
    if not log:
        strokes.append((own.x_low, 0.0, own.x_high, 0.0, look.rule, 1.0, "solid"))
    return Mutual(Strokes.of(*strokes), Marks.of(*marks), Words.of(*words), own)


def draw(data: Mutual) -> hv.Overlay:
    """Draw it on linear axes."""
    return overlay(GROUP, data.lines, data.marks, data.words)


def draw_log(data: Mutual) -> hv.Overlay:
    """Draw it on logarithmic axes."""
    return overlay(LOG_GROUP, data.lines, data.marks, data.words)


def caution(scene: EvidenceScene, choices: EvidenceChoices) -> str:
    """Say how far it is, that the algebras differ, and what the touching value is."""
    record = scene.mutual
    if record is None:
        return "One region has no partner." if len(scene.setup.regions()) < 2 else "Waiting."
    parts = []
    if record.done < record.planned:
        parts.append(f"{record.done} of {record.planned} sprinklings")
    parts.append("other algebras, other curves: none has to meet another")
    data = record.curve("data", choices.union_rule)
    if data is not None and math.isclose(data.eta[-1], 1.0) and math.isfinite(data.value[-1]):
        touching = with_error(float(data.value[-1]), float(data.error[-1]))
        parts.append(f"touching (η = 1): {touching}, finite by the cutoff only")
    parts.append("upright: the present gap")
    if choices.mutual == "log":
        below = sum(int((c.value <= LEAST).sum()) for c in record.curves if c.kind == "data")
        parts += [f"{below} values at or below zero not drawn"] if below else []
    if record.planned == 1:
        parts.append("one sprinkling: no error is known")
    parts += record.notes
    text = "; ".join(parts)
    return f"{text[0].upper()}{text[1:]}."
