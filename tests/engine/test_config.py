"""Configurations: what is refused, and hashes that see what matters."""

from __future__ import annotations

import json
import math
from dataclasses import FrozenInstanceError, replace
from typing import Any

import pytest

from lozenge_engine import presets
from lozenge_engine.config import (
    MAX_ELEMENTS,
    MAX_SEED,
    MODES,
    Averaging,
    Config,
    PointSource,
    Rule,
    Setup,
    SweepPlan,
)
from lozenge_engine.design import identity
from lozenge_engine.errors import InputError, refuse
from lozenge_engine.geometry import Region, equal_row
from lozenge_engine.placement import gaps

PAIR = (Region(x0=-0.5, half_width=0.2), Region(x0=0.4, half_width=0.3))

REFUSED: list[tuple[type, dict[str, Any], str]] = [
    (PointSource, {"kind": "grid"}, "kind"),
    (PointSource, {"density": 0.5}, "density"),
    (PointSource, {"density": MAX_ELEMENTS}, "density"),
    (PointSource, {"density": math.nan}, "density"),
    (PointSource, {"density": "1000"}, "density"),
    (PointSource, {"density": True}, "density"),
    (PointSource, {"seed": -1}, "seed"),
    (PointSource, {"seed": MAX_SEED}, "seed"),
    (PointSource, {"seed": 1.0}, "seed"),
    (PointSource, {"kind": "file"}, "points"),
    (PointSource, {"sha256": "ab"}, "points"),
    (PointSource, {"oversampling": 4}, "oversampling"),
    (PointSource, {"kind": "lattice", "oversampling": 0}, "oversampling"),
    (PointSource, {"kind": "sobol", "oversampling": 65}, "oversampling"),
    (PointSource, {"kind": "lattice", "oversampling": 2.0}, "oversampling"),
    (PointSource, {"kind": "lattice", "oversampling": 64, "density": 1e5}, "density"),
    (PointSource, {"curvature": "round"}, "curvature"),
    (PointSource, {"curvature": "positive", "radius": 0.69}, "radius"),
    (PointSource, {"curvature": "negative", "radius": 1001.0}, "radius"),
    (PointSource, {"curvature": "negative", "radius": math.inf}, "radius"),
    (PointSource, {"kind": "file", "sha256": "ab", "curvature": "positive"}, "curvature"),
    (PointSource, {"curvature": "positive", "radius": 0.7, "density": 4e5}, "density"),
    (Config, {"points": PointSource(curvature="negative"), "mass": 1.0}, "mass"),
    (Rule, {"kind": "half"}, "rule"),
    (Rule, {"alpha": 0.04}, "alpha"),
    (Rule, {"alpha": 20.1}, "alpha"),
    (Rule, {"alpha": math.inf}, "alpha"),
    (Rule, {"kind": "none", "alpha": math.nan}, "alpha"),
    (Rule, {"number": 0}, "number"),
    (Rule, {"number": 2.5}, "number"),
    (Config, {"realisation": -1}, "realisation"),
    (Config, {"mass": -0.1}, "mass"),
    (Config, {"mass": 0.31 * math.sqrt(1000.0)}, "mass"),
    (Config, {"order": 0.49}, "order"),
    (Config, {"order": math.nan}, "order"),
    (Config, {"regions": ()}, "regions"),
    (Config, {"regions": (PAIR[0], PAIR[0])}, "regions A and B"),
    (Config, {"patch_rule": Rule(kind="union_count")}, "patch rule"),
    (Config, {"patch_rule": Rule(kind="equal_share")}, "patch rule"),
    (
        Config,
        {"points": PointSource(kind="file", sha256="ab"), "realisation": 1},
        "realisation",
    ),
    (Averaging, {"sprinklings": 0}, "sprinklings"),
    (Averaging, {"sprinklings": 10_001}, "sprinklings"),
    (SweepPlan, {"density_low": 9.0}, "density_low"),
    (SweepPlan, {"density_low": 4000.0}, "density sweep"),
    (SweepPlan, {"size_low": 1.0}, "size sweep"),
    (SweepPlan, {"size_high": math.nan}, "size_high"),
    (SweepPlan, {"density_points": 2}, "density_points"),
    (SweepPlan, {"separation_points": 1}, "separation_points"),
    (SweepPlan, {"smallest_region": -1}, "smallest_region"),
    (Setup, {"truncation_mode": "all"}, "truncation_mode"),
    (Setup, {"region_count": 9}, "region_count"),
    (Setup, {"half_width": 0.6}, "the row of regions"),
    (Setup, {"separation": -0.1}, "separation"),
    (Setup, {"separation": math.nan}, "separation"),
    (Setup, {"alpha": math.nan}, "alpha"),
    (Setup, {"number": 0}, "number"),
    (Setup, {"truncation_mode": "custom", "alpha": math.nan}, "alpha"),
    (Setup, {"truncation_mode": "custom", "number": 0}, "number"),
    (Setup, {"region_list": PAIR, "half_width": 5.0}, "half_width"),
    (Setup, {"region_list": PAIR, "half_width": math.nan}, "half_width"),
    (Setup, {"region_list": PAIR, "region_count": 99}, "region_count"),
    (Setup, {"region_list": PAIR[:1], "separation": math.nan}, "separation"),
    (Setup, {"region_list": PAIR[:1], "separation": -1.0}, "separation"),
    (Setup, {"region_count": 1, "half_width": 0.5, "separation": 5.0}, "separation"),
]


@pytest.mark.parametrize(("what", "values", "word"), REFUSED, ids=lambda v: str(v)[:60])
def test_a_wrong_value_is_refused_by_name(what: type, values: dict[str, Any], word: str) -> None:
    with pytest.raises(InputError) as caught:
        what(**values)
    assert str(caught.value).startswith(word)


@pytest.mark.parametrize(("what", "values", "word"), REFUSED[:40], ids=lambda v: str(v)[:60])
def test_a_refusal_says_what_was_given_what_is_allowed_and_what_to_do(
    what: type, values: dict[str, Any], word: str
) -> None:
    with pytest.raises(InputError, match=r"^.+: given .+; allowed is .+; .+\.$"):
        what(**values)


def test_a_long_value_is_shortened_in_a_refusal() -> None:
    error = refuse("x", given="a" * 500, allowed="b", do="c")
    assert len(str(error)) < 200


@pytest.mark.parametrize(
    ("what", "values"),
    [
        (PointSource, {"density": 1}),
        (PointSource, {"seed": MAX_SEED - 1}),
        (Config, {"mass": 0.3 * math.sqrt(1000.0)}),
        (Config, {"order": 0.5}),
        (Config, {"regions": (Region(half_width=1.0),)}),
        (Rule, {"alpha": 0.05}),
        (SweepPlan, {"separation_points": 2}),
    ],
    ids=str,
)
def test_the_ends_of_a_range_are_allowed(what: type, values: dict[str, Any]) -> None:
    what(**values)


# ----------------------------------------------------------------------- hashes


def test_the_digest_of_the_default_is_the_one_written_here() -> None:
    assert Config().digest == DEFAULT_DIGEST


CHANGES: list[dict[str, Any]] = [
    {"points": PointSource(seed=2)},
    {"points": PointSource(density=1001.0)},
    {"points": PointSource(kind="fixed")},
    {"realisation": 1},
    {"mass": 0.1},
    {"order": 2.0},
    {"regions": (Region(half_width=0.4),)},
    {"regions": (Region(half_width=0.5, boost=0.01),)},
    {"patch_rule": Rule(alpha=2.0)},
    {"patch_rule": Rule(kind="none")},
    {"region_rule": Rule(alpha=2.0)},
    {"region_rule": Rule(kind="fixed_number", number=5)},
]


@pytest.mark.parametrize("change", CHANGES, ids=str)
def test_the_digest_sees_every_change_of_what_is_computed(change: dict[str, Any]) -> None:
    assert Config(**change).digest != Config().digest


def test_no_two_of_these_changes_share_a_digest() -> None:
    assert len({Config(**change).digest for change in CHANGES}) == len(CHANGES)


@pytest.mark.parametrize(
    ("one", "other"),
    [
        ({"mass": 0}, {"mass": 0.0}),
        ({"mass": -0.0}, {"mass": 0.0}),
        ({"order": 1}, {}),
        ({"points": PointSource(density=1000)}, {}),
        ({"region_rule": Rule(number=50)}, {}),
        ({"region_rule": Rule(kind="none", alpha=2.0)}, {"region_rule": Rule(kind="none")}),
        (
            {"regions": (Region(t0=-0.0, x0=-0.0, half_width=0.5, boost=-0.0),)},
            {"regions": (Region(half_width=0.5),)},
        ),
    ],
    ids=str,
)
def test_equal_configurations_hash_equally(one: dict[str, Any], other: dict[str, Any]) -> None:
    assert Config(**one).digest == Config(**other).digest


def test_canonical_json_is_sorted_compact_and_reads_back() -> None:
    text = Config().canonical_json()
    assert text == json.dumps(json.loads(text), sort_keys=True, separators=(",", ":"))


def test_a_configuration_is_a_value() -> None:
    assert hash(Config()) == hash(Config())
    with pytest.raises(FrozenInstanceError):
        Config().mass = 1.0  # type: ignore[misc]


def test_a_list_of_regions_becomes_a_tuple_or_is_refused() -> None:
    try:
        config = Config(regions=[Region(half_width=0.5)])  # type: ignore[arg-type]
    except InputError:
        return
    assert hash(config) == hash(Config())


# ------------------------------------------------------------------------ rules


def test_what_a_rule_does_not_use_is_its_default() -> None:
    assert Rule(kind="none", alpha=3.0, number=7) == Rule(kind="none")
    assert Rule(kind="root_count", number=7) == Rule()
    assert Rule(kind="fixed_number", alpha=3.0, number=7) == Rule(kind="fixed_number", number=7)


@pytest.mark.parametrize("mode", MODES)
def test_a_named_mode_is_a_pair_of_rules_with_the_alpha_and_number_of_the_setup(mode: str) -> None:
    patch, region = Setup(truncation_mode=mode, alpha=1.5, number=9).rules()  # type: ignore[arg-type]
    kinds = MODES[mode]  # type: ignore[index]
    assert (patch, region) == tuple(Rule(kind=k, alpha=1.5, number=9) for k in kinds)


def test_the_mode_custom_takes_the_rules_as_they_are() -> None:
    rules = Rule(kind="fixed_number", number=12), Rule(kind="equal_share", alpha=0.7)
    setup = Setup(truncation_mode="custom", patch_rule=rules[0], region_rule=rules[1], alpha=3.0)
    assert setup.rules() == rules


def test_a_named_mode_ignores_the_custom_rules() -> None:
    assert Setup(patch_rule=Rule(alpha=5.0)).config() == Setup().config()


# ----------------------------------------------------------------------- setups


def test_without_a_list_the_regions_are_the_equal_row() -> None:
    setup = Setup(region_count=3, half_width=0.2, separation=0.1)
    assert setup.regions() == equal_row(3, 0.2, 0.1)


def test_a_list_at_its_own_separation_is_taken_to_the_bit() -> None:
    setup = Setup(region_list=PAIR, separation=sum(gaps(PAIR)))
    assert setup.regions() is PAIR


def test_separation_moves_the_regions_of_a_list() -> None:
    setup = Setup(region_list=PAIR, separation=0.1)
    assert gaps(setup.regions()) == pytest.approx((0.1,))


def test_a_setup_compiles_to_the_configuration_of_a_realisation() -> None:
    config = Setup(mass=2.0, order=3.0).config(5)
    assert (config.realisation, config.mass, config.order) == (5, 2.0, 3.0)


def test_a_changed_copy_is_checked_again() -> None:
    with pytest.raises(InputError):
        Setup().with_(half_width=0.9)


def test_a_lower_density_refuses_a_mass_that_it_cannot_carry() -> None:
    setup = Setup(mass=9.0)
    with pytest.raises(InputError, match="mass"):
        setup.with_(points=replace(setup.points, density=500.0))


DEFAULT_DIGEST = "cdeded20b7a4782015e69c1358ea749180296eca5a68b609108a0f33cf557861"


# ------------------------------------------------------------------ what older files rest on


def test_digests_of_older_versions_stay_the_same() -> None:
    # Frozen before quasi-uniform points and curvature were added.
    assert Config().digest == "cdeded20b7a4782015e69c1358ea749180296eca5a68b609108a0f33cf557861"
    setup = presets.shipped()["two-equal-regions"].setup
    assert setup.config().digest == (
        "7aff7773d9c80c565c1f0265669773297d6272213c086bbe49f324f47ea609b7"
    )


def test_campaign_identities_of_older_versions_stay_the_same() -> None:
    preset = presets.shipped()["three-equal-regions"]
    assert preset.campaign is not None
    assert identity(preset.setup, preset.campaign) == (
        "b9c8f8445dcc5ed1fcc6123109f0743f3a6480d833fc65ce7c9493f8753282fa"
    )


@pytest.mark.parametrize(
    "other",
    [
        PointSource(kind="lattice"),
        PointSource(kind="sobol"),
        PointSource(kind="lattice", oversampling=2),
        PointSource(curvature="positive"),
        PointSource(curvature="negative"),
        PointSource(curvature="negative", radius=2.0),
    ],
)
def test_digest_sees_kind_oversampling_and_curvature(other: PointSource) -> None:
    digests = {Config(points=source).digest for source in (PointSource(), other)}
    assert len(digests) == 2


def test_flat_sources_are_equal_whatever_their_radius() -> None:
    assert PointSource(radius=3.0) == PointSource()
