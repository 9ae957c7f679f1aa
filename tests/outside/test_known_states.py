"""Entropies that are known in closed form: squeezed pairs of modes, and pure states."""

import numpy as np
import pytest
from scipy.linalg import block_diag

from lozenge_engine.config import MODES, Config, PointSource, Rule
from lozenge_engine.geometry import Region
from lozenge_engine.kernels.gaussian import (
    contributions,
    projected,
    restricted_spectrum,
    symplectic,
)
from lozenge_engine.pipeline import compute

SQUEEZINGS = np.array([0.05, 0.3, 0.8, 1.5, 2.5])
EPS = np.finfo(float).eps


def squeezed_pairs(squeezings):
    """Factor F of a two-mode squeezed vacuum for each r, rows (q, p) of the first partners first.

    The symplectic matrix of the two-mode squeezer, (cosh r, sinh r Z; sinh r Z, cosh r),
    Z = diag(1, -1): textbook, value from memory.
    """
    z = np.diag([1.0, -1.0])
    blocks = []
    for r in squeezings:
        own, other = np.cosh(r) * np.eye(2), np.sinh(r) * z
        blocks.append(np.block([[own, other], [other, own]]))
    f = block_diag(*blocks)
    rows = np.arange(f.shape[0])
    return np.vstack([f[rows % 4 < 2], f[rows % 4 >= 2]])


def one_side(squeezings, *, seed=61):
    """The first partners alone, in coordinates mixed by a well-conditioned linear map."""
    f = squeezed_pairs(squeezings)[: 2 * len(squeezings)]
    rng = np.random.default_rng(seed)
    n = f.shape[0]
    mixed = (np.eye(n) + 0.3 * rng.standard_normal((n, n)) / np.sqrt(n)) @ f
    spectrum = restricted_spectrum(mixed)
    return symplectic(projected(spectrum, np.ones(spectrum.pairs.values.size, dtype=bool)))


def test_symplectic_values_of_squeezed_pairs_are_half_cosh_2r():
    # Textbook; in these variables "Entanglement entropy in free quantum field theory",
    # arXiv:0905.2562.  Value from memory.
    found = one_side(SQUEEZINGS)
    expected = np.sort(np.cosh(2 * SQUEEZINGS) / 2)[::-1]
    np.testing.assert_allclose(found.values, expected, rtol=1e3 * EPS * np.cosh(5.0))


def test_entropy_of_squeezed_pairs_is_the_textbook_one():
    # cosh^2 ln cosh^2 - sinh^2 ln sinh^2, summed.  Value from memory.
    c2, s2 = np.cosh(SQUEEZINGS) ** 2, np.sinh(SQUEEZINGS) ** 2
    expected = float(np.sum(c2 * np.log(c2) - s2 * np.log(s2)))
    found = float(contributions(one_side(SQUEEZINGS).values).sum())
    assert found == pytest.approx(expected, abs=1e-10)


@pytest.mark.parametrize("q", [0.5, 0.9, 1.1, 2.0, 3.0, 10.0])
def test_renyi_entropy_of_squeezed_pairs_follows_from_their_occupation(q):
    # One partner is in the mixture p_n = (1 - x) x^n, x = tanh^2 r, so that
    # S_q = ln[(1 - x)^q / (1 - x^q)]/(1 - q).  Textbook, from memory.
    x = np.tanh(SQUEEZINGS) ** 2
    expected = float(np.sum(np.log((1 - x) ** q / (1 - x**q)) / (1 - q)))
    found = float(contributions(one_side(SQUEEZINGS).values, order=q).sum())
    assert found == pytest.approx(expected, abs=1e-9)


def test_renyi_entropy_tends_to_the_von_neumann_entropy_at_order_one():
    # Second derivative of ln sum p^q bounds the difference by |q - 1| times the variance of ln p.
    values = np.cosh(2 * SQUEEZINGS) / 2
    near = contributions(values, order=1 + 1e-6).sum()
    assert near == pytest.approx(contributions(values).sum(), abs=1e-4)


def test_a_squeezed_pair_as_a_whole_is_pure():
    spectrum = restricted_spectrum(squeezed_pairs(SQUEEZINGS))
    found = symplectic(projected(spectrum, np.ones(2 * SQUEEZINGS.size, dtype=bool)))
    np.testing.assert_allclose(found.values, 0.5, rtol=1e3 * EPS * np.cosh(5.0) ** 2)


# ------------------------------------------------------------------------- whole patch


def whole_patch(mode, *, mass, half_width=1.0):
    patch, region = MODES[mode]
    return compute(
        Config(
            points=PointSource(density=400.0, seed=62),
            mass=mass,
            regions=(Region(half_width=half_width),),
            patch_rule=Rule(kind=patch),
            region_rule=Rule(kind=region),
        )
    ).regions[0]


@pytest.mark.parametrize("mass", [0.0, 3.0])
@pytest.mark.parametrize("mode", ["two_stages", "fixed_number", "regions_only", "none"])
def test_entropy_of_the_whole_patch_is_zero(mode, mass):
    # The Sorkin-Johnston state is pure (arXiv:1205.1296).  s - 1/2 = O(N eps) for each of up to
    # N/2 modes, each worth x (1 - ln x): below 1e-8 at N = 800.
    found = whole_patch(mode, mass=mass)
    assert found.symplectic.size >= 20
    assert 0 <= found.entropy < 1e-8


def test_entropy_of_most_of_the_patch_is_not_zero():
    # Negative control: the zero above is not what any region gives.
    assert whole_patch("two_stages", mass=0.0, half_width=0.95).entropy > 0.5
