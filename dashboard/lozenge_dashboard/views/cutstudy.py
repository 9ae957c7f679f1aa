"""Entropies, slopes and counts against the cut, and which modes carry the entropy."""

from __future__ import annotations

import math
from typing import TYPE_CHECKING, Any

import holoviews as hv
import numpy as np

from lozenge_dashboard.palette import MARKERS, PATCH_MARKER, Look
from lozenge_dashboard.records import EvidenceChoices, EvidenceScene
from lozenge_dashboard.views.marks import Limits, Marks, Strokes, Words, overlay, polyline
from lozenge_dashboard.views.pieces import Line, bars, room, written
from lozenge_dashboard.views.traces import (
    FAINT,
    TICKS,
    Cuts,
    Trace,
    assembled,
    ends_of,
    logarithms,
    reach,
)
from lozenge_engine.geometry import region_letter
from lozenge_engine.notation import with_error

if TYPE_CHECKING:
    from lozenge_engine.cutmeans import MeanCurve
    from lozenge_engine.cutrecord import CutRecord

__all__ = [
    "AXES",
    "BLANK",
    "ENTROPY_BLANK",
    "GROUP",
    "KEPT_AXES",
    "KEPT_GROUP",
    "MUTUAL_AXES",
    "MUTUAL_GROUP",
    "SLOPE_AXES",
    "SLOPE_GROUP",
    "caution",
    "draw",
    "draw_kept",
    "draw_mutual",
    "draw_slope",
    "leading",
    "read",
    "read_kept",
    "read_mutual",
    "read_slope",
]

GROUP = "CutEntropy"
MUTUAL_GROUP = "CutMutual"
SLOPE_GROUP = "CutSlope"
KEPT_GROUP = "CutKept"
ALPHA = "multiple α of the threshold √n/4π"
AXES = {"x": ALPHA, "y": "entropy S, all regions (nats), log scale", "offset": (6.0, 0.0)}
MUTUAL_AXES = {"x": ALPHA, "y": "mutual information I, nearest pair (nats)", "offset": (6.0, 0.0)}
SLOPE_AXES = {"x": ALPHA, "y": "slope b (nats)", "offset": (6.0, 0.0)}
KEPT_AXES = {"x": ALPHA, "y": "kept over nominal modes", "offset": (6.0, 0.0)}

RULE_WORDS = {
    "root_count": "own count",
    "union_count": "union's count",
    "equal_share": "equal share",
    "fixed_number": "fixed number",
}
RULE_MARKERS = {
    "root_count": "diamond",
    "union_count": "square_cross",
    "equal_share": "circle_dot",
    "fixed_number": "plus",
}
"""Marks of the rules, all in neutral ink: hues belong to regions."""
UNCUT_MARKER = "cross"
STAGE_WORDS = {"patch": "the first stage", "regions": "the second stage", "both": "both stages"}


BLANK = Cuts(
    Strokes.of(),
    Marks.of(),
    Words.of(),
    Limits(math.log(0.25), math.log(4.0), 0.0, 4.0),
    tuple((math.log(a), f"{a:g}") for a in TICKS if 0.25 <= a <= 4.0),
    (),
)
"""The figures before their first record."""
DECADES = (0.1, 0.2, 0.5, 1.0, 2.0, 5.0, 10.0, 20.0, 50.0, 100.0, 200.0, 500.0, 1000.0)
ENTROPY_BLANK = BLANK._replace(
    limits=BLANK.limits._replace(y_low=-0.1, y_high=1.5),
    ticks=tuple((math.log10(v), f"{v:g}") for v in DECADES if 1.0 <= v <= 20.0),
)
"""The entropies' figure, with a logarithmic scale, before its first record."""


def leading(record: CutRecord) -> str:
    """The rule of the geometry itself, in full ink; the first one if it is not among them."""
    own = record.front.config.region_rule.kind
    rules = [curve.mean.rule for curve in record.averages]
    return own if own in rules or not rules else rules[0]


def _traces(record: CutRecord, field: str, look: Look) -> list[Trace]:
    """Rules of the cut space, the leading one in ink, and its uncut space."""
    x, first = np.log(record.front.alphas), leading(record)
    found = []
    for each in record.averages:
        lead = each.mean.rule == first
        if each.mean.uncut_space and not lead:
            continue
        y, error = getattr(each.mean, field), getattr(each.error, field)
        if not np.isfinite(y).any():
            continue
        name = RULE_WORDS[each.mean.rule]
        marker = RULE_MARKERS[each.mean.rule]
        if each.mean.uncut_space:
            name, marker = f"{name}, uncut space", UNCUT_MARKER
        found.append(Trace(x, y, error, look.ink if lead else look.muted, marker, name))
    return sorted(found, key=lambda t: t.colour == look.ink)


def _twin(record: CutRecord) -> MeanCurve | None:
    """The twin's curve of the leading rule."""
    first = leading(record)
    found = (c for c in record.twin if c.mean.rule == first and not c.mean.uncut_space)
    return next(found, None)


def _twin_words(record: CutRecord) -> str:
    """What the twin is made from."""
    return f"{record.twin_oversampling} × density" if record.twin_oversampling else "exact"


def _twin_parts(
    record: CutRecord, field: str, look: Look, *, logarithmic: bool = False
) -> tuple[list[Any], list[Line]]:
    """The twin as a line with bars, and its name."""
    curve = _twin(record)
    if curve is None:
        return [], []
    x, y, e = np.log(record.twin_alphas), getattr(curve.mean, field), getattr(curve.error, field)
    if logarithmic:
        y, e = logarithms(y, e)
    some = np.isfinite(y)
    if some.sum() < 2:
        return [], []
    parts = [polyline(x[some], y[some], look.accent, 2.0, "solid")]
    parts += bars(x, y, e, look.accent, 0.0)
    return parts, [(f"line: twin, {_twin_words(record)}", look.accent, None)]


def _plateau_parts(
    record: CutRecord, quantity: str, look: Look, *, logarithmic: bool = False
) -> tuple[list[tuple[Any, ...]], list[Line]]:
    """The plateau of the leading rule as a thick piece, and its width in words."""
    first = leading(record)
    for level in record.plateaus:
        _, rule, uncut = level.key
        if level.quantity != quantity or rule != first or uncut:
            continue
        p = level.plateau
        text = (
            f"plateau α {math.exp(p.low):.2g} to {math.exp(p.high):.2g} (× "
            f"{math.exp(p.width):.1f}): {with_error(p.value, p.allowed)}"
        )
        y = math.log10(max(p.value, FAINT)) if logarithmic else p.value
        piece = (p.low, y, p.high, y, look.caution, 5.0, "solid")
        return [piece], [(text, look.caution, None)]
    return [], [("no plateau", look.muted, None)]


def read(scene: EvidenceScene, choices: EvidenceChoices, look: Look) -> Cuts:
    """Lay out the entropy of all regions, by support, on a logarithmic scale."""
    record: CutRecord | None = scene.cuts
    if record is None:
        return ENTROPY_BLANK
    traces = []
    for t in _traces(record, "union_support", look):
        y, error = logarithms(t.y, t.error)
        traces.append(t._replace(y=y, error=error))
    twin, said = _twin_parts(record, "union_support", look, logarithmic=True)
    level, more = _plateau_parts(record, "entropy", look, logarithmic=True)
    known = np.concatenate([ends_of(t) for t in traces] or [np.empty(0)])
    low, high = (float(known.min()), float(known.max())) if known.size else (0.0, 1.0)
    ticks = tuple((math.log10(v), f"{v:g}") for v in DECADES if low - 0.1 <= math.log10(v) <= high)
    return assembled(
        record.front.alphas, traces, level + twin, said + more, look, span=(low, high), ticks=ticks
    )


def read_mutual(scene: EvidenceScene, choices: EvidenceChoices, look: Look) -> Cuts:
    """Lay out the mutual information of the nearest pair, by support."""
    record: CutRecord | None = scene.cuts
    if record is None:
        return BLANK
    traces = _traces(record, "mutual_support", look)
    twin, said = _twin_parts(record, "mutual_support", look)
    level, more = _plateau_parts(record, "mutual", look)
    span = reach(traces, look, least=0.2)
    return assembled(record.front.alphas, traces, level + twin, said + more, look, span=span)


def read_slope(scene: EvidenceScene, choices: EvidenceChoices, look: Look) -> Cuts:
    """Lay out the slope along the density ladder."""
    record: CutRecord | None = scene.cuts
    if record is None or not record.slopes:
        return BLANK
    x, first = np.log(record.front.alphas), leading(record)
    traces = [
        Trace(
            x,
            line.slope,
            line.error,
            look.ink if line.rule == first else look.muted,
            UNCUT_MARKER if line.uncut_space else RULE_MARKERS[line.rule],
            RULE_WORDS[line.rule] + (", uncut space" if line.uncut_space else ""),
        )
        for line in record.slopes
        if np.isfinite(line.slope).any() and (line.rule == first or not line.uncut_space)
    ]
    traces.sort(key=lambda t: t.colour == look.ink)
    strokes, lines = _plateau_parts(record, "slope", look)
    low, high = reach(traces, look, least=0.2)
    if record.reference_slope is not None:
        b = record.reference_slope
        strokes.append((x[0], b, x[-1], b, look.accent, 1.5, "dashed"))
        lines.append((f"dashed: slope {b:.3f}", look.accent, None))
        # The volume law's slopes, tens of nats, leave the frame.
        low, high = max(low, -b), min(high, 4.0 * b)
    return assembled(record.front.alphas, traces, strokes, lines, look, span=(low, high))


def _kept_traces(record: CutRecord, curve: MeanCurve, look: Look) -> list[Trace]:
    """Kept over nominal modes of the patch and of each region."""
    x = np.log(record.front.alphas)
    place = int(np.argmin(np.abs(x)))
    mean, error = curve.mean, curve.error
    words = f"patch, {mean.patch_kept[place]:.0f} modes at α = {record.front.alphas[place]:.2g}"
    traces = [Trace(x, mean.patch_ratio, error.patch_ratio, look.muted, PATCH_MARKER, words)]
    for k in range(mean.ratio.shape[1]):
        words = f"{region_letter(k)}, {mean.kept[place, k]:.0f} modes"
        own = mean.ratio[:, k], error.ratio[:, k]
        traces.append(Trace(x, *own, look.regions[k], MARKERS[k], words))
    return [t for t in traces if np.isfinite(t.y).any()]


def read_kept(scene: EvidenceScene, choices: EvidenceChoices, look: Look) -> Cuts:
    """Lay out kept over nominal modes of the patch and of the regions, under the leading rule."""
    record: CutRecord | None = scene.cuts
    if record is None:
        return BLANK
    own = (leading(record), False)
    curve = next((c for c in record.averages if c.key[1:] == own), None)
    if curve is None:
        return BLANK
    x = np.log(record.front.alphas)
    traces = _kept_traces(record, curve, look)
    strokes: list[Any] = [(x[0], 1.0, x[-1], 1.0, look.rule, 1.0, "solid")]
    lines: list[Line] = [(t.name, t.colour, t.marker) for t in traces]
    twin = _twin(record)
    if twin is not None:
        ratio, at = twin.mean.ratio, np.log(record.twin_alphas)
        strokes += [
            polyline(at, ratio[:, k], look.regions[k], 2.0, "solid")
            for k in range(ratio.shape[1])
            if np.isfinite(ratio[:, k]).all()
        ]
        lines.append(("lines: twin", look.accent, None))
    drawn = assembled(record.front.alphas, traces, strokes, [], look, span=(0.0, 1.1))
    limits = room(x, 0.0, 1.1, len(lines), least=0.02)
    keys, words = written(limits, lines, look)
    marks = [
        (t.x[some], t.y[some], t.colour, t.marker, 6.0, 1.0)
        for t in traces
        for some in (np.isfinite(t.y),)
    ]
    return drawn._replace(marks=Marks.of(*marks, *keys), words=words, limits=limits)


def draw(data: Cuts) -> hv.Overlay:
    """Draw it as entropies."""
    return overlay(GROUP, data.lines, data.marks, data.words)


def draw_mutual(data: Cuts) -> hv.Overlay:
    """Draw it as mutual information."""
    return overlay(MUTUAL_GROUP, data.lines, data.marks, data.words)


def draw_slope(data: Cuts) -> hv.Overlay:
    """Draw it as slopes."""
    return overlay(SLOPE_GROUP, data.lines, data.marks, data.words)


def draw_kept(data: Cuts) -> hv.Overlay:
    """Draw it as counts."""
    return overlay(KEPT_GROUP, data.lines, data.marks, data.words)


def caution(scene: EvidenceScene, choices: EvidenceChoices) -> str:
    """Say what moves, over how many sprinklings, and what is missing."""
    record: CutRecord | None = scene.cuts
    if record is None:
        return "Not computed yet."
    if not record.front.trusted:
        return "Certificate of the patch's modes not met: these numbers carry its mark."
    stage = record.averages[0].mean.stage if record.averages else scene.plan.stage
    parts = [f"the cut of {STAGE_WORDS[stage]} is moved by α"]
    if choices.cutstudy == "slope":
        if not record.slopes_planned:
            parts.append("no slope asked for yet")
        elif record.slopes_done < record.slopes_planned:
            parts.append(
                f"{record.slopes_done} of {record.slopes_planned} sprinklings of the ladder"
            )
        parts.append("each α has its own fit; neighbours share sprinklings and move together")
    elif record.done < record.planned:
        parts.append(f"{record.done} of {record.planned} sprinklings")
    elif record.done == 1:
        parts.append("one sprinkling: no error is known")
    else:
        parts.append(f"bars: standard error of {record.done}")
    missing = next(
        (r for c in record.averages for r in c.mean.reasons if r and "one region" not in r), ""
    )
    if missing:
        parts.append(f"gaps: {missing}")
    parts.extend(record.notes[:1])
    text = "; ".join(parts) + "."
    return text[0].upper() + text[1:]
