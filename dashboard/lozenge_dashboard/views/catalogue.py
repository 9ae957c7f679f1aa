"""The six views in the order of the computation: what each asks, and how it is drawn."""

from __future__ import annotations

from collections.abc import Callable
from typing import Any, NamedTuple

import holoviews as hv

from lozenge_dashboard.palette import Look
from lozenge_dashboard.records import Scene
from lozenge_dashboard.views import counts, entropies, scaling, separation, spectrum, sprinkling
from lozenge_dashboard.views.marks import register

__all__ = ["VIEWS", "Figure", "View", "register_all"]


class Figure(NamedTuple):
    """One figure of a view.

    Attributes
    ----------
    group : str
        Its name, unique on the page.
    read : callable
        (scene, choices, look) -> a NamedTuple of the figure's layers from the bottom up, then
        its `limits` and, where they are words or change, `ticks` on the y axis, `x_ticks` and the
        `labels` of both axes.
    draw : callable
        Columns -> HoloViews overlay.
    blank : NamedTuple
        Columns before the first record.
    axes : dict
        What `lozenge_dashboard.views.marks.register` takes.
    square : bool
        Whether both axes have one scale, so that light rays are at 45 degrees.
    """

    group: str
    read: Callable[[Any, Any, Look], Any]
    draw: Callable[[Any], hv.Overlay]
    blank: Any
    axes: dict[str, Any]
    square: bool = False


class View(NamedTuple):
    """One view of the page.

    Attributes
    ----------
    name, question : str
        Its name and what it asks.
    figures : dict of str to Figure
        By the value of the view's switch at which each is shown; key "" for every value.
    caution : callable
        (scene, choices) -> the one line below.
    parts : callable
        scene -> what it depends on; the view is drawn anew when one of these is another object.
    options : tuple of (value, label)
        The view's switch, if it has one.
    toggles : tuple of (name, label, hint)
        What may be shown beside: names of choices that are on or off.
    """

    name: str
    question: str
    figures: dict[str, Figure]
    caution: Callable[[Any, Any], str]
    parts: Callable[[Any], tuple[Any, ...]]
    options: tuple[tuple[str, str], ...] = ()
    toggles: tuple[tuple[str, str, str], ...] = ()


def _front(scene: Scene) -> tuple[Any, ...]:
    """The sprinkling in front and the scene kept for comparison."""
    return scene.result, scene.reference


def _front_twin(scene: Scene) -> Any:
    """The twin of the geometry in front."""
    return scene.beside.front if scene.beside is not None else None


def _twinned(scene: Scene) -> tuple[Any, ...]:
    """What is in front, and its twin."""
    return *_front(scene), _front_twin(scene)


def _sweep_twin(scene: Scene) -> Any:
    """What stands beside the sweep of separation."""
    return scene.beside.separation if scene.beside is not None else None


VIEWS = (
    View(
        "sprinkling",
        "Where are the elements?",
        {
            "": Figure(
                sprinkling.GROUP,
                sprinkling.read,
                sprinkling.draw,
                sprinkling.BLANK,
                {
                    "x": "position x (patch half-widths)",
                    "y": "time t (patch half-widths)",
                    "align": "center",
                },
                square=True,
            )
        },
        sprinkling.caution,
        _front,
    ),
    View(
        "spectrum",
        "Which modes pass the cuts?",
        {
            "": Figure(
                spectrum.GROUP,
                spectrum.read,
                spectrum.draw,
                spectrum.BLANK,
                {
                    "x": "rank of the mode k",
                    "y": "eigenvalue λ (causal-set units)",
                    "log": True,
                    "offset": (0.0, 9.0),
                },
            )
        },
        spectrum.caution,
        _twinned,
    ),
    View(
        "counts",
        "How many modes are kept?",
        {
            "": Figure(
                counts.GROUP,
                counts.read,
                counts.draw,
                counts.BLANK,
                {"x": "kept positive modes", "y": "", "offset": (10.0, 0.0)},
            )
        },
        counts.caution,
        _twinned,
    ),
    View(
        "entropies",
        "How much entanglement?",
        {
            "values": Figure(
                entropies.GROUP,
                entropies.read,
                entropies.draw,
                entropies.BLANK,
                {"x": "entropy S, information I (nats)", "y": "", "offset": (10.0, 0.0)},
            ),
            "modes": Figure(
                entropies.MODES_GROUP,
                entropies.read_contributions,
                entropies.draw_contributions,
                entropies.BLANK_MODES,
                {
                    "x": "rank of the symplectic value",
                    "y": "contribution to S (nats)",
                    "log": True,
                },
            ),
        },
        entropies.caution,
        lambda scene: (*_twinned(scene), scene.average),
        (("values", "values"), ("modes", "per mode")),
    ),
    View(
        "scaling",
        "How does S grow?",
        {
            "": Figure(
                scaling.GROUP,
                scaling.read,
                scaling.draw,
                scaling.BLANK,
                {
                    "x": "scale ln(ℓ/a)",
                    "y": "entropy S, all regions (nats)",
                    "offset": (8.0, 0.0),
                },
            )
        },
        scaling.caution,
        lambda scene: (scene.density, scene.size, scene.reference, scene.beside),
        (("density", "density"), ("size", "size")),
        (
            ("chain", "chain", "Lays the harmonic chain at the same fractions over the data."),
            (
                "difference",
                "− twin",
                "Shows data minus twin with its own slope: what sprinkling adds to geometry.",
            ),
        ),
    ),
    View(
        "separation",
        "How does it fall off?",
        {
            "mutual": Figure(
                separation.GROUP,
                separation.read,
                separation.draw,
                separation.BLANK,
                {
                    "x": "separation d (patch half-widths)",
                    "y": "mutual information I (nats)",
                    "align": "right",
                    "offset": (-8.0, 0.0),
                },
            ),
            "union": Figure(
                separation.UNION_GROUP,
                separation.read,
                separation.draw_union,
                separation.BLANK,
                {
                    "x": "separation d (patch half-widths)",
                    "y": "entropy S of the union (nats)",
                    "align": "right",
                    "offset": (-8.0, 0.0),
                },
            ),
        },
        separation.caution,
        lambda scene: (
            scene.separation,
            scene.setup.separation,
            scene.reference,
            _sweep_twin(scene),
        ),
        (("mutual", "I"), ("union", "S")),
    ),
)


def register_all() -> None:
    """Register the fixed options of all figures with HoloViews; once per process."""
    for view in VIEWS:
        for figure in view.figures.values():
            register(figure.group, **figure.axes)
