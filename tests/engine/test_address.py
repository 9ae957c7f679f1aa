"""The state of the page in an address: whole, checked, and never dropped in silence."""

from __future__ import annotations

from urllib.parse import parse_qsl, urlencode

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from lozenge_engine import address
from lozenge_engine.config import PointSource, Rule, Setup
from lozenge_engine.errors import InputError
from lozenge_engine.geometry import Region
from lozenge_engine.presets import FIRST, Preset, ViewState, shipped

LIST = (Region(t0=0.0, x0=-0.4, half_width=0.2), Region(t0=0.1, x0=0.3, half_width=0.15, boost=0.2))
CUSTOM = Setup(
    truncation_mode="custom",
    patch_rule=Rule(alpha=0.9),
    region_rule=Rule(kind="fixed_number", number=12),
)


def changed(query: str, **values: str) -> str:
    return urlencode(dict(parse_qsl(query)) | values)


def screen(setup: Setup, **view: object) -> Preset:
    return Preset(title="A court", sentence="Of ours.", setup=setup, view=ViewState(**view))  # type: ignore[arg-type]


@pytest.mark.parametrize("name", shipped())
def test_a_shipped_preset_comes_back(name: str) -> None:
    preset = shipped()[name]
    found = address.read_query(address.query_of(preset))
    assert found.faults == ()
    assert (found.preset.setup, found.preset.view) == (preset.setup, preset.view)
    assert (found.preset.title, found.preset.sentence) == (preset.title, preset.sentence)
    assert found.preset.invented == preset.invented


@pytest.mark.parametrize(
    "preset",
    [
        screen(Setup(region_list=LIST), theme="dark", focus="scaling"),
        screen(CUSTOM, union_rule="direct_sum"),
        screen(Setup(points=PointSource(density=1234.5, seed=2**53 - 1), mass=1.25)),
        screen(Setup(points=PointSource(kind="fixed"), truncation_mode="patch_only")),
        screen(Setup(points=PointSource(kind="lattice", oversampling=4, curvature="negative"))),
        screen(Setup(points=PointSource(curvature="positive", radius=2.5)), twin=True),
    ],
    ids=["list", "custom", "seed", "fixed", "lattice", "curved"],
)
def test_every_kind_of_screen_comes_back(preset: Preset) -> None:
    found = address.read_query(address.query_of(preset))
    assert found == address.Arrival(preset, ())


def test_it_is_compact() -> None:
    assert len(address.query_of(shipped()[FIRST])) < 900


@pytest.mark.parametrize(
    ("name", "text", "words"),
    [
        ("density", "-3", "points.density"),
        ("density", "many", "points.density"),
        ("half_width", "0", "half_width"),
        ("mode", "some", "truncation.mode"),
        ("theme", "blue", "view.theme"),
        ("seed", "1.5", "points.seed"),
        ("density", "1e999", "points.density"),
        ("densty", "3", '"densty"'),
    ],
)
def test_one_bad_value_is_named_and_the_others_hold(name: str, text: str, words: str) -> None:
    good = screen(Setup(points=PointSource(density=1500.0, seed=77), mass=0.5))
    found = address.read_query(changed(address.query_of(good), **{name: text}))
    assert len(found.faults) == 1
    assert words in found.faults[0]
    assert found.preset.setup.mass == 0.5
    assert found.preset.title == "A court"
    if name != "seed":
        assert found.preset.setup.points.seed == 77


def test_values_that_do_not_go_together_are_named() -> None:
    good = screen(Setup(region_count=3, half_width=0.2, separation=0.1))
    found = address.read_query(changed(address.query_of(good), half_width="0.5"))
    assert "the row of regions" in found.faults[0]
    assert found.preset.setup.region_count == 3


def test_a_list_beside_a_row_is_named() -> None:
    good = screen(Setup(region_list=LIST))
    found = address.read_query(address.query_of(good) + "&count=3")
    assert "count" in found.faults[0]
    assert found.preset.setup == good.setup


@pytest.mark.parametrize(
    ("query", "words"),
    [
        ("", "no version"),
        ("v=2&density=3", "version"),
        ("density=3", "no version"),
        ("v=1&density=3&density=4", "twice"),
        ("v=1&" + "x" * 9000, "characters"),
        ("v=1&%ff=3", "the address"),
        ("no query", "the address"),
        ("v=1" + "&a=1" * 300, "the address"),
    ],
)
def test_what_is_no_address_is_refused_whole(query: str, words: str) -> None:
    with pytest.raises(InputError, match=words):
        address.read_query(query)


@settings(max_examples=100, deadline=None)
@given(st.text(max_size=200))
def test_any_text_is_read_or_refused(text: str) -> None:
    try:
        found = address.read_query(f"v=1&{text}")
    except InputError:
        return
    assert isinstance(found.preset, Preset)


@settings(max_examples=60, deadline=None)
@given(
    st.dictionaries(
        st.sampled_from(sorted(address._keys())),
        st.one_of(
            st.floats().map(repr),
            st.integers().map(str),
            st.sampled_from(["true", "null", "poisson", "custom", "[1]", "{}", ""]),
            st.text(max_size=8),
        ),
        max_size=6,
    )
)
def test_any_values_of_known_keys_are_taken_or_named(values: dict[str, str]) -> None:
    found = address.read_query(urlencode({"v": "1"} | values, errors="replace"))
    assert address.read_query(address.query_of(found.preset)).faults == ()
