"""Points in natural order: their order along v, their v-ranks, their relations."""

from __future__ import annotations

import numpy as np
from numpy.typing import ArrayLike, NDArray

from lozenge_engine.errors import refuse

__all__ = ["Indices", "ascending_pairs", "count_relations", "v_order"]

Indices = NDArray[np.intp]


def v_order(u: ArrayLike, v: ArrayLike) -> tuple[Indices, Indices]:
    """Check points in natural order and sort them along v.

    Parameters
    ----------
    u, v : (n,) array_like of float
        Light-cone coordinates, in natural order: u ascending; no value twice.

    Returns
    -------
    by_v, rank : (n,) ndarray of intp
        The elements by ascending v, and the place 0..n-1 of each in that row.

    Raises
    ------
    InputError
        If the arrays are empty or not of one shape (n,), u is not ascending, or a value of u or v
        stands twice or is not finite.
    """
    u, v = (np.asarray(w, dtype=np.float64) for w in (u, v))
    if u.ndim != 1 or u.shape != v.shape or not u.size:
        raise refuse(
            "points",
            given=f"u of shape {u.shape} and v of shape {v.shape}",
            allowed="two arrays (n,) of one length n >= 1",
            do="pass one u and one v for every element",
        )
    _check_finite("u", u)
    _check_finite("v", v)
    descents = np.diff(u) < 0
    if descents.any():
        k = int(np.argmax(descents))
        raise refuse(
            "u",
            given=f"u[{k + 1}] = {u[k + 1]:.17g} after u[{k}] = {u[k]:.17g}",
            allowed="ascending u (natural order)",
            do="sort the points by u",
        )
    by_v = np.argsort(v, kind="stable")
    _check_single("u", u, np.arange(u.size))
    _check_single("v", v, by_v)
    rank = np.empty_like(by_v)
    rank[by_v] = np.arange(v.size)
    return by_v, rank


def count_relations(u: ArrayLike, v: ArrayLike) -> int:
    """Count the pairs of elements of which one precedes the other.

    Parameters
    ----------
    u, v : (n,) array_like of float
        Light-cone coordinates, in natural order: u ascending; no value twice.

    Returns
    -------
    int
        R, from 0 to n(n-1)/2. Cost O(n log n).

    Raises
    ------
    InputError
        If u is not ascending, a value of u or v stands twice, or is not finite.
    """
    return ascending_pairs(v_order(u, v)[0])


def ascending_pairs(permutation: Indices) -> int:
    """Count the pairs of entries of a permutation that stand in ascending order.

    Parameters
    ----------
    permutation : (n,) ndarray of intp
        Each of 0..n-1 once.

    Returns
    -------
    int
        From 0 to n(n-1)/2. Cost O(n log n).

    Notes
    -----
    Two positions differ first in one bit; bit by bit from the top, with the positions grouped by
    their higher bits and in v-order within a group, a position whose bit is 1 follows each
    0 of its group that stands before it. Then every group is split by that bit, in place.
    """
    n = permutation.size
    positions = permutation
    slots = np.arange(n)
    relations = 0
    for bit in reversed(range((n - 1).bit_length())):
        ones = (positions >> bit) & 1 == 1
        start = (slots >> (bit + 1)) << (bit + 1)  # groups before the last are full
        zeros_before = np.cumsum(~ones) - ~ones - (start >> 1)
        relations += int(zeros_before[ones].sum())
        goal = start + np.where(ones, (1 << bit) + slots - start - zeros_before, zeros_before)
        split = np.empty_like(positions)
        split[goal] = positions
        positions = split
    return relations


def _check_finite(name: str, values: NDArray[np.float64]) -> None:
    """Refuse the first value that is not finite."""
    finite = np.isfinite(values)
    if not finite.all():
        k = int(np.argmin(finite))
        raise refuse(
            f"{name}[{k}]", given=str(values[k]), allowed="a finite number", do="remove the point"
        )


def _check_single(name: str, values: NDArray[np.float64], ascending: Indices) -> None:
    """Refuse a value that stands twice; `ascending` sorts the values."""
    equal = np.diff(values[ascending]) == 0
    if equal.any():
        k = int(np.argmax(equal))
        i, j = sorted((int(ascending[k]), int(ascending[k + 1])))
        raise refuse(
            name,
            given=f"{name}[{i}] = {name}[{j}] = {values[i]:.17g}",
            allowed="each value once: the order of two such points is undefined",
            do="remove or shift one of the two points",
        )
