"""Sentences on the bench's sweeps and on what stands beside them."""

from __future__ import annotations

import math

from lozenge_dashboard.publish.facts import Facts
from lozenge_dashboard.publish.wording import several
from lozenge_engine.geometry import region_letter
from lozenge_engine.notation import with_error
from lozenge_engine.sweeps import ScalingCurve

__all__ = ["sentences"]

VARIED = {
    "density": "density at fixed geometry, every rung with sprinklings of its own",
    "size": "sizes and gaps together at fixed density, on the same sprinklings",
}


def sentences(facts: Facts) -> list[str]:
    """What was swept, fitted and laid beside.

    Parameters
    ----------
    facts : Facts
        What was computed.

    Returns
    -------
    list of str
        Empty without sweeps.
    """
    scene = facts.scene
    if scene is None:
        return []
    found: list[str] = []
    for curve in (scene.density, scene.size):
        if curve is not None and curve.done:
            found += [_swept(curve), _fitted(facts, curve), _reference(curve)]
    return [*found, _separation(facts), _twin(facts), _chain(facts)]


def _swept(curve: ScalingCurve) -> str:
    low, high = float(curve.values.min()), float(curve.values.max())
    ends = f"{low:.4g} to {high:.4g}" + (" times" if curve.axis == "size" else "")
    done = several(curve.done, "sprinkling")
    part = f" of {curve.planned} planned" if curve.done < curve.planned else ""
    return (
        f"One sweep varies the {VARIED[curve.axis]}: {len(curve.values)} points from {ends}, "
        f"{done}{part}."
    )


def _fitted(facts: Facts, curve: ScalingCurve) -> str:
    fit, window = curve.fit, curve.window
    if fit is None or window is None:
        return f"It has {curve.note}." if curve.note else ""
    text = (
        f"S = b ln(l/a) + c, l = 2 half-widths and a = ρ^(−1/2), was fitted to its {fit.points} "
        f"points with {window[0]:.0f} to {window[1]:.0f} expected elements in the smallest region "
        f"({fit.method}): b = {with_error(fit.slope, fit.slope_error)}"
    )
    if math.isfinite(fit.p_value):
        text += f", χ² = {fit.chi2:.2g} for {fit.dof} degrees of freedom, p = {fit.p_value:.2g}"
    left = len(curve.values) - int(curve.used.sum())
    least = facts.preset.setup.sweeps.smallest_region
    if left and float(curve.elements_per_region.min()) < least:
        text += f"; points with fewer than {least} elements were left out"
    return f"{text}."


def _reference(curve: ScalingCurve) -> str:
    if curve.reference_slope is None or curve.fit is None:
        return ""
    return (
        f"The reference slope {curve.reference_slope:.4g} holds asymptotically, for regions that "
        "are small, hold many elements and lie far from the edge and from each other."
    )


def _separation(facts: Facts) -> str:
    curve = facts.scene.separation if facts.scene is not None else None
    if curve is None or not curve.done or curve.separation.size == 0:
        return ""
    letters = " and ".join(region_letter(k) for k in curve.pair)
    return (
        f"The separation was varied from {curve.separation.min():.3g} to "
        f"{curve.separation.max():.3g} half-widths in {curve.separation.size} steps on "
        f"{several(curve.done, 'sprinkling')}, which the steps share; the mutual information is "
        f"that of {letters}."
    )


def _twin(facts: Facts) -> str:
    if facts.scene is None or facts.scene.beside is None or facts.scene.beside.front is None:
        return ""
    twin = facts.scene.beside.front
    if not twin.oversampling:
        return "The continuum twin is the same geometry with the closed-form modes of the diamond."
    return (
        "The continuum twin is the same geometry on quasi-uniform points, cut at the same "
        f"wavenumber: {twin.sets} sets of up to {twin.oversampling} times the density, whose "
        "spread gives its errors."
    )


def _chain(facts: Facts) -> str:
    beside = facts.scene.beside if facts.scene is not None else None
    if beside is None or (beside.density.chain is None and beside.size.chain is None):
        return ""
    return (
        "The harmonic chain has fixed ends and blocks at the regions' fractions along x; its "
        "constant is its own, and it was shifted to the mean of the data."
    )
