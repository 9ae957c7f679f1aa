"""The entropy of a kept space, and what has to be said about it."""

from __future__ import annotations

from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from lozenge_engine.kernels import gaussian
from lozenge_engine.result import Status

__all__ = ["Measured", "read"]

FloatArray = NDArray[np.float64]

TOLERANCES = (1e-6, 1e-8, 1e-12)
"""Kernel tolerances at which an uncut entropy is computed again."""
AGREEMENT = 1e-6
"""Spread of those entropies, relative to the larger of S and 1, above which S is undetermined."""


class Measured(NamedTuple):
    """The fields that a region and a union have in common.

    Attributes
    ----------
    symplectic, contributions : ndarray, shape (k,), float64
        As in `RegionResult`; empty where there is no entropy.
    entropy : float
        Sum of the contributions, in nats; NaN where there is none.
    status : str
        See `lozenge_engine.result.Status`.
    note : str
        The reason, when the status is not ``ok``; otherwise empty.
    """

    symplectic: FloatArray
    contributions: FloatArray
    entropy: float
    status: Status
    note: str


def read(
    spectrum: gaussian.Spectrum,
    kept: NDArray[np.bool_],
    g: FloatArray,
    *,
    order: float,
    uncut: bool,
    elements: int,
    rank: int | None,
) -> Measured:
    """Entropy of the space that `g` projects on.

    Parameters
    ----------
    spectrum : Spectrum
        The operator's spectrum, for the check against other kernel tolerances.
    kept : ndarray of bool
        Its kept pairs.
    g : ndarray, shape (2 r, 2 k), float64
        From `gaussian.projected`, or several of them side by side.
    order : float
        Renyi order, >= 0.5.
    uncut : bool
        Whether the regions' rule is ``none``.
    elements : int
        Elements of the region or union.
    rank : int or None
        Rank of the patch's cut operator, both signs; None when the first stage cuts nothing.

    Returns
    -------
    Measured
        With status ``refused`` when the rank makes S = 0 whatever the points are, and
        ``undetermined`` when R is not positive definite on the space.

    Notes
    -----
    Cost: `gaussian.symplectic`, once, and when uncut once more for each of three kernel
    tolerances that keeps other pairs.
    """
    empty = np.empty(0)
    if uncut and rank is not None and elements >= rank:
        return Measured(
            empty,
            empty,
            np.nan,
            "refused",
            f"S = 0 by rank alone: the first stage leaves {rank} modes (both signs), and "
            f"{elements} elements see them all, so their state is pure; cut in the second stage",
        )
    try:
        found = gaussian.symplectic(g)
    except np.linalg.LinAlgError:
        return Measured(
            empty,
            empty,
            np.nan,
            "undetermined",
            "the kept modes reach into the kernel of Delta, where S depends on the tolerance",
        )
    parts = gaussian.contributions(found.values, order=order)
    entropy = float(parts.sum())
    status, note = _remark(found, entropy, _spread(spectrum, kept, entropy, order, uncut=uncut))
    return Measured(found.values, parts, entropy, status, note)


def _remark(found: gaussian.Symplectic, entropy: float, spread: float) -> tuple[Status, str]:
    """Status of an entropy and the reason."""
    if spread > AGREEMENT * max(1.0, entropy):
        return (
            "undetermined",
            f"S changes by {spread:.2g} with the kernel tolerance (1e-6 to 1e-12): without a cut "
            "the tolerance is a truncation rule",
        )
    if found.tolerance > AGREEMENT:
        return (
            "undetermined",
            f"rounding may move a symplectic value by {found.tolerance:.1e}: the kept modes come "
            "too near the kernel of Delta",
        )
    if found.lowest < 0.5 - found.tolerance:
        return (
            "out_of_range",
            f"a symplectic value is {found.lowest:.9f}, below 1/2 by more than the rounding "
            f"{found.tolerance:.1e}",
        )
    return "ok", ""


def _spread(
    spectrum: gaussian.Spectrum,
    kept: NDArray[np.bool_],
    entropy: float,
    order: float,
    *,
    uncut: bool,
) -> float:
    """How far S moves when the kernel tolerance does; 0 where a cut decides."""
    values = spectrum.pairs.values
    if not uncut or not values.size or kept.size != values.size:
        return 0.0
    entropies = [entropy]
    for tolerance in TOLERANCES:
        other = values > tolerance * values[0]
        if np.array_equal(other, kept):
            continue
        try:
            found = gaussian.symplectic(gaussian.projected(spectrum, other))
        except np.linalg.LinAlgError:
            return np.inf
        entropies.append(float(gaussian.contributions(found.values, order=order).sum()))
    return max(entropies) - min(entropies)
