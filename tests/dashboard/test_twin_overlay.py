"""The twin and the chain on the bench: what the views draw of them, and what runs behind."""

from __future__ import annotations

import functools
import json
import math
import time
from collections.abc import Callable, Iterator, Sequence
from dataclasses import replace

import numpy as np
import pytest
from tests.dashboard.scenes import SMALL, STAGES, full

from lozenge_dashboard.behind import Backdrop, Plans, Wanted, plans
from lozenge_dashboard.company import company_document, company_of, company_text
from lozenge_dashboard.curves import Curves
from lozenge_dashboard.jobs import Workshop
from lozenge_dashboard.palette import LIGHT
from lozenge_dashboard.readings import values
from lozenge_dashboard.records import Choices, Scene
from lozenge_dashboard.switches import choices_of, switched, view_of
from lozenge_dashboard.views import beside, counts, entropies, scaling, separation, spectrum
from lozenge_dashboard.views.catalogue import VIEWS
from lozenge_dashboard.views.marks import Layer, Strokes
from lozenge_engine import references
from lozenge_engine.config import Setup
from lozenge_engine.errors import Cancelled
from lozenge_engine.notation import with_error
from lozenge_engine.presets import ViewState
from lozenge_engine.samples import Reading, take
from lozenge_engine.stages import Stages
from lozenge_engine.sweeps import density_curve, separation_curve, size_curve
from lozenge_engine.twin import Twin, twin
from lozenge_engine.twinplan import TwinTask

TWIN = Choices(twin=True)
CHAIN = Choices(chain=True)
MINUS = Choices(twin=True, difference=True)
WAIT = 60.0


def nothing(_stage: str, _fraction: float) -> None:
    """A report that nobody reads."""


@functools.cache
def planned(setup: Setup = SMALL) -> Plans:
    """Everything behind a setup."""
    return plans(setup, twin=True, chain=True)


@functools.cache
def beside_scene(setup: Setup = SMALL) -> Scene:
    """A scene with its twin and chain, everything at the last level."""
    plan = planned(setup)
    tasks = {k: t for name in ("front",) for k, t in plan.references.front(1).items()}
    for name in ("density", "size", "separation"):
        tasks |= plan.references.sweep(name, 0)
    outcomes = {key: task.take(stages=STAGES, report=nothing) for key, task in tasks.items()}
    readings: dict[str, tuple[Reading, ...]] = {
        key: take(draw, stages=STAGES) for key, draw in (plan.density | plan.size).items()
    }
    scene = full(setup)
    assert scene.density is not None
    assert scene.size is not None
    company = references.read(
        setup, plan.references, outcomes, readings, density=scene.density, size=scene.size
    )
    return scene._replace(beside=company)


def strokes(data: object, colour: str) -> np.ndarray:
    """Ends of the strokes of one colour, as rows x0, y0, x1, y1."""
    (lines,) = [part for part in data if isinstance(part, Strokes)]  # type: ignore[attr-defined]
    rows = np.column_stack([lines.x0, lines.y0, lines.x1, lines.y1]).astype(float)
    return rows[lines.colour == colour]


# ---------------------------------------------------------------- what the views draw


def test_without_its_switch_no_view_draws_the_twin() -> None:
    with_twin, without = beside_scene(), full()
    for view in VIEWS:
        for figure in view.figures.values():
            a = figure.read(with_twin, Choices(), LIGHT)
            b = figure.read(without, Choices(), LIGHT)
            for one, other in zip(a, b, strict=True):
                if isinstance(one, Layer):
                    for left, right in zip(one, other, strict=True):
                        assert list(left) == list(right), view.name


def test_spectrum_draws_the_twin_of_the_patch_by_rank_in_the_accent() -> None:
    scene = beside_scene()
    assert scene.beside is not None
    front = scene.beside.front
    assert front is not None
    drawn = strokes(spectrum.read(scene, TWIN, LIGHT), LIGHT.accent)
    assert len(drawn) >= front.patch.size - 1
    np.testing.assert_allclose(drawn[0], [1.0, front.patch[0], 2.0, front.patch[1]])


def test_counts_and_entropies_put_an_upright_at_each_number_of_the_twin() -> None:
    scene = beside_scene()
    assert scene.beside is not None
    front = scene.beside.front
    assert front is not None
    drawn = strokes(counts.read(scene, TWIN, LIGHT), LIGHT.accent)
    assert set(drawn[:, 0]) == {front.patch_kept.value, *(v.value for v in front.kept)}
    expected = [beside.value_of(v, front).value for v in values(scene) if not v.far]
    drawn = strokes(entropies.read(scene, TWIN, LIGHT), LIGHT.accent)
    assert sorted(drawn[:, 0]) == pytest.approx(sorted(expected))
    pair = expected[-2:]
    total = front.entropy[0].value + front.entropy[1].value
    assert pair[0] == pytest.approx(total - front.union_support.value, abs=1e-9)
    assert pair[1] == pytest.approx(total - front.union_direct_sum.value, abs=1e-9)


def test_an_error_of_the_twin_is_a_bar_across_its_upright() -> None:
    scene = beside_scene()
    assert scene.beside is not None
    assert scene.beside.front is not None
    moved = scene.beside.front.entropy[0]._replace(error=0.05)
    front = scene.beside.front._replace(entropy=(moved, *scene.beside.front.entropy[1:]))
    shown = scene._replace(beside=scene.beside._replace(front=front))
    drawn = strokes(entropies.read(shown, TWIN, LIGHT), LIGHT.accent)
    across = drawn[drawn[:, 1] == drawn[:, 3]]
    assert len(across) == 1
    assert across[0, 2] - across[0, 0] == pytest.approx(0.1)


def test_separation_draws_both_rules_of_the_twin() -> None:
    scene = beside_scene()
    assert scene.beside is not None
    lines = scene.beside.separation
    assert lines is not None
    for switch, chosen in (("mutual", lines.mutual_information), ("union", lines.union)):
        choices = TWIN._replace(separation=switch)  # type: ignore[arg-type]
        drawn = strokes(separation.read(scene, choices, LIGHT), LIGHT.accent)
        for value, _ in chosen.values():
            assert any(np.allclose(row[[1, 3]], value[:2]) for row in drawn)


def test_scaling_draws_the_twin_at_every_rung_and_prints_its_slope() -> None:
    scene = beside_scene()
    assert scene.beside is not None
    line = scene.beside.density.twin
    assert line is not None
    assert scene.density is not None
    data = scaling.read(scene, TWIN, LIGHT)
    drawn = strokes(data, LIGHT.accent)
    for j, x in enumerate(scene.density.x):
        hit = np.isclose(drawn[:, 0], x) & np.isclose(drawn[:, 1], line.value[j])
        hit |= np.isclose(drawn[:, 2], x) & np.isclose(drawn[:, 3], line.value[j])
        assert hit.any()
    assert any(text.startswith("twin: slope") for text in data.words.text)


def test_data_minus_twin_is_the_difference_with_both_errors() -> None:
    scene = beside_scene()
    assert scene.beside is not None
    assert scene.density is not None
    line = scene.beside.density.twin
    assert line is not None
    means = np.array([e.mean for e in scene.density.entropy])
    np.testing.assert_allclose(line.minus.value, means - line.value)
    assert (line.minus.error >= line.error).all()
    data = scaling.read(scene, MINUS, LIGHT)
    seen = data.marks.x < 1e8
    np.testing.assert_allclose(np.sort(data.marks.y[seen]), np.sort(line.minus.value))
    assert data.labels[1].startswith("S minus twin")
    assert line.minus.fit is not None
    assert any(text.startswith(f"slope {line.minus.fit.slope:.1f}") for text in data.words.text)


def test_slope_of_the_difference_in_a_size_sweep_is_the_difference_of_slopes() -> None:
    setup = replace(SMALL, sweeps=replace(SMALL.sweeps, smallest_region=10))
    scene = beside_scene(setup)
    assert scene.beside is not None
    assert scene.size is not None
    line = scene.beside.size.twin
    assert line is not None
    assert scene.size.fit is not None
    assert line.minus.fit is not None
    assert line.minus.fit.slope == pytest.approx(scene.size.fit.slope - line.slope, abs=1e-9)


def test_the_chain_is_shifted_to_the_mean_of_the_data_and_says_so() -> None:
    scene = beside_scene()
    assert scene.beside is not None
    assert scene.density is not None
    chain = scene.beside.density.chain
    assert chain is not None
    assert chain.slope == pytest.approx(2.0 / 3.0, abs=1e-3)
    means = np.array([e.mean for e in scene.density.entropy])[scene.density.used]
    assert chain.value[scene.density.used].mean() == pytest.approx(means.mean())
    assert "own constant" in scaling.caution(scene, CHAIN)
    assert "own constant" not in scaling.caution(scene, Choices())


def test_a_massive_chain_stops_growing_where_the_mark_says() -> None:
    setup = SMALL.with_(
        mass=4.0, half_width=0.25, sweeps=replace(SMALL.sweeps, size_low=0.1, size_high=1.5)
    )
    (task,) = references.plan(setup, twin=False, chain=True).sweep("size", 0).values()
    outcome = task.take(stages=STAGES, report=nothing)[0]
    growth = np.diff(outcome.change) / np.diff(np.log(outcome.lengths))
    assert growth[-1] < 0.5 * growth[0]
    assert outcome.saturation == pytest.approx(0.25)


# ---------------------------------------------------------------- switches and presets


def test_there_is_no_difference_without_a_twin() -> None:
    assert switched(Choices(), "difference", value=True) == MINUS
    assert switched(MINUS, "twin", value=False) == Choices()


def test_a_preset_keeps_the_switches() -> None:
    choices = Choices(twin=True, chain=True, difference=True, scaling="size")
    assert choices_of(view_of(choices, theme="dark", focus=None)) == choices


def test_without_a_cut_on_the_patch_the_reason_stands_at_the_switch() -> None:
    uncut = SMALL.with_(truncation_mode="none")
    assert "nothing is cut" in references.no_twin(uncut)
    assert references.no_twin(SMALL) == ""
    assert references.plan(uncut, twin=True, chain=False).keys() == ()


# ---------------------------------------------------------------- what runs behind


def test_nothing_more_is_queued_without_the_switches() -> None:
    bare = plans(SMALL)
    assert all(
        hasattr(draw, "layouts") and not isinstance(draw, TwinTask)
        for draw in bare.queue(first="size")
    )
    assert bare.references.keys() == ()


def test_a_preview_comes_first_and_sets_come_before_what_refines_them() -> None:
    setup = SMALL.with_(mass=1.0)
    queue = planned(setup).queue(first="size")
    levels = [t.level for t in queue if isinstance(t, TwinTask)]
    assert isinstance(queue[0], TwinTask)
    assert levels == sorted(levels, key=("preview", "refined").index)
    assert "refined" in levels


def test_a_closed_form_comes_first_and_sets_check_it_last() -> None:
    queue = planned().queue(first="density")
    twins = [t for t in queue if isinstance(t, TwinTask)]
    assert queue[0] is twins[0]
    assert [t.level for t in twins if t.level != "exact"] == ["preview"]
    assert twins[-1].level == "preview"
    plan = planned().references
    tasks = plan.front(0) | plan.front(1)
    outcomes = {key: task.take(stages=STAGES, report=nothing) for key, task in tasks.items()}
    scene = full()
    assert scene.density is not None
    assert scene.size is not None
    company = references.read(SMALL, plan, outcomes, {}, density=scene.density, size=scene.size)
    assert company.front is not None
    assert company.check is not None
    assert company.front.sets == 0
    value, error = company.check.union_support
    # Four errors of a check whose error is like a standard error.
    assert abs(value - company.front.union_support.value) < 4 * error


def test_seed_and_kind_of_points_do_not_matter_to_the_twin() -> None:
    other = SMALL.with_(points=replace(SMALL.points, seed=99, kind="fixed"))
    assert planned(other).references.keys() == planned().references.keys()
    denser = SMALL.with_(points=replace(SMALL.points, density=310.0))
    assert planned(denser).references.keys() != planned().references.keys()


def test_levels_are_never_mixed_along_a_curve() -> None:
    setup = SMALL.with_(mass=1.0)
    plan = planned(setup).references
    preview, refined = plan.along
    (stand_in,) = next(iter(planned().references.quick().values())).take(
        stages=Stages(), report=nothing
    )

    def at(task: TwinTask, oversampling: int) -> tuple[Twin]:
        return (stand_in._replace(config=task.config, oversampling=oversampling),)

    outcomes = {t.key: at(t, 4) for t in preview.tasks("density")}
    first = refined.tasks("density")[0]
    outcomes[first.key] = at(first, 16)
    scene = full(SMALL)
    assert scene.density is not None
    assert scene.size is not None

    def level() -> int:
        assert scene.density is not None
        assert scene.size is not None
        company = references.read(setup, plan, outcomes, {}, density=scene.density, size=scene.size)
        assert company.density.twin is not None
        return company.density.twin.oversampling

    assert level() == 4
    outcomes |= {t.key: at(t, 16) for t in refined.tasks("density")}
    assert level() == 16


@pytest.fixture(scope="module")
def workshop() -> Iterator[Workshop]:
    """A workshop with a real worker process."""
    workshop = Workshop()
    yield workshop
    workshop.close()


def until(true: Callable[[], bool]) -> None:
    """Wait for another process."""
    end = time.monotonic() + WAIT
    while not true():
        assert time.monotonic() < end, "waited in vain"
        time.sleep(0.01)


def test_the_worker_gives_the_twin_that_the_engine_gives(workshop: Workshop) -> None:
    (task,) = planned().references.quick().values()
    workshop.replace("page", [task], notify=lambda: None)
    until(lambda: bool(workshop.outcomes([task.key])))
    ((got,),) = workshop.outcomes([task.key]).values()
    expected = twin(SMALL.config(), level="exact")
    assert got.union_support.value == pytest.approx(expected.union_support.value, rel=1e-9)


def test_a_twin_nobody_wants_is_given_up_and_its_process_goes_on(workshop: Workshop) -> None:
    slow = Setup(points=replace(SMALL.points, density=4000.0), mass=1.0)
    (task,) = planned(slow).references.front(1).values()
    workshop.replace("slow", [task], notify=lambda: None)
    until(lambda: workshop.busy)
    time.sleep(0.3)
    process = workshop._process
    workshop.remove("slow")
    # At the task's next report; a process that compiles its loops first gives none meanwhile.
    until(lambda: not workshop.busy)
    assert process is workshop._process
    assert process is not None
    assert process.is_alive()
    assert workshop.outcomes([task.key]) == {}


def test_a_twin_just_asked_for_does_not_wait_for_quiet(workshop: Workshop) -> None:
    (task,) = planned(SMALL.with_(half_width=0.31)).references.quick().values()
    workshop.wait()
    workshop.replace("page", [task], notify=lambda: None)
    until(lambda: workshop.busy or bool(workshop.outcomes([task.key])))
    assert workshop.quiet
    until(lambda: bool(workshop.outcomes([task.key])))


def test_a_held_twin_gives_way_and_is_begun_again(workshop: Workshop) -> None:
    slow = Setup(points=replace(SMALL.points, density=150.0), mass=1.0)
    (task,) = planned(slow).references.front(0).values()
    workshop.replace("page", [task], notify=lambda: None)
    until(lambda: workshop.busy)
    workshop.wait()
    workshop.hold("page")
    until(lambda: bool(workshop.outcomes([task.key])))
    assert workshop.failures([task.key]) == []


def test_readings_that_come_at_once_never_lose_what_was_asked_last() -> None:
    class Still:
        """A workshop in which nothing is ever done."""

        quiet = False
        queued: list[Setup]

        def __init__(self) -> None:
            self.queued = []

        def replace(self, _page: object, draws: Sequence[object], **_rest: object) -> None:
            self.queued.append(draws[-1].config)  # type: ignore[attr-defined]

        def readings(self, _keys: object) -> dict[str, object]:
            return {}

        outcomes = readings

        def failures(self, _keys: object) -> list[str]:
            return []

        def remove(self, _page: object) -> None:
            pass

    workshop = Still()
    backdrop = Backdrop(workshop, later=lambda call: call, show=lambda: None)  # type: ignore[arg-type]
    for density in (150.0, 151.0, 152.0):
        setup = SMALL.with_(points=replace(SMALL.points, density=density))
        backdrop._gather()
        time.sleep(0.05)
        backdrop.settle(Wanted(setup), None, first="density")
        backdrop._gather()  # as a draw does that is finished just then
        until(lambda density=density: _densities(workshop.queued)[-1:] == [density])  # type: ignore[misc]
    backdrop.close()


def _densities(configs: Sequence[object]) -> list[float]:
    """Densities of what was queued."""
    return [config.points.density for config in configs]  # type: ignore[attr-defined]


def test_a_task_stops_where_its_report_says() -> None:
    (task,) = planned(SMALL.with_(mass=1.0)).references.front(0).values()

    def stop(_stage: str, _fraction: float) -> None:
        raise Cancelled("twin")

    with pytest.raises(Cancelled):
        task.take(stages=Stages(), report=stop)


def test_a_number_in_closed_form_has_no_invented_error() -> None:
    assert beside.measured(1.23456, 0.0) == "1.235"
    assert beside.measured(25.0, 0.0) == "25"
    assert beside.measured(1.23456, 0.05) == "1.23(5)"
    assert beside.measured(math.nan, 0.0) == "–"


# ---------------------------------------------------------------- the command line


def test_the_command_line_computes_what_the_screen_shows() -> None:
    setup, plan = SMALL, planned()
    readings = {
        key: take(draw, stages=STAGES)
        for key, draw in (plan.density | plan.size | plan.separation).items()
    }
    curves = Curves(
        density=density_curve(setup, readings),
        size=size_curve(setup, readings),
        separation=separation_curve(setup, readings),
    )
    assert company_of(setup, ViewState(), readings, curves) is None
    company = company_of(setup, ViewState(twin=True, chain=True), readings, curves)
    shown = beside_scene().beside
    assert company is not None
    assert shown is not None
    assert company.front is not None
    assert company.front.entropy == shown.front.entropy  # type: ignore[union-attr]
    made = company_document(company)
    assert json.loads(json.dumps(made, allow_nan=False)) == made
    fit = company.density.twin.minus.fit  # type: ignore[union-attr]
    assert fit is not None
    assert made["density"]["twin"]["data_minus_twin"]["slope"] == fit.slope
    text = company_text(company, setup, curves)
    assert f"data minus twin: slope {with_error(fit.slope, fit.slope_error)}" in text
    assert "its constant is its own" in text


def test_without_sweeps_the_command_line_gives_the_twin_in_front_alone() -> None:
    company = company_of(SMALL, ViewState(twin=True, chain=True), {}, None)
    assert company is not None
    assert set(company_document(company)) == {"twin"}
    uncut = SMALL.with_(truncation_mode="none")
    company = company_of(uncut, ViewState(twin=True), {}, None)
    assert company is not None
    assert "nothing is cut" in company_text(company, uncut, None)


def test_above_the_live_limit_only_the_closed_form_is_computed() -> None:
    large = SMALL.with_(points=replace(SMALL.points, density=10_000.0))
    assert [t.level for t in plans(large, twin=True).light() if isinstance(t, TwinTask)] == [
        "exact"
    ]
    assert plans(large).light() == ()
    larger = SMALL.with_(points=replace(SMALL.points, density=100_000.0))
    assert plans(larger, twin=True).light() == ()
