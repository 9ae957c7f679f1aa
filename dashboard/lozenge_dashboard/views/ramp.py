"""Amounts as colours, with the scale that reads them: signed ones and shares.

Signed amounts run from blue through the grey of the ground to orange, which every dichromat tells
apart; sizes run along Cividis, which was made for that, from the ground's end of it.
"""

from __future__ import annotations

import itertools
import math
from functools import cache
from typing import Any, NamedTuple

import numpy as np
from bokeh.palettes import Cividis256
from numpy.typing import ArrayLike

from lozenge_dashboard.palette import Look
from lozenge_dashboard.views.marks import Limits

__all__ = ["Ramp", "scale", "signed", "sizes"]

STOPS = {
    "light": ("#0d4a9e", "#d9d9d5", "#a84300"),
    "dark": ("#74b2ff", "#3a424a", "#ff9f5e"),
}
"""Negative, zero and positive end on either ground."""
PIECES = 48
"""Pieces that a scale is drawn of."""
FIRST_ON_DARK = 30
"""Cividis' darkest colours are no lighter than the dark ground."""
BAR = 10.0
"""Width of a scale in pixels."""


class Ramp(NamedTuple):
    """Amounts from `low` to `high` and their colours.

    Attributes
    ----------
    low, high : float
        Ends.
    colours : tuple of str
        From low to high.
    """

    low: float
    high: float
    colours: tuple[str, ...]

    def paint(self, values: ArrayLike) -> np.ndarray:
        """Colours of some amounts within the ends, as an array of objects."""
        span = self.high - self.low
        share = (np.asarray(values, dtype=float) - self.low) / (span or 1.0)
        step = np.rint(share * (len(self.colours) - 1)).astype(int)
        return np.array(self.colours, dtype=object)[np.clip(step, 0, len(self.colours) - 1)]


@cache
def _diverging(theme: str) -> tuple[str, ...]:
    """129 colours through the middle one."""
    ends = [np.array([int(c[i : i + 2], 16) for i in (1, 3, 5)]) for c in STOPS[theme]]
    arms = [
        first + (second - first) * np.linspace(0.0, 1.0, 65)[:, None]
        for first, second in itertools.pairwise(ends)
    ]
    rows = np.rint(np.vstack([arms[0], arms[1][1:]])).astype(int)
    return tuple(f"#{r:02x}{g:02x}{b:02x}" for r, g, b in rows)


def signed(values: ArrayLike, look: Look) -> Ramp:
    """Colours of signed amounts, zero in the middle, as far as the largest of them."""
    most = float(np.abs(np.asarray(values, dtype=float)).max(initial=0.0)) or 1.0
    return Ramp(-most, most, _diverging(look.name))


def sizes(values: ArrayLike, look: Look) -> Ramp:
    """Colours of amounts from zero to the largest of them; small ones fade into the ground."""
    most = float(np.asarray(values, dtype=float).max(initial=0.0)) or 1.0
    dark = tuple(Cividis256[FIRST_ON_DARK:])
    return Ramp(0.0, most, dark if look.name == "dark" else tuple(reversed(Cividis256)))


def scale(
    ramp: Ramp, limits: Limits, look: Look, *, at: float, digits: int = 2, percent: bool = False
) -> tuple[list[tuple[Any, ...]], list[tuple[Any, ...]]]:
    """A colour scale with numbers, as parts of strokes and of words, upright at an abscissa."""
    height = limits.y_high - limits.y_low
    low, high = limits.y_low + 0.16 * height, limits.y_high - 0.16 * height
    edges = np.linspace(low, high, PIECES + 1)
    middles = ramp.low + (np.arange(PIECES) + 0.5) / PIECES * (ramp.high - ramp.low)
    # Pieces overlap a little, or the ground would show between them.
    more = 0.5 * (edges[1] - edges[0])
    pieces = (at, edges[:-1], at, edges[1:] + more, ramp.paint(middles), BAR, "solid")
    last = (at, edges[-2], at, edges[-1], ramp.colours[-1], BAR, "solid")
    numbers = [ramp.low, (ramp.low + ramp.high) / 2.0, ramp.high]
    words = [
        (at, y, _number(value, digits, percent), look.ink)
        for y, value in zip((low, (low + high) / 2.0, high), numbers, strict=True)
    ]
    return [pieces, last], words


def _number(value: float, digits: int, percent: bool) -> str:
    """A number of the scale."""
    if percent:
        return f"{100.0 * value:.{digits}g} %"
    if value == 0.0 or not math.isfinite(value):
        return "0"
    return f"{value:.{digits}g}".replace("-", "−")
