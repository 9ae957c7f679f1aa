"""Curved patches and quasi-uniform sets against what is known without this program."""

from __future__ import annotations

import math
from collections.abc import Callable

import numpy as np
import pytest
from numpy.typing import NDArray

from lozenge_engine.config import Config, PointSource
from lozenge_engine.geometry import PATCH, PATCH_EXTENT, Curvature, Region, volume
from lozenge_engine.kernels.curved import conformal_factor, ordering_fraction
from lozenge_engine.kernels.points import sprinkle
from lozenge_engine.kernels.ranks import count_relations
from lozenge_engine.pipeline import compute

CURVED: tuple[Curvature, ...] = ("positive", "negative")
Metric = Callable[[NDArray[np.float64]], NDArray[np.float64]]


def ricci_scalar(metric: Metric, place: NDArray[np.float64], step: float = 2e-3) -> float:
    """Ricci scalar of any metric from its components, by central differences (textbook formulas).

    R = g^bd R^a_bad, R^a_bcd = d_c G^a_db - d_d G^a_cb + G^a_ce G^e_db - G^a_de G^e_cb.
    """
    unit = np.eye(2) * step

    def connection(x: NDArray[np.float64]) -> NDArray[np.float64]:
        slope = np.array([(metric(x + e) - metric(x - e)) / (2 * step) for e in unit])  # d_c g_ab
        lowered = 0.5 * (
            np.einsum("cab->abc", slope)
            + np.einsum("bac->abc", slope)
            - np.einsum("abc->abc", slope)
        )
        return np.einsum("ad,dbc->abc", np.linalg.inv(metric(x)), lowered)

    g = connection(place)
    change = np.array([(connection(place + e) - connection(place - e)) / (2 * step) for e in unit])
    riemann = np.einsum("cadb->abcd", change) - np.einsum("dacb->abcd", change)
    riemann += np.einsum("ace,edb->abcd", g, g) - np.einsum("ade,ecb->abcd", g, g)
    return float(np.einsum("bd,abad->", np.linalg.inv(metric(place)), riemann))


@pytest.mark.parametrize(
    ("curvature", "sign"), [("positive", 1.0), ("negative", -1.0), ("flat", 0.0)]
)
@pytest.mark.parametrize("radius", [0.8, 2.0])
def test_scalar_curvature_is_constant_and_two_over_the_squared_radius(
    curvature: Curvature, sign: float, radius: float
) -> None:
    """Signature (-, +), in which de Sitter space is the positive one (textbook convention)."""

    def metric(place: NDArray[np.float64]) -> NDArray[np.float64]:
        t, x = place
        u, v = np.array([(t + x) * PATCH_EXTENT]), np.array([(t - x) * PATCH_EXTENT])
        factor = conformal_factor(u, v, curvature=curvature, radius=radius)[0]
        return np.diag([-factor, factor])

    for place in ((0.0, 0.0), (0.3, 0.1), (-0.2, 0.5)):
        found = ricci_scalar(metric, np.array(place))
        assert found == pytest.approx(sign * 2.0 / radius**2, abs=2e-3 / radius**2)


@pytest.mark.parametrize("curvature", CURVED)
def test_ordering_fraction_is_that_of_the_sprinklings(curvature: Curvature) -> None:
    """Own derivation against counting; 150 sprinklings, four standard errors (1 in 16 000)."""
    fractions = []
    for r in range(150):
        points = sprinkle(density=150.0, seed=21, realisation=r, curvature=curvature, radius=0.8)
        n = points.u.size
        fractions.append(count_relations(*points) / (n * (n - 1) / 2))
    error = float(np.std(fractions, ddof=1)) / math.sqrt(150)
    expected = ordering_fraction(curvature=curvature, radius=0.8)
    assert np.mean(fractions) == pytest.approx(expected, abs=4 * error)
    assert abs(expected - 0.5) > 20 * error  # the flat value would fail


def test_ordering_fraction_of_a_flat_patch_is_one_half() -> None:
    """The d = 2 value of the Myrheim-Meyer relation (memory)."""
    assert ordering_fraction(curvature="flat", radius=1.0) == pytest.approx(0.5, abs=1e-13)
    for curvature in CURVED:
        assert ordering_fraction(curvature=curvature, radius=1000.0) == pytest.approx(0.5, abs=1e-6)


@pytest.mark.parametrize("radius", [0.7, 0.9, 2.0])
def test_exchange_of_time_and_space_turns_one_metric_into_the_other(radius: float) -> None:
    """Related and unrelated pairs change places, so the fractions add up to one (own argument)."""
    both = [ordering_fraction(curvature=curvature, radius=radius) for curvature in CURVED]
    assert sum(both) == pytest.approx(1.0, abs=1e-10)
    areas = [volume(PATCH, curvature=curvature, radius=radius) for curvature in CURVED]
    assert areas[0] == pytest.approx(areas[1], rel=1e-13)


def diamond(count: int) -> NDArray[np.float64]:
    """k L of the exact modes: n pi, and the positive roots of tan y = 2 y by bisection."""
    roots = []
    for k in range(count):
        low, high = (k * math.pi + (1.0 if k == 0 else 0.0)), (k + 0.5) * math.pi
        for _ in range(100):
            middle = 0.5 * (low + high)
            if math.tan(middle) < 2.0 * middle:
                low = middle
            else:
                high = middle
        roots.append(low)
    return np.sort(np.array([*roots, *(np.arange(1, count + 1) * math.pi)]))[:count]


@pytest.mark.parametrize(
    ("source", "bound"),
    [
        (PointSource(kind="lattice", density=125.0, oversampling=16), 2e-3),
        (PointSource(kind="sobol", density=128.0, oversampling=16), 2e-3),
    ],
)
def test_quasi_uniform_sets_have_the_exact_spectrum_of_the_diamond(
    source: PointSource, bound: float
) -> None:
    """JHEP 10 (2012) 088, arXiv:1205.1296: lambda = rho L^2/(k L), L^2 = 1/2 in u and v.

    The whole pipeline's path, first ten; sprinklings of this density are off by several percent.
    """
    result = compute(Config(points=source, regions=(Region(half_width=0.5),)))
    expected = source.density * 0.5 / diamond(10)
    found = result.patch.eigenvalues[:10] / result.oversampling
    assert np.abs(found / expected - 1.0).max() < bound
    sprinkled = compute(Config(points=PointSource(density=source.density)))
    assert np.abs(sprinkled.patch.eigenvalues[:10] / expected - 1.0).max() > 10 * bound


@pytest.mark.parametrize("curvature", CURVED)
def test_count_of_curved_modes_follows_the_volume(curvature: Curvature) -> None:
    """The count above lambda tends to n/(2 pi lambda), n the elements (PHYSICS, measured)."""
    source = PointSource(
        kind="lattice", density=150.0, oversampling=16, curvature=curvature, radius=0.9
    )
    patch = compute(Config(points=source, regions=(Region(half_width=0.5),))).patch
    assert patch.nominal_modes == pytest.approx(2.0 * math.sqrt(source.elements()), rel=5e-3)
    assert patch.kept_modes == pytest.approx(patch.nominal_modes, rel=0.03)
    flat = 2.0 * math.sqrt(2.0 * source.density)
    assert abs(patch.kept_modes - flat) > 0.1 * flat  # counted by area it would fail
