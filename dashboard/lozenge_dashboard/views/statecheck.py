"""Checks of the state: W against the logarithm, where it departs, and what the cut takes."""

from __future__ import annotations

import math
from typing import Any, NamedTuple

import holoviews as hv
import numpy as np

from lozenge_dashboard.palette import Look
from lozenge_dashboard.records import EvidenceChoices, EvidenceScene
from lozenge_dashboard.views.marks import Dust, Limits, Marks, Strokes, Words, overlay
from lozenge_dashboard.views.pieces import EMPTY, NO_TICKS, bare
from lozenge_dashboard.views.ramp import Ramp, scale, signed, sizes
from lozenge_engine.geometry import Region
from lozenge_engine.notation import with_error
from lozenge_engine.statecheck import LAW_SLOPE, PatchMap, StateRecord

__all__ = [
    "AXES",
    "BLANK",
    "GROUP",
    "LOSS_AXES",
    "LOSS_BLANK",
    "LOSS_GROUP",
    "MAP_AXES",
    "MAP_BLANK",
    "MAP_GROUP",
    "Cells",
    "Logarithm",
    "caution",
    "draw",
    "draw_loss",
    "draw_map",
    "read",
    "read_deviation",
    "read_loss",
]

GROUP, MAP_GROUP, LOSS_GROUP = "StateFit", "StateDeviation", "StateLoss"
AXES: dict[str, Any] = {"x": "", "y": "", "offset": (8.0, 0.0)}
MAP_AXES: dict[str, Any] = {"x": "", "y": "", "offset": (9.0, 0.0)}
LOSS_AXES = MAP_AXES
"""What `lozenge_dashboard.views.marks.register` takes."""
FIT_LABELS = ("proper distance or time |τ| (patch half-widths)", "Re W of a pair")
MAP_LABELS = ("position x (patch half-widths)", "time t (patch half-widths)")
PATCH = Region(half_width=1.0)
ENDS = ((-1.0, "−1"), (-0.5, "−0.5"), (0.0, "0"), (0.5, "0.5"), (1.0, "1"))
"""Ticks of the maps."""
PLACES = (0.01, 0.02, 0.05, 0.1, 0.2, 0.5)
"""Ticks of |tau|."""
SPACELIKE, TIMELIKE = "circle", "square"
CELL = 11.0
"""Diameter of a cell's mark in pixels."""
FEW = 20
"""Pairs below which a cell of the deviation is left hollow."""


class Logarithm(NamedTuple):
    """Pairs near the centre, their means, the fit and the law."""

    dust: Dust
    lines: Strokes
    marks: Marks
    words: Words
    limits: Limits
    x_ticks: tuple[tuple[float, str], ...] = ()
    labels: tuple[str, str] = ("", "")
    ticks: tuple[tuple[float, str], ...] = ()


class Cells(NamedTuple):
    """A map of the patch with its scale."""

    lines: Strokes
    marks: Marks
    words: Words
    limits: Limits
    x_ticks: tuple[tuple[float, str], ...] = ()
    labels: tuple[str, str] = ("", "")
    ticks: tuple[tuple[float, str], ...] = ()


BLANK = Logarithm(
    Dust(np.empty(0), np.empty(0)),
    Strokes.of(),
    Marks.of(),
    Words.of(),
    EMPTY,
    x_ticks=NO_TICKS,
    ticks=NO_TICKS,
)
MAP_BLANK = LOSS_BLANK = Cells(
    Strokes.of(), Marks.of(), Words.of(), EMPTY, x_ticks=NO_TICKS, ticks=NO_TICKS
)
"""The figures before their first record."""


def read(scene: EvidenceScene, choices: EvidenceChoices, look: Look) -> Logarithm:
    """Lay out Re W against ln |tau|."""
    record: StateRecord | None = scene.state
    if record is None:
        return BLANK
    bins = record.bins
    x, y, e = np.log(bins.distance), bins.value, bins.scatter
    limits = _fit_limits(record, x)
    ends = np.array([max(x.min(), limits.x_low), x.max()])
    window = x[bins.used]
    inside = np.array([window.min(), window.max()])
    shown = np.log(record.cloud[0]) > limits.x_low
    return Logarithm(
        dust=Dust(np.log(record.cloud[0])[shown], record.cloud[1][shown]),
        lines=Strokes.of(
            (x, y - e, x, y + e, look.muted, 1.0, "solid"),
            _line(ends, LAW_SLOPE, record.law_constant, look.ink, "dashed"),
            _line(inside, record.slope, record.constant, look.accent, "solid"),
        ),
        marks=Marks.of(
            *(
                (
                    x[some],
                    y[some],
                    look.ink,
                    TIMELIKE if timelike else SPACELIKE,
                    6.0,
                    bins.used[some].astype(float),
                )
                for timelike, some in ((t, bins.timelike == t) for t in (False, True))
                if some.any()
            )
        ),
        words=_fit_words(record, limits, look),
        limits=limits,
        x_ticks=tuple(
            (math.log(p), f"{p:g}") for p in PLACES if limits.x_low < math.log(p) < limits.x_high
        ),
        labels=FIT_LABELS,
    )


def _line(x: np.ndarray, slope: float, constant: float, colour: str, dash: str) -> tuple[Any, ...]:
    """A straight line from end to end."""
    y = slope * x + constant
    return x[0], y[0], x[1], y[1], colour, 2.0, dash


def _fit_limits(record: StateRecord, x: np.ndarray) -> Limits:
    """All means with their scatter, and room for the words below."""
    bins = record.bins
    low = float((bins.value - bins.scatter).min())
    high = float((bins.value + bins.scatter).max())
    span = high - low
    return Limits(
        float(x.min()) - 0.15, float(x.max()) + 0.15, low - 0.4 * span, high + 0.06 * span
    )


def _fit_words(record: StateRecord, limits: Limits, look: Look) -> Words:
    """Slope and constant with their errors, from the lower left corner up."""
    height = limits.y_high - limits.y_low
    lines = [
        (f"law: slope −1/2π = −{-LAW_SLOPE:.4f}", look.ink),
        (f"constant {_signed(record.law_constant, record.law_constant_error)}", look.ink),
        (f"fit: slope {_signed(record.slope, record.slope_error)}", look.accent),
        (f"sharp cut allowed for {_signed(*record.softened[:2])}", look.muted),
    ]
    return Words.of(
        *(
            (limits.x_low, limits.y_low + (0.05 + 0.085 * i) * height, text, colour)
            for i, (text, colour) in enumerate(lines)
        )
    )


def _signed(value: float, error: float) -> str:
    """A number with its error and a proper minus sign."""
    return with_error(value, error).replace("-", "−")


def read_deviation(scene: EvidenceScene, choices: EvidenceChoices, look: Look) -> Cells:
    """Lay out W minus the law by the midpoint of the pair."""
    record: StateRecord | None = scene.state
    if record is None:
        return MAP_BLANK
    ramp = signed(record.deviation.value, look)
    filled = (record.deviation.held >= FEW).astype(float)
    return _cells(record.deviation, ramp, filled, look, title="Re W − law", percent=False)


def read_loss(scene: EvidenceScene, choices: EvidenceChoices, look: Look) -> Cells:
    """Lay out what the cut takes from the rows of i Delta."""
    record: StateRecord | None = scene.state
    if record is None:
        return LOSS_BLANK
    ramp = sizes(record.loss.value, look)
    filled = np.ones(record.loss.value.size)
    title = "share lost of row norms²"
    return _cells(record.loss, ramp, filled, look, title=title, percent=True)


def _cells(
    shown: PatchMap, ramp: Ramp, filled: np.ndarray, look: Look, *, title: str, percent: bool
) -> Cells:
    """A map with its outline, title and scale."""
    limits = Limits(-1.06, 1.75, -1.06, 1.16)
    pieces, numbers = scale(ramp, limits, look, at=1.18, percent=percent)
    t, x = zip(*PATCH.corners, strict=True)
    outline = (x, t, (*x[1:], x[0]), (*t[1:], t[0]), look.muted, 1.0, "solid")
    return Cells(
        lines=Strokes.of(outline, *pieces),
        marks=Marks.of((shown.x, shown.t, ramp.paint(shown.value), "circle", CELL, filled)),
        words=Words.of((-1.06, 1.08, title, look.ink), *numbers),
        limits=limits,
        x_ticks=ENDS,
        labels=MAP_LABELS,
        ticks=ENDS,
    )


def draw(data: Logarithm) -> hv.Overlay:
    """Draw the pairs, the fit and the law."""
    return bare(overlay(GROUP, data.dust, data.lines, data.marks, data.words), data)


def draw_map(data: Cells) -> hv.Overlay:
    """Draw the map of the deviation."""
    return bare(overlay(MAP_GROUP, data.lines, data.marks, data.words), data)


def draw_loss(data: Cells) -> hv.Overlay:
    """Draw the map of the loss."""
    return bare(overlay(LOSS_GROUP, data.lines, data.marks, data.words), data)


def caution(scene: EvidenceScene, choices: EvidenceChoices) -> str:
    """Say what the errors hold, or the numbers that belong to the map."""
    record: StateRecord | None = scene.state
    if record is None:
        return ""
    if choices.statecheck == "loss":
        return _loss_words(record)
    if choices.statecheck == "deviation":
        return (
            f"One sprinkling, pairs with |τ| ≤ {record.longest:g} and both light-cone distances "
            f"over {record.shortest:.2g}; hollow: under {FEW} pairs."
        )
    sets = len(record.fits)
    error = (
        f"Means of {sets} sprinklings with standard errors"
        if sets > 1
        else "One sprinkling: what all its pairs share is in no error"
    )
    if record.config.mass > 0:
        return f"{error}. The law is the massless one. Bars: scatter of pairs."
    return f"{error}. Bars: scatter of pairs; squares timelike; hollow not fitted."


def _loss_words(record: StateRecord) -> str:
    """How much is lost, and whether W is positive and the patch pure."""
    lost = f"{100.0 * record.lost:.3g} %"
    rows = "" if record.exact_rows else " Rows from random signs."
    if record.positivity is None or record.purity is None:
        return f"The cut takes {lost} of ‖iΔ‖. Positivity and purity: too many modes.{rows}"
    low, pure = (
        f"{value:.0e}".replace("-", "−")
        for value in (record.positivity.lowest, record.purity.entropy)
    )
    return (
        f"The cut takes {lost} of ‖iΔ‖. Lowest eigenvalue of W {low}; S of the patch {pure}.{rows}"
    )
