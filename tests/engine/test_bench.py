"""The reactive model: every parameter acts or is refused, and a refusal changes nothing."""

from __future__ import annotations

import math
import os
import subprocess
import sys
from pathlib import Path
from typing import Any

import numpy as np
import pytest

import lozenge_engine
from lozenge_engine.bench import Bench, continuum_eigenvalues
from lozenge_engine.config import Averaging, PointSource, Rule, Setup, SweepPlan
from lozenge_engine.errors import InputError
from lozenge_engine.geometry import Region
from lozenge_engine.kernels import modes
from lozenge_engine.kernels.laws import diamond_eigenvalues
from lozenge_engine.kernels.points import sprinkle
from lozenge_engine.placement import gaps
from lozenge_engine.pointfile import PointFile, parse_points

SOURCE_ROOT = Path(lozenge_engine.__file__).parents[1]
TOUCHING = (Region(x0=-0.5, half_width=0.5), Region(x0=0.5, half_width=0.5))
PAIR = (Region(x0=-0.5, half_width=0.2), Region(x0=0.4, half_width=0.3))
SMALL = {"density": 100.0, "half_width": 0.3}


def own_points(density: float = 93.0) -> PointFile:
    p = sprinkle(density=density, seed=5, fixed=True)
    t, x = (p.u + p.v) / math.sqrt(2), (p.u - p.v) / math.sqrt(2)
    rows = "\n".join(f"{a!r},{b!r}" for a, b in zip(t.tolist(), x.tolist(), strict=True))
    return parse_points(f"t,x\n{rows}\n".encode(), name="own.csv")


def values(bench: Bench) -> dict[str, Any]:
    return {k: v for k, v in bench.param.values().items() if k != "name"}


# ------------------------------------------------------------ every parameter acts


@pytest.mark.parametrize(
    "change",
    [
        {"density": 1300.0},
        {"elements": 3000.0},
        {"seed": 2},
        {"kind": "fixed"},
        {"mass": 1.0},
        {"region_count": 1},
        {"half_width": 0.2},
        {"separation": 0.1},
        {"regions": PAIR},
        {"truncation_mode": "patch_only"},
        {"alpha": 2.0},
        {"order": 2.0},
    ],
    ids=str,
)
def test_a_change_of_this_parameter_changes_what_is_computed(change: dict[str, Any]) -> None:
    bench = Bench()
    before = bench.config().digest
    bench.param.update(**change)
    assert bench.config().digest != before


@pytest.mark.parametrize(
    ("mode", "change"),
    [
        ("fixed_number", {"number": 30}),
        ("fixed_number", {"alpha": 2.0}),
        ("custom", {"patch_rule": Rule(alpha=3.0)}),
        ("custom", {"region_rule": Rule(kind="none")}),
    ],
    ids=str,
)
def test_a_parameter_of_one_mode_acts_in_that_mode(mode: str, change: dict[str, Any]) -> None:
    bench = Bench(truncation_mode=mode)
    before = bench.config().digest
    bench.param.update(**change)
    assert bench.config().digest != before


@pytest.mark.parametrize(
    ("change", "field"),
    [({"sprinklings": 4}, "averaging"), ({"sweeps": SweepPlan(size_points=5)}, "sweeps")],
    ids=str,
)
def test_averages_and_sweeps_follow_their_parameters(change: dict[str, Any], field: str) -> None:
    bench = Bench()
    before = getattr(bench.setup(), field)
    bench.param.update(**change)
    assert getattr(bench.setup(), field) != before


IDLE = [
    ({"regions": PAIR}, {"region_count": 3}),
    ({"regions": PAIR}, {"half_width": 0.1}),
    ({"region_count": 1}, {"separation": 0.1}),
    ({"regions": PAIR[:1]}, {"separation": 0.1}),
    ({"truncation_mode": "none"}, {"alpha": 2.0}),
    ({"truncation_mode": "custom"}, {"alpha": 2.0}),
    ({}, {"number": 30}),
    ({}, {"patch_rule": Rule(alpha=3.0)}),
    ({}, {"region_rule": Rule(alpha=3.0)}),
    ({"points": own_points()}, {"density": 500.0}),
    ({"points": own_points()}, {"elements": 500.0}),
    ({"points": own_points()}, {"seed": 7}),
    ({"points": own_points()}, {"sprinklings": 3}),
]


@pytest.mark.parametrize(("start", "change"), IDLE, ids=lambda v: ",".join(v) + str(len(str(v))))
def test_a_change_without_effect_is_refused_with_the_reason_and_changes_nothing(
    start: dict[str, Any], change: dict[str, Any]
) -> None:
    bench = Bench(**start)
    before = values(bench)
    with pytest.raises(InputError, match="no change now: "):
        bench.param.update(**change)
    assert values(bench) == before


@pytest.mark.parametrize(("start", "change"), IDLE, ids=lambda v: ",".join(v) + str(len(str(v))))
def test_the_limits_name_what_has_no_effect_now(
    start: dict[str, Any], change: dict[str, Any]
) -> None:
    (name,) = change
    assert Bench(**start).limits().reasons[name]


# ---------------------------------------------------------- refused, and unchanged

REFUSED: list[dict[str, Any]] = [
    {"density": -1.0},
    {"density": math.nan},
    {"elements": -5.0},
    {"elements": 1e9},
    {"elements": math.nan},
    {"seed": -1},
    {"seed": 2**53},
    {"seed": 1.5},
    {"kind": "grid"},
    {"kind": "file"},
    {"mass": -1.0},
    {"mass": 20.0},
    {"mass": math.nan},
    {"region_count": 9},
    {"half_width": 0.6},
    {"half_width": 0.0},
    {"separation": 1.9},
    {"separation": -0.1},
    {"separation": math.nan},
    {"regions": ()},
    {"regions": 5},
    {"regions": "AB"},
    {"regions": [1, 2]},
    {"regions": [Region(half_width=0.2), None]},
    {"regions": (PAIR[0], PAIR[0])},
    {"truncation_mode": "all"},
    {"alpha": 0.01},
    {"order": 0.4},
    {"order": math.nan},
    {"sprinklings": 0},
    {"patch_rule": "none"},
    {"sweeps": None},
    {"truncation_mode": "custom", "patch_rule": Rule(kind="union_count")},
    {"density": 2000.0, "seed": -1},
    {"seed": -1, "density": 2000.0},
    {"density": 2000.0, "separation": 1.9},
    {"half_width": 0.2, "truncation_mode": "all"},
    {"density": 1000.0, "elements": 9000.0},
]


@pytest.mark.parametrize("change", REFUSED, ids=lambda v: str(v)[:50])
def test_a_refused_change_leaves_everything_as_it_was(change: dict[str, Any]) -> None:
    bench = Bench()
    before, setup = values(bench), bench.setup()
    with pytest.raises(ValueError, match=r".+"):
        bench.param.update(**change)
    assert values(bench) == before
    assert bench.setup() == setup


@pytest.mark.parametrize("change", [c for c in REFUSED if len(c) == 1], ids=lambda v: str(v)[:50])
def test_after_a_refusal_a_good_change_is_taken_and_told(change: dict[str, Any]) -> None:
    bench = Bench()
    (name,) = change
    with pytest.raises(ValueError, match=r".+"):
        setattr(bench, name, change[name])
    seen: list[float] = []
    bench.param.watch(lambda event: seen.append(event.new), "density")
    bench.density = 1300.0
    assert seen == [1300.0]
    assert bench.elements == 2600.0


def test_a_lower_density_is_refused_when_the_mass_needs_more() -> None:
    bench = Bench(mass=9.0)
    with pytest.raises(InputError, match="mass"):
        bench.density = 500.0
    assert (bench.density, bench.elements) == (1250.0, 2500.0)


@pytest.mark.parametrize(
    "asked",
    [
        {"half_width": 0.8},
        {"mass": 50.0},
        {"kind": "file"},
        {"density": 0.0},
        {"regions": 5},
        {"regions": [1]},
        {"density": 1000.0, "elements": 5000.0},
    ],
    ids=str,
)
def test_a_bench_of_wrong_parameters_is_not_made(asked: dict[str, Any]) -> None:
    with pytest.raises(ValueError, match=r".+"):
        Bench(**asked)


# ---------------------------------------------------------- elements and density


def test_elements_follow_the_density_and_the_density_follows_the_elements() -> None:
    bench = Bench()
    bench.density = 700.0
    assert bench.elements == 1400.0
    bench.elements = 900.0
    assert bench.density == 450.0


@pytest.mark.parametrize("asked", [{"elements": 900.0}, {"density": 450.0}])
def test_a_bench_can_be_made_by_elements_or_by_density(asked: dict[str, float]) -> None:
    bench = Bench(**asked)
    assert (bench.density, bench.elements) == (450.0, 900.0)


# ------------------------------------------------------------------ lists of regions


@pytest.mark.parametrize("start", [{}, {"half_width": 0.1, "separation": 0.9}])
@pytest.mark.parametrize("regions", [TOUCHING, PAIR, PAIR[:1]], ids=["touching", "pair", "one"])
def test_a_list_that_fits_is_taken_whatever_the_separation_was(
    start: dict[str, float], regions: tuple[Region, ...]
) -> None:
    bench = Bench(**start)
    bench.regions = regions
    assert bench.config().regions == regions
    if len(regions) > 1:
        assert bench.separation == pytest.approx(gaps(regions)[0], abs=1e-12)


@pytest.mark.parametrize("regions", [TOUCHING, PAIR], ids=["touching", "pair"])
def test_a_bench_can_be_made_with_a_list(regions: tuple[Region, ...]) -> None:
    assert Bench(regions=regions).config().regions == regions


def test_a_list_and_its_separation_can_be_set_together() -> None:
    bench = Bench()
    bench.param.update(regions=PAIR, separation=0.1)
    assert gaps(bench.config().regions) == pytest.approx((0.1,))


def test_clearing_the_list_goes_back_to_the_row() -> None:
    bench = Bench()
    row = bench.config().regions
    bench.param.update(regions=PAIR)
    bench.param.update(regions=None, separation=0.2)
    assert bench.config().regions == pytest.approx(row)


def test_changing_the_list_that_was_given_does_not_change_the_bench() -> None:
    given = list(PAIR)
    bench = Bench()
    bench.regions = given
    before = bench.config()
    given.clear()
    assert bench.config() == before


# --------------------------------------------------------------------- watchers


def test_watchers_never_see_density_and_elements_out_of_step() -> None:
    bench = Bench()
    seen: list[bool] = []
    bench.param.watch(
        lambda *_: seen.append(bench.elements == 2 * bench.density), ["density", "elements"]
    )
    bench.density = 700.0
    bench.elements = 900.0
    bench.param.update(density=800.0, seed=4)
    assert seen
    assert all(seen)


@pytest.mark.parametrize("watched", ["density", "elements"])
def test_watchers_never_see_a_refused_state(watched: str) -> None:
    bench = Bench(mass=9.0)
    seen: list[float] = []
    bench.param.watch(lambda *_: seen.append(bench.density), watched)
    with pytest.raises(InputError):
        bench.density = 500.0
    assert set(seen) <= {1250.0}


def test_watchers_can_compile_the_setup_they_are_told_of() -> None:
    bench = Bench()
    seen: list[Setup] = []
    bench.param.watch(lambda *_: seen.append(bench.setup()), ["density", "separation"])
    bench.param.update(density=900.0, separation=0.1)
    assert seen[-1].points.density == 900.0
    assert seen[-1].separation == 0.1


def test_a_load_tells_each_watcher_once() -> None:
    bench = Bench()
    seen: list[Setup] = []
    bench.param.watch(lambda *_: seen.append(bench.setup()), list(values(bench)))
    wanted = Setup(points=PointSource(density=77.0, seed=9), half_width=0.25, order=2.0)
    bench.load(wanted)
    assert seen == [wanted]


def test_a_watcher_may_change_another_parameter() -> None:
    bench = Bench()
    bench.param.watch(lambda _: bench.param.update(separation=0.0), "half_width")
    bench.half_width = 0.35
    assert (bench.half_width, bench.separation) == (0.35, 0.0)
    assert bench.setup().separation == 0.0


# ------------------------------------------------------------------------- loading


def test_a_setup_loads_and_comes_back_equal() -> None:
    wanted = Setup(
        points=PointSource(kind="fixed", density=321.0, seed=77),
        mass=1.5,
        region_list=PAIR,
        separation=0.25,
        truncation_mode="custom",
        alpha=2.0,
        number=33,
        patch_rule=Rule(kind="fixed_number", number=9),
        region_rule=Rule(kind="equal_share", alpha=0.7),
        order=1.5,
        averaging=Averaging(sprinklings=3),
        sweeps=SweepPlan(separation_points=7),
    )
    bench = Bench()
    bench.load(wanted)
    assert bench.setup() == wanted


@pytest.mark.parametrize(
    "change",
    [
        {"region_list": PAIR[:1], "half_width": 5.0},
        {"region_list": PAIR, "region_count": 99},
        {"region_list": PAIR[:1], "separation": 7.0},
    ],
    ids=["half_width", "region_count", "separation"],
)
def test_a_load_is_all_or_nothing(change: dict[str, Any]) -> None:
    bench = Bench()
    before = values(bench)
    try:
        bench.load(Setup(points=PointSource(density=77.0), **change))
    except ValueError:
        assert values(bench) == before
    else:
        assert bench.setup().points.density == 77.0


def test_a_setup_for_points_that_were_not_given_changes_nothing() -> None:
    bench = Bench()
    before = values(bench)
    source = PointSource(kind="file", sha256="ab" * 32, file="own.csv")
    with pytest.raises(InputError, match=r"load own\.csv first"):
        bench.load(Setup(points=source))
    assert values(bench) == before
    assert bench.file is None


# ------------------------------------------------------------------ imported points


def test_imported_points_set_kind_and_density() -> None:
    bench, file = Bench(), own_points()
    bench.import_points(file)
    assert (bench.kind, bench.density, bench.elements) == ("file", 93.0, 186.0)
    assert bench.result().points_sha256 == file.sha256


def test_points_can_be_given_when_the_bench_is_made() -> None:
    assert Bench(points=own_points()).setup().points.density == 93.0


def test_going_back_to_the_imported_points_goes_back_to_their_density() -> None:
    bench = Bench(points=own_points())
    bench.kind = "poisson"
    bench.density = 777.0
    bench.kind = "file"
    assert (bench.density, bench.elements) == (93.0, 186.0)


def test_points_too_thin_for_the_mass_are_refused_and_nothing_changes() -> None:
    bench = Bench(mass=9.0)
    before = values(bench)
    with pytest.raises(InputError, match="mass"):
        bench.import_points(own_points())
    assert values(bench) == before
    assert bench.file is None


# ---------------------------------------------------------------------- computing


def test_the_worked_example_of_the_readme_computes() -> None:
    result = Bench(density=1000, region_count=2).result()
    assert result.trusted
    assert len(result.regions) == 2


def test_moving_the_separation_never_searches_the_modes_again(
    monkeypatch: pytest.MonkeyPatch,
) -> None:
    bench = Bench(**SMALL)
    bench.result()
    monkeypatch.setattr(modes, "certified_modes", lambda *_, **__: pytest.fail("searched"))
    for separation in (0.0, 0.1, 0.5):
        bench.separation = separation
        bench.result()


def test_a_higher_density_adds_elements() -> None:
    bench = Bench(**SMALL)
    few = set(bench.result().u.tolist())
    bench.density = 120.0
    assert few < set(bench.result().u.tolist())


def test_writing_on_a_result_does_not_reach_the_cache() -> None:
    bench = Bench(**SMALL)
    first = bench.result()
    entropy = first.regions[0].entropy
    for array in (first.u, first.v, first.patch.eigenvalues, first.regions[0].eigenvalues):
        if array.flags.writeable:
            array[:] = 0.0
    bench.separation = 0.21
    bench.separation = 0.2
    assert bench.result().regions[0].entropy == entropy


# ------------------------------------------------------------------------- limits


def test_the_limits_of_a_row_fit_and_a_little_more_does_not() -> None:
    bench = Bench(region_count=3, half_width=0.2, separation=0.1)
    limits = bench.limits()
    for name, value in (
        ("separation", limits.separation_high),
        ("half_width", limits.half_width_high),
    ):
        other = Bench(region_count=3, half_width=0.2, separation=0.1)
        setattr(other, name, value)
        with pytest.raises(InputError):
            setattr(other, name, value + 1e-9)


@pytest.mark.parametrize(
    ("half", "gap", "most"), [(0.3, 0.2, 2), (0.1, 0.0, 8), (0.2, 0.0, 5), (1.0, 0.0, 1)]
)
def test_the_largest_region_count_is_the_largest_that_fits(
    half: float, gap: float, most: int
) -> None:
    bench = Bench(region_count=1, half_width=half)
    if most > 1:
        bench = Bench(region_count=2, half_width=half, separation=gap)
    assert bench.limits().region_count_high == most


def test_the_limit_of_a_list_fits() -> None:
    bench = Bench(regions=PAIR)
    bench.separation = bench.limits().separation_high
    assert max(r.x0 + r.reach for r in bench.config().regions) == pytest.approx(1.0)


# ------------------------------------------------------------------------ the rest


def test_the_repr_names_what_differs_from_the_defaults() -> None:
    assert repr(Bench()) == "Bench()"
    assert repr(Bench(density=1000.0, seed=5)) == "Bench(density=1000.0, seed=5)"


def test_the_rich_repr_is_escaped_and_gives_reasons() -> None:
    text = Bench(region_count=1)._repr_html_()
    assert "one region has no neighbour" in text
    assert "<function" not in text
    assert "&#x27;poisson&#x27;" in text


def test_continuum_eigenvalues_are_those_of_the_nominal_density() -> None:
    config = Bench(density=400.0).config()
    np.testing.assert_array_equal(
        continuum_eigenvalues(config, 5), diamond_eigenvalues(5, elements=800.0)
    )


def test_importing_the_bench_loads_no_dashboard_library() -> None:
    code = "import lozenge_engine.bench, sys; print(*sys.modules)"
    done = subprocess.run(
        [sys.executable, "-W", "error", "-c", code],
        env={**os.environ, "PYTHONPATH": str(SOURCE_ROOT)},
        check=True,
        stdout=subprocess.PIPE,
        text=True,
    )
    loaded = set(done.stdout.split())
    assert "param" in loaded
    assert not loaded & {"panel", "bokeh", "holoviews", "matplotlib", "lozenge_dashboard", "numba"}


@pytest.mark.parametrize(
    ("name", "value", "allowed"),
    [
        ("order", 0.1, "a number from 0.5 to 50"),
        ("seed", -1, "a whole number from 0 to"),
        ("truncation_mode", "sharp", "two_stages, patch_only"),
        ("mass", "heavy", "a number from 0"),
        ("sweeps", 3, "a SweepPlan"),
    ],
)
def test_a_value_outside_a_parameters_own_range_is_refused_in_the_same_sentence(
    name: str, value: object, allowed: str
) -> None:
    bench = Bench()
    with pytest.raises(InputError, match=f"^{name}: given .*allowed is {allowed}.*; change {name}"):
        setattr(bench, name, value)
    assert getattr(bench, name) == getattr(Bench(), name)
