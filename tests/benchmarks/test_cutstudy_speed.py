"""Time of a cut study beyond reaching its lowest cut."""

from __future__ import annotations

import time

import numpy as np
import pytest

from lozenge_engine.config import PointSource, Setup
from lozenge_engine.cutstudy import cut_study
from lozenge_engine.pipeline import compute
from lozenge_engine.stages import Stages

pytestmark = pytest.mark.benchmark


@pytest.mark.parametrize("stage", ["patch", "regions", "both"])
def test_forty_alphas_and_four_rules_take_under_three_seconds(stage: str) -> None:
    config = Setup(points=PointSource(density=1000.0, seed=3)).config()
    cache = Stages()
    compute(config, stages=cache)
    alphas = np.geomspace(0.25, 4.0, 40)
    cut_study(config, alphas=(0.2, 4.0), stages=("both",), rules=("root_count",), cache=cache)
    start = time.process_time()
    found = cut_study(config, alphas=tuple(alphas), stages=(stage,), cache=cache)
    busy = time.process_time() - start
    print(f"\n{stage}: {found.seconds:.2f} s, {busy:.2f} s of processor time")
    assert found.seconds < 3.0


def test_time_to_reach_the_floor_is_told_apart() -> None:
    config = Setup(points=PointSource(density=1000.0, seed=3)).config()
    cache = Stages()
    compute(config, stages=cache)
    found = cut_study(
        config, alphas=(0.25, 4.0), stages=("both",), rules=("root_count",), cache=cache
    )
    print(f"\nfrom the cut to a quarter of it: {found.floor_seconds:.2f} s")
    assert found.floor_seconds > 0
