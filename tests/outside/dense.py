"""The formulas as they stand in the papers, with full complex matrices and no engine in sight.

Slow, naive and independent: what the engine's fast route is compared with.
"""

from __future__ import annotations

import itertools
from typing import NamedTuple

import numpy as np
import scipy.linalg

KERNEL = 1e-10
"""Eigenvalues below this multiple of the largest count as the kernel of i Delta."""


class State(NamedTuple):
    """Patch spectrum (positive part, descending), cut Wightman matrix and cut i Delta."""

    values: np.ndarray
    w: np.ndarray
    i_delta: np.ndarray


def causal_matrix(u, v):
    """C_ij = 1 iff i precedes j: u_i < u_j and v_i < v_j."""
    return ((u[:, None] < u) & (v[:, None] < v)).astype(float)


def retarded(c, *, mass=0.0, density=1.0):
    """G = (C/2) (1 + (m^2/2 rho) C)^-1, arXiv:0806.3083."""
    return c / 2 @ np.linalg.inv(np.eye(len(c)) + mass**2 / (2 * density) * c)


def pauli_jordan(u, v, *, mass=0.0, density=1.0):
    """Hermitian matrix i Delta = i (G - G^T)."""
    g = retarded(causal_matrix(u, v), mass=mass, density=density)
    return 1j * (g - g.T)


def cut_of(kind, *, own, union, count, alpha=1.0):
    """Threshold alpha sqrt(n)/(4 pi), arXiv:1611.10281, with the n that a rule says."""
    n = {"root_count": own, "union_count": union, "equal_share": union / count}.get(kind, 0.0)
    return alpha * np.sqrt(n) / (4 * np.pi)


def positive_part(matrix):
    """Positive eigenvalues of a Hermitian matrix, descending, and their vectors."""
    values, vectors = np.linalg.eigh(matrix)
    order = np.argsort(-values)
    order = order[values[order] > 0]
    return values[order], vectors[:, order]


def kept(values, cut, number=None):
    """Mask of what a rule keeps of descending positive eigenvalues."""
    mask = values > max(cut, KERNEL * values[0])
    if number is not None:
        mask[number:] = False
    return mask


def sorkin_johnston(i_delta, *, cut):
    """Positive part of i Delta above the cut; i Delta := W - W*, arXiv:1611.10281."""
    values, vectors = positive_part(i_delta)
    mask = kept(values, cut)
    some = vectors[:, mask]
    w = (some * values[mask]) @ some.conj().T
    return State(values, w, w - w.conj())


def inside(u, v, region):
    """Rows with |t| + |x| <= half-width in the rest frame of the region's centre."""
    t, x = (u + v) / np.sqrt(2) - region.t0, (u - v) / np.sqrt(2) - region.x0
    ch, sh = np.cosh(region.boost), np.sinh(region.boost)
    rest_t, rest_x = ch * t - sh * x, ch * x - sh * t
    return np.nonzero(np.abs(rest_t) + np.abs(rest_x) <= region.half_width)[0]


def region_modes(state, rows, *, cut, number=None):
    """All positive eigenvalues of the restricted i Delta, and the kept eigenvectors."""
    values, vectors = positive_part(state.i_delta[np.ix_(rows, rows)])
    return values, vectors[:, kept(values, cut, number)]


def by_support(state, rows_of, cuts, number=None):
    """Kept eigenvectors of the union's operator, each cut like the region that holds most of it.

    arXiv:2110.07627.
    """
    rows = np.concatenate(rows_of)
    values, vectors = positive_part(state.i_delta[np.ix_(rows, rows)])
    ends = np.cumsum([0, *(len(r) for r in rows_of)])
    weight = np.array(
        [(np.abs(vectors[a:b]) ** 2).sum(axis=0) for a, b in itertools.pairwise(ends)]
    )
    owner = weight.argmax(axis=0)
    mask = np.zeros(values.size, dtype=bool)
    for k, cut in enumerate(cuts):
        mask[owner == k] = kept(values[owner == k], max(cut, KERNEL * values[0]), number)
    return rows, vectors[:, mask]


def direct_sum(rows_of, vectors_of):
    """Span of the regions' own kept eigenvectors."""
    return np.concatenate(rows_of), scipy.linalg.block_diag(*vectors_of)


def solutions(state, rows, vectors):
    """All lambda of W v = lambda i Delta v on a kept space, arXiv:1205.2953; general solver."""
    basis = np.hstack([vectors, vectors.conj()])
    w = basis.conj().T @ state.w[np.ix_(rows, rows)] @ basis
    i_delta = basis.conj().T @ state.i_delta[np.ix_(rows, rows)] @ basis
    found = scipy.linalg.eigvals(w, i_delta)
    assert np.abs(found.imag).max() < 1e-8
    return found.real


def cross_block(state, rows_of, vectors_of):
    """Norm of the block of i Delta between two kept spaces, scaled by both diagonal blocks."""
    (a, b), (x, y) = rows_of, [np.hstack([v, v.conj()]) for v in vectors_of]

    def scale(rows, basis):
        inner = basis.conj().T @ state.i_delta[np.ix_(rows, rows)] @ basis
        return 1 / np.sqrt(np.abs(np.diag(inner)))

    block = x.conj().T @ state.i_delta[np.ix_(a, b)] @ y
    return float(np.linalg.norm(scale(a, x)[:, None] * block * scale(b, y), 2))


def entropy(lam):
    """S = sum lambda ln |lambda|, arXiv:1205.2953."""
    lam = lam[lam != 0]
    return float(np.sum(lam * np.log(np.abs(lam))))


def renyi(lam, q):
    """S_q = sum ln[lambda^q - (lambda - 1)^q]/(q - 1), one term for each pair (lambda > 1)."""
    above = np.maximum(np.sort(lam)[lam.size // 2 :], 1.0)
    return float(np.sum(np.log(above**q - (above - 1) ** q)) / (q - 1))
