"""Tables of pairs: two named columns of a CSV file, row by row."""

from __future__ import annotations

import csv
import io
from collections.abc import Iterator
from pathlib import Path

from lozenge_engine.errors import refuse

__all__ = ["TEXT_ADVICE", "check_size", "pairs_of"]

MOST_TEXT = 100_000_000
"""Bytes of a text file."""
TEXT_ADVICE = "give the links alone, or a .npy file of bool"


def check_size(path: Path, where: str) -> None:
    """Refuse a text file that is too large, before it is read.

    Parameters
    ----------
    path : Path
        The file.
    where : str
        What it is called in the refusal.

    Raises
    ------
    InputError
        If it has more than 100 MB.
    OSError
        If there is no such file.
    """
    size = path.stat().st_size
    if size > MOST_TEXT:
        raise refuse(
            where, given=f"{size} bytes", allowed=f"at most {MOST_TEXT} bytes", do=TEXT_ADVICE
        )


def pairs_of(path: Path, where: str, names: tuple[str, str]) -> Iterator[tuple[int, str, str]]:
    """Read two columns of a CSV file, row by row.

    Parameters
    ----------
    path : Path
        UTF-8, comma-separated, at most 100 MB, with a header; other columns and empty rows are
        left out.
    where : str
        What it is called in a refusal.
    names : tuple of str
        The two columns, in lower case.

    Yields
    ------
    line : int
        Number of the row's last line, from 1.
    first, second : str
        Its cells, stripped; empty where the row is short.

    Raises
    ------
    InputError
        If it is too large or no such table.
    OSError
        If it cannot be read.
    """
    check_size(path, where)
    try:
        text = io.StringIO(path.read_bytes().decode("utf-8-sig"), newline="")
        rows = csv.reader(text)
        header = [cell.strip().lower() for cell in next(rows, [])]
        if any(header.count(name) != 1 for name in names):
            raise refuse(
                where,
                given=f"the header {','.join(header) or '(empty)'}",
                allowed=f"a header with one column {names[0]} and one column {names[1]}",
                do="name the columns in the first line",
            )
        a, b = (header.index(name) for name in names)
        for row in rows:
            if any(cell.strip() for cell in row):
                cells = row + [""] * (max(a, b) + 1 - len(row))
                yield rows.line_num, cells[a].strip(), cells[b].strip()
    except (UnicodeDecodeError, csv.Error) as error:
        raise refuse(
            where, given="text that is no CSV", allowed="UTF-8 CSV", do="export it again as CSV"
        ) from error
