"""The cache of stage outputs: what stays, what goes, and threads."""

from __future__ import annotations

import threading

import numpy as np
import pytest

from lozenge_engine.stages import Stages


def block(kilobytes: int) -> np.ndarray:
    return np.zeros(kilobytes * 128)


def test_a_value_is_made_once() -> None:
    stages, made = Stages(), []

    def make() -> int:
        made.append(1)
        return 7

    assert stages.get("k", make) == (7, False)
    assert stages.get("k", make) == (7, True)
    assert len(made) == 1


def test_a_failure_is_not_cached() -> None:
    stages = Stages()
    with pytest.raises(ZeroDivisionError):
        stages.get("k", lambda: 1 // 0)
    assert stages.peek("k") is None


def test_the_least_recently_used_goes_first() -> None:
    stages = Stages(limit_bytes=3000)
    for key in "ab":
        stages.put(key, block(1))
    stages.get("a", lambda: pytest.fail("it was there"))
    stages.put("c", block(1))
    assert [stages.peek(key) is not None for key in "abc"] == [True, False, True]


def test_looking_a_value_up_counts_as_use() -> None:
    stages = Stages(limit_bytes=3000)
    for key in "ab":
        stages.put(key, block(1))
    stages.peek("a")
    stages.put("c", block(1))
    assert stages.peek("a") is not None


def test_the_newest_stays_however_large() -> None:
    stages = Stages(limit_bytes=10)
    stages.put("a", block(1))
    assert stages.peek("a") is not None


@pytest.mark.parametrize("value", [block(1), (block(1), 3), ((block(1),), "x")])
def test_arrays_in_nested_tuples_count(value: object) -> None:
    stages = Stages(limit_bytes=1500)
    stages.put("a", value)
    stages.put("b", value)
    assert stages.peek("a") is None


def test_replacing_a_value_counts_it_once() -> None:
    stages = Stages(limit_bytes=2500)
    stages.put("a", block(1))
    for _ in range(5):
        stages.put("b", block(1))
    assert stages.peek("a") is not None


def test_threads_that_make_the_same_value_both_get_it() -> None:
    stages, barrier, found = Stages(), threading.Barrier(2), []

    def make() -> int:
        barrier.wait(5)
        return 3

    threads = [
        threading.Thread(target=lambda: found.append(stages.get("k", make)[0])) for _ in range(2)
    ]
    for thread in threads:
        thread.start()
    for thread in threads:
        thread.join(10)
    assert found == [3, 3]
