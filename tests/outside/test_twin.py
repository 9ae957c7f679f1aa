"""The twin against closed forms, dense formulas, denser sets and published slopes."""

from functools import cache

import numpy as np
import pytest
from scipy.linalg import eig
from scipy.optimize import brentq
from scipy.special import j0

from lozenge_engine.config import Config, Rule
from lozenge_engine.geometry import Region
from lozenge_engine.kernels.laws import diamond_eigenvalues
from lozenge_engine.kernels.laying import laid
from lozenge_engine.kernels.order import MassiveCommutator
from lozenge_engine.pipeline import compute
from lozenge_engine.source import PointSource
from lozenge_engine.stages import ONE_THREAD, Stages
from lozenge_engine.twin import quantity_of, twin, twin_slope, twins

DENSITY = 110.0
GEOMETRIES = {
    "nested": (Region(half_width=0.2),),
    "pair": (Region(half_width=0.25, x0=-0.4), Region(half_width=0.25, x0=0.4)),
    "corner": (Region(half_width=0.3, x0=-0.7),),
    "boosted": (Region(half_width=0.25, boost=0.6),),
    "earlier": (Region(half_width=0.2, t0=-0.3, x0=0.1),),
}
DENSE_SETS = [("lattice", 64, 0), ("sobol", 64, 0)]


@cache
def preview():
    """Preview twins of all geometries, from sets of 4 to 9 times the density."""
    config = Config(points=PointSource(density=DENSITY))
    found = twins(config, tuple(GEOMETRIES.values()), level="preview")
    return dict(zip(GEOMETRIES, found, strict=True))


@cache
def dense(kind, oversampling, number):
    """Entropies of all geometries on one set of about 64 times the density."""
    stages = Stages(threads_from=ONE_THREAD)
    source = PointSource(kind=kind, density=DENSITY, oversampling=oversampling, seed=9)
    found = {}
    for name, regions in GEOMETRIES.items():
        result = compute(Config(points=source, realisation=number, regions=regions), stages=stages)
        assert result.trusted
        found[name] = result
    return found


# ------------------------------------------------------------- errors hold what they claim


@pytest.mark.parametrize("geometry", GEOMETRIES)
@pytest.mark.parametrize("points", DENSE_SETS, ids=lambda p: f"{p[0]}-{p[1]}")
def test_a_set_of_64_times_the_density_lies_within_two_errors(geometry, points):
    found, result = preview()[geometry], dense(*points)[geometry]
    value, error = found.entropy[0]
    assert abs(result.regions[0].entropy - value) < 2 * error
    if len(result.regions) > 1:
        for rule, union in result.unions.items():
            value, error = quantity_of(found, f"union_{rule}")
            assert abs(union.entropy - value) < 2 * error
            value, error = quantity_of(found, f"pair_{rule}")
            assert abs(getattr(result.pairs[0], rule) - value) < 2 * error


@pytest.mark.parametrize("curvature", ["positive", "negative"])
def test_in_a_curved_patch_too(curvature):
    regions = (Region(half_width=0.5),)
    geometry = {"density": 40.0, "curvature": curvature, "radius": 0.8}
    value, error = twin(Config(points=PointSource(**geometry), regions=regions)).entropy[0]
    for kind in ("lattice", "sobol"):
        source = PointSource(kind=kind, oversampling=64, seed=9, **geometry)
        result = compute(
            Config(points=source, regions=regions), stages=Stages(threads_from=ONE_THREAD)
        )
        assert abs(result.regions[0].entropy - value) < 2 * error


def test_a_sprinkling_lies_far_outside():
    # Negative control: the errors are smaller than what discreteness does.
    source = PointSource(density=DENSITY)
    for geometry, found in preview().items():
        regions = GEOMETRIES[geometry]
        entropies = [
            compute(Config(points=source, realisation=r, regions=regions)).regions[0].entropy
            for r in range(4)
        ]
        value, error = found.entropy[0]
        assert np.mean(entropies) - value > 4 * error


def test_refined_errors_are_smaller_and_hold_the_exact_twin():
    pair = GEOMETRIES["pair"]
    refined = twin(Config(points=PointSource(density=60.0), regions=pair), level="refined")
    first = twin(Config(points=PointSource(density=60.0), regions=pair), level="preview")
    exact = twin(refined.config, level="exact")
    for quantity in ("union_support", "union_direct_sum"):
        value, error = quantity_of(refined, quantity)
        assert error < quantity_of(first, quantity).error
        assert abs(value - quantity_of(exact, quantity).value) < 2 * error


# --------------------------------------------------------------------- closed forms


def test_ten_largest_eigenvalues_of_the_twin_are_those_of_the_continuum_diamond():
    # JHEP 10 (2012) 088, arXiv:1205.1296; tolerance 1e-3 relative.
    rule = Rule(kind="fixed_number", number=12)
    found = twin(Config(points=PointSource(density=1000.0), patch_rule=rule))
    exact = diamond_eigenvalues(10, elements=2000.0)
    np.testing.assert_allclose(found.patch[:10], exact, rtol=1e-3)
    assert (np.abs(found.patch[:10] - exact) < 3 * found.patch_spread[:10]).all()
    np.testing.assert_allclose(twin(found.config, level="exact").patch[:10], exact, rtol=1e-12)


def roots(top):
    """Wavenumbers times L below `top`, by sign changes on a fine grid: n pi; tan y = 2 y."""
    grid = np.linspace(1e-3, top, int(200 * top))

    def f(y):
        return np.sin(y) - 2 * y * np.cos(y)

    changes = np.nonzero(np.diff(np.sign(f(grid))))[0]
    even = [brentq(f, grid[i], grid[i + 1], xtol=1e-13) for i in changes]
    return np.pi * np.arange(1, int(top / np.pi) + 1), np.array(even)


def dense_entropy(density, region):
    """S of a region by the formulas of the papers, complex and on a product grid.

    W = sum over kept modes of lambda f f*, iDelta = W - W*; eigenvectors of iDelta on the region
    above its threshold; W v = mu iDelta v on their span; S = sum mu ln|mu| (arXiv:1205.2953).
    """
    half = 1 / np.sqrt(2)
    cut = np.sqrt(2 * density) / (4 * np.pi)
    odd, even = roots(density * half**2 / cut)
    extent = region.extent
    x, w = np.polynomial.legendre.leggauss(26)
    sides = [(extent.u_low, extent.u_high), (extent.v_low, extent.v_high)]
    (u, wu), (v, wv) = [((a + b) / 2 + (b - a) / 2 * x, (b - a) / 2 * w) for a, b in sides]
    u, v = (z.ravel() for z in np.meshgrid(u, v))
    weight = np.sqrt(density * np.outer(wv, wu).ravel())
    columns, values = [], []
    for kl in odd:
        k = kl / half
        columns.append((np.exp(-1j * k * u) - np.exp(-1j * k * v)) / np.sqrt(8 * half**2))
        values.append(density * half / k)
    for kl in even:
        k = kl / half
        wave = np.exp(-1j * k * u) + np.exp(-1j * k * v) - 2 * np.cos(kl)
        columns.append(wave / np.sqrt(8 * half**2 - 16 * half**2 * np.cos(kl) ** 2))
        values.append(density * half / k)
    f = np.array(columns).T * weight[:, None] / np.sqrt(density)
    wightman = (f * values) @ f.conj().T
    delta = wightman - wightman.conj()
    eigenvalues, vectors = np.linalg.eigh(delta)
    kept = vectors[:, np.abs(eigenvalues) > np.sqrt(density * region.area) / (4 * np.pi)]
    mu = eig(kept.conj().T @ wightman @ kept, kept.conj().T @ delta @ kept, right=False).real
    mu = mu[np.abs(mu) > 1e-12]
    return float(np.sum(mu * np.log(np.abs(mu))))


@pytest.mark.parametrize(
    "region",
    [Region(half_width=0.4), Region(half_width=0.3, x0=0.7), Region(half_width=0.3, boost=0.5)],
    ids=["nested", "corner", "boosted"],
)
def test_exact_twin_is_the_dense_complex_computation(region):
    # arXiv:1205.1296 and 1205.2953; a generalised complex eigenproblem keeps about 9 digits.
    found = twin(Config(points=PointSource(density=25.0), regions=(region,)), level="exact")
    assert found.entropy[0].value == pytest.approx(dense_entropy(25.0, region), abs=1e-7)


# ---------------------------------------------------------------------------- slopes


@pytest.mark.parametrize(
    ("regions", "ends"),
    [
        (GEOMETRIES["nested"], 2),
        ((Region(half_width=0.1, x0=-0.3), Region(half_width=0.1, x0=0.3)), 4),
        ((Region(half_width=0.2, x0=-0.8),), 1),
    ],
    ids=["one", "two", "corner"],
)
def test_slope_of_the_exact_twin_approaches_one_sixth_for_each_end(regions, ends):
    # J. Phys. A 42 (2009) 504005, arXiv:0905.4013: asymptotic, so 5 % below is no surprise.
    ladder = [
        Config(points=PointSource(density=float(d)), regions=regions)
        for d in np.geomspace(2000.0, 16_000.0, 8)
    ]
    found = twin_slope(ladder, level="exact")
    assert found.slope == pytest.approx(ends / 6, abs=0.05 * ends / 6 + 2 * found.error)
    assert found.error < 0.1 * ends / 6


def test_slope_of_a_small_diamond_is_that_of_a_sharp_mode_cutoff():
    # 0.33277, arXiv:1311.7146 (value from memory).
    ladder = [
        Config(points=PointSource(density=float(d)), regions=(Region(half_width=0.1),))
        for d in np.geomspace(3000.0, 24_000.0, 9)
    ]
    found = twin_slope(ladder, level="exact")
    assert abs(found.slope - 0.33277) < 2 * found.error
    assert found.error < 0.02


# -------------------------------------------------------------------- massive propagator

MASS = 4.0


@pytest.mark.parametrize("kind", ["lattice", "sobol"])
def test_massive_propagator_on_a_set_is_half_j0_of_mass_times_proper_time(kind):
    # Its mean over sprinklings, arXiv:0806.3083 and DLMF 10.2.2, stands on a quasi-uniform set
    # without averaging, as far as chains sample the diamond between two points evenly.
    points = laid(PointSource(kind=kind, density=500.0, oversampling=8, seed=1))
    count = points.u.size
    operator = MassiveCommutator(points.u, points.v, mass=MASS, density=count / 2)
    first = int(np.argmin((points.u + 0.6) ** 2 + (points.v + 0.6) ** 2))
    unit = np.zeros(count)
    unit[first] = 1.0
    later = (points.u > points.u[first]) & (points.v > points.v[first])
    du, dv = points.u[later] - points.u[first], points.v[later] - points.v[first]
    tau = np.sqrt(2 * du * dv)
    column = np.abs(operator.apply(unit)[later])
    deviation = column - np.abs(j0(MASS * tau) / 2)
    assert later.sum() > count / 2
    assert np.sqrt(np.mean(deviation**2)) < 0.005
    # Negative control: another mass is told apart.
    other = column - np.abs(j0(0.9 * MASS * tau) / 2)
    assert np.sqrt(np.mean(other**2)) > 0.02


def test_massive_twin_has_less_entropy_and_the_massless_limit():
    # Common practice, no source: a mass cuts correlations off, and m -> 0 is continuous.
    regions = GEOMETRIES["nested"]
    massless = preview()["nested"].entropy[0]
    found = {
        mass: twin(Config(points=PointSource(density=DENSITY), mass=mass, regions=regions))
        for mass in (0.01, 3.0)
    }
    assert found[0.01].entropy[0].value == pytest.approx(massless.value, abs=massless.error)
    assert found[3.0].entropy[0].value < massless.value - 2 * massless.error
