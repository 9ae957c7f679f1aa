"""Where the elements and the regions are."""

from __future__ import annotations

import math
from collections.abc import Sequence
from typing import NamedTuple

import holoviews as hv
import numpy as np
from numpy.typing import ArrayLike

from lozenge_dashboard.palette import MARKERS, Look
from lozenge_dashboard.records import Choices, Scene
from lozenge_dashboard.views.marks import Dust, Limits, Marks, Strokes, Words, overlay
from lozenge_engine.geometry import Region, region_letter
from lozenge_engine.notation import thousands
from lozenge_engine.result import Result

__all__ = ["BLANK", "Sprinkling", "caution", "draw", "read"]

GROUP = "Sprinkling"
LIMITS = Limits(-1.06, 1.06, -1.06, 1.06)
PATCH = Region(half_width=1.0)


class Sprinkling(NamedTuple):
    """Elements outside the regions, outlines, elements inside, letters."""

    dust: Dust
    outlines: Strokes
    inside: Marks
    letters: Words
    limits: Limits = LIMITS


BLANK = Sprinkling(Dust(np.empty(0), np.empty(0)), Strokes.of(), Marks.of(), Words.of())
"""The view before its first record."""


def _outline(region: Region, colour: str, width: float, dash: str) -> tuple[ArrayLike, ...]:
    """The four sides of a region."""
    t, x = zip(*region.corners, strict=True)
    return x, t, (*x[1:], x[0]), (*t[1:], t[0]), colour, width, dash


def _size(elements: int) -> float:
    """Diameter of an element in pixels: smaller when there are many, never below 2."""
    return max(2.0, min(5.0, 5.0 * math.sqrt(1000.0 / max(elements, 1))))


def _letters(regions: Sequence[Region], look: Look) -> Words:
    """Each region's letter above its future corner."""
    tops = [region.corners[0] for region in regions]
    return Words.of(*((x, t + 0.06, region_letter(i), look.ink) for i, (t, x) in enumerate(tops)))


def read(scene: Scene, choices: Choices, look: Look) -> Sprinkling:
    """Lay out the elements of the sprinkling in front."""
    result: Result = scene.result
    t, x = (result.u + result.v) / math.sqrt(2), (result.u - result.v) / math.sqrt(2)
    size = _size(result.elements)
    free = result.region_of < 0
    inside = (
        (x[result.region_of == i], t[result.region_of == i], look.regions[i], MARKERS[i], size, 1.0)
        for i in range(len(result.regions))
    )
    kept = scene.reference.result.config.regions if scene.reference else ()
    regions = result.config.regions
    return Sprinkling(
        dust=Dust(x[free], t[free]),
        inside=Marks.of(*inside),
        outlines=Strokes.of(
            _outline(PATCH, look.muted, 1.0, "solid"),
            *(_outline(r, look.kept, 3.0, "solid") for r in kept),
            *(_outline(r, look.regions[i], 2.0, "solid") for i, r in enumerate(regions)),
        ),
        letters=_letters(regions, look),
    )


def draw(data: Sprinkling) -> hv.Overlay:
    """Draw it."""
    return overlay(GROUP, data.dust, data.outlines, data.inside, data.letters)


def caution(scene: Scene, choices: Choices) -> str:
    """Say which points these are, and which regions hold too few."""
    result, plan = scene.result, scene.setup.sweeps
    few = [
        region_letter(i) for i, r in enumerate(result.regions) if r.counted < plan.smallest_region
    ]
    points = scene.setup.points
    source = {
        "poisson": f"Poisson sprinkling, seed {points.seed}",
        "fixed": f"fixed count, seed {points.seed}",
        "lattice": f"Turned lattice, {points.oversampling} times the density",
        "sobol": f"Sobol set, {points.oversampling} times the density",
        "file": f"points of {points.file}",
    }[points.kind]
    held = "points" if points.quasi_uniform else "elements"
    text = f"{source}: {thousands(result.elements)} {held}."
    if points.curved:
        text += f" Curvature {points.curvature}, radius {points.radius:g}."
    if few:
        text += f" {', '.join(few)}: fewer than {plan.smallest_region}, below the scaling regime."
    return text
