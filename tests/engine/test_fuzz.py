"""Files and addresses that come from outside: any damage is refused in words, or harmless."""

from __future__ import annotations

import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st
from tests.engine.fuzzing import (
    Damaged,
    damaged,
    odd_addresses,
    odd_presets,
    read_or_refused,
    targets,
)

CASES = 1000
STRATEGIES = {
    "preset": st.one_of(damaged("preset"), odd_presets()),
    "address": st.one_of(damaged("address"), odd_addresses()),
    "bundle": damaged("bundle"),
    "results": damaged("results"),
    "points": damaged("points"),
    "relation array": damaged("relation array"),
    "relation market": damaged("relation market"),
    "relation regions": damaged("relation regions"),
    "relation table": damaged("relation table"),
}


@pytest.mark.parametrize("name", sorted(STRATEGIES))
def test_the_sound_file_is_read(name: str) -> None:
    assert read_or_refused(name, targets()[name].sound) == ""


@pytest.mark.slow
@pytest.mark.parametrize("name", sorted(STRATEGIES))
def test_damage_is_refused_in_words_or_harmless(name: str) -> None:
    refused = 0

    @settings(
        max_examples=CASES,
        suppress_health_check=[HealthCheck.too_slow, HealthCheck.data_too_large],
    )
    @given(STRATEGIES[name])
    def check(case: Damaged) -> None:
        nonlocal refused
        refused += bool(read_or_refused(name, case.data))

    check()
    assert refused > CASES // 10, "the damage is not seen"
