"""Threads of the linear algebra: set for a while, and put back whatever overlaps."""

from __future__ import annotations

import itertools
from collections.abc import Iterator

import pytest

from lozenge_engine import threads
from lozenge_engine.threads import blas_threads


def pools() -> list[int]:
    return [
        library.num_threads
        for library in threads._controller().lib_controllers
        if library.user_api == "blas"
    ]


@pytest.fixture(autouse=True)
def two_threads() -> Iterator[None]:
    """Start from two threads each, and leave things as they were."""
    libraries = [x for x in threads._controller().lib_controllers if x.user_api == "blas"]
    before = [library.num_threads for library in libraries]
    for library in libraries:
        library.set_num_threads(2)
    yield
    for library, count in zip(libraries, before, strict=True):
        library.set_num_threads(count)


def test_one_thread_is_one_thread_everywhere() -> None:
    with blas_threads(1):
        assert set(pools()) == {1}


def test_the_numbers_of_threads_come_back() -> None:
    before = pools()
    with blas_threads(1), blas_threads(2):
        pass
    assert pools() == before


def test_the_numbers_of_threads_come_back_after_an_exception() -> None:
    before = pools()
    with pytest.raises(KeyError), blas_threads(1):
        raise KeyError
    assert pools() == before


def test_scipys_own_copy_never_gets_more_than_one() -> None:
    with blas_threads(2):
        owned = [
            x.num_threads
            for x in threads._controller().lib_controllers
            if x.user_api == "blas" and threads._is_scipys(x)
        ]
    assert set(owned) <= {1}


ENDINGS = [order for order in itertools.permutations(range(3)) if order.index(2) < order.index(1)]


@pytest.mark.parametrize("order", ENDINGS)
def test_computations_that_overlap_in_two_threads_put_everything_back(
    order: tuple[int, ...],
) -> None:
    """One computation (0) and another with a larger product inside (1, 2), ending in any order."""
    before = pools()
    contexts = [blas_threads(1), blas_threads(1), blas_threads(2)]
    for context in contexts:
        context.__enter__()
    for k in order:
        contexts[k].__exit__(None, None, None)
    assert pools() == before
