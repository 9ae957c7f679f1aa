"""A campaign in words: the line of readings, what its fits say, failures, the table of points."""

from __future__ import annotations

import html
import math
from collections.abc import Iterable

import numpy as np

from lozenge_dashboard.campaigns import Status, Watch
from lozenge_engine.estimates import CellEstimate, FitOf
from lozenge_engine.geometry import region_letter
from lozenge_engine.kernels.scaling import Estimate
from lozenge_engine.notation import NO_NUMBER, duration, thousands, with_error

__all__ = ["EMPTY", "columns", "line_html", "rows", "state_words", "words_html"]

EMPTY = "No results file is open: start a campaign, or open a file of this folder."
SYMBOLS = {"slope": "b", "entropy": "S", "mutual_information": "I"}


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


def _percent(error: float, *, relative: bool) -> str:
    """An error as the target counts it."""
    if not math.isfinite(error):
        return NO_NUMBER
    return f"{100 * error:.2g} %" if relative else f"{error:.2g}"


def _wanted(watch: Watch) -> list[str]:
    """The error reached and the one that is wanted."""
    target = watch.plan.target
    if target is None:
        return []
    error = watch.estimates.error
    now = _percent(error, relative=target.relative) if math.isfinite(error) else NO_NUMBER
    goal = _percent(target.error, relative=target.relative)
    return [_reading(f"error of {SYMBOLS[target.quantity]}", now, f"wanted {goal}")]


def _slopes(watch: Watch) -> list[str]:
    """The first fits' slopes."""
    found = []
    for fit in watch.estimates.fits[:3]:
        name = f"b, {fit.label.replace('_', ' ')}" if fit.label else "b"
        if fit.report is None:
            found.append(_reading(name, NO_NUMBER, "no fit yet"))
        else:
            best = fit.report.fit
            word = "settled" if fit.report.settled else "not settled"
            found.append(_reading(name, with_error(best.slope, best.slope_error), word))
    return found


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
        words = status.text or EMPTY
        return f"<dl class='readings'>{_reading('campaign', NO_NUMBER, words)}</dl>"
    parts = _slopes(watch) + _wanted(watch)
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
        left = progress.seconds_left
        parts.append(_reading("time left, about", duration(left)))
    kind = "status busy" if status.running else "status"
    said = html.escape(f"{watch.name}: {state_words(watch, status)}")
    return f"<dl class='readings'>{''.join(parts)}<div class='{kind}'>{said}</div></dl>"


# ---------------------------------------------------------------- paragraphs


def _fit_lines(fit: FitOf) -> list[str]:
    """What a fit says, and where it stands."""
    lines = fit.report.explain().splitlines() if fit.report is not None else [_sentence(fit.note)]
    low, high = fit.regime.elements
    where = f"Regime: {thousands(round(low))} to {thousands(round(high))} elements expected in the "
    where += "smallest region"
    if all(map(math.isfinite, fit.regime.kept_ratio)):
        where += ", kept/nominal {:.2f} to {:.2f}".format(*fit.regime.kept_ratio)
    where += ", largest half-width {:.3g} to {:.3g}".format(*fit.regime.size)
    if math.isfinite(fit.regime.gap):
        where += f", smallest gap {fit.regime.gap:.3g} or {fit.regime.gap_lengths:.2g} a"
    lines.append(where + " (patch half-widths).")
    if fit.reference is not None:
        lines.append(
            f"Reference slope {fit.reference:.3f}: asymptotic, for regions small in the patch, "
            "away from its edge and from each other, and full of elements."
        )
    else:
        lines.append(f"No reference slope: {fit.no_reference}.")
    return lines


def _sentence(text: str) -> str:
    return f"{text[:1].upper()}{text[1:]}." if text else ""


def _alone(watch: Watch) -> list[str]:
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


def _timing(watch: Watch) -> list[str]:
    """How far off the prediction was."""
    good = [done - failed for done, failed in watch.counts]
    if len(watch.predicted) != len(good) or not sum(good):
        return []
    predicted = sum(n * s for n, (s, _) in zip(good, watch.predicted, strict=True))
    taken = watch.estimates.cpu_seconds
    if not (predicted > 0 and taken > 0):
        return []
    return [
        f"CPU time so far {duration(taken)}, predicted {duration(predicted)} "
        f"({taken / predicted:.2f} times)."
    ]


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
        blocks.append(_block(title, _fit_lines(fit)))
    if status.failed:
        blocks.append(_block("The run ended", [status.text], "refusal"))
    failures = [f"{thousands(n)} times: {why}" for why, n in watch.estimates.failures]
    blocks.append(_block("Failed realisations, by reason", failures))
    blocks.append(_block("Left out", watch.design.left_out))
    blocks.append(_block("To be careful about", [*_alone(watch), *_timing(watch)]))
    return "".join(blocks)


# ---------------------------------------------------------------- the table


def columns(watch: Watch) -> list[str]:
    """Heads of the table of points."""
    heads = [axis.name.replace("_", " ") for axis in watch.plan.axes]
    if len(watch.plan.placements) > 1:
        heads.append("shift t, x")
    heads += ["ln(l/a)", "elements", "realisations", "S by support"]
    most = max(len(cell.regions) for cell in watch.estimates.cells)
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
    used = {i for fit in watch.estimates.fits for i in fit.series.used}
    most = max(len(cell.regions) for cell in watch.estimates.cells)
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
            row.append("yes" if found.cell in used else "left out")
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
