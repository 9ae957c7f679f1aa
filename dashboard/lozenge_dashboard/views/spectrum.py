"""The spectrum of i Delta on the patch and on the regions, with the cuts of both stages."""

from __future__ import annotations

from typing import Any, NamedTuple

import holoviews as hv
import numpy as np

from lozenge_dashboard.palette import MARKERS, PATCH_MARKER, Look
from lozenge_dashboard.records import Choices, Scene
from lozenge_dashboard.views.beside import front_of
from lozenge_dashboard.views.marks import Limits, Marks, Strokes, Words, overlay, polyline
from lozenge_engine.geometry import region_letter
from lozenge_engine.result import Result

__all__ = ["BLANK", "Spectrum", "caution", "draw", "read"]

GROUP = "Spectrum"
FIRST_RANK = 0.8


class Spectrum(NamedTuple):
    """Eigenvalues by rank, the continuum's as a line behind, and cuts."""

    lines: Strokes
    eigenvalues: Marks
    names: Words
    limits: Limits


BLANK = Spectrum(Strokes.of(), Marks.of(), Words.of(), Limits(0.8, 200.0, 1.0, 1000.0))
"""The view before its first record."""


def _parts(result: Result, look: Look) -> list[tuple[Any, ...]]:
    """Marks of the patch and then of each region."""

    def part(values: np.ndarray, kept: np.ndarray, colour: str, marker: str) -> tuple[Any, ...]:
        return np.arange(1, values.size + 1), values, colour, marker, 5.0, kept.astype(float)

    patch = result.patch
    return [part(patch.eigenvalues, patch.kept, look.muted, PATCH_MARKER)] + [
        part(r.eigenvalues, r.kept, look.regions[i], MARKERS[i])
        for i, r in enumerate(result.regions)
    ]


def _kept_parts(scene: Scene, look: Look) -> list[tuple[Any, ...]]:
    """The eigenvalues of the scene kept for comparison, in grey."""
    if scene.reference is None:
        return []
    return [
        (rank, values, look.kept, marker, 3.5, fill)
        for rank, values, _, marker, _, fill in _parts(scene.reference.result, look)
    ]


def _limits(scene: Scene, cuts: list[float]) -> Limits:
    """From below the lowest cut to above the largest eigenvalue."""
    result = scene.result
    values = [result.patch.eigenvalues, *(r.eigenvalues for r in result.regions)]
    ranks = max(v.size for v in values)
    top = max((float(v[0]) for v in values if v.size), default=1.0)
    shown = [float(v[v > 0].min()) for v in values if (v > 0).any()]
    bottom = max(0.5 * min(cuts, default=top * 1e-3), 0.8 * min(shown, default=top * 1e-3))
    return Limits(FIRST_RANK, 1.6 * max(ranks, 60), bottom, 1.8 * top)


def _twin(scene: Scene, choices: Choices, look: Look) -> list[tuple[Any, ...]]:
    """The twin's spectra in the units of the set in front, with errors as thin lines."""
    twin = front_of(scene, choices)
    if twin is None:
        return []
    ratio = scene.result.oversampling
    spectra = [(twin.patch, twin.patch_spread, look.accent)]
    spectra += [
        (values, spread, look.regions[i])
        for i, (values, spread) in enumerate(zip(twin.regions, twin.regions_spread, strict=True))
    ]
    parts = []
    for values, spread, colour in spectra:
        rank = np.arange(1, values.size + 1)
        for moved, width in ((0.0, 2.0), (-1.0, 0.75), (1.0, 0.75)):
            y = ratio * (values + moved * spread)
            some = y > 0  # the axis is logarithmic
            parts.append(polyline(rank[some], y[some], colour, width, "solid"))
    return parts


def read(scene: Scene, choices: Choices, look: Look) -> Spectrum:
    """Lay out the spectra of the sprinkling in front."""
    result = scene.result
    cuts = [(result.patch.cut, look.muted, "patch")] + [
        (r.cut, look.regions[i], region_letter(i)) for i, r in enumerate(result.regions)
    ]
    cuts = [cut for cut in cuts if cut[0] > 0]
    limits = _limits(scene, [value for value, _, _ in cuts])
    rank = np.arange(1, scene.continuum.size + 1)
    # Names of the cuts stand side by side along their lines, since the cuts may coincide.
    places = limits.x_low * 1.15 * 1.45 ** np.arange(len(cuts))
    return Spectrum(
        lines=Strokes.of(
            polyline(rank, scene.continuum, look.ink, 1.5, "solid"),
            *_twin(scene, choices, look),
            *(
                (limits.x_low, value, limits.x_high * 4, value, colour, 1.5, "dashed")
                for value, colour, _ in cuts
            ),
        ),
        eigenvalues=Marks.of(*_kept_parts(scene, look), *_parts(result, look)),
        names=Words.of(
            *(
                (places[i] * (1.6 if i else 1.0), value, name, colour)
                for i, (value, colour, name) in enumerate(cuts)
            )
        ),
        limits=limits,
    )


def draw(data: Spectrum) -> hv.Overlay:
    """Draw it."""
    return overlay(GROUP, data.lines, data.eigenvalues, data.names)


def caution(scene: Scene, choices: Choices) -> str:
    """Say whether the modes are certified, and what the line behind is."""
    result = scene.result
    if not result.certificate.met:
        return "Certificate not met: " + "; ".join(result.certificate.reasons) + "."
    mass = ", massless" if scene.setup.mass > 0 else ""
    certified = f"Certified complete above {result.patch.floor:.3g}."
    if scene.setup.points.curved:  # its continuum has no closed form
        twin = "" if front_of(scene, choices) is None else "; lines: twin"
        return f"No exact line in a curved patch{twin}; dashed: cuts. {certified}"
    if front_of(scene, choices) is None:
        return f"Line: exact continuum spectrum{mass}; dashed: cuts. {certified}"
    return f"Lines: exact continuum{mass}; twin of patch (accent), of regions (hues). {certified}"
