"""Colours and marks, the same in every view, for a light and a dark ground.

Every region has one hue and one closed marker (closed, so that it can be filled for kept and
hollow for dropped).  The hues were chosen by maximising the smallest OKLab distance between any
two of them and the ink, as seen with normal vision and with each of the three dichromacies;
against their ground all reach a contrast of 3 to 1, and the ink, the muted ink and the signal
colours, which carry text, 4.5 to 1 (tests/dashboard/test_palette.py).
"""

from __future__ import annotations

from types import MappingProxyType
from typing import Literal, NamedTuple

__all__ = [
    "DARK",
    "LIGHT",
    "LOOKS",
    "MARKERS",
    "PATCH_MARKER",
    "UNION_MARKERS",
    "Look",
    "ThemeName",
]

ThemeName = Literal["light", "dark"]

MARKERS = (
    "circle",
    "square",
    "triangle",
    "inverted_triangle",
    "hex",
    "star",
    "square_pin",
    "triangle_pin",
)
"""One marker per region A to H."""

UNION_MARKERS = MappingProxyType({"support": "diamond", "direct_sum": "x"})
"""The union's marker under each union rule."""

PATCH_MARKER = "circle"


class Look(NamedTuple):
    """Colours of one theme, as hexadecimal strings."""

    name: ThemeName
    ground: str
    panel: str
    ink: str
    muted: str
    rule: str
    accent: str
    alarm: str
    caution: str
    kept: str
    """Grey of a state kept for comparison."""
    regions: tuple[str, ...]

    def css(self) -> str:
        """The colours as custom properties for the page's style sheets."""
        plain = (
            f"--{name}: {getattr(self, name)};" for name in self._fields if name not in SKIPPED
        )
        hues = (f"--region-{i}: {hue};" for i, hue in enumerate(self.regions))
        return " ".join((*plain, *hues, f"color-scheme: {self.name};"))


SKIPPED = ("name", "regions")

LIGHT = Look(
    name="light",
    ground="#f4f4f1",
    panel="#fdfdfc",
    ink="#1c2126",
    muted="#565d65",
    rule="#d5d6d2",
    accent="#1f5f8b",
    alarm="#a8202a",
    caution="#7a5200",
    kept="#94989c",
    regions=(
        "#338ec8",
        "#d9534f",
        "#847b02",
        "#735ee3",
        "#014e10",
        "#883555",
        "#4062b1",
        "#4b6805",
    ),
)

DARK = Look(
    name="dark",
    ground="#14181c",
    panel="#1b2025",
    ink="#e6e8e6",
    muted="#a3abb3",
    rule="#3a424a",
    accent="#7cc0ee",
    alarm="#ff8f8a",
    caution="#e6b85c",
    kept="#7d858d",
    regions=(
        "#76c4fa",
        "#e05a5c",
        "#d0c536",
        "#9387fc",
        "#a1d7a1",
        "#cf6f91",
        "#5c7fd3",
        "#8eb155",
    ),
)

LOOKS: MappingProxyType[str, Look] = MappingProxyType({"light": LIGHT, "dark": DARK})
