"""Lists and numbers inside a sentence."""

from __future__ import annotations

import re
from collections.abc import Iterable, Sequence

__all__ = ["listing", "numbers", "several", "typeset"]

MINUS = re.compile(r"(?<![\w)])-(?=[\d.])")
"""A hyphen that stands for a minus sign."""
POWER = re.compile(r"(?<=\d)e([+-])0*(\d+)\b")
"""An exponent as computers write it."""
RAISED = str.maketrans("-0123456789", "⁻⁰¹²³⁴⁵⁶⁷⁸⁹")


def typeset(text: str) -> str:
    """Words with the signs that print has for minus and powers of ten.

    Parameters
    ----------
    text : str
        Words.

    Returns
    -------
    str
        With ``−0.41`` for ``-0.41`` and ``3.3×10⁻⁵`` for ``3.3e-05``.
    """

    def raised(found: re.Match[str]) -> str:
        sign = "-" if found[1] == "-" else ""
        return "×10" + f"{sign}{found[2]}".translate(RAISED)

    return POWER.sub(raised, MINUS.sub("−", text))


def listing(parts: Sequence[str]) -> str:
    """Parts joined as in a sentence.

    Parameters
    ----------
    parts : sequence of str
        One or more.

    Returns
    -------
    str
        ``a, b and c``.
    """
    return parts[0] if len(parts) == 1 else f"{', '.join(parts[:-1])} and {parts[-1]}"


def numbers(values: Iterable[object]) -> str:
    """Values of an axis joined as in a sentence.

    Parameters
    ----------
    values : iterable
        Numbers or names.

    Returns
    -------
    str
        ``90, 130 and 190``.
    """
    return listing([f"{v:g}" if isinstance(v, float) else str(v).replace("_", " ") for v in values])


def several(count: int, noun: str) -> str:
    """A count with its noun.

    Parameters
    ----------
    count : int
        How many.
    noun : str
        Singular; the plural takes an s.

    Returns
    -------
    str
        ``1 sprinkling``, ``8 sprinklings``.
    """
    return f"{count} {noun}" if count == 1 else f"{count} {noun}s"
