"""What a deviation from the asymptotic slope is due to, as far as the numbers say."""

from __future__ import annotations

import math
from typing import NamedTuple

from lozenge_engine.notation import with_error

__all__ = ["SIGNIFICANT", "Slope", "verdict"]

SIGNIFICANT = 2.0
"""Errors from which a difference counts: one in twenty would be seen without any."""
LEAST_P = 0.05
"""A line with a smaller p-value does not fit."""


class Slope(NamedTuple):
    """A number with its error and how well what it is read from fits; NaN where unknown.

    Attributes
    ----------
    value, error : float
        In nats.
    chi2, dof, p_value : float, int, float
        Of the fit.
    note : str
        How it was made, or why it is missing.
    """

    value: float = math.nan
    error: float = math.nan
    chi2: float = math.nan
    dof: int = 0
    p_value: float = math.nan
    note: str = ""

    @property
    def known(self) -> bool:
        """Whether it has a value and an error."""
        return math.isfinite(self.value) and math.isfinite(self.error)

    def away(self, other: float, other_error: float = 0.0) -> float:
        """Distance from another number in units of both errors; infinite without any error.

        Parameters
        ----------
        other, other_error : float, float
            The other number.

        Returns
        -------
        float
            With its sign; NaN where unknown.
        """
        both = math.hypot(self.error, other_error)
        gap = self.value - other
        return gap / both if both else math.copysign(math.inf, gap) if gap else 0.0


def verdict(
    data: Slope, twin: Slope, minus: Slope, *, reference: float | None, settled: bool, why: str
) -> str:
    """Say in one sentence what the data's deviation from the reference is due to.

    Parameters
    ----------
    data, twin, minus : Slope
        Slopes of the data, of the twin on the same ladder, and of data minus twin.
    reference : float or None
        Asymptotic slope.
    settled, why : bool, str
        Whether the data's own fit is settled, and why or why not.

    Returns
    -------
    str
        It may be that these data settle nothing.  Two standard errors count as a difference.
    """
    if not data.known:
        return f"Not settled: {data.note or 'there are no data'}."
    if reference is None:
        return _without_reference(minus)
    off = f"differs from {reference:.4g} by {with_error(data.value - reference, data.error)}"
    tail = _tail(minus, settled=settled, why=why)
    if abs(data.away(reference)) < SIGNIFICANT:
        said = f"No deviation is seen: the data's slope {off}, and {2 * data.error:.2g} would hide"
        if minus.known and abs(minus.away(0.0)) >= SIGNIFICANT:
            said += f"; but data minus twin has the slope {with_error(minus.value, minus.error)}"
        return f"{said}{tail}."
    if not (twin.known and minus.known):
        return f"Not settled: the data's slope {off}, and there is no twin to tell why{tail}."
    part = with_error(twin.value - reference, twin.error)
    rest = with_error(minus.value, minus.error)
    geometry = abs(twin.away(reference)) >= SIGNIFICANT
    discrete = abs(minus.away(0.0)) >= SIGNIFICANT
    if geometry and discrete:
        said = f"geometry and cut give {part} of it (the twin), discreteness {rest} more"
    elif geometry:
        said = f"geometry and cut: the twin deviates by {part}, data minus twin by {rest} only"
    elif discrete:
        said = f"discreteness: data minus twin has the slope {rest}, the twin deviates by {part}"
    else:
        said = f"not settled by these data: the twin deviates by {part}, data minus twin by {rest}"
    return f"The data's slope {off}; {said}{tail}."


def _tail(minus: Slope, *, settled: bool, why: str) -> str:
    """What weakens the sentence, in brackets."""
    doubts = [] if settled else [f"the data's own fit is not settled: {why}"]
    if minus.p_value <= LEAST_P:
        doubts.append(f"data minus twin is no straight line, p = {minus.p_value:.2g}")
    return f" ({'; '.join(doubts)})" if doubts else ""


def _without_reference(minus: Slope) -> str:
    """Data and twin alone."""
    if not minus.known:
        return "Not settled: no asymptotic slope applies here, and there is no twin."
    rest = with_error(minus.value, minus.error)
    if abs(minus.away(0.0)) < SIGNIFICANT:
        return f"No asymptotic slope applies here; data minus twin has none either, {rest}."
    return f"No asymptotic slope applies here; data minus twin has the slope {rest}."
