"""From a mode picked to its columns ready to be sent, 2 000 elements, everything cached before."""

from __future__ import annotations

import statistics
import time

import pytest

from lozenge_dashboard.palette import LIGHT
from lozenge_dashboard.records import EvidenceChoices, EvidenceScene
from lozenge_dashboard.views import modeshape
from lozenge_dashboard.views.marks import Layer
from lozenge_engine.config import PointSource, Setup
from lozenge_engine.evidence import EvidencePlan
from lozenge_engine.modeview import mode_record
from lozenge_engine.pipeline import compute
from lozenge_engine.stages import Stages
from lozenge_engine.statecheck import state_record

SETUP = Setup(
    points=PointSource(kind="fixed", density=1000.0, seed=1),
    region_count=2,
    half_width=0.3,
    separation=0.1,
)


@pytest.mark.parametrize("operator", ["patch", "region", "union"])
def test_mode_is_ready_to_be_drawn_within_three_tenths_of_a_second(operator) -> None:
    stages, config = Stages(), SETUP.config()
    compute(config, stages=stages)
    seconds = []
    for rank in (1, 2, 3, 10, 20, 40):
        start = time.perf_counter()
        record = mode_record(config, stages=stages, operator=operator, rank=rank)
        scene = EvidenceScene(setup=SETUP, plan=EvidencePlan(), mode=record)
        data = modeshape.read(scene, EvidenceChoices(), LIGHT)
        for layer in data:
            if isinstance(layer, Layer):
                layer.source()
        seconds.append(time.perf_counter() - start)
    print(f"\n{operator}: first {seconds[0]:.3f} s, then {statistics.median(seconds[1:]):.3f} s")
    assert max(seconds) < 0.3


def test_checks_of_the_state_take_little_beyond_its_modes() -> None:
    stages, config = Stages(), SETUP.config()
    compute(config, stages=stages)
    start = time.perf_counter()
    state_record(config, stages=stages)
    print(f"\nstate: {time.perf_counter() - start:.2f} s beyond the modes")
    assert time.perf_counter() - start < 2.0
