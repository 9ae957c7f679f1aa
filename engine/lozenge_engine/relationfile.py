"""Causal sets from files: relations or links, and the elements of regions.

A file's sizes are looked at before its contents are read, and nothing in it is run.
"""

from __future__ import annotations

import array
import re
from collections.abc import Iterator
from pathlib import Path
from typing import BinaryIO, NamedTuple

import numpy as np
from numpy.typing import NDArray

from lozenge_engine.errors import InputError, refuse
from lozenge_engine.geometry import MAX_REGIONS, region_letter
from lozenge_engine.kernels.bitrows import pack_pairs, pack_rows, transposed, words_of
from lozenge_engine.pairtable import check_size, pairs_of

__all__ = [
    "LEAST_ELEMENTS",
    "MOST_ELEMENTS",
    "RelationFile",
    "read_members",
    "read_relation",
]

Words = NDArray[np.uint64]
Index = NDArray[np.intp]

LEAST_ELEMENTS = 4
MOST_ELEMENTS = 20_000
MOST_LINE = 1000
"""Bytes of a line of a Matrix Market file; a longer one is read in pieces."""
FIELDS = (
    (b"pattern", b"integer", b"unsigned-integer", b"real", b"double"),
    (b"integer", b"unsigned-integer", b"real", b"double"),
)
"""Kinds of entries of a coordinate table and of an array."""
ROWS = 512
"""Rows of a .npy file read at a time."""

_HEADER = re.compile(
    rb"\{(?=[^}]*'descr': ?'([<>|=][biuf]\d)')(?=[^}]*'fortran_order': ?(True|False))"
    rb"(?=[^}]*'shape': ?\((\d{1,9}), ?(\d{1,9})\))[^{}]*\}\s*"
)
_DIGITS = re.compile(r"\d{1,6}", re.ASCII)


class RelationFile(NamedTuple):
    """A relation as it was given, before any check of the order.

    Attributes
    ----------
    words : ndarray, shape (n, ceil(n/64)), uint64
        Packed rows, `lozenge_engine.kernels.bitrows`.
    name : str
        Name of the file, without folders.
    """

    words: Words
    name: str


def read_relation(path: Path) -> RelationFile:
    """Read which element precedes which.

    Parameters
    ----------
    path : Path
        By its ending: ``.npy``, a square array of bool or of 0 and 1, entry (i, j) 1 iff i
        precedes j; ``.mtx``, Matrix Market, general, array or coordinate, also pattern, whose
        numbers count from 1; ``.csv``, columns ``earlier`` and ``later`` of element numbers that
        count from 0, ``later`` empty for an element without relations. 4 to 20 000 elements;
        the two kinds of text at most 100 MB.

    Returns
    -------
    RelationFile
        Elements are numbered from 0 from here on.

    Raises
    ------
    InputError
        If the file cannot be read, is too large or does not hold such a relation.

    Notes
    -----
    n^2/8 bytes, and for .npy 512 rows, for the two kinds of text 56 bytes a
    pair; these take about 1 s for a million.
    """
    where = f"relation file {path.name}"
    readers = {".npy": _from_npy, ".mtx": _from_matrix_market, ".csv": _from_csv}
    reader = readers.get(path.suffix.lower())
    if reader is None:
        raise refuse(
            where,
            given=f"the ending {path.suffix or '(none)'}",
            allowed=", ".join(readers),
            do="give the relation as one of these",
        )
    try:
        words = reader(path, where)
    except OSError as error:
        raise refuse(
            where,
            given=error.strerror or "an unreadable file",
            allowed="a readable file",
            do="check the path",
        ) from error
    return RelationFile(words, path.name)


def _checked_size(where: str, rows: int, columns: int) -> int:
    """Elements of a square table, or a refusal."""
    if rows != columns:
        raise refuse(
            where,
            given=f"{rows} rows and {columns} columns",
            allowed="a square table",
            do="give a row and a column for every element",
        )
    if not LEAST_ELEMENTS <= rows <= MOST_ELEMENTS:
        raise refuse(
            where,
            given=f"{rows} elements",
            allowed=f"{LEAST_ELEMENTS} to {MOST_ELEMENTS} elements",
            do="give another file",
        )
    return rows


def _not_zero_one(where: str, entry: tuple[int, int], value: object) -> InputError:
    return refuse(
        where,
        given=f"entry {entry} = {value}",
        allowed="0 or 1 (or bool)",
        do="set entry (i, j) to 1 iff element i precedes element j",
    )


# ------------------------------------------------------------------------- .npy


def _from_npy(path: Path, where: str) -> Words:
    """Packed rows of a NumPy file, read some rows at a time."""
    with path.open("rb") as file:
        dtype, by_columns, n = _npy_header(file, where)
        words = np.zeros((n, words_of(n)), dtype=np.uint64)
        for start in range(0, n, ROWS):
            rows = min(ROWS, n - start)
            data = file.read(rows * n * dtype.itemsize)
            if len(data) < rows * n * dtype.itemsize:
                raise _no_npy(where, "a file that ends early")
            block = np.frombuffer(data, dtype=dtype).reshape(rows, n)
            with np.errstate(invalid="ignore"):  # of signalling NaN
                ones = block == 1
                odd = ~(ones | (block == 0))
            if odd.any():
                i, j = (int(k[0]) for k in np.nonzero(odd))
                entry = (j, start + i) if by_columns else (start + i, j)
                raise _not_zero_one(where, entry, block[i, j])
            words[start : start + rows] = pack_rows(ones)
        if file.read(1):
            raise _no_npy(where, "more bytes than its header says")
    return transposed(words) if by_columns else words


def _npy_header(file: BinaryIO, where: str) -> tuple[np.dtype[np.generic], bool, int]:
    """Type, whether columns lie together, and elements; objects, hence pickles, do not fit."""
    magic = file.read(8)
    wide = {b"\x01\x00": 2, b"\x02\x00": 4, b"\x03\x00": 4}.get(magic[6:])
    if magic[:6] != b"\x93NUMPY" or wide is None:
        raise _no_npy(where, "no NumPy file")
    length = int.from_bytes(file.read(wide), "little")
    header = _HEADER.fullmatch(file.read(length)) if length <= 4096 else None
    if header is None:
        raise _no_npy(where, "another kind of array")
    kind, by_columns, rows, columns = (part.decode() for part in header.groups())
    n = _checked_size(where, int(rows), int(columns))
    try:
        dtype = np.dtype(kind.replace("b1", "u1"))
    except TypeError as error:
        raise _no_npy(where, f"entries of type {kind}") from error
    return dtype, by_columns == "True", n


def _no_npy(where: str, given: str) -> InputError:
    return refuse(
        where,
        given=given,
        allowed="a two-dimensional .npy array of bool, or of the numbers 0 and 1",
        do="save it again with numpy.save(file, relation.astype(bool))",
    )


# ---------------------------------------------------------------- Matrix Market


def _from_matrix_market(path: Path, where: str) -> Words:
    """Packed rows of a Matrix Market file, line by line.

    SciPy's reader is not used: damaged files, such as a row number beyond the size, crash it.
    """
    check_size(path, where)
    with path.open("rb") as file:
        lines = enumerate(iter(lambda: file.readline(MOST_LINE), b""), start=1)
        head = next(lines, (1, b""))[1].lower().split()
        if len(head) != 5 or head[:2] != [b"%%matrixmarket", b"matrix"]:
            raise _no_market(where, "a first line that is no Matrix Market header")
        form, field, symmetry = head[2:]
        dense = form == b"array"
        if form not in (b"coordinate", b"array") or field not in FIELDS[dense]:
            raise _no_market(where, f"{_shown(form)} of {_shown(field)} entries")
        if symmetry != b"general":
            raise _no_market(where, f"a {_shown(symmetry)} table")
        body = ((k, line.split()) for k, line in lines if line.strip() and line[:1] != b"%")
        sizes = next(body, (1, []))[1]
        if len(sizes) != 3 - dense or not all(x.isdigit() and len(x) <= 9 for x in sizes):
            raise _no_market(where, "no line of sizes")
        rows, columns, *entries = map(int, sizes)
        n = _checked_size(where, rows, columns)
        wanted = entries[0] if entries else n * n
        read = _market_array if dense else _market_pairs
        earlier, later, count = read(body, where, n, 3 - (field == b"pattern"))
    if count != wanted:
        raise _no_market(where, f"{count} entries where its header says {wanted}")
    return pack_pairs(_indices(earlier), _indices(later), elements=n)


Body = Iterator[tuple[int, list[bytes]]]


class _Pairs(NamedTuple):
    """Pairs that were read, and how many entries the table has."""

    earlier: array.array[int]
    later: array.array[int]
    entries: int


def _market_pairs(body: Body, where: str, n: int, width: int) -> _Pairs:
    """Pairs of a coordinate table, whose numbers count from 1, and how many entries it has."""
    earlier, later = array.array("q"), array.array("q")
    count = 0
    for line, parts in body:
        numbers = [int(x) for x in parts[:2] if x.isdigit() and len(x) <= 6]
        if len(parts) != width or len(numbers) < 2 or not all(1 <= x <= n for x in numbers):
            raise _no_market(f"{where}, line {line}", _shown(b" ".join(parts)))
        i, j = numbers[0] - 1, numbers[1] - 1
        if width == 2 or _is_one(parts[2], where, (i, j)):
            earlier.append(i)
            later.append(j)
        count += 1
    return _Pairs(earlier, later, count)


def _market_array(body: Body, where: str, n: int, _width: int) -> _Pairs:
    """Pairs of a table given column by column, and how many entries it has."""
    earlier, later = array.array("q"), array.array("q")
    count = 0
    for _, parts in body:
        for part in parts:
            j, i = divmod(count, n)
            if j < n and _is_one(part, where, (i, j)):
                earlier.append(i)
                later.append(j)
            count += 1
    return _Pairs(earlier, later, count)


def _is_one(text: bytes, where: str, entry: tuple[int, int]) -> bool:
    """Whether an entry is 1; one that is neither 0 nor 1 is refused."""
    if text in (b"0", b"1"):
        return text == b"1"
    try:
        value = float(text.replace(b"_", b"?"))
    except ValueError:
        value = float("nan")
    if value not in (0.0, 1.0):
        raise _not_zero_one(where, entry, _shown(text))
    return value == 1.0


def _shown(text: bytes) -> str:
    return text.decode("ascii", "replace") or "(nothing)"


def _indices(numbers: array.array[int]) -> Index:
    """The numbers of an array, which may be empty."""
    return np.array(numbers, dtype=np.intp)


def _no_market(where: str, given: str) -> InputError:
    return refuse(
        where,
        given=given,
        allowed="a general Matrix Market table, pattern or of the numbers 0 and 1, from 1 to n",
        do="write it again as a coordinate pattern",
    )


# -------------------------------------------------------------------------- CSV


def _element(text: str, elements: int, where: str) -> int:
    """One element number."""
    if not _DIGITS.fullmatch(text) or int(text) >= elements:
        raise refuse(
            where,
            given=text or "nothing",
            allowed=f"an element number from 0 to {elements - 1}",
            do="correct that row (element numbers count from 0)",
        )
    return int(text)


def _from_csv(path: Path, where: str) -> Words:
    """Packed rows of a table of pairs."""
    earlier, later = array.array("q"), array.array("q")
    highest = -1
    for line, a, b in pairs_of(path, where, ("earlier", "later")):
        at = f"{where}, line {line}"
        i = _element(a, MOST_ELEMENTS, at)
        highest = max(highest, i)
        if b:
            j = _element(b, MOST_ELEMENTS, at)
            highest = max(highest, j)
            earlier.append(i)
            later.append(j)
    n = _checked_size(where, highest + 1, highest + 1)
    return pack_pairs(_indices(earlier), _indices(later), elements=n)


def read_members(path: Path, *, elements: int) -> tuple[Index, ...]:
    """Read which elements belong to which region.

    Parameters
    ----------
    path : Path
        A CSV file with columns ``region``, the letters A, B, ... without a gap, and ``element``,
        numbers that count from 0. UTF-8, at most 100 MB.
    elements : int
        n of the causal set.

    Returns
    -------
    tuple of ndarray of intp
        Elements of each region, ascending, in the order of the letters; one to eight regions of
        at least four elements, no element in two.

    Raises
    ------
    InputError
        If the file cannot be read or does not hold such lists.
    """
    where = f"regions file {path.name}"
    letters = [region_letter(k) for k in range(MAX_REGIONS)]
    owner = np.full(elements, -1, dtype=np.int8)
    try:
        for line, letter, text in pairs_of(path, where, ("region", "element")):
            at = f"{where}, line {line}"
            if letter not in letters:
                raise refuse(
                    at,
                    given=letter or "no region",
                    allowed=f"a letter from {letters[0]} to {letters[-1]}",
                    do="correct that row",
                )
            i = _element(text, elements, at)
            if owner[i] >= 0:
                raise refuse(
                    at,
                    given=f"element {i} in {letters[owner[i]]} and {letter}",
                    allowed="every element at most once, in one region",
                    do="leave one of the rows out",
                )
            owner[i] = letters.index(letter)
    except OSError as error:
        raise refuse(
            where,
            given=error.strerror or "an unreadable file",
            allowed="a readable CSV file",
            do="check the path",
        ) from error
    count = int(owner.max()) + 1
    found = tuple(np.flatnonzero(owner == k) for k in range(max(count, 1)))
    for k, rows in enumerate(found):
        if rows.size < LEAST_ELEMENTS:
            raise refuse(
                where,
                given=f"{rows.size} elements of region {letters[k]}",
                allowed=f"at least {LEAST_ELEMENTS} elements of every region up to the last letter",
                do="list more of its elements, or name the regions without a gap",
            )
    return found
