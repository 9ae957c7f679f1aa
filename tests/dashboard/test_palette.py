"""Colours: contrast on both grounds, and regions that every eye can tell apart."""

from __future__ import annotations

import itertools

import numpy as np
import pytest

from lozenge_dashboard.palette import LOOKS, MARKERS, Look

# Linear RGB -> long, medium and short cones, and the OKLab axes (published constants).
CONES = np.array(
    [
        [0.4122214708, 0.5363325363, 0.0514459929],
        [0.2119034982, 0.6806995451, 0.1073969566],
        [0.0883024619, 0.2817188376, 0.6299787005],
    ]
)
AXES = np.array(
    [
        [0.2104542553, 0.7936177850, -0.0040720468],
        [1.9779984951, -2.4285922050, 0.4505937099],
        [0.0259040371, 0.7827717662, -0.8086757660],
    ]
)
# "A physiologically-based model for simulation of color vision deficiency", severity 1.
EYES = {
    "normal": np.eye(3),
    "no long cones": np.array(
        [
            [0.152286, 1.052583, -0.204868],
            [0.114503, 0.786281, 0.099216],
            [-0.003882, -0.048116, 1.051998],
        ]
    ),
    "no medium cones": np.array(
        [
            [0.367322, 0.860646, -0.227968],
            [0.280085, 0.672501, 0.047413],
            [-0.011820, 0.042940, 0.968881],
        ]
    ),
}


def linear(colour: str) -> np.ndarray:
    """Linear RGB of a hexadecimal colour."""
    c = np.array([int(colour[i : i + 2], 16) for i in (1, 3, 5)]) / 255
    return np.where(c <= 0.04045, c / 12.92, ((c + 0.055) / 1.055) ** 2.4)


def contrast(a: str, b: str) -> float:
    """Contrast ratio of WCAG 2."""
    first, second = (float(linear(x) @ [0.2126, 0.7152, 0.0722]) for x in (a, b))
    return (max(first, second) + 0.05) / (min(first, second) + 0.05)


def lab(colour: str, eye: str) -> np.ndarray:
    """OKLab coordinates as an eye sees them."""
    return np.cbrt(CONES @ np.clip(EYES[eye] @ linear(colour), 0, 1)) @ AXES.T


@pytest.mark.parametrize("look", LOOKS.values(), ids=list(LOOKS))
@pytest.mark.parametrize("name", ["ink", "muted", "accent", "alarm", "caution"])
def test_text_reaches_contrast_aa_on_both_surfaces(look: Look, name: str) -> None:
    for ground in (look.ground, look.panel):
        assert contrast(getattr(look, name), ground) >= 4.5


@pytest.mark.parametrize("look", LOOKS.values(), ids=list(LOOKS))
def test_marks_reach_three_to_one_on_their_ground(look: Look) -> None:
    for hue in look.regions:
        assert contrast(hue, look.panel) >= 3.0


@pytest.mark.parametrize("look", LOOKS.values(), ids=list(LOOKS))
@pytest.mark.parametrize("eye", EYES)
def test_regions_stay_apart_for_every_eye(look: Look, eye: str) -> None:
    colours = [lab(hue, eye) for hue in look.regions]
    apart = min(float(np.linalg.norm(a - b)) for a, b in itertools.combinations(colours, 2))
    # 0.02 is a just noticeable difference of large patches.
    assert apart >= 0.05


def test_every_region_has_a_marker_of_its_own() -> None:
    assert len(set(MARKERS)) == len(MARKERS) == len(LOOKS["light"].regions) == 8
