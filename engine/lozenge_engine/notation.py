"""How numbers are written for people: with the digits that their errors allow."""

from __future__ import annotations

import math

__all__ = [
    "NO_NUMBER",
    "THIN_SPACE",
    "decimals_for",
    "duration",
    "thousands",
    "two_digits",
    "with_error",
    "with_scatter",
]

NO_NUMBER = "–"
"""What stands where there is no number."""
THIN_SPACE = "\u202f"
"""Between groups of three digits: narrow, and no place to break a line."""
MOST_DECIMALS = 12
"""Smaller errors than rounding leaves in a double are not written."""
UNKNOWN_ERROR_DECIMALS = 3


def decimals_for(error: float) -> int:
    """Decimals that a number with this error deserves.

    The error keeps one digit, or two when it starts with 1 (so that its own rounding changes it
    by less than a third).

    Parameters
    ----------
    error : float
        Standard error or scatter, finite and > 0.

    Returns
    -------
    int
        Decimals of the number; negative where its last digits before the point mean nothing.

    Raises
    ------
    ValueError
        If the error is not finite or not positive.
    """
    if not (math.isfinite(error) and error > 0):
        raise ValueError(f"an error is finite and > 0, not {error!r}")
    exponent = math.floor(math.log10(error))
    digits = 2 if error < 1.95 * 10.0**exponent else 1
    return digits - 1 - exponent


def with_error(value: float, error: float = math.nan) -> str:
    """Write a number with its error in brackets, in units of the last digit: ``2.21(4)``.

    Parameters
    ----------
    value : float
        The number; what is not finite is written as `NO_NUMBER`.
    error : float
        Its standard error.  Without one (NaN, 0, or one below rounding) three decimals are
        written and no bracket: that the error is unknown has to stand beside it.

    Returns
    -------
    str
        ``2.21(4)``, ``2.215(13)``, ``12.3(14)``, ``1230(60)``, ``2.214``.
    """
    if not math.isfinite(value):
        return NO_NUMBER
    known = math.isfinite(error) and error > 0
    decimals = decimals_for(error) if known else UNKNOWN_ERROR_DECIMALS
    if not known or decimals > MOST_DECIMALS:
        return _fixed(value, UNKNOWN_ERROR_DECIMALS)
    shown = max(decimals, 0)
    number = _fixed(round(value, decimals), shown)
    return f"{number}({round(round(error, decimals) * 10**shown)})"


def with_scatter(value: float, scatter: float = math.nan) -> str:
    """Write a single sample with the decimals that two digits of its scatter have.

    Parameters
    ----------
    value : float
        The sample; what is not finite is written as `NO_NUMBER`.
    scatter : float
        Standard deviation of a sample; without one (NaN or 0) three decimals are written.

    Returns
    -------
    str
        ``2.21`` for a scatter of 0.12, ``0.574`` for one of 0.038, ``65`` for one of 27.
    """
    if not math.isfinite(value):
        return NO_NUMBER
    if not (math.isfinite(scatter) and scatter > 0):
        return _fixed(value, UNKNOWN_ERROR_DECIMALS)
    decimals = min(_two_digits(scatter), MOST_DECIMALS)
    return _fixed(round(value, decimals), max(decimals, 0))


def two_digits(number: float) -> str:
    """Write a positive number with two significant digits and no exponent: ``0.20``.

    Parameters
    ----------
    number : float
        A scatter; NaN or one that is not positive is written as `NO_NUMBER`.

    Returns
    -------
    str
        ``0.038``, ``0.20``, ``2.7``, ``27``.
    """
    if not (math.isfinite(number) and number > 0):
        return NO_NUMBER
    decimals = min(_two_digits(number), MOST_DECIMALS)
    return f"{round(number, decimals):.{max(decimals, 0)}f}"


def _two_digits(number: float) -> int:
    """Decimals at which two significant digits of a positive number end."""
    return 1 - math.floor(math.log10(number))


def _fixed(value: float, decimals: int) -> str:
    """Fixed-point digits without a negative zero."""
    text = f"{value:.{decimals}f}"
    return text.removeprefix("-") if float(text) == 0 else text


def thousands(number: int, *, space: str = THIN_SPACE) -> str:
    """Write a whole number in groups of three digits: ``4 000``.

    Parameters
    ----------
    number : int
        Any whole number.
    space : str
        What separates the groups.

    Returns
    -------
    str
        The digits.
    """
    return f"{number:,d}".replace(",", space)


def duration(seconds: float) -> str:
    """Write a predicted or measured time as a person would say it.

    Parameters
    ----------
    seconds : float
        Time in seconds, >= 0.

    Returns
    -------
    str
        ``0.08 s``, ``0.4 s``, ``8 s``, ``2 min 20 s``, ``1 h 05 min``.
    """
    if not math.isfinite(seconds):
        return NO_NUMBER
    if seconds < 0.095:
        return f"{max(seconds, 0.0):.2f} s"
    if seconds < 9.5:
        return f"{seconds:.1f} s" if seconds < 2.95 else f"{seconds:.0f} s"
    whole = round(seconds)
    if whole < 100:
        return f"{whole} s"
    if whole < 3600:
        minutes, rest = divmod(round(whole, -1), 60)
        return f"{minutes} min {rest:02d} s" if minutes < 60 else "1 h 00 min"
    hours, minutes = divmod(round(whole / 60), 60)
    return f"{hours} h {minutes:02d} min"
