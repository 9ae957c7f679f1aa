"""Quasi-uniform and curved point sets: what is laid, how it is weighed and counted."""

from __future__ import annotations

import itertools
import math
from dataclasses import replace

import numpy as np
import pytest
from scipy import stats

from lozenge_engine.bench import Bench, continuum_eigenvalues
from lozenge_engine.config import Config, PointSource, Rule, Setup
from lozenge_engine.cost import nominal
from lozenge_engine.design import design
from lozenge_engine.errors import InputError
from lozenge_engine.geometry import PATCH, PATCH_AREA, PATCH_EXTENT, Curvature, Region, volume
from lozenge_engine.kernels.curved import conformal_factor, counting, ordering_fraction
from lozenge_engine.kernels.laws import root_count_cut
from lozenge_engine.kernels.laying import laid
from lozenge_engine.kernels.order import ExplicitCommutator, MasslessCommutator
from lozenge_engine.kernels.points import membership, sprinkle
from lozenge_engine.kernels.weighted import WeightedCommutator
from lozenge_engine.pipeline import compute, search_key
from lozenge_engine.plan import Axis, CampaignPlan
from lozenge_engine.realisation import realise
from lozenge_engine.stages import Stages

CURVED: tuple[Curvature, ...] = ("positive", "negative")
RADII = (0.7, 1.0, 3.0, 1000.0)
TILTED = Region(t0=0.2, x0=-0.15, half_width=0.3, boost=0.4)
LATTICE = PointSource(kind="lattice", density=150.0, oversampling=4)
SOBOL = PointSource(kind="sobol", density=150.0, oversampling=4)


# --------------------------------------------------------------------------- volumes


@pytest.mark.parametrize("curvature", CURVED)
@pytest.mark.parametrize("radius", RADII)
def test_volume_of_the_patch_has_its_closed_form(curvature: Curvature, radius: float) -> None:
    expected = -4.0 * radius**2 * math.log(math.cos(1.0 / radius))
    found = volume(PATCH, curvature=curvature, radius=radius)
    assert found == pytest.approx(expected, rel=1e-9 if radius < 100 else 1e-8)


@pytest.mark.parametrize("curvature", ["flat", *CURVED])
@pytest.mark.parametrize("radius", RADII)
def test_volume_of_a_boosted_region_is_the_integral_of_the_factor(
    curvature: Curvature, radius: float
) -> None:
    e = TILTED.extent
    x, w = np.polynomial.legendre.leggauss(60)
    u = (e.u_low + e.u_high) / 2 + x * (e.u_high - e.u_low) / 2
    v = (e.v_low + e.v_high) / 2 + x * (e.v_high - e.v_low) / 2
    grid = np.meshgrid(u, v, indexing="ij")
    factor = conformal_factor(*grid, curvature=curvature, radius=radius)
    area = (e.u_high - e.u_low) * (e.v_high - e.v_low) / 4
    integral = float((factor * np.outer(w, w)).sum()) * area
    assert volume(e, curvature=curvature, radius=radius) == pytest.approx(integral, rel=1e-12)


@pytest.mark.parametrize("curvature", CURVED)
def test_volume_of_a_tiny_region_is_its_area_times_the_factor(curvature: Curvature) -> None:
    region = replace(TILTED, half_width=1e-4)
    here = np.array([0.2]), np.array([-0.15])
    u, v = (here[0] + here[1]) * PATCH_EXTENT, (here[0] - here[1]) * PATCH_EXTENT
    factor = conformal_factor(u, v, curvature=curvature, radius=0.8)[0]
    found = volume(region.extent, curvature=curvature, radius=0.8)
    # Four numbers of order 1 are added: 1e-15 of them over 2e-8.
    assert found == pytest.approx(factor * region.area, rel=1e-6)


def test_parts_of_the_patch_add_up_to_it() -> None:
    halves = [Region(t0=s * 0.5, half_width=0.5) for s in (-1, 1)]
    halves += [Region(x0=s * 0.5, half_width=0.5) for s in (-1, 1)]
    for curvature in CURVED:
        source = PointSource(curvature=curvature, radius=0.9, density=10.0)
        assert sum(map(source.elements, halves)) == pytest.approx(source.elements(), rel=1e-12)


# --------------------------------------------------------------------------- sprinklings


@pytest.mark.parametrize("curvature", CURVED)
@pytest.mark.parametrize("fixed", [False, True])
def test_sprinkled_elements_follow_the_volume(curvature: Curvature, *, fixed: bool) -> None:
    """Chi-squared over 8 x 8 cells, 40 sprinklings; false alarm once in 10^5."""
    radius, edges = 0.8, np.linspace(-PATCH_EXTENT, PATCH_EXTENT, 9)
    found = np.zeros((8, 8))
    for r in range(40):
        points = sprinkle(
            density=300.0, seed=11, realisation=r, fixed=fixed, curvature=curvature, radius=radius
        )
        found += np.histogram2d(points.u, points.v, bins=(edges, edges))[0]
    share = np.array(
        [
            [
                volume(
                    PATCH._replace(u_low=a, u_high=b, v_low=c, v_high=d),
                    curvature=curvature,
                    radius=radius,
                )
                for c, d in itertools.pairwise(edges)
            ]
            for a, b in itertools.pairwise(edges)
        ]
    )
    expected = share * 300.0 * 40
    if fixed:
        expected *= found.sum() / expected.sum()
    squares = float(((found - expected) ** 2 / expected).sum())
    assert stats.chi2.sf(squares, 64 - fixed) > 1e-5
    flat = found.sum() / 64
    assert stats.chi2.sf(float(((found - flat) ** 2 / flat).sum()), 63) < 1e-12  # can fail


@pytest.mark.parametrize("curvature", CURVED)
def test_number_of_elements_is_poisson_with_the_volume(curvature: Curvature) -> None:
    counts = np.array(
        [
            sprinkle(density=40.0, seed=5, realisation=r, curvature=curvature, radius=0.8).u.size
            for r in range(400)
        ]
    )
    mean = 40.0 * volume(PATCH, curvature=curvature, radius=0.8)
    assert counts.mean() == pytest.approx(mean, abs=4.5 * math.sqrt(mean / 400))
    assert counts.var(ddof=1) / mean == pytest.approx(1.0, abs=4.5 * math.sqrt(2 / 400))


@pytest.mark.parametrize("curvature", CURVED)
@pytest.mark.parametrize("fixed", [False, True])
def test_a_higher_density_only_adds_elements(curvature: Curvature, *, fixed: bool) -> None:
    few, many = (
        {*sprinkle(density=d, seed=3, fixed=fixed, curvature=curvature, radius=0.75).u.tolist()}
        for d in (90.0, 230.0)
    )
    assert few < many


@pytest.mark.parametrize("curvature", CURVED)
def test_the_flat_sprinkling_is_part_of_the_curved_one(curvature: Curvature) -> None:
    flat = {*sprinkle(density=200.0, seed=4).u.tolist()}
    assert flat < {*sprinkle(density=200.0, seed=4, curvature=curvature, radius=1.0).u.tolist()}


@pytest.mark.parametrize("curvature", CURVED)
def test_a_large_radius_is_the_flat_patch_to_the_bit(curvature: Curvature) -> None:
    # 1 + 1/(6 l^2) times the elements are expected: 2e-7 of 2 000.
    flat, curved = (
        compute(Config(points=PointSource(seed=6, **metric)))
        for metric in ({}, {"curvature": curvature, "radius": 1000.0})
    )
    assert np.array_equal(flat.u, curved.u)
    assert flat.regions[0].entropy == curved.regions[0].entropy


@pytest.mark.parametrize("curvature", CURVED)
def test_a_fixed_count_is_the_density_times_the_volume(curvature: Curvature) -> None:
    points = sprinkle(density=100.0, seed=1, fixed=True, curvature=curvature, radius=0.8)
    assert points.u.size == round(100.0 * volume(PATCH, curvature=curvature, radius=0.8))


@pytest.mark.parametrize("curvature", CURVED)
def test_ordering_fraction_is_settled_at_the_nodes_used(curvature: Curvature) -> None:
    few, many = (ordering_fraction(curvature=curvature, radius=0.7, nodes=k) for k in (200, 300))
    assert few == pytest.approx(many, abs=1e-10)


# --------------------------------------------------------------------------- quasi-uniform sets


def test_lattice_has_the_wanted_number_of_points_and_another_shift_each_time() -> None:
    sets = [laid(LATTICE, realisation=r) for r in range(3)]
    assert all(abs(points.u.size - 1200) < 12 for points in sets)
    assert len({points.u[0] for points in sets}) == 3
    assert laid(replace(LATTICE, seed=2)).u[0] != sets[0].u[0]
    assert np.array_equal(laid(LATTICE, realisation=1).u, sets[1].u)


def test_sobol_set_is_the_nearest_power_of_two() -> None:
    assert laid(SOBOL).u.size == 1024
    assert laid(replace(SOBOL, oversampling=1)).u.size == 256
    assert laid(SOBOL, realisation=1).u[0] != laid(SOBOL).u[0]


def test_shifts_fill_the_cell_evenly() -> None:
    """The mean number of points near a place does not depend on the place's fraction of a cell."""
    small = Region(half_width=0.1)
    counts = [
        int((membership(laid(LATTICE, realisation=r), (small,)) == 0).sum()) for r in range(32)
    ]
    expected = LATTICE.expected_points(small)
    # A low-discrepancy sequence of 32 shifts: better than 32 independent ones by 32**-0.5.
    assert np.mean(counts) == pytest.approx(expected, abs=0.25)


def test_imported_points_are_not_laid() -> None:
    with pytest.raises(InputError, match="imported points"):
        laid(PointSource(kind="file", sha256="ab", file="a.csv"))


@pytest.mark.parametrize("source", [LATTICE, SOBOL])
def test_same_wavenumber_is_cut_at_every_oversampling(source: PointSource) -> None:
    few, many = (
        compute(Config(points=replace(source, oversampling=k), regions=(Region(half_width=0.4),)))
        for k in (2, 8)
    )
    assert many.oversampling / few.oversampling == pytest.approx(4.0, rel=0.02)
    for result in (few, many):
        f = result.oversampling
        assert f == result.elements / 300.0
        region = result.regions[0]
        assert region.counted == region.elements / f
        assert region.cut == pytest.approx(f * root_count_cut(region.counted), rel=1e-14)
        assert result.patch.cut == pytest.approx(f * root_count_cut(300.0), rel=1e-14)
        assert region.nominal_modes == pytest.approx(2.0 * math.sqrt(region.counted))
    assert abs(few.patch.kept_modes - many.patch.kept_modes) <= 1
    if source.kind == "lattice":  # a Sobol set of twice the density is not settled
        assert many.regions[0].entropy == pytest.approx(few.regions[0].entropy, abs=0.15)


def test_other_rules_are_counted_at_the_density_of_the_geometry() -> None:
    pair = (Region(x0=-0.4, half_width=0.3), Region(x0=0.4, half_width=0.3))
    setup = Config(points=LATTICE, regions=pair, region_rule=Rule(kind="union_count"))
    result = compute(setup)
    assert result.kept_by_rule()["union_count"] == tuple(r.kept_modes for r in result.regions)
    own = compute(replace(setup, region_rule=Rule()))
    assert result.kept_by_rule()["root_count"] == tuple(r.kept_modes for r in own.regions)
    fixed = compute(replace(setup, patch_rule=Rule(kind="fixed_number", number=12)))
    assert fixed.patch.kept_modes == 12


def test_a_mass_is_scaled_with_the_points() -> None:
    """The operator sees the points' own density: otherwise the mass would grow with their number.

    In m^2/(2 rho) a factor 4 in the density is a factor 2 in the mass.
    """
    source = replace(SOBOL, density=64.0, oversampling=8)
    config = Config(points=source, mass=2.0)
    few, many = compute(config), compute(replace(config, points=replace(source, oversampling=32)))
    largest = [r.patch.eigenvalues[:5] / r.oversampling for r in (few, many)]
    assert largest[0] == pytest.approx(largest[1], rel=5e-3)
    massless = compute(replace(config, mass=0.0))
    assert massless.patch.eigenvalues[0] / massless.oversampling > 1.2 * largest[0][0]


# --------------------------------------------------------------------------- weights


@pytest.mark.parametrize("curvature", CURVED)
def test_weighted_points_count_like_the_volume(curvature: Curvature) -> None:
    source = replace(LATTICE, curvature=curvature, radius=0.8, oversampling=16)
    points = laid(source)
    own = counting(points.u, points.v, source=source)
    assert own.total(points.u.size) == pytest.approx(source.elements(), rel=0.01)
    rows = np.nonzero(membership(points, (TILTED,)) == 0)[0]
    assert own.elements(rows) == pytest.approx(source.elements(TILTED), rel=0.02)
    assert own.weights is not None
    assert own.weights.min() >= 1.0


def test_sprinklings_are_counted_one_by_one() -> None:
    source = PointSource(curvature="positive", density=100.0)
    points = laid(source)
    own = counting(points.u, points.v, source=source)
    assert own.total(points.u.size) == points.u.size
    assert own.elements(np.arange(7)) == 7.0


@pytest.mark.parametrize("columns", [None, 3])
def test_weighted_operator_is_dad(columns: int | None) -> None:
    points = laid(replace(LATTICE, density=20.0))
    n = points.u.size
    weights = conformal_factor(points.u, points.v, curvature="negative", radius=0.8)
    before = (points.u[:, None] < points.u) & (points.v[:, None] < points.v)
    dense = 0.5 * (before.astype(float) - before.T)
    root = np.sqrt(weights)
    operator = WeightedCommutator(MasslessCommutator(points.u, points.v), weights)
    x = np.random.default_rng(1).normal(size=n if columns is None else (n, columns))
    assert operator.size == n
    assert np.allclose(operator.apply(x), (root[:, None] * dense * root) @ x, atol=1e-11)
    assert operator.squared_norm() is None


def test_weights_that_do_not_fit_are_refused() -> None:
    operator = ExplicitCommutator(np.triu(np.ones((4, 4)), 1))
    for weights in (np.ones(3), np.array([1.0, 1.0, 0.0, 1.0])):
        with pytest.raises(InputError, match="weights"):
            WeightedCommutator(operator, weights)


@pytest.mark.parametrize("curvature", CURVED)
def test_sprinkled_and_weighted_sets_have_the_same_spectrum(curvature: Curvature) -> None:
    """Largest eigenvalue, mean of 24 sprinklings against the lattice: 4 standard errors."""
    source = PointSource(density=100.0, curvature=curvature, radius=0.9)
    whole = Config(points=source, regions=(Region(half_width=1.0),))
    largest = [compute(replace(whole, realisation=r)).patch.eigenvalues[0] for r in range(24)]
    twin = compute(replace(whole, points=replace(source, kind="lattice", oversampling=8)))
    expected = twin.patch.eigenvalues[0] / twin.oversampling
    error = float(np.std(largest, ddof=1)) / math.sqrt(24)
    # Finite density moves the mean by about (eigenvalue's relative variance)/2, below 0.5 %.
    assert np.mean(largest) == pytest.approx(expected, abs=4 * error + 0.005 * expected)
    flat = continuum_eigenvalues(Config(points=replace(source, curvature="flat")), 1)[0]
    assert abs(np.mean(largest) - flat) > 6 * error  # can fail


@pytest.mark.parametrize("kind", ["poisson", "lattice"])
def test_curvature_of_either_sign_keeps_more_modes(kind: str) -> None:
    config = Config(points=PointSource(kind=kind, density=150.0))  # type: ignore[arg-type]
    for curvature in CURVED:
        curved = compute(replace(config, points=replace(config.points, curvature=curvature)))
        assert curved.patch.kept_modes > compute(config).patch.kept_modes
        assert curved.certificate.met


def test_modes_are_kept_apart_by_metric_oversampling_and_shift() -> None:
    config = Config(points=LATTICE)
    others = [
        replace(config, points=replace(LATTICE, **change))
        for change in ({"oversampling": 2}, {"curvature": "positive"}, {"seed": 9})
    ]
    others.append(replace(config, realisation=1))
    assert len({search_key(c) for c in (config, *others)}) == 5
    stages = Stages()
    first = [compute(c, stages=stages).regions[0].entropy for c in (config, *others)]
    assert [compute(c).regions[0].entropy for c in (config, *others)] == first


# --------------------------------------------------------------------------- what stands on it


def test_a_campaign_draws_shifts_and_keeps_the_metric() -> None:
    setup = Setup(points=replace(LATTICE, curvature="negative"), region_count=1, half_width=0.5)
    plan = CampaignPlan(axes=(Axis(name="density", values=(60.0, 90.0)),), smallest_region=20)
    layout = design(setup, plan)
    source = layout.source(1, 3)
    assert source == replace(setup.points, density=90.0, seed=layout.seed(1, 3))
    records = [realise(layout, 0, r) for r in range(2)]
    assert all(record.samples and not record.reason for record in records)
    assert records[0].samples[0].entropy[0] != records[1].samples[0].entropy[0]
    expected = replace(setup.points, density=60.0).elements(Region(half_width=0.5))
    assert layout.cells[0].elements == pytest.approx(expected)
    assert records[0].samples[0].elements[0] == pytest.approx(expected, rel=0.03)


def test_predicted_work_grows_with_the_points_that_are_laid() -> None:
    flat = nominal(Config(points=LATTICE)).seconds
    assert nominal(Config(points=replace(LATTICE, oversampling=16))).seconds > 2 * flat
    curved = PointSource(density=2000.0, curvature="positive", radius=0.8)
    plain = replace(curved, curvature="flat")
    assert nominal(Config(points=curved)).seconds > 1.2 * nominal(Config(points=plain)).seconds


def test_expected_elements_are_those_of_the_geometry_and_points_those_laid() -> None:
    region = Region(half_width=0.25)
    assert LATTICE.elements() == 150.0 * PATCH_AREA
    assert LATTICE.expected_points() == 1200.0
    assert SOBOL.expected_points(region) == 1024 * region.area / PATCH_AREA
    assert PointSource(density=150.0).expected_points(region) == 150.0 * region.area


def test_continuum_line_follows_the_points_and_leaves_curved_patches_out() -> None:
    config = Config(points=LATTICE)
    one = continuum_eigenvalues(config, 4)
    assert continuum_eigenvalues(config, 4, ratio=4.0) == pytest.approx(4.0 * one)
    curved = replace(config, points=replace(LATTICE, curvature="positive"))
    assert continuum_eigenvalues(curved, 4).size == 0


# --------------------------------------------------------------------------- the bench


def test_bench_takes_and_gives_back_every_kind() -> None:
    setup = Setup(points=replace(LATTICE, curvature="negative", radius=2.0))
    bench = Bench()
    bench.load(setup)
    assert bench.setup() == setup
    bench.kind = "poisson"
    assert bench.setup().points == PointSource(density=150.0, curvature="negative", radius=2.0)
    bench.curvature = "flat"
    assert bench.setup().points == PointSource(density=150.0)


@pytest.mark.parametrize(
    ("start", "name", "value", "words"),
    [
        ({}, "oversampling", 4, "only quasi-uniform"),
        ({}, "radius", 2.0, "the patch is flat"),
        ({"curvature": "positive"}, "mass", 1.0, "massless only"),
        ({"mass": 1.0}, "curvature", "positive", "massless only"),
        ({"curvature": "positive"}, "radius", 0.6, "0.7 to 1000"),
        ({"kind": "lattice"}, "oversampling", 65, "1 to 64"),
    ],
)
def test_bench_refuses_what_has_no_effect_or_is_out_of_range(
    start: dict[str, object], name: str, value: object, words: str
) -> None:
    bench = Bench(**start)
    before = bench.setup()
    with pytest.raises(ValueError, match=words):
        setattr(bench, name, value)
    assert bench.setup() == before
