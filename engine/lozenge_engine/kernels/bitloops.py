"""The compiled loops on packed relations: the commutator's product, and transitive closure.

A packed relation in a topological order of n elements is an array of 64-bit words: bit q % 64 of
word q // 64 of row p is 1 iff p precedes q, which needs p < q.
"""

from __future__ import annotations

from functools import cache
from typing import Any

import numba
import numpy as np
from numba import types

from lozenge_engine.kernels.fenwick import Loop, compile_loop

__all__ = ["closing_loop", "product_loop"]

_WORDS = types.Array(types.uint64, 2, "C", readonly=True)
_WORDS_OUT = types.Array(types.uint64, 2, "C")
_FLAGS_OUT = types.Array(types.boolean, 1, "C")
_VECTOR = types.Array(types.float64, 1, "C", readonly=True)
_VECTOR_OUT = types.Array(types.float64, 1, "C")
_COUNT_OUT = types.Array(types.int64, 1, "C")

_EIGHT = np.uint64(8)
_BYTE = np.uint64(255)
_ONE = np.uint64(1)
_NONE = np.uint64(0)


@numba.njit(inline="always")
def _tabulate(x: Any, base: int, table: Any) -> None:
    """Write the 256 sums over subsets of x[base : base + 8], 0 beyond the end."""
    table[0] = 0.0
    for k in range(8):
        half = 1 << k
        value = x[base + k] if base + k < x.size else 0.0
        for m in range(half):
            table[half + m] = table[m] + value


@numba.njit(inline="always")
def _fold(bucket: Any, base: int, out: Any) -> None:
    """Take from out[base : base + 8] what the 256 subsets have received, and empty them."""
    for step in range(8):
        k = 7 - step
        half = 1 << k
        total = 0.0
        for m in range(half):
            total += bucket[half + m]
            bucket[m] += bucket[half + m]
            bucket[half + m] = 0.0
        if base + k < out.size:
            out[base + k] -= total
    bucket[0] = 0.0


def _product(columns: Any, x: Any, out: Any) -> None:
    """Write (C - C^T) x / 2 to `out`, eight elements at a time by tables of their 256 sums."""
    n = x.size
    table = np.zeros((8, 256))
    bucket = np.zeros((8, 256))
    out[:] = 0.0
    for c in range(columns.shape[0]):
        for b in range(8):
            _tabulate(x, 64 * c + 8 * b, table[b])
        for i in range(min(n, 64 * c + 64)):
            word = columns[c, i]
            if word == _NONE:
                continue
            total = 0.0
            for b in range(8):
                byte = word & _BYTE
                total += table[b, byte]
                bucket[b, byte] += x[i]
                word >>= _EIGHT
            out[i] += total
        for b in range(8):
            _fold(bucket[b], 64 * c + 8 * b, out)
    for i in range(n):
        out[i] *= 0.5


def _closing(rows: Any, changed: Any, links: Any) -> None:
    """Close `rows` in place, last row first; say which rows changed and how many links each has.

    A later row is closed when it is needed, so what it holds need not be looked at again: only
    links cost a row.
    """
    n, words = rows.shape
    future = np.zeros(words, dtype=np.uint64)
    for step in range(n):
        i = n - 1 - step
        first = i // 64
        future[first:] = _NONE
        found = 0
        for c in range(first, words):
            if rows[i, c] & ~future[c] == _NONE:
                continue
            for b in range(64):
                bit = _ONE << np.uint64(b)
                if rows[i, c] & bit and not future[c] & bit:
                    for d in range(c, words):
                        future[d] |= rows[64 * c + b, d]
                    future[c] |= bit
                    found += 1
        links[i] = found
        changed[i] = False
        for c in range(first, words):
            if rows[i, c] != future[c]:
                changed[i] = True
                rows[i, c] = future[c]


@cache
def product_loop() -> Loop:
    """Compile ``loop(columns, x, out)``.

    Returns
    -------
    callable
        columns : (words, n) uint64, the words of a packed relation, those of one word together;
        x : (n,) float64; out : (n,) float64, receives (C - C^T) x / 2. All C-contiguous.
        Cost n^2/16 table entries read and as many written, 32 kB of tables.
    """
    return compile_loop(_product, _WORDS, _VECTOR, _VECTOR_OUT)


@cache
def closing_loop() -> Loop:
    """Compile ``loop(rows, changed, links)``.

    Returns
    -------
    callable
        rows : (n, words) uint64, a packed acyclic relation, closed in place; changed : (n,) bool,
        the rows that were not closed; links : (n,) int64, the links of each row. All C-contiguous.
        Cost n^2/2 bits read, and at most n/64 words for each link.
    """
    return compile_loop(_closing, _WORDS_OUT, _FLAGS_OUT, _COUNT_OUT)
