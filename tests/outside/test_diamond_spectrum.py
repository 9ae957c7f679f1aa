"""The patch's eigenvalues against the continuum diamond, and the sum rule."""

from functools import cache

import numpy as np
import pytest
from scipy.optimize import brentq
from tests.outside.dense import causal_matrix

from lozenge_engine.kernels.laws import diamond_eigenvalues, root_count_cut
from lozenge_engine.kernels.modes import all_modes, certified_modes
from lozenge_engine.kernels.order import ExplicitCommutator, MasslessCommutator
from lozenge_engine.kernels.points import scrambled_sobol, sprinkle

LOG2_COUNT = 13
SEED = 1  # of the scrambling


@cache
def first_ten():
    """Ten largest eigenvalues on 8 192 scrambled Sobol points."""
    points = scrambled_sobol(LOG2_COUNT, seed=SEED)
    operator = MasslessCommutator(points.u, points.v, compiled=True)
    floor = 4 * root_count_cut(operator.size)
    modes, certificate = certified_modes(operator, floor=floor)
    assert certificate.met
    return modes.values[:10]


def continuum(count, elements):
    """Eigenvalues rho L/k with L = 1/sqrt2: k L = n pi, and tan(k L) = 2 k L, k > 0.

    Source: "A ground state for the causal diamond in 2 dimensions", JHEP 10 (2012) 088,
    arXiv:1205.1296.  Roots by their sign change on a fine grid, not by the engine's brackets.
    """
    grid = np.linspace(1e-3, 40.0, 200_001)

    def f(y):
        return np.sin(y) - 2 * y * np.cos(y)

    signs = np.nonzero(np.diff(np.sign(f(grid))))[0]
    roots = [brentq(f, grid[i], grid[i + 1], xtol=1e-13) for i in signs]
    k_times_l = np.sort([*(np.pi * np.arange(1, 13)), *roots])[:count]
    return (elements / 2) * 0.5 / k_times_l


def test_first_ten_eigenvalues_are_those_of_the_continuum_diamond():
    # arXiv:1205.1296; 1e-3 relative, tolerance of the issue.
    np.testing.assert_allclose(first_ten(), continuum(10, 2**LOG2_COUNT), rtol=1e-3)


def test_reference_eigenvalues_are_the_roots_found_here():
    # arXiv:1205.1296 twice; brentq's tolerance on either side.
    np.testing.assert_allclose(
        diamond_eigenvalues(12, elements=5000.0), continuum(12, 5000.0), rtol=1e-12
    )


def test_one_family_of_wavenumbers_alone_does_not_describe_the_spectrum():
    # Negative control: with k L = n pi in both families the second eigenvalue is off by a third.
    twice = np.repeat(2**LOG2_COUNT / 4 / (np.pi * np.arange(1, 6)), 2)
    assert np.abs(first_ten() / twice - 1).max() > 0.05


@pytest.mark.parametrize("elements", [301, 800])
def test_squares_of_all_positive_eigenvalues_sum_to_a_quarter_of_the_relations(elements):
    # Trace of (i Delta)^2 with entries +-i/2 for each of R relations: 2 sum lambda^2 = R/2.
    # Common practice, no source.  Backward error of a dense solver: N eps of the total.
    points = sprinkle(density=elements / 2, seed=41, fixed=True)
    relations = int(causal_matrix(*points).sum())
    modes = all_modes(MasslessCommutator(points.u, points.v))
    total = float(np.sum(modes.values**2))
    assert total == pytest.approx(relations / 4, rel=elements * np.finfo(float).eps)


def test_sum_rule_holds_for_an_order_given_entry_by_entry():
    # As above, on a partial order that no points of the plane have: a random transitive one.
    rng = np.random.default_rng(42)
    c = np.triu(rng.random((200, 200)) < 0.02, 1).astype(float)
    while not np.array_equal(closed := np.minimum(c + c @ c, 1.0), c):
        c = closed
    total = float(np.sum(all_modes(ExplicitCommutator(c)).values ** 2))
    assert total == pytest.approx(c.sum() / 4, rel=200 * np.finfo(float).eps)
