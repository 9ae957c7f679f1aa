"""One mode on the sprinkling, coloured by its amount, and the continuum's beside it."""

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
from lozenge_engine.geometry import Region, region_letter
from lozenge_engine.modeview import ModeRecord

__all__ = ["AXES", "BLANK", "GROUP", "ModeShape", "caution", "draw", "read"]

GROUP = "ModeShape"
AXES: dict[str, Any] = {"x": "", "y": "", "offset": (9.0, 0.0)}
"""What `lozenge_dashboard.views.marks.register` takes."""
LABELS = ("position x (patch half-widths)", "time t (patch half-widths)")
PATCH = Region(half_width=1.0)
ROW = 4
"""Regions whose shares stand in one line."""
BETWEEN = 0.25
"""Between the two pictures, as a fraction of their width."""


class ModeShape(NamedTuple):
    """Elements without the mode, elements and grid with it, outlines and scale, words."""

    dust: Dust
    marks: Marks
    lines: Strokes
    words: Words
    limits: Limits
    x_ticks: tuple[tuple[float, str], ...] = ()
    labels: tuple[str, str] = ("", "")
    ticks: tuple[tuple[float, str], ...] = ()


BLANK = ModeShape(
    Dust(np.empty(0), np.empty(0)),
    Marks.of(),
    Strokes.of(),
    Words.of(),
    EMPTY,
    x_ticks=NO_TICKS,
    ticks=NO_TICKS,
)
"""The view before its first record."""


class _Box(NamedTuple):
    """The part of the patch that is shown: centre in x and t, half its width and height."""

    x: float
    t: float
    half_x: float
    half_t: float

    @property
    def step(self) -> float:
        """From the picture on the left to the one on the right."""
        return (2.0 + 2.0 * BETWEEN) * self.half_x


def _box(record: ModeRecord) -> _Box:
    """The patch, the region, or all regions."""
    regions = record.config.regions
    if record.operator == "patch":
        regions = (PATCH,)
    elif record.region >= 0:
        regions = (regions[record.region],)
    t, x = (np.array([c[i] for r in regions for c in r.corners]) for i in (0, 1))
    return _Box(
        float(x.max() + x.min()) / 2,
        float(t.max() + t.min()) / 2,
        float(np.ptp(x)) / 2,
        float(np.ptp(t)) / 2,
    )


def _part(values: np.ndarray, choices: EvidenceChoices) -> np.ndarray:
    """Real part, imaginary part or modulus."""
    if choices.modeshape == "modulus":
        return np.asarray(np.abs(values))
    return np.asarray(values.imag if choices.modeshape == "imaginary" else values.real)


def _outline(region: Region, colour: str, width: float, shift: float) -> tuple[Any, ...]:
    """The four sides of a region, moved to the right."""
    t, x = zip(*region.corners, strict=True)
    x = tuple(value + shift for value in x)
    return x, t, (*x[1:], x[0]), (*t[1:], t[0]), colour, width, "solid"


def _outlines(record: ModeRecord, look: Look, shift: float) -> list[tuple[Any, ...]]:
    """Patch and regions of one picture, or only those that hold the mode."""
    regions = record.config.regions
    if record.region >= 0:
        k = record.region
        return [_outline(regions[k], look.regions[k], 2.0, shift)]
    hues = (_outline(region, look.regions[i], 2.0, shift) for i, region in enumerate(regions))
    patch = [_outline(PATCH, look.muted, 1.0, shift)] if record.operator == "patch" else []
    return [*patch, *hues]


def _diameter(elements: int) -> float:
    """Diameter of an element in pixels: smaller when there are many."""
    return max(3.0, min(9.0, 5.0 * math.sqrt(1000.0 / max(elements, 1))))


def _limits(record: ModeRecord, box: _Box) -> Limits:
    """Room for the pictures, lines of words above and below, and the scale on the right."""
    right = box.x + box.half_x + (box.step if record.continuum is not None else 0.0)
    rows = -(-record.shares.size // ROW)
    return Limits(
        box.x - 1.06 * box.half_x,
        right + 1.05 * box.half_x,
        box.t - (1.12 + 0.2 * rows) * box.half_t,
        box.t + 1.3 * box.half_t,
    )


def _words(record: ModeRecord, box: _Box, limits: Limits, look: Look) -> list[tuple[Any, ...]]:
    """Whose mode stands above the pictures, where it lives below them."""
    left, top = limits.x_low, box.t + 1.18 * box.half_t
    mark = "kept" if record.kept else "dropped"
    lines = [(left, top, f"rank {record.rank}, λ {record.eigenvalue:.3g}, {mark}")]
    if record.continuum is not None:
        at = box.x + box.step - 0.7 * box.half_x
        lines.append((at, top, f"overlap {record.continuum.overlap:.3f}"))
    if record.region < 0:
        shares = [f"{region_letter(k)} {share:.3f}" for k, share in enumerate(record.shares)]
        for row in range(0, len(shares), ROW):
            words = ", ".join(shares[row : row + ROW])
            bottom = box.t - (1.18 + 0.2 * row / ROW) * box.half_t
            lines.append((left, bottom, words if row else f"share on {words}"))
    return [(*line, look.ink) for line in lines]


def read(scene: EvidenceScene, choices: EvidenceChoices, look: Look) -> ModeShape:
    """Lay out the mode that was picked."""
    record: ModeRecord | None = scene.mode
    if record is None:
        return BLANK
    box = _box(record)
    continuum = record.continuum
    limits = _limits(record, box)
    here = _part(record.values, choices)
    there = _part(continuum.values, choices) if continuum is not None else np.empty(0)
    ramp = _ramp(np.concatenate([here, there]), choices, look)
    fill = 1.0 if record.kept else 0.0
    size = _diameter(record.t.size)
    marks = [(record.x, record.t, ramp.paint(here), "circle", size, fill)]
    lines = _outlines(record, look, 0.0)
    if continuum is not None:
        at = continuum.x + box.step
        marks.append((at, continuum.t, ramp.paint(there), "circle", _diameter(900), 1.0))
        lines += _outlines(record, look, box.step)
    bar = box.x + box.half_x + (box.step if continuum is not None else 0.0) + 0.2 * box.half_x
    pieces, numbers = scale(ramp, limits, look, at=bar)
    return ModeShape(
        dust=_dust(record, box),
        lines=Strokes.of(*lines, *pieces),
        marks=Marks.of(*marks),
        words=Words.of(*_words(record, box, limits, look), *numbers),
        limits=limits,
        x_ticks=_x_ticks(box, pictures=2 if continuum is not None else 1),
        labels=LABELS,
        ticks=_t_ticks(box),
    )


def _dust(record: ModeRecord, box: _Box) -> Dust:
    """Elements in the picture that the operator does not act on; none around a single region."""
    x, t = record.empty_x, record.empty_t
    shown = (np.abs(x - box.x) <= box.half_x) & (np.abs(t - box.t) <= box.half_t)
    shown &= record.region < 0
    return Dust(x[shown], t[shown])


def _ramp(values: np.ndarray, choices: EvidenceChoices, look: Look) -> Ramp:
    """Colours of a part of the mode."""
    return sizes(values, look) if choices.modeshape == "modulus" else signed(values, look)


def _x_ticks(box: _Box, *, pictures: int) -> tuple[tuple[float, str], ...]:
    """Left end and middle of each picture, named by their true position, and the last end."""
    places = [(x, k) for k in range(pictures) for x in (box.x - box.half_x, box.x)]
    places.append((box.x + box.half_x, pictures - 1))
    return tuple((x + k * box.step, _number(x)) for x, k in places)


def _t_ticks(box: _Box) -> tuple[tuple[float, str], ...]:
    """Past end, middle and future end."""
    return tuple((t, _number(t)) for t in (box.t - box.half_t, box.t, box.t + box.half_t))


def _number(value: float) -> str:
    """A position as a tick's name."""
    return f"{value:.3g}".replace("-", "−")


def draw(data: ModeShape) -> hv.Overlay:
    """Draw it."""
    return bare(overlay(GROUP, data.dust, data.marks, data.lines, data.words), data)


def caution(scene: EvidenceScene, choices: EvidenceChoices) -> str:
    """Say how well modes split by region, what fixes the phase, and what is missing."""
    record: ModeRecord | None = scene.mode
    if record is None:
        return ""
    parts = []
    if record.splitting is not None:
        s, k = record.splitting, len(record.config.regions)
        parts.append(
            f"Splitting {s.mean_share:.3f} (1 full, 1/{k} none), {s.clear} of {s.modes} "
            f"clear; cross block {record.cross_block:.3f}."
        )
    if record.continuum is None:
        parts.append(f"{record.unknown.capitalize()}; largest value real.")
    elif record.continuum.nearest_rank != record.rank:
        near = record.continuum
        parts.append(
            f"Phase: overlap real; continuum rank {near.nearest_rank} overlaps by "
            f"{near.nearest_overlap:.2f}."
        )
    elif record.operator == "patch":
        parts.append("Phase: overlap with the continuum real.")
    else:
        parts.append("Continuum: without the first cut; phase: overlap real.")
    return " ".join(parts)
