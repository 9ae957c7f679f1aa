"""Modes above a threshold by the Krylov route: the same as dense, and a certificate that trips."""

from __future__ import annotations

from collections.abc import Callable

import numpy as np
import pytest
from numpy.typing import NDArray

from lozenge_engine.errors import Cancelled
from lozenge_engine.kernels import krylov
from lozenge_engine.kernels.laws import root_count_cut
from lozenge_engine.kernels.modes import (
    Modes,
    all_modes,
    certified_modes,
    certify,
    find_modes,
)
from lozenge_engine.kernels.order import Commutator, MassiveCommutator, MasslessCommutator
from lozenge_engine.kernels.points import sprinkle

FloatArray = NDArray[np.float64]


class Dense:
    """A commutator given by its matrix."""

    def __init__(self, matrix: FloatArray) -> None:
        self.matrix = matrix

    @property
    def size(self) -> int:
        return self.matrix.shape[0]

    def apply(self, x: FloatArray) -> FloatArray:
        return self.matrix @ x

    def squared_norm(self) -> float:
        return float(np.sum(self.matrix**2))


def with_spectrum(values: list[float], n: int, seed: int = 0) -> Dense:
    """A skew operator with the given positive eigenvalues, each as often as it is listed."""
    q = np.linalg.qr(np.random.default_rng([n, seed]).standard_normal((n, n)))[0]
    a, b = q[:, 0 : 2 * len(values) : 2], q[:, 1 : 2 * len(values) : 2]
    m = (b * values) @ a.T
    return Dense(m - m.T)


def massless(count: int, seed: int = 1) -> MasslessCommutator:
    points = sprinkle(density=count / 2, seed=seed, fixed=True)
    return MasslessCommutator(points.u, points.v)


def massive(count: int, mass: float = 3.0) -> MassiveCommutator:
    points = sprinkle(density=count / 2, seed=2, fixed=True)
    return MassiveCommutator(points.u, points.v, mass=mass, density=count / 2)


def dense_values(operator: Commutator, floor: float) -> FloatArray:
    matrix = operator.apply(np.eye(operator.size))
    values = np.linalg.eigvalsh(1j * matrix)[::-1]
    return values[values > floor]


def check_modes(operator: Commutator, modes: Modes, floor: float) -> None:
    expected = dense_values(operator, floor)
    assert modes.values.size == expected.size
    top = expected[0] if expected.size else 1.0
    np.testing.assert_allclose(modes.values, expected, rtol=0, atol=1e-11 * top)
    a, b = modes.vectors[:, 0::2], modes.vectors[:, 1::2]
    np.testing.assert_allclose(operator.apply(a), b * modes.values, rtol=0, atol=1e-10 * top)
    np.testing.assert_allclose(operator.apply(b), -a * modes.values, rtol=0, atol=1e-10 * top)
    gram = modes.vectors.T @ modes.vectors
    np.testing.assert_allclose(gram, np.eye(gram.shape[0]), atol=1e-10)


OPERATORS: dict[str, Callable[[], Commutator]] = {
    "massless 60": lambda: massless(60),
    "massless 301": lambda: massless(301),
    "massless 600": lambda: massless(600),
    "massive 300": lambda: massive(300),
}


@pytest.mark.parametrize("name", OPERATORS)
@pytest.mark.parametrize("alpha", [0.3, 1.0, 2.5])
def test_the_krylov_route_finds_the_modes_of_the_dense_solver(name: str, alpha: float) -> None:
    operator = OPERATORS[name]()
    floor = root_count_cut(operator.size, alpha)
    modes, certificate = certified_modes(operator, floor=floor)
    check_modes(operator, modes, floor)
    assert certificate.met, certificate.reasons


@pytest.mark.parametrize("name", OPERATORS)
def test_the_dense_route_finds_every_mode(name: str) -> None:
    operator = OPERATORS[name]()
    modes = all_modes(operator)
    assert (modes.values.size, modes.floor) == (operator.size // 2, 0.0)
    values = np.linalg.eigvalsh(1j * operator.apply(np.eye(operator.size)))[::-1]
    expected = values[: operator.size // 2]
    np.testing.assert_allclose(modes.values, expected, atol=1e-12 * expected[0])
    assert certify(operator, modes).met


@pytest.mark.parametrize("n", range(2, 13))
@pytest.mark.parametrize("seed", range(3))
def test_tiny_sets_are_solved_whole(n: int, seed: int) -> None:
    rng = np.random.default_rng([n, seed])
    operator = MasslessCommutator(np.sort(rng.uniform(-0.7, 0.7, n)), rng.uniform(-0.7, 0.7, n))
    modes, certificate = certified_modes(operator, floor=1e-3)
    check_modes(operator, modes, 1e-3)
    assert certificate.met


@pytest.mark.parametrize("n", [1, 2, 20])
def test_an_antichain_has_no_modes(n: int) -> None:
    u = np.arange(n, dtype=float)
    modes, certificate = certified_modes(MasslessCommutator(u, -u), floor=0.1)
    assert modes.values.size == 0
    assert certificate.met


def test_a_chain_has_the_closed_spectrum_of_the_sign_matrix() -> None:
    # (C - C^T)/2 of a chain: i times it has the eigenvalues cot((2k-1) pi/(2n))/2.
    n = 40
    u = np.arange(n, dtype=float)
    expected = 0.5 / np.tan((2 * np.arange(1, n // 2 + 1) - 1) * np.pi / (2 * n))
    modes, _ = certified_modes(MasslessCommutator(u, u), floor=0.3)
    np.testing.assert_allclose(modes.values, expected[expected > 0.3], atol=1e-12 * n)


def test_a_floor_above_everything_gives_no_modes_and_holds() -> None:
    operator = massless(300)
    modes, certificate = certified_modes(operator, floor=300.0)
    assert modes.values.size == 0
    assert certificate.met


@pytest.mark.parametrize("first", [3.0, 1.3])
def test_extension_from_a_higher_floor_equals_the_direct_search(first: float) -> None:
    operator = massless(500)
    cut = root_count_cut(operator.size)
    known, _ = certified_modes(operator, floor=first * cut)
    extended, certificate = certified_modes(operator, floor=cut, known=known)
    check_modes(operator, extended, cut)
    assert certificate.met


def test_extension_keeps_the_vectors_that_were_known_to_the_bit() -> None:
    operator = massless(500)
    cut = root_count_cut(operator.size)
    known, _ = certified_modes(operator, floor=2 * cut)
    extended, _ = certified_modes(operator, floor=cut, known=known)
    assert np.array_equal(extended.vectors[:, : known.vectors.shape[1]], known.vectors)


def test_extension_below_everything_ends_with_every_mode() -> None:
    operator = massless(60)
    known, _ = certified_modes(operator, floor=root_count_cut(60))
    expected = dense_values(operator, 1e-4)
    modes, certificate = certified_modes(operator, floor=1e-4, known=known)
    np.testing.assert_allclose(modes.values, expected, atol=1e-11 * expected[0])
    assert certificate.met


@pytest.mark.parametrize("times", [2, 3, 5])
def test_degenerate_eigenvalues_are_found_whole(times: int) -> None:
    operator = with_spectrum([5.0] * times + [4.0, 3.0, 3.0, 2.0, 0.4, 0.2], 40)
    modes, certificate = certified_modes(operator, floor=1.0)
    check_modes(operator, modes, 1.0)
    assert modes.values.size == times + 4
    assert certificate.met


class Doubled:
    """Two copies of a commutator side by side: every eigenvalue stands twice, exactly."""

    def __init__(self, one: Commutator) -> None:
        self.one = one

    @property
    def size(self) -> int:
        return 2 * self.one.size

    def apply(self, x: FloatArray) -> FloatArray:
        n = self.one.size
        return np.concatenate([self.one.apply(x[:n]), self.one.apply(x[n:])])

    def squared_norm(self) -> float:
        norm = self.one.squared_norm()
        assert norm is not None
        return 2 * norm


def test_an_exactly_doubled_spectrum_is_found_whole() -> None:
    operator = Doubled(massless(200))
    modes, certificate = certified_modes(operator, floor=3.0)
    check_modes(operator, modes, 3.0)
    assert certificate.met


def test_dropping_one_copy_of_a_double_eigenvalue_trips_the_certificate() -> None:
    operator = Doubled(massless(200))
    modes, _ = certified_modes(operator, floor=3.0)
    fewer = modes._replace(values=modes.values[1:], vectors=modes.vectors[:, 2:])
    certificate = certify(operator, fewer)
    assert not certificate.met
    assert certificate.fresh_largest == pytest.approx(modes.values[0] / 3.0, rel=1e-9)


@pytest.mark.parametrize("dropped", [0, 7, -1])
def test_dropping_one_found_mode_trips_the_certificate(dropped: int) -> None:
    operator = massless(400)
    modes, _ = certified_modes(operator, floor=root_count_cut(400))
    dropped %= modes.values.size
    vectors = np.delete(modes.vectors, [2 * dropped, 2 * dropped + 1], axis=1)
    fewer = modes._replace(values=np.delete(modes.values, dropped), vectors=vectors)
    certificate = certify(operator, fewer)
    assert not certificate.met
    assert any("fresh vector" in reason for reason in certificate.reasons)


def test_a_wrong_eigenvalue_trips_the_certificate() -> None:
    operator = massless(400)
    modes, _ = certified_modes(operator, floor=root_count_cut(400))
    values = modes.values.copy()
    values[3] *= 1 + 1e-6
    assert "a residual is" in certify(operator, modes._replace(values=values)).reasons[0]


def test_a_lost_orthogonality_trips_the_certificate() -> None:
    operator = massless(400)
    modes, _ = certified_modes(operator, floor=root_count_cut(400))
    vectors = modes.vectors.copy(order="F")
    vectors[:, 4] += 1e-8 * vectors[:, 9]
    reasons = certify(operator, modes._replace(vectors=vectors)).reasons
    assert any("orthogonality" in reason for reason in reasons)


def test_a_mode_counted_twice_trips_the_certificate() -> None:
    operator = massless(400)
    modes, _ = certified_modes(operator, floor=root_count_cut(400))
    twice = modes._replace(
        values=np.concatenate([modes.values[:1], modes.values]),
        vectors=np.asfortranarray(np.hstack([modes.vectors[:, :2], modes.vectors])),
    )
    assert not certify(operator, twice).met


def test_the_fresh_run_takes_at_least_a_quarter_of_the_search() -> None:
    operator = massless(600)
    modes, certificate = certified_modes(operator, floor=root_count_cut(600))
    assert certificate.fresh_vectors >= modes.dimension / 4


@pytest.mark.parametrize("name", OPERATORS)
def test_the_search_is_deterministic_to_the_bit(name: str) -> None:
    one, other = (
        certified_modes(OPERATORS[name](), floor=root_count_cut(OPERATORS[name]().size))[0]
        for _ in range(2)
    )
    assert np.array_equal(one.values, other.values)
    assert np.array_equal(one.vectors, other.vectors)


@pytest.mark.parametrize("panel", [1, 3, 16])
def test_the_panel_size_does_not_change_the_modes(
    panel: int, monkeypatch: pytest.MonkeyPatch
) -> None:
    operator, cut = massless(400), root_count_cut(400)
    expected = find_modes(operator, floor=cut).values
    monkeypatch.setattr(krylov, "PANEL", panel)
    np.testing.assert_allclose(
        find_modes(operator, floor=cut).values, expected, rtol=0, atol=1e-12 * expected[0]
    )


def test_progress_never_falls_below_zero_nor_exceeds_one_and_reaches_the_end() -> None:
    seen: list[float] = []
    certified_modes(massless(500), floor=root_count_cut(500), report=seen.append)
    assert min(seen) >= 0.0
    assert max(seen) <= 1.0
    assert seen[-1] == pytest.approx(1.0)


@pytest.mark.parametrize("at", [0, 3, -1])
def test_a_report_that_raises_stops_the_search_and_leaves_the_known_modes_alone(at: int) -> None:
    operator, cut = massless(500), root_count_cut(500)
    known, _ = certified_modes(operator, floor=2 * cut)
    before = known.values.copy(), known.vectors.copy()
    total: list[float] = []
    certified_modes(operator, floor=cut, known=known, report=total.append)
    seen: list[float] = []

    def stop(fraction: float) -> None:
        if len(seen) == at % len(total):
            raise Cancelled
        seen.append(fraction)

    with pytest.raises(Cancelled):
        certified_modes(operator, floor=cut, known=known, report=stop)
    assert np.array_equal(known.values, before[0])
    assert np.array_equal(known.vectors, before[1])


def test_a_krylov_basis_is_orthonormal_and_makes_the_operator_tridiagonal() -> None:
    operator = massless(500)
    nothing = np.empty((500, 0), order="F")
    run = krylov.begin(500, nothing, capacity=130, seed=0)
    run = krylov.grown(operator, run, nothing, to=120, report=lambda _: None)
    basis = run.basis[:, : run.size]
    np.testing.assert_allclose(basis.T @ basis, np.eye(run.size), atol=1e-12)
    small = basis.T @ operator.apply(basis)
    coupling = run.coupling[: run.size - 1]
    expected = np.diag(coupling, -1) - np.diag(coupling, 1)
    np.testing.assert_allclose(small, expected, atol=1e-11 * np.abs(coupling).max())


def test_a_certificate_is_strict_json() -> None:
    import json

    _, certificate = certified_modes(massless(60), floor=root_count_cut(60))
    assert json.loads(json.dumps(certificate.as_json(), allow_nan=False))["met"] is True
