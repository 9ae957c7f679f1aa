"""Curves of mutual information against the cross ratio, and what each of them is of."""

from __future__ import annotations

import math
from typing import Literal, NamedTuple

import numpy as np
from numpy.typing import NDArray

from lozenge_engine.geometry import Region
from lozenge_engine.kernels.chain import chain_entropies, refined_limit
from lozenge_engine.kernels.currents import cross_ratio
from lozenge_engine.routes import fractions

__all__ = [
    "ALGEBRAS",
    "CurveKind",
    "MutualCurve",
    "MutualRecord",
    "chain_mutual",
    "cross_ratios",
    "touching_growth",
]

FloatArray = NDArray[np.float64]
CurveKind = Literal["data", "twin", "chain", "currents", "far"]

CHAIN_SITES = 96
"""Sites of the coarsest of four chains, each twice as long as the one before."""

ALGEBRAS: dict[CurveKind, str] = {
    "data": "field on the elements, modes cut in both stages",
    "twin": "the same in the continuum: field, modes cut in both stages",
    "chain": "position and momentum of a chain with fixed ends",
    "currents": "currents of both chiralities on a lattice: a smaller algebra, it lacks the "
    "difference of the field's averages",
    "far": "currents far apart, 2 eta^2/60 (from memory)",
}
"""Which algebra each curve speaks of."""


class MutualCurve(NamedTuple):
    """Mutual information by one route.

    Attributes
    ----------
    kind : {"data", "twin", "chain", "currents", "far"}
        The route.
    rule : {"support", "direct_sum", ""}
        The union rule, where there are two.
    algebra : str
        Which algebra it belongs to.
    eta : ndarray, shape (M,), float64
        Cross ratios as this route has them, ascending.
    value, error : ndarray, shape (M,), float64
        In nats; NaN where unknown.  The error is a standard error for data, like one for the
        twin, a bound by experience for lattices.
    """

    kind: CurveKind
    rule: str
    algebra: str
    eta: FloatArray
    value: FloatArray
    error: FloatArray


class MutualRecord(NamedTuple):
    """Mutual information of the nearest pair at fixed size.

    Attributes
    ----------
    lengths : (float, float)
        Lengths l = 2 half_width of the two regions, in patch half-widths.
    separation, eta : ndarray, shape (M,), float64
        Gaps at which the regions were read, descending, and their cross ratios, ascending; the
        last may be 1, where the regions touch.
    present : float
        Cross ratio of the setup's own layout.
    density : float
        Elements per unit area.
    curves : tuple of MutualCurve
        What is known so far.
    done, planned : int
        Sprinklings read, and all.
    cross_block : ndarray, shape (M,), float64
        Mean norm of the commutator's block between the two kept spaces; NaN where unknown.
    level : str
        Of the twin.
    notes : tuple of str
        What has to be said beside it.
    seconds : float
        Wall time so far.
    """

    lengths: tuple[float, float]
    separation: FloatArray
    eta: FloatArray
    present: float
    density: float
    curves: tuple[MutualCurve, ...]
    done: int
    planned: int
    cross_block: FloatArray
    level: str
    notes: tuple[str, ...]
    seconds: float

    def curve(self, kind: CurveKind, rule: str = "") -> MutualCurve | None:
        """One of the curves.

        Parameters
        ----------
        kind, rule : str, str
            As in `MutualCurve`.

        Returns
        -------
        MutualCurve or None
            None while it is not known.
        """
        found = (c for c in self.curves if c.kind == kind and c.rule == rule)
        return next(found, None)


def cross_ratios(a: Region, b: Region) -> tuple[float, float]:
    """Cross ratios of two spacelike regions in the two light-cone directions.

    Parameters
    ----------
    a, b : Region
        In any order.

    Returns
    -------
    (float, float)
        eta of the extents in u and in v; equal for unboosted regions at one time.
    """
    left, right = sorted((a, b), key=lambda r: r.x0)
    p, q = left.extent, right.extent
    return (
        cross_ratio(p.u_high - p.u_low, q.u_high - q.u_low, max(0.0, q.u_low - p.u_high)),
        cross_ratio(p.v_high - p.v_low, q.v_high - q.v_low, max(0.0, p.v_low - q.v_high)),
    )


def touching_growth(order: float = 1.0) -> float:
    """Growth of I with ln(l/a) where regions touch, (c/6)(1 + 1/q): the two ends that vanish.

    Parameters
    ----------
    order : float
        Renyi order q.

    Returns
    -------
    float
        1/3 for q = 1: S_A + S_B has four ends, S_AB two (arXiv:0905.4013).
    """
    return (1.0 + 1.0 / order) / 6.0


def chain_mutual(
    a: Region, b: Region, *, mass: float = 0.0, order: float = 1.0
) -> tuple[float, float, float]:
    """Mutual information of a chain's two blocks at the regions' fractions.

    Parameters
    ----------
    a, b : Region
        Spacelike; only their fractions along x count, rounded to a 96th.
    mass, order : float, float
        In inverse patch half-widths; Renyi order.

    Returns
    -------
    (float, float, float)
        Cross ratio of the blocks as taken; I in nats on a fine lattice, and how far that may be
        off; NaN where the blocks touch, since it then has no limit.

    Notes
    -----
    Cost: about 0.3 s for two blocks that fill half of the chain.
    """
    blocks = [
        (round(low * CHAIN_SITES) / CHAIN_SITES, round(high * CHAIN_SITES) / CHAIN_SITES)
        for low, high in fractions((a, b))
    ]
    first, second = (high - low for low, high in blocks)
    gap = blocks[1][0] - blocks[0][1]
    if min(first, second) <= 0 or gap <= 1e-9:
        return math.nan, math.nan, math.nan
    found = []
    for n in (CHAIN_SITES * 2**j for j in range(4)):
        s = chain_entropies(
            blocks, ((0,), (1,), (0, 1)), sites=n, mass_over_sites=2 * mass / (n + 1), order=order
        )
        found.append(s[0] + s[1] - s[2])
    limit = refined_limit(np.array(found), order=order)
    return cross_ratio(first, second, gap), limit.value, limit.error
