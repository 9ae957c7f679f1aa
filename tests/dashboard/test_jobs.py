"""Work off the event loop: latest wins, taking turns, stopping."""

from __future__ import annotations

import os
import threading
import time
from collections.abc import Callable, Iterator

import pytest

from lozenge_dashboard.jobs import PATIENCE, Flight, Workshop
from lozenge_engine.config import PointSource, Setup
from lozenge_engine.samples import take
from lozenge_engine.sweeps import average_draws

WAIT = 30.0
SETUP = Setup(points=PointSource(density=150.0), half_width=0.4, separation=0.1)


def until(true: Callable[[], bool]) -> None:
    """Wait for something that another thread or process does."""
    end = time.monotonic() + WAIT
    while not true():
        assert time.monotonic() < end, "waited in vain"
        time.sleep(0.01)


@pytest.fixture
def done() -> list[object]:
    """Outcomes in the order in which they came."""
    return []


@pytest.fixture
def flight(done: list[object]) -> Iterator[Flight]:
    """A flight that stores its outcomes."""
    flight = Flight(done.append, lambda _: None)
    yield flight
    flight.close()


def test_latest_request_wins_and_those_between_never_run(
    flight: Flight, done: list[object]
) -> None:
    gate, started, ran = threading.Event(), threading.Event(), []

    def first(_report: object) -> str:
        started.set()
        gate.wait(WAIT)
        return "first"

    flight.request(first)
    assert started.wait(WAIT)
    for i in range(10):
        flight.request(lambda _report, i=i: ran.append(i) or i)
    gate.set()
    until(lambda: 9 in done)
    assert ran == [9]


def test_old_computation_is_stopped_by_a_newer_request(flight: Flight, done: list[object]) -> None:
    started = threading.Event()

    def endless(report: Callable[[str, float], None]) -> None:
        started.set()
        while True:
            time.sleep(0.02)
            report("modes", 0.0)

    flight.request(endless)
    assert started.wait(WAIT)
    begin = time.monotonic()
    flight.request(lambda _report: "new")
    until(lambda: bool(done))
    assert done == ["new"]
    assert time.monotonic() - begin >= PATIENCE / 2


def test_cancel_stops_at_the_next_report_and_says_nothing(
    flight: Flight, done: list[object]
) -> None:
    started, ended = threading.Event(), threading.Event()

    def endless(report: Callable[[str, float], None]) -> None:
        started.set()
        try:
            while True:
                time.sleep(0.02)
                report("modes", 0.0)
        finally:
            ended.set()

    flight.request(endless)
    assert started.wait(WAIT)
    flight.cancel()
    assert ended.wait(1.0)
    flight.request(lambda _report: "next")
    until(lambda: bool(done))
    assert done == ["next"]


def test_failure_is_an_outcome_and_the_thread_lives_on(flight: Flight, done: list[object]) -> None:
    flight.request(lambda _report: 1 / 0)
    until(lambda: bool(done))
    assert isinstance(done[0], ZeroDivisionError)
    flight.request(lambda _report: "fine")
    until(lambda: len(done) == 2)


@pytest.fixture(scope="module")
def workshop() -> Iterator[Workshop]:
    """A workshop with a real worker process."""
    workshop = Workshop()
    yield workshop
    workshop.close()


def test_worker_gives_the_readings_that_the_engine_gives(workshop: Workshop) -> None:
    draws = average_draws(SETUP).draws[:2]
    workshop.replace("page", draws, notify=lambda: None)
    keys = [d.key for d in draws]
    until(lambda: len(workshop.readings(keys)) == 2)
    for draw in draws:
        (got,), (expected,) = workshop.readings(keys)[draw.key], take(draw)
        assert got.entropy == pytest.approx(expected.entropy, rel=1e-9)
        assert got.union_support == pytest.approx(expected.union_support, rel=1e-9)


def test_pages_take_turns(workshop: Workshop) -> None:
    order: list[str] = []
    plans = {
        name: average_draws(SETUP.with_(points=PointSource(density=150.0, seed=seed))).draws[:3]
        for name, seed in (("a", 11), ("b", 12))
    }
    workshop.wait()  # both queues stand before the first draw is begun
    for name, draws in plans.items():
        workshop.replace(name, draws, notify=lambda name=name: order.append(name))
    until(lambda: len(order) == 6)
    assert order in (list("ababab"), list("bababa"))


def test_known_draws_are_not_taken_again(workshop: Workshop) -> None:
    draws = average_draws(SETUP).draws[:2]
    told: list[int] = []
    workshop.replace("page", draws, notify=lambda: told.append(1))
    time.sleep(0.2)
    assert told == []
    assert len(workshop.readings([d.key for d in draws])) == 2


def test_failed_draw_gives_its_reason_and_an_empty_reading(workshop: Workshop) -> None:
    source = PointSource(kind="file", density=100.0, file="gone.csv", sha256="0" * 64)
    draws = average_draws(SETUP.with_(points=source)).draws[:1]
    workshop.replace("page", draws, notify=lambda: None)
    until(lambda: bool(workshop.failures([draws[0].key])))
    assert workshop.readings([draws[0].key]) == {draws[0].key: ()}
    assert "gone.csv" in workshop.failures([draws[0].key])[0]


def test_removing_a_page_stops_its_draw_within_a_second_and_the_next_one_works(
    workshop: Workshop,
) -> None:
    slow = average_draws(Setup(points=PointSource(density=9000.0))).draws[:1]
    workshop.replace("slow", slow, notify=lambda: None)
    until(lambda: workshop.busy)
    time.sleep(0.3)
    begin = time.monotonic()
    workshop.remove("slow")
    until(lambda: not workshop.busy)
    assert time.monotonic() - begin < 1.0
    quick = average_draws(SETUP.with_(points=PointSource(density=150.0, seed=99))).draws[:1]
    workshop.replace("quick", quick, notify=lambda: None)
    until(lambda: bool(workshop.readings([quick[0].key])))


def test_worker_starts_with_one_thread_and_leaves_this_environment_alone(
    workshop: Workshop,
) -> None:
    before = dict(os.environ)
    draws = average_draws(SETUP.with_(points=PointSource(density=150.0, seed=5))).draws[:1]
    workshop.replace("page", draws, notify=lambda: None)
    until(lambda: bool(workshop.readings([draws[0].key])))
    assert dict(os.environ) == before
