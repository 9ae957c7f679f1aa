"""Tables for a paper: CSV with all digits, and LaTeX with the digits that the errors allow.

In CSV an estimate has two columns, its value and its standard error; in LaTeX it is 0.333(12), with
the decimal points of a column under each other.
"""

from __future__ import annotations

import csv
import io
import math
from collections.abc import Sequence
from typing import Literal, NamedTuple

from lozenge_dashboard.publish.latex import escaped
from lozenge_dashboard.publish.wording import typeset
from lozenge_engine.notation import with_error

__all__ = ["Estimated", "Head", "Table", "csv_text", "latex_text"]


class Estimated(NamedTuple):
    """A number with its standard error, NaN where one of them is not known."""

    value: float
    error: float


Kind = Literal["words", "whole", "number"]
LAYOUT: dict[Kind, str] = {"words": "l", "whole": "r", "number": "r@{}l"}
Cell = str | int | float | Estimated


class Head(NamedTuple):
    """A column.

    Attributes
    ----------
    name, unit : str
        In words; the unit is empty for what has none.
    estimated : bool
        Whether its cells are `Estimated`.
    digits : str
        Format of its plain numbers in LaTeX.
    """

    name: str
    unit: str = ""
    estimated: bool = False
    digits: str = "g"

    @property
    def text(self) -> str:
        """Name with unit."""
        return f"{self.name} ({self.unit})" if self.unit else self.name


class Table(NamedTuple):
    """A table.

    Attributes
    ----------
    name, caption : str
        Stem of its files; one paragraph that says what the numbers are.
    heads : tuple of Head
        Columns.
    rows : tuple of tuple
        Cells under the heads.
    """

    name: str
    caption: str
    heads: tuple[Head, ...]
    rows: tuple[tuple[Cell, ...], ...]


# -------------------------------------------------------------------------- CSV


def csv_text(table: Table) -> str:
    """Write a table as CSV.

    Parameters
    ----------
    table : Table
        The table.

    Returns
    -------
    str
        Numbers in the shortest form that reads back as the same double; fields without a number
        are empty.
    """
    held = io.StringIO()
    writer = csv.writer(held, lineterminator="\n")
    heads: list[str] = []
    for head in table.heads:
        heads.append(head.text)
        if head.estimated:
            heads.append(f"standard error of {head.text}")
    writer.writerow(heads)
    for row in table.rows:
        fields: list[str] = []
        for cell in row:
            fields += map(_field, cell) if isinstance(cell, Estimated) else [_field(cell)]
        writer.writerow(fields)
    return held.getvalue()


def _field(cell: str | int | float) -> str:
    if isinstance(cell, str):
        return cell
    if isinstance(cell, float) and not math.isfinite(cell):
        return ""
    return repr(float(cell)) if isinstance(cell, float) else str(int(cell))


# ------------------------------------------------------------------------ LaTeX


def latex_text(table: Table) -> str:
    """Write a table for LaTeX with the package booktabs.

    Parameters
    ----------
    table : Table
        The table.

    Returns
    -------
    str
        A floating table with caption and label.
    """
    texts = [
        [typeset(_number(cell, h)) for cell, h in zip(row, table.heads, strict=True)]
        for row in table.rows
    ]
    kinds = [_kind(table, texts, k) for k in range(len(table.heads))]
    layout = "".join(LAYOUT[kind] for kind in kinds)
    head = [_row(list(map(_headed, parts, kinds))) for parts in _heads(table)]
    body = [_row(list(map(_set, row, kinds))) for row in texts]
    return "\n".join(
        (
            r"% needs \usepackage{booktabs}",
            r"\begin{table}",
            r"\centering",
            rf"\caption{{{escaped(table.caption)}}}",
            rf"\label{{tab:{table.name}}}",
            rf"\begin{{tabular}}{{{layout}}}",
            r"\toprule",
            *head,
            r"\midrule",
            *body,
            r"\bottomrule",
            r"\end{tabular}",
            r"\end{table}",
            "",
        )
    )


def _kind(table: Table, texts: Sequence[Sequence[str]], k: int) -> Kind:
    """Words, whole numbers, or numbers that are set in two parts meeting at the decimal point."""
    if not table.heads[k].estimated and all(isinstance(row[k], str) for row in table.rows):
        return "words"
    broken = any("." in row[k] or "(" in row[k] for row in texts)
    return "number" if broken else "whole"


def _heads(table: Table) -> list[list[str]]:
    """Names, and the units below them if there are any."""
    names = [head.name for head in table.heads]
    units = [f"({head.unit})" if head.unit else "" for head in table.heads]
    return [names, units] if any(units) else [names]


def _row(cells: Sequence[str]) -> str:
    return " & ".join(cells) + r" \\"


def _headed(text: str, kind: Kind) -> str:
    text = escaped(text)
    return rf"\multicolumn{{2}}{{c}}{{{text}}}" if kind == "number" else text


def _set(text: str, kind: Kind) -> str:
    """A cell; a number in its two parts."""
    if kind == "words":
        return escaped(text)
    signed = escaped(text)
    if kind == "whole":
        return signed
    if not any(letter.isdigit() for letter in text):
        return rf"\multicolumn{{2}}{{c}}{{{signed}}}"
    left, right = _halves(text)
    return f"{escaped(left)} & {escaped(right)}"


def _halves(text: str) -> tuple[str, str]:
    """What stands before the decimal point, and the rest with the point and the error."""
    places = [text.find(mark) for mark in ".(" if mark in text]
    place = min(places, default=len(text))
    return text[:place], text[place:]


def _number(cell: Cell, head: Head) -> str:
    if isinstance(cell, Estimated):
        return with_error(cell.value, cell.error)
    if isinstance(cell, str):
        return cell
    if isinstance(cell, float):
        return format(cell, head.digits) if math.isfinite(cell) else "–"
    return str(cell)
