"""What the command line says of the three sweeps: tables, fits, JSON."""

from __future__ import annotations

import math
import textwrap
from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

from lozenge_engine.geometry import region_letter
from lozenge_engine.kernels.scaling import Estimate, Fit
from lozenge_engine.notation import NO_NUMBER, with_error
from lozenge_engine.sweeps import ScalingCurve, SeparationCurve

__all__ = ["Curves", "aligned", "curves_document", "curves_text", "estimate_document", "wrapped"]

RULES = ("support", "direct_sum")
RULE_WORDS = {"support": "by support", "direct_sum": "direct sum"}


@dataclass(frozen=True, slots=True, kw_only=True)
class Curves:
    """The three sweeps of a preset.

    Parameters
    ----------
    density, size : ScalingCurve
        Entropy against scale, at fixed geometry and at fixed density.
    separation : SeparationCurve
        Union entropy and mutual information against the gap.
    """

    density: ScalingCurve
    size: ScalingCurve
    separation: SeparationCurve


def aligned(rows: Sequence[Sequence[str]]) -> str:
    """Put rows of cells into columns two spaces apart.

    Parameters
    ----------
    rows : sequence of sequence of str
        Rows of equal length.

    Returns
    -------
    str
        Lines; the first column stands to the left and the others to the right.
    """
    widths = [max(map(len, column)) for column in zip(*rows, strict=True)]
    lines = []
    for first, *rest in rows:
        cells = [first.ljust(widths[0])]
        cells += [cell.rjust(width) for cell, width in zip(rest, widths[1:], strict=True)]
        lines.append("  ".join(cells).rstrip())
    return "\n".join(lines)


def wrapped(line: str) -> str:
    """Break a long line at 100 characters, with the rest indented.

    Parameters
    ----------
    line : str
        Any text.

    Returns
    -------
    str
        One or more lines.
    """
    return textwrap.fill(line, 100, subsequent_indent="    ")


def curves_text(curves: Curves) -> str:
    """Write the sweeps for a person to read.

    Parameters
    ----------
    curves : Curves
        The finished sweeps.

    Returns
    -------
    str
        One paragraph for each sweep.
    """
    return "\n\n".join(
        [
            _scaling_text(curves.density, "density sweep at fixed geometry", "density"),
            _scaling_text(curves.size, "size sweep at fixed density", "size"),
            _separation_text(curves.separation),
        ]
    )


def _scaling_text(curve: ScalingCurve, title: str, name: str) -> str:
    """Points, fit and regime of one scaling curve."""
    rows = [[name, "elements", "ln(l/a)", "S of all regions", ""]]
    for k, value in enumerate(curve.values):
        entropy = curve.entropy[k]
        rows.append(
            [
                f"{value:.4g}" if name == "density" else f"x {value:.3f}",
                f"{curve.elements_per_region[k]:.0f}",
                f"{curve.x[k]:.3f}",
                with_error(entropy.mean, entropy.error),
                "" if curve.used[k] else "not fitted",
            ]
        )
    heading = f"{title}: elements expected in the smallest region, S by support"
    notes = [_fit_text(curve.fit) if curve.fit else curve.note]
    if curve.reference_slope is not None:
        notes.append(
            f"reference slope {curve.reference_slope:.3f}, asymptotic: for regions small in the "
            "patch, away from its edge and from each other, and full of elements"
        )
    notes += [f"left out: {text}" for text in curve.left_out]
    table = [aligned(rows)] if len(rows) > 1 else []
    return "\n".join([heading, *table, *(wrapped(note) for note in notes if note)])


def _fit_text(fit: Fit) -> str:
    quality = "fit quality unknown"
    if math.isfinite(fit.p_value):
        quality = f"chi2/dof {fit.chi2:.2g}/{fit.dof}, p {fit.p_value:.2g}"
    return (
        f"S = b ln(l/a) + c: b = {with_error(fit.slope, fit.slope_error)}, "
        f"c = {with_error(fit.intercept, fit.intercept_error)}, {quality}, {fit.points} points"
    )


def _separation_text(curve: SeparationCurve) -> str:
    """Union entropy and mutual information of the nearest pair at each gap."""
    title = "separation sweep at fixed density and size"
    if not curve.separation.size:
        return f"{title}: {curve.note}"
    letters = ":".join(region_letter(k) for k in curve.pair)
    heads = [f"S, {RULE_WORDS[rule]}" for rule in RULES]
    heads += [f"I({letters}), {RULE_WORDS[rule]}" for rule in RULES]
    rows = [["separation", *heads, "cross block"]]
    for k, gap in enumerate(curve.separation):
        found = [curve.union[rule][k] for rule in RULES]
        found += [curve.mutual_information[rule][k] for rule in RULES]
        cells = [with_error(e.mean, e.error) for e in found]
        block = curve.cross_block[k]
        rows.append([f"{gap:.3f}", *cells, f"{block:.2f}" if math.isfinite(block) else NO_NUMBER])
    notes = [wrapped(curve.note)] if curve.note else []
    return "\n".join([title, aligned(rows), *notes])


# ---------------------------------------------------------------------------- JSON


def curves_document(curves: Curves) -> dict[str, Any]:
    """The sweeps as plain JSON values.

    Parameters
    ----------
    curves : Curves
        The finished sweeps.

    Returns
    -------
    dict
        Keys ``density``, ``size`` and ``separation``.
    """
    return {
        "density": _scaling_document(curves.density),
        "size": _scaling_document(curves.size),
        "separation": _separation_document(curves.separation),
    }


def estimate_document(estimate: Estimate) -> dict[str, float | None]:
    """An estimate as plain JSON values; null where nothing is known.

    Parameters
    ----------
    estimate : Estimate
        Mean, standard error and scatter.

    Returns
    -------
    dict
        Keys ``mean``, ``standard_error`` and ``scatter``.
    """
    return {
        "mean": _number(estimate.mean),
        "standard_error": _number(estimate.error),
        "scatter": _number(estimate.scatter),
    }


def _number(x: float) -> float | None:
    return float(x) if math.isfinite(x) else None


def _scaling_document(curve: ScalingCurve) -> dict[str, Any]:
    fit = curve.fit
    return {
        "points": [
            {
                curve.axis: float(value),
                "log_length": float(curve.x[k]),
                "elements_per_region": float(curve.elements_per_region[k]),
                "entropy": estimate_document(curve.entropy[k]),
                "fitted": bool(curve.used[k]),
            }
            for k, value in enumerate(curve.values)
        ],
        "fit": None
        if fit is None
        else {k: _number(v) if isinstance(v, float) else v for k, v in fit._asdict().items()},
        "note": curve.note,
        "reference_slope": curve.reference_slope,
        "left_out": list(curve.left_out),
    }


def _separation_document(curve: SeparationCurve) -> dict[str, Any]:
    return {
        "pair": list(curve.pair),
        "points": [
            {
                "separation": float(gap),
                "union": {rule: estimate_document(curve.union[rule][k]) for rule in RULES},
                "mutual_information": {
                    rule: estimate_document(curve.mutual_information[rule][k]) for rule in RULES
                },
                "cross_block": _number(curve.cross_block[k]),
            }
            for k, gap in enumerate(curve.separation)
        ],
        "note": curve.note,
    }
