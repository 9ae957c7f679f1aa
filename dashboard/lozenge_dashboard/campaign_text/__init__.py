"""A campaign in words: the line of readings, what its fits say, failures, the table of points."""

from __future__ import annotations

import html
import math
from collections.abc import Iterable

import numpy as np

from lozenge_dashboard.campaign_text.cautions import (
    SYMBOLS,
    alone,
    complete,
    drift,
    error_words,
    few,
    fit_cautions,
    out_of_reach,
    reach,
    timing,
)
from lozenge_dashboard.campaigns import Status, Watch
from lozenge_engine.campaign import Progress
from lozenge_engine.estimates import CellEstimate, FitOf
from lozenge_engine.geometry import region_letter
from lozenge_engine.kernels.scaling import Estimate
from lozenge_engine.notation import NO_NUMBER, duration, thousands, with_error
from lozenge_engine.series import fittable

__all__ = [
    "EMPTY",
    "SYMBOLS",
    "columns",
    "complete",
    "drift",
    "error_words",
    "line_html",
    "out_of_reach",
    "rows",
    "state_words",
    "words_html",
]

EMPTY = ""
"""What each view says while no file is open: nothing, since the line above them says it."""
NOTHING_OPEN = "No results file is open: start a campaign, or open a file of this folder."


def state_words(watch: Watch | None, status: Status) -> str:
    """How a campaign stands, in one sentence."""
    if status.failed:
        return status.text
    if status.running:
        return "pausing …" if status.stopping else "running"
    if status.text:
        return status.text
    return "not running here" if watch is not None else ""


# ---------------------------------------------------------------- the line of readings


def _reading(name: str, value: str, small: str = "", *, mark: bool = False) -> str:
    tail = f"<dd class='small'>{html.escape(small)}</dd>" if small else ""
    kind = " class='mark'" if mark else ""
    return f"<div><dt>{html.escape(name)}</dt><dd{kind}>{html.escape(value)}</dd>{tail}</div>"


def _wanted(watch: Watch) -> list[str]:
    """The error reached and the one that is wanted."""
    target = watch.plan.target
    if target is None:
        return []
    error = watch.estimates.error
    goal = error_words(target.error, target)
    now = error_words(error, target, digits=2)
    if now == error_words(target.error, target, digits=2):
        now = error_words(error, target)  # on which side of the goal it lies
    return [_reading(f"error of {SYMBOLS[target.quantity]}", now, f"wanted {goal}")]


def _slopes(watch: Watch, *, running: bool) -> list[str]:
    """The first fits' slopes; none where no fit is possible and none was asked for."""
    target = watch.plan.target
    asked = target is not None and target.quantity == "slope"
    found = []
    for fit in watch.estimates.fits[:3]:
        possible = fittable(watch.design, fit.series)
        if not (possible or asked):
            continue
        name = f"b, {fit.label.replace('_', ' ')}" if fit.label else "b"
        if fit.report is None:
            found.append(
                _reading(name, NO_NUMBER, "no fit yet" if running and possible else "no fit")
            )
        else:
            best = fit.report.fit
            word = "settled" if fit.report.settled else "not settled"
            word += " so far" if running and fit.report.settled else ""
            found.append(_reading(name, with_error(best.slope, best.slope_error), word))
    return found


def _left(watch: Watch, progress: Progress) -> str:
    """The reading of the time that is left, with what it leads to."""
    plan, left = watch.plan, progress.seconds_left
    if plan.budget is not None and left >= plan.budget - progress.elapsed - 0.5:
        to = "of the budget"
    elif plan.target is None or not math.isfinite(progress.error):
        to = "of this round"
    elif out_of_reach(watch):
        to = "to the last one planned"
    else:
        to = "to the target, if scatter stays"
    return _reading("time left, about", duration(left), to)


def line_html(watch: Watch | None, status: Status) -> str:
    """The line of readings on top.

    Parameters
    ----------
    watch : Watch or None
        The file as it was read; None before.
    status : Status
        How it stands with this server.

    Returns
    -------
    str
        HTML; what comes from files is escaped.
    """
    if watch is None:
        words = status.text or NOTHING_OPEN
        return f"<dl class='readings'>{_reading('campaign', NO_NUMBER, words)}</dl>"
    parts = _slopes(watch, running=status.running) + _wanted(watch)
    done = sum(done for done, _ in watch.counts)
    failed = sum(failed for _, failed in watch.counts)
    progress = status.progress if status.running else None
    of = f"of {thousands(progress.planned)} in this round" if progress else ""
    if failed:
        of = ", ".join(filter(None, (of, f"{thousands(failed)} failed")))
    parts.append(_reading("realisations", thousands(done), of, mark=False))
    elapsed = progress.elapsed if progress else watch.elapsed
    parts.append(
        _reading("running time", duration(elapsed), f"CPU {duration(watch.estimates.cpu_seconds)}")
    )
    if progress:
        parts.append(_left(watch, progress))
    kind = "status busy" if status.running else "status"
    said = html.escape(f"{watch.name}: {state_words(watch, status)}")
    return f"<dl class='readings'>{''.join(parts)}<div class='{kind}'>{said}</div></dl>"


# ---------------------------------------------------------------- paragraphs


def _fit_lines(watch: Watch, fit: FitOf, *, running: bool) -> list[str]:
    """What a fit says, and where it stands."""
    if fit.report is not None:
        said = fit.report.explain()
        lines = (
            said.replace("\nSettled: ", "\nSettled so far: ") if running else said
        ).splitlines()
    else:
        lines = [_sentence(fit.note), _advice(watch, fit)]
    regime = fit.regime
    low, high = (thousands(round(n)) for n in regime.elements)
    where = f"Regime: {_span(low, high)} elements expected in the smallest region"
    if all(map(math.isfinite, regime.kept_ratio)):
        where += ", kept/nominal " + _span(*(f"{r:.2f}" for r in regime.kept_ratio))
    largest = "largest half-width" if _most(watch) > 1 else "half-width"
    where += f", {largest} " + _span(*(f"{h:.3g}" for h in regime.size))
    if math.isfinite(regime.gap):
        where += f", smallest gap {regime.gap:.3g} or {regime.gap_lengths:.2g} a"
    lines.append(where + " (patch half-widths).")
    if fit.reference is not None:
        lines.append(
            f"Reference slope {fit.reference:.3f}: asymptotic, for regions small in the patch, "
            "away from its edge and from each other, and full of elements."
        )
    else:
        lines.append(f"No reference slope: {fit.no_reference}.")
    return lines


def _span(low: str, high: str) -> str:
    return low if low == high else f"{low} to {high}"


def _most(watch: Watch) -> int:
    """Most regions of a point."""
    return max(len(cell.regions) for cell in watch.estimates.cells)


def _advice(watch: Watch, fit: FitOf) -> str:
    """The way to a fit that is not there."""
    if fittable(watch.design, fit.series):
        return ""  # the note says what is missing
    larger = "larger densities" if fit.axis == "density" else "larger half-widths or densities"
    return (
        f"For a fit start a campaign with more sizes, {larger}, or fewer least elements "
        "(the smaller the regions, the less they follow the law)."
    )


def _sentence(text: str) -> str:
    return f"{text[:1].upper()}{text[1:]}." if text else ""


def _block(title: str, lines: Iterable[str], kind: str = "") -> str:
    body = "".join(f"<p>{html.escape(line)}</p>" for line in lines if line)
    attribute = f" class='{kind}'" if kind else ""
    return f"<section{attribute}><h3>{html.escape(title)}</h3>{body}</section>" if body else ""


def words_html(watch: Watch | None, status: Status) -> str:
    """What stands below the figures.

    Parameters
    ----------
    watch : Watch or None
        The file as it was read; None before.
    status : Status
        How it stands with this server.

    Returns
    -------
    str
        HTML; what comes from files is escaped.
    """
    if watch is None:
        return ""
    blocks = []
    for fit in watch.estimates.fits:
        title = "The fit" if not fit.label else f"The fit, {fit.label.replace('_', ' ')}"
        blocks.append(_block(title, _fit_lines(watch, fit, running=status.running)))
    if status.failed:
        blocks.append(_block("The run ended", [status.text], "refusal"))
    failures = [f"{thousands(n)} times: {why}" for why, n in watch.estimates.failures]
    blocks.append(_block("Failed realisations, by reason", failures))
    blocks.append(_block("Left out", watch.design.left_out))
    careful = [*reach(watch), *fit_cautions(watch), *few(watch), *alone(watch)]
    elapsed = status.progress.elapsed if status.running and status.progress else watch.elapsed
    blocks.append(_block("To be careful about", [*careful, *timing(watch, elapsed)]))
    return "".join(blocks)


# ---------------------------------------------------------------- the table


def columns(watch: Watch) -> list[str]:
    """Heads of the table of points."""
    heads = [axis.name.replace("_", " ") for axis in watch.plan.axes]
    if len(watch.plan.placements) > 1:
        heads.append("shift t, x")
    most = _most(watch)
    heads += ["ln(l/a)", "elements", "realisations", "S by support" if most > 1 else "S"]
    if most > 1:
        heads += [f"S({region_letter(k)})" for k in range(most)]
        heads += ["S direct sum", "I by support", "I direct sum", "cross block"]
    return [*heads, "kept/nominal", "marked", *(["fit"] if watch.estimates.fits else [])]


def _text(estimate: Estimate | None) -> str:
    if estimate is None or not math.isfinite(estimate.mean):
        return NO_NUMBER
    text = with_error(estimate.mean, estimate.error)
    return f"{text}, error not known" if estimate.count == 1 else text


def _shown(value: object) -> str:
    if isinstance(value, float):
        return f"{value:.4g}" if value < 1e4 else thousands(round(value), space=" ")
    return str(value).replace("_", " ")


def rows(watch: Watch) -> list[list[str]]:
    """The table of points, one row for each point in each placement class."""
    fits = watch.estimates.fits
    used = {i for fit in fits for i in fit.series.used}
    fitted = {i for fit in fits if fit.report is not None for i in fit.series.used}
    most = _most(watch)
    table = []
    for found in watch.estimates.cells:
        cell = watch.design.cells[found.cell]
        row = [_shown(value) for value in watch.design.points[cell.point].values.values()]
        if len(watch.plan.placements) > 1:
            row.append("{:g}, {:g}".format(*watch.plan.placements[cell.placement]))
        row += [f"{cell.x:.3f}", f"{cell.elements:.0f}", str(found.entropy.count)]
        row.append(_text(found.entropy))
        if most > 1:
            row += _pair_columns(found, most)
        row.append(f"{found.kept_ratio:.3f}" if np.isfinite(found.kept_ratio) else NO_NUMBER)
        row.append(str(found.untrusted + found.missing))
        if watch.estimates.fits:
            some = "yes" if found.cell in fitted else "no fit"
            row.append(some if found.cell in used else "left out")
        table.append(row)
    return table


def _pair_columns(found: CellEstimate, most: int) -> list[str]:
    """Columns that one region has not."""
    regions = [_text(e) for e in found.regions] + [NO_NUMBER] * (most - len(found.regions))
    block = f"{found.cross_block:.3f}" if math.isfinite(found.cross_block) else NO_NUMBER
    return [
        *regions,
        _text(found.direct_sum),
        _text(found.mutual_information),
        _text(found.mutual_direct_sum),
        block,
    ]
