"""Derived thresholds: the departure of mean spectra, its error, and the operators it is read on."""

from __future__ import annotations

import math

import numpy as np
import pytest

from lozenge_engine.config import PointSource, Setup
from lozenge_engine.errors import Cancelled
from lozenge_engine.evidence import EvidencePlan
from lozenge_engine.kernels.laws import diamond_eigenvalues
from lozenge_engine.kernels.thresholds import departure, merged, ratio
from lozenge_engine.pipeline import compute
from lozenge_engine.stages import Stages
from lozenge_engine.thresholds import sprinkled_spectra, threshold_record

SETUP = Setup(points=PointSource(density=200.0, seed=4), half_width=0.45, separation=0.05)


def bent(count: int, noise: float) -> tuple[np.ndarray, np.ndarray]:
    """Spectra that leave 1/k from rank 51 on by more than 5 %, of so many realisations."""
    rng = np.random.default_rng(1)
    k = np.arange(1, 101.0)
    shape = np.where(k <= 50, 1.0, 1.0 - 0.051 - 0.01 * (k - 51))
    return shape / k * (1 + noise * rng.normal(size=(count, 1))), 1 / k


def test_departure_is_the_first_rank_for_good() -> None:
    samples, reference = bent(8, 1e-6)
    found = departure(samples, reference, delta=0.05)
    assert found.rank == 51
    assert found.threshold == pytest.approx(1 / 51)
    assert found.parted == 1.0


def test_excursion_that_comes_back_is_no_departure() -> None:
    samples, reference = bent(4, 1e-6)
    samples[:, 10:20] *= 1.5
    assert departure(samples, reference, delta=0.05).rank == 51


def test_spectra_that_stay_together_have_no_departure() -> None:
    samples, reference = bent(4, 1e-6)
    found = departure(samples[:, :50], reference, delta=0.05)
    assert math.isnan(found.rank)
    assert math.isnan(found.threshold_error)
    assert found.parted == 0.0


def test_error_of_the_departure_is_the_scatter_of_fresh_realisations() -> None:
    rng = np.random.default_rng(7)
    k = np.arange(1, 201.0)
    shape = 1 - 0.001 * k

    def draw() -> np.ndarray:
        return shape / k * (1 + 0.01 * rng.normal(size=(12, 1)))

    ranks = [departure(draw(), 1 / k, delta=0.05).rank for _ in range(200)]
    errors = [departure(draw(), 1 / k, delta=0.05).rank_error for _ in range(30)]
    assert np.mean(errors) == pytest.approx(np.std(ranks), rel=0.25)


def test_one_realisation_has_no_error() -> None:
    samples, reference = bent(1, 1e-6)
    assert departure(samples, reference, delta=0.05).rank == 51
    assert math.isnan(departure(samples, reference, delta=0.05).rank_error)
    assert np.isnan(ratio(samples, reference).error).all()


def test_merged_spectrum_ends_where_the_least_known_does() -> None:
    assert merged((np.array([5.0, 3.0, 1.0]), np.array([4.0, 2.0])), above=2.0).tolist() == [
        5,
        4,
        3,
    ]


def test_restricted_uncut_spectra_are_those_of_the_dense_matrices() -> None:
    config = SETUP.config()
    patch, a, b, union = sprinkled_spectra(config, lowest=0.6)
    result = compute(config)
    c = ((result.u[:, None] < result.u) & (result.v[:, None] < result.v)).astype(float)
    i_delta = 1j * (c - c.T) / 2
    n = result.u.size
    for found, rows, expected in (
        (patch, np.arange(n), config.points.elements()),
        (a, np.nonzero(result.region_of == 0)[0], config.points.elements(config.regions[0])),
        (b, np.nonzero(result.region_of == 1)[0], config.points.elements(config.regions[1])),
    ):
        dense = np.linalg.eigvalsh(i_delta[np.ix_(rows, rows)])[::-1][: found.size]
        assert found == pytest.approx(dense * expected / rows.size, rel=1e-7)
    rows = np.nonzero(result.region_of >= 0)[0]
    sizes = [(result.region_of == k).sum() for k in (0, 1)]
    dense = np.linalg.eigvalsh(i_delta[np.ix_(rows, rows)])[::-1]
    scale = config.points.elements(config.regions[0]) / np.array(sizes)
    assert scale.min() * dense[0] * (1 - 1e-9) <= union[0] <= scale.max() * dense[0] * (1 + 1e-9)
    assert np.sort(np.concatenate([a, b]))[::-1][: union.size] == pytest.approx(union)


def test_massive_restriction_is_the_regions_own_operator() -> None:
    """Whatever lies between two elements of a diamond lies in it."""
    config = SETUP.with_(mass=2.0).config()
    _, a, *_ = sprinkled_spectra(config, lowest=0.8)
    result = compute(config)
    c = ((result.u[:, None] < result.u) & (result.v[:, None] < result.v)).astype(float)
    g = c / 2 @ np.linalg.inv(np.eye(len(c)) + 2.0**2 / (2 * 200.0) * c)
    rows = np.nonzero(result.region_of == 0)[0]
    dense = np.linalg.eigvalsh((1j * (g - g.T))[np.ix_(rows, rows)])[::-1][: a.size]
    expected = config.points.elements(config.regions[0])
    assert a == pytest.approx(dense * expected / rows.size, rel=1e-7)


def test_record_names_patch_regions_and_union_with_what_each_rule_cuts_at() -> None:
    plan = EvidencePlan(realisations=3, alpha_low=0.6)
    parts = []
    record = threshold_record(SETUP, plan, cache=Stages(), publish=parts.append)
    assert [each.name for each in record.operators] == ["patch", "A", "B", "union"]
    union = record.operators[-1]
    n = SETUP.points.elements(SETUP.regions()[0])
    assert union.thresholds["union_count"] == pytest.approx(math.sqrt(2 * n) / (4 * math.pi))
    assert union.thresholds["equal_share"] == pytest.approx(math.sqrt(n) / (4 * math.pi))
    assert union.count_at == pytest.approx(union.departure.rank, rel=0.05)
    assert [part.done for part in parts] == [2, 3]


def test_reference_without_a_closed_form_is_laid(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr("lozenge_engine.thresholds.LAID", 1000)
    plan = EvidencePlan(realisations=1, alpha_low=0.9)
    setup = SETUP.with_(region_count=1, points=PointSource(density=60.0, seed=1), mass=1.0)
    record = threshold_record(setup, plan, cache=Stages())
    assert "Sobol" in record.reference
    assert record.operators[0].ratio.value[:8] == pytest.approx(np.ones(8), abs=0.35)
    massless = diamond_eigenvalues(1, elements=120.0)[0]
    assert record.operators[0].reference[0] < 0.98 * massless


def test_cancelled_record_stops() -> None:
    def stop(stage: str, fraction: float) -> None:
        raise Cancelled

    with pytest.raises(Cancelled):
        threshold_record(SETUP, EvidencePlan(), cache=Stages(), report=stop)
