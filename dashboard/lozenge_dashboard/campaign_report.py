"""What the command line says of a results file: tables, fits, cautions."""

from __future__ import annotations

import math
from collections.abc import Sequence

import numpy as np

from lozenge_dashboard.campaign_checks import controls, prediction, times
from lozenge_dashboard.campaign_plan import (
    fits_it,
    setting_text,
    share,
    target_text,
    value_text,
)
from lozenge_dashboard.curves import aligned, wrapped
from lozenge_engine.estimates import CellEstimate, Estimates, FitOf, Regime
from lozenge_engine.kernels.gls import LineFit, SlopeReport
from lozenge_engine.notation import (
    NO_NUMBER,
    duration,
    thousands,
    two_digits,
    with_error,
    with_scatter,
)
from lozenge_engine.store import Results

__all__ = [
    "report_text",
]

MODEL_WORDS = {
    "log": "S = b ln(l/a) + c",
    "log_root": "S = b ln(l/a) + c + d/sqrt(n)",
    "volume": "S = a n + c",
}
"""The laws that a fit compares; n is the expected number of elements of the smallest region."""
WORTH_IT = 1.5
"""Ratio of variances from which control variates would earn a place in the means."""


def report_text(results: Results, found: Estimates) -> str:
    """Write what a results file holds for a person to read.

    Parameters
    ----------
    results : Results
        Open.
    found : Estimates
        What its samples say.

    Returns
    -------
    str
        Paragraphs; the last line ends with a newline.
    """
    blocks = [_heading(results, found), aligned(_point_rows(results, found))]
    blocks.append("\n".join(map(wrapped, _legend(results, found))))
    blocks += [_fit_text(results, fit) for fit in found.fits]
    if not found.fits:
        blocks.append("no fit: neither density nor half_width is an axis")
    blocks.append("\n".join(map(wrapped, _closing(results, found))))
    return "\n\n".join(blocks) + "\n"


def _heading(results: Results, found: Estimates) -> str:
    preset, layout = results.preset, results.design
    mark = " (invented scenario)" if preset.invented else ""
    counts = (
        f"{thousands(found.done, space=' ')} realisations of {len(layout.sprinklings)} "
        f"sprinkling{'s' if len(layout.sprinklings) > 1 else ''}, {found.failed} failed, "
        f"{duration(found.cpu_seconds)} of CPU time in {duration(results.elapsed)}"
    )
    target = layout.plan.target
    wanted = []
    if target is not None:
        reached = share(found.error, target) if math.isfinite(found.error) else "not known"
        wanted.append(f"wanted: {target_text(target)}; reached: {reached}")
    about = wrapped(setting_text(layout.setup, {axis.name for axis in layout.plan.axes}))
    return "\n".join([f"{preset.title}{mark}", wrapped(preset.sentence), about, counts, *wanted])


# ----------------------------------------------------------------------- points


def _point_rows(results: Results, found: Estimates) -> list[list[str]]:
    """One row for each point and placement class."""
    layout = results.design
    names = [axis.name for axis in layout.plan.axes]
    classes = len(layout.plan.placements) > 1
    several = any(len(cell.regions) > 1 for cell in found.cells)
    head = [*(name.replace("_", " ") for name in names), *(["class"] if classes else [])]
    head += ["elements", "done", "S support" if several else "S"]
    if several:
        head += ["S direct sum", "I support", "I direct sum", "cross"]
    rows = [[*head, "kept", ""]]
    for number in found.cells:
        cell = layout.cells[number.cell]
        values = layout.points[cell.point].values
        row = [value_text(values[name]) for name in names]
        row += [str(cell.placement + 1)] if classes else []
        row += [f"{cell.elements:.0f}", str(number.entropy.count), _estimate(number, "entropy")]
        if several:
            row += [_estimate(number, "direct_sum"), _estimate(number, "mutual_information")]
            row += [_estimate(number, "mutual_direct_sum"), _decimals(number.cross_block)]
        rows.append([*row, _decimals(number.kept_ratio), _marks(results, number)])
    return rows


def _estimate(number: CellEstimate, name: str) -> str:
    """A mean with its error; one realisation has none, and then no number stands there."""
    estimate = getattr(number, name)
    if estimate is None:
        return ""
    if estimate.count < 2:
        return f"{with_error(estimate.mean)}(?)" if estimate.count else NO_NUMBER
    mark = "*" if number.untrusted else ""
    return with_error(estimate.mean, estimate.error) + mark


def _decimals(x: float) -> str:
    return f"{x:.2f}" if math.isfinite(x) else NO_NUMBER


def _marks(results: Results, number: CellEstimate) -> str:
    """What is to be known of a row besides its numbers."""
    marks = [f"{number.missing} without a number"] if number.missing else []
    marks += [f"{number.untrusted} untrusted"] if number.untrusted else []
    if not fits_it(results.design.cells[number.cell].elements, results.design.plan):
        marks.append("not fitted")
    return ", ".join(marks)


def _legend(results: Results, found: Estimates) -> list[str]:
    """What the columns mean, and what is not among the points."""
    notes = [
        "S in nats, of all regions together; elements: expected in the smallest region; done: "
        "realisations; in brackets the standard error of the last digits, over sprinklings; kept: "
        "kept over nominal modes, mean over the regions"
    ]
    if any(cell.mutual_information is not None for cell in found.cells):
        notes.append(
            "support, direct sum: the two union rules; I: mutual information of the nearest pair, "
            "which need not be positive here; cross: norm of that pair's cross block"
        )
    shifts = results.design.plan.placements
    if len(shifts) > 1 or shifts != ((0.0, 0.0),):
        classes = (f"{k + 1} t {t:g} x {x:g}" for k, (t, x) in enumerate(shifts))
        notes.append(
            "placement classes, all regions shifted together, mean over mirror images: "
            + "; ".join(classes)
        )
    if any(cell.entropy.count == 1 for cell in found.cells):
        notes.append("(?): one realisation, no error is known")
    if any(cell.untrusted for cell in found.cells):
        notes.append(
            "*: some samples' certificate is not met or a number carries a mark; they are in "
            "the means, and the CSV tells which"
        )
    if any(cell.missing for cell in found.cells):
        notes.append(
            "without a number: sprinklings on which that point could not be computed; its means "
            "and fits are of the others alone, which are a selected sample"
        )
    if found.failed:
        notes.append(
            f"{found.failed} of {found.done} realisations failed: where failing has to do with the "
            "points, all means and fits are of a selected sample"
        )
    if results.design.setup.order != 1 or any(a.name == "order" for a in results.design.plan.axes):
        notes.append(
            "S of order q is the Renyi entropy; I is then the difference of Renyi entropies, which "
            "is no mutual information"
        )
    return notes + [f"left out: {text}" for text in results.design.left_out]


# ------------------------------------------------------------------------- fits


def _fit_text(results: Results, fit: FitOf) -> str:
    """A fit with all that a referee would ask."""
    label = f", {fit.label.replace('_', ' ')}" if fit.label else ""
    heading = f"fit over {fit.axis.replace('_', ' ')}{label}"
    if fit.report is None:
        return "\n".join([heading, *map(wrapped, [fit.note, *_regime(fit.regime)])])
    lines = [*_line(fit.report, several=len(results.design.plan.placements) > 1)]
    lines += _checks(fit.report)
    if fit.reference is not None:
        lines.append(_against(fit.report.fit, fit.reference))
    else:
        lines.append(f"no reference slope: {fit.no_reference}")
    lines += _regime(fit.regime)
    return "\n".join([heading, *map(wrapped, lines)])


def _line(report: SlopeReport, *, several: bool) -> list[str]:
    """The slope, its interval, the constants and how well the line fits."""
    fit = report.fit
    constants = ", ".join(
        f"{f'class {placement + 1} ' if several else ''}{with_error(value, error)}"
        for placement, value, error in fit.constants
    )
    return [
        f"{MODEL_WORDS['log']}: b = {with_error(fit.slope, fit.slope_error)}, 95 % interval "
        f"{_end(fit.low, fit)} to {_end(fit.high, fit)}; c = {constants}",
        f"{_quality(fit)}, {fit.cells} cells, at least {fit.realisations} realisations each; "
        f"{fit.method}",
        *([f"{fit.left_out} realisations without a number left out"] if fit.left_out else []),
    ]


def _end(x: float, fit: LineFit) -> str:
    """An end of the interval, with one digit more than the slope."""
    return with_scatter(x, fit.slope_error)


def _quality(fit: LineFit) -> str:
    if not math.isfinite(fit.p_value):
        return "chi2 not known"
    return f"chi2/dof {fit.chi2:.3g}/{fit.dof}, p {fit.p_value:.2g}"


def _checks(report: SlopeReport) -> list[str]:
    """Bootstrap, other laws, smaller windows, and the verdict."""
    lines = [f"bootstrap over sprinklings: error of b {two_digits(report.bootstrap_error)}"]
    ranked = [fit for fit in report.models if math.isfinite(fit.aicc)]
    laws = (
        f"{MODEL_WORDS[fit.model]} {fit.aicc - ranked[0].aicc:+.1f} (p {fit.p_value:.2g}, "
        f"{'a' if fit.model == 'volume' else 'b'} {with_error(fit.slope, fit.slope_error)})"
        for fit in ranked
    )
    lines.append(f"laws by AICc above the best: {'; '.join(laws) or 'not known'}")
    windows = (
        f"{smallest:.0f}: {with_error(fit.slope, fit.slope_error)}"
        for smallest, fit in report.by_smallest
    )
    lines.append(f"b against the smallest elements fitted: {', '.join(windows)}")
    verdict = "settled" if report.settled else "NOT settled"
    lines.append(f"{verdict}: {report.why}" if report.why else verdict)
    return lines


def _against(fit: LineFit, reference: float) -> str:
    sigma = (fit.slope - reference) / fit.slope_error
    side = "above" if sigma > 0 else "below"
    return (
        f"reference slope {reference:.4g}, asymptotic: b is {abs(sigma):.1f} sigma {side} it "
        f"({100 * (fit.slope / reference - 1):+.1f} %)"
    )


def _regime(regime: Regime) -> list[str]:
    """Where the fit stands between the limits that a law assumes."""
    gap = "one region"
    if not math.isnan(regime.gap):
        gap = f"smallest gap {regime.gap:.3g} = {regime.gap_lengths:.2g} a (many wanted)"
    return [
        f"regime: {_span(regime.elements, '.0f')} elements per region (many wanted), kept/nominal "
        f"{_span(regime.kept_ratio, '.2f')} (1 wanted), region/patch {_span(regime.size, '.2g')} "
        f"(small wanted), {gap}"
    ]


def _span(ends: Sequence[float], form: str) -> str:
    low, high = (format(x, form) if math.isfinite(x) else NO_NUMBER for x in ends)
    return low if low == high else f"{low} to {high}"


# ---------------------------------------------------------------------- closing


def _closing(results: Results, found: Estimates) -> list[str]:
    """Failures, control variates, prediction, versions, seeds."""
    lines = [f"failed: {count} x {reason}" for reason, count in found.failures]
    lines += _controls_text(results)
    lines += _prediction_text(results)
    made = results.computed_with() or ((results.versions, 0),)
    source = results.preset.setup.points
    points = ", ".join((f"{source.kind} points", *source.remarks()))
    lines.append(f"seed {source.seed}, {points}; each realisation has its own child seed")
    for versions, count in made:
        text = ", ".join(f"{name} {version}" for name, version in versions.items())
        several = f" ({count} realisations)" if len(made) > 1 else ""
        lines.append(f"computed with {text}{several}")
    return lines


def _controls_text(results: Results) -> list[str]:
    tried = [one for one in controls(results) if one is not None]
    if not tried:
        return []
    ratios = sorted(one.ratio for one in tried)
    middle = float(np.median(ratios))
    moved = max(abs(one.shift) for one in tried)
    verdict = "enough" if middle >= WORTH_IT else "not enough"
    return [
        "control variates tried, not used in the numbers above: elements of patch and regions, "
        f"ordering fraction; they divide the variance of S by {middle:.2f} (median; "
        f"{ratios[0]:.2f} to {ratios[-1]:.2f}), {verdict} to earn a place, which takes {WORTH_IT}; "
        f"means would move by at most {moved:.1f} standard errors of that move"
    ]


def _prediction_text(results: Results) -> list[str]:
    """How far off the predicted times were."""
    pairs = times(results)
    if not pairs:
        return []
    predicted, measured = prediction(results)
    shares = ", ".join(f"{density:g} {_off(m, p)}" for density, p, m in pairs)
    return [
        f"predicted {duration(predicted)} of CPU time for these realisations, measured "
        f"{duration(measured)}: {_off(measured, predicted)}; by density {shares}"
    ]


def _off(measured: float, predicted: float) -> str:
    return f"{100 * (measured / predicted - 1):+.0f} %"
