"""Preset files: byte-stable, refused with the path of what is wrong, whole or not written."""

from __future__ import annotations

import copy
import json
import math
import os
import re
import stat
import time
from dataclasses import fields, replace
from pathlib import Path
from typing import Any, Literal, get_args, get_origin, get_type_hints

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from jsonschema import Draft202012Validator

from lozenge_engine import config, evidence, geometry, presets, source
from lozenge_engine.agreement import Sender, compare_numbers
from lozenge_engine.config import Averaging, PointSource, Rule, Setup, SweepPlan
from lozenge_engine.document import MAX_BYTES, check_writable, write_bytes
from lozenge_engine.errors import InputError
from lozenge_engine.evidence import EvidencePlan
from lozenge_engine.geometry import Region
from lozenge_engine.presets import Preset, ViewState, canonical
from lozenge_engine.schema import folder, load_schema

SHA = "0f" * 32
ROW = json.loads(presets.dumps(presets.shipped()["two-equal-regions"]))
LISTED = json.loads(presets.dumps(presets.shipped()["unequal-pair"]))
CUSTOM = {
    "mode": "custom",
    "patch_rule": {"kind": "none", "alpha": 1.0, "number": 20},
    "region_rule": {"kind": "root_count", "alpha": 0.5, "number": 20},
}
Path_ = tuple[str | int, ...]


def edited(path: Path_, value: object, document: dict[str, Any] = ROW) -> dict[str, Any]:
    """A copy with one value set."""
    made = copy.deepcopy(document)
    part: Any = made
    for key in path[:-1]:
        part = part[key]
    part[path[-1]] = value
    return made


def without(path: Path_, document: dict[str, Any] = ROW) -> dict[str, Any]:
    """A copy with one key removed."""
    made = copy.deepcopy(document)
    part: Any = made
    for key in path[:-1]:
        part = part[key]
    del part[path[-1]]
    return made


def refusal(text: str | bytes) -> str:
    """The text of the refusal."""
    with pytest.raises(InputError) as caught:
        presets.parse(text)
    return str(caught.value)


# ------------------------------------------------------------------ what is refused


@pytest.mark.parametrize(
    ("document", "path"),
    [
        (edited(("colour",), 1), "colour"),
        (edited(("points", "sede"), 1), "points.sede"),
        (edited(("points", "density"), "12"), "points.density"),
        (edited(("points", "density"), None), "points.density"),
        (edited(("points", "density"), 0), "points.density"),
        (edited(("points", "density"), 10**400), "points.density"),
        (edited(("points", "seed"), 2**53), "points.seed"),
        (edited(("points", "seed"), True), "points.seed"),
        (edited(("points", "seed"), 1.5), "points.seed"),
        (edited(("points", "kind"), "grid"), "points.kind"),
        (edited(("points", "kind"), "file"), "points.file"),
        (edited(("points", "file"), "a.csv"), "points.file"),
        (edited(("points", "sha256"), SHA), "points.sha256"),
        (without(("mass",)), "mass"),
        (edited(("mass",), -1), "mass"),
        (edited(("mass",), 50.0), "mass"),
        (edited(("order",), 0.4), "order"),
        (without(("regions", "row")), "regions"),
        (edited(("regions", "list"), LISTED["regions"]["list"]), "regions"),
        (edited(("regions", "separation"), 0.1), "regions.separation"),
        (edited(("regions", "row", "half_width"), 0), "regions.row.half_width"),
        (edited(("regions", "row", "half_width"), 0.6), "regions.row"),
        (edited(("regions", "row", "count"), 9), "regions.row.count"),
        (without(("regions", "row", "separation")), "regions.row.separation"),
        (edited(("regions", "list"), [], LISTED), "regions.list"),
        (edited(("regions", "list", 1), 3, LISTED), "regions.list[1]"),
        (edited(("regions", "list", 1, "boost"), 4, LISTED), "regions.list[1].boost"),
        (edited(("regions", "list", 1, "x0"), 0.2, LISTED), "regions.list"),
        (edited(("regions", "separation"), 0.1, LISTED), "regions.separation"),
        (edited(("truncation", "mode"), "magic"), "truncation.mode"),
        (edited(("truncation", "mode"), "custom"), "truncation.patch_rule"),
        (edited(("truncation", "patch_rule"), CUSTOM["patch_rule"]), "truncation.patch_rule"),
        (edited(("truncation",), {**CUSTOM, "alpha": 1.0}), "truncation.alpha"),
        (
            edited(("truncation",), {**CUSTOM, "patch_rule": {"kind": "union_count", "alpha": 1}}),
            "truncation.patch_rule",
        ),
        (edited(("averaging", "sprinklings"), 0), "averaging.sprinklings"),
        (edited(("sweeps", "density_low"), 4000.0), "sweeps"),
        (edited(("sweeps", "size_points"), 2), "sweeps.size_points"),
        (edited(("view", "focus"), "table"), "view.focus"),
        (edited(("view",), []), "view"),
        (edited(("title",), ""), "title"),
        (edited(("title",), "two\nlines"), "title"),
        (edited(("title",), "\x1b[31mred"), "title"),
        (edited(("title",), "x" * 121), "title"),
        (edited(("title",), "half \ud83d"), "title"),
        (edited(("invented",), "yes"), "invented"),
        (edited(("sender",), {}), "sender.points_sha256"),
        (edited(("lozenge_preset",), 2), "lozenge_preset"),
        (edited(("lozenge_preset",), "1"), "lozenge_preset"),
        (edited(("lozenge_preset",), True), "lozenge_preset"),
        (without(("lozenge_preset",)), "lozenge_preset"),
        ([ROW], "the preset"),
        ("two-equal-regions", "the preset"),
        (None, "the preset"),
    ],
)
def test_a_bad_document_is_refused_with_the_path_of_the_offending_key(
    document: object, path: str
) -> None:
    text = refusal(json.dumps(document))
    where, _, rest = text.partition(": ")
    assert where == path or where.startswith(f"{path}.")
    assert "given " in rest
    assert "; allowed is " in rest
    assert "\n" not in text


WHOLE = presets.dumps(presets.shipped()["volume-law"]).encode()


@pytest.mark.parametrize(
    ("data", "path", "telling"),
    [
        (b"", "the preset", "an empty file"),
        (b" \n", "the preset", "an empty file"),
        (b"hello", "the preset", "line 1, column 1"),
        (b"{} {}", "the preset", "column 4"),
        (WHOLE[:300], "the preset", "ends in the middle"),
        (WHOLE[:-3], "the preset", "ends in the middle"),
        (WHOLE[:40], "the preset", "ends in the middle"),
        (WHOLE.decode().encode("utf-16"), "the preset", "not UTF-8"),
        (b"\xff\xfe{}", "the preset", "not UTF-8"),
        (b'{"mass": NaN}', "mass", "NaN"),
        (b'{"points": {"density": Infinity}}', "points.density", "beyond the range"),
        (b'{"regions": {"list": [1, -Infinity]}}', "regions.list[1]", "beyond the range"),
        (b'{"mass": 1e999}', "mass", "beyond the range"),
        (b'{"mass": ' + b"7" * 5000 + b"}", "the preset", "thousands of digits"),
        (b'{"points": {"seed": 1, "seed": 2}}', "points.seed", "twice"),
        (b'{"mass": 0, "order": 1, "mass": 0}', "mass", "twice"),
        (b'{"\\ud800": 1}', "the preset", "surrogate"),
        (b"[" * 100_000, "the preset", "deep nesting"),
        (b'{"a":' * 60 + b"1" + b"}" * 60, "a.a.a.a.a.a.a.a.a.a.a.a.a.a.a.a", "deep nesting"),
        (b" " * (MAX_BYTES + 1), "the preset", "MB"),
    ],
    ids=lambda value: repr(value)[:24],
)
def test_what_is_no_preset_document_at_all_is_refused_with_the_reason(
    data: bytes, path: str, telling: str
) -> None:
    text = refusal(data)
    assert text.startswith(f"{path}: given ")
    assert telling in text
    assert "\n" not in text


def test_a_misspelt_key_is_told_the_right_spelling() -> None:
    assert refusal(json.dumps(edited(("points", "sede"), 1))).endswith("write seed instead.")


def test_a_refused_row_names_the_half_width_that_fits() -> None:
    row = {"count": 2, "half_width": 0.6, "separation": 0.1}
    assert "to at most 0.475" in refusal(json.dumps(edited(("regions", "row"), row)))


def test_a_file_of_100_mb_is_refused_at_once_without_reading_it(tmp_path: Path) -> None:
    path = tmp_path / "huge.json"
    with path.open("wb") as file:
        file.truncate(100_000_000)
    start = time.perf_counter()
    with pytest.raises(InputError, match=r"huge\.json: given 100\.0 MB"):
        presets.read(path)
    assert time.perf_counter() - start < 0.05


def test_a_missing_file_a_directory_and_a_bad_name_are_refused(tmp_path: Path) -> None:
    with pytest.raises(InputError, match="no such file"):
        presets.read(tmp_path / "none.json")
    with pytest.raises(InputError, match="a directory"):
        presets.read(tmp_path)
    with pytest.raises(InputError, match="null"):
        presets.read("a\0b")


@pytest.mark.skipif(not Path("/dev/zero").exists(), reason="needs an endless file")
def test_an_endless_file_is_refused_after_the_limit() -> None:
    with pytest.raises(InputError, match="MB"):
        presets.read("/dev/zero")


def test_a_refusal_of_a_file_begins_with_its_path(tmp_path: Path) -> None:
    path = tmp_path / "mine.json"
    path.write_text(json.dumps(edited(("mass",), "light")))
    with pytest.raises(InputError) as caught:
        presets.read(path)
    assert str(caught.value).startswith(f"{path}: mass: given ")


def test_a_byte_order_mark_and_whole_floats_are_taken() -> None:
    document = edited(("averaging", "sprinklings"), 8.0)
    found = presets.parse(b"\xef\xbb\xbf" + json.dumps(document).encode())
    assert found.setup.averaging == Averaging(sprinklings=8)


# ------------------------------------------------------------------- what is written


def finite(low: float, high: float) -> st.SearchStrategy[float]:
    return st.floats(low, high, allow_nan=False)


def fits(**values: Any) -> Setup | None:
    """The setup, or None where the engine refuses it."""
    try:
        return Setup(**values)
    except InputError:
        return None


regions = st.builds(
    Region,
    t0=finite(-0.3, 0.3),
    x0=finite(-0.9, 0.9),
    half_width=finite(0.01, 0.3),
    boost=finite(-0.5, 0.5),
)
rules = st.builds(
    Rule,
    kind=st.sampled_from(["none", "root_count", "fixed_number"]),
    alpha=finite(0.05, 20.0),
    number=st.integers(1, 100_000),
)
sources = st.one_of(
    st.builds(
        PointSource,
        kind=st.sampled_from(["poisson", "fixed"]),
        density=finite(1.0, 500_000.0),
        seed=st.integers(0, 2**53 - 1),
        file=st.none() | st.just("left-over.csv"),
    ),
    st.builds(
        PointSource,
        kind=st.just("file"),
        density=st.integers(2, 1000).map(float),
        file=st.sampled_from(["grid.csv", "naïve points.csv"]),
        sha256=st.just(SHA),
    ),
)
sweep_plans = st.builds(
    SweepPlan,
    density_low=finite(10.0, 999.0),
    density_high=finite(1000.0, 500_000.0),
    size_low=finite(0.05, 0.9),
    size_high=finite(1.0, 20.0),
    separation_points=st.integers(2, 100),
)
setups = st.builds(
    fits,
    points=sources,
    mass=finite(0.0, 1.0),
    region_count=st.integers(1, 8),
    half_width=finite(0.001, 0.4),
    separation=finite(0.0, 0.5),
    region_list=st.none() | st.lists(regions, min_size=1, max_size=3).map(tuple),
    truncation_mode=st.sampled_from([*config.MODES, "custom"]),
    alpha=finite(0.05, 20.0),
    number=st.integers(1, 100_000),
    patch_rule=rules,
    region_rule=rules,
    order=finite(0.5, 50.0),
    averaging=st.builds(Averaging, sprinklings=st.integers(1, 10_000)),
    sweeps=sweep_plans,
).filter(lambda setup: setup is not None)
lines = st.text(
    st.characters(exclude_categories=["Cc", "Cs", "Zl", "Zp"]), min_size=1, max_size=100
)
views = st.builds(
    ViewState,
    theme=st.sampled_from(["light", "dark"]),
    focus=st.sampled_from([None, *presets.VIEWS]),
    union_rule=st.sampled_from(["support", "direct_sum"]),
    scaling_axis=st.sampled_from(["density", "size"]),
)


@settings(max_examples=60)
@given(setup=setups, title=lines, view=views, invented=st.booleans())
def test_save_load_save_gives_the_same_bytes_and_the_same_values(
    setup: Setup, title: str, view: ViewState, *, invented: bool
) -> None:
    made = Preset(title=title, sentence=title, invented=invented, setup=setup, view=view)
    text = presets.dumps(made)
    again = presets.parse(text)
    assert again == made
    assert presets.dumps(again) == text
    assert presets.parse(text.encode()) == made


@settings(max_examples=60)
@given(setup=setups)
def test_what_a_preset_stores_of_a_setup_computes_the_same(setup: Setup) -> None:
    stored = canonical(setup)
    assert stored.config().digest == replace_file(setup).config().digest
    assert canonical(stored) == stored


def replace_file(setup: Setup) -> Setup:
    """A file name left over on a sprinkling is the one thing that a digest sees in vain."""
    if setup.points.kind == "file":
        return setup
    return setup.with_(points=replace(setup.points, file=None))


def test_a_list_is_stored_as_it_is_computed() -> None:
    listed = presets.shipped()["unequal-pair"].setup
    wider = canonical(listed.with_(separation=0.2))
    assert wider.region_list == listed.with_(separation=0.2).regions()
    assert wider.separation == pytest.approx(0.2, abs=1e-12)
    assert wider.regions() == wider.region_list


def test_numbers_are_written_in_one_way_only() -> None:
    text = presets.dumps(
        Preset(
            title="t",
            sentence="s",
            setup=Setup(mass=-0.0, half_width=0.1, region_list=(Region(t0=-0.0, half_width=0.1),)),
        )
    )
    assert "-0.0" not in text
    assert '"mass": 0.0,' in text
    assert '"half_width": 0.1,' in text
    assert text.endswith("}\n")
    assert not text.endswith("\n\n")


def test_a_preset_that_no_file_can_hold_is_refused_before_anything_is_written(
    tmp_path: Path,
) -> None:
    path = tmp_path / "kept.json"
    path.write_text("old")
    with pytest.raises(InputError, match="title: "):
        presets.write(path, Preset(title="two\nlines", sentence="s"))
    assert path.read_text() == "old"


def test_a_preset_is_written_whole_or_not_at_all(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    path = tmp_path / "mine.json"
    first = presets.shipped()["nested-diamond"]
    presets.write(path, first)
    before = path.read_bytes()

    def full_disk(_descriptor: int) -> None:
        raise OSError(28, "No space left on device")

    monkeypatch.setattr(os, "fsync", full_disk)
    with pytest.raises(InputError, match="No space left on device"):
        presets.write(path, presets.shipped()["volume-law"])
    assert path.read_bytes() == before
    assert [p.name for p in tmp_path.iterdir()] == ["mine.json"]


def test_writing_keeps_the_mode_of_a_file_and_follows_a_link(tmp_path: Path) -> None:
    path, link = tmp_path / "mine.json", tmp_path / "link.json"
    write_bytes(path, b"old")
    path.chmod(0o640)
    link.symlink_to(path)
    write_bytes(link, b"new")
    assert link.is_symlink()
    assert path.read_bytes() == b"new"
    assert stat.S_IMODE(path.stat().st_mode) == 0o640


def test_paths_that_take_no_file_are_refused_before_and_after(tmp_path: Path) -> None:
    (tmp_path / "file").write_text("")
    for bad in (tmp_path, tmp_path / "none" / "a.json", tmp_path / "file" / "a.json"):
        with pytest.raises(InputError):
            check_writable(bad)
        with pytest.raises(InputError):
            write_bytes(bad, b"")
    with pytest.raises(InputError, match="a device or a pipe"):
        write_bytes(Path(os.devnull), b"")
    check_writable(tmp_path / "new.json")
    assert sorted(p.name for p in tmp_path.iterdir()) == ["file"]


# ---------------------------------------------------------------------- the schema


def test_the_schema_is_a_valid_schema_that_closes_every_object() -> None:
    schema = load_schema()
    Draft202012Validator.check_schema(schema)

    def objects(part: object) -> None:
        if isinstance(part, dict):
            if part.get("type") in ("object", ["object", "null"]) and "properties" in part:
                closed = part.get("additionalProperties") is False
                restated = not set(part) - {"type", "description", "properties"}
                assert closed or restated, part
            for value in part.values():
                objects(value)
        if isinstance(part, list):
            for value in part:
                objects(value)

    objects(dict(schema))


def test_the_schema_allows_what_the_engine_allows() -> None:
    parts = load_schema()["$defs"]
    points = parts["points"]["properties"]
    assert points["seed"]["maximum"] == config.MAX_SEED - 1
    assert points["density"]["maximum"] == config.MAX_ELEMENTS / geometry.PATCH_AREA
    assert points["kind"]["enum"] == [*source.POINT_KINDS]
    assert points["curvature"]["enum"] == [*source.CURVATURES]
    assert points["oversampling"]["maximum"] == source.MAX_OVERSAMPLING
    assert points["radius"]["minimum"] == source.MIN_RADIUS
    assert points["radius"]["maximum"] == source.MAX_RADIUS
    assert parts["truncation"]["properties"]["mode"]["enum"] == [*config.MODES, "custom"]
    assert parts["regions"]["properties"]["list"]["maxItems"] == geometry.MAX_REGIONS
    assert parts["regions"]["properties"]["row"]["properties"]["count"]["maximum"] == (
        geometry.MAX_REGIONS
    )
    assert parts["view"]["properties"]["focus"]["enum"] == [None, *presets.VIEWS]
    assert load_schema()["properties"]["mass"]["maximum"] >= 0.3 * math.sqrt(
        points["density"]["maximum"]
    )


def test_the_schema_has_the_keys_of_an_evidence_plan() -> None:
    section = load_schema()["$defs"]["evidence"]
    names = [field.name for field in fields(evidence.EvidencePlan)]
    assert [*section["properties"]] == names
    assert section["required"] == names
    hints = get_type_hints(evidence.EvidencePlan)
    choices = {name: get_args(hint) for name, hint in hints.items() if get_origin(hint) is Literal}
    assert choices
    for name, allowed in choices.items():
        assert section["properties"][name]["enum"] == [*allowed]
    assert section["properties"]["rules"]["items"]["enum"] == [*evidence.RULES]


QUASI = PointSource(kind="lattice", oversampling=4, curvature="negative", radius=2.5, seed=3)


@pytest.mark.parametrize(
    "changes",
    [
        {"setup": Setup(points=QUASI)},
        {"setup": Setup(points=PointSource(curvature="positive", radius=0.7))},
        {"setup": Setup(points=PointSource(kind="sobol", oversampling=64, density=100.0))},
        {"evidence": EvidencePlan()},
        {"evidence": EvidencePlan(rules=("equal_share",), rank=7, uncut_space=True, alphas=3)},
    ],
)
def test_quasi_uniform_curved_and_evidence_come_back_byte_by_byte(changes: dict[str, Any]) -> None:
    preset = replace(presets.shipped()[presets.FIRST], **changes)
    text = presets.dumps(preset)
    assert presets.parse(text) == preset
    assert presets.dumps(presets.parse(text)) == text


def test_defaults_of_later_keys_are_not_written() -> None:
    points = json.loads(presets.dumps(presets.shipped()[presets.FIRST]))["points"]
    assert [*points] == ["kind", "density", "seed"]


@pytest.mark.parametrize(
    ("section", "values", "words"),
    [
        ("points", {"kind": "poisson", "oversampling": 4}, "only quasi-uniform"),
        ("points", {"curvature": "positive", "radius": 0.65}, "points.radius"),
        ("points", {"curvature": "round"}, "points.curvature"),
        ("evidence", {"alpha_low": 2.0, "alpha_high": 1.0}, "evidence: alpha_high"),
        ("evidence", {"rules": []}, "evidence.rules"),
        ("evidence", {"level": "endless"}, "evidence.level"),
        ("evidence", {"rank": 1.5}, "evidence.rank"),
    ],
)
def test_a_refused_new_key_is_named(section: str, values: dict[str, Any], words: str) -> None:
    preset = replace(presets.shipped()[presets.FIRST], evidence=EvidencePlan())
    document = json.loads(presets.dumps(preset))
    document[section] |= values
    with pytest.raises(InputError, match=re.escape(words)):
        presets.parse(json.dumps(document))


# ------------------------------------------------------------------ shipped presets


def test_the_presets_are_shipped_and_no_other() -> None:
    found = {path.name for path in folder().glob("*.json")}
    assert found == {f"{name}.json" for name in presets.SHIPPED} | {"preset.schema.json"}
    assert len(presets.SHIPPED) == len(set(presets.SHIPPED))
    assert presets.FIRST in presets.SHIPPED


@pytest.mark.parametrize("name", presets.SHIPPED)
def test_a_shipped_preset_is_invented_and_byte_stable(name: str) -> None:
    path = folder() / f"{name}.json"
    found = presets.read(path)
    assert found.invented
    assert found.title
    assert found.sentence
    assert presets.dumps(found).encode() == path.read_bytes()


@pytest.mark.parametrize("name", presets.SHIPPED)
def test_a_shipped_preset_is_live_and_in_the_scaling_regime(name: str) -> None:
    preset = presets.shipped()[name]
    setup = preset.setup
    assert 2 * setup.points.density <= 5000
    densities = [setup.points.density]
    if name == "rows-of-tenths":  # too small for the screen: its campaign holds enough elements
        assert preset.campaign is not None
        densities = [
            x for axis in preset.campaign.axes if axis.name == "density" for x in axis.values
        ]
    for region in setup.regions():
        assert region.area * min(densities) >= setup.sweeps.smallest_region * (1 - 1e-9)


def test_the_first_preset_is_two_equal_regions_with_errors() -> None:
    setup = presets.shipped()[presets.FIRST].setup
    assert setup.region_count == 2
    assert setup.averaging.sprinklings == 8


def test_the_corner_region_touches_the_corner_of_the_patch() -> None:
    (region,) = presets.shipped()["corner-region"].setup.regions()
    assert region.x0 - region.reach == pytest.approx(-1.0, abs=1e-12)


def test_the_volume_law_cuts_nothing() -> None:
    setup = presets.shipped()["volume-law"].setup
    assert [rule.kind for rule in setup.rules()] == ["none", "none"]


# --------------------------------------------------------------------- comparison


def sender(**changes: Any) -> Sender:
    """Numbers of two regions, as a result gives them."""
    region = {
        "t0": 0.0,
        "half_width": 0.3,
        "boost": 0.0,
        "elements": 225,
        "kept_modes": 26,
        "nominal_modes": 30.0,
        "entropy": 2.25,
        "status": "ok",
    }
    union = {"kept_modes": 52, "entropy": 4.3, "status": "ok"}
    numbers: dict[str, Any] = {
        "elements": 2500,
        "points_sha256": SHA,
        "patch_modes": 95,
        "patch_nominal_modes": 100.0,
        "regions": [{**region, "x0": -0.35}, {**region, "x0": 0.35}],
        "union": {"support": union, "direct_sum": dict(union)},
        "mutual_information": [
            {
                "a": 0,
                "b": 1,
                "gap": 0.1,
                "support": 0.2,
                "direct_sum": 0.2,
                "cross_block": 0.1,
                "status": "ok",
            }
        ],
        "total_correlation": {"support": 0.2, "direct_sum": math.nan},
        "tripartite_information": [],
        "certificate": {
            "met": True,
            "reasons": (),
            "residual": 1e-15,
        },
    }
    versions = {"python": "3.11.7", "numpy": "2.4.6"}
    hashed = changes.pop("points_sha256", SHA)
    versions |= changes.pop("versions", {})
    for path, value in changes.items():
        numbers = edited(tuple(_keys(path)), value, numbers)
    return Sender(numbers=numbers, points_sha256=hashed, versions=versions)


def _keys(path: str) -> Path_:
    return tuple(int(key) if key.isdigit() else key for key in path.split("__"))


def test_equal_numbers_of_the_same_points_say_how_equal() -> None:
    near = compare_numbers(sender(), sender(regions__0__entropy=2.25 + 3e-13))
    assert near.text == "same points, S equal to 3e-13"
    assert near.agrees
    assert near.largest_difference == pytest.approx(3e-13, rel=0.1)
    assert compare_numbers(sender(), sender()).text == "same points, S equal in every digit"


def test_other_versions_are_told_and_do_not_disagree() -> None:
    found = compare_numbers(sender(), sender(versions={"numpy": "2.5.0"}))
    assert found.agrees
    assert found.text.endswith("; versions differ: numpy 2.4.6 there, 2.5.0 here")


def test_different_points_are_not_compared() -> None:
    found = compare_numbers(sender(), sender(points_sha256="ab" * 32, elements=2511))
    assert not found.agrees
    assert found.largest_difference is None
    assert found.text.startswith(
        "different points: 2500 elements with hash 0f0f0f0f0f0f there, "
        "2511 elements with hash abababababab here"
    )


@pytest.mark.parametrize(
    ("changes", "telling"),
    [
        ({"regions__1__entropy": 2.26}, "S of B differs by 0.01 (2.25 there, 2.26 here)"),
        ({"regions__1__entropy": None}, "S of B: 2.25 there, no number here"),
        ({"regions__0__kept_modes": 27}, "kept modes of A: 26 there, 27 here"),
        ({"regions__0__status": "undetermined"}, "the verdict on A: ok there, undetermined here"),
        ({"union__support__entropy": 4.4}, "S of the union by support differs by 0.1"),
        ({"mutual_information__0__direct_sum": 0.3}, "I(A:B) by direct sum differs by 0.1"),
        ({"total_correlation__support": 0.25}, "total correlation by support differs by 0.05"),
        ({"patch_modes": 96}, "the patch's kept modes: 95 there, 96 here"),
        ({"certificate__met": False}, "the certificate: met there, not met here"),
    ],
)
def test_a_number_that_differs_is_named(changes: dict[str, Any], telling: str) -> None:
    found = compare_numbers(sender(), sender(**changes))
    assert not found.agrees
    assert found.text.startswith("same points, but ")
    assert telling in found.text


def test_numbers_of_other_regions_are_told_apart() -> None:
    found = compare_numbers(sender(), sender(regions__0__half_width=0.25))
    assert not found.agrees
    assert "half_width of A is 0.3 there, 0.25 here" in found.text


def test_a_sender_goes_through_a_file_unchanged() -> None:
    made = replace(presets.shipped()[presets.FIRST], sender=sender())
    text = presets.dumps(made)
    assert presets.parse(text) == made
    assert presets.dumps(presets.parse(text)) == text
    assert text.count(SHA) == 1
    assert '"direct_sum": null' in text
    assert "residual" not in text
