"""The table of slopes and of what they are due to, as text and as JSON values."""

from __future__ import annotations

import math
from collections.abc import Sequence
from typing import Any

import numpy as np

from lozenge_dashboard.curves import aligned, wrapped
from lozenge_engine.agreement import plain
from lozenge_engine.due import Combination, DueRecord, DueRow, Slope
from lozenge_engine.notation import NO_NUMBER, with_error
from lozenge_engine.placement import gaps
from lozenge_engine.thresholds import ThresholdRecord

__all__ = ["due_document", "due_text", "thresholds_document", "thresholds_text"]

KINDS = ("data", "twin", "chain", "minus")
SPREAD = 5e-4
"""Errors of the chain below this are not worth a digit."""


# ------------------------------------------------------------------------- text


def due_text(record: DueRecord) -> str:
    """Write the table for a person to read.

    Parameters
    ----------
    record : DueRecord
        The table.

    Returns
    -------
    str
        Paragraphs; the last line ends with a newline.
    """
    blocks = [wrapped(f"data: {record.source}; twin: level {record.level}")]
    if not record.rows:
        blocks.append("no slope: neither density nor half_width is an axis with three sizes")
    else:
        blocks.append(aligned(_slope_rows(record.rows)))
        blocks.append("\n".join(map(wrapped, _legend(record))))
        blocks += ["\n".join(map(wrapped, _details(row))) for row in record.rows]
    if record.combinations:
        heading = "constants, only in combinations that no cutoff changes (nats)"
        blocks.append(f"{heading}\n{aligned(_combination_rows(record.combinations))}")
    if record.notes:
        blocks.append("\n".join(map(wrapped, record.notes)))
    return "\n\n".join(blocks) + "\n"


def _slope_rows(rows: Sequence[DueRow]) -> list[list[str]]:
    head = ["slope against ln(l/a)", "reference", "data", "chi2/dof", "settled", "twin", "chain"]
    head += ["data - twin", "chi2/dof", "constant", "chi2/dof"]
    table = [head]
    for row in rows:
        reference = NO_NUMBER if row.reference is None else f"{row.reference:.4f}"
        table.append(
            [
                row.label or _geometry(row),
                reference,
                _slope(row.data_slope),
                _quality(row.data_slope),
                "yes" if row.settled else "NO",
                _slope(row.twin_slope),
                _chain(row.chain_slope),
                _slope(row.minus_slope),
                _quality(row.minus_slope),
                _slope(row.constant),
                _quality(row.constant),
            ]
        )
    return table


def _slope(slope: Slope) -> str:
    return with_error(slope.value, slope.error)


def _chain(slope: Slope) -> str:
    """Four decimals: the chain's error is smaller than any digit that matters."""
    if slope.known and slope.error < SPREAD:
        return f"{slope.value:.4f}"
    return _slope(slope)


def _quality(slope: Slope) -> str:
    if not math.isfinite(slope.chi2):
        return NO_NUMBER
    return f"{slope.chi2:.3g}/{slope.dof}"


def _geometry(row: DueRow) -> str:
    count = len(row.regions)
    sizes = sorted({f"{region.half_width:g}" for region in row.regions})
    return f"{count} region{'' if count == 1 else 's'} of half-width {', '.join(sizes)}"


def _legend(record: DueRecord) -> list[str]:
    """What the columns mean."""
    notes = [
        "slopes of S of all regions (support rule) in nats, in brackets the standard error of the "
        "last digits; reference: asymptotic slope, regions small, far apart, many elements",
        "data: generalised least squares over the campaign's sprinklings; twin: the same geometry "
        "and cut without discreteness, on the same sizes; its error holds the steps in which modes "
        "enter; chain: limit of the lattice, another cutoff and other ends",
        "data - twin: a line through the differences, errors of both together; constant: their "
        "mean, worth something only where its chi2 is good",
    ]
    if any(not row.settled for row in record.rows):
        notes.append("NO: the data's own fit is not settled, see below")
    return notes


def _details(row: DueRow) -> list[str]:
    """Window, geometry, chain and verdict of one row."""
    lines = [f"{row.label or _geometry(row)}: {row.verdict}"]
    if not row.settled:
        lines.append(f"not settled: {row.why}")
    if row.reference is None:
        lines.append(f"no reference slope: {row.no_reference}")
    lines.append(_window(row))
    if row.minus_slope.known:
        lines.append(_fits(row))
    if row.chain is not None:
        lines.append(_chain_text(row))
    return lines


def _window(row: DueRow) -> str:
    """Over what the slopes are taken, and how the regions stand."""
    used = row.used if row.used.any() else np.ones_like(row.used)
    x, density = row.x[used], row.density[used]
    smallest = min(region.half_width for region in row.regions)
    between = [max(0.0, gap) for gap in gaps(row.regions)]
    several = len(set(density.tolist()))
    densities = f"{several} densities {density.min():g} to {density.max():g}"
    parts = [
        f"window: ln(l/a) {x.min():.2f} to {x.max():.2f}, "
        f"{densities if several > 1 else f'density {density[0]:g}'}, "
        f"{row.x.size - int(used.sum())} cells left out",
        f"half-width {smallest:g} of the patch's 1",
    ]
    if between:
        lengths = min(between) * math.sqrt(float(density.min()))
        parts.append(f"smallest gap {min(between):.3g} = {lengths:.2g} a at the lowest density")
    if row.regime is not None:
        low, high = row.regime.kept_ratio
        text = f"kept over nominal modes {low:.2f} to {high:.2f} (1 wanted)"
        if np.isfinite(row.twin_kept).all():
            text += f", the twin {row.twin_kept.min():.2f} to {row.twin_kept.max():.2f}"
        parts.append(text)
    classes = len(set(row.placement.tolist()))
    parts += [f"{classes} placement classes, each with its own constant"] if classes > 1 else []
    return "; ".join(parts)


def _fits(row: DueRow) -> str:
    """Whether data minus twin is a constant or has a slope."""
    line, flat = row.minus_slope, row.constant
    away = abs(line.away(0.0))
    words = "a constant" if flat.p_value > 0.05 else "no constant"
    return (
        f"data minus twin: {words} (mean {_slope(flat)}, p {flat.p_value:.2g}); as a line its "
        f"slope is {_slope(line)}, {away:.1f} errors from none (p {line.p_value:.2g})"
    )


def _chain_text(row: DueRow) -> str:
    chain = row.chain
    if chain is None:
        return "no chain"
    asked = ", ".join(f"({low:.4g}, {high:.4g}]" for low, high in chain.asked)
    taken = ", ".join(f"({low:.4g}, {high:.4g}]" for low, high in chain.fractions)
    local = ", ".join(f"{slope:.4f}" for slope in chain.slopes)
    where = f"fractions {asked}" if asked == taken else f"fractions {asked}, taken {taken}"
    return (
        f"chain: {where} of {chain.sites[0]} to {chain.sites[-1]} sites, fixed ends; local slopes "
        f"{local}"
    )


def _combination_rows(combinations: Sequence[Combination]) -> list[list[str]]:
    rows = [["", "data", "chi2/dof", "twin", "chain (fixed ends)"]]
    for one in combinations:
        quality = _quality(one.data)
        if one.data.p_value <= 0.05:
            quality += " *"
        rows.append([one.label, _slope(one.data), quality, _slope(one.twin), _slope(one.chain)])
    if any(row[2].endswith("*") for row in rows[1:]):
        rows.append(["* not constant along the ladder", "", "", "", ""])
    return rows


def thresholds_text(label: str, record: ThresholdRecord) -> str:
    """Write derived thresholds for a person to read.

    Parameters
    ----------
    label : str
        Of the geometry.
    record : ThresholdRecord
        Its thresholds.

    Returns
    -------
    str
        A heading and a table, without a newline at the end.
    """
    rows = [["operator", "elements", "departs at rank", "eigenvalue", "rules would cut at"]]
    for one in record.operators:
        rules = ", ".join(f"{k.replace('_', ' ')} {v:.3f}" for k, v in one.thresholds.items())
        found = one.departure
        rows.append(
            [
                one.name,
                f"{one.elements:.0f}",
                with_error(found.rank, found.rank_error),
                with_error(found.threshold, found.threshold_error),
                rules,
            ]
        )
    heading = (
        f"thresholds, {label}: where the mean of {record.done} sprinkled spectra leaves the "
        f"continuum's by {100 * record.delta:g} % ({record.reference})"
    )
    return "\n".join([wrapped(heading), aligned(rows), *map(wrapped, record.notes)])


# ------------------------------------------------------------------------- JSON


def due_document(record: DueRecord) -> dict[str, Any]:
    """The table as plain JSON values; null where nothing is known.

    Parameters
    ----------
    record : DueRecord
        The table.

    Returns
    -------
    dict
        Keys ``source``, ``level``, ``rows``, ``combinations`` and ``notes``.
    """
    return {
        "source": record.source,
        "level": record.level,
        "rows": [_row_document(row) for row in record.rows],
        "combinations": [
            {
                "label": one.label,
                "data": _slope_document(one.data),
                "twin": _slope_document(one.twin),
                "chain": _slope_document(one.chain),
            }
            for one in record.combinations
        ],
        "notes": list(record.notes),
    }


def _row_document(row: DueRow) -> dict[str, Any]:
    points = [
        {
            "density": float(row.density[k]),
            "log_length": float(row.x[k]),
            "placement": int(row.placement[k]) + 1,
            "fitted": bool(row.used[k]),
            **{
                name: {
                    "value": plain(float(getattr(row, name)[k])),
                    "error": plain(float(getattr(row, f"{name}_error")[k])),
                }
                for name in ("data", "twin", "minus")
            },
        }
        for k in range(row.x.size)
    ]
    chain = row.chain
    return {
        "label": row.label,
        "axis": row.axis,
        "regions": [
            {"t0": r.t0, "x0": r.x0, "half_width": r.half_width, "boost": r.boost}
            for r in row.regions
        ],
        "mass": row.mass,
        "order": row.order,
        "reference_slope": row.reference,
        "no_reference": row.no_reference,
        "points": points,
        "slopes": {name: _slope_document(getattr(row, f"{name}_slope")) for name in KINDS},
        "constant": _slope_document(row.constant),
        "chain": None
        if chain is None
        else {
            "asked": [list(pair) for pair in chain.asked],
            "fractions": [list(pair) for pair in chain.fractions],
            "sites": [int(n) for n in chain.sites],
            "entropy": [float(s) for s in chain.entropy],
            "local_slopes": [float(s) for s in chain.slopes],
        },
        "settled": row.settled,
        "why": row.why,
        "verdict": row.verdict,
    }


def _slope_document(slope: Slope) -> dict[str, Any]:
    return {
        "value": plain(slope.value),
        "error": plain(slope.error),
        "chi2": plain(slope.chi2),
        "dof": slope.dof,
        "p_value": plain(slope.p_value),
        "note": slope.note,
    }


def thresholds_document(label: str, record: ThresholdRecord) -> dict[str, Any]:
    """Derived thresholds as plain JSON values.

    Parameters
    ----------
    label : str
        Of the geometry.
    record : ThresholdRecord
        Its thresholds.

    Returns
    -------
    dict
        Keys ``label``, ``delta``, ``sprinklings``, ``reference``, ``operators`` and ``notes``.
    """
    return {
        "label": label,
        "delta": record.delta,
        "sprinklings": record.done,
        "reference": record.reference,
        "operators": [
            {
                "name": one.name,
                "elements": one.elements,
                "departure": {k: plain(v) for k, v in one.departure._asdict().items()},
                "thresholds": {k: plain(v) for k, v in one.thresholds.items()},
                "count_at": plain(one.count_at),
            }
            for one in record.operators
        ],
        "notes": list(record.notes),
    }
