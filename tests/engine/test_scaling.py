"""Straight-line fits: textbook values, honest errors, and refusals."""

from __future__ import annotations

import math

import numpy as np
import pytest
from numpy.typing import NDArray
from scipy import optimize, stats

from lozenge_engine.kernels.scaling import estimate, fit_independent, fit_shared

FloatArray = NDArray[np.float64]
X = np.linspace(1.0, 3.0, 6)
LINE = X / 3.0 + 0.7
TRIALS = 1500
# A binomial share of 95 % in 1500 trials has the standard error 0.0056; bounds are 4 of them
# (false alarm 6e-5, seeds fixed).
COVERAGE = 4 * math.sqrt(0.95 * 0.05 / TRIALS)


def draws(rng: np.random.Generator, count: int, correlation: float) -> FloatArray:
    """`count` rows on the line with neighbouring points correlated."""
    covariance = 0.13**2 * correlation ** np.abs(np.subtract.outer(range(6), range(6)))
    return LINE + rng.standard_normal((count, 6)) @ np.linalg.cholesky(covariance).T


# -------------------------------------------------------------------- estimates


def test_an_estimate_is_mean_standard_error_and_scatter() -> None:
    samples = np.array([1.0, 2.0, 4.0, 5.0])
    found = estimate(samples)
    assert found.mean == 3.0
    assert found.scatter == pytest.approx(np.std(samples, ddof=1))
    assert found.error == pytest.approx(stats.sem(samples))
    assert found[3] == 4


def test_one_sample_has_no_error() -> None:
    found = estimate(np.array([2.5]))
    assert found.mean == 2.5
    assert np.isnan([found.error, found.scatter]).all()


@pytest.mark.parametrize("samples", [np.empty(0), np.array([np.nan, np.inf])])
def test_no_sample_has_no_mean(samples: FloatArray) -> None:
    found = estimate(samples)
    assert math.isnan(found.mean)
    assert found[3] == 0


def test_samples_that_are_no_numbers_are_left_out() -> None:
    assert estimate(np.array([1.0, np.nan, 3.0]))[:1] + estimate(np.array([1.0, 3.0]))[1:] == (
        estimate(np.array([1.0, np.nan, 3.0]))
    )


# ------------------------------------------------------- independent sprinklings


def unequal(seed: int = 1) -> list[FloatArray]:
    rng = np.random.default_rng(seed)
    return [y + 0.1 * rng.standard_normal(3 + j) for j, y in enumerate(LINE)]


def test_independent_values_are_those_of_a_weighted_polynomial_fit() -> None:
    samples = unequal()
    fit = fit_independent(X, samples)
    assert fit is not None
    counts = np.array([s.size for s in samples])
    means = np.array([s.mean() for s in samples])
    expected = np.polyfit(X, means, 1, w=np.sqrt(counts))
    np.testing.assert_allclose([fit.slope, fit.intercept], expected, rtol=1e-10)


def test_independent_errors_are_those_of_a_weighted_least_squares_solver() -> None:
    samples = unequal()
    fit = fit_independent(X, samples)
    assert fit is not None
    counts = np.array([s.size for s in samples])
    pooled = sum(((s - s.mean()) ** 2).sum() for s in samples) / (counts - 1).sum()
    _, covariance = optimize.curve_fit(
        lambda x, b, c: b * x + c,
        X,
        [s.mean() for s in samples],
        sigma=np.sqrt(pooled / counts),
        absolute_sigma=True,
    )
    np.testing.assert_allclose(
        [fit.slope_error, fit.intercept_error], np.sqrt(np.diag(covariance)), rtol=1e-6
    )


def test_independent_lack_of_fit_is_the_textbook_f_test() -> None:
    samples = unequal()
    fit = fit_independent(X, samples)
    assert fit is not None
    x = np.concatenate([np.full(s.size, v) for v, s in zip(X, samples, strict=True)])
    y = np.concatenate(samples)
    whole = float(np.sum((y - np.polyval(np.polyfit(x, y, 1), x)) ** 2))
    pure = float(sum(((s - s.mean()) ** 2).sum() for s in samples))
    spare = y.size - X.size
    ratio = (whole - pure) / 4 / (pure / spare)
    assert fit.chi2 / fit.dof == pytest.approx(ratio, rel=1e-8)
    assert fit.p_value == pytest.approx(stats.f.sf(ratio, 4, spare), rel=1e-8)


def test_independent_intervals_cover_the_truth_in_95_percent_of_the_trials() -> None:
    rng, hits = np.random.default_rng(2), 0
    width = stats.t.ppf(0.975, 6 * 7)
    for _ in range(TRIALS):
        fit = fit_independent(X, list(LINE[:, None] + 0.13 * rng.standard_normal((6, 8))))
        assert fit is not None
        hits += abs(fit.slope - 1 / 3) < width * fit.slope_error
    assert hits / TRIALS == pytest.approx(0.95, abs=COVERAGE)


def test_independent_p_values_are_uniform_on_a_line() -> None:
    rng, p = np.random.default_rng(3), []
    for _ in range(TRIALS):
        fit = fit_independent(X, list(LINE[:, None] + 0.13 * rng.standard_normal((6, 4))))
        assert fit is not None
        p.append(fit.p_value)
    assert stats.kstest(p, "uniform").pvalue > 1e-4


@pytest.mark.parametrize("shared", [False, True])
def test_a_bent_line_has_a_small_p_value(shared: bool) -> None:
    rows = draws(np.random.default_rng(4), 20, 0.0) + 0.3 * (X - 2) ** 2
    fit = fit_shared(X, rows) if shared else fit_independent(X, list(rows.T))
    assert fit is not None
    assert fit.p_value < 1e-4


@pytest.mark.parametrize(
    ("x", "samples"),
    [
        (X[:2], [np.array([1.0, 2.0])] * 2),
        (X[:3], [np.array([1.0])] * 3),
        (X[:3], [np.array([1.0, 2.0]), np.empty(0), np.array([1.0, 3.0])]),
        (np.ones(3), [np.array([1.0, 2.0])] * 3),
    ],
    ids=["two points", "one sample each", "an empty point", "one abscissa"],
)
def test_no_independent_fit_where_no_error_would_be_known(
    x: FloatArray, samples: list[FloatArray]
) -> None:
    assert fit_independent(x, samples) is None


def test_samples_without_scatter_give_no_chi2() -> None:
    fit = fit_independent(X, [np.full(3, y) for y in LINE])
    assert fit is not None
    assert fit.slope == pytest.approx(1 / 3)
    assert math.isnan(fit.chi2)
    assert math.isnan(fit.p_value)


# ------------------------------------------------------------ shared sprinklings


def test_shared_values_are_the_mean_of_one_polynomial_fit_for_each_sprinkling() -> None:
    rows = draws(np.random.default_rng(5), 12, 0.9)
    fit = fit_shared(X, rows)
    assert fit is not None
    lines = np.polyfit(X, rows.T, 1)
    np.testing.assert_allclose([fit.slope, fit.intercept], lines.mean(axis=1), rtol=1e-10)
    np.testing.assert_allclose(
        [fit.slope_error, fit.intercept_error], stats.sem(lines, axis=1), rtol=1e-10
    )


def test_shared_lack_of_fit_is_hotellings_t2_in_any_basis_of_the_contrasts() -> None:
    rows = draws(np.random.default_rng(6), 12, 0.9)
    fit = fit_shared(X, rows)
    assert fit is not None
    contrasts = rows @ np.diff(np.eye(6), n=2, axis=0).T  # X is equally spaced
    mean = contrasts.mean(axis=0)
    t2 = 12 * mean @ np.linalg.solve(np.cov(contrasts, rowvar=False), mean)
    assert fit.chi2 == pytest.approx(t2, rel=1e-8)
    assert fit.p_value == pytest.approx(stats.f.sf(t2 * 8 / (4 * 11), 4, 8), rel=1e-8)


@pytest.mark.parametrize("correlation", [0.0, 0.95])
def test_shared_intervals_cover_the_truth_in_95_percent_of_the_trials(correlation: float) -> None:
    rng, hits = np.random.default_rng(7), 0
    width = stats.t.ppf(0.975, 7)
    for _ in range(TRIALS):
        fit = fit_shared(X, draws(rng, 8, correlation))
        assert fit is not None
        hits += abs(fit.slope - 1 / 3) < width * fit.slope_error
    assert hits / TRIALS == pytest.approx(0.95, abs=COVERAGE)


def test_shared_p_values_are_uniform_on_a_line() -> None:
    rng, p = np.random.default_rng(8), []
    for _ in range(TRIALS):
        fit = fit_shared(X, draws(rng, 10, 0.95))
        assert fit is not None
        p.append(fit.p_value)
    assert stats.kstest(p, "uniform").pvalue > 1e-4


def test_negative_control_the_independent_formula_is_wrong_for_shared_sprinklings() -> None:
    rng, hits, p = np.random.default_rng(9), 0, []
    for _ in range(300):
        fit = fit_independent(X, list(draws(rng, 8, 0.95).T))
        assert fit is not None
        hits += abs(fit.slope - 1 / 3) < stats.t.ppf(0.975, 42) * fit.slope_error
        p.append(fit.p_value)
    assert hits / 300 > 0.985
    assert stats.kstest(p, "uniform").pvalue < 1e-10


def test_three_points_have_one_contrast_and_the_p_value_of_a_t_test() -> None:
    rows = draws(np.random.default_rng(10), 9, 0.5)[:, :3]
    fit = fit_shared(X[:3], rows)
    assert fit is not None
    expected = stats.ttest_1samp(rows @ [1.0, -2.0, 1.0], 0.0).pvalue
    assert fit.p_value == pytest.approx(expected, rel=1e-8)


def test_too_few_sprinklings_for_the_lack_of_fit_still_give_a_slope() -> None:
    fit = fit_shared(X, draws(np.random.default_rng(11), 4, 0.5))
    assert fit is not None
    assert math.isfinite(fit.slope_error)
    assert math.isnan(fit.chi2)
    assert math.isnan(fit.p_value)


@pytest.mark.parametrize(
    ("x", "shape"), [(X[:2], (5, 2)), (X, (1, 6)), (X, (0, 6)), (np.ones(6), (5, 6))]
)
def test_no_shared_fit_where_no_error_would_be_known(x: FloatArray, shape: tuple[int, int]) -> None:
    assert fit_shared(x, np.ones(shape)) is None


def test_identical_sprinklings_give_no_p_value() -> None:
    fit = fit_shared(X, np.tile(LINE, (8, 1)))
    assert fit is not None
    assert not fit.p_value < 0.05
