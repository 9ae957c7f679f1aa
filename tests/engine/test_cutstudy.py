"""The cut study: the pipeline's numbers at every alpha, spaces, means, slopes, plateaus."""

from __future__ import annotations

import math
from dataclasses import replace

import numpy as np
import pytest

from lozenge_engine.config import Averaging, Config, PointSource, Rule, Setup, SweepPlan
from lozenge_engine.cutmeans import averaged, levels, slopes
from lozenge_engine.cutrecord import CutRecord, cut_record
from lozenge_engine.cutstudy import CutCurve, CutStudy, cut_study
from lozenge_engine.errors import Cancelled, InputError
from lozenge_engine.evidence import RULES, EvidencePlan
from lozenge_engine.kernels import gaussian
from lozenge_engine.kernels.plateaus import plateau
from lozenge_engine.kernels.subspaces import gram, nested_entropies, spanned
from lozenge_engine.pipeline import compute, search_key
from lozenge_engine.stages import Stages

CACHE = Stages()
ALPHAS = (0.5, 0.7, 1.0, 1.6, 2.5)
SETUP = Setup(points=PointSource(density=200.0, seed=4), half_width=0.4, separation=0.1)
CONFIG = SETUP.config()


def study(config: Config = CONFIG, **wanted: object) -> CutStudy:
    """A small study in the shared cache."""
    return cut_study(config, **{"alphas": ALPHAS, "cache": CACHE, **wanted})  # type: ignore[arg-type]


def curve_of(found: CutStudy, stage: str, rule: str, *, uncut: bool = False) -> CutCurve:
    """The curve of one stage and rule."""
    return next(c for c in found.curves if c[:3] == (stage, rule, uncut))


def rules_at(stage: str, rule: str, alpha: float, config: Config) -> Config:
    """The configuration whose numbers a curve has at one alpha."""
    number = max(1, round(2 * math.sqrt(config.points.elements(config.regions[0])) / alpha))
    patch_number = max(1, round(2 * math.sqrt(config.points.elements()) / alpha))
    moved = Rule(kind=rule, alpha=alpha, number=number)
    root = Rule(kind="root_count", alpha=alpha)
    if stage == "regions":
        return replace(config, region_rule=moved)
    if stage == "both":
        return replace(config, patch_rule=root, region_rule=moved)
    fixed = Rule(kind="fixed_number", number=patch_number)
    return replace(config, patch_rule=fixed if rule == "fixed_number" else root)


@pytest.mark.parametrize("stage", ["patch", "regions", "both"])
@pytest.mark.parametrize("rule", RULES)
def test_every_number_is_that_of_the_pipeline_with_the_same_rules(stage: str, rule: str) -> None:
    found = curve_of(study(stages=(stage,), rules=(rule,)), stage, rule)
    compared = 0
    for m, alpha in enumerate(ALPHAS):
        if stage == "patch" and rule in ("union_count", "equal_share"):
            assert "one region" in found.reasons[m]
            assert np.isnan(found.union_support[m])
            continue
        result = compute(rules_at(stage, rule, alpha, CONFIG), stages=Stages())
        if not result.trusted:
            continue
        compared += 1
        pair = result.pairs[0]
        assert found.patch_kept[m] == result.patch.kept_modes
        assert tuple(found.kept[m]) == tuple(r.kept_modes for r in result.regions)
        assert found.entropy[m] == pytest.approx([r.entropy for r in result.regions], abs=1e-8)
        for name in ("support", "direct_sum"):
            union = getattr(found, f"union_{name}")[m]
            assert union == pytest.approx(result.unions[name].entropy, abs=1e-8)
            assert getattr(found, f"mutual_{name}")[m] == pytest.approx(
                getattr(pair, name), abs=1e-8
            )
    assert compared >= 3 or "one region" in found.reasons[0]


def test_one_region_has_no_mutual_information_and_its_own_union() -> None:
    one = SETUP.with_(region_count=1).config()
    found = study(one, stages=("regions",), rules=("root_count",)).curves[0]
    assert np.isnan(found.mutual_support).all()
    assert found.union_support == pytest.approx(found.entropy[:, 0])


def test_uncut_space_of_the_dense_formula() -> None:
    """V from the uncut restricted operator, W and Delta from the cut one, all dense."""
    config = SETUP.with_(region_count=1).config()
    found = study(config, stages=("regions",), rules=("root_count",), uncut_space=True)
    curve = curve_of(found, "regions", "root_count", uncut=True)
    result = compute(config)
    u, v = result.u, result.v
    c = ((u[:, None] < u) & (v[:, None] < v)).astype(float)
    values, vectors = np.linalg.eigh(1j * (c - c.T) / 2)
    top = values > result.patch.cut
    w = (vectors[:, top] * values[top]) @ vectors[:, top].conj().T
    own = np.nonzero(result.region_of == 0)[0]
    here = np.ix_(own, own)
    inner, space = np.linalg.eigh((1j * (c - c.T) / 2)[here])
    n = own.size
    for m, alpha in enumerate(ALPHAS):
        kept = np.abs(inner) > alpha * math.sqrt(n) / (4 * math.pi)
        basis = space[:, kept]
        w_in = basis.conj().T @ w[here] @ basis
        delta = w_in - (basis.conj().T @ w[here].conj() @ basis)
        if np.linalg.cond(delta) > 1e8:
            continue
        share = np.linalg.eigvals(np.linalg.solve(delta, w_in)).real
        some = np.abs(share) > 1e-12
        entropy = float((share[some] * np.log(np.abs(share[some]))).sum())
        assert curve.entropy[m, 0] == pytest.approx(entropy, abs=1e-6)
        assert curve.kept[m, 0] == kept.sum() // 2


def test_uncut_space_makes_both_union_rules_one() -> None:
    found = study(stages=("regions",), rules=("root_count",), uncut_space=True)
    curve = curve_of(found, "regions", "root_count", uncut=True)
    assert curve.union_support == pytest.approx(curve.union_direct_sum, nan_ok=True)
    assert np.isfinite(curve.union_support).sum() >= 4
    cut = curve_of(found, "regions", "root_count")
    assert not np.allclose(cut.union_support, cut.union_direct_sum, atol=1e-3)


def test_uncut_space_without_enough_known_modes_says_so() -> None:
    found = study(alphas=(0.25, 2.0), stages=("both",), rules=("fixed_number",), uncut_space=True)
    curve = curve_of(found, "both", "fixed_number", uncut=True)
    assert "uncut ones found" in curve.reasons[0]
    assert np.isnan(curve.entropy[0]).all()
    expected = round(2 * math.sqrt(CONFIG.points.elements(CONFIG.regions[0])) / 2.0)
    assert curve.kept[1].tolist() == [expected, expected]


def test_volume_law_without_the_second_cut_and_logarithm_with_it() -> None:
    found = curve_of(
        study(alphas=(0.25, 1.0, 1.2), stages=("both",), rules=("root_count",)),
        "both",
        "root_count",
    )
    assert found.union_support[0] > 4 * found.union_support[1]


def test_gains_of_modes_add_up_to_the_entropy_that_the_rule_keeps() -> None:
    found = study(stages=("regions",), rules=("root_count",), per_mode=True)
    result = compute(CONFIG, stages=CACHE)
    for own, region in zip(found.carried, result.regions, strict=True):
        assert own.kept.sum() == region.kept_modes
        assert own.gain[own.kept].sum() == pytest.approx(region.entropy, abs=1e-9)
        assert np.isfinite(own.gain[: own.kept.sum() + 2]).all()


def test_search_goes_into_the_pipelines_cache_and_only_as_deep_as_needed() -> None:
    cache = Stages()
    study(cache=cache, stages=("both",), rules=("root_count",))
    values, _ = cache.peek(search_key(CONFIG))
    floor = 0.97 * 0.5 * math.sqrt(compute(CONFIG, stages=cache).elements) / (4 * math.pi)
    assert values.floor == pytest.approx(floor)


def test_seconds_of_the_floor_are_told_apart() -> None:
    cache = Stages()
    first, again = (study(cache=cache, stages=("both",), rules=("root_count",)) for _ in range(2))
    assert again.floor_seconds < first.floor_seconds
    assert again.seconds > 0


def test_cancelled_study_stops() -> None:
    def stop(stage: str, fraction: float) -> None:
        raise Cancelled

    with pytest.raises(Cancelled):
        study(report=stop)


@pytest.mark.parametrize("alphas", [(1.0,), (1.0, 0.5), (0.5, 0.5), (0.01, 1.0)])
def test_alphas_that_make_no_curve_are_refused(alphas: tuple[float, ...]) -> None:
    with pytest.raises(InputError, match="alpha"):
        study(alphas=alphas)


def test_regions_alone_need_a_cut_in_the_first_stage() -> None:
    with pytest.raises(InputError, match="patch rule"):
        study(replace(CONFIG, patch_rule=Rule(kind="none")), stages=("regions",))


# ------------------------------------------------------------------- kernels


def test_spans_have_the_entropy_of_the_full_computation() -> None:
    rng = np.random.default_rng(3)
    g = rng.normal(size=(60, 24)) * np.geomspace(1, 1e-2, 24)
    block = gram(g)
    for columns in (np.arange(24), np.array([0, 3, 12, 15]), np.array([2, 7])):
        whole = gaussian.symplectic(g[:, columns])
        found = spanned(block, columns)
        assert found.entropy == pytest.approx(gaussian.contributions(whole.values).sum(), rel=1e-9)
        assert found.lowest == pytest.approx(whole.lowest, rel=1e-9)


def test_span_in_the_kernel_has_no_entropy() -> None:
    g = np.ones((8, 4))
    assert spanned(gram(g), np.arange(4)).trouble


def test_nested_spans_are_spans() -> None:
    rng = np.random.default_rng(5)
    g = rng.normal(size=(40, 12))
    block = gram(g)
    each = [
        spanned(block, np.concatenate([np.arange(k), 6 + np.arange(k)])).entropy
        for k in range(1, 7)
    ]
    assert nested_entropies(block) == pytest.approx(each)


def test_plateau_is_the_widest_level_stretch() -> None:
    x = np.linspace(-1, 1, 41)
    y = np.where(np.abs(x) < 0.4, 2.0, 2.0 + 5 * (np.abs(x) - 0.4))
    found = plateau(x, y, np.full(41, 0.01))
    assert found is not None
    assert found.width == pytest.approx(0.8, abs=0.11)
    assert found.value == pytest.approx(2.0, abs=0.01)


def test_slope_without_a_level_stretch_has_no_plateau() -> None:
    x = np.linspace(-1, 1, 41)
    assert plateau(x, x, np.full(41, 0.05)) is None


def test_tolerance_makes_a_plateau_where_errors_are_unknown() -> None:
    x = np.linspace(-1, 1, 41)
    y = 0.01 * x
    assert plateau(x, y, np.full(41, np.nan)) is None
    found = plateau(x, y, np.full(41, np.nan), tolerance=0.02)
    assert found is not None
    assert found.width == pytest.approx(2.0)


def test_gap_ends_a_plateau() -> None:
    x = np.linspace(0, 2, 21)
    y = np.zeros(21)
    y[10] = np.nan
    found = plateau(x, y, np.full(21, 0.1))
    assert found is not None
    assert found.width == pytest.approx(0.9)


# --------------------------------------------------------- means and slopes


def fake(x: float, noise: float, rng: np.random.Generator) -> CutStudy:
    """A study whose entropy is (1/3 + alpha) x + noise."""
    alphas = np.array([0.5, 1.0])
    base = study(stages=("regions",), rules=("root_count",), alphas=(0.5, 1.0))
    curve = base.curves[0]
    value = (1 / 3 + alphas) * x + noise * rng.normal()
    return base._replace(
        alphas=alphas, curves=(curve._replace(union_support=value, mutual_support=value),)
    )


def test_slopes_find_a_line_at_every_alpha() -> None:
    rng = np.random.default_rng(2)
    x = np.array([1.0, 1.5, 2.0, 2.5])
    found = slopes(x, [[fake(at, 0.05, rng) for _ in range(6)] for at in x])[0]
    assert np.all(np.abs(found.slope - (1 / 3 + np.array([0.5, 1.0]))) < 4 * found.error)
    assert np.all(found.error < 0.05)
    assert not slopes(x[:2], [[fake(at, 0.05, rng)] for at in x[:2]])


def test_mean_has_the_standard_error_of_its_sprinklings() -> None:
    rng = np.random.default_rng(8)
    studies = [fake(1.0, 0.3, rng) for _ in range(5)]
    mean = averaged(studies)[0]
    samples = np.array([s.curves[0].union_support[0] for s in studies])
    assert mean.mean.union_support[0] == pytest.approx(samples.mean())
    assert mean.error.union_support[0] == pytest.approx(samples.std(ddof=1) / math.sqrt(5))
    assert np.isnan(averaged(studies[:1])[0].error.union_support).all()


def test_studies_that_do_not_match_are_refused() -> None:
    with pytest.raises(InputError, match="alphas"):
        averaged([study(), study(alphas=(0.5, 1.0))])


def test_levels_leave_out_curves_without_a_plateau() -> None:
    rng = np.random.default_rng(8)
    alphas = np.geomspace(0.5, 2, 8)
    mean = averaged([fake(1.0, 0.0, rng)])[0]
    flat = mean._replace(
        mean=mean.mean._replace(union_support=np.full(8, 2.0), mutual_support=np.arange(8.0)),
        error=mean.error._replace(union_support=np.full(8, 0.1), mutual_support=np.full(8, 0.1)),
    )
    assert [level.quantity for level in levels(alphas, [flat], [])] == ["entropy"]


def test_record_comes_in_parts_and_has_the_twin_beside() -> None:
    setup = SETUP.with_(
        averaging=Averaging(sprinklings=2),
        sweeps=SweepPlan(density_low=100.0, density_high=200.0, density_points=3),
    )
    plan = EvidencePlan(
        alphas=4,
        alpha_low=0.5,
        realisations=2,
        rules=("root_count",),
        cut_quantity="slope",
        level="preview",
    )
    parts: list[CutRecord] = []
    record = cut_record(setup, plan, cache=CACHE, publish=parts.append)
    assert [part.done for part in parts[:2]] == [1, 2]
    assert parts[-1] is record
    assert record.slopes_done == record.slopes_planned == 6
    assert np.isfinite(record.slopes[0].slope).all()
    assert record.twin_oversampling == 4
    assert (record.twin_alphas >= 1.5 / 2).all()
    assert np.isfinite(record.twin[0].mean.union_support).all()
    assert record.reference_slope == pytest.approx(2 / 3)


def test_exact_twin_reaches_all_alphas_and_agrees_with_dense_sets() -> None:
    records = {
        level: cut_record(
            SETUP,
            EvidencePlan(
                alphas=4, alpha_low=0.5, realisations=1, rules=("root_count",), level=level
            ),
            cache=CACHE,
        )
        for level in ("exact", "refined")
    }
    exact, laid = records["exact"], records["refined"]
    assert exact.twin_oversampling == 0
    assert exact.twin_alphas.size == 4
    some = np.isin(exact.twin_alphas, laid.twin_alphas)
    one, other = exact.twin[0].mean, laid.twin[0].mean
    for name, most in (("union_support", 0.12), ("mutual_support", 0.12), ("kept", 1.0)):
        assert getattr(one, name)[some] == pytest.approx(getattr(other, name), abs=most)


def test_no_law_is_claimed_for_a_massive_or_curved_patch() -> None:
    plan = EvidencePlan(
        alphas=2,
        alpha_low=0.9,
        realisations=1,
        rules=("root_count",),
        stage="regions",
        level="preview",
    )
    for setup in (
        SETUP.with_(points=PointSource(density=40.0), mass=1.0),
        SETUP.with_(points=PointSource(density=40.0, curvature="positive", radius=1.0)),
    ):
        assert cut_record(setup, plan, cache=Stages()).reference_slope is None
