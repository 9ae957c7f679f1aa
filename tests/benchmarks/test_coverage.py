"""Do stated 95 % intervals of a slope hold the truth in 95 % of synthetic campaigns?

Scatter and correlation are measured ones; samples are normal, the truth is a line.  Run:
python -m pytest -m benchmark -s tests/benchmarks/test_coverage.py
"""

import math

import numpy as np
import pytest
from scipy import special

from lozenge_engine.kernels.cells import weightable
from lozenge_engine.kernels.whitening import Solution, solve
from lozenge_engine.schedule import GROWTH, LEAST, PILOT

pytestmark = pytest.mark.benchmark

CAMPAIGNS = 2000
SEED = 20_261_201
"""Chosen before the first run; each case adds its own number."""
SLOPE, CONSTANT = 1 / 3, 1.2
INTERVALS = (0.93, 0.97)
"""Four standard errors of a share of 95 % among 2000 (0.0049): false alarm 4e-5 for each case."""
P_VALUES = (0.03, 0.07)
"""The same about 5 %."""

# Measured with lozenge_engine.realisation.realise: one diamond of half-width 0.2 at the centre,
# six densities, 100 realisations each of seed 11; scatter of its entropy, CPU seconds.
DENSITIES = np.array([1000.0, 1320.0, 1741.0, 2297.0, 3031.0, 4000.0])
LADDER_X = np.log(0.4 * np.sqrt(DENSITIES))
LADDER_SCATTER = np.array([0.138, 0.144, 0.133, 0.125, 0.101, 0.101])
LADDER_SECONDS = np.array([0.134, 0.227, 0.331, 0.488, 0.829, 1.414])

# The same at density 2000, half-widths 0.15 to 0.4, each at the centre and shifted by t = 0.4
# with its mirror image: 120 realisations of seed 12 shared by the ten cells.
SIZES = np.array([0.15, 0.2, 0.25, 0.32, 0.4])
SWEEP_SCATTER = np.array([0.147, 0.097, 0.141, 0.089, 0.106, 0.069, 0.083, 0.058, 0.074, 0.051])
SWEEP_CORRELATION = """
-.17 .51 -.02 .27 .08 .21 -.05 .15 -.09
-.14 .38 .00 .20 -.14 .05 .02 .05
.09 .39 .10 .38 -.07 .28 -.08
-.06 .51 -.03 .28 -.09 .24
-.04 .53 -.11 .39 -.27
-.03 .39 -.11 .30
-.03 .50 -.10
-.08 .40
-.27
"""
# The same at ten half-widths at the centre only, 160 realisations of seed 13.
TEN_SIZES = np.array([0.15, 0.167, 0.187, 0.208, 0.232, 0.259, 0.288, 0.322, 0.359, 0.4])
TEN_SCATTER = np.array([0.144, 0.144, 0.134, 0.128, 0.103, 0.095, 0.093, 0.082, 0.074, 0.063])
TEN_CORRELATION = """
.60 .49 .46 .38 .16 .28 .24 .26 .17
.62 .52 .53 .28 .36 .23 .19 .17
.63 .50 .40 .45 .25 .21 .15
.53 .45 .54 .39 .32 .26
.53 .51 .36 .24 .28
.51 .42 .28 .35
.58 .42 .38
.51 .40
.50
"""


def factor(scatter, upper):
    """Cholesky factor of the covariance with these correlations above the diagonal."""
    correlation = np.eye(scatter.size)
    correlation[np.triu_indices(scatter.size, 1)] = [float(value) for value in upper.split()]
    correlation += np.triu(correlation, 1).T
    return np.linalg.cholesky(correlation * np.outer(scatter, scatter))


class Ladder:
    """Campaigns over independent sprinklings, one cell each, kept as counts, means and squares.

    Batches of normal samples are drawn by their mean (normal) and sum of squares (chi-squared).
    """

    designs = tuple(np.array([[x, 1.0]]) for x in LADDER_X)
    costs = LADDER_SECONDS

    def __init__(self, rng, campaigns):
        self.rng = rng
        self.counts = np.zeros((campaigns, LADDER_X.size))
        self.means = np.zeros_like(self.counts)
        self.squares = np.zeros_like(self.counts)

    def grow(self, rows, wanted):
        """Draw on until the campaigns `rows` have `wanted` (B, G) realisations."""
        more = wanted - self.counts[rows]
        some = more > 0
        size = np.maximum(more, 1.0)
        noise = LADDER_SCATTER * self.rng.standard_normal(more.shape) / np.sqrt(size)
        means = SLOPE * LADDER_X + CONSTANT + noise
        free = np.maximum(size - 1.0, 0.5)
        squares = np.where(size > 1.0, LADDER_SCATTER**2 * self.rng.chisquare(free), 0.0)
        off = means - self.means[rows]
        share = more / wanted
        self.squares[rows] += some * (squares + off**2 * self.counts[rows] * share)
        self.means[rows] += some * off * share
        self.counts[rows] = wanted

    def moments(self, rows):
        """Means and covariances of every group."""
        variances = self.squares[rows] / (self.counts[rows] - 1.0)
        groups = range(LADDER_X.size)
        return (
            [self.means[rows][:, [g]] for g in groups],
            [variances[:, [g], None] for g in groups],
        )


class Sweep:
    """Campaigns over one sprinkling that all ten cells share, all rows drawn beforehand."""

    x = np.repeat(np.log(2.0 * SIZES * math.sqrt(2000.0)), 2)
    placement = np.tile([0, 1], SIZES.size)
    designs = (np.column_stack([x, placement == 0, placement == 1]).astype(float),)
    factor = factor(SWEEP_SCATTER, SWEEP_CORRELATION)
    costs = np.ones(1)

    def __init__(self, rng, campaigns, most=400):
        noise = rng.standard_normal((campaigns, most, self.x.size)) @ self.factor.T
        self.rows = SLOPE * self.x + CONSTANT + 0.05 * self.placement + noise
        self.counts = np.zeros((campaigns, 1))

    def grow(self, rows, wanted):
        """Look at more of them."""
        assert wanted.max() <= self.rows.shape[1]
        self.counts[rows] = wanted

    def moments(self, rows):
        """Means and covariances of the rows looked at."""
        means = np.empty((rows.size, self.x.size))
        covariances = np.empty((rows.size, self.x.size, self.x.size))
        for i, row in enumerate(rows):
            seen = self.rows[row, : int(self.counts[row, 0])]
            means[i] = seen.mean(axis=0)
            covariances[i] = np.cov(seen, rowvar=False)
        return [means], [covariances]


class TenSizes(Sweep):
    """The same for ten sizes of one class, each of which says much the same as its neighbours."""

    x = np.log(2.0 * TEN_SIZES * math.sqrt(2000.0))
    placement = np.zeros(TEN_SIZES.size, dtype=int)
    designs = (np.column_stack([x, np.ones(x.size)]),)
    factor = factor(TEN_SCATTER, TEN_CORRELATION)


def solved(campaigns, rows):
    """The default fit of these campaigns, weighted where the engine weights."""
    means, covariances = campaigns.moments(rows)
    counts = campaigns.counts[rows]
    sizes = np.array([design.shape[0] for design in campaigns.designs])
    known = weightable(counts, sizes)
    found = {}
    for weighted in (True, False):
        chosen = known == weighted
        if chosen.any():
            found[weighted] = solve(
                [m[chosen] for m in means],
                [c[chosen] for c in covariances],
                campaigns.designs,
                counts=counts[chosen],
                weighted=weighted,
            )
    if len(found) == 1:
        return next(iter(found.values()))
    merged = []
    for one, other in zip(found[True], found[False], strict=True):
        field = np.empty((rows.size, *one.shape[1:]))
        field[known], field[~known] = one, other
        merged.append(field)
    return Solution(*merged)


def held(beta, variance, freedom):
    """Share of the slopes' 95 % intervals that hold the truth."""
    half = special.stdtrit(freedom, 0.975) * np.sqrt(variance)
    return float(np.mean(np.abs(beta - SLOPE) < half))


def fixed(kind, realisations, *, case):
    """Share of intervals that hold, share of p-values below 0.05 (NaN without)."""
    campaigns = kind(np.random.default_rng([SEED, case]), CAMPAIGNS)
    rows = np.arange(CAMPAIGNS)
    campaigns.grow(rows, np.full((CAMPAIGNS, len(kind.designs)), float(realisations)))
    found = solved(campaigns, rows)
    share = held(found.beta[:, 0], found.shares[..., 0].sum(axis=-1), found.freedom[:, 0])
    p = float(np.mean(found.p_value < 0.05)) if np.isfinite(found.p_value).all() else math.nan
    return share, p


def shared_out(counts, variances, budgets, costs):
    """Spend each campaign's budget where it lowers the slope's variance most per second."""
    counts, budgets = counts.copy(), budgets.copy()
    live = np.arange(counts.shape[0])
    while live.size:
        gain = variances[live] / (counts[live] * (counts[live] + 1.0) * costs)
        g = gain.argmax(axis=1)
        # One at a time as in the engine, then in steps of a hundredth.
        step = np.maximum(1.0, np.floor(0.01 * counts[live, g]))
        counts[live, g] += step
        budgets[live] -= step * costs[g]
        live = live[budgets[live] > 0.0]
    return counts


def adaptive(kind, target, *, case, relative=False, pilot=PILOT, campaigns=CAMPAIGNS):
    """The same for campaigns that stop once the slope's error reaches `target`, and mean counts."""
    kept = kind(np.random.default_rng([SEED, case]), campaigns)
    going = np.arange(campaigns)
    kept.grow(going, np.full((campaigns, len(kind.designs)), float(pilot)))
    end = np.empty((campaigns, 4))
    while going.size:
        found = solved(kept, going)
        shares, expected = found.shares[..., 0], found.expected[..., 0]
        end[going] = np.column_stack(
            [found.beta[:, 0], shares.sum(axis=-1), found.freedom[:, 0], found.p_value]
        )
        scale = np.abs(found.beta[:, 0]) if relative else 1.0
        excess = np.sqrt(shares.sum(axis=-1)) / (target * scale)
        on = excess > 1.0
        going, counts = going[on], kept.counts[going[on]]
        growth = np.clip(1.02 * excess[on] ** 2, LEAST, GROWTH) - 1.0
        wanted = shared_out(
            counts, expected[on] * counts, growth * (counts @ kind.costs), kind.costs
        )
        if going.size:
            kept.grow(going, wanted)
    known = np.isfinite(end[:, 3])
    p = float(np.mean(end[known, 3] < 0.05)) if known.any() else math.nan
    return held(*end[:, :3].T), p, kept.counts.mean(axis=0)


def check(name, share, p):
    low = "p unknown" if math.isnan(p) else f"p < 0.05 in {100 * p:.2f} %"
    print(f"\n{name}: intervals hold {100 * share:.2f} %, {low}", end=" ")
    assert INTERVALS[0] <= share <= INTERVALS[1]
    assert math.isnan(p) or P_VALUES[0] <= p <= P_VALUES[1]


@pytest.mark.parametrize(("case", "realisations"), [(1, 8), (2, 20), (3, 100)])
def test_intervals_of_a_density_ladder_hold(case, realisations):
    check(f"ladder, {realisations} realisations", *fixed(Ladder, realisations, case=case))


@pytest.mark.parametrize(
    ("kind", "case", "realisations"),
    [(Sweep, 11, 20), (Sweep, 12, 30), (Sweep, 13, 100), (TenSizes, 14, 20), (TenSizes, 15, 100)],
)
def test_intervals_of_a_size_sweep_hold(kind, case, realisations):
    share, p = fixed(kind, realisations, case=case)
    assert math.isnan(p) == (realisations < 26)
    check(f"{kind.__name__}, {realisations} realisations", share, p)


@pytest.mark.parametrize(
    ("case", "target"), [(21, 0.05), (22, 0.04), (23, 0.03), (24, 0.02), (25, 0.02 / 3)]
)
def test_intervals_of_a_ladder_hold_when_it_stops_on_a_target(case, target):
    share, p, counts = adaptive(Ladder, target, case=case)
    check(f"ladder to {target:.4f}, pilot {PILOT}", share, p)
    print("realisations", *np.round(counts).astype(int), end=" ")


@pytest.mark.parametrize(("case", "target"), [(26, 0.12), (27, 0.06), (28, 0.02)])
def test_intervals_of_a_ladder_hold_when_it_stops_on_a_fraction_of_the_slope(case, target):
    share, p, counts = adaptive(Ladder, target, case=case, relative=True)
    check(f"ladder to {100 * target:.0f} % of the slope, pilot {PILOT}", share, p)
    print("realisations", *np.round(counts).astype(int), end=" ")


@pytest.mark.parametrize(
    ("kind", "case", "target"),
    [
        (Sweep, 31, 0.018),
        (Sweep, 32, 0.015),
        (Sweep, 33, 0.012),
        (Sweep, 34, 0.008),
        (TenSizes, 35, 0.02),
        (TenSizes, 36, 0.012),
    ],
)
def test_intervals_of_a_sweep_hold_when_it_stops_on_a_target(kind, case, target):
    share, p, counts = adaptive(kind, target, case=case)
    check(f"{kind.__name__} to {target:.4f}, pilot {PILOT}", share, p)
    print("realisations", *np.round(counts).astype(int), end=" ")


def variances_only(kind, realisations, *, case):
    """Share of intervals that hold if every cell counts as independent."""
    campaigns = kind(np.random.default_rng([SEED, case]), CAMPAIGNS, most=realisations)
    variances = campaigns.rows.var(axis=1, ddof=1) / realisations
    means, design = campaigns.rows.mean(axis=1), campaigns.designs[0]
    covariance = np.linalg.inv(np.einsum("pi,bp,pj->bij", design, 1.0 / variances, design))
    beta = np.einsum("bij,pj,bp->bi", covariance, design, means / variances)
    return held(beta[:, 0], covariance[:, 0, 0], math.inf)


def test_a_fit_that_ignores_the_covariance_fails_this_check():
    share = variances_only(TenSizes, 100, case=15)
    print(f"\nTenSizes, variances only: intervals hold {100 * share:.2f} %", end=" ")
    assert not INTERVALS[0] <= share <= INTERVALS[1]
    # With five sizes it is right by accident: what neighbours share widens the slope's error as
    # much as what all sizes share narrows it.
    share = variances_only(Sweep, 100, case=13)
    print(f"\nSweep, variances only: intervals hold {100 * share:.2f} %", end=" ")


def test_a_larger_pilot_is_safer():
    worst = {}
    for pilot in (8, 12, 16, 24, 32):
        # Stopping harms most when it happens in the first rounds.
        targets = 0.229 / math.sqrt(pilot) * np.array([1.0, 0.95, 0.9, 0.85, 0.8, 0.7, 0.5])
        shares = [
            adaptive(Ladder, t, case=100 * pilot + k, pilot=pilot, campaigns=5 * CAMPAIGNS)[0]
            for k, t in enumerate(targets)
        ]
        worst[pilot] = min(shares)
        print(f"\npilot {pilot}:", *(f"{100 * share:.2f}" for share in shares), "%", end=" ")
    # Standard error of each share 0.0022.
    assert worst[PILOT] > 0.94
