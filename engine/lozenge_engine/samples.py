"""One sprinkling, several placements: the unit of averaging, sweeps and background work."""

from __future__ import annotations

import hashlib
import json
from collections.abc import Callable
from dataclasses import asdict, dataclass, replace
from functools import cached_property
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from lozenge_engine.config import Config
from lozenge_engine.geometry import Region
from lozenge_engine.pipeline import compute
from lozenge_engine.pointfile import PointFile
from lozenge_engine.result import Result
from lozenge_engine.stages import Stages

__all__ = ["Draw", "Reading", "reading_of", "take"]

FloatArray = NDArray[np.float64]


@dataclass(frozen=True, kw_only=True)
class Draw:
    """A sprinkling and the layouts of regions to read from its patch modes.

    Parameters
    ----------
    config : Config
        The sprinkling and the rules; each layout in turn replaces its regions.
    layouts : tuple of tuple of Region
        One or more sets of regions.
    """

    config: Config
    layouts: tuple[tuple[Region, ...], ...]

    @cached_property
    def key(self) -> str:
        """SHA-256, in hexadecimal, of everything that the readings depend on."""
        rest = json.dumps(
            [[asdict(region) for region in layout] for layout in self.layouts],
            sort_keys=True,
            separators=(",", ":"),
        )
        return hashlib.sha256((self.config.digest + rest).encode()).hexdigest()


class Reading(NamedTuple):
    """The numbers of one layout on one sprinkling; entropies in nats, NaN where none is given.

    Attributes
    ----------
    elements : ndarray, shape (K,), float64
        Elements of each region as the rules count them, `RegionResult.counted`.
    kept : ndarray, shape (K,), int64
        Kept positive modes of each region.
    entropy : ndarray, shape (K,), float64
        Of each region.
    union_support, union_direct_sum : float
        Entropy of all regions together; of the region itself for K = 1.
    pair_support, pair_direct_sum, cross_block : ndarray, shape (K (K - 1)/2,), float64
        Mutual information of each pair a < b in lexicographic order, and the norm of its cross
        block.
    trusted : bool
        Whether the certificate holds and no number carries a mark.
    """

    elements: FloatArray
    kept: NDArray[np.int64]
    entropy: FloatArray
    union_support: float
    union_direct_sum: float
    pair_support: FloatArray
    pair_direct_sum: FloatArray
    cross_block: FloatArray
    trusted: bool


def reading_of(result: Result) -> Reading:
    """The numbers of a result that averages are made of.

    Parameters
    ----------
    result : Result
        K regions on one sprinkling.

    Returns
    -------
    Reading
        Of its regions, pairs and union.
    """
    first = result.regions[0].entropy
    unions = result.unions
    return Reading(
        elements=np.array([r.counted for r in result.regions]),
        kept=np.array([r.kept_modes for r in result.regions], dtype=np.int64),
        entropy=np.array([r.entropy for r in result.regions]),
        union_support=unions["support"].entropy if unions else first,
        union_direct_sum=unions["direct_sum"].entropy if unions else first,
        pair_support=np.array([p.support for p in result.pairs]),
        pair_direct_sum=np.array([p.direct_sum for p in result.pairs]),
        cross_block=np.array([p.cross_block for p in result.pairs]),
        trusted=result.trusted,
    )


def take(
    draw: Draw,
    *,
    points: PointFile | None = None,
    stages: Stages | None = None,
    report: Callable[[str, float], None] | None = None,
) -> tuple[Reading, ...]:
    """Compute a draw.

    Parameters
    ----------
    draw : Draw
        What to compute.
    points : PointFile or None
        The imported points, when the configuration asks for them.
    stages : Stages or None
        Cache; the layouts share the patch's modes in any case.
    report : callable or None
        As for `compute`; may raise `Cancelled`.

    Returns
    -------
    tuple of Reading
        One for each layout.

    Raises
    ------
    InputError
        If a layout cannot be computed on this sprinkling.
    Cancelled
        If `report` raises it.

    Notes
    -----
    Cost: the patch's modes once, the second stage of `compute` for each layout.
    """
    stages = stages or Stages()
    return tuple(
        reading_of(
            compute(
                replace(draw.config, regions=layout), points=points, stages=stages, report=report
            )
        )
        for layout in draw.layouts
    )
