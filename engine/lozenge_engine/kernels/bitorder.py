"""An order relation with one bit for each pair: checks, closure, counts, commutator."""

from __future__ import annotations

from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from lozenge_engine.errors import InputError, refuse
from lozenge_engine.kernels import bitloops
from lozenge_engine.kernels.bitrows import (
    blocks,
    first_bit,
    members,
    pack_rows,
    permuted,
    transposed,
    unpack_rows,
)
from lozenge_engine.kernels.relation import CORRECT, no_order

__all__ = ["BitCommutator", "BitOrder", "between", "checked_order", "related"]

Words = NDArray[np.uint64]
Index = NDArray[np.intp]
FloatArray = NDArray[np.float64]


class BitOrder(NamedTuple):
    """A strict partial order, packed.

    Attributes
    ----------
    order : ndarray, shape (n,), intp
        A topological order: who precedes stands earlier.
    later : ndarray, shape (n, ceil(n/64)), uint64
        The closed relation, rows and columns in that order.
    relations, links : int
        Pairs i, j where i precedes j; and those with nothing between.
    added : int
        Relations that closing has added to what was given.
    """

    order: Index
    later: Words
    relations: int
    links: int
    added: int

    @property
    def elements(self) -> int:
        """Number of elements n."""
        return self.order.size

    def original(self) -> Words:
        """The closed packed relation in the order of the elements' numbers. Cost n^2."""
        return permuted(self.later, np.argsort(self.order))


def checked_order(words: Words, *, close: bool = False, only_links: bool = False) -> BitOrder:
    """Check a packed relation, and close it if that is asked for.

    Parameters
    ----------
    words : ndarray, shape (n, ceil(n/64)), uint64
        A packed relation; elements in any order.
    close : bool
        Add what transitivity asks for, instead of refusing where it is missing.
    only_links : bool
        The relation holds links alone: refuse an entry that has an element between, then close.

    Returns
    -------
    BitOrder
        Irreflexive, antisymmetric, acyclic and transitive.

    Raises
    ------
    InputError
        At the first violation, row by row, in the words of
        `lozenge_engine.kernels.relation.strict_partial_order`; of cycles of three and more
        elements one is named.

    Notes
    -----
    Cost: n^2 bits a few times over and n/64 words for each link, 4 to 8.5 links an element in 1+1
    sprinklings of 200 to 20 000, n^2/4 links in the worst orders; 4 n^2/8 bytes beyond the input.
    """
    n = words.shape[0]
    order = _acyclic(words)
    later = permuted(words, order)
    changed, links = np.empty(n, dtype=np.bool_), np.empty(n, dtype=np.int64)
    bitloops.closing_loop()(later, changed, links)
    given = int(np.bitwise_count(words).sum(dtype=np.int64))
    if only_links and given > links.sum():
        raise _no_link(words, later, order)
    if changed.any() and not (close or only_links):
        raise _not_transitive(words, int(order[changed].min()))
    relations = int(np.bitwise_count(later).sum(dtype=np.int64))
    return BitOrder(order, later, relations, int(links.sum()), relations - given)


def _acyclic(words: Words) -> Index:
    """A topological order, or a refusal that names why there is none."""
    n = words.shape[0]
    for i in range(n):
        if int(words[i, i // 64]) >> (i % 64) & 1:
            raise no_order(f"{i} precedes itself")
    before = transposed(words)
    for rows in blocks(n):
        both = words[rows] & before[rows]
        if both.any():
            i = int(np.argmax(both.any(axis=1)))
            j = first_bit(both[i])
            i += rows.start
            raise no_order(f"{i} precedes {j} and {j} precedes {i}")
    open_past = np.bitwise_count(before).sum(axis=1, dtype=np.int64)
    order = np.flatnonzero(open_past == 0)
    order = np.concatenate([order, np.empty(n - order.size, dtype=np.intp)])
    filled = int((open_past == 0).sum())
    at = 0
    while at < filled:
        future = members(words, int(order[at]))
        open_past[future] -= 1
        ready = future[open_past[future] == 0]
        order[filled : filled + ready.size] = ready
        filled, at = filled + ready.size, at + 1
    if filled < n:
        cycle = _cycle(words, before, np.flatnonzero(open_past > 0))
        raise no_order(" precedes ".join(map(str, cycle)))
    return order


def _cycle(words: Words, before: Words, left: Index) -> list[int]:
    """A shortest cycle through one element of those `left`, each with a predecessor among them."""
    inside = np.zeros(words.shape[0], dtype=np.bool_)
    inside[left] = True
    at, seen = int(left[0]), list[int]()
    place: dict[int, int] = {}
    while at not in place:
        place[at] = len(seen)
        seen.append(at)
        past = members(before, at)
        at = int(past[inside[past]][0])
    start = min(seen[place[at] :])
    previous = np.full(words.shape[0], -1, dtype=np.intp)
    queue = [start]
    for i in queue:
        future = members(words, i)
        if int(words[i, start // 64]) >> (start % 64) & 1:
            cycle = [start, i]
            while cycle[-1] != start:
                cycle.append(int(previous[cycle[-1]]))
            return cycle[::-1]
        fresh = future[previous[future] < 0]
        previous[fresh] = i
        queue += fresh.tolist()
    raise AssertionError("an element of a cycle reaches itself")  # pragma: no cover


def _not_transitive(words: Words, i: int) -> InputError:
    """Name what row i lacks; a row differs from its closure only if one step leads out of it."""
    future = members(words, i)
    reached = np.bitwise_or.reduce(words[future], axis=0) & ~words[i]
    j = first_bit(reached)
    k = next(k for k in future.tolist() if int(words[k, j // 64]) >> (j % 64) & 1)
    return no_order(
        f"{i} precedes {k} and {k} precedes {j}, but {i} does not precede {j}",
        do=f"{CORRECT}, or have the relation closed",
    )


def _no_link(words: Words, later: Words, order: Index) -> InputError:
    """Name the first entry with an element between; `later` is the closed relation."""
    place = np.argsort(order)
    for i in range(words.shape[0]):
        future = members(words, i)
        if not future.size:
            continue
        reached = unpack_rows(np.bitwise_or.reduce(later[place[future]], axis=0)[None], order.size)
        implied = future[reached[0, place[future]] > 0]
        if implied.size:
            j = int(implied[0])
            q = int(place[j])
            k = next(k for k in future.tolist() if int(later[place[k], q // 64]) >> (q % 64) & 1)
            return refuse(
                "links",
                given=f"{i} precedes {j}, with {k} between them",
                allowed="links alone: pairs with no element between",
                do="leave that pair out, or give all relations, not as links",
            )
    raise AssertionError("one entry is no link")  # pragma: no cover


def related(order: BitOrder, earlier: Index, later: Index) -> int:
    """Count the relations from some elements to others.

    Parameters
    ----------
    order : BitOrder
        The order.
    earlier, later : ndarray of intp
        Numbers of elements.

    Returns
    -------
    int
        Pairs of an element of `earlier` that precedes one of `later`. Cost n^2/64 at most.
    """
    place = np.argsort(order.order)
    mask = np.zeros((1, order.elements), dtype=np.bool_)
    mask[0, place[later]] = True
    wanted = pack_rows(mask)[0]
    return sum(
        int(np.bitwise_count(order.later[place[earlier[rows]]] & wanted).sum(dtype=np.int64))
        for rows in blocks(earlier.size)
    )


def between(order: BitOrder, elements: Index) -> int:
    """Count what lies between some elements without being one of them.

    Parameters
    ----------
    order : BitOrder
        The order.
    elements : ndarray of intp
        Numbers of elements.

    Returns
    -------
    int
        Others that one of them precedes and that precede one of them; 0 for a causally convex
        set, such as a diamond. Cost n^2/64 at most.
    """
    n = order.elements
    place = np.argsort(order.order)[elements]
    inside = np.zeros(n, dtype=np.bool_)
    inside[place] = True
    mask = pack_rows(inside[None])[0]
    after = np.zeros(n, dtype=np.bool_)
    if place.size:
        after = unpack_rows(np.bitwise_or.reduce(order.later[place], axis=0)[None], n)[0] > 0
    before = np.zeros(n, dtype=np.bool_)
    for rows in blocks(n):
        before[rows] = (order.later[rows] & mask).any(axis=1)
    return int((after & before & ~inside).sum())


class BitCommutator:
    """A = (C - C^T)/2 of a packed order; a `lozenge_engine.kernels.order.Commutator`.

    Parameters
    ----------
    order : BitOrder
        The order; vectors are taken and returned in the order of the elements' numbers. Holds
        another n^2/8 bytes.
    """

    def __init__(self, order: BitOrder) -> None:
        self._order = order.order
        self._relations = order.relations
        self._columns = np.ascontiguousarray(order.later.T)

    @property
    def size(self) -> int:
        """Number of elements n."""
        return self._order.size

    def apply(self, x: FloatArray) -> FloatArray:
        """Apply A.

        Parameters
        ----------
        x : (n,) or (n, s) ndarray of float64
            One vector or a panel of columns.

        Returns
        -------
        ndarray of float64
            A x, of the shape of x. Cost n^2/16 table entries read and written per vector.
        """
        loop = bitloops.product_loop()
        out = np.empty(x.shape, order="F")
        result = np.empty(self.size)
        for column, target in zip(np.atleast_2d(x.T), np.atleast_2d(out.T), strict=True):
            loop(self._columns, np.ascontiguousarray(column[self._order]), result)
            target[self._order] = result
        return out

    def squared_norm(self) -> float:
        """Return sum_ij A_ij^2 = R/2, R the number of relations."""
        return self._relations / 2
