"""The control column: ends follow the geometry, and what cannot act says why."""

from __future__ import annotations

from typing import Any

import pytest

from lozenge_dashboard.column import Behind, Heading, Job, TwinNote, column_state
from lozenge_engine.bench import Bench
from lozenge_engine.config import Setup


def state(bench: Bench, loaded: Setup | None = None, **errors: str) -> dict[str, Any]:
    """State of the column for a bench."""
    return column_state(
        bench,
        loaded or bench.setup(),
        view={"union_rule": ("support", "support"), "twin": (False, False)},
        errors=errors,
        seconds={"modes": 0.2, "entropies": 0.03},
        heading=Heading("title", "sentence"),
        job=Job(),
        behind=Behind(),
        twin=TwinNote(),
    )


def test_slider_ends_are_the_largest_values_that_fit() -> None:
    bench = Bench(region_count=2, half_width=0.3, separation=0.2)
    fields = state(bench)["fields"]
    assert fields["separation"]["high"] == pytest.approx(0.8)
    assert fields["half_width"]["high"] == pytest.approx(0.45)
    bench.separation = fields["separation"]["high"]
    bench.load(bench.setup().with_(separation=0.2, half_width=fields["half_width"]["high"]))


def test_count_that_does_not_fit_is_closed_with_the_reason() -> None:
    closed = state(Bench(half_width=0.3, separation=0.2))["fields"]["region_count"]["closed"]
    assert set(closed) == {3, 4, 5, 6, 7, 8}
    assert "do not fit" in closed[3]


def test_control_without_effect_is_disabled_and_says_why() -> None:
    fields = state(Bench(region_count=1))["fields"]
    assert "no neighbour" in fields["separation"]["disabled"]
    assert "no union" in fields["union_rule"]["disabled"]
    listed = Bench()
    listed.regions = listed.setup().regions()
    assert "list of regions" in state(listed)["fields"]["half_width"]["disabled"]


def test_difference_from_the_preset_is_marked_with_its_value() -> None:
    bench = Bench(separation=0.2)
    loaded = bench.setup()
    assert not state(bench, loaded)["page"]["changed"]
    bench.separation = 0.3
    now = state(bench, loaded)
    assert now["fields"]["separation"]["preset"] == 0.2
    assert now["page"]["changed"]
    assert [n for n, f in now["fields"].items() if "preset" in f] == ["separation"]


def test_rules_of_the_stages_appear_in_their_mode_only() -> None:
    assert state(Bench())["fields"]["patch_kind"]["hidden"]
    fields = state(Bench(truncation_mode="custom"))["fields"]
    assert "hidden" not in fields["patch_kind"]
    assert fields["patch_number"]["hidden"]
    assert fields["alpha"]["hidden"]


def test_modes_that_need_a_dense_problem_are_closed_for_many_elements() -> None:
    assert "closed" not in state(Bench(density=1000))["fields"]["truncation_mode"]
    closed = state(Bench(density=2400))["fields"]["truncation_mode"]["closed"]
    assert set(closed) == {"none", "regions_only"}


def test_oversampled_points_are_counted_for_the_dense_problem() -> None:
    bench = Bench(density=500, kind="lattice", oversampling=4, truncation_mode="none")
    assert state(bench)["fields"]["elements"]["high"] == 1000
    bench = Bench(density=1000, kind="lattice", oversampling=4)
    assert "closed" in state(bench)["fields"]["truncation_mode"]


def test_curvature_and_oversampling_show_where_they_act() -> None:
    fields = state(Bench())["fields"]
    assert fields["oversampling"]["hidden"]
    assert fields["radius"]["hidden"]
    assert "hidden" not in state(Bench(kind="sobol"))["fields"]["oversampling"]
    curved = state(Bench(curvature="negative"))["fields"]
    assert "hidden" not in curved["radius"]
    assert "massless" in curved["mass"]["disabled"]


def test_error_stands_at_its_control() -> None:
    fields = state(Bench(), separation="too wide")["fields"]
    assert fields["separation"]["error"] == "too wide"
    assert "error" not in fields["half_width"]


def test_price_of_a_change_stands_behind_its_group() -> None:
    costs = state(Bench())["costs"]
    assert costs["Points"] == "0.2 s"
    assert costs["Regions"] == "0.03 s"
