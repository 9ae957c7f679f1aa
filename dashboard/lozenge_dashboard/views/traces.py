"""Curves against the cut: rows of marks with error bars, their names, and the frame around them."""

from __future__ import annotations

import math
from typing import Any, NamedTuple

import numpy as np

from lozenge_dashboard.palette import Look
from lozenge_dashboard.views.marks import Limits, Marks, Strokes, Words
from lozenge_dashboard.views.pieces import Line, bars, room, written

__all__ = ["FAINT", "TICKS", "Cuts", "Trace", "assembled", "ends_of", "logarithms", "reach"]

LINE = 0.1
"""Height of a line of words as a fraction of the figure, as `pieces.written` has it."""
TICKS = (0.05, 0.1, 0.25, 0.5, 1.0, 2.0, 4.0, 8.0, 16.0)
"""Multiples of the threshold that stand on the axis."""
FAINT = 1e-6
"""Below this a value has no place on a logarithmic scale."""


class Cuts(NamedTuple):
    """Means with errors against alpha, the twin as a line, plateaus, names and words."""

    lines: Strokes
    marks: Marks
    words: Words
    limits: Limits
    x_ticks: tuple[tuple[float, str], ...]
    ticks: tuple[tuple[float, str], ...]


def _ticks(alphas: np.ndarray) -> tuple[tuple[float, str], ...]:
    """Round multiples within the range."""
    low, high = float(alphas[0]) * 0.999, float(alphas[-1]) * 1.001
    return tuple((math.log(a), f"{a:g}") for a in TICKS if low <= a <= high)


class Trace(NamedTuple):
    """One row of marks with what it is called."""

    x: np.ndarray
    y: np.ndarray
    error: np.ndarray
    colour: str
    marker: str
    name: str


def ends_of(trace: Trace) -> np.ndarray:
    """What a trace and its error bars reach."""
    error = np.nan_to_num(trace.error)
    ends = np.concatenate([trace.y - error, trace.y + error])
    return ends[np.isfinite(ends)]


def assembled(
    alphas: np.ndarray,
    traces: list[Trace],
    strokes: list[Any],
    lines: list[Line],
    look: Look,
    *,
    span: tuple[float, float],
    ticks: tuple[tuple[float, str], ...] = (),
) -> Cuts:
    """Marks with error bars over the references, words above them and names of the marks below.

    Curves fall from left to right, so that the upper right corner is free for the names.
    """
    x = np.log(alphas)
    limits = room(x, *span, len(lines), least=0.02)
    marks: list[tuple[Any, ...]] = []
    for t in traces:
        some = np.isfinite(t.y)
        marks.append((t.x[some], t.y[some], t.colour, t.marker, 6.0, 1.0))
        strokes = [*strokes, *bars(t.x, t.y, t.error, t.colour, 0.0)[:1]]
    names: list[Line] = [(t.name, t.colour, t.marker) for t in reversed(traces)]
    _, words = written(_right(limits, 0.4, below=0), lines, look)
    keys, more = written(_right(limits, 0.5, below=len(lines)), names, look)
    here = (0.0, limits.y_low, 0.0, limits.y_high, look.rule, 1.0, "dashed")
    return Cuts(
        lines=Strokes.of(here, *strokes),
        marks=Marks.of(*marks, *keys),
        words=joined(words, more),
        limits=limits,
        x_ticks=_ticks(alphas),
        ticks=ticks,
    )


def _right(limits: Limits, share: float, *, below: int) -> Limits:
    """The right part of a figure, below some lines of words."""
    width, height = limits.x_high - limits.x_low, limits.y_high - limits.y_low
    return limits._replace(
        x_low=limits.x_low + share * width, y_high=limits.y_high - LINE * below * height
    )


def joined(*words: Words) -> Words:
    """Words of several places as one layer."""
    rows = [tuple(column[2:] for column in part) for part in words]
    return Words.of(*(row for row in rows if row[0].size))


def logarithms(y: Any, error: Any) -> tuple[np.ndarray, np.ndarray]:
    """log10 of values and of the ends of their bars, as a value and a half-width."""
    with np.errstate(divide="ignore", invalid="ignore"):
        place = np.where(y > 0, np.log10(np.maximum(y, FAINT)), np.nan)
        half = np.where(y > 0, error / np.maximum(y, FAINT) / math.log(10.0), np.nan)
    return place, half


def reach(traces: list[Trace], look: Look, *, least: float) -> tuple[float, float]:
    """What the rule in ink reaches, zero in it: others may leave the frame."""
    own = [ends_of(t) for t in traces if t.colour == look.ink] or [ends_of(t) for t in traces]
    known = np.concatenate(own) if own else np.empty(0)
    if not known.size:
        return 0.0, least
    return min(float(known.min()), 0.0), max(float(known.max()), least)
