"""Sentences on a campaign: realisations, seeds, fits, target."""

from __future__ import annotations

import math

from lozenge_dashboard.campaign_plan import share, target_text
from lozenge_dashboard.publish.facts import Facts
from lozenge_dashboard.publish.wording import listing, several
from lozenge_engine.estimates import FitOf
from lozenge_engine.notation import decimals_for, with_error

__all__ = ["sentences"]


def sentences(facts: Facts) -> list[str]:
    """What a results file holds.

    Parameters
    ----------
    facts : Facts
        What was computed.

    Returns
    -------
    list of str
        Empty without a results file.
    """
    if facts.watch is None:
        return []
    found = [_realisations(facts), _placements(facts), _failed(facts), _marks(facts)]
    for fit in facts.watch.estimates.fits:
        found += _fit(fit)
    return [*found, _target(facts)]


def _realisations(facts: Facts) -> str:
    watch = facts.watch
    if watch is None or not watch.estimates.done:
        return "No realisation has been computed yet."
    counts = sorted(done - failed for done, failed in watch.counts)
    span = several(counts[0], "realisation")
    if counts[0] < counts[-1]:
        span = f"{counts[0]} to {several(counts[-1], 'realisation')}"
    groups = "one density" if len(counts) == 1 else f"each of {len(counts)} densities"
    text = (
        f"The campaign holds {span} at {groups}, each with a seed of its own derived from the "
        "seed, the density and its number"
    )
    if any(len(own.cells) > 1 for own in watch.design.sprinklings):
        text += "; points of one density share their realisations, so their errors are correlated"
    if counts[0] > 1:
        return f"{text}. Errors are standard errors over realisations."
    return f"{text}. Where there is one realisation or none, no error is known."


def _placements(facts: Facts) -> str:
    shifts = facts.watch.plan.placements if facts.watch is not None else ()
    if len(shifts) < 2:
        return ""
    said = [f"({t:g}, {x:g})" for t, x in shifts]
    text = f"All regions were also shifted together by (t, x) = {listing(said)}"
    if facts.watch is not None and any(fit.report for fit in facts.watch.estimates.fits):
        text += "; each class of placements has a constant of its own in the fits"
    return f"{text}."


def _failed(facts: Facts) -> str:
    failed = facts.watch.estimates.failed if facts.watch is not None else 0
    if not failed:
        return ""
    return f"{several(failed, 'realisation')} failed and are missing: a selected sample."


def _marks(facts: Facts) -> str:
    """Whether every sample is certified, said only of samples that are there."""
    watch = facts.watch
    if watch is None or not watch.estimates.done:
        return ""
    cells = watch.estimates.cells
    untrusted = sum(cell.untrusted for cell in cells)
    missing = sum(cell.missing for cell in cells)
    parts = []
    if untrusted:
        parts.append(
            f"{several(untrusted, 'sample')} carry a mark (certificate not met, or an entropy "
            "that depends on a tolerance) and are in the means"
        )
    if missing:
        parts.append(f"{several(missing, 'sample')} have no number and are not in the means")
    if parts:
        return f"{'; '.join(parts)}."
    if watch.estimates.failed:
        return ""
    return "The certificate of the patch's modes is met in every realisation."


def _fit(fit: FitOf) -> list[str]:
    named = f", {fit.label.replace('_', ' ')}" if fit.label else ""
    over = fit.axis.replace("_", "-")
    if fit.report is None:
        why = fit.note.removeprefix("no fit: ")
        return [f"There is no fit over {over}{named}: {why}."]
    best = fit.report.fit
    decimals = max(decimals_for(best.slope_error), 0) if best.slope_error > 0 else 4
    text = (
        f"Over {over}{named}, S = b ln(l/a) + c was fitted to {best.cells} points with at least "
        f"{best.realisations} realisations each, {fit.regime.elements[0]:.0f} to "
        f"{fit.regime.elements[1]:.0f} expected elements in the smallest region ({best.method}): "
        f"b = {with_error(best.slope, best.slope_error)}, 95 % interval {best.low:.{decimals}f} "
        f"to {best.high:.{decimals}f}"
    )
    if math.isfinite(best.p_value):
        text += f", χ² = {best.chi2:.3g} for {best.dof} degrees of freedom, p = {best.p_value:.2g}"
    verdict = "The fit is settled" if fit.report.settled else "The fit is not settled"
    why = f": {fit.report.why}" if fit.report.why else ""
    if fit.reference is not None:
        text += f"; the reference slope {fit.reference:.4g} is asymptotic"
    return [f"{text}.", f"{verdict}{why}."]


def _target(facts: Facts) -> str:
    watch = facts.watch
    target = watch.plan.target if watch is not None else None
    if watch is None or target is None or not math.isfinite(watch.estimates.error):
        return ""
    reached = watch.estimates.error <= target.error
    known = f"the error is {share(watch.estimates.error, target)}"
    verdict = "reached" if reached else "not reached"
    return f"The target, {target_text(target)}, is {verdict}: {known}."
