"""The one sentence pattern in which input is refused."""

from __future__ import annotations

__all__ = ["Cancelled", "InputError", "refuse"]


class InputError(ValueError):
    """Input that the engine cannot take; its text says what to do instead."""


class Cancelled(Exception):
    """A computation that its caller asked to stop."""


def refuse(where: str, *, given: object, allowed: str, do: str) -> InputError:
    """Build the error for a refused input.

    Parameters
    ----------
    where : str
        The parameter, key or file that is refused.
    given : object
        What was given.
    allowed : str
        What is allowed there.
    do : str
        What to do next, as an imperative clause.

    Returns
    -------
    InputError
        The error, for the caller to raise.
    """
    shown = given if isinstance(given, str) else repr(given)
    if len(shown) > 120:
        shown = shown[:117] + "..."
    return InputError(f"{where}: given {shown}; allowed is {allowed}; {do}.")
