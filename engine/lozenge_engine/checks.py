"""Numbers that are in range, or a refusal that says what is."""

from __future__ import annotations

import math

from lozenge_engine.errors import refuse

__all__ = ["checked_number", "checked_whole"]


def checked_number(where: str, value: object, *, low: float, high: float, allowed: str) -> float:
    """Return a number as a float in [low, high], or refuse it.

    Parameters
    ----------
    where : str
        The parameter, for the refusal.
    value : object
        What was given.
    low, high : float
        Ends of the range, both allowed.
    allowed : str
        The range in words, for the refusal.

    Returns
    -------
    float
        The value, never -0.0.

    Raises
    ------
    InputError
        If it is no int or float, a bool, not finite or outside the range.
    """
    if (
        isinstance(value, bool)
        or not isinstance(value, int | float)
        or not math.isfinite(value)
        or not low <= value <= high
    ):
        raise refuse(where, given=value, allowed=allowed, do=f"change {where}")
    return float(value) + 0.0  # no -0.0


def checked_whole(where: str, value: object, *, low: int, high: int) -> int:
    """Return a whole number in [low, high], or refuse it.

    Parameters
    ----------
    where : str
        The parameter, for the refusal.
    value : object
        What was given.
    low, high : int
        Ends of the range, both allowed.

    Returns
    -------
    int
        The value.

    Raises
    ------
    InputError
        If it is no int, a bool or outside the range.
    """
    if isinstance(value, bool) or not isinstance(value, int) or not low <= value <= high:
        raise refuse(
            where,
            given=value,
            allowed=f"a whole number from {low} to {high}",
            do=f"change {where}",
        )
    return value
