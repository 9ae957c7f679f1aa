"""Relations from files: three kinds give the same, and whatever is odd is refused in words."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import numpy as np
import pytest
import scipy.io
from numpy.typing import NDArray
from scipy.sparse import coo_array

from lozenge_engine.errors import InputError
from lozenge_engine.kernels.bitrows import unpack_rows
from lozenge_engine.relationfile import read_members, read_relation

Bools = NDArray[np.bool_]


def relation(n: int = 70, seed: int = 0) -> Bools:
    return np.triu(np.random.default_rng(seed).random((n, n)) < 0.2, 1)


def read(path: Path) -> NDArray[np.uint8]:
    words = read_relation(path).words
    return unpack_rows(words, words.shape[0])


def written(folder: Path, name: str, data: bytes | str) -> Path:
    path = folder / name
    path.write_bytes(data if isinstance(data, bytes) else data.encode())
    return path


@pytest.mark.parametrize("dtype", [bool, "u1", "i4", ">i8", "f4", "<f8", ">f2"])
@pytest.mark.parametrize("order", ["C", "F"])
def test_a_numpy_array_of_any_number_type_is_read(tmp_path: Path, dtype: Any, order: Any) -> None:
    c = relation(600 if dtype is bool else 70)
    np.save(tmp_path / "a.npy", np.asarray(c.astype(dtype), order=order))
    np.testing.assert_array_equal(read(tmp_path / "a.npy"), c)


@pytest.mark.parametrize("version", [(1, 0), (2, 0), (3, 0)])
def test_every_version_of_the_numpy_format_is_read(tmp_path: Path, version: Any) -> None:
    with (tmp_path / "a.npy").open("wb") as file:
        np.lib.format.write_array(file, relation(), version=version)
    np.testing.assert_array_equal(read(tmp_path / "a.npy"), relation())


@pytest.mark.parametrize("field", ["pattern", "integer", "real"])
def test_matrix_market_coordinates_are_read(tmp_path: Path, field: str) -> None:
    scipy.io.mmwrite(tmp_path / "a.mtx", coo_array(relation().astype(np.int8)), field=field)
    np.testing.assert_array_equal(read(tmp_path / "a.mtx"), relation())


def test_a_matrix_market_table_is_read(tmp_path: Path) -> None:
    scipy.io.mmwrite(tmp_path / "a.mtx", relation().astype(np.int64))
    assert "array" in (tmp_path / "a.mtx").read_text()[:60]
    np.testing.assert_array_equal(read(tmp_path / "a.mtx"), relation())


def test_matrix_market_numbers_count_from_one(tmp_path: Path) -> None:
    text = "%%MatrixMarket matrix coordinate pattern general\n% mine\n4 4 2\n1 3\n2 4\n"
    assert np.argwhere(read(written(tmp_path, "a.mtx", text))).tolist() == [[0, 2], [1, 3]]


def test_csv_numbers_count_from_zero_and_an_element_may_stand_alone(tmp_path: Path) -> None:
    text = "\ufeffnote, Later ,EARLIER\nx,2,0\n\ny,,5\nz,3,1\n"
    c = read(written(tmp_path, "a.CSV", text))
    assert c.shape == (6, 6)
    assert np.argwhere(c).tolist() == [[0, 2], [1, 3]]


def npy(header: str, body: bytes = b"") -> bytes:
    head = header.encode("latin-1") + b"\n"
    return b"\x93NUMPY\x01\x00" + len(head).to_bytes(2, "little") + head + body


def header(descr: str = "|b1", shape: str = "(4, 4)", fortran: str = "False") -> str:
    return f"{{'descr': '{descr}', 'fortran_order': {fortran}, 'shape': {shape}, }}"


MARKET = "%%MatrixMarket matrix coordinate integer general\n"
REFUSED: dict[str, tuple[str, bytes | str, str]] = {
    "another ending": ("a.txt", "0 1", r"a\.txt: given the ending \.txt; allowed is \.npy, \.mtx"),
    "no ending": ("relation", "0 1", r"given the ending \(none\)"),
    "no numpy": ("a.npy", "hello", "given no NumPy file"),
    "objects": ("a.npy", npy(header("|O")), "given another kind of array"),
    "pickle": ("a.npy", b"\x80\x04N.", "given no NumPy file"),
    "three axes": ("a.npy", npy(header(shape="(4, 4, 4)")), "another kind of array"),
    "records": ("a.npy", npy("{'descr': [('a', '<f8')], 'fortran_order': False, 'shape': (4, 4)}"),
                "another kind of array"),
    "no such type": ("a.npy", npy(header("<f3")), "entries of type <f3"),
    "nested header": ("a.npy", npy("{" * 3000), "another kind of array"),
    "long header": ("a.npy", npy(header() + " " * 9000), "another kind of array"),
    "oblong": ("a.npy", npy(header(shape="(4, 5)")), "4 rows and 5 columns"),
    "few": ("a.npy", npy(header(shape="(3, 3)"), bytes(9)), "given 3 elements; allowed is 4 to"),
    "many": ("a.npy", npy(header(shape="(20001, 20001)")), "given 20001 elements"),
    "huge": ("a.npy", npy(header(shape="(999999999, 999999999)")), "given 999999999 elements"),
    "short": ("a.npy", npy(header(), bytes(15)), "a file that ends early"),
    "long": ("a.npy", npy(header(), bytes(17)), "more bytes than its header says"),
    "two": ("a.npy", npy(header("|u1"), bytes([0] * 6 + [2] + [0] * 9)), r"entry \(1, 2\) = 2"),
    "two by columns": ("a.npy", npy(header("|u1", fortran="True"), bytes([0] * 6 + [2] + [0] * 9)),
                       r"entry \(2, 1\) = 2"),
    "nan": ("a.npy", npy(header("<f8"), np.full(16, np.nan).tobytes()), r"entry \(0, 0\) = nan"),
    "no market": ("a.mtx", "hello", "no Matrix Market header"),
    "complex": ("a.mtx", MARKET.replace("integer", "complex") + "4 4 1\n1 2 1 0\n",
                "coordinate of complex entries"),
    "symmetric": ("a.mtx", MARKET.replace("general", "symmetric") + "4 4 1\n2 1 1\n",
                  "a symmetric table"),
    "market oblong": ("a.mtx", MARKET + "4 5 1\n1 2 1\n", "4 rows and 5 columns"),
    "market bomb": ("a.mtx", MARKET + "20000 20000 399999999\n1 2 1\n",
                    "1 entries where its header says 399999999"),
    "market dense bomb": ("a.mtx", MARKET.replace("coordinate", "array") + "20000 20000\n1\n",
                          "1 entries where its header says 400000000"),
    "market ends early": ("a.mtx", MARKET + "4 4 3\n1 2 1\n2 3 1\n",
                          "2 entries where its header says 3"),
    "market beyond": ("a.mtx", MARKET + "4 4 1\n1 5 1\n", "line 3: given 1 5 1;"),
    "market twice": ("a.mtx", MARKET + "4 4 2\n1 2 1\n1 2 1\n", "0 precedes 1 twice"),
    "market minus": ("a.mtx", MARKET + "4 4 1\n-1 2 1\n", "line 3: given -1 2 1;"),
    "market underscore": ("a.mtx", MARKET + "4 4 1\n1 2 0_1\n", r"entry \(0, 1\) = 0_1"),
    "market sizes": ("a.mtx", MARKET + "4 4\n", "no line of sizes"),
    "market pattern array": ("a.mtx", MARKET.replace("coordinate integer", "array pattern"),
                             "array of pattern entries"),
    "market long line": ("a.mtx", MARKET + "4 4 1\n" + "1" * 5000, "line 3: given 111"),
    "market two": ("a.mtx", MARKET + "4 4 1\n1 2 2\n", r"entry \(0, 1\) = 2"),
    "market table two": ("a.mtx", MARKET.replace("coordinate", "array") + "4 4\n" + "2\n" * 16,
                         r"entry \(0, 0\) = 2"),
    "no header": ("a.csv", "0,1\n", "the header 0,1; allowed is a header with one column earlier"),
    "empty": ("a.csv", "", r"the header \(empty\)"),
    "twice the column": ("a.csv", "earlier,later,later\n0,1,2\n", "given the header"),
    "letters": ("a.csv", "earlier,later\n0,1\n1,b\n", "line 3: given b; allowed is an element"),
    "beyond": ("a.csv", "earlier,later\n0,20000\n", "given 20000; allowed is .* 0 to 19999"),
    "minus": ("a.csv", "earlier,later\n-1,2\n", "line 2: given -1;"),
    "nothing": ("a.csv", "earlier,later\n,3\n", "line 2: given nothing"),
    "other digits": ("a.csv", "earlier,later\n\u0663,4\n", "line 2"),
    "no element": ("a.csv", "earlier,later\n", "given 0 elements"),
    "csv twice": ("a.csv", "earlier,later\n0,4\n0,4\n", "0 precedes 4 twice"),
    "no text": ("a.csv", b"earlier,later\n\xff\xfe\n", "given text that is no CSV"),
}  # fmt: skip


@pytest.mark.parametrize("case", sorted(REFUSED))
def test_what_is_odd_is_refused_in_words(tmp_path: Path, case: str) -> None:
    name, data, words = REFUSED[case]
    with pytest.raises(InputError, match=words):
        read_relation(written(tmp_path, name, data))


@pytest.mark.parametrize("name", ["missing.npy", "missing.mtx", "missing.csv"])
def test_a_missing_file_is_refused(tmp_path: Path, name: str) -> None:
    with pytest.raises(InputError, match="No such file"):
        read_relation(tmp_path / name)


def test_a_large_text_is_refused_by_its_size(tmp_path: Path) -> None:
    for name in ("a.csv", "a.mtx"):
        with (tmp_path / name).open("wb") as file:
            file.truncate(100_000_001)
        with pytest.raises(InputError, match="100000001 bytes; allowed is at most 100000000"):
            read_relation(tmp_path / name)


# ----------------------------------------------------------------------- regions


def test_regions_are_lists_of_elements(tmp_path: Path) -> None:
    rows = [("B", 9), ("A", 3), *(("A", k) for k in (0, 1, 2)), *(("B", k) for k in (5, 6, 7))]
    text = "element,region\n" + "".join(f"{i},{k}\n" for k, i in rows)
    found = read_members(written(tmp_path, "r.csv", text), elements=10)
    assert [rows.tolist() for rows in found] == [[0, 1, 2, 3], [5, 6, 7, 9]]


FOUR = "".join(f"A,{k}\n" for k in range(4))
ODD_REGIONS = {
    "letter": (FOUR + "J,5\n", "line 6: given J; allowed is a letter from A to H"),
    "small letter": (FOUR + "b,5\n", "given b"),
    "no letter": (FOUR + ",5\n", "given no region"),
    "twice": (FOUR + "A,2\n", "line 6: given element 2 in A and A"),
    "in two": (FOUR + "B,2\n", "given element 2 in A and B"),
    "beyond": (FOUR + "A,10\n", "given 10; allowed is an element number from 0 to 9"),
    "few": (FOUR + "B,5\n", "given 1 elements of region B"),
    "a gap": (FOUR + "".join(f"C,{k}\n" for k in range(5, 9)), "0 elements of region B"),
    "none": ("", "0 elements of region A"),
}


@pytest.mark.parametrize("case", sorted(ODD_REGIONS))
def test_odd_regions_are_refused_in_words(tmp_path: Path, case: str) -> None:
    text, words = ODD_REGIONS[case]
    with pytest.raises(InputError, match=words):
        read_members(written(tmp_path, "r.csv", "region,element\n" + text), elements=10)


def test_missing_regions_are_refused(tmp_path: Path) -> None:
    with pytest.raises(InputError, match="No such file"):
        read_members(tmp_path / "r.csv", elements=10)
