"""Sprinklings against the ordering fraction, and the massive propagator against J0."""

from functools import cache

import numpy as np
import pytest
from scipy.special import j0

from lozenge_engine.kernels.laws import mean_massive_propagator
from lozenge_engine.kernels.order import MassiveCommutator, count_relations
from lozenge_engine.kernels.points import in_natural_order, sprinkle

SIGMAS = 4.0
"""Two-sided false-alarm rate of one comparison, if normal: 6.3e-5."""

# --------------------------------------------------------------------- ordering fraction

ELEMENTS = 1000
SPRINKLINGS = 200


@cache
def ordering_fractions():
    return np.array(
        [
            count_relations(*sprinkle(density=ELEMENTS / 2, seed=71, realisation=r, fixed=True))
            / (ELEMENTS * (ELEMENTS - 1) / 2)
            for r in range(SPRINKLINGS)
        ]
    )


# The orders of u and v are independent, so the fraction is (1 + tau)/2 with Kendall's tau, of
# variance 2 (2N + 5)/(9 N (N - 1)) (textbook, value from memory).
SCATTER = np.sqrt(2 * (2 * ELEMENTS + 5) / (9 * ELEMENTS * (ELEMENTS - 1))) / 2


def test_half_of_all_pairs_are_related():
    # Myrheim-Meyer relation at d = 2: ordering fraction 1/2 (value from memory).
    error = SCATTER / np.sqrt(SPRINKLINGS)
    assert abs(ordering_fractions().mean() - 0.5) < SIGMAS * error


def test_ordering_fraction_scatters_like_kendalls_tau():
    # (R - 1) s^2/sigma^2 is close to chi-squared: standard error of s^2 is sigma^2 sqrt(2/(R - 1)).
    ratio = ordering_fractions().var(ddof=1) / SCATTER**2
    assert abs(ratio - 1) < SIGMAS * np.sqrt(2 / (SPRINKLINGS - 1))


# ---------------------------------------------------------------------------- propagator

DENSITY = 300.0
MASS = 5.0
DRAWS = 1500
# (u, v) extents of five intervals centred in the patch; tau^2 = 2 du dv; the third is the fourth
# boosted.  m tau runs from 1.8 to 7.1, over the first two zeros of J0.
INTERVALS = {
    "short": (0.25, 0.25),
    "first zero": (0.34, 0.34),
    "boosted": (1.3, 0.3),
    "at rest": (0.6245, 0.6245),
    "long": (1.0, 1.0),
}


@cache
def propagators():
    """G between the ends of each interval, for each sprinkling; shape (DRAWS, intervals).

    The two ends are added to the sprinkling one interval at a time, since they would be links of
    each other's chains.
    """
    found = np.empty((DRAWS, len(INTERVALS)))
    for r in range(DRAWS):
        free = sprinkle(density=DENSITY, seed=72, realisation=r)
        for k, (du, dv) in enumerate(INTERVALS.values()):
            u, v = in_natural_order(
                np.append(free.u, [-du / 2, du / 2]), np.append(free.v, [-dv / 2, dv / 2])
            )
            past, future = np.searchsorted(u, [-du / 2, du / 2])
            unit = np.zeros(u.size)
            unit[future] = 1.0
            operator = MassiveCommutator(u, v, mass=MASS, density=DENSITY)
            found[r, k] = operator.retarded(unit)[past]
    return found


def deviation(expected):
    """Mean minus expectation, in standard errors, for each interval."""
    samples = propagators()
    error = samples.std(axis=0, ddof=1) / np.sqrt(DRAWS)
    return (samples.mean(axis=0) - expected) / error


def proper_times():
    return np.array([np.sqrt(2 * du * dv) for du, dv in INTERVALS.values()])


@pytest.mark.parametrize("interval", INTERVALS)
def test_mean_massive_propagator_is_half_j0_of_mass_times_proper_time(interval):
    # arXiv:0806.3083 and DLMF 10.2.2; exact in the mean at every density.
    k = list(INTERVALS).index(interval)
    assert abs(deviation(j0(MASS * proper_times()) / 2)[k]) < SIGMAS


def test_reference_formula_is_half_j0():
    tau = np.linspace(0.0, 2.0, 50)
    np.testing.assert_allclose(
        mean_massive_propagator(tau, mass=MASS), j0(MASS * tau) / 2, rtol=1e-14
    )


@pytest.mark.parametrize("factor", [0.0, 0.9, 1.1])
def test_another_mass_is_told_apart(factor):
    # Negative control: the comparison is sharp enough to see 10 % of the mass.
    assert np.abs(deviation(j0(factor * MASS * proper_times()) / 2)).max() > 2 * SIGMAS
