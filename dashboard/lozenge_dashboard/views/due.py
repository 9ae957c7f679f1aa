"""Slopes of data, twin and chain side by side, and data minus twin: what a deviation is due to."""

from __future__ import annotations

import math
from typing import Any, NamedTuple

import holoviews as hv
import numpy as np

from lozenge_dashboard.palette import Look
from lozenge_dashboard.records import EvidenceChoices, EvidenceScene
from lozenge_dashboard.views.campaign import fraction, named
from lozenge_dashboard.views.marks import Limits, Marks, Strokes, Words, overlay, polyline
from lozenge_dashboard.views.pieces import CAP, EMPTY, NO_TICKS, Line, bare, bars, room, written
from lozenge_engine.notation import with_error

__all__ = [
    "AXES",
    "BLANK",
    "GROUP",
    "MINUS_AXES",
    "MINUS_GROUP",
    "caution",
    "draw",
    "draw_minus",
    "read",
    "read_minus",
]

GROUP, MINUS_GROUP = "DueSlopes", "DueMinus"
AXES: dict[str, Any] = {"x": "slope b of S against ln(ℓ/a) (nats)", "y": "", "offset": (8.0, 0.0)}
MINUS_AXES: dict[str, Any] = {
    "x": "scale ln(ℓ/a)",
    "y": "data minus twin (nats)",
    "offset": (0.0, 0.0),
}
MOST = 8
"""Rows that are drawn; the table has all of them."""
LEAST_ERROR = 5e-4
"""Smaller errors are not written in the figure."""
LINES = (("data", 0.28), ("twin", 0.0), ("chain", -0.28))
"""What stands in each row, and how far above its middle."""


class Due(NamedTuple):
    """Lines, marks and numbers, with ticks in words."""

    lines: Strokes
    marks: Marks
    words: Words
    limits: Limits
    ticks: tuple[tuple[float, str], ...] = ()
    x_ticks: tuple[tuple[float, str], ...] = ()
    labels: tuple[str, str] = ("", "")


BLANK = Due(Strokes.of(), Marks.of(), Words.of(), EMPTY, NO_TICKS, NO_TICKS)


def _rows(scene: EvidenceScene) -> list[Any]:
    """The rows that are drawn, none before the record."""
    return [] if scene.due is None else list(scene.due.rows[:MOST])


def _known(slope: Any) -> bool:
    """Whether there is a number."""
    return slope is not None and math.isfinite(slope.value)


def _ends(rows: list[Any]) -> list[float]:
    """Everything that the axis of slopes has to hold."""
    ends: list[float] = []
    for row in rows:
        if row.reference is not None:
            ends.append(row.reference)
        for name, _ in LINES:
            slope = getattr(row, f"{name}_slope")
            if _known(slope):
                error = slope.error if math.isfinite(slope.error) else 0.0
                ends += [slope.value - error, slope.value + error]
    return ends


def read(scene: EvidenceScene, choices: EvidenceChoices, look: Look) -> Due:
    """Lay out the slopes, one row for each series, data as marks and references as lines."""
    rows = _rows(scene)
    ends = _ends(rows)
    if not ends:
        return BLANK
    low, high = min(ends), max(ends)
    span = max(high - low, 0.05)
    limits = Limits(low - 0.12 * span, high + 1.1 * span, 0.4, len(rows) + 0.6)
    lines: list[tuple[Any, ...]] = []
    marks: list[tuple[Any, ...]] = []
    words: list[tuple[Any, ...]] = []
    for k, row in enumerate(rows):
        middle = float(len(rows) - k)
        if row.reference is not None:
            x = row.reference
            lines.append((x, middle - 0.42, x, middle + 0.42, look.muted, 1.5, "dashed"))
        colours = {"data": look.ink, "twin": look.accent, "chain": look.muted}
        for name, above in LINES:
            slope, y = getattr(row, f"{name}_slope"), middle + above
            if not _known(slope):
                continue
            b, e = slope.value, slope.error if math.isfinite(slope.error) else 0.0
            colour = colours[name]
            if name == "data":
                marks.append((b, y, colour, "circle", 8.0, 1.0))
                lines.append((b - e, y, b + e, y, colour, 1.5, "solid"))
            else:
                lines.append((b, y - 0.13, b, y + 0.13, colour, 2.0, "solid"))
                lines.append((b - e, y, b + e, y, colour, 3.0, "solid"))
            error = max(slope.error, LEAST_ERROR) if math.isfinite(slope.error) else math.nan
            words.append((max(b + e, high), y, f"{name} {with_error(b, error)}", colour))
    ticks = tuple((float(len(rows) - k), _label(row)) for k, row in enumerate(rows))
    return Due(
        Strokes.of(*lines),
        Marks.of(*marks),
        Words.of(*words),
        limits,
        ticks,
        labels=(AXES["x"], ""),
    )


def _label(row: Any) -> str:
    """What a row is called on its axis."""
    return named(row.label) if row.label else "b"


def draw(data: Due) -> hv.Overlay:
    """Draw the slopes."""
    return bare(overlay(GROUP, data.lines, data.marks, data.words), data)


# ---------------------------------------------------------------- data minus twin


def read_minus(scene: EvidenceScene, choices: EvidenceChoices, look: Look) -> Due:
    """Lay out data minus twin against the scale, each series with its line."""
    rows = [row for row in _rows(scene) if np.isfinite(row.minus).any()]
    if not rows:
        return BLANK
    y_all = np.concatenate([_clean(row.minus, row.minus_error) for row in rows])
    x_all = np.concatenate([row.x[np.isfinite(row.minus)] for row in rows])
    keys: list[Line] = [
        (_legend(row), look.regions[k % len(look.regions)], None) for k, row in enumerate(rows)
    ]
    limits = room(
        x_all, min(float(y_all.min()), 0.0), max(float(y_all.max()), 0.0), len(keys), least=0.01
    )
    cap = CAP * (limits.x_high - limits.x_low)
    lines: list[tuple[Any, ...]] = [
        (limits.x_low, 0.0, limits.x_high, 0.0, look.muted, 1.0, "dashed")
    ]
    marks: list[tuple[Any, ...]] = []
    for k, row in enumerate(rows):
        colour = look.regions[k % len(look.regions)]
        x = row.x + 3 * cap * (k - (len(rows) - 1) / 2)
        lines += bars(x, row.minus, row.minus_error, colour, cap)
        used = np.asarray(row.used, dtype=bool) & np.isfinite(row.minus)
        marks.append((x, row.minus, colour, "circle", 7.0, np.where(used, 1.0, 0.0)))
        if _known(row.minus_slope) and used.sum() > 1:
            lines.append(_line(row, used, colour))
    more, words = written(limits, keys, look)
    return Due(Strokes.of(*lines), Marks.of(*marks, *more), words, limits, labels=_minus_labels())


def _clean(values: Any, errors: Any) -> Any:
    """Ends of the bars that are known."""
    known = np.isfinite(values)
    error = np.where(np.isfinite(errors), errors, 0.0)[known]
    return np.concatenate([values[known] - error, values[known] + error])


def _line(row: Any, used: Any, colour: str) -> tuple[Any, ...]:
    """The line of the difference through the weighted middle of its points."""
    x, y = row.x[used], row.minus[used]
    weight = 1.0 / np.where(row.minus_error[used] > 0, row.minus_error[used], 1.0) ** 2
    middle = float(weight @ x / weight.sum()), float(weight @ y / weight.sum())
    ends = np.array([x.min(), x.max()])
    return polyline(
        ends, middle[1] + row.minus_slope.value * (ends - middle[0]), colour, 1.5, "solid"
    )


def _legend(row: Any) -> str:
    """Constant and slope of the difference."""
    parts = [_label(row) if row.label else "data − twin"]
    if _known(row.constant):
        parts.append(f"constant {with_error(row.constant.value, row.constant.error)}")
    if _known(row.minus_slope):
        parts.append(f"slope {with_error(row.minus_slope.value, row.minus_slope.error)}")
    return ", ".join(parts)


def _minus_labels() -> tuple[str, str]:
    return MINUS_AXES["x"], MINUS_AXES["y"]


def draw_minus(data: Due) -> hv.Overlay:
    """Draw data minus twin."""
    return bare(overlay(MINUS_GROUP, data.lines, data.marks, data.words), data)


def caution(scene: EvidenceScene, choices: EvidenceChoices) -> str:
    """Say the verdict, and what the data are."""
    record = scene.due
    if record is None or not record.rows:
        return "No ladder of densities: there is no slope to compare."
    references = {row.reference for row in record.rows if row.reference is not None}
    dashed = f" Dashed: {', '.join(fraction(r) for r in sorted(references))}." if references else ""
    if choices.due == "minus":
        dashed = " Hollow: not in the fit."
    return f"{_verdicts(record.rows)}{dashed}"


def _verdicts(rows: Any) -> str:
    """The whole sentence for one series, its first words for each of several."""
    if len(rows) == 1:
        return str(rows[0].verdict).rstrip(".") + "."
    heads = [f"{_label(row)}: {row.verdict.split(':')[0].rstrip('.')}" for row in rows[:3]]
    more = f"; {len(rows) - 3} more" if len(rows) > 3 else ""
    return f"{'; '.join(heads)}{more}; the table says why."
