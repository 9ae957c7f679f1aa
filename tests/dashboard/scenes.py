"""Small scenes for the views' tests."""

from __future__ import annotations

import functools

from lozenge_dashboard.records import Scene
from lozenge_engine.bench import continuum_eigenvalues
from lozenge_engine.config import Averaging, PointSource, Setup, SweepPlan
from lozenge_engine.pipeline import compute
from lozenge_engine.samples import Reading, take
from lozenge_engine.stages import Stages
from lozenge_engine.sweeps import (
    average,
    average_draws,
    density_curve,
    density_draws,
    separation_curve,
    separation_draws,
    size_curve,
    size_draws,
)

STAGES = Stages()
SMALL = Setup(
    points=PointSource(density=300.0, seed=5),
    region_count=2,
    half_width=0.35,
    separation=0.1,
    averaging=Averaging(sprinklings=3),
    sweeps=SweepPlan(
        density_low=200.0,
        density_high=500.0,
        density_points=4,
        size_low=0.6,
        size_high=1.1,
        size_points=3,
        separation_points=4,
        smallest_region=60,
    ),
)


@functools.cache
def bare(setup: Setup = SMALL) -> Scene:
    """A scene of one sprinkling, nothing behind it."""
    config = setup.config()
    result = compute(config, stages=STAGES)
    continuum = continuum_eigenvalues(config, 60, ratio=result.oversampling)
    return Scene(setup=setup, result=result, continuum=continuum)


@functools.cache
def full(setup: Setup = SMALL) -> Scene:
    """A scene with its average and all sweeps."""
    draws = {
        draw.key: draw
        for plan in (average_draws, density_draws, size_draws, separation_draws)
        for draw in plan(setup).draws
    }
    readings: dict[str, tuple[Reading, ...]] = {
        key: take(draw, stages=STAGES) for key, draw in draws.items()
    }
    return bare(setup)._replace(
        average=average(setup, readings),
        density=density_curve(setup, readings),
        size=size_curve(setup, readings),
        separation=separation_curve(setup, readings),
    )
