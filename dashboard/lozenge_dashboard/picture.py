"""The picture in front: one sprinkling, computed in the page's own thread."""

from __future__ import annotations

from collections.abc import Callable
from typing import Any, NamedTuple

import numpy as np
from numpy.typing import NDArray

from lozenge_dashboard.controls import LIVE_HIGH
from lozenge_dashboard.elsewhere import prepare_elsewhere
from lozenge_engine.bench import continuum_eigenvalues
from lozenge_engine.config import Setup
from lozenge_engine.pipeline import compute, predict, search_key
from lozenge_engine.pointfile import PointFile
from lozenge_engine.result import Result
from lozenge_engine.stages import Stages

__all__ = ["Picture", "at_once", "modes_key", "picture_of"]

CONTINUUM_MODES = 400
"""Most eigenvalues of the continuum that are drawn."""
APART_FROM = 1.0
"""Predicted seconds from which a dense search gets a process of its own."""
LIVE_SECONDS = 10.0
"""A computation predicted to take longer waits for its button, however few the elements."""
LEAST_SECONDS = 0.002
"""A stage that took less came from the cache."""


class Picture(NamedTuple):
    """A computed setup, with the continuum's eigenvalues to set beside it."""

    setup: Setup
    result: Result
    continuum: NDArray[np.float64]

    @property
    def seconds(self) -> dict[str, float]:
        """Wall time of the stages that were computed and not served from the cache."""
        return {k: v for k, v in self.result.seconds.items() if v > LEAST_SECONDS}


def picture_of(
    setup: Setup, *, points: PointFile | None, stages: Stages
) -> Callable[[Callable[[str, float], None]], Picture]:
    """Work for `lozenge_dashboard.jobs.Flight` that computes a setup."""

    def work(report: Callable[[str, float], None]) -> Picture:
        config = setup.config()
        seconds = predict(config).seconds if config.patch_rule.kind == "none" else 0.0
        if seconds > APART_FROM and stages.peek(search_key(config, points)) is None:
            prepare_elsewhere(
                config, points=points, stages=stages, report=report, predicted=seconds
            )
        result = compute(config, points=points, stages=stages, report=report)
        shown = min(CONTINUUM_MODES, 2 * result.patch.kept_modes + 20)
        return Picture(
            setup, result, continuum_eigenvalues(config, shown, ratio=result.oversampling)
        )

    return work


def at_once(setup: Setup) -> bool:
    """Whether a setup is small enough to be computed without being asked."""
    if 2 * setup.points.density > LIVE_HIGH:
        return False
    return setup.rules()[0].kind != "none" or predict(setup.config()).seconds < LIVE_SECONDS


def modes_key(setup: Setup) -> tuple[Any, ...]:
    """What the patch's modes depend on: setups that share it differ by milliseconds of work."""
    return setup.points, setup.mass, setup.rules()[0]
