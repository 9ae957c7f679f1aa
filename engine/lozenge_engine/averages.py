"""Means over sprinklings at the present geometry."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from lozenge_engine.config import Setup
from lozenge_engine.draws import Plan, average_draws
from lozenge_engine.entropies import UNION_RULES
from lozenge_engine.kernels.scaling import Estimate, estimate
from lozenge_engine.samples import Reading

__all__ = ["Average", "PairEstimate", "Readings", "average", "column_of", "count_done", "rows_of"]

FloatArray = NDArray[np.float64]
Readings = Mapping[str, tuple[Reading, ...]]
"""Readings of draws by their key: missing ones are not done yet, empty ones have failed."""


class PairEstimate(NamedTuple):
    """Mutual information of two regions under both union rules, and the mean cross block.

    Attributes
    ----------
    a, b : int
        Indices of the regions, a < b.
    support, direct_sum : Estimate
        S_A + S_B - S_AB in nats, per union rule.
    cross_block : float
        Mean of `Pair.cross_block`, dimensionless; NaN without readings.
    """

    a: int
    b: int
    support: Estimate
    direct_sum: Estimate
    cross_block: float


@dataclass(frozen=True, slots=True, kw_only=True)
class Average:
    """Means over sprinklings at the present geometry.

    Parameters
    ----------
    count, planned : int
        Sprinklings read so far, and asked for.
    elements, kept : tuple of Estimate
        Elements and kept positive modes of each region.
    regions : tuple of Estimate
        Entropy of each region, in nats.
    unions : mapping of str to Estimate
        Entropy of all regions together, in nats, per union rule; empty for one region.
    pairs : tuple of PairEstimate
        Every pair a < b, in lexicographic order.
    total_correlation : mapping of str to Estimate
        Sum of the regions' entropies minus the union's, per union rule; empty for one region.
    trusted : bool
        Whether there is a reading and every one is trusted.
    """

    count: int
    planned: int
    elements: tuple[Estimate, ...]
    kept: tuple[Estimate, ...]
    regions: tuple[Estimate, ...]
    unions: Mapping[str, Estimate]
    pairs: tuple[PairEstimate, ...]
    total_correlation: Mapping[str, Estimate]
    trusted: bool


def rows_of(readings: Readings, plan: Plan) -> list[tuple[Reading, ...]]:
    """Readings of the draws that are done and gave numbers.

    Parameters
    ----------
    readings : mapping of str to tuple of Reading
        By the key of their draw; missing or empty ones are passed over.
    plan : Plan
        The draws.

    Returns
    -------
    list of tuple of Reading
        One row for each such draw, in the plan's order; one reading for each layout.
    """
    return [readings[d.key] for d in plan.draws if readings.get(d.key)]


def count_done(readings: Readings, plan: Plan) -> int:
    """Count the draws that are done, failed ones included.

    Parameters
    ----------
    readings : mapping of str to tuple of Reading
        By the key of their draw; empty ones have failed.
    plan : Plan
        The draws.

    Returns
    -------
    int
        From 0 to the number of draws.
    """
    return sum(d.key in readings for d in plan.draws)


def column_of(rows: list[tuple[Reading, ...]], field: str, index: int | None) -> FloatArray:
    """Mean over placements of one number, for each sprinkling.

    Parameters
    ----------
    rows : list of tuple of Reading
        R sprinklings with at least one placement each.
    field : str
        A field of `Reading`.
    index : int or None
        Place in the field's array; None for a field that is a single number.

    Returns
    -------
    ndarray, shape (R,), float64
        NaN where one placement has no number.
    """
    return np.array(
        [
            np.mean([getattr(r, field) if index is None else getattr(r, field)[index] for r in row])
            for row in rows
        ]
    )


def average(setup: Setup, readings: Readings) -> Average:
    """Average the readings of `average_draws` that are there.

    Parameters
    ----------
    setup : Setup
        The setup that was drawn.
    readings : mapping of str to tuple of Reading
        By the key of their draw; missing ones are not done yet, empty ones have failed.

    Returns
    -------
    Average
        Errors are NaN with fewer than two sprinklings.
    """
    plan = average_draws(setup)
    rows = rows_of(readings, plan)
    count = len(setup.regions())

    def column(field: str, index: int | None = None) -> Estimate:
        return estimate(column_of(rows, field, index))

    pairs = [(a, b) for a in range(count) for b in range(a + 1, count)]
    return Average(
        count=len(rows),
        planned=len(plan.draws),
        elements=tuple(column("elements", k) for k in range(count)),
        kept=tuple(column("kept", k) for k in range(count)),
        regions=tuple(column("entropy", k) for k in range(count)),
        unions={rule: column(f"union_{rule}") for rule in UNION_RULES} if count > 1 else {},
        pairs=tuple(
            PairEstimate(
                a,
                b,
                column("pair_support", i),
                column("pair_direct_sum", i),
                column("cross_block", i).mean,
            )
            for i, (a, b) in enumerate(pairs)
        ),
        total_correlation={
            rule: estimate(
                np.array(
                    [
                        np.mean([r.entropy.sum() - getattr(r, f"union_{rule}") for r in row])
                        for row in rows
                    ]
                )
            )
            for rule in UNION_RULES
        }
        if count > 1
        else {},
        trusted=bool(rows) and all(reading.trusted for row in rows for reading in row),
    )
