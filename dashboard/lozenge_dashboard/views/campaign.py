"""What a campaign found: its quantity along the axis, with fits and errors."""

from __future__ import annotations

import math
from typing import Any, NamedTuple

import holoviews as hv
import numpy as np

from lozenge_dashboard.campaigns import Watch
from lozenge_dashboard.palette import MARKERS, Look
from lozenge_dashboard.records import CampaignChoices
from lozenge_dashboard.views.marks import Limits, Marks, Strokes, Words, overlay
from lozenge_dashboard.views.pieces import CAP, EMPTY, NO_TICKS, Line, bare, bars, room, written
from lozenge_engine.estimates import CellEstimate
from lozenge_engine.notation import thousands, with_error
from lozenge_engine.series import series_of

__all__ = [
    "AXIS_WORDS",
    "BLANK",
    "GROUP",
    "SCALE",
    "WORDY",
    "Curve",
    "Quantity",
    "caution",
    "colours_of",
    "curves",
    "draw",
    "fraction",
    "named",
    "read",
    "shift_words",
]

GROUP = "Quantity"
AXIS_WORDS = {
    "density": "density (per area)",
    "half_width": "half-width h (patch half-widths)",
    "separation": "separation d (patch half-widths)",
    "mass": "mass m (1/half-width)",
    "region_count": "region count K",
    "truncation_mode": "truncation",
    "alpha": "multiple α",
    "order": "Rényi order q",
}
SCALE = "scale ln(ℓ/a)"
MUTUAL = "mutual information I (nats)"
WORDY = 7
"""Most lines of words in a figure."""
BESIDE = 0.022
"""Between the marks of two placement classes at one place, as a fraction of the axis."""
MARK = 0.025
"""Half a mark as a fraction of a small figure's height: shorter error bars cannot be seen."""


class Quantity(NamedTuple):
    """Means with errors along an axis, lines, and what they say."""

    lines: Strokes
    marks: Marks
    words: Words
    limits: Limits
    x_ticks: tuple[tuple[float, str], ...] = ()
    labels: tuple[str, str] = ("", "")
    ticks: tuple[tuple[float, str], ...] = ()


BLANK = Quantity(
    Strokes.of(), Marks.of(), Words.of(), EMPTY, x_ticks=NO_TICKS, labels=("", ""), ticks=NO_TICKS
)
"""A view that has nothing to show: no scale is invented for it."""


class Curve(NamedTuple):
    """The cells that differ by the varied axis and by placement only.

    Attributes
    ----------
    label : str
        Values of the other axis; empty if there is none.
    cells : tuple of int
        Indices of `Design.cells`.
    x : tuple of float
        Abscissa of each.
    used : tuple of bool
        Whether a fit uses it; all true where there is none to make.
    """

    label: str
    cells: tuple[int, ...]
    x: tuple[float, ...]
    used: tuple[bool, ...]


def varied(watch: Watch) -> str:
    """The axis that the figure runs along: the one of the fits, or the first."""
    series = series_of(watch.design)
    return series[0].axis if series else watch.plan.axes[0].name


def curves(watch: Watch) -> list[Curve]:
    """The campaign's cells as curves."""
    layout = watch.design
    series = series_of(layout)
    if series:
        return [
            Curve(
                s.label,
                s.cells,
                tuple(layout.cells[i].x for i in s.cells),
                tuple(i in s.used for i in s.cells),
            )
            for s in series
        ]
    axis = watch.plan.axes[0]
    groups: dict[str, list[int]] = {}
    for i, cell in enumerate(layout.cells):
        values = layout.points[cell.point].values
        label = ", ".join(f"{k} {v}" for k, v in values.items() if k != axis.name)
        groups.setdefault(label, []).append(i)

    def place(i: int) -> float:
        value = layout.points[layout.cells[i].point].values[axis.name]
        return float(axis.values.index(value)) if isinstance(value, str) else float(value)

    return [
        Curve(label, tuple(own), tuple(map(place, own)), (True,) * len(own))
        for label, own in groups.items()
    ]


def shift_words(shift: tuple[float, float]) -> str:
    """A placement class in words."""
    return f"shift {shift[0]:g}, {shift[1]:g}".replace("-", "−")


def _estimate(cell: CellEstimate, choices: CampaignChoices) -> Any:
    """The estimate that the switch names; None for I of one region."""
    return cell.entropy if choices.quantity == "entropy" else cell.mutual_information


def colours_of(count: int, look: Look) -> tuple[str, ...]:
    """Colours of the curves: ink for one, hues for several."""
    return (look.ink,) if count == 1 else tuple(look.regions[k % 8] for k in range(count))


def beside(watch: Watch, limits: Limits, x: Any) -> list[float]:
    """Shift of each placement class's marks along the axis, so that none hides another."""
    classes = len(watch.plan.placements)
    places = np.unique(x)
    width = limits.x_high - limits.x_low
    step = min(BESIDE * width, 0.08 * width / max(1, classes - 1))
    if places.size > 1:
        step = min(step, 0.6 * float(np.diff(places).min()) / classes)
    return [step * (k - (classes - 1) / 2) for k in range(classes)]


def _sentences(watch: Watch, found: list[Curve], look: Look, *, fits: bool) -> list[Line]:
    """What the fits say, and which mark is which placement."""
    lines: list[Line] = []
    colours = colours_of(len(found), look)
    of = {fit.label: fit for fit in watch.estimates.fits} if fits else {}
    for curve, colour in zip(found, colours, strict=True):
        fit = of.get(curve.label)
        said = [named(curve.label)] if curve.label else []
        if fit is not None and fit.report is not None:
            best = fit.report.fit
            said.append(f"b = {with_error(best.slope, best.slope_error)}")
            if math.isfinite(best.p_value):
                said.append(f"χ²/dof {best.chi2:.1f}/{best.dof}, p = {best.p_value:.2g}")
        if said:
            lines.append(
                (
                    ": ".join([said[0], ", ".join(said[1:])])
                    if curve.label and said[1:]
                    else ", ".join(said),
                    colour,
                    None,
                )
            )
    fitted = [fit for fit in of.values() if fit.report is not None]
    slopes = {fit.reference for fit in fitted if fit.reference is not None}
    if len(slopes) == 1 and len(found) == 1:
        lines.append((f"dashed: slope {fraction(slopes.pop())}", look.accent, None))
    if len(watch.plan.placements) > 1:
        for k, shift in enumerate(watch.plan.placements):
            lines.append((shift_words(shift), look.muted, MARKERS[k % len(MARKERS)]))
    if len(lines) > WORDY:
        lines = [*lines[: WORDY - 1], ("… the rest stands below", look.muted, None)]
    return lines


def named(label: str) -> str:
    """The other axis' value as it is said in a figure."""
    return label.replace("_", " ").replace("region count ", "K = ")


def fraction(slope: float) -> str:
    """A slope as thirds where it is one."""
    thirds = round(3 * slope)
    return f"{thirds}/3" if math.isclose(3 * slope, thirds) else f"{slope:.3f}"


def read(watch: Watch, choices: CampaignChoices, look: Look) -> Quantity:
    """Lay out the quantity that the switch names."""
    found = curves(watch)
    numbers = watch.estimates.cells
    every = [i for curve in found for i in curve.cells]
    known = [e for i in every if (e := _estimate(numbers[i], choices)) and math.isfinite(e.mean)]
    if not known:
        return BLANK
    fits = choices.quantity == "entropy" and bool(watch.estimates.fits)
    lines = _sentences(watch, found, look, fits=fits)
    axis = varied(watch)
    label = SCALE if axis in ("density", "half_width") else AXIS_WORDS[axis]
    x_all = np.array([x for curve in found for x in curve.x])
    ends = [e.mean + s * np.nan_to_num(e.error) for e in known for s in (-1, 1)]
    low, high = float(min(ends)), float(max(ends))
    if choices.quantity == "mutual":
        low = min(low, 0.0)
    limits = room(
        x_all, low, high, len(lines), least=0.02 if choices.quantity == "mutual" else 0.05
    )
    cap = CAP * (limits.x_high - limits.x_low)
    shifts = beside(watch, limits, x_all)
    strokes: list[tuple[Any, ...]] = []
    marks: list[tuple[Any, ...]] = []
    for curve, colour in zip(found, colours_of(len(found), look), strict=True):
        placed = [watch.design.cells[i].placement for i in curve.cells]
        x = np.array(curve.x) + np.array([shifts[k] for k in placed])
        of = [_estimate(numbers[i], choices) for i in curve.cells]
        y = np.array([math.nan if e is None else e.mean for e in of])
        error = np.array([math.nan if e is None else e.error for e in of])
        strokes += bars(x, y, error, colour, cap)
        some = np.isfinite(y)
        marker = np.array([MARKERS[k % len(MARKERS)] for k in placed], object)
        fill = np.array(curve.used, float) if fits else np.ones(x.size)
        marks.append((x[some], y[some], colour, marker[some], 7.0, fill[some]))
    if fits:
        strokes = _fit_lines(watch, found, look, shifts) + strokes
    if choices.quantity == "mutual":
        strokes.insert(0, (limits.x_low, 0.0, limits.x_high, 0.0, look.rule, 1.0, "solid"))
    keys, words = written(limits, lines, look)
    return Quantity(
        Strokes.of(*strokes),
        Marks.of(*marks, *keys),
        words,
        limits,
        _categories(watch, axis),
        (label, MUTUAL if choices.quantity == "mutual" else _entropy_label(watch)),
    )


def _entropy_label(watch: Watch) -> str:
    return "entropy S, all regions (nats)" if several(watch) else "entropy S (nats)"


def several(watch: Watch) -> bool:
    """Whether a point has more than one region."""
    return any(len(cell.config.regions) > 1 for cell in watch.design.cells)


def _categories(watch: Watch, axis: str) -> tuple[tuple[float, str], ...]:
    """Ticks of an axis of words or of a few whole numbers."""
    values = next(a.values for a in watch.plan.axes if a.name == axis)
    if axis == "truncation_mode":
        return tuple((float(k), str(v).replace("_", " ")) for k, v in enumerate(values))
    if axis == "region_count":
        return tuple((float(v), str(v)) for v in values)
    return ()


def _fit_lines(
    watch: Watch, found: list[Curve], look: Look, shifts: list[float]
) -> list[tuple[Any, ...]]:
    """Fitted lines over their windows, and the reference slope through their middle."""
    strokes: list[tuple[Any, ...]] = []
    for fit, curve, colour in zip(
        watch.estimates.fits, found, colours_of(len(found), look), strict=True
    ):
        used = [x for x, own in zip(curve.x, curve.used, strict=True) if own]
        if fit.report is None or not used:
            continue
        best = fit.report.fit
        low, high = min(used), max(used)
        for k, constant, _ in best.constants:
            first, last = (constant + best.slope * x for x in (low, high))
            ends = low + shifts[k], high + shifts[k]
            strokes.append((ends[0], first, ends[1], last, colour, 1.5, "solid"))
        if fit.reference is not None:
            middle = (low + high) / 2
            y = best.constants[0][1] + best.slope * middle
            first, last = (y + fit.reference * (x - middle) for x in (low, high))
            strokes.append((low, first, high, last, look.accent, 1.5, "dashed"))
    return strokes


def draw(data: Quantity) -> hv.Overlay:
    """Draw it."""
    return bare(overlay(GROUP, data.lines, data.marks, data.words), data)


def caution(watch: Watch, choices: CampaignChoices) -> str:
    """Say what the marks stand for and what the errors leave out."""
    numbers = watch.estimates.cells
    counts = [cell.entropy.count for cell in numbers]
    if choices.quantity == "mutual" and not several(watch):
        return "One region: there is no mutual information."
    if not any(counts):
        return "Waiting for the first realisation."
    parts = []
    if choices.quantity == "entropy" and watch.estimates.fits:
        out = sum(not used for curve in curves(watch) for used in curve.used)
        if out:
            fitted = any(fit.report is not None for fit in watch.estimates.fits)
            why = "left out of the fit" if fitted else "too few for a fit"
            parts.append(f"hollow: under {watch.plan.smallest_region} elements, {why}")
    if min(counts) == 1:
        parts.append("one realisation: no error is known")
    if min(counts) == 0:
        parts.append("some points wait for their first realisation")
    marked = sum(cell.untrusted + cell.missing for cell in numbers)
    if marked:
        parts.append(f"{thousands(marked)} samples carry a mark or have no number (table)")
    parts += _regions_words(watch, choices)
    if _hidden(watch, choices):
        parts.append("most errors are smaller than their marks")
    if any(len(s.cells) > 1 for s in watch.design.sprinklings):
        parts.append("points share sprinklings: errors are correlated")
    text = "; ".join(parts) or "bars: one standard error"
    return text[0].upper() + text[1:] + "."


def _regions_words(watch: Watch, choices: CampaignChoices) -> list[str]:
    """What several regions, and their places, ask to be said."""
    parts = []
    if several(watch):
        pair = "nearest pair, " if choices.quantity == "mutual" else ""
        parts.append(f"{pair}union by support (direct sum: table)")
    if varied(watch) == "separation":
        parts.append("touching regions and regions near the patch's edge are another regime")
    if len(watch.plan.placements) > 1:
        parts.append("placements stand side by side")
    return parts


def _hidden(watch: Watch, choices: CampaignChoices) -> bool:
    """Whether most error bars end within their marks."""
    found = [e for cell in watch.estimates.cells if (e := _estimate(cell, choices))]
    means, errors = (np.array([getattr(e, name) for e in found]) for name in ("mean", "error"))
    errors = errors[np.isfinite(errors)]
    if not errors.size:
        return False
    low = 0.0 if choices.quantity == "mutual" else float(np.nanmin(means))
    return bool(np.median(errors) < MARK * (float(np.nanmax(means)) - low))
