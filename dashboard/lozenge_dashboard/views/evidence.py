"""The six views of the evidence page: what each asks, and how it is drawn."""

from __future__ import annotations

from collections.abc import Mapping
from types import MappingProxyType

from lozenge_dashboard.views import (
    cutmodes,
    cutstudy,
    due,
    modeshape,
    mutual,
    statecheck,
    thresholds,
)
from lozenge_dashboard.views.catalogue import Figure, View
from lozenge_dashboard.views.marks import register

__all__ = ["EVIDENCE_VIEWS", "RECORDS", "TITLES", "register_evidence"]

RECORDS: Mapping[str, str] = MappingProxyType(
    {
        "cutstudy": "cuts",
        "thresholds": "thresholds",
        "modeshape": "mode",
        "statecheck": "state",
        "mutual": "mutual",
        "due": "due",
    }
)
"""Field of the scene that each view is drawn from."""
TITLES: Mapping[str, str] = MappingProxyType(
    {
        "cutstudy": "cut study",
        "thresholds": "thresholds",
        "modeshape": "mode",
        "statecheck": "state",
        "mutual": "cross ratio",
        "due": "slopes",
    }
)
"""What each is called where it is computed."""


EVIDENCE_VIEWS = (
    View(
        "cutstudy",
        "What does the cut decide?",
        {
            "entropy": Figure(
                cutstudy.GROUP,
                cutstudy.read,
                cutstudy.draw,
                cutstudy.ENTROPY_BLANK,
                cutstudy.AXES,
            ),
            "mutual": Figure(
                cutstudy.MUTUAL_GROUP,
                cutstudy.read_mutual,
                cutstudy.draw_mutual,
                cutstudy.BLANK,
                cutstudy.MUTUAL_AXES,
            ),
            "slope": Figure(
                cutstudy.SLOPE_GROUP,
                cutstudy.read_slope,
                cutstudy.draw_slope,
                cutstudy.BLANK,
                cutstudy.SLOPE_AXES,
            ),
            "kept": Figure(
                cutstudy.KEPT_GROUP,
                cutstudy.read_kept,
                cutstudy.draw_kept,
                cutstudy.BLANK,
                cutstudy.KEPT_AXES,
            ),
            "modes": Figure(
                cutmodes.MODES_GROUP,
                cutmodes.read_modes,
                cutmodes.draw_modes,
                cutmodes.MODES_BLANK,
                cutmodes.MODES_AXES,
            ),
        },
        cutstudy.caution,
        lambda scene: (scene.cuts,),
        (
            ("entropy", "S"),
            ("mutual", "I"),
            ("slope", "slope b"),
            ("kept", "counts"),
            ("modes", "per mode"),
        ),
    ),
    View(
        "thresholds",
        "Which modes can be trusted?",
        {
            "": Figure(
                thresholds.GROUP,
                thresholds.read,
                thresholds.draw,
                thresholds.BLANK,
                thresholds.AXES,
            )
        },
        thresholds.caution,
        lambda scene: (scene.thresholds,),
        (("patch", "patch"), ("regions", "regions"), ("union", "union")),
    ),
    View(
        "modeshape",
        "What is a mode like?",
        {
            "": Figure(
                modeshape.GROUP,
                modeshape.read,
                modeshape.draw,
                modeshape.BLANK,
                modeshape.AXES,
                square=True,
            )
        },
        modeshape.caution,
        lambda scene: (scene.mode,),
        (("real", "real"), ("imaginary", "imaginary"), ("modulus", "modulus")),
    ),
    View(
        "statecheck",
        "Is the state a good one?",
        {
            "fit": Figure(
                statecheck.GROUP,
                statecheck.read,
                statecheck.draw,
                statecheck.BLANK,
                statecheck.AXES,
            ),
            "deviation": Figure(
                statecheck.MAP_GROUP,
                statecheck.read_deviation,
                statecheck.draw_map,
                statecheck.MAP_BLANK,
                statecheck.MAP_AXES,
                square=True,
            ),
            "loss": Figure(
                statecheck.LOSS_GROUP,
                statecheck.read_loss,
                statecheck.draw_loss,
                statecheck.LOSS_BLANK,
                statecheck.LOSS_AXES,
                square=True,
            ),
        },
        statecheck.caution,
        lambda scene: (scene.state,),
        (("fit", "W near the centre"), ("deviation", "deviation"), ("loss", "loss")),
    ),
    View(
        "mutual",
        "How does I fall with η?",
        {
            "linear": Figure(mutual.GROUP, mutual.read, mutual.draw, mutual.BLANK, mutual.AXES),
            "log": Figure(
                mutual.LOG_GROUP, mutual.read, mutual.draw_log, mutual.BLANK, mutual.LOG_AXES
            ),
        },
        mutual.caution,
        lambda scene: (scene.mutual,),
        (("linear", "linear"), ("log", "logarithmic")),
    ),
    View(
        "due",
        "What is it due to?",
        {
            "slopes": Figure(due.GROUP, due.read, due.draw, due.BLANK, due.AXES),
            "minus": Figure(
                due.MINUS_GROUP, due.read_minus, due.draw_minus, due.BLANK, due.MINUS_AXES
            ),
        },
        due.caution,
        lambda scene: (scene.due,),
        (("slopes", "slopes"), ("minus", "data − twin")),
    ),
)


def register_evidence() -> None:
    """Register the fixed options of all figures with HoloViews; once per process."""
    for view in EVIDENCE_VIEWS:
        for figure in view.figures.values():
            register(figure.group, **figure.axes)
