"""How many modes each stage keeps, beside the nominal number."""

from __future__ import annotations

import math
from typing import TYPE_CHECKING, NamedTuple

import holoviews as hv
import numpy as np

from lozenge_dashboard.palette import MARKERS, PATCH_MARKER, UNION_MARKERS, Look
from lozenge_dashboard.records import RULE_NAMES, Choices, Scene
from lozenge_dashboard.views.beside import WORDY_ROWS, front_of, numbers, upright
from lozenge_dashboard.views.marks import Limits, Marks, Strokes, Words, overlay
from lozenge_engine.geometry import region_letter
from lozenge_engine.result import Result

if TYPE_CHECKING:
    from lozenge_engine.twin import TwinValue

__all__ = ["Count", "Counts", "caution", "draw", "read"]

GROUP = "Counts"


class Count(NamedTuple):
    """One row: modes kept beside the nominal number."""

    name: str
    kept: int
    nominal: float
    colour: str
    marker: str


OTHER_RULES = ("root_count", "union_count", "equal_share", "fixed_number")
"""Rules of the second stage whose counts stand below the figure."""
NAMED_REGIONS = 3
"""Most regions for which they have room."""


class Counts(NamedTuple):
    """Rows of kept and nominal modes, the first at the top."""

    lines: Strokes
    marks: Marks
    numbers: Words
    limits: Limits
    ticks: tuple[tuple[float, str], ...]


BLANK = Counts(Strokes.of(), Marks.of(), Words.of(), Limits(0.0, 100.0, 0.4, 5.7), ())
"""The view before its first record."""


def rows(result: Result, look: Look) -> list[Count]:
    """The patch, each region, and the union under both rules."""
    patch = result.patch
    found = [Count("patch", patch.kept_modes, patch.nominal_modes, look.muted, PATCH_MARKER)]
    found += [
        Count(region_letter(i), r.kept_modes, r.nominal_modes, look.regions[i], MARKERS[i])
        for i, r in enumerate(result.regions)
    ]
    nominal = sum(r.nominal_modes for r in result.regions)
    return found + [
        Count(f"union {RULE_NAMES[rule]}", union.kept_modes, nominal, look.ink, UNION_MARKERS[rule])
        for rule, union in result.unions.items()
    ]


def read(scene: Scene, choices: Choices, look: Look) -> Counts:
    """Lay out the counts of the sprinkling in front."""
    table = rows(scene.result, look)
    old = rows(scene.reference.result, look) if scene.reference else []
    twins = _twins(scene, choices)
    height = len(table)
    y = np.arange(height, 0, -1.0)
    places = {row.name: at for row, at in zip(table, y, strict=True)}
    old = [row for row in old if row.name in places]
    top = max(max(row.kept, row.nominal) for row in table)
    ends = [max(row.kept, row.nominal) for row in table]
    words = numbers(
        [_number(row) for row in table], [twins.get(row.name) for row in table], ends, y, look
    )
    # The widest numbers need half of the axis at 150 % zoom.
    limits = Limits(0.0, 2.8 * max(top, 1.0), 0.4, height + 0.7)
    return Counts(
        lines=Strokes.of(
            *(
                (0, at, row.kept, at, row.colour, 1.5, "solid")
                for row, at in zip(table, y, strict=True)
            ),
            *(
                (row.nominal, at - 0.32, row.nominal, at + 0.32, look.ink, 2.0, "solid")
                for row, at in zip(table, y, strict=True)
            ),
            *(part for name, v in twins.items() for part in upright(v, places[name], look)),
        ),
        marks=Marks.of(
            *((row.kept, places[row.name] - 0.22, look.kept, row.marker, 7.0, 1.0) for row in old),
            *(
                (row.kept, at, row.colour, row.marker, 9.0, 1.0)
                for row, at in zip(table, y, strict=True)
            ),
        ),
        numbers=Words.of(*words),
        limits=limits,
        ticks=tuple((at, row.name) for row, at in zip(table, y, strict=True)),
    )


def _twins(scene: Scene, choices: Choices) -> dict[str, TwinValue]:
    """Modes that the twin keeps, by the name of the row; it has no count for the union."""
    twin = front_of(scene, choices)
    if twin is None:
        return {}
    return {"patch": twin.patch_kept} | {region_letter(i): v for i, v in enumerate(twin.kept)}


def _number(row: Count) -> str:
    """Kept of nominal, and their ratio."""
    if not (math.isfinite(row.nominal) and row.nominal > 0):
        return f"{row.kept}"
    return f"{row.kept} of {row.nominal:.1f} ({row.kept / row.nominal:.2f})"


def draw(data: Counts) -> hv.Overlay:
    """Draw it."""
    return overlay(GROUP, data.lines, data.marks, data.numbers)


def caution(scene: Scene, choices: Choices) -> str:
    """Say what the nominal number is, and when the first stage starves the second."""
    result = scene.result
    text = "Upright line: nominal 2√n."
    if front_of(scene, choices) is not None:
        bar = " (behind the bar)" if len(result.regions) + 3 > WORDY_ROWS else ""
        text = f"Upright lines: nominal 2√n; twin{bar or ' (accent)'}."
    starved = [
        region_letter(i)
        for i, r in enumerate(result.regions)
        if r.kept_modes < 0.8 * r.nominal_modes
    ]
    if starved and scene.setup.rules()[0].kind != "none":
        text += f" The first stage starves {', '.join(starved)}."
    kept = result.kept_by_rule()
    if len(result.regions) <= NAMED_REGIONS:
        each = ", ".join(
            f"{region_letter(i)} " + "/".join(str(kept[kind][i]) for kind in OTHER_RULES)
            for i in range(len(result.regions))
        )
        text += f" Own/union's/equal/fixed count: {each}."
    return text
