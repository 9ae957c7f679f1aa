"""Point sets from CSV files with columns t and x."""

from __future__ import annotations

import csv
import io
from pathlib import Path
from typing import NamedTuple

import numpy as np

from lozenge_engine.config import MAX_ELEMENTS
from lozenge_engine.errors import refuse
from lozenge_engine.kernels.points import Coordinates, from_t_x, points_hash

__all__ = ["PointFile", "parse_points", "read_points"]

MAX_BYTES = 100_000_000


class PointFile(NamedTuple):
    """Imported points.

    Attributes
    ----------
    points : Coordinates
        4 to 1 000 000 points in natural order.
    name : str
        Name of their file, without folders.
    sha256 : str
        `lozenge_engine.kernels.points.points_hash` of the points.
    """

    points: Coordinates
    name: str
    sha256: str


def read_points(path: Path) -> PointFile:
    """Read a CSV file of points.

    Parameters
    ----------
    path : Path
        UTF-8, comma-separated, at most 100 MB, with a header that names columns t and x, in patch
        half-widths; other columns are ignored.

    Returns
    -------
    PointFile
        The points in natural order.

    Raises
    ------
    InputError
        If the file cannot be read or its points cannot be taken.
    """
    try:
        size = path.stat().st_size
        if size > MAX_BYTES:
            raise refuse(
                f"points file {path.name}",
                given=f"{size} bytes",
                allowed=f"at most {MAX_BYTES} bytes",
                do="give fewer points or digits",
            )
        text = path.read_bytes()
    except OSError as error:
        raise refuse(
            f"points file {path}",
            given=error.strerror or "an unreadable file",
            allowed="a readable CSV file",
            do="check the path",
        ) from error
    return parse_points(text, name=path.name)


def parse_points(data: bytes, *, name: str) -> PointFile:
    """Read points from the bytes of a CSV file; see `read_points`.

    Parameters
    ----------
    data : bytes
        UTF-8 text.
    name : str
        The file's name, for messages and for presets.

    Returns
    -------
    PointFile
        The points in natural order.

    Raises
    ------
    InputError
        If the text is not such a table or its points cannot be taken.
    """
    where = f"points file {name}"
    try:
        rows = csv.reader(io.StringIO(data.decode("utf-8-sig"), newline=""))
        header = [cell.strip().lower() for cell in next(rows, [])]
        body = [row for row in rows if any(cell.strip() for cell in row)]
    except (UnicodeDecodeError, csv.Error) as error:
        raise refuse(
            where, given="text that is no CSV", allowed="UTF-8 CSV", do="export it again as CSV"
        ) from error
    if header.count("t") != 1 or header.count("x") != 1:
        raise refuse(
            where,
            given=f"the header {','.join(header) or '(empty)'}",
            allowed="a header with one column t and one column x",
            do="name the columns t and x in the first line",
        )
    if not 4 <= len(body) <= MAX_ELEMENTS:
        raise refuse(
            where,
            given=f"{len(body)} points",
            allowed=f"4 to {MAX_ELEMENTS} points",
            do="give another file",
        )
    columns = (header.index("t"), header.index("x"))
    table = np.empty((len(body), 2))
    for k, row in enumerate(body):
        try:
            table[k] = [float(row[c].replace("_", "?")) for c in columns]
        except (ValueError, IndexError) as error:
            raise refuse(
                f"{where}, row {k + 1}",
                given=",".join(row),
                allowed="numbers in columns t and x",
                do="correct that row",
            ) from error
    points = from_t_x(table[:, 0], table[:, 1])
    return PointFile(points, name, points_hash(points))
