"""Searches in a process of their own: same numbers, and a cancel that stops the work."""

import multiprocessing
import time

import pytest

from lozenge_dashboard.elsewhere import prepare_elsewhere
from lozenge_engine.config import PointSource, Setup
from lozenge_engine.errors import Cancelled, InputError
from lozenge_engine.pipeline import compute, search_key
from lozenge_engine.stages import Stages

PATIENT = 60.0


def config(elements):
    points = PointSource(density=elements / 2)
    return Setup(points=points, truncation_mode="none").config()


def search(asked, stages, report=lambda _stage, _fraction: None):
    prepare_elsewhere(asked, points=None, stages=stages, report=report, predicted=1.0)


def test_modes_found_elsewhere_give_the_same_entropy():
    asked, stages = config(300), Stages()
    search(asked, stages)
    assert stages.peek(search_key(asked)) is not None
    expected = compute(asked).regions[0].entropy
    assert compute(asked, stages=stages).regions[0].entropy == pytest.approx(expected, abs=1e-9)


def test_a_cancel_ends_the_process():
    def stop(_stage, _fraction):
        raise Cancelled

    with pytest.raises(Cancelled):
        search(config(3000), Stages(), stop)
    end = time.monotonic() + PATIENT
    while [p for p in multiprocessing.active_children() if p.name == "modes"]:
        assert time.monotonic() < end
        time.sleep(0.05)


def test_a_refusal_comes_back_as_a_refusal():
    with pytest.raises(InputError, match=r"patch rule: .* GB"):
        search(config(4600), Stages())
