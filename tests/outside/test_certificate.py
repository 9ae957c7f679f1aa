"""A set of modes with a hole must be noticed; exactly multiple eigenvalues must be found whole.

Source: none; what a certificate is for.  The multiple spectra follow from the definition: the
operator of mutually unrelated copies of one causal set is block diagonal.
"""

from functools import cache

import numpy as np
import pytest
from scipy.linalg import block_diag
from tests.outside.dense import causal_matrix, pauli_jordan, positive_part

from lozenge_engine.kernels.laws import root_count_cut
from lozenge_engine.kernels.modes import certified_modes, certify
from lozenge_engine.kernels.order import (
    ExplicitCommutator,
    MassiveCommutator,
    MasslessCommutator,
)
from lozenge_engine.kernels.points import sprinkle

DENSITY = 700.0


@cache
def found(mass, seed):
    points = sprinkle(density=DENSITY, seed=seed)
    if mass:
        operator = MassiveCommutator(points.u, points.v, mass=mass, density=DENSITY)
    else:
        operator = MasslessCommutator(points.u, points.v, compiled=True)
    return operator, *certified_modes(operator, floor=root_count_cut(operator.size))


def without(modes, k):
    """The modes but for the one at k."""
    k %= modes.values.size
    columns = np.delete(np.arange(2 * modes.values.size), [2 * k, 2 * k + 1])
    return modes._replace(
        values=np.delete(modes.values, k), vectors=np.asfortranarray(modes.vectors[:, columns])
    )


def place(modes, where):
    return {"top": 0, "second": 1, "middle": modes.values.size // 2, "nearest the cut": -1}[where]


everywhere = pytest.mark.parametrize("where", ["top", "second", "middle", "nearest the cut"])
several = pytest.mark.parametrize(("mass", "seed"), [(0.0, 51), (0.0, 52), (0.0, 53), (5.0, 54)])


@several
def test_certificate_holds_for_the_whole_set(mass, seed):
    _, _, certificate = found(mass, seed)
    assert certificate.met, certificate.reasons


@everywhere
@several
def test_dropping_one_mode_trips_the_certificate(mass, seed, where):
    operator, modes, _ = found(mass, seed)
    assert not certify(operator, without(modes, place(modes, where))).met


@everywhere
@several
def test_the_fresh_run_sees_the_dropped_mode_whether_or_not_there_is_a_sum_rule(mass, seed, where):
    # A Ritz value never exceeds the largest eigenvalue left: what is seen is the mode itself.
    operator, modes, _ = found(mass, seed)
    k = place(modes, where)
    seen = certify(operator, without(modes, k)).fresh_largest * modes.floor
    assert modes.floor < seen <= modes.values[k] * (1 + 1e-9)


def test_a_spoiled_eigenvalue_trips_the_certificate():
    operator, modes, _ = found(0.0, 51)
    values = modes.values.copy()
    values[3] *= 1 + 1e-6
    assert not certify(operator, modes._replace(values=values)).met


def test_a_mode_listed_twice_trips_the_certificate():
    # Every residual is as good as before: only orthogonality and the sum of squares can tell.
    operator, modes, _ = found(0.0, 51)
    twice = modes._replace(
        values=np.concatenate([modes.values, modes.values[-1:]]),
        vectors=np.asfortranarray(np.hstack([modes.vectors, modes.vectors[:, -2:]])),
    )
    certificate = certify(operator, twice)
    assert any("orthogonality" in reason for reason in certificate.reasons)
    assert not certificate.met


@several
def test_the_fresh_run_takes_a_quarter_of_the_steps_of_the_search(mass, seed):
    _, modes, certificate = found(mass, seed)
    assert certificate.fresh_vectors >= modes.dimension / 4


def test_the_search_finds_a_dropped_mode_again():
    operator, modes, _ = found(0.0, 52)
    holed = without(modes, modes.values.size // 2)
    again, certificate = certified_modes(operator, floor=modes.floor, known=holed)
    assert certificate.met
    np.testing.assert_allclose(again.values, modes.values, rtol=1e-10)


# ------------------------------------------------------------------------ multiplicity


@pytest.mark.parametrize("copies", [2, 3, 6])
def test_spectrum_of_identical_unrelated_causal_sets_is_found_whole(copies):
    points = sprinkle(density=60.0, seed=55, fixed=True)
    c = causal_matrix(*points)
    once = positive_part(pauli_jordan(*points))[0]
    floor = float(np.sqrt(once[9] * once[10]))
    operator = ExplicitCommutator(block_diag(*[c] * copies))
    modes, certificate = certified_modes(operator, floor=floor)
    assert certificate.met
    np.testing.assert_allclose(modes.values, np.repeat(once[:10], copies), rtol=1e-11)


def test_copies_side_by_side_in_the_plane_have_a_doubled_spectrum():
    # Shifted by +3 in u and -3 in v: spacelike to each other, so the blocks do not couple.
    points = sprinkle(density=60.0, seed=56, fixed=True)
    once = positive_part(pauli_jordan(*points))[0]
    floor = float(np.sqrt(once[9] * once[10]))
    operator = MasslessCommutator(
        np.concatenate([points.u, points.u + 3]), np.concatenate([points.v, points.v - 3])
    )
    modes, certificate = certified_modes(operator, floor=floor)
    assert certificate.met
    np.testing.assert_allclose(modes.values, np.repeat(once[:10], 2), rtol=1e-11)


def unrelated_pairs(count):
    """Two-element chains: i Delta has the eigenvalues +-1/2 only, `count` times each."""
    return ExplicitCommutator(block_diag(*[[[0.0, 1.0], [0.0, 0.0]]] * count))


@pytest.mark.parametrize("count", [2, 10])
def test_modes_that_one_start_vector_cannot_reach_are_found(count):
    # The space of any one vector is two-dimensional here, in floating point too.
    modes, certificate = certified_modes(unrelated_pairs(count), floor=0.25)
    assert certificate.met
    np.testing.assert_allclose(modes.values, np.full(count, 0.5), rtol=1e-12)


def test_antichain_has_no_mode():
    operator = ExplicitCommutator(np.zeros((40, 40)))
    modes, certificate = certified_modes(operator, floor=0.1)
    assert certificate.met
    assert modes.values.size == 0
