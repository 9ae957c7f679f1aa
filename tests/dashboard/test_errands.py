"""The process that computes for the evidence pages, met through its line."""

from __future__ import annotations

import threading
import time
from collections.abc import Callable, Iterator
from typing import Any

import pytest
from tests.dashboard import errand_tasks as tasks

from lozenge_dashboard.errands import GRACE, Errands
from lozenge_engine.errors import InputError

PATIENCE = 30.0


class Told:
    """What an errand said."""

    def __init__(self) -> None:
        self.outcomes: list[Any] = []
        self.parts: list[Any] = []
        self.stages: list[str] = []
        self.ended = threading.Event()

    def calls(self) -> dict[str, Callable[[Any], None]]:
        def done(outcome: Any) -> None:
            self.outcomes.append(outcome)
            self.ended.set()

        return {
            "done": done,
            "part": self.parts.append,
            "progress": lambda progress: self.stages.append(progress.stage),
        }

    def outcome(self) -> Any:
        assert self.ended.wait(PATIENCE)
        return self.outcomes[-1]


@pytest.fixture(scope="module")
def shared() -> Iterator[Errands]:
    errands = Errands()
    yield errands
    errands.close()


def asked(errands: Errands, name: str, task: Any, ask: Any, page: object = "page") -> Told:
    told = Told()
    errands.request(page, name, task, ask, **told.calls())
    return told


def until(holds: Callable[[], bool]) -> None:
    end = time.monotonic() + PATIENCE
    while not holds():
        assert time.monotonic() < end
        time.sleep(0.01)


def test_errand_gives_its_value_after_its_parts(shared: Errands) -> None:
    told = asked(shared, "a", tasks.stepwise, 3)
    assert told.outcome() == 3
    assert told.parts == [0, 1, 2]
    assert "steps" in told.stages


def test_refusal_keeps_its_words_and_another_error_its_kind(shared: Errands) -> None:
    no = asked(shared, "a", tasks.refused, 7).outcome()
    assert isinstance(no, InputError)
    assert str(no) == "number: given 7; allowed is another; type it."
    bug = asked(shared, "a", tasks.wrong, "x").outcome()
    assert isinstance(bug, RuntimeError)
    assert str(bug) == "KeyError: 'x'"


def test_process_keeps_its_stages_between_errands(shared: Errands) -> None:
    assert asked(shared, "a", tasks.known, "key").outcome() is False
    assert asked(shared, "a", tasks.known, "key").outcome() is True


def test_cancelled_errand_says_nothing_and_leaves_the_process(shared: Errands) -> None:
    asked(shared, "a", tasks.known, "before").outcome()
    told = asked(shared, "a", tasks.endless, None)
    until(lambda: bool(told.stages))
    shared.cancel("page", "a")
    assert asked(shared, "b", tasks.known, "before").outcome() is True
    assert told.outcomes == []


def test_latest_request_of_a_name_wins(shared: Errands) -> None:
    first = asked(shared, "a", tasks.endless, None)
    until(lambda: bool(first.stages))
    second = asked(shared, "a", tasks.double, 1)
    third = asked(shared, "a", tasks.double, 21)
    assert third.outcome() == 42
    assert first.outcomes == second.outcomes == []


def test_what_has_the_room_is_done_first(shared: Errands) -> None:
    order: list[str] = []
    running = asked(shared, "a", tasks.stepwise, 2)
    ended = []
    for name in "bc":
        told = Told()
        calls = told.calls()
        done = calls["done"]

        def noted(outcome: Any, *, name: str = name, done: Any = done) -> None:
            order.append(name)
            done(outcome)

        shared.request("page", name, tasks.double, 1, **{**calls, "done": noted})
        ended.append(told)
    shared.first("page", "c")
    for told in (running, *ended):
        told.outcome()
    assert order == ["c", "b"]


def test_closing_a_page_stops_only_its_own_errands(shared: Errands) -> None:
    mine = asked(shared, "a", tasks.endless, None, page="mine")
    later = asked(shared, "b", tasks.double, 1, page="mine")
    other = asked(shared, "a", tasks.double, 2, page="other")
    until(lambda: bool(mine.stages))
    shared.remove("mine")
    assert other.outcome() == 4
    assert mine.outcomes == later.outcomes == []


def test_errand_that_does_not_hear_ends_with_its_process(shared: Errands) -> None:
    told = asked(shared, "a", tasks.deaf, 60.0)
    until(lambda: bool(told.stages))
    start = time.monotonic()
    shared.cancel("page", "a")
    assert asked(shared, "b", tasks.double, 3).outcome() == 6
    assert GRACE - 0.1 < time.monotonic() - start < PATIENCE
    assert told.outcomes == []


def test_killed_process_is_said_and_started_again(shared: Errands) -> None:
    gone = asked(shared, "a", tasks.killed, None).outcome()
    assert isinstance(gone, RuntimeError)
    assert "press Compute" in str(gone)
    assert asked(shared, "a", tasks.double, 5).outcome() == 10


def test_close_ends_what_runs() -> None:
    errands = Errands()
    told = asked(errands, "a", tasks.deaf, 60.0)
    until(lambda: bool(told.stages))
    process = errands._process
    assert process is not None
    errands.close()
    process.join(PATIENCE)
    assert not process.is_alive()
    assert told.outcomes == []
