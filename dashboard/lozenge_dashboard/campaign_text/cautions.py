"""What to be careful about in a campaign: reach of its target, its fits, its errors."""

from __future__ import annotations

import math

from lozenge_dashboard.campaigns import Watch
from lozenge_engine.kernels.gls import LAWS, LEAST_P, SlopeReport
from lozenge_engine.notation import NO_NUMBER, duration, thousands
from lozenge_engine.plan import Target

__all__ = [
    "SYMBOLS",
    "alone",
    "complete",
    "drift",
    "error_words",
    "few",
    "fit_cautions",
    "out_of_reach",
    "reach",
    "timing",
]

FEW = 24
"""Realisations below which an error is itself rather uncertain."""
BETTER = 4.0
"""A law whose AICc is lower by more than this is said to be better."""
SYMBOLS = {"slope": "b", "entropy": "S", "mutual_information": "I"}


def error_words(error: float, target: Target, *, digits: int = 3) -> str:
    """An error as its target counts it: ``4.7 % of b`` or ``0.0198 nats``.

    Parameters
    ----------
    error : float
        Standard error in nats, or as a fraction of the value.
    target : Target
        Says which of the two.
    digits : int
        Leading digits.

    Returns
    -------
    str
        `NO_NUMBER` for what is not finite.
    """
    if not math.isfinite(error):
        return NO_NUMBER
    number = float(f"{100 * error if target.relative else error:.{digits}g}")
    unit = f"% of {SYMBOLS[target.quantity]}" if target.relative else "nats"
    return f"{number:.12g} {unit}"


def complete(watch: Watch) -> bool:
    """Whether the target is reached or every planned realisation is there."""
    target = watch.plan.target
    if target is not None and watch.estimates.error <= target.error:
        return True
    return all(done >= watch.plan.realisations for done, _ in watch.counts)


def drift(report: SlopeReport) -> float:
    """Largest move of a slope when small sizes are dropped, in its errors; NaN if unknown."""
    full = report.fit
    moves = [abs(line.slope - full.slope) for _, line in report.by_smallest[1:]]
    return max(moves) / full.slope_error if moves and full.slope_error > 0 else math.nan


def out_of_reach(watch: Watch) -> int:
    """Realisations of a sprinkling that the target takes if those planned will not do.

    Parameters
    ----------
    watch : Watch
        The file as it was read.

    Returns
    -------
    int
        From errors that fall as one over the root of the number; 0 if the plan will do, the
        target is reached, or no error is known yet.
    """
    target, error = watch.plan.target, watch.estimates.error
    if target is None or not math.isfinite(error) or error <= target.error:
        return 0
    cells = watch.estimates.cells
    if target.quantity == "slope":
        used = {i for fit in watch.estimates.fits if fit.report for i in fit.series.used}
        counts = [cells[i].entropy.count for i in used]
        need = sum(counts) / max(1, len(counts)) * (error / target.error) ** 2
    else:
        entropy = target.quantity == "entropy"
        need = 0.0
        for cell in cells:
            found = cell.entropy if entropy else cell.mutual_information
            if found is None or not math.isfinite(found.error):
                continue
            size = abs(found.mean) if target.relative else 1.0
            need = max(need, found.count * (found.error / (target.error * size or math.inf)) ** 2)
    return math.ceil(need) if need > watch.plan.realisations else 0


def fit_cautions(watch: Watch) -> list[str]:
    """Why a slope may not be what it seems."""
    said = []
    for fit in watch.estimates.fits:
        if fit.report is None:
            continue
        best = fit.report.fit
        head = f"{fit.label.replace('_', ' ')}: " if fit.label else ""
        if best.p_value <= LEAST_P:
            said.append(
                f"{head}the line does not fit, p = {best.p_value:.2g}: the error of b is that of "
                "a line through points that lie on none."
            )
        moved = drift(fit.report)
        if moved >= 1.0:
            said.append(
                f"{head}without the smallest sizes b moves by up to {moved:.2g} of the full fit's "
                "error."
            )
        first = fit.report.models[0]
        if best.aicc - first.aicc > BETTER:
            said.append(
                f"{head}another law describes the samples better than {LAWS['log']}: "
                f"{LAWS[first.model]}, by {best.aicc - first.aicc:.1f} in AICc."
            )
    return [line[0].upper() + line[1:] for line in said]


def reach(watch: Watch) -> list[str]:
    """That the planned realisations will not do for the target."""
    need, target = out_of_reach(watch), watch.plan.target
    if not need or target is None:
        return []
    most = thousands(watch.plan.realisations)
    step = 10 ** max(0, len(str(need)) - 2)
    about = thousands(-(-need // step) * step)
    there = all(done >= watch.plan.realisations for done, _ in watch.counts)
    return [
        f"At most {most} realisations of a sprinkling are planned"
        f"{' and all are there' if there else ''}: the target, "
        f"{error_words(target.error, target)}, will probably need about {about}, if the error "
        f"({error_words(watch.estimates.error, target, digits=2)} now) goes on falling as one "
        "over the root of their number."
    ]


def few(watch: Watch) -> list[str]:
    """That errors from few realisations are uncertain themselves."""
    counts = [n for cell in watch.estimates.cells if (n := cell.entropy.count) > 1]
    least = min(counts, default=FEW)
    if least == 2:
        return [
            "Points with two realisations: their error comes from one difference, and a mean lies "
            "within one such error of the truth in half of all cases only."
        ]
    if least < FEW:
        return [
            f"Points with {least} realisations: their errors are themselves uncertain by about "
            f"{100 / math.sqrt(2 * (least - 1)):.0f} %."
        ]
    return []


def alone(watch: Watch) -> list[str]:
    """That errors are not known yet, and that marks stand."""
    counts = [cell.entropy.count for cell in watch.estimates.cells]
    said = []
    if any(n == 1 for n in counts):
        said.append("Points with one realisation: no error is known.")
    marked = sum(cell.untrusted for cell in watch.estimates.cells)
    if marked:
        said.append(
            f"{thousands(marked)} samples carry a mark (certificate or rank) and are in the means."
        )
    missing = sum(cell.missing for cell in watch.estimates.cells)
    if missing:
        said.append(
            f"{thousands(missing)} samples have no number: those points could not be computed on "
            "their sprinklings, and what is left is a selected sample."
        )
    return said


def timing(watch: Watch, elapsed: float) -> list[str]:
    """How far off the prediction was, CPU time against CPU time."""
    good = [done - failed for done, failed in watch.counts]
    if len(watch.predicted) != len(good) or not sum(good):
        return []
    predicted = sum(n * s for n, (s, _) in zip(good, watch.predicted, strict=True))
    taken = watch.estimates.cpu_seconds
    if not (predicted > 0 and taken > 0):
        return []
    return [
        f"CPU time of {thousands(sum(good))} realisations {duration(taken)}, predicted for as many "
        f"{duration(predicted)} ({taken / predicted:.2f} times); running time, all runs "
        f"together, {duration(elapsed)}."
    ]
