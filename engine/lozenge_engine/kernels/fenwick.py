"""The compiled loops of the order operators: running sums, and sums over a Fenwick tree.

Importing this module imports numba (about a second); each loop is compiled, or read from
numba's cache, when it is first asked for. The loops release the interpreter lock.
"""

from __future__ import annotations

from collections.abc import Callable
from functools import cache
from typing import Any

import numba
import numpy as np
from numba import types

__all__ = ["massless_loop", "panel_tree_loop", "vector_tree_loop"]

Loop = Callable[..., None]

# One signature per loop: arguments that may be read-only are accepted without compiling again.
_VECTOR = types.Array(types.float64, 1, "C", readonly=True)
_PANEL = types.Array(types.float64, 2, "C", readonly=True)
_INDEX = types.Array(types.intp, 1, "C", readonly=True)
_VECTOR_OUT = types.Array(types.float64, 1, "C")
_PANEL_OUT = types.Array(types.float64, 2, "C")


def compile_loop(loop: Loop, *arguments: Any) -> Loop:
    """Compile a loop, with numba's cache on disk where it has a folder it can write.

    Parameters
    ----------
    loop : callable
        Returns nothing.
    *arguments : numba types
        Of its arguments.

    Returns
    -------
    callable
        The compiled loop, which releases the interpreter lock.
    """
    signature = types.void(*arguments)
    try:
        compiled: Loop = numba.njit(signature, nogil=True, cache=True)(loop)
    except Exception:  # noqa: BLE001 - no folder, full disk, broken file: no cache is needed
        compiled = numba.njit(signature, nogil=True)(loop)
    return compiled


def _massless(x: Any, by_v: Any, out: Any) -> None:
    """Write (T + x - cu - cv)/2 to `out`; the sums run in the order of NumPy's cumsum."""
    total = 0.0
    running = 0.0
    for k in range(x.size):
        i = by_v[k]
        running += x[i]
        out[i] = running  # cv
        total += x[k]
    running = 0.0
    for i in range(x.size):
        running += x[i]  # cu
        out[i] = 0.5 * (((total + x[i]) - running) - out[i])


def _vector_tree(x: Any, rank: Any, coupling: float, backward: bool, out: Any) -> None:
    """Write C y (backward) or C^T y (forward) to `out`, y + coupling * out = x.

    One sweep over the elements: the tree holds the y of those already met, by v-rank, so that
    the sum over an element's future (past) is known when y of that element is needed.
    """
    n = x.size
    tree = np.zeros(n + 1)
    for step in range(n):
        i = n - 1 - step if backward else step
        place = n - rank[i] if backward else rank[i] + 1
        total = 0.0
        node = place - 1
        while node > 0:
            total += tree[node]
            node &= node - 1
        out[i] = total
        y = x[i] - coupling * total
        node = place
        while node <= n:
            tree[node] += y
            node += node & -node


def _panel_tree(x: Any, rank: Any, coupling: float, backward: bool, out: Any) -> None:
    """`_vector_tree` for every column of a panel, the column index innermost."""
    n, columns = x.shape
    tree = np.zeros((n + 1, columns))
    y = np.empty(columns)
    for step in range(n):
        i = n - 1 - step if backward else step
        place = n - rank[i] if backward else rank[i] + 1
        for c in range(columns):
            out[i, c] = 0.0
        node = place - 1
        while node > 0:
            for c in range(columns):
                out[i, c] += tree[node, c]
            node &= node - 1
        for c in range(columns):
            y[c] = x[i, c] - coupling * out[i, c]
        node = place
        while node <= n:
            for c in range(columns):
                tree[node, c] += y[c]
            node += node & -node


@cache
def massless_loop() -> Loop:
    """Compile ``loop(x, by_v, out)``: half of (C - C^T) x of one vector.

    Returns
    -------
    callable
        x : (n,) float64; by_v : (n,) intp, the elements in ascending v; out : (n,) float64.
        All C-contiguous. Cost O(n).
    """
    return compile_loop(_massless, _VECTOR, _INDEX, _VECTOR_OUT)


@cache
def vector_tree_loop() -> Loop:
    """Compile ``loop(x, rank, coupling, backward, out)`` for one vector.

    Returns
    -------
    callable
        x : (n,) float64; rank : (n,) intp, the v-ranks 0..n-1; coupling : float;
        backward : bool, C if true and C^T if false; out : (n,) float64, receives
        C (1 + coupling C)^-1 x. All C-contiguous. Cost O(n log n), work space n numbers.
    """
    return compile_loop(_vector_tree, _VECTOR, _INDEX, types.float64, types.boolean, _VECTOR_OUT)


@cache
def panel_tree_loop() -> Loop:
    """Compile ``loop(x, rank, coupling, backward, out)`` for a panel of vectors.

    Returns
    -------
    callable
        As `vector_tree_loop`, with x and out (n, s) float64 C-contiguous.
        Cost O(s n log n), work space s n numbers.
    """
    return compile_loop(_panel_tree, _PANEL, _INDEX, types.float64, types.boolean, _PANEL_OUT)
