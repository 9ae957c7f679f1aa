"""How entropy grows with scale: the density and the size sweep, never mixed.

The data, and beside them the twin and the chain as lines; or the data minus the twin.
"""

from __future__ import annotations

import math
from typing import TYPE_CHECKING, Any, NamedTuple

import holoviews as hv
import numpy as np
from numpy.typing import NDArray

from lozenge_dashboard.palette import UNION_MARKERS, Look
from lozenge_dashboard.records import Choices, Scene, spread
from lozenge_dashboard.views.beside import barred, beside_of, measured
from lozenge_dashboard.views.marks import Limits, Marks, Strokes, Words, overlay, polyline
from lozenge_engine.notation import with_error

if TYPE_CHECKING:
    from lozenge_engine.references import Beside
    from lozenge_engine.sweeps import ScalingCurve
    from lozenge_engine.twinline import Fit, Minus

__all__ = ["BLANK", "Scaling", "caution", "draw", "read"]

GROUP = "Scaling"
EMPTY = Limits(1.0, 4.0, 0.0, 4.0)
LABELS = ("scale ln(ℓ/a)", "entropy S, all regions (nats)")
MINUS_LABELS = ("scale ln(ℓ/a)", "S minus twin, all regions (nats)")
LINE = 0.085
"""Height of a line of words, as a fraction of the figure."""


class Scaling(NamedTuple):
    """Entropies with errors, the fit, the reference slope and what the fit says."""

    lines: Strokes
    marks: Marks
    words: Words
    limits: Limits
    labels: tuple[str, str] = LABELS


BLANK = Scaling(Strokes.of(), Marks.of(), Words.of(), EMPTY)
"""The view before its first record."""


def _known(curve: ScalingCurve) -> NDArray[np.bool_]:
    """Which points have a value."""
    return np.isfinite(spread(curve.entropy).mean)


def _bars(curve: ScalingCurve, colour: str) -> tuple[Any, ...]:
    """Error bars of the points that have one."""
    mean, error = spread(curve.entropy)
    some = np.isfinite(mean) & np.isfinite(error)
    x, y, e = curve.x[some], mean[some], error[some]
    return x, y - e, x, y + e, colour, 2.0, "solid"


def _points(curve: ScalingCurve, colour: str, size: float) -> tuple[Any, ...]:
    """Marks, hollow where a point is left out of the fit."""
    some = _known(curve)
    return (
        curve.x[some],
        spread(curve.entropy).mean[some],
        colour,
        UNION_MARKERS["support"],
        size,
        curve.used[some].astype(float),
    )


def _window(curve: ScalingCurve) -> tuple[float, float]:
    """Range of ln(l/a) that the fit uses."""
    used = curve.x[curve.used]
    return float(used.min()), float(used.max())


def _fit(curve: ScalingCurve, colour: str, width: float) -> list[tuple[Any, ...]]:
    """The fitted line over its window."""
    if curve.fit is None:
        return []
    low, high = _window(curve)
    first, last = (curve.fit.intercept + curve.fit.slope * x for x in (low, high))
    return [(low, first, high, last, colour, width, "solid")]


def _reference(curve: ScalingCurve, look: Look) -> list[tuple[Any, ...]]:
    """K/3 through the middle of the points that are used."""
    some = _known(curve) & curve.used
    if curve.reference_slope is None or not some.any():
        return []
    x, y = float(curve.x[some].mean()), float(spread(curve.entropy).mean[some].mean())
    low, high = float(curve.x.min()), float(curve.x.max())
    slope = curve.reference_slope
    return [(low, y + slope * (low - x), high, y + slope * (high - x), look.accent, 1.5, "dashed")]


def _limits(curve: ScalingCurve, lines: int, *values: tuple[Any, Any]) -> Limits:
    """Around the whole plan in x and the known (value, error) columns in y, with room above."""
    ends = np.concatenate([end for y, e in values for end in (y - e, y + e)])
    ends = ends[np.isfinite(ends)]
    if not ends.size:
        return EMPTY._replace(x_low=float(curve.x.min()) - 0.1, x_high=float(curve.x.max()) + 0.1)
    low, high = float(ends.min()), float(ends.max())
    pad = max(0.12 * (high - low), 0.05)
    span = max(float(np.ptp(curve.x)), 0.2)
    words = LINE * (lines + 1)
    return Limits(
        float(curve.x.min()) - 0.08 * span,
        float(curve.x.max()) + 0.08 * span,
        low - pad,
        high + pad + words / (1.0 - words) * (high - low + 2 * pad),
    )


def _data(curve: ScalingCurve) -> tuple[Any, Any]:
    """Means and errors, with 0 for an error that is not known."""
    mean, error = spread(curve.entropy)
    return mean, np.nan_to_num(error)


def _quality(fit: Fit) -> str:
    """How well a line fits."""
    known = fit.dof > 0 and math.isfinite(fit.chi2)
    return f"χ²/dof {fit.chi2:.1f}/{fit.dof}, p = {fit.p_value:.2g}" if known else "χ² not known"


def _sentences(curve: ScalingCurve, beside: Beside | None, look: Look) -> list[tuple[str, str]]:
    """What the fit and the references say, with the digits that their errors allow."""
    lines = []
    if curve.fit is not None:
        fit = curve.fit
        low, high = _window(curve)
        lines += [
            (f"b = {with_error(fit.slope, fit.slope_error)}, {_quality(fit)}", look.ink),
            (f"{fit.points} points, ln(ℓ/a) from {low:.2f} to {high:.2f}", look.muted),
        ]
    if curve.reference_slope is not None and curve.fit is not None:
        lines.append((f"dashed: slope {_fraction(curve.reference_slope)}", look.accent))
    if beside is not None and beside.twin is not None:
        twin = beside.twin
        known = math.isfinite(twin.slope)
        slope = f"slope {measured(twin.slope, twin.slope_error)}" if known else "slope to come"
        sets = f", {twin.oversampling}×" if twin.oversampling else ""
        lines.append((f"twin{sets}: {slope}", look.accent))
    if beside is not None and beside.chain is not None:
        chain = beside.chain
        named = "slope" if math.isfinite(chain.error) else "mean slope"
        text = f"dot-dashed: chain, {named} {measured(chain.slope, chain.error)}"
        lines.append((text, look.muted))
    return lines


def _references(curve: ScalingCurve, beside: Beside | None, look: Look) -> list[tuple[Any, ...]]:
    """The twin and the chain as lines, and where a mass begins to count."""
    parts: list[tuple[Any, ...]] = []
    if beside is not None and beside.twin is not None:
        parts += barred(curve.x, beside.twin.value, beside.twin.error, look.accent)
    if beside is not None and beside.chain is not None:
        chain = beside.chain
        parts.append(polyline(chain.x, chain.value, look.muted, 2.0, "dotdash"))
        if math.isfinite(chain.saturation):
            at = chain.saturation
            parts.append((at, -1e3, at, 1e3, look.muted, 1.0, "dotted"))
    return parts


def _fraction(slope: float) -> str:
    """A slope as thirds where it is one."""
    thirds = round(3 * slope)
    return f"{thirds}/3" if math.isclose(3 * slope, thirds) else f"{slope:.3f}"


def read(scene: Scene, choices: Choices, look: Look) -> Scaling:
    """Lay out the sweep that the switch names, or its difference from the twin."""
    curve: ScalingCurve | None = getattr(scene, choices.scaling)
    beside = beside_of(scene, choices)
    if choices.difference:
        minus = beside.twin.minus if beside is not None and beside.twin is not None else None
        return _difference(curve, minus, look)
    old: ScalingCurve | None = getattr(scene.reference, choices.scaling, None)
    both = ((old, look.kept, 7.0), (curve, look.ink, 9.0))
    curves = [(each, colour, size) for each, colour, size in both if each is not None]
    sentences = _sentences(curve, beside, look) if curve is not None else []
    limits = EMPTY
    for each, _, _ in curves:
        shown = [_data(each)]
        if each is curve and beside is not None and beside.twin is not None:
            shown.append((beside.twin.value, np.nan_to_num(beside.twin.error)))
        if each is curve and beside is not None and beside.chain is not None:
            shown.append((beside.chain.value, 0.0))
        around = _limits(each, len(sentences), *shown)
        limits = around if limits is EMPTY else limits.around(around)
    return Scaling(
        lines=Strokes.of(
            *(part for each, colour, _ in curves for part in _fit(each, colour, 2.0)),
            *(_reference(curve, look) if curve is not None else []),
            *(_references(curve, beside, look) if curve is not None else []),
            *(_bars(each, colour) for each, colour, _ in curves),
        ),
        marks=Marks.of(*(_points(each, colour, size) for each, colour, size in curves)),
        words=_words(sentences, limits),
        limits=limits,
    )


def _words(sentences: list[tuple[str, str]], limits: Limits) -> Words:
    """Lines of words in the upper left corner."""
    step = LINE * (limits.y_high - limits.y_low)
    return Words.of(
        *(
            (limits.x_low, limits.y_high - step * (i + 0.7), text, colour)
            for i, (text, colour) in enumerate(sentences)
        )
    )


def _difference(curve: ScalingCurve | None, minus: Minus | None, look: Look) -> Scaling:
    """Lay out data minus twin, with its own line."""
    if curve is None or minus is None:
        return BLANK._replace(labels=MINUS_LABELS)
    some = np.isfinite(minus.value)
    x, y, e = curve.x[some], minus.value[some], np.nan_to_num(minus.error[some])
    sentences = _difference_words(curve, minus.fit, look)
    limits = _limits(curve, len(sentences), (y, e), (np.zeros(1), 0.0))
    fit: list[tuple[Any, ...]] = []
    if minus.fit is not None:
        low, high = _window(curve)
        first, last = (minus.fit.intercept + minus.fit.slope * at for at in (low, high))
        fit.append((low, first, high, last, look.ink, 2.0, "solid"))
    marker, fill = UNION_MARKERS["support"], curve.used[some].astype(float)
    return Scaling(
        lines=Strokes.of(
            (limits.x_low, 0.0, limits.x_high, 0.0, look.accent, 2.0, "solid"),
            *fit,
            (x, y - e, x, y + e, look.ink, 2.0, "solid"),
        ),
        marks=Marks.of((x, y, look.ink, marker, 9.0, fill)),
        words=_words(sentences, limits),
        limits=limits,
        labels=MINUS_LABELS,
    )


def _difference_words(curve: ScalingCurve, fit: Fit | None, look: Look) -> list[tuple[str, str]]:
    """What the line through data minus twin says."""
    if fit is None:
        return [("no slope yet", look.muted)]
    low, high = _window(curve)
    slope = with_error(fit.slope, fit.slope_error)
    return [
        (f"slope {slope}, {_quality(fit)}", look.ink),
        (f"{abs(fit.slope) / fit.slope_error:.1f} errors from a constant", look.ink),
        (f"{fit.points} points, ln(ℓ/a) from {low:.2f} to {high:.2f}", look.muted),
    ]


def draw(data: Scaling) -> hv.Overlay:
    """Draw it."""
    return overlay(GROUP, data.lines, data.marks, data.words)


def caution(scene: Scene, choices: Choices) -> str:
    """Say how far the sweep is, what is left out and what the slope does not show."""
    curve: ScalingCurve | None = getattr(scene, choices.scaling)
    if curve is None:
        return "Waiting for the first sprinklings of this sweep."
    left = int((_known(curve) & ~curve.used).sum())
    parts = []
    if curve.done < curve.planned:
        parts.append(f"{curve.done} of {curve.planned} sprinklings")
    if left:
        parts.append(
            f"hollow: under {scene.setup.sweeps.smallest_region} elements per region, left out"
        )
    parts.extend(curve.left_out)
    parts.extend(_reference_cautions(beside_of(scene, choices), choices))
    if choices.difference:
        return "; ".join(parts) + "."
    if curve.note:
        parts.append(curve.note)
    elif choices.scaling == "density":
        parts.append("K/3 is asymptotic: small regions, far from the edge")
    else:
        parts.append("the place in the patch changes too: no K/3")
    return "; ".join(parts) + "."


def _reference_cautions(beside: Beside | None, choices: Choices) -> list[str]:
    """What to be careful about in the references that are shown."""
    parts = []
    if choices.twin and (beside is None or beside.twin is None):
        parts.append("the twin is being computed")
    elif choices.difference:
        parts.append("errors of data and twin added; a slope left over is not geometry")
    if choices.chain and not choices.difference:
        if beside is not None and beside.failed:
            parts.append("no chain here: the column says why")
        elif beside is None or beside.chain is None:
            parts.append("the chain is being computed")
        else:
            mass = ", dotted: m ℓ = 1" if math.isfinite(beside.chain.saturation) else ""
            parts.append(f"chain: own constant, shifted to the data's mean{mass}")
    return parts
