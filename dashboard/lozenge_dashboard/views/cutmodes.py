"""Which modes carry the entropy of a region, and which the cut drops."""

from __future__ import annotations

import math
from typing import TYPE_CHECKING, Any

import holoviews as hv
import numpy as np

from lozenge_dashboard.palette import MARKERS, Look
from lozenge_dashboard.records import EvidenceChoices, EvidenceScene
from lozenge_dashboard.views.cutstudy import BLANK
from lozenge_dashboard.views.marks import Limits, Marks, Strokes, overlay
from lozenge_dashboard.views.pieces import Line, room, written
from lozenge_dashboard.views.traces import Cuts
from lozenge_engine.geometry import region_letter

if TYPE_CHECKING:
    from lozenge_engine.cutrecord import CutRecord

__all__ = ["MODES_AXES", "MODES_BLANK", "MODES_GROUP", "draw_modes", "read_modes"]

MODES_GROUP = "CutModes"
MODES_AXES = {
    "x": "rank of the restricted mode k",
    "y": "entropy that mode k adds (nats)",
    "offset": (6.0, 0.0),
}
MODES_BLANK = BLANK._replace(limits=Limits(0.0, 40.0, 0.0, 1.0), x_ticks=())
"""The figure before its first record."""


def read_modes(scene: EvidenceScene, choices: EvidenceChoices, look: Look) -> Cuts:
    """Lay out what each mode adds to the entropy of its region: kept filled, dropped hollow."""
    record: CutRecord | None = scene.cuts
    if record is None or not record.front.carried:
        return MODES_BLANK
    parts: list[tuple[Any, ...]] = []
    lines: list[Line] = []
    x_high, low, high = 4.0, 0.0, 0.1
    for k, own in enumerate(record.front.carried):
        some = np.isfinite(own.gain)
        rank = np.arange(1, own.gain.size + 1.0)
        parts.append(
            (
                rank[some],
                own.gain[some],
                look.regions[k],
                MARKERS[k],
                7.0,
                own.kept[some].astype(float),
            )
        )
        kept = float(own.gain[some & own.kept].sum())
        dropped = float(own.gain[some & ~own.kept].sum())
        lines.append(
            (
                f"{region_letter(k)}: {int(own.kept.sum())} kept carry {kept:.2f}, "
                f"the next {int((some & ~own.kept).sum())} would add {dropped:.2f}",
                look.regions[k],
                MARKERS[k],
            )
        )
        x_high = max(x_high, float(some.sum()))
        if some.any():
            low, high = (
                min(low, float(own.gain[some].min())),
                max(high, float(own.gain[some].max())),
            )
    limits = room(np.array([1.0, x_high]), low, high, len(lines), least=0.02)
    keys, words = written(limits, lines, look)
    zero = (limits.x_low, 0.0, limits.x_high, 0.0, look.rule, 1.0, "solid")
    step = 10 ** math.floor(math.log10(max(x_high, 10)))
    step = step if x_high / step >= 4 else step / 2
    ticks = tuple((t, f"{t:g}") for t in np.arange(step, x_high + 1, step))
    return Cuts(Strokes.of(zero), Marks.of(*parts, *keys), words, limits, ticks, ())


def draw_modes(data: Cuts) -> hv.Overlay:
    """Draw what each mode adds."""
    return overlay(MODES_GROUP, data.lines, data.marks, data.words)
