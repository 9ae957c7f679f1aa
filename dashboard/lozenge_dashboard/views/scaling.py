"""How entropy grows with scale: the density and the size sweep, never mixed."""

from __future__ import annotations

import math
from typing import TYPE_CHECKING, Any, NamedTuple

import holoviews as hv
import numpy as np
from numpy.typing import NDArray

from lozenge_dashboard.palette import UNION_MARKERS, Look
from lozenge_dashboard.records import Choices, Scene, spread
from lozenge_dashboard.views.marks import Limits, Marks, Strokes, Words, overlay
from lozenge_engine.notation import with_error

if TYPE_CHECKING:
    from lozenge_engine.sweeps import ScalingCurve

__all__ = ["BLANK", "Scaling", "caution", "draw", "read"]

GROUP = "Scaling"
EMPTY = Limits(1.0, 4.0, 0.0, 4.0)


class Scaling(NamedTuple):
    """Entropies with errors, the fit, the reference slope and what the fit says."""

    lines: Strokes
    marks: Marks
    words: Words
    limits: Limits


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


def _limits(curve: ScalingCurve) -> Limits:
    """Around the whole plan in x and the known values in y."""
    some = _known(curve)
    if not some.any():
        return EMPTY._replace(x_low=float(curve.x.min()) - 0.1, x_high=float(curve.x.max()) + 0.1)
    mean, error = spread(curve.entropy)
    error = np.nan_to_num(error)
    low, high = float((mean - error)[some].min()), float((mean + error)[some].max())
    pad = max(0.12 * (high - low), 0.05)
    span = max(float(np.ptp(curve.x)), 0.2)
    # Room above for two lines of words.
    return Limits(
        float(curve.x.min()) - 0.08 * span,
        float(curve.x.max()) + 0.08 * span,
        low - pad,
        high + pad + 0.35 * (high - low + 2 * pad),
    )


def _sentences(curve: ScalingCurve, look: Look) -> list[tuple[str, str]]:
    """What the fit says, with the digits that its error allows."""
    if curve.fit is None:
        return []
    fit = curve.fit
    low, high = _window(curve)
    known = fit.dof > 0 and math.isfinite(fit.chi2)
    quality = f"χ²/dof {fit.chi2:.1f}/{fit.dof}, p = {fit.p_value:.2g}" if known else "χ² not known"
    lines = [
        (f"b = {with_error(fit.slope, fit.slope_error)}, {quality}", look.ink),
        (f"{fit.points} points, ln(ℓ/a) from {low:.2f} to {high:.2f}", look.muted),
    ]
    if curve.reference_slope is not None:
        lines.append((f"dashed: slope {_fraction(curve.reference_slope)}", look.accent))
    return lines


def _fraction(slope: float) -> str:
    """A slope as thirds where it is one."""
    thirds = round(3 * slope)
    return f"{thirds}/3" if math.isclose(3 * slope, thirds) else f"{slope:.3f}"


def read(scene: Scene, choices: Choices, look: Look) -> Scaling:
    """Lay out the sweep that the switch names."""
    curve: ScalingCurve | None = getattr(scene, choices.scaling)
    old: ScalingCurve | None = getattr(scene.reference, choices.scaling, None)
    both = ((old, look.kept, 7.0), (curve, look.ink, 9.0))
    curves = [(each, colour, size) for each, colour, size in both if each is not None]
    limits = EMPTY
    for each, _, _ in curves:
        around = _limits(each)
        limits = around if limits is EMPTY else limits.around(around)
    sentences = _sentences(curve, look) if curve is not None else []
    step = 0.085 * (limits.y_high - limits.y_low)
    return Scaling(
        lines=Strokes.of(
            *(part for each, colour, _ in curves for part in _fit(each, colour, 2.0)),
            *(_reference(curve, look) if curve is not None else []),
            *(_bars(each, colour) for each, colour, _ in curves),
        ),
        marks=Marks.of(*(_points(each, colour, size) for each, colour, size in curves)),
        words=Words.of(
            *(
                (limits.x_low, limits.y_high - step * (i + 0.7), text, colour)
                for i, (text, colour) in enumerate(sentences)
            )
        ),
        limits=limits,
    )


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
    if curve.note:
        parts.append(curve.note)
    elif choices.scaling == "density":
        parts.append("K/3 is asymptotic: small regions, far from the edge")
    else:
        parts.append("the place in the patch changes too: no K/3")
    return "; ".join(parts) + "."
