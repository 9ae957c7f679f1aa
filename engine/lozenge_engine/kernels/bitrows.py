"""Relations with one bit for each pair of elements: packing, unpacking, transposing.

Row i of a packed relation is `numpy.packbits` of row i of C, little-endian, in 64-bit words:
bit j % 64 of word j // 64 is 1 iff element i precedes element j.
"""

from __future__ import annotations

from collections.abc import Iterator

import numpy as np
from numpy.typing import NDArray

from lozenge_engine.errors import refuse

__all__ = [
    "blocks",
    "first_bit",
    "members",
    "pack_pairs",
    "pack_rows",
    "permuted",
    "transposed",
    "unpack_rows",
    "words_of",
]

Words = NDArray[np.uint64]
Index = NDArray[np.intp]

BLOCK = 1024
"""Rows that are unpacked at a time, to bound the memory; a multiple of 64."""


def words_of(elements: int) -> int:
    """Words of one row.

    Parameters
    ----------
    elements : int
        n.

    Returns
    -------
    int
        ceil(n / 64).
    """
    return -(-elements // 64)


def pack_rows(bits: NDArray[np.bool_] | NDArray[np.uint8]) -> Words:
    """Pack rows of a relation.

    Parameters
    ----------
    bits : ndarray, shape (k, n), bool or uint8
        0 or 1.

    Returns
    -------
    ndarray, shape (k, ceil(n/64)), uint64
        The words; bits beyond n are 0. Cost k n.
    """
    k, n = bits.shape
    packed = np.zeros((k, 8 * words_of(n)), dtype=np.uint8)
    packed[:, : -(-n // 8)] = np.packbits(bits, axis=1, bitorder="little")
    return packed.view("<u8").astype(np.uint64, copy=False)


def unpack_rows(words: Words, elements: int) -> NDArray[np.uint8]:
    """Unpack rows of a relation.

    Parameters
    ----------
    words : ndarray, shape (k, ceil(n/64)), uint64
        From `pack_rows`.
    elements : int
        n.

    Returns
    -------
    ndarray, shape (k, n), uint8
        0 or 1. Cost k n.
    """
    data = np.ascontiguousarray(words, dtype="<u8").view(np.uint8)
    return np.unpackbits(data, axis=1, count=elements, bitorder="little")


def pack_pairs(earlier: Index, later: Index, *, elements: int) -> Words:
    """Pack a relation that is given by its pairs.

    Parameters
    ----------
    earlier, later : (R,) ndarray of intp
        earlier[k] precedes later[k]; 0 <= both < n.
    elements : int
        n.

    Returns
    -------
    ndarray, shape (n, ceil(n/64)), uint64
        The packed relation.

    Raises
    ------
    InputError
        If a pair stands twice.

    Notes
    -----
    Cost R log R; n^2/8 + 40 R bytes.
    """
    code = earlier.astype(np.int64) * elements + later
    code.sort()
    again = np.flatnonzero(code[1:] == code[:-1])
    if again.size:
        i, j = divmod(int(code[again[0]]), elements)
        raise refuse(
            "relations",
            given=f"{i} precedes {j} twice",
            allowed="every pair once",
            do="leave one of them out (element numbers count from 0)",
        )
    rows, columns = np.divmod(code, elements)
    words = np.zeros((elements, words_of(elements)), dtype=np.uint64)
    place = rows * words.shape[1] + columns // 64
    if place.size:
        starts = np.flatnonzero(np.diff(place, prepend=-1))
        bits = np.uint64(1) << (columns % 64).astype(np.uint64)
        words.ravel()[place[starts]] = np.bitwise_or.reduceat(bits, starts)
    return words


def blocks(elements: int) -> Iterator[slice]:
    """Consecutive blocks of rows, to unpack one at a time.

    Parameters
    ----------
    elements : int
        n.

    Yields
    ------
    slice
        At most 1024 rows; starts at a multiple of 64.
    """
    for start in range(0, elements, BLOCK):
        yield slice(start, min(start + BLOCK, elements))


def transposed(words: Words) -> Words:
    """The relation read backwards.

    Parameters
    ----------
    words : ndarray, shape (n, ceil(n/64)), uint64
        A packed relation.

    Returns
    -------
    ndarray, shape (n, ceil(n/64)), uint64
        Its transpose. Cost n^2 and 1024 n bytes beyond it.
    """
    n = words.shape[0]
    out = np.zeros_like(words)
    for rows in blocks(n):
        bits = unpack_rows(words[rows], n)
        packed = pack_rows(np.ascontiguousarray(bits.T))
        out[:, rows.start // 64 : rows.start // 64 + packed.shape[1]] = packed
    return out


def permuted(words: Words, order: Index) -> Words:
    """The relation with rows and columns in another order.

    Parameters
    ----------
    words : ndarray, shape (n, ceil(n/64)), uint64
        A packed relation.
    order : ndarray, shape (n,), intp
        Element that stands at each place.

    Returns
    -------
    ndarray, shape (n, ceil(n/64)), uint64
        A new packed relation. Cost n^2.
    """
    n = order.size
    out = np.empty_like(words)
    for rows in blocks(n):
        out[rows] = pack_rows(unpack_rows(words[order[rows]], n)[:, order])
    return out


def first_bit(row: Words) -> int:
    """Find the first 1 of a row.

    Parameters
    ----------
    row : ndarray, shape (words,), uint64
        A row that holds a 1.

    Returns
    -------
    int
        Its position.
    """
    word = int(np.flatnonzero(row)[0])
    value = int(row[word])
    return 64 * word + (value & -value).bit_length() - 1


def members(words: Words, i: int) -> Index:
    """List the elements that one element precedes.

    Parameters
    ----------
    words : ndarray, shape (n, ceil(n/64)), uint64
        A packed relation.
    i : int
        The element.

    Returns
    -------
    ndarray of intp
        Ascending.
    """
    return np.flatnonzero(unpack_rows(words[i : i + 1], words.shape[0])[0])
