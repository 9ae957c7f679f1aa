"""The lattice of currents against printed values, its purity and its own naive formula."""

from __future__ import annotations

import numpy as np
import pytest
from scipy import linalg

from lozenge_engine.errors import InputError
from lozenge_engine.kernels import currents
from lozenge_engine.kernels.currents import (
    cross_ratio,
    current_curve,
    current_mutual,
    current_mutual_of_length,
    small_eta,
)


# Source: a throw-away computation of the project's own, done twice, with the recipe in the module;
# per chirality, extrapolated from 64 to 512 sites.  Half of the last printed digit is allowed, and
# as much again as the extrapolation may be off.
@pytest.mark.parametrize(
    ("gap", "eta", "printed", "digit"),
    [
        (1.0, 1 / 4, 0.0013299, 1e-7),
        (0.5, 4 / 9, 0.0053781, 1e-7),
        (0.25, 16 / 25, 0.015614, 1e-6),
        (0.125, 64 / 81, 0.03490, 1e-5),
    ],
)
def test_mutual_information_is_what_was_computed_before(
    gap: float, eta: float, printed: float, digit: float
) -> None:
    assert cross_ratio(1.0, 1.0, gap) == pytest.approx(eta)
    found = current_mutual(gap)
    assert found.value == pytest.approx(printed, abs=digit / 2 + found.error)
    assert found.error < 1e-3 * printed


# Source: eta**2/60 per chirality towards eta = 0, value from memory.
def test_far_apart_it_falls_as_the_square_of_the_cross_ratio() -> None:
    ratios = []
    for gap in (2.0, 4.0, 8.0):
        eta = cross_ratio(1.0, 1.0, gap)
        ratios.append(current_mutual(gap).value / float(small_eta(np.array(eta))))
    away = np.array(ratios) - 1.0
    assert (np.diff(away) < 0).all()
    assert 0.0 < away[-1] < 0.02


def test_blocks_of_other_spacing_are_not_the_printed_ones() -> None:
    """Negative control: the next gap's value is far outside the tolerance."""
    assert abs(current_mutual(1.5).value - 0.0013299) > 1e-4


def test_entropy_is_that_of_the_naive_eigenvalue_problem() -> None:
    """F v = s |i C| v by a dense complex solve, without the parities."""
    sites = np.r_[0:10, 14:24]
    apart = sites[:, None] - sites
    f = np.zeros(apart.shape)
    even = apart % 2 == 0
    f[even] = 2 / (np.pi * (1 - apart[even].astype(float) ** 2))
    commutator = (apart == -1).astype(float) - (apart == 1)
    s = np.abs(linalg.eigvals(np.linalg.solve(1j * commutator, f)))
    s = np.sort(s)[::2]
    naive = np.sum((s + 0.5) * np.log(s + 0.5) - (s - 0.5) * np.log(np.maximum(s - 0.5, 1e-300)))
    assert currents._entropy(sites) == pytest.approx(naive, rel=1e-9)


def test_the_infinite_lattice_is_pure() -> None:
    """On a ring of L sites F is |sin k| and the commutator 2 i sin k: every s is one half."""
    k = 2 * np.pi * np.arange(64) / 64
    n = np.arange(-400, 401)
    even = n % 2 == 0
    f = np.where(even, 2 / (np.pi * np.where(even, 1.0 - n.astype(float) ** 2, 1.0)), 0.0)
    transformed = (f[None, :] * np.cos(k[:, None] * n)).sum(axis=1)
    assert transformed == pytest.approx(np.abs(np.sin(k)), abs=2 / (np.pi * 400))


def test_the_curve_rises_with_the_cross_ratio() -> None:
    curve = current_curve((1.0, 0.5, 2.0))
    assert (np.diff(curve.eta) > 0).all()
    assert (np.diff(curve.mutual) > 0).all()


@pytest.mark.parametrize(("length", "gap"), [(9, 2), (10, 3), (0, 2), (10, -2), (4000, 2)])
def test_blocks_with_a_centre_or_none_at_all_are_refused(length: int, gap: int) -> None:
    with pytest.raises(InputError, match="even"):
        current_mutual_of_length(length=length, gap=gap)
