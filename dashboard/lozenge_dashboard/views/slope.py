"""The slope of a campaign as its smallest sizes are left out one by one."""

from __future__ import annotations

import math
from typing import Any

import holoviews as hv
import numpy as np

from lozenge_dashboard.campaign_text import complete, drift
from lozenge_dashboard.campaigns import Watch
from lozenge_dashboard.palette import Look
from lozenge_dashboard.records import CampaignChoices
from lozenge_dashboard.views.campaign import (
    BLANK,
    WORDY,
    Quantity,
    colours_of,
    fraction,
    named,
)
from lozenge_dashboard.views.marks import Marks, Strokes, overlay
from lozenge_dashboard.views.pieces import CAP, Line, bare, bars, room, thinned, written
from lozenge_engine.estimates import FitOf
from lozenge_engine.notation import thousands

__all__ = [
    "SLOPE_BLANK",
    "SLOPE_GROUP",
    "SLOPE_LABELS",
    "draw_slope",
    "read_slope",
    "slope_caution",
]

SLOPE_GROUP = "Slope"
SLOPE_LABELS = ("elements of the smallest region kept", "slope b (nats)")
SLOPE_BLANK = BLANK
"""The slope's view before its first fit."""


def _fitted(watch: Watch) -> list[tuple[int, FitOf]]:
    return [(k, fit) for k, fit in enumerate(watch.estimates.fits) if fit.report is not None]


def read_slope(watch: Watch, choices: CampaignChoices, look: Look) -> Quantity:
    """Lay out the slope against the smallest size that its fit keeps."""
    fits = _fitted(watch)
    if not fits:
        return SLOPE_BLANK
    colours = colours_of(len(watch.estimates.fits), look)
    rows = [
        (k, math.log10(size), line.slope, line.slope_error)
        for k, fit in fits
        if fit.report is not None
        for size, line in fit.report.by_smallest
    ]
    ends = [b + s * e for _, _, b, e in rows for s in (-1, 1)]
    references = {fit.reference for _, fit in fits if fit.reference is not None}
    ends += references
    lines: list[Line] = []
    if len(watch.estimates.fits) > 1:
        lines += [(named(fit.label), colours[k], None) for k, fit in fits][:WORDY]
    if references:
        slopes = ", ".join(fraction(s) for s in sorted(references))
        lines.append((f"dashed: reference {slopes}", look.accent, None))
    x_all = np.array([row[1] for row in rows])
    limits = room(x_all, min(ends), max(ends), len(lines), least=0.01)
    if np.ptp(x_all) == 0:
        limits = limits._replace(x_low=x_all[0] - 0.3, x_high=x_all[0] + 0.3)
    cap = CAP * (limits.x_high - limits.x_low)
    strokes: list[tuple[Any, ...]] = [
        (limits.x_low, s, limits.x_high, s, look.accent, 1.5, "dashed") for s in references
    ]
    marks: list[tuple[Any, ...]] = []
    for k, _ in fits:
        own = np.array([row[1:] for row in rows if row[0] == k])
        x = own[:, 0] + 3 * cap * (k - (len(colours) - 1) / 2)
        strokes += bars(x, own[:, 1], own[:, 2], colours[k], cap)
        marks.append((x, own[:, 1], colours[k], "circle", 8.0, 1.0))
    keys, words = written(limits, lines, look)
    sizes = sorted({row[1] for row in rows})
    ticks = thinned(
        [(x, thousands(round(10**x))) for x in sizes], limits.x_low, limits.x_high, most=9
    )
    return Quantity(
        Strokes.of(*strokes), Marks.of(*marks, *keys), words, limits, ticks, SLOPE_LABELS
    )


def draw_slope(data: Quantity) -> hv.Overlay:
    """Draw the slope."""
    return bare(overlay(SLOPE_GROUP, data.lines, data.marks, data.words), data)


def slope_caution(watch: Watch, choices: CampaignChoices) -> str:
    """Say whether the slope is settled and how far it drifts, or why there is none."""
    if not watch.estimates.fits:
        return "No density or half-width axis: there is no slope to fit."
    fits = _fitted(watch)
    if not fits:
        return f"{watch.estimates.fits[0].note[:1].upper()}{watch.estimates.fits[0].note[1:]}."
    said = []
    for _, fit in fits:
        if fit.report is None:
            continue
        head = f"{named(fit.label)}: " if fit.label else ""
        word = "not settled" if not fit.report.settled else "settled"
        if fit.report.settled and not complete(watch):
            word = "settled so far"
        moved = drift(fit.report)
        tail = ""
        if math.isfinite(moved):
            tail = f", without small sizes b moves by up to {moved:.2g} of its error"
        if len(fits) == 1 and not fit.report.settled and "dropping" not in fit.report.why:
            word += f" ({fit.report.why})"
        said.append(f"{head}{word}{tail}")
    said.append("slopes share samples and move together")
    if watch.estimates.fits[0].axis == "half_width":
        said.append("the place in the patch changes too: no K/3")
    text = "; ".join(said)
    return text[0].upper() + text[1:] + "."
