"""Point sets from CSV files: what is read, and refusals that name the row."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest

from lozenge_engine import pointfile
from lozenge_engine.errors import InputError
from lozenge_engine.kernels.points import from_t_x, points_hash, sprinkle
from lozenge_engine.pointfile import parse_points, read_points

ROWS = ["0.0,0.5", "0.1,0.02", "-0.2,0.21", "0.3,-0.35"]
TABLE = np.array([[float(cell) for cell in row.split(",")] for row in ROWS])
EXPECTED = from_t_x(TABLE[:, 0], TABLE[:, 1])


def csv(*rows: str, header: str = "t,x", end: str = "\n") -> bytes:
    return (end.join([header, *rows]) + end).encode()


@pytest.mark.parametrize(
    "data",
    [
        csv(*ROWS),
        b"\xef\xbb\xbf" + csv(*ROWS),
        csv(*ROWS, end="\r\n"),
        csv(*ROWS).rstrip(b"\n"),
        csv(*[f"7,{r.split(',')[1]},note,{r.split(',')[0]}" for r in ROWS], header="id,x,name,t"),
        csv(*[f'"{r.split(",")[0]}","{r.split(",")[1]}"' for r in ROWS], header='"t","x"'),
        csv(*ROWS, header=" T , X "),
        csv("", *ROWS, " , ", ""),
    ],
    ids=["plain", "BOM", "CRLF", "no last newline", "extra", "quoted", "capitals", "blank lines"],
)
def test_a_table_with_columns_t_and_x_is_read(data: bytes) -> None:
    file = parse_points(data, name="a.csv")
    assert np.array_equal(file.points, EXPECTED)
    assert (file.name, file.sha256) == ("a.csv", points_hash(EXPECTED))


def test_a_sprinkling_written_with_all_digits_comes_back_close_to_the_bit(tmp_path: Path) -> None:
    points = sprinkle(density=200.0, seed=1)
    t, x = (points.u + points.v) / np.sqrt(2), (points.u - points.v) / np.sqrt(2)
    path = tmp_path / "own.csv"
    path.write_bytes(csv(*[f"{a!r},{b!r}" for a, b in zip(t.tolist(), x.tolist(), strict=True)]))
    np.testing.assert_allclose(read_points(path).points, points, rtol=0, atol=4e-16)


@pytest.mark.parametrize(
    "header",
    ["", "0.1,0.2", "t", "x,y", "t,x,t", "t;x", "time,x"],
)
def test_a_table_without_one_t_and_one_x_is_refused(header: str) -> None:
    with pytest.raises(InputError, match=r"points file a\.csv: .*one column t and one column x"):
        parse_points(csv(*ROWS, header=header), name="a.csv")


def test_an_empty_file_is_refused() -> None:
    with pytest.raises(InputError, match="empty"):
        parse_points(b"", name="a.csv")


@pytest.mark.parametrize("count", [0, 1, 3])
def test_too_few_points_are_refused(count: int) -> None:
    with pytest.raises(InputError, match=f"given {count} points"):
        parse_points(csv(*ROWS[:count]), name="a.csv")


@pytest.mark.parametrize("bad", ["0.1,zwei", "0.1", "0.1,", "0,1;0.2", "0.1,0.2 0.3", "0.1,1_0"])
def test_what_is_no_number_is_refused_with_its_row(bad: str) -> None:
    with pytest.raises(InputError, match=r"a\.csv, row 3: given"):
        parse_points(csv(*ROWS[:2], bad, *ROWS[2:]), name="a.csv")


@pytest.mark.parametrize("bad", ["nan,0.1", "0.1,inf", "0.9,0.2"])
def test_a_point_that_cannot_be_taken_is_refused_with_its_row(bad: str) -> None:
    with pytest.raises(InputError, match="row 3"):
        parse_points(csv(*ROWS[:2], bad, *ROWS[2:]), name="a.csv")


def test_duplicates_are_refused() -> None:
    with pytest.raises(InputError, match="share u"):
        parse_points(csv(*ROWS, ROWS[0]), name="a.csv")


@pytest.mark.parametrize("data", [b"\xff\xfe\x00t", b"t,x\n0.1,\x80\n", "t,x\n".encode("utf-16")])
def test_what_is_no_utf8_text_is_refused(data: bytes) -> None:
    with pytest.raises(InputError, match=r"points file a\.csv"):
        parse_points(data, name="a.csv")


def test_a_huge_cell_is_refused() -> None:
    with pytest.raises(InputError, match=r"points file a\.csv"):
        parse_points(b"t,x\n" + b"1" * 200_000 + b",0\n", name="a.csv")


def test_a_huge_file_is_refused_before_it_is_read(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    path = tmp_path / "big.csv"
    path.write_bytes(b"")
    with path.open("r+b") as file:
        file.truncate(pointfile.MAX_BYTES + 1)
    monkeypatch.setattr(Path, "read_bytes", lambda _: pytest.fail("it was read"))
    with pytest.raises(InputError, match=r"big\.csv: given 100000001 bytes"):
        read_points(path)


def test_a_missing_file_is_refused(tmp_path: Path) -> None:
    with pytest.raises(InputError, match="check the path"):
        read_points(tmp_path / "none.csv")


def test_a_folder_is_refused(tmp_path: Path) -> None:
    with pytest.raises(InputError, match="check the path"):
        read_points(tmp_path)
