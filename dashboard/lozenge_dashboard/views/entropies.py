"""Entropies and mutual information with their errors, and what each mode contributes."""

from __future__ import annotations

import math
from typing import TYPE_CHECKING, Any, NamedTuple

import holoviews as hv
import numpy as np

from lozenge_dashboard.palette import MARKERS, UNION_MARKERS, Look
from lozenge_dashboard.readings import Value, values
from lozenge_dashboard.records import Choices, Scene
from lozenge_dashboard.views.beside import WORDY_ROWS, front_of, numbers, sets_of, upright, value_of
from lozenge_dashboard.views.marks import Limits, Marks, Strokes, Words, overlay

if TYPE_CHECKING:
    from lozenge_engine.twin import TwinValue

__all__ = [
    "BLANK",
    "BLANK_MODES",
    "Contributions",
    "Entropies",
    "caution",
    "draw",
    "draw_contributions",
    "read",
    "read_contributions",
]

GROUP = "Entropies"
MODES_GROUP = "Contributions"
SMALLEST_CONTRIBUTION = 1e-6


class Entropies(NamedTuple):
    """Rows of entropies and mutual informations, the first at the top."""

    bars: Strokes
    marks: Marks
    numbers: Words
    limits: Limits
    ticks: tuple[tuple[float, str], ...]


class Contributions(NamedTuple):
    """Contribution of each symplectic value to the entropy, by rank."""

    marks: Marks
    limits: Limits


BLANK = Entropies(Strokes.of(), Marks.of(), Words.of(), Limits(0.0, 5.0, 0.4, 5.7), ())
"""The view before its first record."""
BLANK_MODES = Contributions(Marks.of(), Limits(0.8, 50.0, 5e-7, 3.0))


def _style(value: Value, look: Look) -> tuple[str, str]:
    """Colour and marker of a row."""
    if value.rule is None:
        return look.regions[value.members[0]], MARKERS[value.members[0]]
    return look.ink, UNION_MARKERS[value.rule]


def _bars(value: Value, at: float, colour: str) -> list[tuple[Any, ...]]:
    """Scatter of one sprinkling thin, standard error thick, this sprinkling as a short line."""
    parts: list[tuple[Any, ...]] = []
    for half, width in ((value.scatter, 1.0), (value.error, 4.0)):
        if math.isfinite(half):
            parts.append((value.mean - half, at, value.mean + half, at, colour, width, "solid"))
    if math.isfinite(value.present) and value.count > 1:
        parts.append((value.present, at - 0.3, value.present, at + 0.3, colour, 1.0, "solid"))
    return parts


def _reach(value: Value) -> float:
    """Right end of what is drawn of a value."""
    spread = value.scatter if math.isfinite(value.scatter) else 0.0
    ends = [x for x in (value.mean + spread, value.present) if math.isfinite(x)]
    return max(ends, default=0.0)


def _end(value: Value, twin: TwinValue | None) -> float:
    """Where the words of a row begin."""
    ends = [0.0, _reach(value)] + ([] if twin is None else [twin.value + twin.error])
    return max(x for x in ends if math.isfinite(x))


def read(scene: Scene, choices: Choices, look: Look) -> Entropies:
    """Lay out S of every region, S of the union and I of the nearest pairs."""
    table = [v for v in values(scene) if not v.far]
    y = np.arange(len(table), 0, -1.0)
    places = {(v.name, v.rule): at for v, at in zip(table, y, strict=True)}
    old = (
        [v for v in values(scene.reference) if (v.name, v.rule) in places]
        if scene.reference
        else []
    )
    rows = list(zip(table, y, strict=True))
    twin = front_of(scene, choices)
    twins = [None if twin is None else value_of(v, twin) for v in table]
    drawn = [t.value for t in twins if t is not None and math.isfinite(t.value)]
    ends = [_end(v, t) for v, t in zip(table, twins, strict=True)]
    words = numbers([v.text for v in table], twins, ends, y, look)
    # Room for the words: a number, or two with a bar between them.
    room = 1.5 if twin is None or len(table) <= WORDY_ROWS else 2.2
    reach = max([0.1, *(_reach(v) for v in (*table, *old)), *drawn])
    known = [v.mean for v in table if math.isfinite(v.mean)]
    low = min([0.0, *(x - 0.02 * reach for x in (*known, *drawn))])
    return Entropies(
        bars=Strokes.of(
            (0.0, 0.0, 0.0, len(table) + 1.0, look.rule, 1.0, "solid"),
            *(part for v in old for part in _bars(v, places[v.name, v.rule] - 0.25, look.kept)),
            *(part for v, at in rows for part in _bars(v, at, _style(v, look)[0])),
            *(
                part
                for t, at in zip(twins, y, strict=True)
                if t is not None
                for part in upright(t, at, look)
            ),
        ),
        marks=Marks.of(
            *(
                (v.mean, places[v.name, v.rule] - 0.25, look.kept, _style(v, look)[1], 7.0, 1.0)
                for v in old
                if math.isfinite(v.mean)
            ),
            *((v.mean, at, *_style(v, look), 9.0, 1.0) for v, at in rows if math.isfinite(v.mean)),
        ),
        numbers=Words.of(*words),
        limits=Limits(low, room * reach, 0.4, len(table) + 0.7),
        ticks=tuple((at, v.label) for v, at in rows),
    )


def draw(data: Entropies) -> hv.Overlay:
    """Draw it."""
    return overlay(GROUP, data.bars, data.marks, data.numbers)


def read_contributions(scene: Scene, choices: Choices, look: Look) -> Contributions:
    """Lay out the contributions of the modes of each region and of the union."""

    def parts(shown: Scene, grey: bool) -> list[tuple[Any, ...]]:
        found = [
            (r.contributions, look.regions[i], MARKERS[i])
            for i, r in enumerate(shown.result.regions)
        ]
        union = shown.result.unions.get(choices.union_rule)
        if union is not None:
            found.append((union.contributions, look.ink, UNION_MARKERS[union.rule]))
        return [
            (
                np.flatnonzero(c > SMALLEST_CONTRIBUTION) + 1,
                c[c > SMALLEST_CONTRIBUTION],
                look.kept if grey else colour,
                marker,
                4.0 if grey else 6.0,
                1.0,
            )
            for c, colour, marker in found
        ]

    present = parts(scene, grey=False)
    sizes = [p[1].size for p in present]
    tops = [float(p[1].max()) for p in present if p[1].size]
    old = parts(scene.reference, grey=True) if scene.reference else []
    return Contributions(
        marks=Marks.of(*old, *present),
        limits=Limits(
            0.8, 1.5 * max([70, *sizes]), SMALLEST_CONTRIBUTION / 2, 3 * max([1.0, *tops])
        ),
    )


def draw_contributions(data: Contributions) -> hv.Overlay:
    """Draw them."""
    return overlay(MODES_GROUP, data.marks)


def caution(scene: Scene, choices: Choices) -> str:
    """Say what is known of the errors, and which numbers carry a mark."""
    marked = [v for v in values(scene) if v.note]
    if marked:
        return f"{marked[0].label}: {marked[0].note}."
    if choices.entropies == "modes":
        return f"Contributions above {SMALLEST_CONTRIBUTION:g} nats, for the sprinkling in front."
    count = max(v.count for v in values(scene))
    twin = front_of(scene, choices)
    if twin is not None:
        error = f"standard error of {count}" if count > 1 else "one sprinkling, no error known"
        wordy = sum(not v.far for v in values(scene)) > WORDY_ROWS
        where = "Upright accent, number behind the bar" if wordy else "Upright accent"
        return f"{where}: twin, {sets_of(twin)}. Marks: {error}."
    if count < 2:
        return "One sprinkling: no error is known; expect a scatter of 0.1 nats or more."
    cross = [v.cross_block for v in values(scene) if math.isfinite(v.cross_block)]
    text = f"Thick: standard error of {count}; thin: scatter of one."
    if cross:
        text += f" Cross block {max(cross):.2f}: the union rules differ."
    return text
