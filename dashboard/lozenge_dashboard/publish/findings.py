"""The numbers of the evidence page as tables for a paper."""

from __future__ import annotations

import math
from collections.abc import Callable
from typing import TYPE_CHECKING, Any

from lozenge_dashboard.publish.tables import Cell, Estimated, Head, Table
from lozenge_dashboard.records import RULE_NAMES, EvidenceScene
from lozenge_engine.geometry import region_letter

if TYPE_CHECKING:
    from lozenge_engine.crossratio import MutualRecord
    from lozenge_engine.cutrecord import CutRecord
    from lozenge_engine.due import DueRecord
    from lozenge_engine.statecheck import StateRecord
    from lozenge_engine.thresholds import ThresholdRecord

__all__ = ["evidence_tables"]

NATS = "nats"


def evidence_tables(scene: EvidenceScene) -> list[Table]:
    """Tables of the evidence page's records.

    Parameters
    ----------
    scene : EvidenceScene
        With None where nothing was computed.

    Returns
    -------
    list of Table
        One for each record that has numbers.
    """
    makers: tuple[tuple[Any, Callable[[Any], Table]], ...] = (
        (scene.cuts, _cuts),
        (scene.thresholds, _thresholds),
        (scene.state, _state),
        (scene.mutual, _mutual),
        (scene.due, _due),
    )
    tables = [make(record) for record, make in makers if record is not None]
    return [table for table in tables if table.rows]


def _cuts(record: CutRecord) -> Table:
    """Means at every multiple of the threshold, by rule."""
    regions = record.averages[0].mean.entropy.shape[1] if record.averages else 0
    heads = [
        Head("stage"),
        Head("rule"),
        Head("space"),
        Head("multiple of the threshold", digits=".3f"),
    ]
    heads.append(Head("modes kept on the patch", estimated=True))
    for k in range(regions):
        letter = region_letter(k)
        heads += [
            Head(f"modes kept on {letter}", estimated=True),
            Head(f"S({letter})", NATS, estimated=True),
        ]
    several = regions > 1
    if several:
        heads += [Head("S of the union by support", NATS, estimated=True)]
        heads += [Head("I of the nearest pair by support", NATS, estimated=True)]
    rows: list[tuple[Cell, ...]] = []
    for curve in record.averages:
        mean, error = curve.mean, curve.error
        named = mean.stage, mean.rule.replace("_", " "), "uncut" if mean.uncut_space else "cut"
        for i, alpha in enumerate(record.front.alphas):
            row: list[Cell] = [*named, float(alpha)]
            row.append(Estimated(float(mean.patch_kept[i]), float(error.patch_kept[i])))
            for k in range(regions):
                row.append(Estimated(float(mean.kept[i, k]), float(error.kept[i, k])))
                row.append(Estimated(float(mean.entropy[i, k]), float(error.entropy[i, k])))
            if several:
                for name in ("union_support", "mutual_support"):
                    pair = (float(getattr(part, name)[i]) for part in (mean, error))
                    row.append(Estimated(*pair))
            rows.append(tuple(row))
    caption = f"Cut study, mean of {record.done} of {record.planned} sprinklings."
    return Table("cutstudy", caption, tuple(heads), tuple(rows))


def _thresholds(record: ThresholdRecord) -> Table:
    heads = (
        Head("operator"),
        Head("expected elements", digits=".1f"),
        Head("derived threshold", "causal-set units", estimated=True),
        Head("rank", estimated=True),
        Head("√n/(4π)", "causal-set units", digits=".3f"),
        Head("with the union's count", "causal-set units", digits=".3f"),
        Head("with equal shares", "causal-set units", digits=".3f"),
    )
    rules = ("root_count", "union_count", "equal_share")
    rows: list[tuple[Cell, ...]] = []
    for each in record.operators:
        parting = each.departure
        row: list[Cell] = [each.name, float(each.elements)]
        row.append(Estimated(parting.threshold, parting.threshold_error))
        row.append(Estimated(parting.rank, parting.rank_error))
        rows.append((*row, *(float(each.thresholds.get(rule, math.nan)) for rule in rules)))
    caption = (
        f"Where the mean spectrum of {record.done} sprinklings leaves the continuum's by more "
        f"than {100 * record.delta:g} %; reference: {record.reference}."
    )
    return Table("thresholds", caption, heads, tuple(rows))


def _state(record: StateRecord) -> Table:
    heads = (Head("quantity"), Head("value", estimated=True))
    count = len(record.fits)
    rows = (
        ("slope of Re W against ln|τ|", Estimated(record.slope, record.slope_error)),
        ("constant of that line", Estimated(record.constant, record.constant_error)),
        (
            "constant beside the law's slope −1/(2π)",
            Estimated(record.law_constant, record.law_constant_error),
        ),
        ("relative norm that the cut takes from iΔ", Estimated(record.lost, record.lost_error)),
    )
    errors = "means with standard errors" if count > 1 else "errors leave out what all pairs share"
    caption = (
        f"State near the centre, |τ| from {record.shortest:.2g} to {record.longest:.2g} patch "
        f"half-widths, {count} sprinkling{'s' if count > 1 else ''}, {errors}."
    )
    return Table("state", caption, heads, rows)


def _mutual(record: MutualRecord) -> Table:
    heads = (
        Head("route"),
        Head("union rule"),
        Head("cross ratio", digits=".4f"),
        Head("I", NATS, estimated=True),
        Head("algebra"),
    )
    rows = tuple(
        (
            curve.kind,
            RULE_NAMES.get(curve.rule, "–"),
            float(eta),
            Estimated(float(value), float(error)),
            curve.algebra,
        )
        for curve in record.curves
        for eta, value, error in zip(curve.eta, curve.value, curve.error, strict=True)
    )
    caption = (
        "Mutual information against the cross ratio, each route for its own algebra: they need "
        "not agree."
    )
    return Table("mutual", caption, heads, rows)


def _due(record: DueRecord) -> Table:
    heads = (
        Head("geometry"),
        Head("slope, data", NATS, estimated=True),
        Head("slope, twin", NATS, estimated=True),
        Head("slope, chain", NATS, estimated=True),
        Head("slope, data minus twin", NATS, estimated=True),
        Head("data minus twin, no slope", NATS, estimated=True),
        Head("reference slope", digits=".4f"),
        Head("settled"),
        Head("verdict"),
    )
    names = ("data_slope", "twin_slope", "chain_slope", "minus_slope", "constant")
    rows = tuple(
        (
            row.label.replace("_", " ") or "–",
            *(Estimated(getattr(row, name).value, getattr(row, name).error) for name in names),
            math.nan if row.reference is None else float(row.reference),
            "yes" if row.settled else "no",
            row.verdict,
        )
        for row in record.rows
    )
    caption = f"What the slopes are due to; data: {record.source}; twin at level {record.level}."
    return Table("due", caption, heads, rows)
