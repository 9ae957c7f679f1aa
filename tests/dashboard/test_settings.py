"""Controls: every one reads a setup and puts its value back."""

from __future__ import annotations

import pytest

from lozenge_dashboard.controls import GROUPS, VIEW_FIELDS
from lozenge_dashboard.settings import SETTINGS
from lozenge_engine.config import Setup
from lozenge_engine.errors import InputError

SETUP = Setup()
OTHER = {
    "elements": 3000,
    "kind": "fixed",
    "oversampling": 4,
    "seed": 7,
    "curvature": "negative",
    "radius": 2.5,
    "mass": 2.0,
    "region_count": 1,
    "half_width": 0.2,
    "separation": 0.3,
    "truncation_mode": "patch_only",
    "alpha": 1.5,
    "number": 12,
    "patch_kind": "none",
    "patch_alpha": 2.0,
    "patch_number": 9,
    "region_kind": "equal_share",
    "region_alpha": 2.0,
    "region_number": 9,
    "order": 2.0,
    "sprinklings": 3,
    "density_low": 300.0,
    "density_high": 3000.0,
    "density_points": 5,
    "size_low": 0.4,
    "size_high": 1.2,
    "size_points": 5,
    "separation_points": 7,
    "smallest_region": 50,
}
# A rule forgets what its kind does not use.
NEEDS = {
    "oversampling": ("kind", "lattice"),
    "radius": ("curvature", "positive"),
    "patch_number": ("patch_kind", "fixed_number"),
    "region_number": ("region_kind", "fixed_number"),
}


def test_page_offers_every_setting_and_no_other() -> None:
    offered = {field.name for group in GROUPS for field in group.fields}
    assert offered - set(VIEW_FIELDS) == set(SETTINGS)
    assert set(OTHER) == set(SETTINGS) - {"regions"}


@pytest.mark.parametrize("name", OTHER)
def test_value_that_is_put_is_read_back(name: str) -> None:
    setup = SETUP
    if name in NEEDS:
        first, value = NEEDS[name]
        setup = SETTINGS[first].put(setup, value)
    changed = SETTINGS[name].put(setup, OTHER[name])
    assert changed != setup
    assert SETTINGS[name].get(changed) == OTHER[name]


@pytest.mark.parametrize(
    "name",
    sorted(set(OTHER) - {"kind", "curvature", "truncation_mode", "patch_kind", "region_kind"}),
)
@pytest.mark.parametrize("value", ["wide", "", None, True, [1]])
def test_what_is_no_number_is_refused_in_words(name: str, value: object) -> None:
    with pytest.raises(InputError, match="given"):
        SETTINGS[name].put(SETUP, value)


@pytest.mark.parametrize("name", ["seed", "region_count", "sprinklings"])
def test_broken_number_is_refused_where_a_whole_one_is_needed(name: str) -> None:
    with pytest.raises(InputError, match="whole number"):
        SETTINGS[name].put(SETUP, 2.5)


def test_a_sprinkling_forgets_the_oversampling_of_a_lattice() -> None:
    lattice = SETTINGS["oversampling"].put(SETTINGS["kind"].put(SETUP, "lattice"), 8)
    assert SETTINGS["kind"].put(lattice, "sobol").points.oversampling == 8
    assert SETTINGS["kind"].put(lattice, "poisson").points.oversampling == 1


def test_row_becomes_a_list_and_a_row_again() -> None:
    regions = SETTINGS["regions"]
    listed = regions.put(SETUP, "list")
    assert listed.regions() == SETUP.regions()
    assert regions.get(listed) == [[0.0, -0.4, 0.3, 0.0], [0.0, 0.4, 0.3, 0.0]]
    assert regions.put(listed, "row").regions() == SETUP.regions()


def test_edited_list_is_taken_as_it_is_typed() -> None:
    rows = [[0.1, -0.5, 0.2, 0.0], [0.0, 0.5, 0.3, 0.2]]
    setup = SETTINGS["regions"].put(SETUP, rows)
    assert SETTINGS["regions"].get(setup) == rows


def test_added_region_goes_where_there_is_room() -> None:
    setup = SETTINGS["regions"].put(SETUP, [[0.0, -0.4, 0.3, 0.0], [0.0, 0.4, 0.3, 0.0], None])
    assert len(setup.regions()) == 3
    full = Setup(half_width=0.5, separation=0.0)
    with pytest.raises(InputError, match="make room"):
        SETTINGS["regions"].put(full, [[0.0, -0.5, 0.5, 0.0], [0.0, 0.5, 0.5, 0.0], None])


def test_overlapping_list_is_refused_and_names_the_regions() -> None:
    with pytest.raises(InputError, match="regions A and B"):
        SETTINGS["regions"].put(SETUP, [[0.0, 0.0, 0.3, 0.0], [0.0, 0.1, 0.3, 0.0]])
