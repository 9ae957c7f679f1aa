"""From a configuration to its numbers: the same as dense, from the cache and without it."""

from __future__ import annotations

import itertools
import json
import math
from collections.abc import Callable
from concurrent.futures import ThreadPoolExecutor
from dataclasses import replace
from typing import Any

import numpy as np
import pytest
from numpy.typing import NDArray

from lozenge_engine import entropies, pipeline
from lozenge_engine.config import MODES, Config, PointSource, Rule, Setup
from lozenge_engine.errors import Cancelled, InputError
from lozenge_engine.geometry import Region, equal_row
from lozenge_engine.kernels import modes
from lozenge_engine.kernels.order import MassiveCommutator, MasslessCommutator
from lozenge_engine.kernels.points import sprinkle
from lozenge_engine.pipeline import DENSE_LIMIT, compute
from lozenge_engine.placement import mirror_images
from lozenge_engine.pointfile import PointFile, parse_points
from lozenge_engine.result import Result
from lozenge_engine.stages import Stages

ROWS = {1: (0.5, 0.0), 2: (0.3, 0.15), 3: (0.2, 0.1)}
POINTS = PointSource(density=150.0, seed=3)


def setup(count: int = 2, **changes: Any) -> Setup:
    half, gap = ROWS[count]
    asked = {
        "points": POINTS,
        "region_count": count,
        "half_width": half,
        "separation": gap,
        "number": 8,
        **changes,
    }
    return Setup(**asked)


def numbers(result: Result) -> list[float]:
    """Every number that a user may quote."""
    return [
        *(r.entropy for r in result.regions),
        *(u.entropy for u in result.unions.values()),
        *(x for p in result.pairs for x in (p.support, p.direct_sum, p.cross_block)),
        *(x for t in result.triples for x in (t.support, t.direct_sum)),
        *result.total_correlation.values(),
    ]


def assert_same(one: Result, other: Result, tolerance: float = 1e-11) -> None:
    np.testing.assert_allclose(numbers(one), numbers(other), rtol=0, atol=tolerance)


# ----------------------------------------------- the naive formulas, all dense


class Naive:
    """The two-stage cut and its entropies by complex dense linear algebra and nothing else."""

    def __init__(self, config: Config) -> None:
        source = config.points
        points = sprinkle(density=source.density, seed=source.seed)
        n = points.u.size
        if config.mass:
            op: Any = MassiveCommutator(
                points.u, points.v, mass=config.mass, density=source.density
            )
        else:
            op = MasslessCommutator(points.u, points.v)
        values, vectors = np.linalg.eigh(1j * op.apply(np.eye(n)))
        kept = self._kept(values, config.patch_rule, n, n, 1)
        self.w = (vectors[:, kept] * values[kept]) @ vectors[:, kept].conj().T
        self.i_delta = self.w - self.w.conj()
        t, x = (points.u + points.v) / math.sqrt(2), (points.u - points.v) / math.sqrt(2)
        self.rows = [
            np.nonzero(np.abs(t - r.t0) + np.abs(x - r.x0) <= r.half_width)[0]
            for r in config.regions
        ]
        self.rule = config.region_rule
        self.union_count = sum(own.size for own in self.rows)

    def _kept(
        self, values: NDArray[Any], rule: Rule, own: int, union: int, regions: int
    ) -> NDArray[np.bool_]:
        if rule.kind == "fixed_number":
            largest = np.arange(values.size) >= values.size - rule.number
            return largest & (values > 1e-10 * values.max())
        n = {"root_count": own, "union_count": union, "equal_share": union / regions, "none": 0.0}
        cut = rule.alpha * math.sqrt(n[rule.kind]) / (4 * math.pi)
        return values > max(cut, 1e-10 * values.max())

    def space(self, k: int) -> tuple[NDArray[Any], NDArray[Any]]:
        """Kept positive eigenvectors of a region, on all points, and their eigenvalues."""
        own = self.rows[k]
        values, vectors = np.linalg.eigh(self.i_delta[np.ix_(own, own)])
        kept = self._kept(values, self.rule, own.size, self.union_count, len(self.rows))
        lifted = np.zeros((self.w.shape[0], int(kept.sum())), dtype=complex)
        lifted[own] = vectors[:, kept]
        return lifted, values[kept]

    def entropy(self, positive: NDArray[Any]) -> float:
        v = np.linalg.qr(np.hstack([positive, positive.conj()]))[0]
        w, d = (v.conj().T @ m @ v for m in (self.w, self.i_delta))
        found = np.linalg.eigvals(np.linalg.solve(d, w)).real
        found = found[np.abs(found) > 1e-9]
        return float(np.sum(found * np.log(np.abs(found))))

    def region(self, k: int) -> float:
        return self.entropy(self.space(k)[0])

    def direct_sum(self, members: tuple[int, ...]) -> float:
        return self.entropy(np.hstack([self.space(k)[0] for k in members]))

    def support(self, members: tuple[int, ...]) -> float:
        rows = np.concatenate([self.rows[k] for k in members])
        values, vectors = np.linalg.eigh(self.i_delta[np.ix_(rows, rows)])
        ends = np.cumsum([0, *(self.rows[k].size for k in members)])
        held = np.array(
            [(np.abs(vectors[a:b]) ** 2).sum(axis=0) for a, b in itertools.pairwise(ends)]
        )
        owner = held.argmax(axis=0)
        kept = np.zeros(values.size, dtype=bool)
        for i, k in enumerate(members):
            positive = (owner == i) & (values > 1e-10 * values.max())
            own = np.nonzero(positive)[0]
            inner = values[own]
            kept[own] = self._kept(
                inner, self.rule, self.rows[k].size, self.union_count, len(self.rows)
            )
        lifted = np.zeros((self.w.shape[0], int(kept.sum())), dtype=complex)
        lifted[rows] = vectors[:, kept]
        return self.entropy(lifted)


CUT_MODES = ["two_stages", "regions_only", "none", "union_count", "equal_share", "fixed_number"]


@pytest.mark.parametrize("count", [1, 2, 3])
@pytest.mark.parametrize(
    ("mode", "mass"),
    # Without any cut the small eigenvalues of the massive operator defeat the naive solver.
    [(mode, mass) for mode in CUT_MODES for mass in (0.0, 2.0) if mode != "none" or not mass],
)
def test_entropies_are_those_of_the_naive_dense_formulas(
    mode: str, count: int, mass: float
) -> None:
    config = setup(count, truncation_mode=mode, mass=mass).config()
    result, naive = compute(config), Naive(config)
    for k, region in enumerate(result.regions):
        assert region.elements == naive.rows[k].size
        assert region.entropy == pytest.approx(naive.region(k), abs=2e-8)
    for pair in result.pairs:
        singles = naive.region(pair.a) + naive.region(pair.b)
        members = (pair.a, pair.b)
        assert pair.support == pytest.approx(singles - naive.support(members), abs=5e-8)
        assert pair.direct_sum == pytest.approx(singles - naive.direct_sum(members), abs=5e-8)
    if count > 1:
        everything = tuple(range(count))
        assert result.unions["support"].entropy == pytest.approx(
            naive.support(everything), abs=2e-8
        )
        assert result.unions["direct_sum"].entropy == pytest.approx(
            naive.direct_sum(everything), abs=2e-8
        )


@pytest.mark.parametrize("count", [1, 2, 3])
@pytest.mark.parametrize("mode", MODES)
def test_every_mode_gives_a_number_or_says_why_not(mode: str, count: int) -> None:
    result = compute(setup(count, truncation_mode=mode).config())
    for part in (*result.regions, *result.unions.values()):
        assert math.isfinite(part.entropy) or (part.status != "ok" and part.note)
        assert part.symplectic.size in (0, part.kept_modes)


def test_the_whole_patch_is_pure() -> None:
    config = Config(points=POINTS, regions=(Region(half_width=1.0),))
    assert compute(config).regions[0].entropy == pytest.approx(0.0, abs=1e-9)


def test_symplectic_values_reach_down_to_one_half_and_never_below_by_more_than_rounding() -> None:
    for region in compute(setup(2).config()).regions:
        assert region.symplectic.min() > 0.5 - 1e-10
        assert np.all(np.diff(region.symplectic) <= 0)


def test_contributions_of_the_modes_sum_to_the_entropy() -> None:
    for region in compute(setup(3).config()).regions:
        assert region.contributions.sum() == pytest.approx(region.entropy, rel=1e-13)


def test_total_correlation_and_tripartite_information_follow_from_the_entropies() -> None:
    result = compute(setup(3).config())
    singles = sum(r.entropy for r in result.regions)
    for rule in ("support", "direct_sum"):
        union = result.unions[rule].entropy
        assert result.total_correlation[rule] == pytest.approx(singles - union)
        mutual = sum(getattr(pair, rule) for pair in result.pairs)
        # S_A + S_B + S_C - S_AB - S_BC - S_CA + S_ABC = sum of I - (sum of S) + S_ABC.
        assert getattr(result.triples[0], rule) == pytest.approx(mutual - singles + union)


def test_two_regions_have_no_triple_and_one_region_no_union() -> None:
    assert compute(setup(2).config()).triples == ()
    alone = compute(setup(1).config())
    assert (dict(alone.unions), alone.pairs, dict(alone.total_correlation)) == ({}, (), {})


def test_a_mirror_image_of_points_and_regions_changes_nothing() -> None:
    regions = (Region(x0=-0.4, half_width=0.3), Region(t0=0.1, x0=0.4, half_width=0.2))
    points = sprinkle(density=150.0, seed=3)
    results = []
    for flip, layout in zip((1, -1), mirror_images(regions)[:2], strict=True):
        t, x = (points.u + points.v) / math.sqrt(2), flip * (points.u - points.v) / math.sqrt(2)
        file = as_file(t, x)
        config = Config(points=source_of(file), regions=layout)
        results.append(compute(config, points=file))
    assert_same(*results, tolerance=1e-9)


def test_negative_control_moving_a_region_changes_the_numbers() -> None:
    one, other = (compute(setup(2, separation=d).config()) for d in (0.15, 0.2))
    with pytest.raises(AssertionError):
        assert_same(one, other, 1e-3)


# ------------------------------------------------------------------- the cache


@pytest.fixture
def searches(monkeypatch: pytest.MonkeyPatch) -> list[str]:
    """One entry for each time that modes of the patch are computed."""
    made: list[str] = []
    for name in ("certified_modes", "all_modes"):
        original = getattr(modes, name)

        def counted(*args: Any, _name: str = name, _of: Callable[..., Any] = original, **kw: Any):  # type: ignore[no-untyped-def]
            made.append(_name)
            return _of(*args, **kw)

        monkeypatch.setattr(modes, name, counted)
    return made


@pytest.mark.parametrize(
    "change",
    [
        {"separation": 0.3},
        {"half_width": 0.2},
        {"order": 2.0},
        {"alpha": 1.4},
        {"truncation_mode": "equal_share"},
        {"truncation_mode": "patch_only"},
        {"truncation_mode": "fixed_number"},
        {"region_count": 3, "half_width": 0.2, "separation": 0.1},
        {"truncation_mode": "custom", "patch_rule": Rule(kind="fixed_number", number=10)},
    ],
    ids=str,
)
def test_what_needs_no_deeper_modes_never_searches_again(
    change: dict[str, Any], searches: list[str]
) -> None:
    stages = Stages()
    compute(setup(2).config(), stages=stages)
    compute(setup(2, **change).config(), stages=stages)
    assert searches == ["certified_modes"]


@pytest.mark.parametrize(
    "change",
    [
        {"points": replace(POINTS, seed=4)},
        {"points": replace(POINTS, density=160.0)},
        {"points": replace(POINTS, kind="fixed")},
        {"mass": 1.0},
        {"alpha": 0.5},
    ],
    ids=str,
)
def test_what_changes_the_operator_or_goes_below_the_floor_searches_again(
    change: dict[str, Any], searches: list[str]
) -> None:
    stages = Stages()
    compute(setup(2).config(), stages=stages)
    compute(setup(2, **change).config(), stages=stages)
    assert searches == ["certified_modes"] * 2


def test_another_realisation_is_another_point_set(searches: list[str]) -> None:
    stages = Stages()
    hashes = {compute(setup(2).config(r), stages=stages).points_sha256 for r in (0, 1)}
    assert len(hashes) == 2
    assert len(searches) == 2


def test_a_deeper_rule_extends_the_modes_that_are_known(
    monkeypatch: pytest.MonkeyPatch,
) -> None:
    given: list[int] = []
    original = modes.certified_modes

    def spied(*args: Any, known: modes.Modes | None, **kw: Any) -> Any:
        given.append(0 if known is None else known.values.size)
        return original(*args, known=known, **kw)

    monkeypatch.setattr(modes, "certified_modes", spied)
    stages = Stages()
    first = compute(setup(2).config(), stages=stages)
    compute(setup(2, alpha=0.5).config(), stages=stages)
    assert given == [0, first.patch.eigenvalues.size]


def test_going_back_above_the_floor_uses_the_deeper_modes(searches: list[str]) -> None:
    stages = Stages()
    compute(setup(2, alpha=0.5).config(), stages=stages)
    compute(setup(2).config(), stages=stages)
    assert len(searches) == 1


def walk() -> list[Setup]:
    """What a user might do, one change after another."""
    return [
        setup(3),
        setup(3, truncation_mode="none"),
        setup(3, separation=0.15),
        setup(3, separation=0.15, alpha=0.5),
        setup(1, half_width=0.2),
        setup(3, separation=0.05),
        setup(3, separation=0.05, order=2.0),
        setup(3, separation=0.05, truncation_mode="fixed_number"),
        setup(3, separation=0.02, truncation_mode="regions_only"),
        setup(3, separation=0.02, mass=2.0),
        setup(3, separation=0.03, truncation_mode="equal_share"),
    ]


def test_results_are_the_same_with_and_without_a_cache() -> None:
    stages = Stages()
    for step in walk():
        assert_same(compute(step.config(), stages=stages), compute(step.config()), 1e-9)


def test_regions_cached_before_the_dense_route_ran_are_not_mixed_with_new_ones() -> None:
    """The dense route's modes have other phases; a region keeps its place, its neighbours move."""
    stages = Stages()
    for step in (setup(3), setup(3, truncation_mode="none")):
        compute(step.config(), stages=stages)
    moved = setup(3, separation=0.2).config()
    assert_same(compute(moved, stages=stages), compute(moved), 1e-9)


def test_results_do_not_depend_on_how_little_the_cache_may_hold() -> None:
    stages = Stages(limit_bytes=1)
    for step in walk()[:6]:
        assert_same(compute(step.config(), stages=stages), compute(step.config()), 1e-9)


def test_threads_that_share_a_cache_get_the_numbers_that_each_would_get_alone() -> None:
    asked = [
        setup(3, separation=0.05 * k, alpha=alpha).config()
        for k in range(4)
        for alpha in (1.0, 0.7, 0.5)
    ]
    stages = Stages()
    with ThreadPoolExecutor(4) as pool:
        found = list(pool.map(lambda config: compute(config, stages=stages), asked))
    for config, result in zip(asked, found, strict=True):
        assert_same(result, compute(config), 1e-9)


def test_modes_that_are_used_stay_in_the_cache(searches: list[str]) -> None:
    """Restrictions of earlier layouts go first, since the modes are used each time."""
    stages = Stages()
    compute(setup(2).config(), stages=stages)
    stages.limit_bytes = 3 * sum(size for _, size in stages._entries.values())
    for k in range(30):
        compute(setup(2, separation=0.01 * k).config(), stages=stages)
    assert searches == ["certified_modes"]


def test_repeating_a_computation_gives_the_same_bits() -> None:
    assert numbers(compute(setup(3).config())) == numbers(compute(setup(3).config()))


# --------------------------------------------------------------- other inputs


def as_file(t: NDArray[np.float64], x: NDArray[np.float64], name: str = "own.csv") -> PointFile:
    rows = "\n".join(f"{a!r},{b!r}" for a, b in zip(t.tolist(), x.tolist(), strict=True))
    return parse_points(f"t,x\n{rows}\n".encode(), name=name)


def source_of(file: PointFile, density: float | None = None) -> PointSource:
    return PointSource(
        kind="file",
        density=density or file.points.u.size / 2,
        file=file.name,
        sha256=file.sha256,
    )


def own_points(seed: int = 3) -> PointFile:
    points = sprinkle(density=150.0, seed=seed)
    return as_file((points.u + points.v) / math.sqrt(2), (points.u - points.v) / math.sqrt(2))


def test_imported_points_give_the_numbers_of_the_sprinkling_they_came_from() -> None:
    file = own_points()
    imported = compute(setup(2, points=source_of(file)).config(), points=file)
    assert_same(imported, compute(setup(2).config()), 1e-9)
    assert imported.points_sha256 == file.sha256


@pytest.mark.parametrize("given", [None, own_points(seed=4)], ids=["none", "others"])
def test_a_configuration_refuses_points_that_are_not_its_own(given: PointFile | None) -> None:
    config = setup(2, points=source_of(own_points())).config()
    with pytest.raises(InputError, match="load that file"):
        compute(config, points=given)


def test_imported_points_have_one_density_only() -> None:
    """The massive operator depends on the density, which imported points fix to N/2."""
    file, stages = own_points(), Stages()
    right = setup(2, points=source_of(file), mass=2.0).config()
    compute(right, points=file, stages=stages)
    wrong = setup(2, points=source_of(file, density=75.0), mass=2.0).config()
    with pytest.raises(InputError, match="density"):
        compute(wrong, points=file, stages=stages)


def test_a_point_file_given_to_a_sprinkling_is_not_used() -> None:
    assert_same(compute(setup(2).config(), points=own_points(4)), compute(setup(2).config()))


@pytest.mark.parametrize("mode", ["none", "regions_only"])
def test_too_many_elements_without_a_first_cut_are_refused_with_the_memory(mode: str) -> None:
    large = setup(2, points=replace(POINTS, density=2010.0, kind="fixed"), truncation_mode=mode)
    with pytest.raises(InputError, match=rf"4020 elements.*0\.776 GB.*at most {DENSE_LIMIT}"):
        compute(large.config())


def test_a_fixed_number_beyond_all_modes_keeps_them_all_at_a_bounded_price(
    searches: list[str],
) -> None:
    everything = Rule(kind="fixed_number", number=5000)
    try:
        result = compute(Config(points=POINTS, patch_rule=everything))
    except InputError:
        return
    assert result.patch.kept_modes > 0.95 * (result.elements // 2)
    assert len(searches) <= 5


@pytest.mark.parametrize("number", [1, 10, 40, 100])
def test_a_fixed_number_of_patch_modes_is_exact(number: int) -> None:
    result = compute(Config(points=POINTS, patch_rule=Rule(kind="fixed_number", number=number)))
    assert result.patch.kept_modes == number
    dense = compute(Config(points=POINTS, patch_rule=Rule(kind="none")))
    np.testing.assert_allclose(
        result.patch.eigenvalues[:number], dense.patch.eigenvalues[:number], atol=1e-10
    )


def test_a_region_with_one_element_is_refused() -> None:
    config = Config(points=POINTS, regions=(Region(half_width=0.01),))
    with pytest.raises(InputError, match=r"region A: given [01] elements"):
        compute(config)


def test_touching_regions_and_a_corner_region_are_computed() -> None:
    regions = (*equal_row(2, 0.2, 0.0), Region(x0=0.8, half_width=0.2))
    result = compute(Config(points=POINTS, regions=regions))
    assert result.trusted


# ------------------------------------------------------------ progress, cancel


def test_progress_names_the_stages_in_their_order() -> None:
    seen: list[str] = []
    compute(setup(2).config(), report=lambda stage, _: seen.append(stage))
    stages = list(dict.fromkeys(seen))
    assert stages == ["points", "order", "modes", "restriction", "cut", "entropies"]


@pytest.mark.parametrize("stage", ["points", "order", "modes", "restriction", "cut", "entropies"])
def test_a_cancelled_computation_leaves_a_cache_that_still_works(stage: str) -> None:
    stages = Stages()
    compute(setup(2).config(), stages=stages)

    def stop(name: str, _: float) -> None:
        if name == stage:
            raise Cancelled

    deeper = setup(2, alpha=0.6).config()
    with pytest.raises(Cancelled):
        compute(deeper, stages=stages, report=stop)
    assert_same(compute(deeper, stages=stages), compute(deeper), 1e-9)


def test_seconds_of_every_stage_are_recorded() -> None:
    seconds = compute(setup(2).config()).seconds
    assert set(seconds) == {"points", "order", "modes", "restriction", "cut", "entropies"}
    assert all(value >= 0 for value in seconds.values())


# ------------------------------------------------------------------ the result


@pytest.mark.parametrize("count", [1, 2, 3])
@pytest.mark.parametrize("mode", MODES)
def test_the_numbers_of_a_result_are_strict_json(mode: str, count: int) -> None:
    result = compute(setup(count, truncation_mode=mode).config())
    plain = json.loads(json.dumps(result.numbers(), allow_nan=False))
    assert plain["elements"] == result.elements
    assert len(plain["regions"]) == count


def test_a_refused_entropy_is_null_in_the_numbers() -> None:
    config = setup(1, truncation_mode="patch_only", points=replace(POINTS, density=600.0)).config()
    result = compute(config)
    assert result.regions[0].status == "refused"
    assert result.numbers()["regions"][0]["entropy"] is None


def test_an_unmet_certificate_marks_the_result(monkeypatch: pytest.MonkeyPatch) -> None:
    original = modes.certify

    def unmet(*args: Any, **kw: Any) -> modes.Certificate:
        return original(*args, **kw)._replace(met=False, reasons=("made up",))

    monkeypatch.setattr(modes, "certify", unmet)
    result = compute(setup(1).config())
    assert not result.trusted
    assert result.numbers()["certificate"]["reasons"] == ["made up"]


def test_a_mark_on_any_pair_makes_the_result_untrusted(monkeypatch: pytest.MonkeyPatch) -> None:
    original = entropies.read

    def marked(*args: Any, elements: int, **kw: Any) -> Any:
        found = original(*args, elements=elements, **kw)
        return found._replace(status="undetermined") if elements == pair else found

    result = compute(setup(3).config())
    pair = result.regions[0].elements + result.regions[1].elements
    monkeypatch.setattr(entropies, "read", marked)
    assert not compute(setup(3).config()).trusted


def test_the_versions_of_a_result_name_the_libraries() -> None:
    assert {"python", "numpy", "scipy", "lozenge"} <= set(compute(setup(1).config()).versions)


def test_triples_are_neighbours_in_space_whatever_their_letters() -> None:
    places = (0.6, -0.6, 0.2, -0.2)
    regions = tuple(Region(half_width=0.15, x0=x0) for x0 in places)
    result = compute(Setup(points=POINTS, region_list=regions, separation=0.1).config())
    assert [t.members for t in result.triples] == [(1, 2, 3), (0, 2, 3)]


def test_modes_prepared_elsewhere_are_not_searched_again(monkeypatch: pytest.MonkeyPatch) -> None:
    config = setup(2, truncation_mode="regions_only").config()
    key, found = pipeline.prepare(config, stages=Stages())
    here = Stages()
    here.put(key, found)
    expected = compute(config).regions[0].entropy
    monkeypatch.setattr(modes, "all_modes", None)
    assert compute(config, stages=here).regions[0].entropy == expected


def test_counts_of_other_rules_are_what_computing_with_them_keeps() -> None:
    plain = setup(3)
    kept = compute(plain.config()).kept_by_rule()
    for mode in ("two_stages", "union_count", "equal_share", "fixed_number"):
        result = compute(plain.with_(truncation_mode=mode).config())
        assert kept[MODES[mode][1]] == tuple(r.kept_modes for r in result.regions)
