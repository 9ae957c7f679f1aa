"""What the figures of a campaign share: error bars, lines of words, limits, ticks."""

from __future__ import annotations

from typing import Any

import holoviews as hv
import numpy as np

from lozenge_dashboard.palette import Look
from lozenge_dashboard.views.marks import Limits, Words

__all__ = ["CAP", "EMPTY", "NO_TICKS", "Line", "bare", "bars", "room", "thinned", "written"]

EMPTY = Limits(0.0, 1.0, 0.0, 1.0)
NO_TICKS = ((-1.0, ""),)
"""Ticks of an axis that has nothing to measure: one, outside `EMPTY`."""
LINE = 0.1
"""Height of a line of words as a fraction of the figure."""
CAP = 0.006
"""Half-width of an error bar's ends as a fraction of the axis."""

Line = tuple[str, str, str | None]
"""Words, their colour, and the mark before them."""


def bars(x: Any, y: Any, error: Any, colour: str, cap: float) -> list[tuple[Any, ...]]:
    """Error bars with ends; none where no error is known."""
    some = np.isfinite(y) & np.isfinite(error)
    x, y, e = x[some], y[some], error[some]
    return [
        (x, y - e, x, y + e, colour, 1.5, "solid"),
        (x - cap, y - e, x + cap, y - e, colour, 1.5, "solid"),
        (x - cap, y + e, x + cap, y + e, colour, 1.5, "solid"),
    ]


def room(x: Any, low: float, high: float, lines: int, *, least: float) -> Limits:
    """Limits around what is known, with room above for lines of words."""
    span = float(np.ptp(x)) or max(abs(float(x[0])), 1.0)
    pad = max(0.08 * (high - low), least)
    share = LINE * lines + 0.03 * bool(lines)
    top = high + pad + share / (1 - share) * (high - low + 2 * pad)
    return Limits(float(x.min()) - 0.06 * span, float(x.max()) + 0.06 * span, low - pad, top)


def written(limits: Limits, lines: list[Line], look: Look) -> tuple[list[tuple[Any, ...]], Words]:
    """Lines of words from the top left corner down, some with a mark before them."""
    width, height = limits.x_high - limits.x_low, limits.y_high - limits.y_low
    marks: list[tuple[Any, ...]] = []
    words = []
    for i, (text, colour, marker) in enumerate(lines):
        y = limits.y_high - LINE * (i + 0.7) * height
        x = limits.x_low + 0.01 * width
        if marker:
            marks.append((x + 0.015 * width, y, look.ink, marker, 8.0, 1.0))
            x += 0.025 * width
        words.append((x, y, text, colour))
    return marks, Words.of(*words)


def bare(drawn: hv.Overlay, data: Any) -> hv.Overlay:
    """Take the scales off a figure that has nothing to show; the first record brings them."""
    if data.ticks != NO_TICKS:
        return drawn
    ticks = list(NO_TICKS)
    x, y = data.limits[:2], data.limits[2:]
    return drawn.opts(xticks=ticks, yticks=ticks, xlabel="", ylabel="", xlim=x, ylim=y)


def thinned(
    ticks: list[tuple[float, str]], low: float, high: float, *, most: int
) -> tuple[tuple[float, str], ...]:
    """Ticks that stand far enough from each other to be read."""
    apart = (high - low) / most
    kept: list[tuple[float, str]] = []
    for at, text in sorted(ticks):
        if not kept or at - kept[-1][0] >= apart:
            kept.append((at, text))
    return tuple(kept)
