"""The campaign section of a preset: byte-stable, and refused with the path of what is wrong."""

from __future__ import annotations

import copy
import json
from dataclasses import replace
from typing import Any

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from lozenge_engine import config, plan, presets
from lozenge_engine.design import design
from lozenge_engine.errors import InputError
from lozenge_engine.plan import Axis, CampaignPlan, Target
from lozenge_engine.presets import Preset
from lozenge_engine.schema import load_schema

Path_ = tuple[str | int, ...]
WHOLE: dict[str, Any] = json.loads(presets.dumps(presets.shipped()["nested-diamond"]))
SECTION: dict[str, Any] = {
    "axes": [
        {"name": "density", "values": [500.0, 1000.0, 2000.0]},
        {"name": "region_count", "values": [1, 2]},
    ],
    "placements": [[0.0, 0.0], [0.1, -0.2]],
    "realisations": 200,
    "target": {"quantity": "slope", "error": 0.02, "relative": True},
    "budget": 900.0,
    "smallest_region": 80,
}
SAME_EACH_TIME = """  "campaign": {
    "axes": [
      {
        "name": "density",
        "values": [
          500.0,
          1000.0,
          2000.0
        ]
      },
      {
        "name": "region_count",
        "values": [
          1,
          2
        ]
      }
    ],
    "placements": [
      [
        0.0,
        0.0
      ],
      [
        0.1,
        -0.2
      ]
    ],
    "realisations": 200,
    "target": {
      "quantity": "slope",
      "error": 0.02,
      "relative": true
    },
    "budget": 900.0,
    "smallest_region": 80
  },
  "view": {"""


def edited(path: Path_, value: object) -> str:
    """A whole preset's text with one value of its campaign set."""
    section = copy.deepcopy(SECTION)
    part: Any = section
    for key in path[:-1]:
        part = part[key]
    part[path[-1]] = value
    return json.dumps({**WHOLE, "campaign": section})


def axis(name: str, *values: object) -> dict[str, object]:
    return {"name": name, "values": list(values)}


@pytest.mark.parametrize(
    ("path", "value", "where"),
    [
        (("axes",), [], "axes"),
        (("axes",), "density", "axes"),
        (("axes",), [axis("density", 1.0), axis("mass", 0.0), axis("order", 1.0)], "axes"),
        (("axes",), [axis("density", 1.0), axis("density", 2.0)], ""),
        (("axes", 1, "name"), "colour", "axes[1].name"),
        (("axes", 0, "values"), [], "axes[0].values"),
        (("axes", 0, "values"), 500.0, "axes[0].values"),
        (("axes", 0, "values"), [*range(1, 62)], "axes[0].values"),
        (("axes", 0, "values"), [500, 500.0], "axes[0].values"),
        (("axes", 0, "values", 2), float("nan"), "axes[0].values[2]"),
        (("axes", 0, "values", 2), -1.0, "axes[0].values[2]"),
        (("axes", 0, "values", 2), True, "axes[0].values[2]"),
        (("axes", 0, "values", 2), "1000", "axes[0].values[2]"),
        (("axes", 1, "values", 1), 1.5, "axes[1].values[1]"),
        (("axes", 1, "values", 1), 9, "axes[1].values[1]"),
        (("axes", 1), axis("truncation_mode", "none", "custom"), "axes[1].values[1]"),
        (("axes", 1, "step"), 1, "axes[1].step"),
        (("placements",), [], "placements"),
        (("placements",), [[0, 0], [0.0, -0.0]], "placements"),
        (("placements", 1), [0.1], "placements[1]"),
        (("placements", 1, 0), 2.5, "placements[1][0]"),
        (("realisations",), 0, "realisations"),
        (("realisations",), 1.5, "realisations"),
        (("target", "error"), -0.02, "target.error"),
        (("target", "error"), 0, "target.error"),
        (("target", "error"), float("nan"), "target.error"),
        (("target", "error"), float("inf"), "target.error"),
        (("target", "quantity"), "b", "target.quantity"),
        (("target", "relative"), 1, "target.relative"),
        (("target",), 0.02, "target"),
        (("budget",), 0, "budget"),
        (("budget",), "900 s", "budget"),
        (("smallest_region",), -1, "smallest_region"),
        (("deadline",), 1, "deadline"),
    ],
)
def test_a_bad_campaign_is_refused_with_the_path_of_the_offending_key(
    path: Path_, value: object, where: str
) -> None:
    with pytest.raises(InputError) as caught:
        presets.parse(edited(path, value))
    found, _, rest = str(caught.value).partition(": ")
    assert found == f"campaign.{where}".rstrip(".")
    assert "given " in rest
    assert "; allowed is " in rest
    assert "\n" not in rest


@pytest.mark.parametrize("key", SECTION)
def test_every_key_is_required(key: str) -> None:
    section = {k: v for k, v in SECTION.items() if k != key}
    with pytest.raises(InputError, match=rf"^campaign\.{key}: given nothing"):
        presets.parse(json.dumps({**WHOLE, "campaign": section}))


def test_the_section_may_be_left_out_and_is_then_not_written() -> None:
    bare = {k: v for k, v in WHOLE.items() if k != "campaign"}
    found = presets.parse(json.dumps(bare))
    assert found.campaign is None
    assert '"campaign"' not in presets.dumps(found)


def test_a_campaign_is_written_in_one_way_only() -> None:
    section = copy.deepcopy(SECTION)
    section["axes"][0]["values"] = [500, 1000, 2e3]
    section["axes"][1]["values"] = [1.0, 2.0]
    section |= {"placements": [[-0.0, 0], [0.1, -0.2]], "realisations": 200.0, "budget": 900}
    found = presets.parse(json.dumps(WHOLE | {"campaign": section}))
    assert SAME_EACH_TIME in presets.dumps(found)


def axes(name: str, values: st.SearchStrategy[Any]) -> st.SearchStrategy[Axis]:
    lists = st.lists(values, min_size=1, max_size=4, unique=True).map(tuple)
    return st.builds(Axis, name=st.just(name), values=lists)


def finite(low: float, high: float) -> st.SearchStrategy[float]:
    return st.floats(low, high, allow_nan=False).map(lambda x: x + 0.0)


first = st.one_of(
    axes("density", finite(1.0, 5e5)),
    axes("half_width", finite(1e-9, 1.0)),
    axes("separation", finite(0.0, 2.0)),
    axes("mass", finite(0.0, 1e4)),
)
second = st.one_of(
    axes("region_count", st.integers(1, 8)),
    axes("truncation_mode", st.sampled_from([*config.MODES])),
    axes("alpha", finite(0.05, 20.0)),
    axes("order", finite(0.5, 50.0)),
)
shifts = st.tuples(finite(-2.0, 2.0), finite(-2.0, 2.0))
plans = st.builds(
    CampaignPlan,
    axes=st.one_of(st.tuples(first), st.tuples(second), st.tuples(second, first)),
    placements=st.lists(shifts, min_size=1, max_size=4, unique=True).map(tuple),
    realisations=st.integers(1, 1_000_000),
    target=st.none()
    | st.builds(
        Target,
        quantity=st.sampled_from(plan.QUANTITIES),
        error=finite(1e-6, 10.0),
        relative=st.booleans(),
    ),
    budget=st.none() | finite(1.0, 1e8),
    smallest_region=st.integers(0, 100_000),
)


@settings(max_examples=100)
@given(made=plans)
def test_save_load_save_gives_the_same_bytes_and_the_same_plan(made: CampaignPlan) -> None:
    preset = Preset(title="t", sentence="s", campaign=made)
    text = presets.dumps(preset)
    again = presets.parse(text)
    assert again == preset
    assert presets.dumps(again) == text


def test_the_schema_allows_what_the_plan_allows() -> None:
    parts = load_schema()["$defs"]
    assert tuple(parts["axis"]["properties"]["name"]["enum"]) == plan.AXES
    quantity = parts["campaign"]["properties"]["target"]["properties"]["quantity"]
    assert tuple(quantity["enum"]) == plan.QUANTITIES
    told = {
        rule["if"]["properties"]["name"]["const"]: rule["then"]["properties"]["values"]["items"]
        for rule in parts["axis"]["allOf"]
    }
    assert set(told) == set(plan.AXES)
    assert tuple(told.pop("truncation_mode")["enum"]) == tuple(config.MODES)
    for name, items in told.items():
        low, high = items["minimum"], items["maximum"]
        step = 1 if items["type"] == "integer" else 1e-10
        assert Axis(name=name, values=(low, high)).values == (low, high)  # type: ignore[arg-type]
        for beyond in (low - step, high + max(step, 1e-9 * high)):
            with pytest.raises(InputError):
                Axis(name=name, values=(beyond,))  # type: ignore[arg-type]


@pytest.mark.parametrize("name", presets.SHIPPED)
def test_a_shipped_campaign_leaves_nothing_out_and_stays_in_the_scaling_regime(name: str) -> None:
    preset = presets.shipped()[name]
    assert preset.campaign is not None
    layout = design(preset.setup, preset.campaign)
    assert layout.left_out == ()
    assert min(cell.elements for cell in layout.cells) >= 80
    assert max(own.density for own in layout.sprinklings) <= 11_000


def test_equal_plans_are_equal_presets_and_other_plans_are_not() -> None:
    first, *_ = presets.shipped().values()
    assert first.campaign is not None
    more = replace(first, campaign=replace(first.campaign, realisations=7))
    assert more != first
    assert presets.parse(presets.dumps(more)).campaign == more.campaign
