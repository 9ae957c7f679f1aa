"""Data minus a reference with errors of its own, and what the references' tasks depend on."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from lozenge_engine import references
from lozenge_engine.chainline import chain_task
from lozenge_engine.config import PointSource, Setup, SweepPlan
from lozenge_engine.errors import InputError
from lozenge_engine.kernels.minus import fit_minus
from lozenge_engine.kernels.scaling import fit_shared
from lozenge_engine.presets import Preset, ViewState, dumps, parse
from lozenge_engine.stages import Stages
from lozenge_engine.twinplan import twin_plan

X = np.linspace(2.0, 3.0, 5)
SETUP = Setup(points=PointSource(density=200.0), sweeps=SweepPlan(separation_points=3))


def samples(count: int, rng: np.random.Generator) -> np.ndarray:
    """Sprinklings that share their scatter between points, around a line of slope 0.7."""
    shared = rng.normal(size=(count, 1))
    return 0.7 * X + 0.1 * (shared + rng.normal(size=(count, X.size)))


def test_a_reference_without_errors_only_shifts_the_line() -> None:
    data = samples(40, np.random.default_rng(1))
    plain, minus = fit_shared(X, data), fit_minus(X, data, 0.5 * X + 1.0, np.zeros_like(X))
    assert plain is not None
    assert minus is not None
    assert minus.slope == pytest.approx(plain.slope - 0.5, abs=1e-12)
    assert minus.intercept == pytest.approx(plain.intercept - 1.0, abs=1e-12)
    assert minus.slope_error == pytest.approx(plain.slope_error, rel=1e-9)
    assert minus.chi2 == pytest.approx(plain.chi2, rel=1e-9)
    assert minus.p_value == pytest.approx(plain.p_value, rel=1e-9)


def test_errors_of_data_and_reference_add_in_squares() -> None:
    data, own = samples(40, np.random.default_rng(2)), np.full(X.size, 0.05)
    without, having = (fit_minus(X, data, 0.5 * X, e) for e in (np.zeros_like(X), own))
    assert without is not None
    assert having is not None
    centred = X - X.mean()
    added = 0.05 / np.sqrt(centred @ centred)
    assert having.slope_error == pytest.approx(np.hypot(without.slope_error, added), rel=1e-9)
    assert having.chi2 < without.chi2


def test_slope_of_the_difference_is_as_uncertain_as_it_says() -> None:
    rng = np.random.default_rng(3)
    own = np.full(X.size, 0.03)
    pulls = []
    for _ in range(300):
        reference = 0.5 * X + own * rng.normal(size=X.size)
        fit = fit_minus(X, samples(30, rng), reference, own)
        assert fit is not None
        pulls.append((fit.slope - 0.2) / fit.slope_error)
    # The standard deviation of 300 pulls has an error of 4 %, of few samples 2 % more: 5 of them.
    assert np.std(pulls) == pytest.approx(1.0, abs=0.25)
    assert abs(np.mean(pulls)) < 5 / np.sqrt(300)


def test_too_few_points_or_sprinklings_give_no_line() -> None:
    data = samples(5, np.random.default_rng(4))
    assert fit_minus(X[:2], data[:, :2], X[:2], X[:2]) is None
    assert fit_minus(X, data[:1], X, X) is None
    few = fit_minus(X, data[:3], 0.5 * X, np.full(X.size, 0.1))
    assert few is not None
    assert np.isnan(few.chi2)


def test_closed_form_is_taken_where_there_is_one_and_sets_elsewhere() -> None:
    def levels(setup: Setup) -> list[str]:
        return [p.front.level for p in references.plan(setup, twin=True, chain=False).twin]

    curved = replace(SETUP.points, curvature="positive", radius=1.5)
    assert levels(SETUP) == ["preview", "exact"]
    assert levels(SETUP.with_(mass=1.0)) == ["preview", "refined"]
    assert levels(SETUP.with_(points=curved)) == ["preview", "refined"]


def test_the_twins_of_a_plan_stand_where_the_sweeps_do() -> None:
    plan = twin_plan(SETUP, "exact")
    rungs = [t.config.points.density for t in plan.density if t is not None]
    sweeps = SETUP.sweeps
    assert rungs == pytest.approx(
        np.geomspace(sweeps.density_low, sweeps.density_high, sweeps.density_points)
    )
    assert plan.size is not None
    assert len(plan.size.layouts) == SETUP.sweeps.size_points
    assert plan.separation is not None
    assert len(plan.separation.layouts) == 3
    single = SETUP.with_(region_count=1)
    assert twin_plan(single, "exact").separation is None


def test_the_chain_depends_on_the_fractions_the_mass_and_the_order() -> None:
    keys = {
        chain_task(setup, "density").key  # type: ignore[union-attr]
        for setup in (
            SETUP,
            SETUP.with_(mass=1.0),
            SETUP.with_(order=2.0),
            SETUP.with_(half_width=0.25),
        )
    }
    assert len(keys) == 4
    denser = SETUP.with_(points=PointSource(density=300.0))
    assert chain_task(denser, "density") == chain_task(SETUP, "density")


def test_the_chain_of_two_blocks_grows_as_four_ends_do() -> None:
    task = chain_task(SETUP, "density")
    assert task is not None
    (route,) = task.take(stages=Stages(), report=lambda _stage, _part: None)
    assert route.slope.value == pytest.approx(2.0 / 3.0, abs=1e-3)


def test_switches_that_are_off_leave_no_trace_in_a_preset() -> None:
    preset = Preset(title="a", sentence="b")
    assert "twin" not in dumps(preset)
    on = replace(preset, view=ViewState(twin=True, chain=True, difference=True))
    assert parse(dumps(on)) == on


def test_a_difference_without_a_twin_is_refused() -> None:
    with pytest.raises(InputError, match="difference"):
        ViewState(difference=True)
