"""Predicted cost, and what a computation teaches it."""

import pytest

from lozenge_engine import cost
from lozenge_engine.config import PointSource, Setup
from lozenge_engine.cost import CostModel
from lozenge_engine.errors import InputError
from lozenge_engine.pipeline import compute


def config(elements, **values):
    return Setup(points=PointSource(density=elements / 2), **values).config()


@pytest.fixture
def model(monkeypatch):
    """A model whose machine does 10 and 5 billion operations a second."""
    monkeypatch.setattr(cost, "_rate_in_cache", lambda: 10e9)
    monkeypatch.setattr(cost, "_rate_in_memory", lambda: 5e9)
    return CostModel()


def test_four_times_the_elements_cost_about_sixteen_times_the_time(model):
    small, large = (model.predict(config(n)).seconds for n in (25_000, 100_000))
    assert 12 < large / small < 20


def test_memory_grows_as_the_three_halves_power(model):
    small, large = (model.predict(config(n)).peak_bytes - cost.BASE_BYTES for n in (25e3, 1e5))
    assert 7 < large / small < 9


def test_a_hundred_thousand_elements_are_predicted_within_four_gibibytes(model):
    assert model.predict(config(100_000)).peak_bytes < 4 * 2**30


def test_no_cut_in_the_first_stage_is_predicted_as_a_dense_problem(model):
    cut, uncut = (
        model.predict(config(3000, truncation_mode=mode)).seconds for mode in ("two_stages", "none")
    )
    assert uncut > 20 * cut


def test_what_a_computation_took_moves_the_prediction_towards_it(model):
    asked = config(10_000)
    first = model.predict(asked).seconds
    assert model.learn(asked, 4 * first) == pytest.approx(4)
    assert model.predict(asked).seconds == pytest.approx(2 * first)


def test_a_massive_computation_teaches_nothing_about_massless_ones(model):
    before = model.predict(config(10_000)).seconds
    model.learn(config(10_000, mass=3.0), 1e3)
    assert model.predict(config(10_000)).seconds == before


@pytest.mark.parametrize("cached", [False, True])
def test_only_computations_that_search_modes_are_learnt_from(model, monkeypatch, cached):
    from lozenge_engine import pipeline
    from lozenge_engine.stages import Stages

    asked, stages = config(400), Stages()
    if cached:
        compute(asked, stages=stages)
    learnt = []
    monkeypatch.setattr(model, "learn", lambda *args: learnt.append(args))
    monkeypatch.setattr(pipeline, "shared_model", lambda: model)
    model.predict(asked)  # calibrates
    compute(asked, stages=stages)
    assert len(learnt) == (0 if cached else 1)


@pytest.mark.parametrize("value", ["two", "0", "-1", "1.5"])
def test_a_number_of_threads_that_is_none_is_refused(monkeypatch, value):
    monkeypatch.setenv("LOZENGE_THREADS", value)
    with pytest.raises(InputError, match=r"LOZENGE_THREADS: given .*whole number above 0"):
        compute(config(3000))
