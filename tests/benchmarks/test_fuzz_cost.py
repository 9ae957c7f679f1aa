"""Ten thousand damaged files for every reader: each is refused or read at once, in little memory.

Run on an idle machine: ``pytest -m benchmark tests/benchmarks/test_fuzz_cost.py -s``.
"""

from __future__ import annotations

import resource
import time

import pytest
from hypothesis import HealthCheck, given, settings
from tests.engine.fuzzing import Damaged, read_or_refused, targets
from tests.engine.test_fuzz import STRATEGIES

CASES = 10_000
SECONDS = 1.0
BYTES = 200e6


def peak() -> float:
    """Most memory that this process has held, in bytes."""
    return resource.getrusage(resource.RUSAGE_SELF).ru_maxrss * 1024.0


@pytest.mark.parametrize("name", sorted(STRATEGIES))
def test_damage_is_refused_within_a_second_and_200_mb(name: str) -> None:
    read_or_refused(name, targets()[name].sound)
    start, before, longest, refused = time.perf_counter(), peak(), 0.0, 0

    @settings(max_examples=CASES, suppress_health_check=list(HealthCheck))
    @given(STRATEGIES[name])
    def check(case: Damaged) -> None:
        nonlocal longest, refused
        begin = time.perf_counter()
        refused += bool(read_or_refused(name, case.data))
        longest = max(longest, time.perf_counter() - begin)

    check()
    grown = peak() - before
    print(
        f"\n{name}: {CASES} cases, {refused} refused, longest {1e3 * longest:.0f} ms, memory "
        f"grew by {grown / 1e6:.0f} MB, {time.perf_counter() - start:.0f} s in all"
    )
    assert longest < SECONDS
    assert grown < BYTES
