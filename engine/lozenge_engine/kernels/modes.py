"""Modes of the Pauli-Jordan operator above a threshold, with a certificate.

Panel Krylov route: the space of A from one vector holds every mode above the threshold once its
dimension is about 3.5 times their number; its projection is skew tridiagonal.  Nothing of size
N x N is formed.  Whatever one vector missed (exact multiplicities) is found by further vectors,
deflated against all that was found, until such a run sees nothing.
"""

from __future__ import annotations

import math
from typing import Any, NamedTuple

import numpy as np
from numpy.typing import NDArray

from lozenge_engine.kernels.krylov import (
    EPS,
    PANEL,
    Report,
    begin,
    grown,
    lifted,
    residual_goal,
    ritz_values,
    settled,
    start_vector,
)
from lozenge_engine.kernels.order import Commutator
from lozenge_engine.kernels.skew import dense_pairs

__all__ = [
    "DENSE_LIMIT",
    "Certificate",
    "Modes",
    "all_modes",
    "certified_modes",
    "certify",
    "find_modes",
]

FloatArray = NDArray[np.float64]

RATIO = 3.45
"""Krylov dimension per wanted positive mode beyond the first 24 (3.28 to 3.42 were needed at
N = 500 to 10 000)."""
MAX_STARTS = 16
"""Start vectors before the search gives up on multiplicities."""
ORTHOGONALITY_BOUND = 1e-9
FRESH_MARGIN = 1e-8
PROBES = 16
"""Random vectors that estimate the sum rule's total where it is not known exactly."""
SUM_RULE_ERRORS = 5.0
"""Standard errors allowed to that estimate: one false alarm in a million."""


DENSE_LIMIT = 4000
"""Most elements for which `all_modes` is meant (no cut in the first stage)."""


class Certificate(NamedTuple):
    """What was checked of a set of modes, and whether it holds.

    Attributes
    ----------
    met : bool
        Whether every check holds; numbers made from an unmet one carry the mark.
    reasons : tuple of str
        One sentence for each check that failed.
    residual, residual_bound : float
        Largest ||A a - lambda b||, and what is allowed.
    orthogonality, orthogonality_bound : float
        Largest entry of |Y^T Y - 1| over all pairs of found vectors, and what is allowed.
    fresh_vectors : int
        Dimension of the last deflated run from a fresh vector; 0 on the dense route.
    fresh_largest : float
        Largest eigenvalue that run saw, in units of the floor; above 1 + 1e-8 is a miss.
    square_sum, square_sum_total : float
        Sum of lambda**2 found, and the sum rule's total, half the squared norm of A: R/4 with the
        relations R when massless, otherwise estimated from random vectors.
    square_sum_error : float
        Standard error of the total; 0 where it is exact.
    square_sum_missing_bound : float
        (N/2 - found) floor**2, the most that may be missing from the total.
    """

    met: bool
    reasons: tuple[str, ...]
    residual: float
    residual_bound: float
    orthogonality: float
    orthogonality_bound: float
    fresh_vectors: int
    fresh_largest: float
    square_sum: float
    square_sum_total: float
    square_sum_error: float
    square_sum_missing_bound: float

    def as_json(self) -> dict[str, Any]:
        """Plain values for JSON."""
        return {**self._asdict(), "reasons": list(self.reasons)}


class Modes(NamedTuple):
    """Positive modes of i Delta = i A found down to a floor.

    Attributes
    ----------
    values : ndarray, shape (r,), float64
        Descending.
    vectors : ndarray, shape (N, 2 r), float64, Fortran order
        Columns a_0, b_0, a_1, b_1, ...: the mode is (a + i b)/sqrt 2.
    floor : float
        Every mode above it was looked for.
    dimension : int
        Total dimension of the Krylov spaces.
    starts : int
        Start vectors used.
    """

    values: FloatArray
    vectors: FloatArray
    floor: float
    dimension: int
    starts: int


def _ignore(_: float) -> None:
    """Report progress to nobody."""


def find_modes(
    operator: Commutator,
    *,
    floor: float,
    known: Modes | None = None,
    report: Report = _ignore,
) -> Modes:
    """Modes whose positive eigenvalue exceeds a floor, from one start vector.

    Of an exactly multiple eigenvalue one start vector finds one mode; see `certified_modes`.

    Parameters
    ----------
    operator : Commutator
        Applies the real skew A, i Delta = i A, of size N.
    floor : float
        Threshold > 0 on the eigenvalues of i Delta.
    known : Modes or None
        Modes found earlier; the search is deflated against them and adds to them.
    report : callable
        Called with a fraction in [0, 1] after every panel; may raise to stop.

    Returns
    -------
    Modes
        Descending.

    Notes
    -----
    Cost for r modes: dimension m = 3.45 r + 24, about 2 N m**2 flops in panels of 8 and 2 N m r for
    the vectors; 8 N (m + 2 r) bytes.  Massless at the default threshold r = 2 sqrt(N), so that
    the cost grows as N**2 and the memory as N**1.5.
    """
    known = known or Modes(np.empty(0), np.empty((operator.size, 0), order="F"), floor, 0, 0)
    room = operator.size - known.vectors.shape[1]
    if room < 2:
        return known._replace(floor=floor)
    expected = max(0.0, operator.size / (2.0 * math.pi * floor) - known.values.size)
    dimension = min(room, math.ceil(RATIO * expected) + 3 * PANEL)
    run = begin(
        operator.size,
        known.vectors,
        capacity=min(room, dimension + dimension // 5 + 1),
        seed=known.starts,
    )
    run, pairs = settled(
        operator, run, known.vectors, floor=floor, dimension=dimension, report=report
    )
    values, vectors = _merged(known.values, known.vectors, pairs.values, lifted(run, pairs))
    return Modes(values, vectors, floor, known.dimension + run.size, known.starts + 1)


def certified_modes(
    operator: Commutator,
    *,
    floor: float,
    known: Modes | None = None,
    report: Report = _ignore,
) -> tuple[Modes, Certificate]:
    """All modes whose positive eigenvalue exceeds a floor, with their certificate.

    Further start vectors are used as long as a fresh one sees a mode above the floor, so that
    exactly multiple eigenvalues are found whole.

    Parameters
    ----------
    operator : Commutator
        Applies the real skew A, i Delta = i A, of size N.
    floor : float
        Threshold > 0 on the eigenvalues of i Delta.
    known : Modes or None
        Modes found earlier; the search is deflated against them and adds to them.
    report : callable
        Called with a fraction in [0, 1]; may raise to stop.

    Returns
    -------
    Modes
        Descending.
    Certificate
        Of these modes; not met if `MAX_STARTS` start vectors did not suffice.

    Notes
    -----
    Cost: `find_modes` and `certify`, once when no eigenvalue is multiple.
    """
    most = MAX_STARTS + (known.starts if known is not None else 0)
    modes = find_modes(operator, floor=floor, known=known, report=_part_of(report, 0.0, 0.7))
    while True:
        certificate = certify(operator, modes, report=_part_of(report, 0.7, 0.3))
        complete = certificate.fresh_largest <= 1.0 + FRESH_MARGIN
        if complete or modes.starts >= most:
            return modes, certificate
        modes = find_modes(operator, floor=floor, known=modes, report=_part_of(report, 0.7, 0.3))


def _part_of(report: Report, start: float, share: float) -> Report:
    """Progress of one part of the work as progress of the whole."""
    return lambda fraction: report(min(1.0, start + share * fraction))


def _merged(
    values: FloatArray, vectors: FloatArray, more: FloatArray, found: FloatArray
) -> tuple[FloatArray, FloatArray]:
    """Two sets of modes as one, descending."""
    if not values.size:
        return more, found
    joined = np.concatenate([values, more])
    order = np.argsort(-joined, kind="stable")
    columns = np.column_stack([2 * order, 2 * order + 1]).ravel()
    return joined[order], np.asfortranarray(np.hstack([vectors, found])[:, columns])


def all_modes(operator: Commutator) -> Modes:
    """Every mode, by the dense real route.

    Parameters
    ----------
    operator : Commutator
        Of size N; the caller limits N.

    Returns
    -------
    Modes
        N // 2 pairs, floor 0.

    Notes
    -----
    Cost: 7 N**3 flops, 48 N**2 bytes.
    """
    matrix = operator.apply(np.eye(operator.size))
    pairs = dense_pairs((matrix - matrix.T) / 2.0)
    vectors = np.empty((operator.size, 2 * pairs.values.size), order="F")
    vectors[:, 0::2], vectors[:, 1::2] = pairs.a, pairs.b
    return Modes(pairs.values, vectors, 0.0, operator.size, 0)


def certify(operator: Commutator, modes: Modes, *, report: Report = _ignore) -> Certificate:
    """Check a set of modes against the operator.

    A deflated run of a quarter of the search's dimension from a fresh vector looks for modes
    above the floor that are not in the set.

    Parameters
    ----------
    operator : Commutator
        The operator they were found for.
    modes : Modes
        From `find_modes` or `all_modes`.
    report : callable
        Called with a fraction in [0, 1]; may raise to stop.

    Returns
    -------
    Certificate
        Residuals, orthogonality, the deflated fresh-vector run and the sum rule.

    Notes
    -----
    Cost: m/4 + 2 r applications of A and N (2 m r + 4 r**2 + m**2/8) flops; 2 N m bytes beyond
    the modes.
    """
    fresh_vectors, fresh_largest = _fresh_run(operator, modes, report=report)
    top = float(modes.values[0]) if modes.values.size else 0.0
    residual = _largest_residual(operator, modes)
    residual_bound = 10.0 * max(residual_goal(modes.floor, top), EPS * operator.size * top)
    gram = modes.vectors.T @ modes.vectors
    gram[np.diag_indices_from(gram)] -= 1.0
    orthogonality = float(np.abs(gram).max(initial=0.0))
    square_sum = float(np.sum(modes.values**2))
    total, error = _square_sum_total(operator, modes, square_sum)
    missing = (operator.size / 2 - modes.values.size) * modes.floor**2
    reasons = []
    if not residual <= residual_bound:
        reasons.append(f"a residual is {residual:.1e}, allowed {residual_bound:.1e}")
    if not orthogonality <= ORTHOGONALITY_BOUND:
        reasons.append(f"orthogonality is lost by {orthogonality:.1e}")
    if not fresh_largest <= 1.0 + FRESH_MARGIN:
        reasons.append(f"a fresh vector still sees a mode at {fresh_largest:.6g} times the floor")
    slack = 1e-9 * total + SUM_RULE_ERRORS * error
    if not total - missing - slack <= square_sum <= total + slack:
        reasons.append("the sum of squares lies outside the bound of the sum rule")
    return Certificate(
        met=not reasons,
        reasons=tuple(reasons),
        residual=residual,
        residual_bound=residual_bound,
        orthogonality=orthogonality,
        orthogonality_bound=ORTHOGONALITY_BOUND,
        fresh_vectors=fresh_vectors,
        fresh_largest=fresh_largest,
        square_sum=square_sum,
        square_sum_total=total,
        square_sum_error=error,
        square_sum_missing_bound=missing,
    )


def _square_sum_total(operator: Commutator, modes: Modes, found: float) -> tuple[float, float]:
    """Sum of all lambda**2, exact or from random signs outside the found space, and its error.

    For signs z, E ||A z||**2 is the squared norm of A (common practice); outside the found modes
    the spectrum is flat, so that a few vectors do.
    """
    norm = operator.squared_norm()
    if norm is not None:
        return norm / 2.0, 0.0
    signs = np.sign(
        np.stack([start_vector(operator.size, 2000 + k) for k in range(PROBES)], axis=1)
    )
    rest = operator.apply(np.asfortranarray(signs - modes.vectors @ (modes.vectors.T @ signs)))
    squares = np.sum(rest**2, axis=0) / 2.0
    return found + float(squares.mean()), float(squares.std(ddof=1) / math.sqrt(PROBES))


def _fresh_run(operator: Commutator, modes: Modes, *, report: Report) -> tuple[int, float]:
    """Dimension of a deflated run from a fresh vector, and the largest value it saw / floor."""
    room = operator.size - modes.vectors.shape[1]
    if modes.floor == 0.0 or room < 2:
        return 0, 0.0
    dimension = min(room, max(4 * PANEL, math.ceil(modes.dimension / 4)))
    run = begin(operator.size, modes.vectors, capacity=dimension + 1, seed=1000 + modes.starts)
    run = grown(operator, run, modes.vectors, to=dimension, report=report)
    seen = ritz_values(run, above=0.5 * modes.floor)
    return run.size, float(seen[0]) / modes.floor if seen.size else 0.0


def _largest_residual(operator: Commutator, modes: Modes) -> float:
    """Largest norm of A a - lambda b and A b + lambda a."""
    worst = 0.0
    for low in range(0, modes.values.size, 16):
        high = min(low + 16, modes.values.size)
        y = modes.vectors[:, 2 * low : 2 * high]
        rest = operator.apply(y)
        rest[:, 0::2] -= y[:, 1::2] * modes.values[low:high]
        rest[:, 1::2] += y[:, 0::2] * modes.values[low:high]
        worst = max(worst, float(np.sqrt(np.sum(rest**2, axis=0)).max()))
    return worst
