"""What a campaign costs: realisations so far, and the error that CPU time has bought."""

from __future__ import annotations

import math
from typing import Any, NamedTuple

import holoviews as hv
import numpy as np

from lozenge_dashboard.campaign_text import SYMBOLS, error_words, out_of_reach
from lozenge_dashboard.campaigns import Watch
from lozenge_dashboard.palette import Look
from lozenge_dashboard.records import CampaignChoices
from lozenge_dashboard.views.campaign import (
    BLANK,
    GROUP,
    SCALE,
    caution,
    draw,
    read,
)
from lozenge_dashboard.views.catalogue import Figure, View
from lozenge_dashboard.views.marks import Limits, Marks, Strokes, Words, overlay, polyline, register
from lozenge_dashboard.views.pieces import EMPTY, NO_TICKS, bare, thinned
from lozenge_dashboard.views.slope import (
    SLOPE_BLANK,
    SLOPE_GROUP,
    SLOPE_LABELS,
    draw_slope,
    read_slope,
    slope_caution,
)
from lozenge_engine.notation import thousands

__all__ = ["CAMPAIGN_VIEWS", "Effort", "read_counts", "read_error", "register_campaign"]

COUNT_GROUP = "Realisations"
ERROR_GROUP = "ErrorReached"
WIDE = 10
"""Bars up to which each is drawn wide and has its number."""
DECADES = 2.0
"""Decades of CPU time over which the fall of the error is drawn on."""


class Effort(NamedTuple):
    """Lines, marks and numbers, with ticks in words."""

    lines: Strokes
    marks: Marks
    words: Words
    limits: Limits
    ticks: tuple[tuple[float, str], ...] = ()
    x_ticks: tuple[tuple[float, str], ...] = ()
    labels: tuple[str, str] = ("realisations", "")


COUNT_BLANK = Effort(
    Strokes.of(), Marks.of(), Words.of(), EMPTY, NO_TICKS, NO_TICKS, labels=("", "")
)
ERROR_BLANK = COUNT_BLANK
"""The views before their first record: no scale is invented for them."""


# ---------------------------------------------------------------- realisations


def _names(watch: Watch) -> list[str]:
    """What the points of each sprinkling have in common."""
    sprinklings = watch.design.sprinklings
    if len(sprinklings) == 1:
        return ["all points"]
    return [thousands(round(s.density)) for s in sprinklings]


def read_counts(watch: Watch, choices: CampaignChoices, look: Look) -> Effort:
    """Lay out the realisations of each sprinkling, the failed ones apart."""
    counts = np.array(watch.counts, dtype=float).reshape(-1, 2)
    done, failed = counts[:, 0] - counts[:, 1], counts[:, 1]
    rows = len(counts)
    y = np.arange(rows, 0, -1.0)
    most = watch.plan.realisations
    top = max(float(counts[:, 0].max(initial=0.0)), 1.0)
    shown = watch.plan.target is None or most <= 1.5 * top
    limits = Limits(0.0, 1.35 * max(top, most if shown else 0.0), 0.3, rows + 0.7)
    width = 12.0 if rows <= WIDE else 4.0
    zero = np.zeros(rows)
    bad = failed > 0
    lines = Strokes.of(
        (zero, y, done, y, look.ink, width, "solid"),
        (done[bad], y[bad], counts[bad, 0], y[bad], look.alarm, width, "solid"),
        *([(most, 0.4, most, rows + 0.6, look.accent, 1.5, "dashed")] if shown else []),
    )
    words = [
        (
            counts[k, 0] + 0.012 * limits.x_high,
            y[k],
            _said(done[k], failed[k]),
            look.alarm if bad[k] else look.ink,
        )
        for k in range(rows)
        if rows <= WIDE or bad[k]
    ]
    ticks = thinned(list(zip(y.tolist(), _names(watch), strict=True)), 0.0, rows, most=12)
    many = len(watch.design.sprinklings) > 1
    return Effort(
        lines,
        Marks.of(),
        Words.of(*words),
        limits,
        ticks,
        tuple((float(n), str(n)) for n in range(5)) if limits.x_high < 5 else (),
        ("realisations", "density (per area)" if many else ""),
    )


def _said(done: float, failed: float) -> str:
    """A bar's number."""
    text = thousands(int(done))
    return f"{text}, {thousands(int(failed))} failed" if failed else text


def draw_counts(data: Effort) -> hv.Overlay:
    """Draw the realisations."""
    return bare(overlay(COUNT_GROUP, data.lines, data.marks, data.words), data)


def counts_caution(watch: Watch, choices: CampaignChoices) -> str:
    """Say what shares realisations, and how many there may be."""
    parts = []
    if len(watch.design.sprinklings) < len(watch.design.cells):
        parts.append("points and placements of one density share their sprinklings")
    most = thousands(watch.plan.realisations)
    if watch.plan.target is None:
        parts.append(f"dashed: the {most} planned")
    else:
        parts.append(f"at most {most} each, more where they lower the error most for their time")
    if out_of_reach(watch):
        parts.append("too few for the target (below)")
    failed = sum(failed for _, failed in watch.counts)
    if failed:
        parts.append(f"{thousands(failed)} failed: reasons below")
    text = "; ".join(parts)
    return text[0].upper() + text[1:] + "."


# ---------------------------------------------------------------- error against CPU time


def _log_ticks(low: float, high: float) -> tuple[tuple[float, str], ...]:
    """Ticks of an axis that holds common logarithms."""
    steps = (1, 2, 5) if high - low < 2.2 else (1,)
    found = [
        (math.log10(step) + decade, _plain(step * 10.0**decade))
        for decade in range(math.floor(low) - 1, math.ceil(high) + 1)
        for step in steps
    ]
    return tuple((at, text) for at, text in found if low <= at <= high)


def _plain(number: float) -> str:
    """A round number without an exponent."""
    return thousands(round(number)) if number >= 1 else f"{number:.6f}".rstrip("0")


def read_error(watch: Watch, choices: CampaignChoices, look: Look) -> Effort:
    """Lay out the error of the target against CPU time, both in logarithms."""
    target = watch.plan.target
    history = [(t, e) for t, e in watch.estimates.history if t > 0 and e > 0]
    label = _error_label(watch)
    if target is None or not history:
        return ERROR_BLANK
    scale = 100.0 if target.relative else 1.0
    x = np.log10([t for t, _ in history])
    y = np.log10([scale * e for _, e in history])
    goal = math.log10(scale * target.error)
    lines: list[tuple[Any, ...]] = [polyline(x, y, look.ink, 1.5, "solid")]
    right = float(x[-1])
    if y[-1] > goal:
        # Errors fall as one over the root of the number of realisations.
        right += min(2 * float(y[-1] - goal), DECADES)
        fall = float(y[-1]) - (right - float(x[-1])) / 2
        lines.append((x[-1], y[-1], right, fall, look.muted, 1.5, "dotted"))
    span = max(right - float(x[0]), 0.3)
    height = max(float(y.max()) - min(goal, float(y.min())), 0.3)
    limits = Limits(
        float(x[0]) - 0.06 * span,
        right + 0.06 * span,
        min(goal, float(y.min())) - 0.12 * height,
        float(y.max()) + 0.12 * height,
    )
    lines.insert(0, (limits.x_low, goal, limits.x_high, goal, look.accent, 1.5, "dashed"))
    words = Words.of(
        (limits.x_low + 0.01 * span, goal + 0.05 * height, _goal(watch), look.accent),
    )
    return Effort(
        Strokes.of(*lines),
        Marks.of((x, y, look.ink, "circle", 6.0, 1.0)),
        words,
        limits,
        _log_ticks(limits.y_low, limits.y_high),
        _log_ticks(limits.x_low, limits.x_high),
        ("CPU time (s)", label),
    )


def _goal(watch: Watch) -> str:
    target = watch.plan.target
    if target is None:
        return ""
    return f"wanted: {error_words(target.error, target)}"


def _error_label(watch: Watch) -> str:
    target = watch.plan.target
    if target is None:
        return "standard error reached"
    symbol = SYMBOLS[target.quantity]
    unit = "%" if target.relative else "nats"
    return f"error of {symbol} reached ({unit})"


def draw_error(data: Effort) -> hv.Overlay:
    """Draw the error."""
    return bare(overlay(ERROR_GROUP, data.lines, data.marks, data.words), data)


def error_caution(watch: Watch, choices: CampaignChoices) -> str:
    """Say what the curve is made of."""
    target = watch.plan.target
    if target is None:
        return "A fixed number of realisations: no target was set."
    if not watch.estimates.history:
        return "Waiting for two realisations of every sprinkling: no error is known before."
    which = "" if target.quantity == "slope" else ", the largest of all points"
    if watch.estimates.error <= target.error:
        return f"One standard error{which}; the target is reached."
    if out_of_reach(watch):
        most = thousands(watch.plan.realisations)
        return (
            f"One standard error{which}; dotted: 1/√time, if scatter stays; at most {most} "
            "realisations are planned, the target needs more."
        )
    return f"One standard error{which}; dotted: falling as 1/√time from here, if scatter stays."


CAMPAIGN_VIEWS = (
    View(
        "quantity",
        "What is found?",
        {
            "": Figure(
                GROUP,
                read,
                draw,
                BLANK,
                {"x": SCALE, "y": "entropy S (nats)", "offset": (8.0, 0.0)},
            )
        },
        caution,
        lambda watch: (watch.estimates, watch.plan),
        (("entropy", "S"), ("mutual", "I")),
    ),
    View(
        "slope",
        "Does b hold without the smallest sizes?",
        {
            "": Figure(
                SLOPE_GROUP,
                read_slope,
                draw_slope,
                SLOPE_BLANK,
                {"x": SLOPE_LABELS[0], "y": SLOPE_LABELS[1], "offset": (8.0, 0.0)},
            )
        },
        slope_caution,
        lambda watch: (watch.estimates, watch.plan),
    ),
    View(
        "count",
        "How many realisations?",
        {
            "": Figure(
                COUNT_GROUP,
                read_counts,
                draw_counts,
                COUNT_BLANK,
                {"x": "realisations", "y": "density (per area)", "offset": (8.0, 0.0)},
            )
        },
        counts_caution,
        lambda watch: (watch.counts, watch.plan),
    ),
    View(
        "error",
        "What does the time buy?",
        {
            "": Figure(
                ERROR_GROUP,
                read_error,
                draw_error,
                ERROR_BLANK,
                {"x": "CPU time (s)", "y": "standard error reached", "offset": (4.0, 0.0)},
            )
        },
        error_caution,
        lambda watch: (watch.estimates, watch.plan),
    ),
)
"""The four views of a campaign."""


def register_campaign() -> None:
    """Register the fixed options of their figures with HoloViews; once per process."""
    for view in CAMPAIGN_VIEWS:
        for figure in view.figures.values():
            register(figure.group, **figure.axes)
