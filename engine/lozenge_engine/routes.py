"""The harmonic chain beside the bench's regions: a route without sprinkling, cut or causal set.

Regions become blocks of a chain with fixed ends, at their fractions along x across the patch, and
the lattice is refined at fixed geometry.  The field's infrared sides differ (fixed ends here, the
diamond's own state there), so that slopes and cutoff-free combinations may be set side by side,
values of S only up to a constant.
"""

from __future__ import annotations

import itertools
import math
import time
from collections.abc import Callable, Sequence
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from lozenge_engine.errors import refuse
from lozenge_engine.geometry import Region, check_regions
from lozenge_engine.kernels.chain import MAX_SITES, Limit, chain_entropies, refined_limit
from lozenge_engine.kernels.laws import calabrese_cardy_slope

__all__ = [
    "PATCH_LENGTH",
    "ChainRoute",
    "chain_route",
    "fractions",
    "on_sites",
    "unseen",
]

FloatArray = NDArray[np.float64]
Fractions = tuple[tuple[float, float], ...]
Report = Callable[[str, float], None]

PATCH_LENGTH = 2.0
"""Length of the chain, the patch's diameter on t = 0, in half-widths."""
COARSEST = 40
"""Fewest sites of the coarsest chain."""
LEAST_BLOCK = 4
"""Fewest sites of a block or of a gap on the coarsest chain."""
DOUBLINGS = 5
FEWEST_DOUBLINGS = 4
"""Slopes need four values to be extrapolated with an error: five lattices."""
WANTED_SITES = 1600
"""Sites in the blocks of the finest chain at which doubling stops early."""


class ChainRoute(NamedTuple):
    """Entropy of the chain's blocks while the lattice is refined at fixed geometry.

    Attributes
    ----------
    regions : tuple of Region
        The bench's regions, from left to right.
    asked, fractions : tuple of (float, float)
        Ends of each region as fractions along x across the patch; the same rounded to sites of
        the coarsest chain, which all lattices share.
    mass, order : float, float
        In inverse patch half-widths; Renyi order.
    sites : ndarray, shape (M,), int64
        Of the whole chain, doubled each time.
    x : ndarray, shape (M,), float64
        Mean over the blocks of ln(sites in the block), the chain's ln(l/a).
    entropy : ndarray, shape (M,), float64
        Of all blocks together, in nats.
    block_entropy : ndarray, shape (M, K), float64
        Of each block.
    slopes : ndarray, shape (M - 1,), float64
        Local slopes [S(2 N) - S(N)]/ln 2.
    slope : Limit
        Their limit; NaN with a mass as large as the lattice resolves.
    constant : Limit
        Limit of S - reference ln N: only combinations of it in which the references cancel mean
        anything beside another cutoff.
    mutual : Limit
        Mutual information of the nearest pair, S_A + S_B - S_AB, which tends to a number while
        the lattice is refined; NaN for one region, or where the blocks touch (it then grows
        without end).
    excess : Limit
        S of all blocks minus the sum of their own, minus the total correlation, which no cutoff
        changes; NaN as `mutual`.
    reference : float
        Calabrese-Cardy slope of the blocks' ends that are neither the chain's nor shared.
    notes : tuple of str
        What of the geometry the chain does not see.
    seconds : float
        Wall time.
    """

    regions: tuple[Region, ...]
    asked: Fractions
    fractions: Fractions
    mass: float
    order: float
    sites: NDArray[np.int64]
    x: FloatArray
    entropy: FloatArray
    block_entropy: FloatArray
    slopes: FloatArray
    slope: Limit
    constant: Limit
    mutual: Limit
    excess: Limit
    reference: float
    notes: tuple[str, ...]
    seconds: float

    @property
    def off(self) -> float:
        """Largest distance between a fraction asked for and the one taken."""
        pairs = zip(self.asked, self.fractions, strict=True)
        return max(max(abs(a - c), abs(b - d)) for (a, b), (c, d) in pairs)


def fractions(regions: Sequence[Region]) -> Fractions:
    """Ends of regions along x as fractions of the patch, from left to right.

    Parameters
    ----------
    regions : sequence of Region
        Inside the patch and pairwise spacelike.

    Returns
    -------
    tuple of (float, float)
        ((x0 - h + 1)/2, (x0 + h + 1)/2) of each; times and boosts do not enter.
    """
    row = sorted(regions, key=lambda r: r.x0)
    return tuple(
        (
            max(0.0, (r.x0 - r.half_width + 1.0) / PATCH_LENGTH),
            min(1.0, (r.x0 + r.half_width + 1.0) / PATCH_LENGTH),
        )
        for r in row
    )


def unseen(regions: Sequence[Region]) -> tuple[str, ...]:
    """What of the regions a chain does not see.

    Parameters
    ----------
    regions : sequence of Region
        Any.

    Returns
    -------
    tuple of str
        In words; empty for unboosted regions on t = 0.
    """
    notes = []
    if any(r.t0 for r in regions):
        notes.append("regions off t = 0: only their fraction along x is used")
    if any(r.boost for r in regions):
        notes.append("boosted regions: their own length about x0 is used, not the boost")
    return tuple(notes)


def _coarsest(asked: Fractions) -> tuple[int, Fractions]:
    """Sites at which all ends lie nearest to a whole number, and the fractions they make.

    Every block and every gap that is not nil keeps `LEAST_BLOCK` sites; touching blocks and
    blocks at an end of the chain stay so.
    """
    ends = [end for block in asked for end in block]
    joined = [0.0, *ends, 1.0]
    widths = [b - a for a, b in itertools.pairwise(joined) if b - a > 1e-9]
    least = max(COARSEST, math.ceil(LEAST_BLOCK / min(widths)))
    trial = np.arange(least, 2 * least + 1)
    places = np.outer(trial, ends)
    # Of equally good lattices the smallest; the round-off of the fractions themselves is no worse.
    off = np.round(np.abs(places - np.round(places)).max(axis=1) / trial, 9)
    sites = int(trial[int(np.argmin(off))])
    whole = np.round(sites * np.array(ends)) / sites
    pairs = whole.reshape(-1, 2)
    return sites, tuple((float(a), float(b)) for a, b in pairs)


def _doublings(sites: int, taken: Fractions) -> int:
    """How often a chain is refined: less often where its blocks hold many sites."""
    share = sum(b - a for a, b in taken) * sites
    if share * 2**FEWEST_DOUBLINGS > MAX_SITES:
        raise refuse(
            "regions",
            given=f"{share * 2**FEWEST_DOUBLINGS:.0f} sites in the chain's blocks",
            allowed=f"at most {MAX_SITES}: the smallest region or gap asks for "
            f"{sites * 2**FEWEST_DOUBLINGS} sites in the whole chain",
            do="enlarge the smallest region or gap, or shrink the others",
        )
    early = share * 2**DOUBLINGS > WANTED_SITES
    return FEWEST_DOUBLINGS if early else DOUBLINGS


def _no_report(_stage: str, _fraction: float) -> None:
    """Nobody wants to know."""


def chain_route(
    regions: Sequence[Region],
    *,
    mass: float = 0.0,
    order: float = 1.0,
    first: int | None = None,
    doublings: int | None = None,
    report: Report | None = None,
) -> ChainRoute:
    """Local slopes and mutual information of a chain with blocks where the regions are.

    Parameters
    ----------
    regions : sequence of Region
        One to eight, inside the patch and pairwise spacelike.
    mass : float
        In inverse patch half-widths, >= 0.
    order : float
        Renyi order q, 0.5 to 50; 1 the von Neumann entropy.
    first : int or None
        Sites of the coarsest chain; None for the number between 40 and 80 (more for small
        regions) at which the regions' ends lie nearest to whole sites.
    doublings : int or None
        How often the lattice is refined, at least 4; None for 5, or 4 where blocks are large.
    report : callable or None
        Called with a stage and a fraction before each lattice; may raise `Cancelled`.

    Returns
    -------
    ChainRoute
        Of 5 or 6 lattices.

    Raises
    ------
    InputError
        If the regions do not fit, or are so unequal that the chain would be too long.
    Cancelled
        If `report` raises it.

    Notes
    -----
    Source: arXiv:0905.2562; the limit of the slopes arXiv:0905.4013.  Cost: about 8 n**3 flops for
    the n sites in the blocks of the finest chain (0.1 to 3 s).
    """
    begun = time.perf_counter()
    row = tuple(sorted(regions, key=lambda r: r.x0))
    check_regions(row)
    asked = fractions(row)
    sites, taken = _coarsest(asked) if first is None else on_sites(asked, first)
    steps = _doublings(sites, taken) if doublings is None else doublings
    counts = np.array([sites * 2**j for j in range(steps + 1)], dtype=np.int64)
    subsets = _subsets(taken)
    found = []
    for j, n in enumerate(counts):
        (report or _no_report)("chain", j / counts.size)
        scaled = PATCH_LENGTH * mass / (int(n) + 1)
        found.append(
            chain_entropies(taken, subsets, sites=int(n), mass_over_sites=scaled, order=order)
        )
    refined = _Refined(asked, taken, counts, np.array(found))
    return _route(row, refined, mass=mass, order=order, begun=begun)


def on_sites(asked: Fractions, sites: int) -> tuple[int, Fractions]:
    """Round fractions to the sites of a chain of given length.

    Parameters
    ----------
    asked : tuple of (float, float)
        From `fractions`.
    sites : int
        Of the whole chain.

    Returns
    -------
    int
        The sites.
    tuple of (float, float)
        Fractions that end between two sites.

    Raises
    ------
    InputError
        If a region has no site.
    """
    whole = tuple((round(a * sites) / sites, round(b * sites) / sites) for a, b in asked)
    if any(b <= a for a, b in whole):
        raise refuse(
            "sites",
            given=f"{sites}, where a region has none",
            allowed="at least one site for each region",
            do="start from more sites",
        )
    return sites, whole


def _subsets(taken: Fractions) -> list[tuple[int, ...]]:
    """All blocks together, each block, and the nearest pair if there are more than two."""
    count = len(taken)
    subsets = [tuple(range(count)), *((k,) for k in range(count))]
    if count > 2:
        near = _nearest(taken)
        subsets.append((near, near + 1))
    return subsets


def _nearest(taken: Fractions) -> int:
    """The left one of the two neighbours with the smallest gap."""
    gaps = [b[0] - a[1] for a, b in itertools.pairwise(taken)]
    return min(range(len(gaps)), key=lambda k: round(gaps[k], 9))


class _Refined(NamedTuple):
    """What the lattices gave: entropies of shape (M, subsets)."""

    asked: Fractions
    taken: Fractions
    counts: NDArray[np.int64]
    entropies: FloatArray


def _route(
    row: tuple[Region, ...], refined: _Refined, *, mass: float, order: float, begun: float
) -> ChainRoute:
    asked, taken, counts, found = refined
    count = len(row)
    entropy, single = found[:, 0], found[:, 1 : 1 + count]
    nothing = Limit(math.nan, math.nan)
    mutual = excess = nothing
    gaps = [b[0] - a[1] for a, b in itertools.pairwise(taken)]
    if count > 1 and min(gaps) > 0:
        near = _nearest(taken)
        pair = single[:, near] + single[:, near + 1] - found[:, -1 if count > 2 else 0]
        mutual = refined_limit(pair, order=order)
        excess = refined_limit(entropy - single.sum(axis=1), order=order)
    slopes = np.diff(entropy) / math.log(2.0)
    ends = [end for block in taken for end in block]
    inside = [end for end in ends if ends.count(end) == 1 and 0.0 < end < 1.0]
    reference = calabrese_cardy_slope(len(inside), order=order)
    widths = np.array([b - a for a, b in taken])
    return ChainRoute(
        row,
        asked,
        taken,
        mass,
        order,
        counts,
        np.log(np.outer(counts, widths)).mean(axis=1),
        entropy,
        single,
        slopes,
        refined_limit(slopes, order=order),
        refined_limit(entropy - reference * np.log(counts), order=order),
        mutual,
        excess,
        reference,
        unseen(row),
        time.perf_counter() - begun,
    )
