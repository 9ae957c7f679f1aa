"""References in the views: the twin as lines and uprights with bars, in one colour everywhere."""

from __future__ import annotations

import math
from collections.abc import Sequence
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import ArrayLike

from lozenge_dashboard.palette import Look
from lozenge_dashboard.records import Choices, Scene
from lozenge_dashboard.views.marks import polyline
from lozenge_engine.notation import with_error

if TYPE_CHECKING:
    from lozenge_dashboard.readings import Value
    from lozenge_engine.references import Beside
    from lozenge_engine.twin import Twin, TwinValue

__all__ = [
    "TWIN_WIDTH",
    "barred",
    "beside_of",
    "front_of",
    "measured",
    "number",
    "numbers",
    "sets_of",
    "upright",
    "value_of",
]

TWIN_WIDTH = 2.0
HALF_HEIGHT = 0.34
"""Half of an upright, in rows."""
WORDY_ROWS = 6
"""Most rows of a table that have room for two lines of words each (180 pixels in all)."""


def front_of(scene: Scene, choices: Choices) -> Twin | None:
    """The twin of the geometry in front, if it is wanted and known."""
    return scene.beside.front if choices.twin and scene.beside is not None else None


def beside_of(scene: Scene, choices: Choices) -> Beside | None:
    """What stands beside the sweep of scale that the switch names."""
    company = scene.beside
    if company is None:
        return None
    beside: Beside = getattr(company, choices.scaling)
    return beside._replace(
        twin=beside.twin if choices.twin else None, chain=beside.chain if choices.chain else None
    )


def value_of(value: Value, twin: Twin) -> TwinValue:
    """The twin's number for one of the page's."""
    if value.rule is None:
        return twin.entropy[value.members[0]]
    if value.kept is not None:
        found: TwinValue = getattr(twin, f"union_{value.rule}")
        return found
    count = len(twin.entropy)
    pairs = [(a, b) for a in range(count) for b in range(a + 1, count)]
    a, b = value.members
    pair: TwinValue = getattr(twin, f"pair_{value.rule}")[pairs.index((a, b))]
    return pair


def number(value: TwinValue) -> str:
    """A twin's number with the digits that its error allows; one in closed form has none."""
    return measured(value.value, value.error)


def measured(value: float, error: float) -> str:
    """A number with its error; where this is 0 or not known, with three decimals."""
    if math.isfinite(value) and not error > 0.0:
        return f"{value:.0f}" if value == round(value) else f"{value:.3f}"
    return with_error(value, error)


def sets_of(twin: Twin) -> str:
    """What a twin was read on."""
    if not twin.sets:
        return "modes in closed form"
    return f"{twin.sets} sets, up to {twin.oversampling}× density"


def upright(value: TwinValue, at: float, look: Look) -> list[tuple[Any, ...]]:
    """A number in a row of a table: an upright line, its error as a bar across."""
    if not math.isfinite(value.value):
        return []
    x, e, colour = value.value, value.error, look.accent
    parts = [(x, at - HALF_HEIGHT, x, at + HALF_HEIGHT, colour, TWIN_WIDTH, "solid")]
    if e > 0.0:
        parts.append((x - e, at + HALF_HEIGHT, x + e, at + HALF_HEIGHT, colour, 3.0, "solid"))
    return parts


def numbers(
    texts: Sequence[str],
    values: Sequence[TwinValue | None],
    x: Sequence[float],
    y: ArrayLike,
    look: Look,
) -> list[tuple[Any, ...]]:
    """The numbers of the rows of a table, each with the twin's below it, or behind a bar.

    Parameters
    ----------
    texts : sequence of str
        The rows' own numbers.
    values : sequence of TwinValue or None
        The twin's.
    x, y : sequence of float
        Where the words begin.
    look : Look
        Colours.

    Returns
    -------
    list of parts of `Words`
        Ink, and the accent for a second line.
    """
    rows = np.asarray(y, dtype=float)
    known = [v is not None and math.isfinite(v.value) for v in values]
    two = any(known) and rows.size <= WORDY_ROWS
    parts: list[tuple[Any, ...]] = []
    for text, value, end, at in zip(texts, values, x, rows, strict=True):
        if value is None or not math.isfinite(value.value):
            parts.append((end, at, text, look.ink))
        elif two:
            parts.append((end, at + 0.25, text, look.ink))
            parts.append((end, at - 0.27, f"twin {number(value)}", look.accent))
        else:
            parts.append((end, at, f"{text} | {number(value)}", look.ink))
    return parts


def barred(
    x: ArrayLike, y: ArrayLike, error: ArrayLike, colour: str, *, width: float = TWIN_WIDTH
) -> list[tuple[Any, ...]]:
    """A line through values, with a bar for each one's error; unknown values are left out."""
    known = np.isfinite(np.asarray(y, dtype=float))
    a, b, e = (np.asarray(c, dtype=float)[known] for c in (x, y, error))
    if not a.size:
        return []
    e = np.nan_to_num(e)
    return [
        polyline(a, b, colour, width, "solid"),
        (a, b - e, a, b + e, colour, 1.5 * width, "solid"),
    ]
